"""Figures on disk: reproducible vector files with small pictures inside, lossy thumbnails, atomic replacement."""

from __future__ import annotations

import base64
import io
import os
import re
from pathlib import Path

import numpy as np
from matplotlib import colormaps
from matplotlib.figure import Figure
from numpy.typing import NDArray
from PIL import Image
from scipy.ndimage import map_coordinates

from tfm.report.fielddata import FieldArrays
from tfm.report.style import TRACTION_MAP

__all__ = ["svg_text", "thumbnail", "write_bytes"]

_PICTURE = re.compile(r"data:image/png;base64,\s*([A-Za-z0-9+/=\s]+)")


def write_bytes(path: Path, content: bytes) -> Path:
    """Write beside, then rename: a reader sees the old file or the new one, never half of it."""
    path.parent.mkdir(parents=True, exist_ok=True)
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    part.write_bytes(content)
    part.replace(path)
    return path


def _smaller(match: re.Match[str]) -> str:
    """The same picture with one byte a pixel, when its colours allow: grey beads, maps of at most 256 colours."""
    raw = base64.b64decode(match.group(1))
    picture: Image.Image = Image.open(io.BytesIO(raw))
    if picture.mode == "RGBA" and picture.getchannel("A").getextrema() == (255, 255):
        picture = picture.convert("RGB")
    if picture.mode != "RGB":
        return match.group(0)
    red, green, blue = picture.split()
    if red == green == blue:
        picture = red
    elif picture.getcolors(256) is not None:
        picture = picture.quantize(256, dither=Image.Dither.NONE)
    else:
        return match.group(0)
    buffer = io.BytesIO()
    picture.save(buffer, "PNG")
    return "data:image/png;base64," + base64.b64encode(min(raw, buffer.getvalue(), key=len)).decode()


def svg_text(figure: Figure, *, title: str) -> str:
    """The figure as SVG: text as text, no date, the same bytes for the same numbers."""
    stream = io.StringIO()
    figure.savefig(stream, format="svg", metadata={"Date": None, "Creator": None, "Title": title})
    return _PICTURE.sub(_smaller, stream.getvalue())


def _sample(
    values: NDArray[np.float64],
    x: NDArray[np.float64],
    y: NDArray[np.float64],
    at: tuple[NDArray[np.float64], NDArray[np.float64]],
    order: int,
) -> NDArray[np.float64]:
    """Values on the lattice (``x``, ``y``) read at other positions; 0 outside the lattice."""
    columns, rows = ((p - q[0]) / (q[1] - q[0]) for p, q in zip(at, (x, y), strict=True))
    grid = np.meshgrid(rows, columns, indexing="ij")
    return np.asarray(map_coordinates(np.nan_to_num(values), grid, order=order, cval=0.0))


def thumbnail(a: FieldArrays, *, size: int = 256) -> bytes | None:
    """Small lossy WebP for the index: traction over dim beads with the outlines in white."""
    pictures, lattice, vectors = (a.xi, a.yi), (a.xt, a.yt), (a.x, a.y)
    found = [(x, y) for x, y in (pictures, lattice, vectors) if x is not None and y is not None]
    if not found:
        return None
    x, y = found[0]
    scale = size / max(x[-1] - x[0], y[-1] - y[0])
    at = tuple(np.linspace(p[0], p[-1], max(round((p[-1] - p[0]) * scale), 1)) for p in (x, y))
    canvas: NDArray[np.float64] = np.full((len(at[1]), len(at[0]), 3), 0.08)
    if a.relaxed is not None:
        grey = _sample(a.relaxed, x, y, (at[0], at[1]), 1)
        low, high = np.percentile(grey, (2, 99.5))
        canvas[:] = (np.clip((grey - low) / max(high - low, 1e-12), 0, 1) * 0.45)[..., None]
    source, (sx, sy) = (a.traction, lattice) if a.traction is not None else (a.u, vectors)
    if source is not None and sx is not None and sy is not None:
        values = np.nan_to_num(np.hypot(*source))
        top = float(np.percentile(values[values > 0], 99.5)) if (values > 0).any() else 1.0
        shade = np.clip(_sample(values, sx, sy, (at[0], at[1]), 1) / top, 0, 1)
        weight = np.clip(shade * 1.6, 0, 0.9)[..., None]
        canvas = canvas * (1 - weight) + colormaps[TRACTION_MAP](shade)[..., :3] * weight
    if a.labels is not None and a.xt is not None and a.yt is not None:
        number = _sample(a.labels.astype(float), a.xt, a.yt, (at[0], at[1]), 0)
        edge = np.zeros(number.shape, bool)
        edge[:-1] |= number[:-1] != number[1:]
        edge[:, :-1] |= number[:, :-1] != number[:, 1:]
        canvas[edge] = 1.0
    buffer = io.BytesIO()
    Image.fromarray((canvas * 255).astype(np.uint8)).save(buffer, "WEBP", quality=62, method=4)
    return buffer.getvalue()

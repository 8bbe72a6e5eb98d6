"""Outlines drawn by hand: GeoJSON polygons and ImageJ regions, as label images.

Both end as rings in our frame (origin at the **centre** of pixel (0, 0)). A pixel belongs to a cell when its centre
lies inside the cell's outer ring and outside its holes.
"""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from skimage import draw

from tfm.errors import InputError
from tfm.images.model import Outlines

__all__ = ["Shape", "rasterise", "read_geojson"]

_fill_polygon: Any = draw.polygon  # the library declares no types
Ring = NDArray[np.float64]
#: Pixels. Larger coordinates are no position in an image.
_FAR = 1e6
#: Part of the smaller cell that may lie in another one before the drawing is refused.
_OVERLAP = 0.2


@dataclass(frozen=True)
class Shape:
    """One cell as drawn: parts, each an outer ring followed by its holes; rings are ``(n, 2)`` x, y in pixels.

    With ``even_odd`` all rings of a part are equal and a point is inside when it lies in an odd number of them.
    """

    name: str
    parts: tuple[tuple[Ring, ...], ...]
    label: int | None = None
    even_odd: bool = False


def read_geojson(data: bytes, *, file: str) -> list[Shape]:
    """Polygons of a GeoJSON text (RFC 7946, sections 3.1.6 and 3.1.7; coordinates are pixels here).

    A feature's number is its ``id`` or the property ``cell``, ``label`` or ``id``, where that is a positive integer.

    Raises
    ------
    InputError
        ``geojson`` for text that is no GeoJSON, ``not-an-area`` for points and lines, ``bad-polygon`` for rings that
        cross themselves, enclose nothing or leave the number range.
    """
    try:
        document = json.loads(data.decode("utf-8-sig"), parse_constant=_no_constant)
    except (ValueError, RecursionError) as error:
        raise InputError(
            f"this is not GeoJSON ({_one_line(error)})",
            code="geojson",
            file=file,
            remedy="export the outlines again as GeoJSON in UTF-8",
        ) from error
    shapes = []
    for number, (feature, geometry) in enumerate(_geometries(document, file), start=1):
        where = f"outline {number}"
        kind = geometry.get("type")
        coordinates = geometry.get("coordinates")
        if kind == "Polygon":
            parts = [coordinates]
        elif kind == "MultiPolygon" and isinstance(coordinates, list):
            parts = coordinates
        else:
            raise InputError(
                f"{where} is a {str(kind)[:40]}, not an area",
                code="not-an-area",
                file=file,
                remedy="keep only Polygon and MultiPolygon",
            )
        rings = tuple(
            tuple(_ring(ring, where, file) for ring in _list(part, where, file)) for part in _list(parts, where, file)
        )
        shapes.append(Shape(where, rings, _label(feature)))
    if not shapes:
        raise InputError("the file holds no outline", code="no-outline", file=file, remedy="draw at least one cell")
    return shapes


def _no_constant(text: str) -> float:
    raise ValueError(f"{text} is not a number")


def _one_line(error: BaseException) -> str:
    return " ".join(str(error).split())[:120]


def _list(value: Any, where: str, file: str) -> list[Any]:
    if not isinstance(value, list) or not value:
        raise InputError(f"{where} has no coordinates", code="bad-polygon", file=file, remedy="draw it again")
    return value


def _geometries(document: Any, file: str) -> list[tuple[dict[str, Any], dict[str, Any]]]:
    items: Any = [document]
    if isinstance(document, dict) and document.get("type") == "FeatureCollection":
        items = document.get("features")
    elif isinstance(document, list):
        items = document
    found: list[tuple[dict[str, Any], dict[str, Any]]] = []
    for item in items if isinstance(items, list) else [None]:
        geometry = item.get("geometry") if isinstance(item, dict) and item.get("type") == "Feature" else item
        if not isinstance(item, dict) or not isinstance(geometry, dict) or "type" not in geometry:
            raise InputError(
                "it holds something that is no feature with a geometry",
                code="geojson",
                file=file,
                remedy="export the outlines again as GeoJSON",
            )
        if geometry["type"] == "GeometryCollection":
            raise InputError(
                "it holds a GeometryCollection",
                code="geojson",
                file=file,
                remedy="export one Polygon or MultiPolygon per cell",
            )
        found.append((item, geometry))
    return found


def _label(feature: dict[str, Any]) -> int | None:
    properties = feature.get("properties")
    candidates = [feature.get("id")]
    if isinstance(properties, dict):
        candidates += [properties.get(key) for key in ("cell", "label", "id")]
    for value in candidates:
        if isinstance(value, int) and not isinstance(value, bool) and 0 < value < 2**31:
            return value
    return None


def _ring(points: Any, where: str, file: str) -> Ring:
    try:
        ring = np.array([[float(point[0]), float(point[1])] for point in points], dtype=np.float64).reshape(-1, 2)
    except (TypeError, ValueError, IndexError, KeyError, OverflowError) as error:
        raise InputError(
            f"{where} has a point that is no pair of numbers", code="bad-polygon", file=file, remedy="draw it again"
        ) from error
    return check_ring(ring, where, file)


def check_ring(ring: Ring, where: str, file: str) -> Ring:
    """The ring without its closing point and repeated points, when it encloses an area and does not cross itself."""
    if not np.isfinite(ring).all() or (ring.size and np.abs(ring).max() > _FAR):
        raise InputError(
            f"{where} has a point far outside any image",
            code="bad-polygon",
            file=file,
            remedy="give coordinates in pixels",
        )
    if len(ring) > 1:
        ring = ring[np.any(ring != np.roll(ring, 1, axis=0), axis=1)]
    x, y = ring.T if len(ring) else (np.empty(0), np.empty(0))
    area = 0.5 * abs(float(np.dot(x, np.roll(y, -1)) - np.dot(y, np.roll(x, -1))))
    if len(ring) < 3 or area <= 1e-9 * max(1.0, float(np.ptp(ring, axis=0).max()) ** 2):
        raise InputError(f"{where} encloses no area", code="bad-polygon", file=file, remedy="draw it again")
    crossing = first_crossing(ring)
    if crossing is not None:
        raise InputError(
            f"{where} crosses itself near x = {crossing[0]:.1f}, y = {crossing[1]:.1f} px",
            code="bad-polygon",
            file=file,
            remedy="draw it again without a loop",
        )
    return ring


def first_crossing(ring: Ring) -> tuple[float, float] | None:
    """Where two edges of the ring properly cross, or None.

    Edges p + s d and q + t e cross where s and t, solved from the 2 x 2 system, both lie inside (0, 1). Rings that only
    touch themselves enclose a definite area and pass.
    """
    start, edge = ring, np.roll(ring, -1, axis=0) - ring
    count = len(ring)
    for first in range(count - 2):
        # All later edges but the neighbours, which share an end point with this one.
        last = count - 1 if first == 0 else count
        q, e = start[first + 2 : last], edge[first + 2 : last]
        p, d = start[first], edge[first]
        determinant = d[0] * e[:, 1] - d[1] * e[:, 0]
        gap = q - p
        with np.errstate(divide="ignore", invalid="ignore"):
            s = (gap[:, 0] * e[:, 1] - gap[:, 1] * e[:, 0]) / determinant
            t = (gap[:, 0] * d[1] - gap[:, 1] * d[0]) / determinant
        tiny = 1e-12
        hit = np.flatnonzero((s > tiny) & (s < 1 - tiny) & (t > tiny) & (t < 1 - tiny))
        if hit.size:
            return (float(p[0] + s[hit[0]] * d[0]), float(p[1] + s[hit[0]] * d[1]))
    return None


def shape_mask(shape: Shape, size: tuple[int, int]) -> NDArray[np.bool_]:
    """Pixels whose centres lie in the shape."""
    mask = np.zeros(size, dtype=bool)
    for rings in shape.parts:
        part = _fill(rings[0], size)
        for ring in rings[1:]:
            part = part ^ _fill(ring, size) if shape.even_odd else part & ~_fill(ring, size)
        mask |= part
    return mask


def _fill(ring: Ring, size: tuple[int, int]) -> NDArray[np.bool_]:
    mask = np.zeros(size, dtype=bool)
    rows, columns = _fill_polygon(ring[:, 1], ring[:, 0], size)
    mask[rows, columns] = True
    return mask


def rasterise(shapes: Sequence[Shape], size: tuple[int, int], *, file: str, source: str) -> Outlines:
    """Shapes as a label image ``(ny, nx)``.

    Numbers come from the shapes when all of them carry one, and from their order when none does. Where two drawings
    overlap a little the earlier one keeps the pixels, and a note says so.

    Raises
    ------
    InputError
        ``outline-outside``, ``outline-overlap``, ``outline-numbers``, ``bad-polygon`` for a shape without a pixel.
    """
    given = [shape.label for shape in shapes]
    if any(label is not None for label in given) and (None in given or len(set(given)) < len(given)):
        raise InputError(
            "some outlines carry a number and others do not, or a number is used twice",
            code="outline-numbers",
            file=file,
            remedy="number all outlines differently, or none",
        )
    labels = np.zeros(size, dtype=np.int32)
    notes: dict[int, tuple[str, ...]] = {}
    areas: dict[int, int] = {}
    for order, shape in enumerate(shapes, start=1):
        label = shape.label if shape.label is not None else order
        mask = shape_mask(shape, size)
        area = int(np.count_nonzero(mask))
        if area == 0:
            outside = all(_outside(rings[0], size) for rings in shape.parts)
            detail = f"lies outside the image of {size[1]} x {size[0]} pixels" if outside else "covers no pixel"
            raise InputError(
                f"{shape.name} {detail}",
                code="outline-outside" if outside else "bad-polygon",
                file=file,
                remedy="give coordinates in pixels of the bead image",
            )
        shared = mask & (labels > 0)
        for other in np.unique(labels[shared]):
            common = int(np.count_nonzero(shared & (labels == other)))
            if common > _OVERLAP * min(area, areas[int(other)]):
                raise InputError(
                    f"{shape.name} overlaps cell {other} by {common} pixels",
                    code="outline-overlap",
                    file=file,
                    remedy="draw the cells side by side",
                )
            notes[label] = (
                *notes.get(label, ()),
                f"outline overlapped cell {other} by {common} pixels, which that cell keeps",
            )
        labels[mask & (labels == 0)] = label
        areas[label] = area
    return Outlines(labels, source, (), notes)


def _outside(ring: Ring, size: tuple[int, int]) -> bool:
    low, high = ring.min(axis=0), ring.max(axis=0)
    return bool(high[0] < -0.5 or high[1] < -0.5 or low[0] > size[1] - 0.5 or low[1] > size[0] - 0.5)


def ellipse_ring(left: float, top: float, width: float, height: float) -> Ring:
    """An ellipse in its box as a polygon whose sagitta is below a hundredth of a pixel."""
    radius = 0.5 * max(width, height)
    count = max(64, math.ceil(math.pi / math.acos(1.0 - min(0.5, 0.01 / max(radius, 0.02)))))
    angle = 2.0 * math.pi * np.arange(count) / count
    return np.stack([left + 0.5 * width * (1 + np.cos(angle)), top + 0.5 * height * (1 + np.sin(angle))], axis=1)

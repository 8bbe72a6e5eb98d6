"""Random invented fields for accuracy benchmarks."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import binary_dilation

from tfm.errors import InputError, MeasurementError
from tfm.gel import Gel
from tfm.synth.beads import Camera
from tfm.synth.cells import SyntheticCell, make_cell_traction
from tfm.synth.fields import SyntheticField, cell_displacements, make_field

__all__ = ["random_cells", "random_field", "random_gel"]

_LARGEST_GRADIENT = 0.25


def random_gel(rng: np.random.Generator, *, thin: bool | None = None) -> Gel:
    """E log-uniform 1-20 kPa, nu 0.3-0.5, half of the gels 10-60 um thick, the others infinitely thick."""
    thin = bool(rng.uniform() < 0.5) if thin is None else thin
    modulus = float(np.exp(rng.uniform(np.log(1e3), np.log(20e3))))
    thickness = float(rng.uniform(10e-6, 60e-6)) if thin else None
    return Gel(youngs_modulus=modulus, poisson=float(rng.uniform(0.3, 0.5)), thickness=thickness)


def random_cells(
    rng: np.random.Generator,
    shape_px: tuple[int, int],
    pixel_size: float,
    *,
    count: int = 1,
    length: tuple[float, float] = (28e-6, 50e-6),
    spacing_px: float = 1.0,
    clearance: float = 10e-6,
) -> list[SyntheticCell]:
    """``count`` random cells of 1 pN m each that do not touch each other and stay ``clearance`` (m) from the edge.

    Raises
    ------
    MeasurementError
        When no free place was found in 500 trials.
    """
    cells: list[SyntheticCell] = []
    for _ in range(500):
        if len(cells) == count:
            return cells
        size = float(rng.uniform(*length))
        width = size * float(rng.uniform(0.3, 0.7))
        half = 0.8 * size + clearance
        span = np.array([shape_px[1], shape_px[0]]) * pixel_size
        if (span < 2 * half).any():
            size = float(span.min()) / 2 - clearance if len(cells) == 0 else length[0]
            width, half = size * 0.45, 0.8 * size + min(clearance, 0.1 * float(span.min()))
        room = np.maximum(span / 2 - half, 0.0)
        centre = span / 2 + rng.uniform(-1, 1, 2) * room
        cell_seed = int(rng.integers(2**62))
        try:
            cell = make_cell_traction(
                shape_px,
                pixel_size,
                centre=(float(centre[0]), float(centre[1])),
                length=size,
                width=width,
                angle=float(rng.uniform(-np.pi / 2, np.pi / 2)),
                contractile_moment=1e-12,
                rng=np.random.default_rng(cell_seed),
                anisotropy=float(rng.uniform(0.0, 0.9)),
                polarity=float(rng.uniform(-0.5, 0.5)),
                spacing_px=spacing_px,
            )
        except InputError:  # reaches outside the image: try another place
            continue
        if not any(_touch(cell.mask, other.mask) for other in cells):
            cells.append(cell)
    raise MeasurementError(f"no room for {count} cells", code="no-room", remedy="ask for fewer or a larger image")


def _touch(a: NDArray[np.bool_], b: NDArray[np.bool_], gap: int = 6) -> bool:
    """Whether two masks come closer than ``gap`` pixels."""
    rows, cols = np.nonzero(a)
    top, bottom = max(rows.min() - gap, 0), rows.max() + gap + 1
    left, right = max(cols.min() - gap, 0), cols.max() + gap + 1
    if not b[top:bottom, left:right].any():
        return False
    return bool((binary_dilation(a[top:bottom, left:right], iterations=gap) & b[top:bottom, left:right]).any())


def random_field(
    rng: np.random.Generator,
    *,
    gel: Gel | None = None,
    cells: int | None = None,
    shape_px: tuple[int, int] | None = None,
    pixel_size: float | None = None,
    peak_shift_px: float | None = None,
    density_per_px2: float | None = None,
    photons: float | None = None,
    drift: bool = True,
    spacing_px: float = 1.0,
    **imperfections: Any,
) -> SyntheticField:
    """A random field: whatever is not given is drawn.

    384-640 px of 0.16-0.26 um, one to three cells, E 1-20 kPa, nu 0.3-0.5, gels of 10-60 um or infinitely thick,
    0.006-0.03 beads per px^2, 200-1,000 photons per bead, bead sigma 1.1-1.5 px, moments such that the largest shift is
    0.5-6 px (log-uniform; less where the gradient of the displacement would exceed 0.25), drift of up to 3 px.
    With nodes of one pixel the shift of a bead is exact to 4e-5 px rms (largest error 0.002 px at a shift of 3 px);
    half a pixel divides that by more than four and costs four times the time.

    Examples
    --------
    >>> field = random_field(np.random.default_rng(5), shape_px=(192, 192), pixel_size=4e-7, cells=1)
    >>> bool(field.contractile_moments[0] > 0)
    True
    """
    side = int(rng.choice([384, 448, 512, 576, 640]))
    drawn: dict[str, Any] = {
        "gel": random_gel(rng),
        "shape_px": (side, side),
        "pixel_size": float(rng.uniform(0.16e-6, 0.26e-6)),
        "cells": int(rng.choice([1, 1, 1, 2, 2, 3])),
        "peak": float(np.exp(rng.uniform(np.log(0.5), np.log(6.0)))),
        "density": float(np.exp(rng.uniform(np.log(0.006), np.log(0.03)))),
        "photons": float(np.exp(rng.uniform(np.log(200), np.log(1000)))),
        "drift": tuple(float(v) for v in rng.uniform(-3, 3, 2)),
    }
    gel = gel or drawn["gel"]
    shape_px = shape_px or drawn["shape_px"]
    pixel_size = pixel_size or drawn["pixel_size"]
    peak = peak_shift_px or drawn["peak"]
    # More than one cell and quiet ground around them need 95 um.
    count = cells or (drawn["cells"] if min(shape_px) * pixel_size > 95e-6 else 1)
    reach = 20
    made = random_cells(
        rng,
        shape_px,
        pixel_size,
        count=count,
        length=_lengths(shape_px, pixel_size),
        spacing_px=spacing_px,
    )
    alone = cell_displacements(made, gel, margin_px=reach)
    weights = rng.lognormal(0.0, 0.3, len(made))
    total = np.sum([w * u for w, u in zip(weights, alone, strict=True)], axis=0) / pixel_size
    shift = float(np.sqrt((total**2).sum(axis=0)).max())
    gradient = max(float(np.abs(np.diff(total, axis=k)).max()) for k in (1, 2)) * pixel_size / made[0].spacing
    factor = min(peak / shift, _LARGEST_GRADIENT / gradient)
    strength = factor * weights
    scaled = [
        replace(c, traction=c.traction * w, dipole=c.dipole * w, adhesions=c.adhesions * np.array([1, 1, w, w]))
        for c, w in zip(made, strength, strict=True)
    ]
    return make_field(
        scaled,
        gel,
        rng,
        density_per_px2=density_per_px2 or drawn["density"],
        photons=photons or drawn["photons"],
        sigma=float(rng.uniform(1.1, 1.5)),
        camera=Camera(
            gain=float(rng.uniform(0.6, 2.5)),
            offset=float(rng.uniform(90, 300)),
            read_noise=float(rng.uniform(1.0, 2.5)),
            background=float(rng.uniform(3, 20)),
        ),
        drift=drawn["drift"] if drift else (0.0, 0.0),
        fields=[w * u for w, u in zip(strength, alone, strict=True)],
        **imperfections,
    )


def _lengths(shape_px: tuple[int, int], pixel_size: float) -> tuple[float, float]:
    """Cell lengths that leave quiet ground around one cell: at most 40 % of the field, 20-50 um."""
    span = min(shape_px) * pixel_size
    longest = min(50e-6, 0.4 * span)
    return min(28e-6, 0.7 * longest), longest

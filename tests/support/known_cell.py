"""A cell whose dipole is an elementary integral."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tfm.displacement.model import DisplacementField
from tfm.gel import Gel, displacement
from tfm.images.model import Outlines


@dataclass(frozen=True)
class KnownCell:
    """A disc of traction T_i = S_ij x_j, whose dipole is S_ij pi R^4 / 4 (elementary integral)."""

    field: DisplacementField
    outlines: Outlines
    pixel: float
    gel: Gel
    dipole: np.ndarray
    traction: np.ndarray
    radius: float


def known_cell(gel: Gel, *, noise: float = 2e-9, seed: int = 3, n: int = 320, pixel: float = 0.25e-6) -> KnownCell:
    radius, spacing_px = 11e-6, 4
    rows, columns = np.indices((n, n))
    centre = 0.5 * (n - 1) * pixel
    dx, dy = columns * pixel - centre, rows * pixel - centre
    inside = dx**2 + dy**2 < radius**2
    slope = np.array([[-9e6, 2e6], [2e6, -4e6]])  # Pa per m
    # Fade to the rim, so that what is asked for lies inside what the inversion can represent.
    fade = np.clip((radius - np.hypot(dx, dy)) / 3e-6, 0.0, 1.0)
    traction = np.stack([slope[0, 0] * dx + slope[0, 1] * dy, slope[1, 0] * dx + slope[1, 1] * dy]) * fade * inside
    # Block means over 2 x 2 pixels: a lattice of its own, half a pixel away from every lattice of the inversion.
    block = traction.reshape(2, n // 2, 2, n // 2, 2).mean(axis=(2, 4))
    u = displacement(gel, block, 2 * pixel)
    area = pixel**2
    dipole = (
        np.array(
            [np.sum(dx * traction[0]), 0.5 * np.sum(dx * traction[1] + dy * traction[0]), np.sum(dy * traction[1])]
        )
        * area
    )
    step = spacing_px // 2
    u = u[:, ::step, ::step]
    axis = (np.arange(n // 2) * 2 + 0.5)[::step] * pixel
    rng = np.random.default_rng(seed)
    u = u + noise * rng.standard_normal(u.shape)
    ones, zero = np.full(u.shape[1:], noise**-2), np.zeros(u.shape[1:])
    field = DisplacementField(
        axis,
        axis,
        u,
        np.stack([ones, zero, ones]),
        np.ones(u.shape[1:], bool),
        np.zeros(2),
        noise,
        (spacing_px * pixel) ** 2,
        0,
    )
    return KnownCell(field, Outlines(inside.astype(np.int32), "label image"), pixel, gel, dipole, traction, radius)

"""Invented adherent cells: an outline, adhesions near its rim, and a traction that balances exactly.

The traction is bilinear on a lattice that is finer than any inversion uses, and every true number (dipole, force,
torque) is a sum over its nodes, which is exact for the traction that displaces the beads.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import distance_transform_edt, map_coordinates
from skimage import draw

from tfm.errors import InputError
from tfm.synth.adhesions import adhesion_forces, adhesion_places, balanced, patches

__all__ = ["SyntheticCell", "lattice_axis", "make_cell_traction", "make_outline", "polygon_mask"]

_SHAPES = ("elongated", "spiky", "kidney")


@dataclass(frozen=True)
class SyntheticCell:
    """One invented cell with the numbers that are true of it. SI units.

    Attributes
    ----------
    traction
        ``(2, ny, nx)`` Pa at the nodes of a square lattice, bilinear in between; force per area that the cell applies
        to the gel.
    mask
        ``(rows, columns)`` bool on the image's pixels: inside the outline.
    polygon
        ``(n, 2)`` pixel coordinates x, y of the outline.
    spacing
        m, edge of a node. Node ``i`` of an axis is centred at ``(i + 1/2) spacing - pixel_size / 2``.
    pixel_size
        m.
    centroid
        ``(2,)`` m, x and y of the mask's centroid.
    dipole
        ``(3,)`` N m: xx, xy, yy of the symmetric first moment of the traction.
    adhesions
        ``(k, 4)``: x, y (m) and force x, y (N) of every adhesion before balancing; for figures only.
    """

    traction: NDArray[np.float64]
    mask: NDArray[np.bool_]
    polygon: NDArray[np.float64]
    spacing: float
    pixel_size: float
    centroid: NDArray[np.float64]
    dipole: NDArray[np.float64]
    adhesions: NDArray[np.float64]

    @property
    def contractile_moment(self) -> float:
        """N m, ``-(P_xx + P_yy)``: positive when the cell pulls inwards."""
        return float(-(self.dipole[0] + self.dipole[2]))


def lattice_axis(pixels: int, pixel_size: float, spacing_px: float) -> NDArray[np.float64]:
    """Centres (m) of the square nodes along an axis of ``pixels`` pixels.

    Raises
    ------
    InputError
        When the nodes do not fill the axis exactly.

    Examples
    --------
    >>> lattice_axis(2, 1.0, 0.5)
    array([-0.25,  0.25,  0.75,  1.25])
    """
    count = round(pixels / spacing_px)
    if abs(count * spacing_px - pixels) > 1e-9 * pixels:
        raise InputError(
            f"nodes of {spacing_px} px do not fill {pixels} px", code="bad-spacing", remedy="choose 1, 0.5 or 0.25"
        )
    centres: NDArray[np.float64] = ((np.arange(count, dtype=np.float64) + 0.5) * spacing_px - 0.5) * pixel_size
    return centres


def make_outline(
    length: float, width: float, angle: float, rng: np.random.Generator, *, kind: str = "random", points: int = 360
) -> NDArray[np.float64]:
    """A closed random outline around the origin, ``(points, 2)`` x, y in the unit of ``length``.

    An ellipse whose radius carries a few random low harmonics; ``spiky`` adds three to six narrow lobes, ``kidney``
    bends the long axis, ``elongated`` sharpens the two ends.

    Raises
    ------
    InputError
        For an unknown ``kind`` or a size that is not positive.

    Examples
    --------
    >>> make_outline(40.0, 15.0, 0.0, np.random.default_rng(1)).shape
    (360, 2)
    """
    if kind == "random":
        kind = str(rng.choice(_SHAPES))
    if kind not in _SHAPES:
        raise InputError(f"shape '{kind}' is unknown", code="bad-shape", remedy=f"choose one of {', '.join(_SHAPES)}")
    if not (length > 0 and width > 0):
        raise InputError("length and width of a cell must be positive", code="bad-size", remedy="give both in m")
    phi = np.linspace(0, 2 * np.pi, points, endpoint=False)
    radius = np.ones_like(phi)
    for order in range(2, 6):
        radius += 0.12 / order * rng.normal() * np.cos(order * phi - rng.uniform(0, 2 * np.pi))
    if kind == "spiky":
        for centre in rng.uniform(0, 2 * np.pi, int(rng.integers(3, 7))):
            radius += rng.uniform(0.15, 0.4) * np.exp(8.0 * (np.cos(phi - centre) - 1))
    if kind == "elongated":
        radius *= 0.85 + 0.3 * np.abs(np.cos(phi)) ** 3
    radius = np.clip(radius, 0.45, 1.6)
    x, y = 0.5 * length * radius * np.cos(phi), 0.5 * width * radius * np.sin(phi)
    if kind == "kidney":
        y = y + rng.choice([-1.0, 1.0]) * rng.uniform(0.25, 0.5) * width * ((2 * x / length) ** 2 - 0.4)
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    outline: NDArray[np.float64] = np.stack([x, y], axis=1) @ turn.T
    return outline


def polygon_mask(shape_px: tuple[int, int], polygon: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Pixels whose centre lies inside ``polygon`` (x, y in pixels)."""
    mask = np.zeros(shape_px, dtype=np.bool_)
    fill: Any = draw.polygon  # the library ships no types for it
    mask[fill(polygon[:, 1], polygon[:, 0], shape_px)] = True
    return mask


def make_cell_traction(
    shape_px: tuple[int, int],
    pixel_size: float,
    *,
    centre: tuple[float, float],
    length: float,
    width: float,
    angle: float,
    contractile_moment: float,
    rng: np.random.Generator,
    anisotropy: float = 0.5,
    polarity: float = 0.0,
    adhesions: int | None = None,
    kind: str = "random",
    spacing_px: float = 1.0,
) -> SyntheticCell:
    """A random adherent cell whose traction has the asked contractile moment and balances to rounding.

    Parameters
    ----------
    shape_px
        Rows and columns of the image.
    pixel_size
        m.
    centre
        x, y in m of the middle of the cell, in the image's frame (origin at the centre of pixel (0, 0), y down).
    length, width, angle
        m, m and rad (from +x towards +y): size and direction of the outline.
    contractile_moment
        N m, ``-(P_xx + P_yy)``; positive pulls inwards.
    rng
        Source of randomness.
    anisotropy
        0 = adhesions pull with equal strength in all directions, 1 = along the long axis only.
    polarity
        -1..1: share of adhesions and pull moved to one end of the cell.
    adhesions
        Number of adhesions; random 14-30 when not given.
    kind
        ``elongated``, ``spiky``, ``kidney`` or ``random``.
    spacing_px
        Edge of the lattice's nodes in pixels (1, 0.5, ...).

    Returns
    -------
    SyntheticCell
        Adhesions are elliptical patches of 1-8 um^2 with a smooth profile, 1-3 um inside the rim.

    Raises
    ------
    InputError
        When the cell does not lie inside the image.

    Examples
    --------
    >>> cell = make_cell_traction((128, 128), 4e-7, centre=(25e-6, 25e-6), length=30e-6, width=15e-6, angle=0.3,
    ...                           contractile_moment=1e-12, rng=np.random.default_rng(3))
    >>> round(cell.contractile_moment * 1e12, 9)
    1.0
    """
    polygon = (make_outline(length, width, angle, rng, kind=kind) + np.asarray(centre)) / pixel_size
    mask = polygon_mask(shape_px, polygon)
    low, high = polygon.min(axis=0), polygon.max(axis=0)
    if not mask.any() or (low < -0.5).any() or high[0] > shape_px[1] - 0.5 or high[1] > shape_px[0] - 0.5:
        raise InputError(
            f"the cell at {centre[0] * 1e6:.1f}, {centre[1] * 1e6:.1f} um reaches outside the image",
            code="cell-outside",
            remedy="move it or make it smaller",
        )
    rows, columns = np.nonzero(mask)
    centroid = np.array([columns.mean(), rows.mean()]) * pixel_size
    x = lattice_axis(shape_px[1], pixel_size, spacing_px)
    y = lattice_axis(shape_px[0], pixel_size, spacing_px)
    spacing = spacing_px * pixel_size
    # The pull fades to nothing over the last 0.8 um before the rim: a traction that jumps would need finer nodes.
    depth = distance_transform_edt(mask) * pixel_size
    fade = np.clip((depth - 0.5 * pixel_size) / 0.8e-6, 0.0, 1.0)
    fade = fade * fade * (3 - 2 * fade)
    grid = np.meshgrid(np.round(y / pixel_size, 9), np.round(x / pixel_size, 9), indexing="ij")
    inside = map_coordinates(fade, grid, order=1, mode="nearest")
    count = int(rng.integers(14, 31)) if adhesions is None else adhesions
    places = adhesion_places(polygon * pixel_size, centroid, angle, count, polarity, rng)
    forces = adhesion_forces(places, centroid, angle, anisotropy, polarity, rng)
    traction, weight, forces = patches(x, y, inside, places, forces, centroid, rng)
    traction = balanced(traction, weight, x, y)
    dipole = _dipole(traction, x, y, centroid, spacing)
    scale = contractile_moment / -(dipole[0] + dipole[2])
    return SyntheticCell(
        traction=traction * scale,
        mask=mask,
        polygon=polygon,
        spacing=spacing,
        pixel_size=pixel_size,
        centroid=centroid,
        dipole=dipole * scale,
        adhesions=np.hstack([places, forces * scale * spacing**2]),
    )


def _dipole(
    traction: NDArray[np.float64],
    x: NDArray[np.float64],
    y: NDArray[np.float64],
    centroid: NDArray[np.float64],
    spacing: float,
) -> NDArray[np.float64]:
    """xx, xy, yy of the symmetric first moment; exact for a traction bilinear between nodes."""
    dx, dy = x[None, :] - centroid[0], y[:, None] - centroid[1]
    area = spacing**2
    return np.array(
        [
            (dx * traction[0]).sum() * area,
            0.5 * ((dx * traction[1]).sum() + (dy * traction[0]).sum()) * area,
            (dy * traction[1]).sum() * area,
        ]
    )

"""A whole invented field: cells, gel, beads, two frames, and everything that is true of them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfm.errors import InputError
from tfm.gel import Gel
from tfm.synth.beads import Beads, Camera, expected_photons, make_bead_image, make_beads
from tfm.synth.cells import SyntheticCell
from tfm.synth.forward import displacement_at, lattice_work, surface_displacements

__all__ = ["SyntheticField", "cell_displacements", "make_bead_images", "make_field"]


@dataclass(frozen=True)
class SyntheticField:
    """Two invented frames and the truth behind them. SI units; arrays [row, column].

    Attributes
    ----------
    relaxed, stressed
        ``(ny, nx)`` uint16 counts.
    relaxed_variance, stressed_variance
        ``(ny, nx)`` counts^2 to expect from photons, read noise and rounding.
    labels
        ``(ny, nx)`` int32, cells 1..n.
    pixel_size
        m.
    gel
        The gel that was used.
    displacement
        ``(2, ny, nx)`` m: the true u at the pixel centres, **without** drift and rotation.
    cells
        The invented cells, in label order.
    dipoles
        ``(n, 3)`` N m: xx, xy, yy per cell.
    strain_energies
        ``(n,)`` J: 1/2 integral T_a . u dA over the cell with the whole field's u.
    pair_energies
        (a, b) -> J: W_ab = integral T_a . u_b dA, a < b.
    beads
        Relaxed positions and photons.
    settings
        Every number that was chosen, for records.
    """

    relaxed: NDArray[np.uint16]
    stressed: NDArray[np.uint16]
    relaxed_variance: NDArray[np.float64]
    stressed_variance: NDArray[np.float64]
    labels: NDArray[np.int32]
    pixel_size: float
    gel: Gel
    displacement: NDArray[np.float64]
    cells: tuple[SyntheticCell, ...]
    dipoles: NDArray[np.float64]
    strain_energies: NDArray[np.float64]
    pair_energies: Mapping[tuple[int, int], float]
    beads: Beads
    settings: Mapping[str, Any]

    @property
    def contractile_moments(self) -> NDArray[np.float64]:
        """``(n,)`` N m, ``-(P_xx + P_yy)`` per cell."""
        moments: NDArray[np.float64] = -(self.dipoles[:, 0] + self.dipoles[:, 2])
        return moments


def cell_displacements(cells: Sequence[SyntheticCell], gel: Gel, *, margin_px: int = 16) -> list[NDArray[np.float64]]:
    """Displacement (m) of every cell alone on its lattice, which reaches ``margin_px`` beyond the image."""
    if not cells:
        return []
    margin = round(margin_px * cells[0].pixel_size / cells[0].spacing)
    return surface_displacements([cell.traction for cell in cells], cells[0].spacing, gel, margin=margin)


def make_bead_images(
    shape_px: tuple[int, int],
    beads: Beads,
    shifts: NDArray[np.float64],
    rng: np.random.Generator,
    *,
    sigma: float = 1.25,
    camera: Camera | None = None,
    drift: tuple[float, float] = (0.0, 0.0),
    rotation: float = 0.0,
    lost: float = 0.0,
    new: float = 0.0,
    hot_pixels: float = 0.0,
    uneven: float = 0.0,
    brightness: float = 1.0,
    defocus: float = 1.0,
) -> tuple[NDArray[np.uint16], NDArray[np.uint16], NDArray[np.float64], NDArray[np.float64]]:
    """Relaxed and stressed frame and the variance to expect in each.

    A bead at x in the relaxed frame sits at ``R (x + u(x) - m) + m + drift`` in the stressed one (m = middle of the
    image, R a turn by ``rotation``). Photons, read noise and rounding are drawn anew for each frame.

    Parameters
    ----------
    shifts
        ``(n, 2)`` px: u at each bead.
    sigma
        px, standard deviation of the bead's image.
    camera
        Gain, offset, read noise, background; :class:`Camera` when None.
    drift, rotation
        px (x, y) and rad: rigid motion of the stressed frame.
    lost, new
        Share of beads that the stressed frame lacks or has in addition.
    hot_pixels
        Share of pixels that read 5-40 times the background in both frames, at the same places.
    uneven
        0..0.9: loss of light towards the corners, in both frames.
    brightness
        Factor on the stressed frame's light.
    defocus
        Factor on ``sigma`` in the stressed frame.

    Raises
    ------
    InputError
        For shares outside 0..1.
    """
    for name, value in (("lost", lost), ("new", new), ("hot_pixels", hot_pixels), ("uneven", uneven)):
        if not 0 <= value < 1:
            raise InputError(f"{name} is {value}", code="bad-share", remedy="give a share from 0 to below 1")
    camera = camera or Camera()
    middle = np.array([shape_px[1] - 1, shape_px[0] - 1]) / 2
    turn = np.array([[np.cos(rotation), -np.sin(rotation)], [np.sin(rotation), np.cos(rotation)]])
    moved = (beads.positions + shifts - middle) @ turn.T + middle + np.asarray(drift)
    keep = rng.uniform(size=len(moved)) >= lost
    moved, light = moved[keep], beads.photons[keep]
    extra = int(rng.binomial(len(beads.photons), new))
    if extra:
        span = np.ptp(beads.positions, axis=0)
        fresh = rng.uniform(0, 1, (extra, 2)) * span + beads.positions.min(axis=0)
        moved, light = np.vstack([moved, fresh]), np.concatenate([light, rng.choice(beads.photons, extra)])
    rows, cols = np.mgrid[: shape_px[0], : shape_px[1]]
    r2 = ((cols - middle[0]) ** 2 + (rows - middle[1]) ** 2) / (middle**2).sum()
    lamp = 1 - uneven * r2
    hot = np.where(rng.uniform(size=shape_px) < hot_pixels, rng.uniform(5, 40, shape_px) * camera.background, 0.0)
    first = (expected_photons(shape_px, beads.positions, beads.photons, sigma) + camera.background) * lamp + hot
    second = (expected_photons(shape_px, moved, light, sigma * defocus) + camera.background) * lamp * brightness + hot
    relaxed, relaxed_variance = make_bead_image(first, camera, rng)
    stressed, stressed_variance = make_bead_image(second, camera, rng)
    return relaxed, stressed, relaxed_variance, stressed_variance


def make_field(
    cells: Sequence[SyntheticCell],
    gel: Gel,
    rng: np.random.Generator,
    *,
    shape_px: tuple[int, int] | None = None,
    pixel_size: float | None = None,
    density_per_px2: float = 0.02,
    photons: float = 500.0,
    brightness_spread: float = 0.25,
    sigma: float = 1.25,
    camera: Camera | None = None,
    drift: tuple[float, float] = (0.0, 0.0),
    fields: Sequence[NDArray[np.float64]] | None = None,
    **imperfections: float,
) -> SyntheticField:
    """Images of beads under the given cells, with the truth.

    Parameters
    ----------
    cells
        Cells of one lattice (none = quiet field; then give ``shape_px`` and ``pixel_size``).
    fields
        What :func:`cell_displacements` gave for these cells, to save doing it twice.
    imperfections
        ``rotation, lost, new, hot_pixels, uneven, brightness, defocus`` of :func:`make_bead_images`.

    Raises
    ------
    InputError
        When cells overlap, do not share a lattice, or there is neither a cell nor a size.

    Examples
    --------
    >>> field = make_field([], Gel(youngs_modulus=5e3, poisson=0.45), np.random.default_rng(1), shape_px=(64, 64),
    ...                    pixel_size=2e-7)
    >>> field.relaxed.shape, len(field.dipoles)
    ((64, 64), 0)
    """
    if cells:
        shape_px, pixel_size = cells[0].mask.shape, cells[0].pixel_size
    if shape_px is None or pixel_size is None:
        raise InputError("no cell and no size", code="no-size", remedy="give shape_px and pixel_size")
    labels = np.zeros(shape_px, dtype=np.int32)
    for number, cell in enumerate(cells, start=1):
        if cell.mask.shape != shape_px or cell.pixel_size != pixel_size or cell.spacing != cells[0].spacing:
            raise InputError("the cells do not share one lattice", code="two-lattices", remedy="make them alike")
        if (labels[cell.mask] > 0).any():
            raise InputError(f"cell {number} overlaps another", code="overlap", remedy="move it")
        labels[cell.mask] = number
    margin_px = 16 + int(np.ceil(np.abs(drift).max()))
    alone = list(fields) if fields is not None else cell_displacements(cells, gel, margin_px=margin_px)
    beads = make_beads(
        shape_px, density_per_px2, rng, margin=margin_px - 4, photons=photons, brightness_spread=brightness_spread
    )
    total = np.sum(alone, axis=0) if alone else np.zeros((2, 1, 1))
    shifts, grid = np.zeros_like(beads.positions), np.zeros((2, *shape_px))
    if cells:
        spacing = cells[0].spacing / pixel_size
        origin = -0.5 + (0.5 - (total.shape[1] - cells[0].traction.shape[1]) // 2) * spacing
        shifts = displacement_at(total / pixel_size, origin, spacing, beads.positions)
        rows, cols = np.mgrid[: shape_px[0], : shape_px[1]]
        points = np.stack([cols.ravel(), rows.ravel()], axis=1).astype(float)
        grid = displacement_at(total, origin, spacing, points).T.reshape(2, *shape_px)
    relaxed, stressed, relaxed_variance, stressed_variance = make_bead_images(
        shape_px, beads, shifts, rng, sigma=sigma, camera=camera, drift=drift, **imperfections
    )
    energies, pairs = _energies(cells, alone)
    return SyntheticField(
        relaxed=relaxed,
        stressed=stressed,
        relaxed_variance=relaxed_variance,
        stressed_variance=stressed_variance,
        labels=labels,
        pixel_size=pixel_size,
        gel=gel,
        displacement=grid,
        cells=tuple(cells),
        dipoles=np.array([cell.dipole for cell in cells]).reshape(-1, 3),
        strain_energies=energies,
        pair_energies=pairs,
        beads=beads,
        settings={
            "density_per_px2": density_per_px2,
            "photons": photons,
            "brightness_spread": brightness_spread,
            "sigma": sigma,
            "camera": camera or Camera(),
            "drift": tuple(drift),
            **imperfections,
        },
    )


def _energies(
    cells: Sequence[SyntheticCell], alone: Sequence[NDArray[np.float64]]
) -> tuple[NDArray[np.float64], dict[tuple[int, int], float]]:
    """Strain energy per cell (with the whole field's u) and W_ab for every pair."""
    work = np.zeros((len(cells), len(cells)))
    for b, u in enumerate(alone):
        cut = (u.shape[1] - cells[b].traction.shape[1]) // 2
        inner = u[:, cut : u.shape[1] - cut, cut : u.shape[2] - cut]
        for a, cell in enumerate(cells):
            work[a, b] = lattice_work(cell.traction, inner, cell.spacing)
    pairs = {(a + 1, b + 1): float(work[a, b]) for a in range(len(cells)) for b in range(a + 1, len(cells))}
    energies: NDArray[np.float64] = 0.5 * work.sum(axis=1)
    return energies, pairs

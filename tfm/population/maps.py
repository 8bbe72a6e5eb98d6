r"""Where a second cell would like to be: interaction energy against its position and angle around a measured cell.

Point dipoles, :math:`W = P^a_{ij} P^b_{kl}(\theta)\,(-\partial_i \partial_k G_{jl})`; at one place W is
:math:`c_0 + c_1 \cos 2\theta + c_2 \sin 2\theta` in the angle :math:`\theta` of the second cell, so three evaluations
give all angles.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from tfm.errors import InputError
from tfm.gel import Gel, dipole_interaction

__all__ = ["EnergyMap", "energy_map"]


@dataclass(frozen=True)
class EnergyMap:
    """Energy of a second cell around a measured one. SI; frame of the image.

    Attributes
    ----------
    x, y
        ``(nx,)``, ``(ny,)`` m: position of the second cell minus that of the first.
    angle
        ``(na,)`` rad: angle of the second cell's major axis, from +x towards +y.
    energy, energy_sd
        ``(na, ny, nx)`` J. NaN nearer than ``nearest``. ``energy_sd`` from the two covariances; None without any.
    lowest, lowest_angle
        ``(ny, nx)`` J and rad: energy at the angle that lowers it most, and that angle, exact (not from the grid).
    nearest
        m: below this distance the map is empty, because point dipoles do not describe cells that touch.
    major, minor
        N m: principal values of the second cell.
    """

    x: NDArray[np.float64]
    y: NDArray[np.float64]
    angle: NDArray[np.float64]
    energy: NDArray[np.float64]
    energy_sd: NDArray[np.float64] | None
    lowest: NDArray[np.float64]
    lowest_angle: NDArray[np.float64]
    nearest: float
    major: float
    minor: float


def _turned(major: float, minor: float, angle: NDArray[np.float64]) -> NDArray[np.float64]:
    """``(na, 3)`` tensors of principal values with ``major`` along ``angle``."""
    mean, half = 0.5 * (major + minor), 0.5 * (major - minor)
    return np.stack(
        [mean + half * np.cos(2 * angle), half * np.sin(2 * angle), mean - half * np.cos(2 * angle)], axis=-1
    )


def energy_map(
    gel: Gel,
    dipole: ArrayLike,
    *,
    major: float,
    minor: float,
    reach: float,
    nearest: float,
    covariance: ArrayLike | None = None,
    points: int = 61,
    angles: int = 37,
) -> EnergyMap:
    """Interaction energy of a second cell of principal values ``major`` and ``minor`` around a measured dipole.

    Parameters
    ----------
    gel
        The gel.
    dipole, covariance
        ``(3,)`` N m and ``(3, 3)`` (N m)^2 of the measured cell at the origin.
    major, minor
        N m, principal values of the second cell (negative for one that contracts); taken as exact.
    reach
        m: the map covers -reach..reach in x and y.
    nearest
        m: nothing is said below this distance; the length of the cell is a sensible value.
    points, angles
        Grid size; angles run over (-90, 90] degrees.

    Raises
    ------
    InputError
        When ``nearest`` is not between 0 and ``reach``.

    Examples
    --------
    In line with a contracting cell is the best place, at any Poisson ratio (common practice):

    >>> result = energy_map(Gel(5e3, 0.45), [-1e-12, 0.0, 0.0], major=-1e-12, minor=0.0, reach=60e-6, nearest=25e-6)
    >>> row, column = np.unravel_index(np.nanargmin(result.lowest), result.lowest.shape)
    >>> bool(abs(result.y[row]) < 1e-12), round(float(result.lowest_angle[row, column]), 6) + 0.0
    (True, 0.0)
    """
    if not 0 < nearest < reach:
        raise InputError(
            f"nearest is {nearest:g} m and reach {reach:g} m", code="bad-map", remedy="make 0 < nearest < reach"
        )
    axis = np.linspace(-reach, reach, points)
    x, y = np.meshgrid(axis, axis)
    far = np.hypot(x, y) >= nearest
    angle = np.linspace(-np.pi / 2, np.pi / 2, angles + 1)[1:]
    # Strain of the first cell at each place, from unit second dipoles: W is linear in the second tensor.
    response = np.full((3, *x.shape), np.nan)
    gradient = np.full((*x.shape, 3, 3), np.nan)
    for k, unit in enumerate(np.eye(3)):
        one = dipole_interaction(gel, np.asarray(dipole, dtype=np.float64), unit, x[far], y[far])
        response[k][far] = one.energy
        gradient[far, :, k] = one.energy_by_dipole_a
    tensors = _turned(major, minor, angle)
    energy = np.einsum("ak,kyx->ayx", tensors, response)
    sd = None
    if covariance is not None:
        g = np.einsum("yxik,ak->ayxi", gradient, tensors)
        sd = np.sqrt(np.einsum("ayxi,ij,ayxj->ayx", g, np.asarray(covariance, dtype=np.float64), g))
    mean, half = 0.5 * (major + minor), 0.5 * (major - minor)
    level = mean * (response[0] + response[2])
    cosine, sine = half * (response[0] - response[2]), half * response[1]
    lowest = level - np.hypot(cosine, sine)
    lowest_angle = 0.5 * np.arctan2(-sine, -cosine)
    lowest_angle = np.where(lowest_angle <= -np.pi / 2, np.pi / 2, lowest_angle)
    return EnergyMap(axis, axis, angle, energy, sd, lowest, lowest_angle, nearest, major, minor)

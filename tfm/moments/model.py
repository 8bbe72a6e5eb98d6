"""What the room hands on: one record per cell and one per pair, all in SI."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["CellDipole", "CellPair"]


@dataclass(frozen=True)
class CellDipole:
    """Moments of one cell. SI units; ``None`` = not measured, never 0.

    Attributes
    ----------
    cell
        Label in the outlines.
    centroid
        ``(2,)`` m, x and y of the outline's centroid.
    area
        m^2.
    outline_axis
        rad, in (-pi/2, pi/2]: the outline's long axis; None for a round outline.
    dipole
        ``(3,)`` N m: xx, xy, yy (symmetric part of integral of (x - c) T dA).
    covariance
        ``(3, 3)`` (N m)^2 in the same order; from the images alone. None for methods without error bars.
    total_covariance
        The same with the stated uncertainty of gel and pixel size added.
    major, minor
        N m: principal value of larger magnitude, and the other.
    axis, axis_sd
        rad: direction of ``major`` in (-pi/2, pi/2] and its standard deviation.
    anisotropy
        (|major| - |minor|) / (|major| + |minor|).
    contractile_moment, contractile_moment_sd, contractile_moment_total_sd
        N m: -(P_xx + P_yy), positive when the cell pulls inwards.
    net_force
        N, magnitude of the summed force (zero to rounding where balance is imposed).
    torque
        N m, about the centroid, from +x towards +y.
    force_total
        N: integral of |T| dA.
    strain_energy, strain_energy_sd
        J.
    traction_peak, traction_rms
        Pa.
    displacement_peak
        m, largest magnitude under the outline.
    budget
        Variance of the contractile moment by source, (N m)^2: ``images``, ``youngs_modulus``, ``poisson``,
        ``thickness``, ``pixel``.
    notes
        Sentences for the table; any note makes ``caution``.
    """

    cell: int
    centroid: NDArray[np.float64]
    area: float
    outline_axis: float | None
    dipole: NDArray[np.float64]
    covariance: NDArray[np.float64] | None
    total_covariance: NDArray[np.float64] | None
    major: float
    minor: float
    axis: float | None
    axis_sd: float | None
    anisotropy: float
    contractile_moment: float
    contractile_moment_sd: float | None
    contractile_moment_total_sd: float | None
    net_force: float
    torque: float
    force_total: float
    strain_energy: float
    strain_energy_sd: float | None
    traction_peak: float
    traction_rms: float
    displacement_peak: float
    budget: dict[str, float]
    notes: tuple[str, ...] = ()


@dataclass(frozen=True)
class CellPair:
    """Elastic interaction of two cells. SI units; ``None`` = not measured.

    ``energy`` is W_ab = integral T_a . u_b dA from the whole fields, ``dipole_energy`` from the two tensors alone,
    ``force_on_b`` ``(2,)`` N and ``torque_on_b`` N m are -dW/d(position, angle) of cell b.
    """

    cell_a: int
    cell_b: int
    distance: float
    bearing: float
    energy: float | None
    energy_sd: float | None
    dipole_energy: float
    dipole_energy_sd: float | None
    force_on_b: NDArray[np.float64]
    torque_on_b: float
    coupling_number: float | None
    extras: dict[str, Any]
    notes: tuple[str, ...] = ()

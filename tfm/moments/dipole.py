r"""The force-dipole tensor of every cell, with its error bar.

:math:`P_{ij} = \int (x_i - c_i) T_j\,dA` over the cell, symmetric part, c the outline's centroid. It is a linear
functional
of the traction, so mean and covariance follow exactly from the posterior.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import special

from tfm.images.model import Outlines
from tfm.moments.energy import energy_matrix, mixture_energy
from tfm.moments.model import CellDipole
from tfm.moments.tensor import axis_deviation, outline_axis, principal_axes
from tfm.traction.model import TractionField
from tfm.traction.sensitivity import mean_with_gel

__all__ = ["cell_dipoles", "dipole_functionals"]


def dipole_functionals(traction: TractionField, label: int, centroid: NDArray[np.float64]) -> NDArray[np.float64]:
    """Functionals of the coefficients about a point, ``(5, 2 n)`` in N m per Pa; no columns without a posterior.

    Rows: symmetric dipole xx, xy, yy; torque from +x towards +y; trace xx + yy.
    """
    p = traction.posterior
    if p is None:
        return np.zeros((5, 0))
    cells = p.labels == label
    weights = p.basis[cells]
    n = weights.shape[1]
    area = traction.spacing**2
    mx = weights.T @ (traction.x[p.columns[cells]] - centroid[0]) * area
    my = weights.T @ (traction.y[p.rows[cells]] - centroid[1]) * area
    zero = np.zeros(n)
    return np.stack(
        [
            np.concatenate([mx, zero]),
            0.5 * np.concatenate([my, mx]),
            np.concatenate([zero, my]),
            np.concatenate([-my, mx]),
            np.concatenate([mx, my]),
        ]
    )


def _geometry(mask: NDArray[np.bool_], pixel: float) -> tuple[NDArray[np.float64], float, float | None]:
    rows, columns = np.nonzero(mask)
    return np.array([columns.mean(), rows.mean()]) * pixel, rows.size * pixel**2, outline_axis(mask)


def _mean_magnitude(
    tx: NDArray[np.float64], ty: NDArray[np.float64], variance: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Expected length of a 2-D Gaussian vector with mean (tx, ty) and ``variance`` per component (Rice's mean)."""
    nu2 = tx**2 + ty**2
    s2 = np.maximum(variance, 1e-300)
    z = nu2 / (4.0 * s2)
    return np.asarray(np.sqrt(np.pi * s2 / 2.0) * ((1.0 + 2.0 * z) * special.i0e(z) + 2.0 * z * special.i1e(z)))


def cell_dipoles(
    traction: TractionField,
    outlines: Outlines,
    pixel_size: float,
    *,
    pixel_size_sd: float = 0.0,
) -> tuple[CellDipole, ...]:
    """One record per cell of the outlines that the lattice covers.

    Parameters
    ----------
    traction
        Result of any method.
    outlines, pixel_size
        ``(NY, NX)`` labels and m.
    pixel_size_sd
        m, uncertainty of the pixel size, for the total error.

    Notes
    -----
    With E, nu, h and pixel size uncertain, ``total_covariance = covariance + sum_q sd_q^2 (dP/dq)(dP/dq)^T``. P is
    proportional to E. By similarity P = E p^3 f(h/p), so dP/dp = 3 P / p - (h / p) dP/dh. dP/dnu and dP/dh are taken
    from
    solving the same beads again on a changed gel.
    """
    labels = [int(v) for v in np.unique(traction.labels) if v > 0]
    shifts = _gel_shifts(traction, pixel_size, pixel_size_sd)
    energy = None
    if traction.posterior is not None and traction.data is not None:
        energy = energy_matrix(traction.data, traction)
    return tuple(
        _one_cell(traction, outlines, pixel_size, label, energy, shifts)
        for label in labels
        if (outlines.labels == label).any()
    )


def _gel_shifts(traction: TractionField, pixel: float, pixel_sd: float) -> Mapping[str, NDArray[np.float64]]:
    """Change of the coefficients for one standard deviation of each uncertain number, ``(2 n,)`` Pa."""
    p, gel = traction.posterior, traction.gel
    if p is None:
        return {}
    shifts: dict[str, NDArray[np.float64]] = {}
    if gel.youngs_modulus_sd > 0:
        shifts["youngs_modulus"] = p.mean * (gel.youngs_modulus_sd / gel.youngs_modulus)
    if gel.poisson_sd > 0:
        step = 0.02 if gel.poisson <= 0.25 else -0.02
        changed = mean_with_gel(traction, replace(gel, poisson=gel.poisson + step))
        shifts["poisson"] = (changed - p.mean) / step * gel.poisson_sd
    by_thickness = None
    if gel.thickness is not None and (gel.thickness_sd > 0 or pixel_sd > 0):
        changed = mean_with_gel(traction, replace(gel, thickness=1.04 * gel.thickness))
        by_thickness = (changed - p.mean) / (0.04 * gel.thickness)
        if gel.thickness_sd > 0:
            shifts["thickness"] = by_thickness * gel.thickness_sd
    if pixel_sd > 0:
        # Coefficients are tractions, T = E f(h/p) at fixed images: dT/dp = -(h/p) dT/dh. Lengths add 3 P / p in
        # _budget.
        elastic = np.zeros_like(p.mean) if by_thickness is None else -by_thickness * (gel.thickness or 0.0) / pixel
        shifts["pixel"] = elastic * pixel_sd
        shifts["_pixel_relative"] = np.array([pixel_sd / pixel])
    return shifts


def _one_cell(
    traction: TractionField,
    outlines: Outlines,
    pixel: float,
    label: int,
    energy: NDArray[np.float64] | None,
    shifts: Mapping[str, NDArray[np.float64]],
) -> CellDipole:
    mask = outlines.labels == label
    centroid, area, long_axis = _geometry(mask, pixel)
    on = traction.labels == label
    rows, columns = np.nonzero(on)
    tx, ty = traction.traction[0][on], traction.traction[1][on]
    da = traction.spacing**2
    dx, dy = traction.x[columns] - centroid[0], traction.y[rows] - centroid[1]
    net = np.array([tx.sum(), ty.sum()]) * da
    numbers: dict[str, Any] = {
        "dipole": np.array([np.sum(dx * tx), 0.5 * np.sum(dx * ty + dy * tx), np.sum(dy * ty)]) * da,
        "torque": float(np.sum(dx * ty - dy * tx) * da),
        "force_total": float(np.hypot(tx, ty).sum() * da),
        "traction_rms": float(np.sqrt(np.mean(tx**2 + ty**2))),
        "strain_energy": 0.5
        * da
        * float(np.sum(tx * traction.displacement[0][on] + ty * traction.displacement[1][on])),
        "strain_energy_sd": traction.energy_sd.get(label),
        "covariance": traction.dipole_covariance.get(label),
        "budget": {},
    }
    total = numbers["covariance"]
    p = traction.posterior
    if p is not None and energy is not None:
        total = _from_posterior(traction, label, centroid, energy, shifts, numbers)
    axes = principal_axes(numbers["dipole"])
    covariance = numbers["covariance"]
    trace = np.array([-1.0, 0.0, -1.0])
    return CellDipole(
        cell=label,
        centroid=centroid,
        area=area,
        outline_axis=long_axis,
        dipole=numbers["dipole"],
        covariance=covariance,
        total_covariance=total,
        major=axes.major,
        minor=axes.minor,
        axis=axes.axis,
        axis_sd=None if covariance is None or axes.axis is None else axis_deviation(numbers["dipole"], covariance),
        anisotropy=axes.anisotropy,
        contractile_moment=float(trace @ numbers["dipole"]),
        contractile_moment_sd=None if covariance is None else float(np.sqrt(trace @ covariance @ trace)),
        contractile_moment_total_sd=None if total is None else float(np.sqrt(trace @ total @ trace)),
        net_force=float(np.hypot(*net)),
        torque=numbers["torque"],
        force_total=numbers["force_total"],
        strain_energy=numbers["strain_energy"],
        strain_energy_sd=numbers["strain_energy_sd"],
        traction_peak=float(np.hypot(tx, ty).max()),
        traction_rms=numbers["traction_rms"],
        displacement_peak=float(np.hypot(traction.displacement[0][on], traction.displacement[1][on]).max()),
        budget=numbers["budget"],
    )


def _from_posterior(
    traction: TractionField,
    label: int,
    centroid: NDArray[np.float64],
    energy: NDArray[np.float64],
    shifts: Mapping[str, NDArray[np.float64]],
    numbers: dict[str, Any],
) -> NDArray[np.float64]:
    """Fill in what the posterior knows better than its mean field, and return the total covariance."""
    p = traction.posterior
    if p is None or traction.data is None or traction.solution is None:
        return np.zeros((3, 3))
    f = dipole_functionals(traction, label, centroid)[:3]
    covariance = f @ p.covariance @ f.T
    dipole = f @ p.mean
    numbers["dipole"], numbers["covariance"] = dipole, covariance
    # Strain energy of this cell: half the integral over it of T . u with the whole field's displacement.
    own = np.tile(traction.data.basis.node_labels == label, 2)
    q = 0.25 * (energy * own[:, None] + energy * own[None, :])
    numbers["strain_energy"], numbers["strain_energy_sd"] = mixture_energy(q, traction.solution)
    cells = p.labels == label
    weights = p.basis[cells]
    n = weights.shape[1]
    spread = [
        np.asarray(
            weights.multiply(weights @ p.covariance[i * n : (i + 1) * n, i * n : (i + 1) * n]).sum(axis=1)
        ).ravel()
        for i in range(2)
    ]
    tx, ty = weights @ p.mean[:n], weights @ p.mean[n:]
    da = traction.spacing**2
    numbers["force_total"] = float(_mean_magnitude(tx, ty, 0.5 * (spread[0] + spread[1])).sum() * da)
    numbers["traction_rms"] = float(np.sqrt(np.mean(tx**2 + ty**2 + spread[0] + spread[1])))
    total = covariance.copy()
    trace = np.array([-1.0, 0.0, -1.0])
    numbers["budget"]["images"] = float(trace @ covariance @ trace)
    for name in ("youngs_modulus", "poisson", "thickness", "pixel"):
        if name in shifts:
            change = f @ shifts[name]
            if name == "pixel":
                change = change + 3.0 * dipole * float(shifts["_pixel_relative"][0])
            total += np.outer(change, change)
            numbers["budget"][name] = float((trace @ change) ** 2)
    return np.asarray(total)

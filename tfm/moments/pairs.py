r"""Elastic interaction of two cells in one field, from their whole traction fields and from their tensors alone.

:math:`W_{ab} = \int T_a \cdot u_b\,dA` (= :math:`W_{ba}`, Betti's theorem). With the displacement :math:`u_a` that
cell a
sends, force and torque on b for motion that lowers W are :math:`-\int T_b \cdot \partial_i u_a` and
:math:`-\int [(\hat z \times T_b) \cdot u_a + T_b \cdot ((\hat z \times (x - c_b)) \cdot \nabla) u_a]`.
Passive defects (dead loads) carry the opposite sign.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfm.gel import dipole_interaction, displacement, node_kernel
from tfm.moments.dipole import dipole_functionals
from tfm.moments.energy import energy_matrix, quadratic_moments
from tfm.moments.model import CellDipole, CellPair
from tfm.traction.model import TractionField

__all__ = ["cell_pairs"]

#: A point dipole stands for a cell from this many cell lengths on; nearer, the table says so.
POINT_DIPOLE_LENGTHS = 1.5


def cell_pairs(
    traction: TractionField, dipoles: Sequence[CellDipole], *, noise_energy: float | None = None
) -> tuple[CellPair, ...]:
    """Energy, force on b and torque on b for every pair of cells of the field (a before b in label order).

    Parameters
    ----------
    noise_energy
        J, energy scale of the cells' random motion; None leaves the coupling number unmeasured.
    """
    if len(dipoles) < 2:
        return ()
    kernel = node_kernel(traction.gel, traction.traction.shape[1:], traction.spacing, receiver="average")
    alone = {
        d.cell: displacement(
            traction.gel, traction.traction * (traction.labels == d.cell), traction.spacing, kernel=kernel
        )
        for d in dipoles
    }
    energy = None
    if traction.posterior is not None and traction.data is not None:
        energy = energy_matrix(traction.data, traction)
    return tuple(
        _pair(traction, a, b, alone, energy, noise_energy) for i, a in enumerate(dipoles) for b in dipoles[i + 1 :]
    )


def _pair(
    traction: TractionField,
    a: CellDipole,
    b: CellDipole,
    alone: dict[int, NDArray[np.float64]],
    energy: NDArray[np.float64] | None,
    noise_energy: float | None,
) -> CellPair:
    separation = b.centroid - a.centroid
    distance = float(np.hypot(*separation))
    on_b = traction.labels == b.cell
    tb = traction.traction[:, on_b]
    da = traction.spacing**2
    whole, whole_sd = float(np.sum(tb * alone[a.cell][:, on_b]) * da), None
    joint = None
    if energy is not None and traction.posterior is not None and traction.data is not None:
        nodes = traction.data.basis.node_labels
        is_a, is_b = np.tile(nodes == a.cell, 2), np.tile(nodes == b.cell, 2)
        q = 0.5 * energy * (np.outer(is_a, is_b) + np.outer(is_b, is_a))
        whole, whole_sd = quadratic_moments(q, traction.posterior.mean, traction.posterior.covariance)
        f = np.concatenate([dipole_functionals(traction, d.cell, d.centroid)[:3] for d in (a, b)])
        joint = f @ traction.posterior.covariance @ f.T
    elif a.covariance is not None and b.covariance is not None:
        joint = np.zeros((6, 6))
        joint[:3, :3], joint[3:, 3:] = a.covariance, b.covariance
    point = dipole_interaction(traction.gel, a.dipole, b.dipole, separation[0], separation[1])
    point_sd = None
    if joint is not None:
        g = np.concatenate([np.asarray(point.energy_by_dipole_a), np.asarray(point.energy_by_dipole_b)])
        # Bilinear form: the product of the two errors adds to the delta method where both are large.
        second = np.asarray(
            dipole_interaction(traction.gel, a.dipole, np.eye(3), separation[0], separation[1]).energy_by_dipole_a
        ).T  # d2W / dP_a dP_b: W is bilinear, so unit tensors for b give the columns
        cross = np.zeros((6, 6))
        cross[:3, 3:], cross[3:, :3] = 0.5 * second, 0.5 * second.T
        variance = g @ joint @ g + 2.0 * np.sum((cross @ joint) * (cross @ joint).T)
        point_sd = float(np.sqrt(max(float(variance), 0.0)))
    force, torque = _force_and_torque(traction, alone[a.cell], b, on_b)
    size = max(np.sqrt(a.area), np.sqrt(b.area))
    extras: dict[str, Any] = {"lengths_apart": distance / size}
    notes: tuple[str, ...] = ()
    if distance < POINT_DIPOLE_LENGTHS * size:
        notes = (f"cells are {distance / size:.1f} cell lengths apart: trust energy, not dipole_energy",)
    return CellPair(
        a.cell,
        b.cell,
        distance,
        float(np.arctan2(separation[1], separation[0])),
        whole,
        whole_sd,
        float(np.asarray(point.energy)),
        point_sd,
        force,
        torque,
        None if noise_energy is None else abs(whole) / noise_energy,
        extras,
        notes,
    )


def _force_and_torque(
    traction: TractionField, u_a: NDArray[np.float64], b: CellDipole, on_b: NDArray[np.bool_]
) -> tuple[NDArray[np.float64], float]:
    """-dW/d(position) and -dW/d(angle) of b in the displacement that a sends."""
    da = traction.spacing**2
    tb = traction.traction[:, on_b]
    # d_i u_j at b; a is elsewhere, so its displacement is smooth on the lattice there.
    gradient = np.stack([np.gradient(u_a, traction.spacing, axis=axis, edge_order=2)[:, on_b] for axis in (2, 1)])
    force = -np.einsum("ijk,jk->i", gradient, tb) * da
    rows, columns = np.nonzero(on_b)
    dx, dy = traction.x[columns] - b.centroid[0], traction.y[rows] - b.centroid[1]
    turned = np.stack([-tb[1], tb[0]])  # z x T with z from +x towards +y
    carried = -dy * gradient[0] + dx * gradient[1]
    torque = -float(np.sum(turned * u_a[:, on_b]) + np.sum(tb * carried)) * da
    return force, torque

"""Traction to displacement at points, and at beads between lattice points."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import RectBivariateSpline

from tfm.gel import Gel, SurfaceOperator

__all__ = ["displacement_at", "lattice_work", "surface_displacements"]


def surface_displacements(
    tractions: list[NDArray[np.float64]], spacing: float, gel: Gel, *, margin: int = 0
) -> list[NDArray[np.float64]]:
    """Displacement (m) **at the node centres** of a lattice that reaches ``margin`` nodes beyond each traction's.

    The traction is **bilinear** between the nodes, the lattice aperiodic, and the result exact to rounding: a bilinear
    field is the box of a node convolved with itself, so its displacement at a node is what the gel's kernel gives as
    the mean over a node of a uniform node's displacement.

    Parameters
    ----------
    tractions
        Each ``(2, ny, nx)`` Pa, all on the same lattice.
    spacing
        m, edge of a node.

    Returns
    -------
    For each, ``(2, ny + 2 margin, nx + 2 margin)`` m.
    """
    if not tractions:
        return []
    ny, nx = tractions[0].shape[1:]
    operator = SurfaceOperator(gel, (ny + 2 * margin, nx + 2 * margin), spacing, receiver="average")
    pad = ((0, 0), (margin, margin), (margin, margin))
    return [operator.displacement(np.pad(traction, pad)) for traction in tractions]


def lattice_work(traction: NDArray[np.float64], u: NDArray[np.float64], spacing: float) -> float:
    """Integral of T . u dA (J) for a traction bilinear between nodes and u known at the nodes.

    Every node value of T multiplies the integral of its hat function times u,
    ``d^2 (u + (d^2/12) laplacian u)`` to fourth order in the spacing d.
    """
    padded = np.pad(u, ((0, 0), (1, 1), (1, 1)), mode="edge")
    ring = padded[:, 2:, 1:-1] + padded[:, :-2, 1:-1] + padded[:, 1:-1, 2:] + padded[:, 1:-1, :-2]
    return float((traction * (u + (ring - 4 * u) / 12)).sum()) * spacing**2


def displacement_at(
    u: NDArray[np.float64], origin: float, spacing: float, positions: NDArray[np.float64]
) -> NDArray[np.float64]:
    """``(n, 2)`` values of the lattice field ``u`` at ``positions`` (x, y, same unit as ``origin`` and ``spacing``).

    ``origin`` is the coordinate of the first node on both axes; bicubic spline.

    Examples
    --------
    >>> y, x = np.mgrid[:9, :9].astype(float)
    >>> displacement_at(np.stack([x, y**2]), 0.0, 1.0, np.array([[3.25, 4.5]])).round(6)
    array([[ 3.25, 20.25]])
    """
    y = origin + spacing * np.arange(u.shape[1])
    x = origin + spacing * np.arange(u.shape[2])
    values = [RectBivariateSpline(y, x, part, kx=3, ky=3).ev(positions[:, 1], positions[:, 0]) for part in u]
    return np.stack(values, axis=1)

r"""What is believed of a cell's traction before the beads are seen.

Traction inside one outline is a Matern-3/2 random field (independent for x and y),
:math:`k(r) = a^2 (1 + \sqrt 3 r/\ell)\exp(-\sqrt 3 r/\ell)` (Rasmussen & Williams, Gaussian Processes for Machine
Learning,
2006, eq. 4.17), with its zeroth and first moments **flat**: every dipole is equally likely beforehand, so that a faint
coherent pull is not drawn towards zero. Dividing a Gaussian :math:`N(T; 0, K)` by the density that it gives to the
moments
:math:`F T` leaves the precision :math:`\Lambda = K^{-1} - F^T (F K F^T)^{-1} F`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import linalg

from tfm.traction.lattice import Lattice, NodeBasis

__all__ = ["SHAPES", "CellPrior", "first_moments", "make_prior", "matern", "shape_weight"]

#: Where inside the outline adhesions are looked for: anywhere, or rather in a band along the rim.
SHAPES = ("even", "band")
_FADE = 0.4e-6  # m: in the band, the amplitude grows from the drawn rim over this depth
_BAND = 3.0e-6  # m: width of the band along the rim where most adhesions sit


@dataclass(frozen=True)
class CellPrior:
    """Prior of one cell at unit amplitude.

    Attributes
    ----------
    label
        The cell.
    index
        ``(2 n_l,)`` positions of its coefficients in the whole vector.
    precision
        ``(2 n_l, 2 n_l)`` at amplitude 1 Pa, rank ``2 n_l - 6``.
    rank
        Its rank.
    log_normaliser
        Logarithm of the density's constant at amplitude 1 Pa, without the powers of 2 pi.
    moments
        ``(6, 2 n_l)`` orthonormal rows that span the flat moments; None for a prior without flat directions.
    """

    label: int
    index: NDArray[np.intp]
    precision: NDArray[np.float64]
    rank: int
    log_normaliser: float
    moments: NDArray[np.float64] | None = None


def matern(distance: NDArray[np.float64], length: float) -> NDArray[np.float64]:
    """Matern-3/2 correlation at ``distance`` for the length scale ``length`` (same unit).

    Examples
    --------
    >>> float(matern(np.array(0.0), 2e-6))
    1.0
    """
    s = np.sqrt(3.0) * distance / length
    return np.asarray((1.0 + s) * np.exp(-s))


def first_moments(basis: NodeBasis, lattice: Lattice, label: int) -> NDArray[np.float64]:
    """Rows of zeroth and first moments of one cell, ``(6, 2 n_l)``, in m^2 and m^3.

    In order: integral of T_x, T_y, then of (x - c_x) T_x, (y - c_y) T_x, (x - c_x) T_y, (y - c_y) T_y over the covered
    lattice cells; c is their centroid.
    """
    cells = basis.labels == label
    nodes = np.nonzero(basis.node_labels == label)[0]
    weights = basis.weights[cells][:, nodes]
    x, y = lattice.x[basis.columns[cells]], lattice.y[basis.rows[cells]]
    area = lattice.spacing**2
    m0 = np.asarray(weights.sum(axis=0)).ravel() * area
    mx, my = weights.T @ (x - x.mean()) * area, weights.T @ (y - y.mean()) * area
    zero = np.zeros_like(m0)
    return np.stack(
        [np.concatenate(pair) for pair in ((m0, zero), (zero, m0), (mx, zero), (my, zero), (zero, mx), (zero, my))]
    )


def shape_weight(depth: NDArray[np.float64], shape: str) -> NDArray[np.float64]:
    """Amplitude of the field against the depth below the rim (m), between 0 and 1.

    ``even`` is 1 everywhere; ``band`` rises from the rim over 0.4 um and falls to a tenth towards the middle, because
    adhesions
    gather along the rim (common practice). Neither is true of every cell: results average over both, and their
    difference
    is part of the error bar.

    Examples
    --------
    >>> shape_weight(np.array([0.0, 1e-6, 20e-6]), "band").round(2).tolist()
    [0.24, 0.85, 0.1]
    """
    if shape == "even":
        return np.ones_like(depth)
    d = np.maximum(depth, 0.1e-6)
    return np.asarray((1.0 - np.exp(-d / _FADE) + 0.02) * (0.1 + 0.9 * np.exp(-((d / _BAND) ** 2))))


def make_prior(basis: NodeBasis, lattice: Lattice, *, length: float, shape: str = "even") -> tuple[CellPrior, ...]:
    """The prior of every cell for one correlation length (m) and one of :data:`SHAPES`."""
    result = []
    n = basis.size
    for label in np.unique(basis.node_labels):
        nodes = np.nonzero(basis.node_labels == label)[0]
        r = basis.node_rows[nodes] * lattice.spacing
        c = basis.node_columns[nodes] * lattice.spacing
        k = matern(np.hypot(r[:, None] - r[None], c[:, None] - c[None]), length)
        w = shape_weight(basis.node_depth[nodes] * lattice.spacing, shape)
        k *= w[:, None] * w
        k[np.diag_indices_from(k)] += 1e-8  # keeps the factorisation stable for lengths of many nodes
        factor = linalg.cholesky(k, lower=True)
        inverse = linalg.cho_solve((factor, True), np.eye(nodes.size))
        f = first_moments(basis, lattice, int(label))
        f = f / np.linalg.norm(f, axis=1, keepdims=True)  # scale of F drops out of the precision
        m = nodes.size
        kf = np.hstack([f[:, :m] @ k, f[:, m:] @ k])
        fkf = kf @ f.T
        rank = 2 * m - f.shape[0]
        precision = linalg.block_diag(inverse, inverse) - f.T @ linalg.solve(fkf, f, assume_a="pos")
        log_normaliser = -2.0 * np.log(np.diag(factor)).sum() + 0.5 * np.linalg.slogdet(fkf)[1]
        result.append(
            CellPrior(
                int(label),
                np.concatenate([nodes, nodes + n]),
                0.5 * (precision + precision.T),
                rank,
                float(log_normaliser),
                linalg.qr(f.T, mode="economic")[0].T,
            )
        )
    return tuple(result)

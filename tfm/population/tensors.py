r"""Population of dipole tensors in the cells' own frame, measurement error removed.

A tensor is written as (along, shear, across): P_xx, P_xy, P_yy in axes turned so that x lies along the cell's outline.
Model as in :mod:`tfm.population.random_effects` with 3 x 3 matrices: :math:`y_i \sim N(\mu, \Sigma + S_i)`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import optimize

from tfm.errors import InputError

__all__ = ["TensorPopulation", "rotation_of_tensor", "tensor_draws", "tensor_population", "to_cell_frame"]

#: Below this number of cells the full covariance between cells is estimated by moments, not by likelihood.
_FEWEST_FOR_LIKELIHOOD = 6


@dataclass(frozen=True)
class TensorPopulation:
    """Mean tensor of a population and how tensors differ between cells. N m and (N m)^2; order along, shear, across.

    Attributes
    ----------
    count
        Cells.
    mean
        ``(3,)``.
    mean_covariance
        ``(3, 3)``, error of the mean, spread and measurement included.
    spread
        ``(3, 3)`` covariance between cells, measurement error removed, positive semidefinite; None for one cell.
    naive_spread
        ``(3, 3)`` covariance of the raw tensors, for comparison; None for one cell.
    method
        ``reml``, ``moments`` or ``single``.
    """

    count: int
    mean: NDArray[np.float64]
    mean_covariance: NDArray[np.float64]
    spread: NDArray[np.float64] | None
    naive_spread: NDArray[np.float64] | None
    method: str


def rotation_of_tensor(angle: ArrayLike) -> NDArray[np.float64]:
    """``(..., 3, 3)``: what turning the axes by ``angle`` (rad) does to (P_xx, P_xy, P_yy) of a symmetric tensor.

    Examples
    --------
    >>> (rotation_of_tensor(np.pi / 2) @ np.array([-1.0, 0.0, 0.0])).round(12) + 0.0
    array([ 0.,  0., -1.])
    """
    a = np.asarray(angle, dtype=np.float64)
    c, s = np.cos(a), np.sin(a)
    rows = [[c * c, 2 * c * s, s * s], [-c * s, c * c - s * s, c * s], [s * s, -2 * c * s, c * c]]
    return np.stack([np.stack(row, axis=-1) for row in rows], axis=-2)


def to_cell_frame(
    dipole: ArrayLike, covariance: ArrayLike, outline_axis: ArrayLike
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Tensors ``(n, 3)`` and covariances ``(n, 3, 3)`` in axes along each cell's outline (``outline_axis`` in rad).

    Examples
    --------
    A cell that lies along y and pulls along y pulls along itself:

    >>> along, _ = to_cell_frame([[0.0, 0.0, -1.0]], np.eye(3)[None], [np.pi / 2])
    >>> along.round(12) + 0.0
    array([[-1.,  0.,  0.]])
    """
    turn = rotation_of_tensor(outline_axis)
    p, c = np.asarray(dipole, dtype=np.float64), np.asarray(covariance, dtype=np.float64)
    return np.einsum("nij,nj->ni", turn, p), turn @ c @ np.swapaxes(turn, -1, -2)


def _positive_part(matrix: NDArray[np.float64]) -> NDArray[np.float64]:
    """Nearest positive semidefinite matrix: negative eigenvalues set to 0."""
    values, vectors = np.linalg.eigh(0.5 * (matrix + matrix.T))
    out: NDArray[np.float64] = (vectors * np.clip(values, 0.0, None)) @ vectors.T
    return out


def _weighted_mean(
    y: NDArray[np.float64], s: NDArray[np.float64], sigma: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    w = np.linalg.inv(s + sigma)
    covariance = np.linalg.inv(w.sum(axis=0))
    mean: NDArray[np.float64] = covariance @ np.einsum("nij,nj->i", w, y)
    return mean, covariance


def _reml(y: NDArray[np.float64], s: NDArray[np.float64], start: NDArray[np.float64]) -> NDArray[np.float64]:
    """Between-cell covariance that maximises the restricted likelihood, through its Cholesky factor."""
    index = np.tril_indices(3)
    unit = float(np.sqrt(np.trace(start + s.mean(axis=0)) / 3))

    def sigma_of(p: NDArray[np.float64]) -> NDArray[np.float64]:
        factor = np.zeros((3, 3))
        factor[index] = p * unit
        return factor @ factor.T

    def loss(p: NDArray[np.float64]) -> float:
        sigma = sigma_of(p)
        total = s + sigma
        w = np.linalg.inv(total)
        information = w.sum(axis=0)
        mean = np.linalg.solve(information, np.einsum("nij,nj->i", w, y))
        rest = y - mean
        return float(
            0.5
            * (
                np.linalg.slogdet(total)[1].sum()
                + np.linalg.slogdet(information)[1]
                + np.einsum("ni,nij,nj->", rest, w, rest)
            )
        )

    begin = np.linalg.cholesky(start + 1e-3 * unit**2 * np.eye(3))[index] / unit
    found = optimize.minimize(loss, begin, method="BFGS", options={"gtol": 1e-6})
    return sigma_of(found.x)


def tensor_population(tensors: ArrayLike, covariances: ArrayLike) -> TensorPopulation:
    """Random-effects mean tensor and between-cell covariance.

    Parameters
    ----------
    tensors, covariances
        ``(n, 3)`` N m and ``(n, 3, 3)`` (N m)^2: independent cells, in a common frame (see :func:`to_cell_frame`).

    Returns
    -------
    TensorPopulation
        From six cells on by restricted maximum likelihood; with two to five by moments (sample covariance minus the
        mean measurement covariance, negative eigenvalues set to 0).

    Raises
    ------
    InputError
        For shapes that do not match or values that are not finite.

    Examples
    --------
    >>> y = [[-1.0, 0.0, -0.2], [-1.4, 0.1, -0.3], [-0.8, -0.1, -0.1]]
    >>> result = tensor_population(y, np.tile(1e-4 * np.eye(3), (3, 1, 1)))
    >>> result.method, result.mean.round(3) + 0.0
    ('moments', array([-1.067,  0.   , -0.2  ]))
    """
    y, s = np.asarray(tensors, dtype=np.float64), np.asarray(covariances, dtype=np.float64)
    if y.ndim != 2 or y.shape[1] != 3 or s.shape != (y.shape[0], 3, 3) or y.shape[0] == 0:
        raise InputError(
            f"tensors have shape {y.shape}, covariances {s.shape}",
            code="bad-tensors",
            remedy="give (n, 3) and (n, 3, 3)",
        )
    if not (np.isfinite(y).all() and np.isfinite(s).all()):
        raise InputError("a tensor is not finite", code="bad-tensors", remedy="leave out cells that were not measured")
    if y.shape[0] == 1:
        return TensorPopulation(1, y[0], s[0], None, None, "single")
    naive = np.cov(y, rowvar=False)
    sigma = _positive_part(naive - s.mean(axis=0))
    method = "moments"
    if y.shape[0] >= _FEWEST_FOR_LIKELIHOOD:
        sigma, method = _reml(y, s, sigma), "reml"
    mean, covariance = _weighted_mean(y, s, sigma)
    return TensorPopulation(int(y.shape[0]), mean, covariance, sigma, naive, method)


def tensor_draws(population: TensorPopulation, count: int, rng: np.random.Generator) -> NDArray[np.float64]:
    """``(count, 3)`` N m: tensors of made-up cells of the population, without measurement error.

    Drawn from a normal law of the estimated mean and between-cell covariance.

    Raises
    ------
    InputError
        For a population of one cell, which has no spread.

    Examples
    --------
    >>> population = TensorPopulation(9, np.zeros(3), np.eye(3), np.diag([4.0, 1.0, 0.0]), None, "reml")
    >>> draws = tensor_draws(population, 4000, np.random.default_rng(1))
    >>> draws.std(axis=0).round(1)
    array([2., 1., 0.])
    """
    if population.spread is None:
        raise InputError(
            "one cell has no spread to draw from",
            code="no-spread",
            remedy="measure at least two cells of the condition",
        )
    values, vectors = np.linalg.eigh(population.spread)
    root = vectors * np.sqrt(np.clip(values, 0.0, None))
    draws: NDArray[np.float64] = population.mean + rng.standard_normal((count, 3)) @ root.T
    return draws

r"""The beads' data reduced to what a change of gel needs, so that a hundred gels cost less than one inversion.

Displacement is :math:`d = K(\nu, h)\,c`, and at fixed thickness the kernel times :math:`E/(1+\nu)` is exactly linear
in :math:`\nu` on a half-space (:math:`(1-\nu)\delta_{ij} + \nu r_i r_j/r^2`, Landau & Lifshitz, Theory of Elasticity,
sec. 8) and a smooth function of it on a layer. Interpolating the *response* at a few Poisson ratios therefore makes the
normal equations a polynomial in :math:`\nu`, with coefficients that are products of matrices known once and for all.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import linalg, ndimage

from tfm.errors import ConvergenceError, InputError
from tfm.gel import Gel, displacement, node_kernel
from tfm.traction.bounded import choose_step
from tfm.traction.gaussian import LinearData, balance_rows, nuisance_columns, response_matrix
from tfm.traction.lattice import make_nodes
from tfm.traction.model import TractionField
from tfm.traction.prior import CellPrior, make_prior
from tfm.traction.result import lattice_traction

__all__ = ["GelFamily", "ReducedProblem", "gel_family", "reduce_problem"]

Array = NDArray[np.float64]

#: Coefficients kept for the comparison of gels. Twice as many change neither optimum nor width (docs/gelcheck.md).
MOST_COEFFICIENTS = 450
#: Chi-square (two degrees of freedom) beyond which a datum counts as an outlier: 1 in 400 of good ones.
_OUTLIER = 12.0
#: Logarithm of the factor by which amplitudes may follow a gel.
_REACH = 0.4
#: Edge of the patches that are merged, in lattice cells.
_TILE = 4.0
#: Poisson ratios between which the response is interpolated: two are exact on a half-space.
_NODES_HALF_SPACE = (0.0, 0.5)
_NODES_LAYER = (0.0, 0.25, 0.5)


@dataclass(frozen=True)
class _Prior:
    """One shape of the prior with its amplitudes (in units of strain: traction times (1 + nu) / E)."""

    weight: float
    cells: tuple[CellPrior, ...]
    amplitudes: Array


@dataclass(frozen=True)
class ReducedProblem:
    """Data on coarse nodes, the motions of the frame, the balance and the prior; nothing of it depends on the gel.

    Attributes
    ----------
    data
        The traction's own linearised data on a coarser basis.
    motions
        ``(2 N, k)`` displacement of the data for unit motions of the frame.
    weighted_motions
        ``(2 N, k)``: the same times the precision.
    balance
        ``(n_b, 2 n)``.
    flat
        ``(2 n, k)``: first moments that the prior leaves flat and the balance leaves free.
    priors
        One entry per shape.
    energy
        Weighted sum of squares of the data less the motions.
    """

    data: LinearData
    motions: Array
    weighted_motions: Array
    balance: Array
    flat: Array
    priors: tuple[_Prior, ...]
    energy: float


@dataclass(frozen=True)
class GelFamily:
    """All Poisson ratios at one thickness.

    Attributes
    ----------
    problem
        What was reduced.
    thickness
        m, None = infinitely thick.
    nodes
        ``(m,)`` Poisson ratios at which the response was computed.
    information, score
        ``(m, m, 2 n, 2 n)`` and ``(m, 2 n)``: products of the responses at the nodes, motions eliminated, for
        coefficients in units of strain, (1 + nu) T / E.
    """

    problem: ReducedProblem
    thickness: float | None
    nodes: Array
    information: Array
    score: Array

    def normal(self, poisson: float) -> tuple[Array, Array]:
        """Information ``(2 n, 2 n)`` and score ``(2 n,)`` at a Poisson ratio."""
        weights = np.array(
            [np.prod([(poisson - b) / (a - b) for b in self.nodes if b != a]) for a in self.nodes], dtype=np.float64
        )
        return np.einsum("i,j,ijkl->kl", weights, weights, self.information), weights @ self.score

    def softness(self, poisson: float) -> float:
        """Logarithm of the displacement, in units of its error, for unit first moments of traction.

        ``ln det(M^T I M) / (2 k)`` with M the ``k`` directions that the prior leaves flat and the balance leaves free.
        """
        information, _ = self.normal(poisson)
        return _softness(self.problem, information)

    def log_evidence(self, poisson: float, *, reference: float) -> float:
        """Log evidence of the gel.

        Flat directions of the prior are measured by the displacement that they cause (:meth:`softness`), and so are its
        amplitudes: a gel that is merely softer or stiffer throughout has the same evidence, because images say nothing
        about E. The amplitudes may move by half from what the traction's own evidence chose at the entered gel;
        the maximum is found on a parabola.

        Parameters
        ----------
        poisson
            0 to 0.5.
        reference
            :meth:`softness` of the entered gel.
        """
        information, score = self.normal(poisson)
        soft = _softness(self.problem, information)
        values = [self._evidence_at(information, score, reference - soft + s) for s in (-_REACH, 0.0, _REACH)]
        free = self.problem.flat.shape[1] * soft
        low, middle, high = values
        bend = low - 2.0 * middle + high
        if bend < 0 and abs(low - high) < -2.0 * bend:
            return float(middle - 0.125 * (low - high) ** 2 / bend + free)
        return float(max(values) + free)

    def mean(self, poisson: float, *, reference: float) -> Array:
        """``(2 n,)`` posterior mean of (1 + nu) T / E, averaged over the shapes of the prior."""
        information, score = self.normal(poisson)
        log_factor = reference - _softness(self.problem, information)
        result = np.zeros_like(score)
        for prior in self.problem.priors:
            result += prior.weight * self._solve(information, score, prior, log_factor)[1]
        return result

    def _evidence_at(self, information: Array, score: Array, log_factor: float) -> float:
        found = [self._solve(information, score, p, log_factor)[0] for p in self.problem.priors]
        top = max(found)
        weights = [p.weight for p in self.problem.priors]
        return top + float(np.log(sum(w * np.exp(v - top) for w, v in zip(weights, found, strict=True))))

    def _solve(self, information: Array, score: Array, prior: _Prior, log_factor: float) -> tuple[float, Array]:
        """Log evidence and mean at given amplitudes (Rasmussen & Williams 2006, sec. 2.2), balance by conditioning."""
        amplitudes = prior.amplitudes * np.exp(log_factor)
        s = information.copy()
        value = 0.0
        for cell, a in zip(prior.cells, amplitudes, strict=True):
            s[np.ix_(cell.index, cell.index)] += cell.precision / a**2
            value += cell.log_normaliser - cell.rank * float(np.log(a))
        b = self.problem.balance
        diagonal = np.diag(s)
        if not np.all(diagonal > 0):
            raise _undetermined()
        scale = 1.0 / np.sqrt(diagonal)
        s *= scale
        s *= scale[:, None]
        factor, info = linalg.lapack.dpotrf(s.T, lower=True, overwrite_a=True, clean=False)
        if info != 0:
            raise _undetermined()
        right = np.column_stack([score, b.T]) * scale[:, None]
        half = linalg.solve_triangular(factor, right, lower=True, check_finite=False)
        full = linalg.solve_triangular(factor, half, lower=True, trans="T", check_finite=False) * scale[:, None]
        mean = full[:, 0]
        value += 0.5 * float(half[:, 0] @ half[:, 0]) - 0.5 * self.problem.energy
        value -= float(np.log(np.diag(factor)).sum() - np.log(scale).sum())
        if b.shape[0]:
            spread = b @ full[:, 1:]
            excess = b @ mean
            solved = linalg.solve(spread, excess, assume_a="pos")
            value -= 0.5 * float(np.linalg.slogdet(spread)[1]) + 0.5 * float(excess @ solved)
            mean = mean - full[:, 1:] @ solved
        return value, mean


def _softness(problem: ReducedProblem, information: Array) -> float:
    flat = problem.flat
    sign, value = np.linalg.slogdet(flat.T @ information @ flat)
    if sign <= 0:
        raise _undetermined()
    return float(value / (2.0 * flat.shape[1]))


def _flat_directions(data: LinearData, balance: Array) -> Array:
    """``(2 n, k)``: tractions linear in position inside each cell that the balance allows, orthonormal."""
    basis, n = data.basis, data.basis.size
    columns = []
    for label in np.unique(basis.node_labels):
        on = basis.node_labels == label
        for shape in (np.ones(n), basis.node_columns, basis.node_rows):
            part = np.where(on, shape - (shape[on].mean() if np.ptp(shape[on]) > 0 else 0.0), 0.0)
            columns += [np.concatenate([part, np.zeros(n)]), np.concatenate([np.zeros(n), part])]
    every, _ = np.linalg.qr(np.stack(columns, axis=1))
    if balance.shape[0] == 0:
        return np.asarray(every)
    return np.asarray(every @ linalg.null_space(balance @ every))


def _no_posterior() -> InputError:
    return InputError("this traction has no posterior", code="no-posterior", remedy="use the method bounded or image")


def _undetermined() -> ConvergenceError:
    return ConvergenceError(
        "the beads do not determine the traction inside the outline",
        code="undetermined",
        remedy="check that the outline lies on ground with beads",
    )


def _weigh(precision: Array, block: Array) -> Array:
    """Multiply ``(2 N, m)`` by the 2 x 2 precisions of the data."""
    n = precision.shape[1]
    xx, xy, yy = (p[:, None] for p in precision)
    return np.concatenate([xx * block[:n] + xy * block[n:], xy * block[:n] + yy * block[n:]])


def reduce_problem(
    traction: TractionField, *, most: int = MOST_COEFFICIENTS, merge: bool | None = None
) -> ReducedProblem:
    """What the comparison of gels needs of a traction field.

    Lengths, shapes and relative amplitudes of the prior are those that the traction's own evidence chose; a common
    factor on the amplitudes follows every gel.

    Parameters
    ----------
    traction
        From the methods ``bounded`` or ``image``.
    most
        Largest number of coefficients kept.
    merge
        Whether neighbouring patches are merged; None = for the method ``image``, whose patches are small and many.

    Raises
    ------
    InputError
        When the traction has no posterior (method ``fourier``).
    """
    if traction.data is None or traction.solution is None:
        raise _no_posterior()
    merge = traction.method == "image" if merge is None else merge
    step = max(choose_step(traction.labels, most=most), traction.data.basis.step)
    data = replace(_merged(traction, _TILE if merge else 0.0), basis=make_nodes(traction.labels, step=step))
    strain = (1.0 + traction.gel.poisson) / traction.gel.youngs_modulus
    priors = tuple(
        _Prior(
            c.weight, make_prior(data.basis, data.lattice, length=c.length, shape=c.shape), c.amplitudes * strain
        )
        for c in traction.solution.components
    )  # fmt: skip
    motions = nuisance_columns(data)
    weighted = _weigh(data.precision, motions)
    value = data.value.reshape(-1)
    free = weighted.T @ value
    energy = float(value @ _weigh(data.precision, value[:, None])[:, 0])
    energy -= float(free @ linalg.solve(motions.T @ weighted, free, assume_a="sym"))
    balance = balance_rows(data.basis, data.lattice, data.groups)
    flat = _flat_directions(data, balance)
    return ReducedProblem(data, motions, weighted, balance, flat, priors, energy)


def _merged(traction: TractionField, tile: float) -> LinearData:
    """The data in patches of ``tile`` lattice cells, without those that nothing explains.

    A small patch's sensitivity is a noisy number; where it was underestimated by chance, the patch asks for a
    displacement of many pixels. That hardly moves the traction, but a gel of short range could please such patches one
    by one, and the evidence would choose it. Corrections to the fitted displacement vary little over two patches, so
    it is they that are averaged, at the patches' centre of information. With ``tile`` 0 nothing is merged.
    """
    data, solution = traction.data, traction.solution
    if data is None or solution is None:
        raise _no_posterior()
    kernel = node_kernel(traction.gel, data.lattice.shape, data.lattice.spacing, receiver="point")
    u = displacement(traction.gel, lattice_traction(data, solution.mean), data.lattice.spacing, kernel=kernel)

    def fitted(rows: Array, columns: Array, motions: Array) -> Array:
        here = np.stack([rows, columns])
        elastic = np.stack([ndimage.map_coordinates(part, here, order=1, mode="nearest") for part in u])
        return np.asarray(elastic + (motions @ solution.nuisance).reshape(2, -1))

    left = data.value - fitted(data.rows, data.columns, nuisance_columns(data))
    xx, xy, yy = data.precision
    score = np.stack([xx * left[0] + xy * left[1], xy * left[0] + yy * left[1]])
    member = np.arange(data.rows.size)
    if tile > 0:
        tiles = np.stack([np.floor((data.rows + 0.5) / tile), np.floor((data.columns + 0.5) / tile)])
        member = np.asarray(np.unique(tiles, axis=1, return_inverse=True)[1]).reshape(-1)
    weight = np.maximum(xx + yy, 0.0) + 1e-12 * float(np.max(xx + yy))
    summed = (xx, xy, yy, *score, weight, weight * data.rows, weight * data.columns)
    pxx, pxy, pyy, sx, sy, w, r, c = (np.bincount(member, weights=v).astype(np.float64) for v in summed)
    # Half lattice cells: the kernel is interpolated for few distinct fractions.
    rows, columns = (np.rint(2.0 * v / w) / 2.0 if tile > 0 else u for v, u in ((r, data.rows), (c, data.columns)))
    det, trace = pxx * pyy - pxy**2, pxx + pyy
    solid = (trace > 0) & (det > 1e-3 * trace**2)
    safe = np.where(solid, det, 1.0)
    correction = np.stack([pyy * sx - pxy * sy, pxx * sy - pxy * sx]) / safe
    chi = correction[0] * sx + correction[1] * sy
    # Median of chi-square with two degrees of freedom: 2 ln 2. Where the fit is poor throughout, none is singled out.
    usual = float(np.median(chi[solid])) / (2.0 * np.log(2.0)) if solid.any() else 1.0
    kept = solid & (chi < _OUTLIER * max(1.0, usual))
    merged = replace(
        data, rows=rows[kept], columns=columns[kept], value=np.zeros((2, int(kept.sum()))),
        precision=np.stack([pxx, pxy, pyy])[:, kept],
    )  # fmt: skip
    value = fitted(merged.rows, merged.columns, nuisance_columns(merged)) + correction[:, kept]
    return replace(merged, value=value)


def gel_family(problem: ReducedProblem, thickness: float | None, *, nodes: Sequence[float] | None = None) -> GelFamily:
    """The normal equations of every Poisson ratio at one thickness (m; None = infinitely thick).

    Parameters
    ----------
    nodes
        Poisson ratios at which the response is computed; others are interpolated (Lagrange).
    """
    data = problem.data
    at = nodes if nodes is not None else (_NODES_HALF_SPACE if thickness is None else _NODES_LAYER)
    responses = []
    for nu in at:
        kernel = node_kernel(Gel(1.0 + nu, nu, thickness), data.lattice.shape, data.lattice.spacing, receiver="point")
        responses.append(response_matrix(data, kernel))
    weighted = [_weigh(data.precision, r) for r in responses]
    z, pz = problem.motions, problem.weighted_motions
    zz = z.T @ pz
    moved = [linalg.solve(zz, pz.T @ r, assume_a="sym") for r in responses]
    value = data.value.reshape(-1)
    residual = value - z @ linalg.solve(zz, pz.T @ value, assume_a="sym")
    m, size = len(at), responses[0].shape[1]
    information = np.empty((m, m, size, size))
    for i in range(m):
        for j in range(i + 1):
            block = responses[i].T @ weighted[j] - (pz.T @ responses[i]).T @ moved[j]
            information[i, j], information[j, i] = block, block.T
    score = np.stack([w.T @ residual for w in weighted])
    return GelFamily(problem, thickness, np.asarray(at, dtype=np.float64), information, score)

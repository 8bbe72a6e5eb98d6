r"""Gaussian posterior of the traction and its evidence, for data that are displacements with known precision.

Model: :math:`d = G W c + Z o + e`, :math:`e \sim N(0, P^{-1})`; *c* node coefficients with the prior of
:mod:`tfm.traction.prior`, *o* offset of the frame (flat prior), balance :math:`B c = 0` exactly. Posterior and
evidence are
those of the linear Gaussian model (Rasmussen & Williams 2006, sec. 2.2; MacKay, Neural Computation 4:415, 1992); the
balance
is imposed by conditioning: :math:`p(d \mid Bc=0) = p(d)\,p(Bc=0 \mid d)/p(Bc=0)`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import linalg

from tfm.errors import ConvergenceError
from tfm.gel import Gel, node_kernel
from tfm.traction.lattice import Lattice, NodeBasis
from tfm.traction.prior import CellPrior, make_prior

__all__ = [
    "Component",
    "LinearData",
    "NormalEquations",
    "Solution",
    "balance_rows",
    "best_posterior",
    "fixed_posterior",
    "normal_equations",
    "nuisance_columns",
    "posterior",
    "response_matrix",
]


@dataclass(frozen=True)
class LinearData:
    """Displacements at points of the lattice, and everything needed to ask how well a gel explains them.

    Attributes
    ----------
    lattice, basis
        Where traction lives.
    rows, columns
        ``(N,)`` data positions in lattice units (fractions are interpolated bilinearly in the kernel).
    value
        ``(2, N)`` m.
    precision
        ``(3, N)`` 1/m^2: xx, xy, yy of each datum's inverse covariance.
    groups
        Labels that balance together; a group that is cut by the image's edge is absent.
    nuisance
        Which motions of the stressed frame are estimated: ``offset`` (always), ``rotation``, ``scale``.
    weighted
        ``(2, N)`` 1/m: precision times value where it is known better than the value itself (a patch whose precision
        cannot be inverted still pulls); None = multiply them.
    """

    lattice: Lattice
    basis: NodeBasis
    rows: NDArray[np.float64]
    columns: NDArray[np.float64]
    value: NDArray[np.float64]
    precision: NDArray[np.float64]
    groups: tuple[tuple[int, ...], ...]
    nuisance: tuple[str, ...] = ("offset",)
    weighted: NDArray[np.float64] | None = None

    @property
    def push(self) -> NDArray[np.float64]:
        """``(2 N,)`` 1/m: precision times value, all x then all y."""
        if self.weighted is not None:
            return self.weighted.reshape(-1)
        return _weigh(self.precision, self.value.reshape(-1))


@dataclass(frozen=True)
class NormalEquations:
    """Sufficient statistics with the nuisance motions eliminated.

    ``information`` ``(2 n, 2 n)`` 1/Pa^2, ``score`` ``(2 n,)`` 1/Pa, ``energy`` = weighted sum of squares left when the
    traction is 0, ``balance`` ``(n_b, 2 n)``; ``response`` ``(2 N, 2 n)`` m/Pa maps coefficients to data, ``motions``
    ``(2 N, k)`` the frame's motions; ``motion_solver`` ``(k, 1 + 2 n)`` gives the motions that go with coefficients
    ``c`` as
    ``motion_solver @ [1, c]``; ``count`` = number of data less the motions.
    """

    information: NDArray[np.float64]
    score: NDArray[np.float64]
    energy: float
    balance: NDArray[np.float64]
    response: NDArray[np.float64]
    motions: NDArray[np.float64]
    motion_solver: NDArray[np.float64]
    count: int


@dataclass(frozen=True)
class Component:
    """Posterior under one shape and correlation length of the prior; ``weight`` is its share in the mixture."""

    weight: float
    shape: str
    length: float
    amplitudes: NDArray[np.float64]
    mean: NDArray[np.float64]
    covariance: NDArray[np.float64]
    log_evidence: float


@dataclass(frozen=True)
class Solution:
    """Posterior, averaged over the shapes of the prior.

    Attributes
    ----------
    mean, covariance
        ``(2 n,)`` Pa and ``(2 n, 2 n)`` Pa^2 of the mixture: the spread between its components is part of the
        covariance.
    nuisance
        Estimated offset (m), rotation (rad) and scale.
    log_evidence
        Natural logarithm of the mixture's evidence, up to a constant that depends on data and outlines but not on gel,
        amplitude, length or shape.
    components
        What was averaged.
    chi_square, degrees
        Misfit and its expectation.
    iterations
        Evaluations of the posterior that the prior's strength took.
    profile
        Log evidence by shape and correlation length (m), as far as it was searched.
    """

    mean: NDArray[np.float64]
    covariance: NDArray[np.float64]
    nuisance: NDArray[np.float64]
    log_evidence: float
    components: tuple[Component, ...]
    chi_square: float
    degrees: float
    iterations: int = 0
    profile: tuple[tuple[str, float, float], ...] = ()


def _shifted(kernel: NDArray[np.float64], fr: float, fc: float) -> NDArray[np.float64]:
    """Kernel at lattice offsets plus a fraction, by bilinear interpolation."""
    if fr:
        kernel = (1 - fr) * kernel + fr * np.concatenate([kernel[:, 1:], kernel[:, -1:]], axis=1)
    if fc:
        kernel = (1 - fc) * kernel + fc * np.concatenate([kernel[:, :, 1:], kernel[:, :, -1:]], axis=2)
    return kernel


def response_matrix(data: LinearData, kernel: NDArray[np.float64]) -> NDArray[np.float64]:
    """``(2 N, 2 n)`` m/Pa: displacement of every datum (all x, then all y) for every coefficient."""
    basis, shape = data.basis, data.lattice.shape
    n_data, n = data.rows.size, basis.size
    result = np.empty((2 * n_data, 2 * n))
    base_r, base_c = np.floor(data.rows).astype(np.intp), np.floor(data.columns).astype(np.intp)
    frac = np.stack([data.rows - base_r, data.columns - base_c]).round(6)
    weights_t = basis.weights.T.tocsr()
    width = kernel.shape[2]
    for fr, fc in np.unique(frac, axis=1).T:
        members = np.nonzero((frac[0] == fr) & (frac[1] == fc))[0]
        flat = np.ascontiguousarray(_shifted(kernel, float(fr), float(fc))).reshape(3, -1)
        # Chunks keep the gathered table small: 4e6 elements are 32 MB.
        chunk = max(1, int(4e6 / basis.rows.size))
        for start in range(0, members.size, chunk):
            part = members[start : start + chunk]
            where = (base_r[part][None, :] - basis.rows[:, None] + shape[0] - 1) * width + (
                base_c[part][None, :] - basis.columns[:, None] + shape[1] - 1
            )
            xx, xy, yy = (np.asarray(weights_t @ flat[i][where]).T for i in range(3))
            result[part, :n], result[part, n:] = xx, xy
            result[part + n_data, :n], result[part + n_data, n:] = xy, yy
    return result


def nuisance_columns(data: LinearData) -> NDArray[np.float64]:
    """``(2 N, k)``: displacement of the data for unit offset x, offset y and, on request, rotation and scale."""
    n = data.rows.size
    one, zero = np.ones(n), np.zeros(n)
    # Rotation and scale act about the middle of the lattice, so that they stay nearly independent of the offset.
    x = (data.columns - 0.5 * (data.lattice.shape[1] - 1)) * data.lattice.spacing
    y = (data.rows - 0.5 * (data.lattice.shape[0] - 1)) * data.lattice.spacing
    columns = [np.concatenate([one, zero]), np.concatenate([zero, one])]
    if "rotation" in data.nuisance:
        columns.append(np.concatenate([-y, x]))
    if "scale" in data.nuisance:
        columns.append(np.concatenate([x, y]))
    return np.stack(columns, axis=1)


def _weigh(precision: NDArray[np.float64], block: NDArray[np.float64]) -> NDArray[np.float64]:
    """Multiply ``(2 N, ...)`` (all x, then all y) by the 2 x 2 precisions.

    No square root is taken: a patch without a bead may carry a slightly indefinite precision, because the product of
    two
    noisy gradients scatters around zero; clipping it would bias the sum.
    """
    n = precision.shape[1]
    tail = (slice(None),) + (None,) * (block.ndim - 1)
    pxx, pxy, pyy = (precision[i][tail] for i in range(3))
    out = np.empty_like(block)
    np.multiply(pxx, block[:n], out=out[:n])
    np.multiply(pyy, block[n:], out=out[n:])
    out[:n] += pxy * block[n:]
    out[n:] += pxy * block[:n]
    return out


def balance_rows(basis: NodeBasis, lattice: Lattice, groups: Sequence[Sequence[int]]) -> NDArray[np.float64]:
    """``(3 n_groups, 2 n)``: net force x, y and torque of each group, scaled to rows of unit length."""
    n, area = basis.size, lattice.spacing**2
    rows = []
    for group in groups:
        cells = np.isin(basis.labels, group)
        weights = basis.weights[cells]
        x, y = lattice.x[basis.columns[cells]], lattice.y[basis.rows[cells]]
        m0 = np.asarray(weights.sum(axis=0)).ravel() * area
        mx, my = weights.T @ (x - x.mean()) * area, weights.T @ (y - y.mean()) * area
        zero = np.zeros(n)
        rows += [np.concatenate([m0, zero]), np.concatenate([zero, m0]), np.concatenate([-my, mx])]
    if not rows:
        return np.zeros((0, 2 * n))
    stacked = np.stack(rows)
    return np.asarray(stacked / np.linalg.norm(stacked, axis=1, keepdims=True))


def normal_equations(data: LinearData, gel: Gel, *, response: NDArray[np.float64] | None = None) -> NormalEquations:
    """Reduce data and gel to the normal equations of the traction coefficients.

    ``response`` may be passed again while the gel and the data positions stay the same (Gauss-Newton steps).
    """
    if response is None:
        kernel = node_kernel(gel, data.lattice.shape, data.lattice.spacing, receiver="point")
        response = response_matrix(data, kernel)
    z = nuisance_columns(data)
    d = data.value.reshape(-1)
    px, pz, pd = _weigh(data.precision, response), _weigh(data.precision, z), data.push
    information, score, energy = response.T @ px, response.T @ pd, float(d @ pd)
    # Eliminate the motions of the frame: their flat prior leaves the Schur complement.
    zz, zx, zd = z.T @ pz, pz.T @ response, z.T @ pd
    solved = linalg.solve(zz, np.column_stack([zd, zx]), assume_a="sym")
    information -= zx.T @ solved[:, 1:]
    score -= zx.T @ solved[:, 0]
    energy -= float(zd @ solved[:, 0])
    solved[:, 1:] *= -1.0
    return NormalEquations(
        0.5 * (information + information.T),
        score,
        energy,
        balance_rows(data.basis, data.lattice, data.groups),
        response,
        z,
        solved,
        2 * data.rows.size - z.shape[1],
    )


def posterior(
    normal: NormalEquations, prior: Sequence[CellPrior], amplitudes: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64], float, NDArray[np.float64]]:
    """Mean, covariance, log evidence and each cell's number of well-determined coefficients at a given prior strength.

    Raises
    ------
    ConvergenceError
        When the data do not determine the flat directions (no data near the outline).
    """
    s = normal.information.copy()
    for cell, a in zip(prior, amplitudes, strict=True):
        s[np.ix_(cell.index, cell.index)] += cell.precision / a**2
    diagonal = np.diag(s)
    if not np.all(diagonal > 0):
        raise _undetermined()
    scale = 1.0 / np.sqrt(diagonal)
    s *= scale
    s *= scale[:, None]
    # A factor of a symmetric matrix in C order is the transposed factor in Fortran order: no copy is made.
    factor, info = linalg.lapack.dpotrf(s.T, lower=True, overwrite_a=True, clean=False)
    if info != 0:
        raise _undetermined()
    log_det = 2.0 * np.log(np.diag(factor)).sum() - 2.0 * np.log(scale).sum()
    inverse, info = linalg.lapack.dpotri(factor, lower=True, overwrite_c=True)
    if info != 0:
        raise _undetermined()
    covariance = np.tril(inverse)
    covariance += np.tril(covariance, -1).T
    covariance *= scale
    covariance *= scale[:, None]
    mean = covariance @ normal.score
    log_evidence = -0.5 * normal.energy + 0.5 * float(normal.score @ mean) - 0.5 * log_det
    b = normal.balance
    if b.shape[0]:
        cb = covariance @ b.T
        bcb = b @ cb
        gain = linalg.solve(bcb, cb.T, assume_a="pos").T
        excess = b @ mean
        log_evidence -= 0.5 * np.linalg.slogdet(bcb)[1]
        log_evidence -= 0.5 * float(excess @ linalg.solve(bcb, excess, assume_a="pos"))
        mean = mean - gain @ excess
        covariance -= gain @ cb.T
        # A second pass takes the balance from 1e-9 to rounding.
        mean -= gain @ (b @ mean)
    determined = np.empty(len(prior))
    for i, (cell, a) in enumerate(zip(prior, amplitudes, strict=True)):
        block = covariance[np.ix_(cell.index, cell.index)]
        determined[i] = cell.rank - float(np.sum(cell.precision * block)) / a**2
        log_evidence += cell.log_normaliser - cell.rank * np.log(a)
    return mean, covariance, float(log_evidence), determined


def _undetermined() -> ConvergenceError:
    return ConvergenceError(
        "the beads do not determine the traction inside the outline",
        code="undetermined",
        remedy="check that the outline lies on ground with beads",
    )


def _strengthen(
    normal: NormalEquations, prior: Sequence[CellPrior], start: NDArray[np.float64], tolerance: float
) -> tuple[Component, int]:
    """Amplitude of every cell by maximum evidence (MacKay's fixed point, extrapolated in log amplitude)."""
    log_a = np.log(start)
    ceiling = np.full(log_a.shape, np.inf)
    old_step: NDArray[np.float64] | None = None
    found: Component | None = None
    for iteration in range(1, 31):
        try:
            mean, covariance, log_evidence, determined = posterior(normal, prior, np.exp(log_a))
        except ConvergenceError:
            # So weak a prior that the beads do not determine the rest: step back, and never that far again.
            if iteration > 8:
                raise
            ceiling = log_a - 0.5
            log_a = log_a - 1.5
            old_step = None
            continue
        found = Component(1.0, "", 0.0, np.exp(log_a), mean, covariance, log_evidence)
        size = np.array([float(mean[c.index] @ (c.precision @ mean[c.index])) for c in prior])
        target = 0.5 * np.log(np.maximum(size, 1e-300) / np.maximum(determined, 0.5))
        step = np.minimum(np.maximum(target, _faintest(prior, mean)), ceiling) - log_a
        if np.all(np.abs(step) < tolerance):
            break
        if old_step is None:
            move = step
        else:  # Aitken: the fixed point contracts slowly when few coefficients are determined
            rate = np.clip(step / np.where(np.abs(old_step) > 1e-12, old_step, 1.0), -0.5, 0.7)
            move = step / (1.0 - rate)
        old_step = step
        log_a = np.minimum(log_a + np.clip(move, -1.5, 1.5), ceiling)
    if found is None:
        raise _undetermined()
    return found, iteration


def _faintest(prior: Sequence[CellPrior], mean: NDArray[np.float64]) -> NDArray[np.float64]:
    """Log of the smallest amplitude that is believed of each cell.

    The evidence of a faint cell has its maximum at no structure at all, a traction that only grows outwards from the
    middle.
    Real cells pull at spots, so the rest is at least 2.5 times as strong as the smoothest traction with the same
    moments (on
    invented cells with spots of 1-8 um^2 well-determined amplitudes are 2 to 5 times its root mean square).
    """
    smooth = [
        1e-30 if c.moments is None else np.sqrt(np.sum((c.moments @ mean[c.index]) ** 2) / c.index.size) for c in prior
    ]
    return np.log(2.5 * np.maximum(smooth, 1e-30))


def fixed_posterior(
    data: LinearData,
    normal: NormalEquations,
    components: Sequence[Component],
    *,
    amplitude_factor: float = 1.0,
    priors: dict[tuple[str, float], tuple[CellPrior, ...]] | None = None,
) -> Solution:
    """Posterior with lengths, shapes, amplitudes (times a factor) and weights taken over from ``components``."""
    found = []
    cache = {} if priors is None else priors
    for c in components:
        key = (c.shape, c.length)
        if key not in cache:
            cache[key] = make_prior(data.basis, data.lattice, length=c.length, shape=c.shape)
        prior = cache[key]
        amplitudes = c.amplitudes * amplitude_factor
        mean, covariance, log_evidence, _ = posterior(normal, prior, amplitudes)
        found.append(replace(c, amplitudes=amplitudes, mean=mean, covariance=covariance, log_evidence=log_evidence))
    return _mixture(normal, found, len(found), ())


def best_posterior(
    data: LinearData,
    normal: NormalEquations,
    *,
    start: Sequence[Component],
    lengths: Sequence[float],
    tolerance: float = 0.03,
    priors: dict[tuple[str, float], tuple[CellPrior, ...]] | None = None,
) -> Solution:
    """Posterior at the amplitude and correlation length of highest evidence, averaged over the shapes in ``start``.

    Parameters
    ----------
    start
        One component per shape: its ``length`` and ``amplitudes`` are where the search begins.
    lengths
        m, ascending: correlation lengths that may be chosen.
    priors
        Cache of what does not depend on the data.
    """
    cache = {} if priors is None else priors
    found: list[Component] = []
    profile: list[tuple[str, float, float]] = []
    evaluations = 0
    for begin in start:
        amplitudes = begin.amplitudes
        done: dict[int, Component] = {}
        best = int(np.argmin(np.abs(np.log(np.asarray(lengths) / begin.length))))
        queue = [best]
        while queue:
            i = queue.pop()
            key = (begin.shape, lengths[i])
            if key not in cache:
                cache[key] = make_prior(data.basis, data.lattice, length=lengths[i], shape=begin.shape)
            component, count = _strengthen(normal, cache[key], amplitudes, tolerance)
            evaluations += count
            amplitudes = component.amplitudes
            done[i] = replace(component, shape=begin.shape, length=lengths[i], weight=1.0 / len(start))
            best = max(done, key=lambda j: done[j].log_evidence + _length_belief(done[j].length))
            queue = [j for j in (best + 1, best - 1) if 0 <= j < len(lengths) and j not in done]
        found.append(done[best])
        profile += [(begin.shape, lengths[i], c.log_evidence) for i, c in sorted(done.items())]
    return _mixture(normal, found, evaluations, tuple(profile))


def _length_belief(length: float) -> float:
    """Log prior of the correlation length: adhesions are one to a few um wide (common practice), log-normal, 1 um x/:
    1.5."""
    return float(-0.5 * (np.log(length / 1.0e-6) / np.log(1.5)) ** 2)


def _mixture(
    normal: NormalEquations, found: Sequence[Component], evaluations: int, profile: tuple[tuple[str, float, float], ...]
) -> Solution:
    # Shapes weigh alike: their evidence is decisive only if one of them were true, and none is.
    weights = np.array([c.weight for c in found])
    mean = np.einsum("k,ki->i", weights, np.stack([c.mean for c in found]))
    covariance = np.zeros_like(found[0].covariance)
    for c in found:
        away = c.mean - mean
        covariance += c.weight * c.covariance
        covariance += c.weight * np.outer(away, away)
    chi_square = normal.energy - 2.0 * float(mean @ normal.score) + float(mean @ (normal.information @ mean))
    # Expected misfit: data minus what the fit has absorbed, trace(information covariance).
    absorbed = float(np.sum(normal.information * covariance))
    evidence = np.array([c.log_evidence for c in found])
    top = evidence.max()
    return Solution(
        mean,
        covariance,
        normal.motion_solver[:, 0] + normal.motion_solver[:, 1:] @ mean,
        float(top + np.log(np.sum(weights * np.exp(evidence - top)))),
        tuple(found),
        chi_square,
        normal.count - absorbed,
        evaluations,
        profile,
    )

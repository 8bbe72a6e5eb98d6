r"""What an evidence surface says about the entered Poisson ratio and thickness: best values, 95 % intervals, verdict.

The intervals hold the stated probability at the highest density (Box & Tiao, Bayesian Inference in Statistical
Analysis, 1973, sec. 2.8), so that they can end at the limits nu = 0.5 and infinite thickness, where a central interval
never would.

Beliefs that go in. For the interval of nu: nu uniform from 0 to 0.5; the thickness as entered with its
``thickness_sd``, at least 10 % (common practice for a focus measurement), or, without an entered one,
ln(1 + 40 um / h) uniform from 5 um to infinite. For the interval of the thickness: the same uniform belief, whatever
was entered; nu uniform, or as entered where a ``poisson_sd`` says how well it is known.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tfm.errors import InputError
from tfm.gel import Gel
from tfm.gelcheck.surface import coordinate_of, thickness_of

__all__ = ["GelEstimate", "Interval", "estimate_gel", "highest_density", "pooled_log_evidence", "verdict_of"]

Array = NDArray[np.float64]

#: An entered value outside the region of this probability is contradicted, outside 95 % doubtful.
CONTRADICTED = 0.997
#: An interval of the Poisson ratio wider than this says nothing of use.
WIDEST = 0.35
#: m: a thicker gel differs from an infinitely thick one by less than anything measures (as the cube of length over h).
THICK = 0.8e-3
#: The log evidence of the thickness is divided by this. It hangs on how displacement fades far from the cell, where the
#: model of the noise is at its weakest; calibrated on invented fields (docs/gelcheck.md): 91 % were covered without.
THICKNESS_TEMPER = 1.4
_LEAST_THICKNESS_SD = 0.10


@dataclass(frozen=True)
class Interval:
    """Most probable value, 95 % region of highest density, and the probability of values denser than the entered one.

    That ``surprise`` is between 0 (the entered value is the most probable) and 1 (impossible).
    """

    best: float
    low: float
    high: float
    surprise: float


@dataclass(frozen=True)
class GelEstimate:
    """Poisson ratio and thickness (m, infinite allowed) by the evidence of one or several fields.

    ``poisson_density`` ``(nnu,)`` and ``thickness_density`` ``(nx,)`` are marginal densities over the Poisson ratio and
    the thickness coordinate, highest value 1; ``poisson_mean`` and ``poisson_sd`` are moments of the first.
    """

    poisson: Interval
    thickness: Interval
    poisson_mean: float
    poisson_sd: float
    poisson_density: Array
    thickness_density: Array
    verdict: str


def highest_density(grid: Array, density: Array, entered: float, *, probability: float = 0.95) -> Interval:
    """Mode, interval of highest density and surprise of ``entered`` for a density on an even grid.

    Examples
    --------
    >>> x = np.linspace(-8, 8, 3201)
    >>> found = highest_density(x, np.exp(-0.5 * x**2), 1.959964)
    >>> round(found.low, 2), round(found.high, 2), round(found.surprise, 2)
    (-1.96, 1.96, 0.95)
    """
    weight = density.copy()
    # Trapezoid: the end points of the grid count half.
    weight[0] *= 0.5
    weight[-1] *= 0.5
    weight /= weight.sum()
    order = np.argsort(-density, kind="stable")
    total = np.cumsum(weight[order])
    inside = order[: int(np.searchsorted(total, probability)) + 1]
    here = float(np.interp(entered, grid, density))
    surprise = float(weight[density > here * (1.0 + 1e-12)].sum())
    return Interval(float(grid[np.argmax(density)]), float(grid[inside.min()]), float(grid[inside.max()]), surprise)


def pooled_log_evidence(surfaces: Sequence[Array]) -> Array:
    """Sum of log evidence over fields that share a gel.

    Raises
    ------
    InputError
        Without a surface, or for surfaces on different grids.
    """
    if not surfaces:
        raise InputError("no evidence to pool", code="nothing-to-pool", remedy="measure a field first")
    if len({s.shape for s in surfaces}) != 1:
        raise InputError(
            "evidence of different thicknesses cannot be pooled", code="unlike-gels", remedy="pool fields of one gel"
        )
    total = np.sum(surfaces, axis=0)
    return np.asarray(total - total.max())


def estimate_gel(coordinate: Array, poisson: Array, log_evidence: Array, gel: Gel) -> GelEstimate:
    """Marginal densities, intervals and verdict.

    Parameters
    ----------
    coordinate, poisson
        ``(nx,)`` and ``(nnu,)`` of the surface.
    log_evidence
        ``(nx, nnu)``.
    gel
        As entered.
    """
    joint = np.exp((log_evidence - log_evidence.max()) / THICKNESS_TEMPER)
    by_thickness = _thickness_belief(coordinate, gel)
    by_poisson = np.ones_like(poisson)
    if gel.poisson_sd > 0:
        by_poisson = np.exp(-0.5 * ((poisson - gel.poisson) / gel.poisson_sd) ** 2)
    # The belief about the thickness is added as a logarithm: where it and the evidence disagree, neither may vanish.
    both = log_evidence + by_thickness[:, None]
    nu = np.exp(both - both.max()).sum(axis=0)
    x = (joint * by_poisson).sum(axis=1)
    nu, x = nu / nu.max(), x / x.max()
    of_nu = highest_density(poisson, nu, gel.poisson)
    of_x = highest_density(coordinate, x, coordinate_of(gel.thickness))
    best, least = (0.0 if v < coordinate_of(THICK) else v for v in (of_x.best, of_x.low))
    of_h = Interval(thickness_of(best), thickness_of(of_x.high), thickness_of(least), of_x.surprise)
    mean = float(np.average(poisson, weights=nu))
    sd = float(np.sqrt(np.average((poisson - mean) ** 2, weights=nu)))
    return GelEstimate(of_nu, of_h, mean, sd, nu, x, verdict_of(of_nu, of_h))


def verdict_of(poisson: Interval, thickness: Interval) -> str:
    """The rule, in this order.

    ``contradicted``: the entered Poisson ratio or thickness lies outside the region that holds 99.7 % of its
    probability. ``doubtful``: one of them lies outside 95 %. ``cannot tell``: neither, but the interval of the Poisson
    ratio is wider than 0.35 of the 0.5 that are possible. ``agrees``: otherwise.

    Examples
    --------
    >>> verdict_of(Interval(0.45, 0.40, 0.5, 0.2), Interval(np.inf, 40e-6, np.inf, 0.1))
    'agrees'
    """
    surprise = max(poisson.surprise, thickness.surprise)
    if surprise > CONTRADICTED:
        return "contradicted"
    if surprise > 0.95:
        return "doubtful"
    return "cannot tell" if poisson.high - poisson.low > WIDEST else "agrees"


def _thickness_belief(coordinate: Array, gel: Gel) -> Array:
    """Logarithm of the belief over the coordinate, for the interval of the Poisson ratio."""
    if gel.thickness is None:
        return np.zeros_like(coordinate)
    spread = max(gel.thickness_sd / gel.thickness, _LEAST_THICKNESS_SD)
    h = np.array([thickness_of(float(x)) for x in coordinate[1:]])
    # Log-normal in h; the density in the coordinate carries |d ln h / dx| = (h + 40 um) / 40 um.
    log_h = -0.5 * (np.log(h / gel.thickness) / spread) ** 2 + np.log1p(h / 40e-6)
    return np.concatenate([[-np.inf], log_h])

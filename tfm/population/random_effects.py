r"""Population mean and between-cell spread with the measurement error taken out.

Model: :math:`y_i = \mu + b_i + e_i`, :math:`b_i \sim (0, \tau^2)` between cells, :math:`e_i \sim N(0, v_i)` measurement
with known variance. The naive spread of the :math:`y_i` contains both; a mechanical model wants :math:`\tau` alone.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import optimize, stats

from tfm.errors import InputError

__all__ = ["PopulationEstimate", "checked_estimates", "random_effects"]

_METHODS = ("reml", "moments")


@dataclass(frozen=True)
class PopulationEstimate:
    """Mean of a population and the spread between its members. In the unit of the estimates.

    Attributes
    ----------
    count
        Number of independent members.
    mean, mean_sd
        Random-effects mean and its standard deviation (Hartung-Knapp where there are two or more members).
    mean_low, mean_high
        95 % interval of the mean, Student's t with ``count - 1`` degrees of freedom; None for one member.
    spread
        Between-member standard deviation, measurement error removed; None for one member.
    spread_low, spread_high
        95 % interval of the spread (Q profile); None for one member, or ``spread_high`` where it has no bound.
    naive_spread
        Standard deviation of the raw estimates, measurement error included, for comparison; None for one member.
    heterogeneity
        Share of the raw variance that is real, 0..1 (I squared); None for one member.
    method
        ``reml`` or ``moments``.
    """

    count: int
    mean: float
    mean_sd: float
    mean_low: float | None
    mean_high: float | None
    spread: float | None
    spread_low: float | None
    spread_high: float | None
    naive_spread: float | None
    heterogeneity: float | None
    method: str


def checked_estimates(estimates: ArrayLike, variances: ArrayLike) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Finite estimates and positive variances of one length.

    Raises
    ------
    InputError
        Naming what is wrong.
    """
    y = np.atleast_1d(np.asarray(estimates, dtype=np.float64))
    v = np.atleast_1d(np.asarray(variances, dtype=np.float64))
    if y.ndim != 1 or y.shape != v.shape or y.size == 0:
        raise InputError(
            f"estimates have shape {y.shape}, variances {v.shape}",
            code="bad-estimates",
            remedy="give one of each per cell",
        )
    if not (np.isfinite(y).all() and np.isfinite(v).all() and (v > 0).all()):
        raise InputError(
            "an estimate is not finite or a variance is not positive",
            code="bad-estimates",
            remedy="leave out cells that were not measured",
        )
    return y, v


def _weighted(y: NDArray[np.float64], v: NDArray[np.float64], tau2: float) -> tuple[float, float]:
    """Inverse-variance mean and Cochran's Q at a given between-member variance."""
    w = 1.0 / (v + tau2)
    mean = float((w * y).sum() / w.sum())
    return mean, float((w * (y - mean) ** 2).sum())


def _tau2_moments(y: NDArray[np.float64], v: NDArray[np.float64]) -> float:
    """DerSimonian & Laird, Controlled Clinical Trials 7:177, 1986, eq. 8."""
    w = 1.0 / v
    _, q = _weighted(y, v, 0.0)
    scale = w.sum() - (w**2).sum() / w.sum()
    return max(0.0, float((q - (y.size - 1)) / scale))


def _tau2_reml(y: NDArray[np.float64], v: NDArray[np.float64]) -> float:
    """Maximum of the restricted likelihood (Viechtbauer, J Educ Behav Stat 30:261, 2005)."""

    def loss(tau2: float) -> float:
        w = 1.0 / (v + tau2)
        _, q = _weighted(y, v, tau2)
        return float(0.5 * (np.log(v + tau2).sum() + np.log(w.sum()) + q))

    top = 4.0 * float(y.var(ddof=1)) + float(v.max())
    # The likelihood may have its maximum at 0 or a second, local one: look along a grid before refining.
    grid = np.concatenate([[0.0], np.geomspace(1e-6 * top, top, 60)])
    values = [loss(t) for t in grid]
    best = int(np.argmin(values))
    low, high = grid[max(best - 1, 0)], grid[min(best + 1, grid.size - 1)]
    found = optimize.minimize_scalar(loss, bounds=(low, high), method="bounded", options={"xatol": 1e-10 * top})
    return 0.0 if values[0] <= found.fun else float(found.x)


def _q_profile(y: NDArray[np.float64], v: NDArray[np.float64]) -> tuple[float, float | None]:
    """95 % interval of tau: where Q(tau^2) equals the chi-square quantiles (Viechtbauer, Stat Med 26:37, 2007)."""
    quantiles = stats.chi2.ppf([0.975, 0.025], y.size - 1)

    def solve(target: float) -> float | None:
        if _weighted(y, v, 0.0)[1] <= target:
            return 0.0
        top = max(float(y.var(ddof=1)), float(v.max()))
        for _ in range(60):
            if _weighted(y, v, top)[1] < target:
                return float(optimize.brentq(lambda t: _weighted(y, v, t)[1] - target, 0.0, top, xtol=1e-14 * top))
            top *= 2.0
        return None

    low, high = solve(float(quantiles[0])), solve(float(quantiles[1]))
    return float(np.sqrt(low or 0.0)), None if high is None else float(np.sqrt(high))


def random_effects(estimates: ArrayLike, variances: ArrayLike, *, method: str = "reml") -> PopulationEstimate:
    """Random-effects mean and between-member spread of a scalar.

    Parameters
    ----------
    estimates, variances
        ``(k,)`` each: one independent member, and the variance of its measurement.
    method
        ``reml`` or ``moments`` (DerSimonian & Laird) for the between-member variance.

    Returns
    -------
    PopulationEstimate
        The mean's standard deviation follows Hartung & Knapp (Stat Med 20:3875, 2001), which keeps its coverage for a
        handful of members, never narrower than the plain one.

    Raises
    ------
    InputError
        For arrays that do not match, values that are not finite, variances that are not positive, an unknown method.

    Examples
    --------
    >>> result = random_effects([1.0, 2.0, 3.0, 2.2], [0.01, 0.01, 0.01, 0.01])
    >>> round(result.mean, 3), round(result.spread, 3), round(result.naive_spread, 3)
    (2.05, 0.816, 0.823)
    """
    if method not in _METHODS:
        raise InputError(f"method '{method}' is unknown", code="bad-method", remedy=f"choose {' or '.join(_METHODS)}")
    y, v = checked_estimates(estimates, variances)
    if y.size == 1:
        return PopulationEstimate(
            1, float(y[0]), float(np.sqrt(v[0])), None, None, None, None, None, None, None, method
        )  # fmt: skip
    tau2 = _tau2_reml(y, v) if method == "reml" else _tau2_moments(y, v)
    mean, q = _weighted(y, v, tau2)
    plain = 1.0 / (1.0 / (v + tau2)).sum()
    mean_sd = float(np.sqrt(plain * max(1.0, q / (y.size - 1))))
    reach = float(stats.t.ppf(0.975, y.size - 1)) * mean_sd
    low, high = _q_profile(y, v)
    w = 1.0 / v
    typical = (y.size - 1) * w.sum() / (w.sum() ** 2 - (w**2).sum())
    return PopulationEstimate(
        count=int(y.size),
        mean=mean,
        mean_sd=mean_sd,
        mean_low=mean - reach,
        mean_high=mean + reach,
        spread=float(np.sqrt(tau2)),
        spread_low=low,
        spread_high=high,
        naive_spread=float(y.std(ddof=1)),
        heterogeneity=float(tau2 / (tau2 + typical)),
        method=method,
    )

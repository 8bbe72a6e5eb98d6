r"""How the contractile moment depends on the stiffness under the cell.

Three laws are compared: constant, linear :math:`P = c E`, and saturating :math:`P(E) = P_\infty E / (E + E^*)`, which
contains the other two as limits (:math:`E^* \to 0` and :math:`E^* \to \infty`). With it the elastic coupling of two
cells, :math:`\propto P(E)^2 / E`, is largest at :math:`E = E^*`. The likelihood is that of
:mod:`tfm.population.response`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import optimize, stats

from tfm.errors import InputError
from tfm.population.random_effects import checked_estimates
from tfm.population.response import Best, ResponseData, best_at, best_with_plateau

__all__ = ["LAWS", "LawFit", "StiffnessFit", "coupling_strength", "fit_stiffness", "saturating_moment"]

#: The laws that are compared.
LAWS = ("constant", "linear", "saturating")

_OPEN = 1e3  # E* beyond this factor outside the measured range is the limit itself


def saturating_moment(stiffness: ArrayLike, largest: float, half: float) -> NDArray[np.float64]:
    """P(E) = P_inf E / (E + E*), N m.

    Examples
    --------
    >>> float(saturating_moment(5e3, 2e-12, 5e3)) * 1e12
    1.0
    """
    e = np.asarray(stiffness, dtype=np.float64)
    return np.asarray(largest * e / (e + half))


def coupling_strength(stiffness: ArrayLike, largest: float, half: float) -> NDArray[np.float64]:
    """P(E)^2 / E in (N m)^2 / Pa: what two equal cells' interaction energy is proportional to."""
    return np.asarray(saturating_moment(stiffness, largest, half) ** 2 / np.asarray(stiffness, dtype=np.float64))


@dataclass(frozen=True)
class LawFit:
    """One law's best fit.

    Attributes
    ----------
    law
        ``constant``, ``linear`` or ``saturating``.
    parameters
        ``P`` (N m), ``slope`` (N m / Pa), or ``P_inf`` (N m) and ``E_star`` (Pa); and ``spread``, relative.
    log_likelihood
        Natural logarithm.
    aicc
        Akaike's criterion with the small-sample term (Hurvich & Tsai, Biometrika 76:297, 1989); smaller is better.
        Infinite when there are too few cells to afford the parameters.
    weight
        Akaike weight among the laws, 0..1.
    """

    law: str
    parameters: dict[str, float]
    log_likelihood: float
    aicc: float
    weight: float


@dataclass(frozen=True)
class StiffnessFit:
    """The fitted response. N m and Pa; ``None`` = the data set no bound on that side.

    Attributes
    ----------
    laws
        Fit of each law.
    preferred
        Law of smallest ``aicc``.
    p_inf, p_inf_low, p_inf_high
        Best value and 95 % interval (profile likelihood).
    e_star, e_star_low, e_star_high
        The same for E*. ``e_star`` is None where the best fit is a limit (constant or linear).
    spread
        Relative between-cell standard deviation of the saturating fit, measurement error removed.
    constrained
        Whether E* has both bounds.
    optimum, optimum_low, optimum_high
        Pa: stiffness at which two cells couple most strongly, with its interval (equal to E*'s).
    cells, gels
        Independent cells, distinct stiffnesses.
    notes
        Sentences for table and report.
    """

    laws: tuple[LawFit, ...]
    preferred: str
    p_inf: float | None
    p_inf_low: float | None
    p_inf_high: float | None
    e_star: float | None
    e_star_low: float | None
    e_star_high: float | None
    spread: float
    constrained: bool
    optimum: float | None
    optimum_low: float | None
    optimum_high: float | None
    cells: int
    gels: int
    notes: tuple[str, ...]


def fit_stiffness(
    stiffness: ArrayLike,
    moments: ArrayLike,
    variances: ArrayLike,
    *,
    stiffness_sd: ArrayLike | None = None,
    gels: Sequence[str] | None = None,
    moment_follows_modulus: bool = True,
) -> StiffnessFit:
    """Fit and compare the three laws over cells on gels of different stiffness.

    Parameters
    ----------
    stiffness
        ``(n,)`` Pa, Young's modulus under each cell.
    moments, variances
        ``(n,)`` N m and (N m)^2: contractile moment of each cell and its variance **from the images** (not the total:
        the modulus enters through ``stiffness_sd``). One row per independent cell.
    stiffness_sd
        ``(n,)`` Pa; 0 when not given.
    gels
        ``(n,)`` names: cells of one name share the error of the modulus. Without names, cells of equal stiffness do.
    moment_follows_modulus
        True for moments that were computed with ``stiffness`` (every traction measurement): an error of the modulus is
        then an error of the moment by the same factor. False for moments measured in some other way.

    Returns
    -------
    StiffnessFit
        Intervals by profile likelihood with the t correction for the unknown spread,
        ``2 dlogL < n log(1 + t^2/(n - 3))`` (exact for a straight line with unknown noise).

    Raises
    ------
    InputError
        Fewer than four cells, fewer than two stiffnesses, or values that cannot be used.

    Examples
    --------
    >>> rng = np.random.default_rng(2)
    >>> e = np.repeat([1e3, 3e3, 9e3, 27e3], 8)
    >>> truth = saturating_moment(e, 2e-12, 4e3) * (1 + 0.15 * rng.normal(size=e.size))
    >>> fit = fit_stiffness(e, truth + 5e-14 * rng.normal(size=e.size), np.full(e.size, 25e-28))
    >>> fit.preferred, fit.constrained, bool(fit.e_star_low < 4e3 < fit.e_star_high)
    ('saturating', True, True)
    """
    data = _checked(stiffness, moments, variances, stiffness_sd, gels, moment_follows_modulus)
    grid = np.geomspace(float(data.e.min()) / _OPEN, float(data.e.max()) * _OPEN, 41)
    profile = _profile(data, grid)
    k = int(np.argmin([p[0] for p in profile]))
    around = (float(np.log(grid[max(k - 1, 0)])), float(np.log(grid[min(k + 1, grid.size - 1)])))
    refined = optimize.minimize_scalar(
        lambda u: best_at(data, float(np.exp(u)), profile[k])[0],
        bounds=around,
        method="bounded",
        options={"xatol": 1e-4},
    )
    half = float(np.exp(refined.x))
    top = best_at(data, half, profile[k])
    constant, linear = best_at(data, 0.0), best_at(data, np.inf)
    at_limit = min(constant[0], linear[0]) <= top[0] + 1e-4
    n = data.y.size
    allowed = 0.5 * n * float(np.log1p(stats.t.ppf(0.975, n - 3) ** 2 / (n - 3)))
    target = min(top[0], constant[0], linear[0]) + allowed
    low = _e_star_bound(data, grid, profile, half, top, target, -1, constant[0])
    high = _e_star_bound(data, grid, profile, half, top, target, +1, linear[0])
    p_inf: float | None = top[1] * (data.reference + half) / data.reference
    p_low = _plateau_bound(data, half, top, target, -1)
    p_high = None if high is None else _plateau_bound(data, half, top, target, +1)
    if at_limit:
        p_inf = constant[1] if constant[0] <= linear[0] else None
    laws = _laws(n, constant, linear, top, half, data)
    preferred = min(laws, key=lambda law: (law.aicc, LAWS.index(law.law))).law
    e_star = None if at_limit else half
    return StiffnessFit(
        laws=laws,
        preferred=preferred,
        p_inf=p_inf,
        p_inf_low=p_low,
        p_inf_high=p_high,
        e_star=e_star,
        e_star_low=low,
        e_star_high=high,
        spread=top[2],
        constrained=low is not None and high is not None,
        optimum=e_star,
        optimum_low=low,
        optimum_high=high,
        cells=n,
        gels=int(np.unique(data.gel).size),
        notes=_notes(data, low, high, preferred),
    )


def _checked(
    stiffness: ArrayLike,
    moments: ArrayLike,
    variances: ArrayLike,
    stiffness_sd: ArrayLike | None,
    gels: Sequence[str] | None,
    follows: bool,
) -> ResponseData:
    y, v = checked_estimates(moments, variances)
    e = np.atleast_1d(np.asarray(stiffness, dtype=np.float64))
    sd = (
        np.zeros_like(e)
        if stiffness_sd is None
        else np.broadcast_to(np.asarray(stiffness_sd, dtype=np.float64), e.shape)
    )
    if e.shape != y.shape or not (np.isfinite(e).all() and (e > 0).all() and np.isfinite(sd).all() and (sd >= 0).all()):
        raise InputError(
            "a stiffness is missing, not positive, or has a negative error",
            code="bad-stiffness",
            remedy="give Young's modulus in Pa for every cell",
        )
    if y.size < 4:
        raise InputError(
            f"{y.size} cells cannot fix a response", code="too-few-cells", remedy="measure at least four, better twelve"
        )
    if np.unique(e).size < 2:
        raise InputError(
            "all cells sat on one stiffness",
            code="one-stiffness",
            remedy="give results from gels of at least two stiffnesses",
        )
    names = (
        [f"{value!r}" for value in e]
        if gels is None
        else [f"{name} {value!r}" for name, value in zip(gels, e, strict=True)]
    )
    _, index = np.unique(names, return_inverse=True)
    reference = float(np.exp(np.log(e).mean()))
    return ResponseData(e, y, v, np.asarray(index, dtype=np.intp), sd / e, follows, reference)


def _profile(data: ResponseData, grid: NDArray[np.float64]) -> list[Best]:
    """Least loss along the grid of E*, each point started from its neighbour."""
    out: list[Best] = []
    for half in grid:
        out.append(best_at(data, float(half), out[-1] if out else None))
    return out


def _e_star_bound(
    data: ResponseData,
    grid: NDArray[np.float64],
    profile: Sequence[Best],
    half: float,
    top: Best,
    target: float,
    side: int,
    limit: float,
) -> float | None:
    """Where the profile of E* crosses the target on one side; None when the limit on that side is still allowed."""
    if limit <= target:
        return None
    inner, start = np.log(half), top
    outer: float | None = None
    order = range(grid.size) if side > 0 else range(grid.size - 1, -1, -1)
    for k in order:
        if (np.log(grid[k]) - np.log(half)) * side <= 0:
            continue
        if profile[k][0] > target:
            outer = float(np.log(grid[k]))
            break
        inner, start = float(np.log(grid[k])), profile[k]
    if outer is None:
        return None

    def excess(u: float) -> float:
        return best_at(data, float(np.exp(u)), start)[0] - target

    if excess(inner) >= 0:  # the best fit is a limit and this E* is already excluded
        return float(np.exp(inner))
    return float(np.exp(optimize.brentq(excess, inner, outer, xtol=1e-3)))


def _plateau_bound(data: ResponseData, half: float, top: Best, target: float, side: int) -> float | None:
    """Where the profile of P_inf crosses the target on one side; None where it never does."""
    start = top[1] * (data.reference + half) / data.reference

    def excess(log_factor: float) -> float:
        return best_with_plateau(data, start * float(np.exp(log_factor)), half, top[2])[0] - target

    step, inner = 0.1, 0.0
    if excess(0.0) >= 0:
        return start
    while excess(side * step) < 0:
        inner, step = step, step * 1.6
        if step > 12:
            return None
    return start * float(np.exp(optimize.brentq(excess, side * inner, side * step, xtol=1e-3)))


def _laws(
    n: int,
    constant: Best,
    linear: Best,
    top: Best,
    half: float,
    data: ResponseData,
) -> tuple[LawFit, ...]:
    entries = (
        ("constant", {"P": constant[1], "spread": constant[2]}, constant[0], 2),
        ("linear", {"slope": linear[1] / data.reference, "spread": linear[2]}, linear[0], 2),
        (
            "saturating",
            {"P_inf": top[1] * (data.reference + half) / data.reference, "E_star": half, "spread": top[2]},
            min(top[0], constant[0], linear[0]),
            3,
        ),
    )
    constant_part = 0.5 * n * float(np.log(2 * np.pi))
    scores = []
    for _, _, loss, k in entries:
        extra = 2 * k * (k + 1) / (n - k - 1) if n > k + 1 else np.inf
        scores.append(2 * (loss + constant_part) + 2 * k + extra)
    relative = np.exp(-0.5 * (np.array(scores) - min(scores)))
    weights = relative / relative.sum()
    return tuple(
        LawFit(name, parameters, -(loss + constant_part), float(score), float(weight))
        for (name, parameters, loss, _), score, weight in zip(entries, scores, weights, strict=True)
    )


def _notes(data: ResponseData, low: float | None, high: float | None, preferred: str) -> tuple[str, ...]:
    notes = []
    if low is None and high is None:
        notes.append("the stiffness range does not fix E*: neither a constant nor a linear response is excluded")
    elif low is None:
        notes.append("E* has no lower bound: a response that does not depend on stiffness is not excluded")
    elif high is None:
        notes.append("E* has no upper bound: a response that never saturates is not excluded")
    elif low < float(data.e.min()) or high > float(data.e.max()):
        notes.append("the interval of E* reaches beyond the stiffnesses that were measured")
    if preferred != "saturating":
        notes.append(f"a {preferred} response explains these cells as well with fewer parameters")
    return tuple(notes)

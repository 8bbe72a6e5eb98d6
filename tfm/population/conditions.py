"""Cells of one condition together: who counts as one cell, what the condition's mean is, how conditions differ.

A frame is not a cell. Frames of one cell, and fields that show the same cell again, become one estimate before anything
is averaged over cells.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from tfm.errors import InputError
from tfm.population.random_effects import PopulationEstimate, random_effects
from tfm.population.tensors import TensorPopulation, tensor_population, to_cell_frame

__all__ = [
    "Comparison",
    "ConditionSummary",
    "MeasuredCell",
    "combine_repeats",
    "compare_conditions",
    "summarise_conditions",
]

_TRACE = np.array([-1.0, 0.0, -1.0])


@dataclass(frozen=True)
class MeasuredCell:
    """One row of a cells table in SI.

    Attributes
    ----------
    identity
        Which cell this is; equal identities are the same cell.
    source
        Which field it was measured in; frames of one field share their relaxed frame.
    condition
        Group label.
    dipole
        ``(3,)`` N m: xx, xy, yy in the image's frame.
    covariance
        ``(3, 3)`` (N m)^2, from the images.
    outline_axis
        rad; None where the outline is round.
    youngs_modulus, youngs_modulus_sd
        Pa, of the gel it sat on; None where not known.
    """

    identity: str
    source: str
    condition: str
    dipole: NDArray[np.float64]
    covariance: NDArray[np.float64]
    outline_axis: float | None = None
    youngs_modulus: float | None = None
    youngs_modulus_sd: float = 0.0

    @property
    def contractile_moment(self) -> float:
        """N m."""
        return float(_TRACE @ self.dipole)

    @property
    def contractile_moment_variance(self) -> float:
        """(N m)^2."""
        return float(_TRACE @ self.covariance @ _TRACE)


@dataclass(frozen=True)
class ConditionSummary:
    """What one condition's cells have in common.

    Attributes
    ----------
    condition
        Label.
    cells, rows
        Independent cells, and rows they came from.
    moment
        Contractile moment, N m.
    along, across
        Pull along and across the cell's own long axis (minus the tensor's component), N m; None without outline axes.
    tensor
        The whole tensor in the cells' own frame; None without outline axes.
    without_axis
        Cells left out of ``along``, ``across`` and ``tensor`` because their outline is round.
    """

    condition: str
    cells: int
    rows: int
    moment: PopulationEstimate
    along: PopulationEstimate | None
    across: PopulationEstimate | None
    tensor: TensorPopulation | None
    without_axis: int


@dataclass(frozen=True)
class Comparison:
    """Difference of two conditions' mean contractile moments, second minus first. N m.

    ``low``/``high`` are the 95 % interval (Welch's t: unequal spreads, unequal numbers); None where a condition has one
    cell. ``comparisons`` says how many such intervals were formed at once.
    """

    first: str
    second: str
    difference: float
    difference_sd: float
    low: float | None
    high: float | None
    comparisons: int


def combine_repeats(cells: Sequence[MeasuredCell]) -> list[MeasuredCell]:
    """One record per identity, in order of first appearance.

    Frames of one field share the relaxed frame, so half of a frame's measurement variance is common to all of them:
    with n frames of mean variance v and real within-cell variance s^2 (what the frames scatter beyond v/2) the mean's
    variance is ``v (1 + 1/n) / 2 + s^2 / n``. Fields that show the same cell are independent measurements of it and are
    combined by :func:`tfm.population.random_effects`' weights for each tensor component.

    Examples
    --------
    >>> one = MeasuredCell("a", "f", "soft", np.array([-1.0, 0.0, 0.0]), np.eye(3))
    >>> merged = combine_repeats([one, one, one])
    >>> len(merged), round(float(merged[0].covariance[0, 0]), 3)
    (1, 0.667)
    """
    identities: dict[str, dict[str, list[MeasuredCell]]] = {}
    for cell in cells:
        identities.setdefault(cell.identity, {}).setdefault(cell.source, []).append(cell)
    merged = []
    for identity, sources in identities.items():
        labels = {cell.condition for group in sources.values() for cell in group}
        if len(labels) > 1:
            raise InputError(
                f"cell '{identity}' stands under the conditions {', '.join(sorted(labels))}",
                code="two-conditions",
                remedy="give it one condition, or another name",
            )
        merged.append(_over_fields([_over_frames(group) for group in sources.values()]))
    return merged


def _turned_mean(axes: Sequence[float | None]) -> float | None:
    """Mean of axes (period pi) by doubling the angle."""
    known = np.array([a for a in axes if a is not None])
    if known.size == 0:
        return None
    return float(0.5 * np.angle(np.exp(2j * known).sum()))


def _over_frames(group: Sequence[MeasuredCell]) -> MeasuredCell:
    if len(group) == 1:
        return group[0]
    y = np.array([cell.dipole for cell in group])
    v = np.mean([cell.covariance for cell in group], axis=0)
    n = len(group)
    real = np.cov(y, rowvar=False) - 0.5 * v
    values, vectors = np.linalg.eigh(real)
    real = (vectors * np.clip(values, 0.0, None)) @ vectors.T
    return replace(
        group[0],
        dipole=y.mean(axis=0),
        covariance=0.5 * v * (1 + 1 / n) + real / n,
        outline_axis=_turned_mean([cell.outline_axis for cell in group]),
    )


def _over_fields(group: Sequence[MeasuredCell]) -> MeasuredCell:
    if len(group) == 1:
        return group[0]
    # Fields may lie in the dish at any angle: compare the cell with itself in its own frame, then go back to the first.
    axes = [cell.outline_axis for cell in group]
    known = [a for a in axes if a is not None]
    first = known[0] if len(known) == len(axes) else None
    if first is None:
        raise InputError(
            f"cell '{group[0].identity}' appears in several fields and its outline is round in one",
            code="no-axis",
            remedy="the frames cannot be turned onto each other; keep one field of this cell",
        )
    y, s = to_cell_frame(
        np.array([cell.dipole for cell in group]), np.array([cell.covariance for cell in group]), np.array(known)
    )
    fit = tensor_population(y, s)
    back, covariance = to_cell_frame(fit.mean[None], fit.mean_covariance[None], np.array([-first]))
    return replace(group[0], dipole=back[0], covariance=covariance[0], outline_axis=first)


def summarise_conditions(cells: Sequence[MeasuredCell], *, method: str = "reml") -> list[ConditionSummary]:
    """Population estimates per condition, in order of first appearance; repeats are combined first.

    Raises
    ------
    InputError
        Without cells, or when one cell stands under two conditions.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> tensors = [np.array([-1 - 0.3 * rng.normal(), 0.0, -0.2]) for _ in range(9)]
    >>> cells = [MeasuredCell(str(k), str(k), "soft", p, 1e-3 * np.eye(3), 0.0) for k, p in enumerate(tensors)]
    >>> summary, = summarise_conditions(cells)
    >>> summary.cells, 0.1 < summary.moment.spread < 0.6
    (9, True)
    """
    if not cells:
        raise InputError("there is no measured cell", code="no-cells", remedy="run the measurement first")
    merged = combine_repeats(cells)
    summaries = []
    for condition in dict.fromkeys(cell.condition for cell in merged):
        group = [cell for cell in merged if cell.condition == condition]
        with_axis = [cell for cell in group if cell.outline_axis is not None]
        along = across = tensor = None
        if with_axis:
            y, s = to_cell_frame(
                np.array([cell.dipole for cell in with_axis]),
                np.array([cell.covariance for cell in with_axis]),
                np.array([cell.outline_axis for cell in with_axis], dtype=np.float64),
            )
            along = random_effects(-y[:, 0], s[:, 0, 0], method=method)
            across = random_effects(-y[:, 2], s[:, 2, 2], method=method)
            tensor = tensor_population(y, s)
        summaries.append(
            ConditionSummary(
                condition=condition,
                cells=len(group),
                rows=sum(1 for cell in cells if cell.condition == condition),
                moment=random_effects(
                    [cell.contractile_moment for cell in group],
                    [cell.contractile_moment_variance for cell in group],
                    method=method,
                ),
                along=along,
                across=across,
                tensor=tensor,
                without_axis=len(group) - len(with_axis),
            )
        )
    return summaries


def compare_conditions(summaries: Sequence[ConditionSummary]) -> list[Comparison]:
    """Every pair of conditions: difference of the mean contractile moments with its 95 % interval.

    Welch's approximation to the degrees of freedom (Biometrika 34:28, 1947). The intervals are not widened for their
    number; ``comparisons`` is there so that a reader can.
    """
    pairs = [(a, b) for i, a in enumerate(summaries) for b in summaries[i + 1 :]]
    out = []
    for a, b in pairs:
        va, vb = a.moment.mean_sd**2, b.moment.mean_sd**2
        difference, sd = b.moment.mean - a.moment.mean, float(np.sqrt(va + vb))
        low = high = None
        if a.cells > 1 and b.cells > 1:
            freedom = (va + vb) ** 2 / (va**2 / (a.cells - 1) + vb**2 / (b.cells - 1))
            reach = float(stats.t.ppf(0.975, freedom)) * sd
            low, high = difference - reach, difference + reach
        out.append(Comparison(a.condition, b.condition, difference, sd, low, high, len(pairs)))
    return out

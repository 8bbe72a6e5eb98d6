"""Conditions side by side: every cell, the group's mean with its interval, and whether a difference is chance."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations

import numpy as np
from scipy import stats

from tfm.report.results import FieldResult, number
from tfm.report.words import plain

__all__ = ["CellValue", "Difference", "Group", "differences", "group_label", "groups_of", "verdict_sentence"]


@dataclass(frozen=True)
class CellValue:
    """One cell: contractile moment in pN m (median over frames) and one standard deviation with the gel's share."""

    field: FieldResult
    cell: str
    value: float
    sd: float | None
    status: str


@dataclass(frozen=True)
class Group:
    """Cells of one condition, their mean and its 95 % interval (Student t; None below two cells). pN m."""

    condition: str
    cells: tuple[CellValue, ...]
    mean: float
    low: float | None
    high: float | None


@dataclass(frozen=True)
class Difference:
    """Mean of ``more`` minus mean of ``less``: pN m, 95 % interval and Holm-corrected p value of Welch's t test."""

    more: Group
    less: Group
    value: float
    low: float
    high: float
    p: float

    @property
    def significant(self) -> bool:
        """True below the usual 5 %."""
        return self.p < 0.05


def _cells(field: FieldResult) -> list[CellValue]:
    found = []
    for name in field.cell_names:
        rows = [r for r in field.cells if r.get("cell") == name and number(r, "contractile_moment_pNm") is not None]
        values = [number(r, "contractile_moment_pNm") or 0.0 for r in rows]
        if not values:
            continue
        sds = [number(r, "contractile_moment_total_sd_pNm") or number(r, "contractile_moment_sd_pNm") for r in rows]
        known = [s for s in sds if s is not None]
        worst = "ok" if all(r.get("status") == "ok" for r in rows) else "caution"
        found.append(
            CellValue(field, name, float(np.median(values)), float(np.median(known)) if known else None, worst)
        )
    return found


def group_label(field: FieldResult) -> str:
    """Condition under which a field's cells are shown; changes against a quietest frame are kept apart from totals."""
    label = field.condition or "no condition given"
    return f"{label} (change)" if field.change_only else label


def groups_of(fields: Sequence[FieldResult]) -> list[Group]:
    """Groups in the order in which their condition first appears; changes (``quietest``) are kept apart from totals."""
    gathered: dict[str, list[CellValue]] = {}
    for field in fields:
        gathered.setdefault(group_label(field), []).extend(_cells(field))
    groups = []
    for label, cells in gathered.items():
        if not cells:
            continue
        values = np.array([c.value for c in cells])
        low = high = None
        if len(values) > 1:
            reach = float(stats.t.ppf(0.975, len(values) - 1)) * float(stats.sem(values))
            low, high = float(values.mean()) - reach, float(values.mean()) + reach
        groups.append(Group(label, tuple(cells), float(values.mean()), low, high))
    return groups


def differences(groups: Sequence[Group]) -> list[Difference]:
    """All pairs of totals with at least two cells each, largest difference first.

    Welch's unequal-variances t test on one value per cell; p values corrected for the number of pairs by Holm's
    step-down rule (Scand J Stat 6:65, 1979). The spread of the cells contains their measurement error, so nothing is
    counted twice.
    """
    usable = [g for g in groups if len(g.cells) > 1 and not g.condition.endswith("(change)")]
    raw = []
    for a, b in combinations(usable, 2):
        more, less = (a, b) if a.mean >= b.mean else (b, a)
        test = stats.ttest_ind([c.value for c in more.cells], [c.value for c in less.cells], equal_var=False)
        interval = test.confidence_interval(0.95)
        raw.append((more, less, float(interval.low), float(interval.high), float(test.pvalue)))
    order = np.argsort([r[-1] for r in raw], kind="stable")
    adjusted, running = [0.0] * len(raw), 0.0
    for rank, i in enumerate(order):
        running = max(running, min(1.0, raw[i][-1] * (len(raw) - rank)))
        adjusted[i] = running
    found = [
        Difference(more, less, more.mean - less.mean, low, high, p)
        for (more, less, low, high, _), p in zip(raw, adjusted, strict=True)
    ]
    return sorted(found, key=lambda d: -d.value)


def verdict_sentence(groups: Sequence[Group], found: Sequence[Difference]) -> str:
    """Which condition pulls harder, and whether that is more than chance; or why this cannot be told."""
    totals = [g for g in groups if not g.condition.endswith("(change)")]
    if len(totals) < 2:
        return "One condition only: there is nothing to compare." if totals else "No cell was measured."
    if not found:
        return "Which condition pulls harder cannot be told: a comparison needs at least two cells in each."
    d = found[0]
    word = "significant" if d.significant else "not significant"
    p = f"{d.p:.2g}" if d.p >= 1e-4 else "< 0.0001"
    return (
        f"{d.more.condition} pulls harder than {d.less.condition}: {plain(d.value, 2)} pN m more "
        f"(95 %: {plain(d.low, 2)} to {plain(d.high, 2)}), {word} (p {'= ' if d.p >= 1e-4 else ''}{p}; "
        f"{len(d.more.cells)} and {len(d.less.cells)} cells)."
    )

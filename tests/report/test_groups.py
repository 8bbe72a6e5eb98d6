"""Conditions against a general-purpose statistics library, and the list of what to look at first."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from statsmodels.stats.multitest import multipletests
from statsmodels.stats.weightstats import CompareMeans, DescrStatsW

from tfm.report.groups import differences, groups_of, verdict_sentence
from tfm.report.results import FieldResult, read_results
from tfm.report.triage import findings, first_look


def _field(name: str, condition: str, *moments: float, **more: object) -> FieldResult:
    cells = tuple(
        {"field": name, "cell": str(i + 1), "frame": "0", "status": "ok", "condition": condition,
         "contractile_moment_pNm": str(m), "contractile_moment_total_sd_pNm": "0.1"}
        for i, m in enumerate(moments)
    )  # fmt: skip
    return FieldResult(name, 0, name, "ok", "", cells=cells, **more)  # type: ignore[arg-type]


def test_means_differences_and_p_values_agree_with_statsmodels() -> None:
    rng = np.random.default_rng(8)
    values = {"soft": rng.normal(1.0, 0.2, 7), "middle": rng.normal(1.3, 0.5, 5), "stiff": rng.normal(2.0, 0.3, 9)}
    fields = [_field(f"{c}{i}", c, v) for c, group in values.items() for i, v in enumerate(group)]
    groups = groups_of(fields)
    for group in groups:
        low, high = DescrStatsW(values[group.condition]).tconfint_mean()
        assert group.low == pytest.approx(low, rel=1e-9)
        assert group.high == pytest.approx(high, rel=1e-9)
    found = differences(groups)
    names = [(d.more.condition, d.less.condition) for d in found]
    raw = []
    for (more, less), d in zip(names, found, strict=True):
        compare = CompareMeans(DescrStatsW(values[more]), DescrStatsW(values[less]))
        low, high = compare.tconfint_diff(usevar="unequal")
        assert (d.low, d.high) == (pytest.approx(low, rel=1e-9), pytest.approx(high, rel=1e-9))
        raw.append(compare.ttest_ind(usevar="unequal")[1])
    assert [d.p for d in found] == pytest.approx(list(multipletests(raw, method="holm")[1]), rel=1e-9)
    assert names[0] == ("stiff", "soft")
    assert "stiff pulls harder than soft" in verdict_sentence(groups, found)


def test_frames_are_not_cells() -> None:
    field = _field("a", "soft", 1.0)
    frames = tuple({**field.cells[0], "frame": str(i), "contractile_moment_pNm": str(1.0 + i)} for i in range(5))
    (group,) = groups_of([FieldResult("a", 0, "a", "ok", "", cells=frames)])
    assert len(group.cells) == 1
    assert group.mean == 3.0
    assert group.low is None


def test_changes_are_never_compared_with_totals() -> None:
    quiet = {"relaxed": "quietest"}
    fields = [_field(f"t{i}", "soft", 1.0 + 0.1 * i) for i in range(3)]
    fields += [_field(f"c{i}", "soft", 5.0 + 0.1 * i, sheet=quiet) for i in range(3)]
    groups = groups_of(fields)
    assert [g.condition for g in groups] == ["soft", "soft (change)"]
    assert differences(groups) == []
    assert verdict_sentence(groups, []).startswith("One condition only")


def test_too_few_cells_are_said_to_be_too_few() -> None:
    groups = groups_of([_field("a", "soft", 1.0), _field("b", "stiff", 2.0)])
    assert "cannot be told" in verdict_sentence(groups, differences(groups))


def test_counts_conserve_the_sheet_in_a_run_that_was_stopped(make_folder: Callable[..., Path], tmp_path: Path) -> None:
    results = read_results(make_folder(tmp_path / "results", fields=12, bad=2, unfinished=3, arrays=False))
    counts = results.counts()
    assert sum(counts.values()) == len(results.fields) == 12
    assert counts["unfinished"] == 3
    listed = first_look(results.fields)
    assert [f.field.status for f in listed if f.field.status == "unfinished"] == ["unfinished"] * 3


def test_worst_comes_first_and_every_finding_is_complete(make_folder: Callable[..., Path], tmp_path: Path) -> None:
    results = read_results(make_folder(tmp_path / "results", fields=20, bad=6, arrays=False))
    listed = first_look(results.fields)
    assert len(listed) == 6
    assert [f.weight for f in listed] == sorted((f.weight for f in listed), reverse=True)
    assert listed[0].field.status == "failed"
    assert all(f.measure and f.value and f.limit and f.reason for f in listed)


def test_measures_from_the_arrays_are_judged_too() -> None:
    field = _field("a", "soft", 1.0)
    assert findings(field) == []
    (found,) = findings(field, {"unexplained ground": 19.3})
    assert (found.measure, found.value, found.limit) == ("unexplained ground", "19.3 %", "≤ 0.5 %")

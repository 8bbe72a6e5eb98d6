"""What the population commands do: tables in, tables and figures out.

Every function returns the sentences that the command says on stderr. Files are written whole or not at all.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any

from tfm.errors import InputError
from tfm.population.conditions import (
    Comparison,
    ConditionSummary,
    MeasuredCell,
    combine_repeats,
    compare_conditions,
    summarise_conditions,
)
from tfm.population.export import export_document
from tfm.population.map_table import write_map
from tfm.population.output import csv_table, pn_m, write_drawn, write_text
from tfm.population.plan_table import write_plan
from tfm.population.stiffness import StiffnessFit, fit_stiffness
from tfm.population.tables import as_json, measured_cells, read_folder

__all__ = ["write_conditions", "write_export", "write_map", "write_plan", "write_stiffness"]


def _interval(value: float | None, low: float | None, high: float | None, scale: float, unit: str) -> str:
    """For people: value and interval, an open end said in words."""
    best = "no best value" if value is None else f"{value * scale:.3g} {unit}"
    bottom = "no lower bound" if low is None else f"{low * scale:.3g}"
    top = "no upper bound" if high is None else f"{high * scale:.3g} {unit}"
    return f"{best} (95 %: {bottom} to {top})"


def write_stiffness(folders: Sequence[Path], output: Path) -> list[str]:
    """Fit the stiffness response over the cells of one or more results folders.

    Writes ``stiffness.csv`` (parameters with intervals), ``conditions.csv`` (random-effects mean and spread per
    condition), ``stiffness_cells.csv`` (the cells that were used), ``stiffness.json`` and ``stiffness.png``.

    Raises
    ------
    InputError
        When there are too few cells or stiffnesses, or a table cannot be used.
    """
    cells, said = _gathered(folders)
    merged = combine_repeats(cells)
    used = [cell for cell in merged if cell.youngs_modulus is not None]
    if len(used) < len(merged):
        said.append(f"{len(merged) - len(used)} cells left out: no stiffness in gel.csv")
    fit = fit_stiffness(
        [cell.youngs_modulus or math.nan for cell in used],
        [cell.contractile_moment for cell in used],
        [cell.contractile_moment_variance for cell in used],
        stiffness_sd=[cell.youngs_modulus_sd for cell in used],
    )
    write_text(output / "stiffness.csv", _fit_table(fit))
    write_text(output / "stiffness_cells.csv", _cells_table(used))
    write_text(output / "conditions.csv", _conditions_table(summarise_conditions(cells)))
    write_text(output / "stiffness.json", as_json(_fit_document(fit)))
    from tfm.population.figures import draw_stiffness

    write_drawn(output / "stiffness.png", lambda path: draw_stiffness(path, used, fit))
    said += [f"{fit.cells} cells on {fit.gels} stiffnesses; preferred response: {fit.preferred}"]
    said += [f"P_inf {_interval(fit.p_inf, fit.p_inf_low, fit.p_inf_high, 1e12, 'pN m')}"]
    said += [
        f"E* and best stiffness for coupling {_interval(fit.e_star, fit.e_star_low, fit.e_star_high, 1e-3, 'kPa')}"
    ]
    return said + list(fit.notes)


def _gathered(folders: Sequence[Path]) -> tuple[list[MeasuredCell], list[str]]:
    """Cells of all folders, each folder's names kept apart, and sentences about rows that were left out."""
    cells: list[MeasuredCell] = []
    said: list[str] = []
    for number, folder in enumerate(folders):
        found, left = measured_cells(read_folder(folder), prefix=f"{number}: " if len(folders) > 1 else "")
        cells += found
        said += [f"{folder}: {sentence}" for sentence in left]
    if not cells:
        raise InputError("no cell with an error bar was found", code="no-cells", file=", ".join(map(str, folders)),
                         remedy="give folders of finished runs with bead images")  # fmt: skip
    return cells, said


def write_conditions(folders: Sequence[Path], output: Path) -> list[str]:
    """Mean and spread of every condition and their differences: ``conditions.csv``, ``comparisons.csv``, a figure.

    Raises
    ------
    InputError
        Without a cell that has an error bar, or when one cell stands under two conditions.
    """
    cells, said = _gathered(folders)
    summaries = summarise_conditions(cells)
    comparisons = compare_conditions(summaries)
    write_text(output / "conditions.csv", _conditions_table(summaries))
    write_text(output / "comparisons.csv", _comparisons_table(comparisons))
    from tfm.population.figures import draw_conditions

    merged = combine_repeats(cells)
    write_drawn(output / "conditions.png", lambda path: draw_conditions(path, merged, summaries))
    for summary in summaries:
        m = summary.moment
        spread = "" if m.spread is None else f", spread between cells {m.spread * 1e12:.3g}"
        said.append(
            f"{summary.condition}: {m.mean * 1e12:.3g} ± {m.mean_sd * 1e12:.2g} pN m over {summary.cells} cells{spread}"
        )
    return said


def _comparisons_table(comparisons: Sequence[Comparison]) -> str:
    return csv_table(
        ("first", "second", "difference_pNm", "difference_sd_pNm", "low_pNm", "high_pNm", "comparisons"),
        (
            {
                "first": c.first,
                "second": c.second,
                "difference_pNm": pn_m(c.difference),
                "difference_sd_pNm": pn_m(c.difference_sd),
                "low_pNm": pn_m(c.low),
                "high_pNm": pn_m(c.high),
                "comparisons": c.comparisons,
            }
            for c in comparisons
        ),
    )


def _fit_table(fit: StiffnessFit) -> str:
    note = "; ".join(fit.notes)
    rows: list[dict[str, Any]] = [
        {"quantity": "P_inf", "unit": "pN m", "value": pn_m(fit.p_inf), "low": pn_m(fit.p_inf_low),
         "high": pn_m(fit.p_inf_high), "notes": note},
        {"quantity": "E_star", "unit": "Pa", "value": fit.e_star, "low": fit.e_star_low, "high": fit.e_star_high,
         "notes": note},
        {"quantity": "best stiffness for coupling", "unit": "Pa", "value": fit.optimum, "low": fit.optimum_low,
         "high": fit.optimum_high, "notes": note},
        {"quantity": "spread between cells", "unit": "relative", "value": fit.spread, "low": None, "high": None,
         "notes": ""},
    ]  # fmt: skip
    rows += [
        {
            "quantity": f"Akaike weight, {law.law}",
            "unit": "",
            "value": law.weight,
            "low": None,
            "high": None,
            "notes": "",
        }
        for law in fit.laws
    ]
    return csv_table(("quantity", "unit", "value", "low", "high", "notes"), rows)


def _fit_document(fit: StiffnessFit) -> dict[str, Any]:
    def finite(value: Any) -> Any:
        return None if isinstance(value, float) and not math.isfinite(value) else value

    document = asdict(fit)
    document["laws"] = [{k: finite(v) for k, v in law.items()} for law in document["laws"]]
    return {
        "units": {"moments": "N m", "stiffness": "Pa"},
        "interval": "95 %, null = the data set no bound",
        **document,
    }


def _cells_table(cells: Sequence[MeasuredCell]) -> str:
    return csv_table(
        (
            "cell",
            "condition",
            "youngs_modulus_Pa",
            "youngs_modulus_sd_Pa",
            "contractile_moment_pNm",
            "contractile_moment_sd_pNm",
        ),
        (
            {
                "cell": cell.identity,
                "condition": cell.condition,
                "youngs_modulus_Pa": cell.youngs_modulus,
                "youngs_modulus_sd_Pa": float(cell.youngs_modulus_sd),
                "contractile_moment_pNm": pn_m(cell.contractile_moment),
                "contractile_moment_sd_pNm": pn_m(math.sqrt(cell.contractile_moment_variance)),
            }
            for cell in cells
        ),
    )


_CONDITION_COLUMNS = (
    "condition", "cells", "rows", "moment_pNm", "moment_sd_pNm", "moment_low_pNm", "moment_high_pNm", "spread_pNm",
    "spread_low_pNm", "spread_high_pNm", "naive_spread_pNm", "pull_along_pNm", "pull_along_sd_pNm", "pull_across_pNm",
    "pull_across_sd_pNm", "cells_without_axis",
)  # fmt: skip


def _conditions_table(summaries: Sequence[ConditionSummary]) -> str:
    rows = []
    for summary in summaries:
        m, along, across = summary.moment, summary.along, summary.across
        rows.append(
            {
                "condition": summary.condition,
                "cells": summary.cells,
                "rows": summary.rows,
                "moment_pNm": pn_m(m.mean),
                "moment_sd_pNm": pn_m(m.mean_sd),
                "moment_low_pNm": pn_m(m.mean_low),
                "moment_high_pNm": pn_m(m.mean_high),
                "spread_pNm": pn_m(m.spread),
                "spread_low_pNm": pn_m(m.spread_low),
                "spread_high_pNm": pn_m(m.spread_high),
                "naive_spread_pNm": pn_m(m.naive_spread),
                "pull_along_pNm": pn_m(along.mean if along else None),
                "pull_along_sd_pNm": pn_m(along.mean_sd if along else None),
                "pull_across_pNm": pn_m(across.mean if across else None),
                "pull_across_sd_pNm": pn_m(across.mean_sd if across else None),
                "cells_without_axis": summary.without_axis,
            }
        )
    return csv_table(_CONDITION_COLUMNS, rows)


def write_export(folder: Path, output: Path, *, frame: str = "y-down", draws: int = 0, seed: int = 0) -> list[str]:
    """Write the dipoles of a results folder as one JSON document (``docs/export.schema.json``).

    Raises
    ------
    InputError
        When the folder has no usable table, or for an unknown frame or a negative number of draws.
    """
    from tfm import __version__

    read = read_folder(folder)
    cells, said = measured_cells(read)
    summaries = summarise_conditions(cells) if cells else []
    document = export_document(
        read.cells, read.pairs, read.gels, summaries,
        comparisons=compare_conditions(summaries), frame=frame, draws=draws, seed=seed,
        quantity=dict.fromkeys(read.changes, "change"), version=__version__,
    )  # fmt: skip
    write_text(output, as_json(document))
    said = [f"populations: {sentence}" for sentence in said]
    single = [s.condition for s in summaries if s.tensor is None or s.tensor.spread is None]
    if draws and single:
        said.append(f"no draws for {', '.join(single)}: a spread needs two cells with an outline axis")
    return [
        *said,
        f"{len(read.cells)} cells, {len(read.pairs)} pairs, {len(document['draws'])} draws, frame {frame}: {output}",
    ]

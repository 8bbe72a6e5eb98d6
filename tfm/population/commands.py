"""What the population commands do: tables in, tables and figures out.

Every function returns the sentences that the command says on stderr. Files are written whole or not at all.
"""

from __future__ import annotations

import csv
import io
import math
import os
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np

from tfm.errors import InputError, TfmError
from tfm.gel import Gel
from tfm.population.conditions import MeasuredCell, combine_repeats, compare_conditions, summarise_conditions
from tfm.population.export import export_document
from tfm.population.maps import EnergyMap, energy_map
from tfm.population.plan import ExpectedErrors, Setup, expected_errors, improvements, ranked
from tfm.population.stiffness import StiffnessFit, fit_stiffness
from tfm.population.tables import as_json, measured_cells, read_folder, read_rows, row_number
from tfm.units import from_si, to_si

__all__ = ["write_export", "write_map", "write_plan", "write_stiffness", "write_text"]


def _number(value: float | None) -> str:
    """Eight significant digits; an unmeasured value is empty."""
    return "" if value is None else f"{value:.8g}"


def _table(columns: Sequence[str], rows: Iterable[Mapping[str, Any]]) -> str:
    buffer = io.StringIO()
    writer = csv.DictWriter(buffer, fieldnames=list(columns), lineterminator="\n")
    writer.writeheader()
    for row in rows:
        writer.writerow({k: _number(v) if v is None or isinstance(v, float) else v for k, v in row.items()})
    return buffer.getvalue()


def _storage(path: Path, error: OSError) -> TfmError:
    return TfmError(
        f"'{path}' cannot be written ({error.strerror or type(error).__name__})", code="storage",
        remedy="free space or choose a folder that you may write to",
    )  # fmt: skip


def write_text(path: Path, text: str) -> None:
    """Write a file in one step: a reader sees the old one or the new one."""
    temporary = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        temporary.write_text(text, encoding="utf-8", newline="")
        temporary.replace(path)
    except OSError as error:
        _forget(temporary)
        raise _storage(path, error) from error


def _forget(temporary: Path) -> None:
    """Take away what a failed write left, where anything was left."""
    if temporary.is_file():
        temporary.unlink()


def _drawn(path: Path, draw: Any) -> None:
    """The same for a figure: ``draw`` gets a temporary path of the same ending."""
    temporary = path.with_name(f".{os.getpid()}.part.{path.name}")
    try:
        draw(temporary)
        temporary.replace(path)
    except OSError as error:
        _forget(temporary)
        raise _storage(path, error) from error


def _pn_m(value: float | None) -> float | None:
    return None if value is None else from_si(value, "pNm")


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
    cells: list[MeasuredCell] = []
    said: list[str] = []
    for number, folder in enumerate(folders):
        found, left = measured_cells(read_folder(folder), prefix=f"{number}: " if len(folders) > 1 else "")
        cells += found
        said += [f"{folder}: {sentence}" for sentence in left]
    if not cells:
        raise InputError("no cell with an error bar was found", code="no-cells", file=", ".join(map(str, folders)),
                         remedy="give folders of finished runs with bead images")  # fmt: skip
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
    write_text(output / "conditions.csv", _conditions_table(cells))
    write_text(output / "stiffness.json", as_json(_fit_document(fit)))
    from tfm.population.figures import draw_stiffness

    _drawn(output / "stiffness.png", lambda path: draw_stiffness(path, used, fit))
    said += [f"{fit.cells} cells on {fit.gels} stiffnesses; preferred response: {fit.preferred}"]
    said += [f"P_inf {_interval(fit.p_inf, fit.p_inf_low, fit.p_inf_high, 1e12, 'pN m')}"]
    said += [
        f"E* and best stiffness for coupling {_interval(fit.e_star, fit.e_star_low, fit.e_star_high, 1e-3, 'kPa')}"
    ]
    return said + list(fit.notes)


def _fit_table(fit: StiffnessFit) -> str:
    note = "; ".join(fit.notes)
    rows: list[dict[str, Any]] = [
        {"quantity": "P_inf", "unit": "pN m", "value": _pn_m(fit.p_inf), "low": _pn_m(fit.p_inf_low),
         "high": _pn_m(fit.p_inf_high), "notes": note},
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
    return _table(("quantity", "unit", "value", "low", "high", "notes"), rows)


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
    return _table(
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
                "contractile_moment_pNm": _pn_m(cell.contractile_moment),
                "contractile_moment_sd_pNm": _pn_m(math.sqrt(cell.contractile_moment_variance)),
            }
            for cell in cells
        ),
    )


_CONDITION_COLUMNS = (
    "condition", "cells", "rows", "moment_pNm", "moment_sd_pNm", "moment_low_pNm", "moment_high_pNm", "spread_pNm",
    "spread_low_pNm", "spread_high_pNm", "naive_spread_pNm", "pull_along_pNm", "pull_along_sd_pNm", "pull_across_pNm",
    "pull_across_sd_pNm", "cells_without_axis",
)  # fmt: skip


def _conditions_table(cells: Sequence[MeasuredCell]) -> str:
    rows = []
    for summary in summarise_conditions(cells):
        m, along, across = summary.moment, summary.along, summary.across
        rows.append(
            {
                "condition": summary.condition,
                "cells": summary.cells,
                "rows": summary.rows,
                "moment_pNm": _pn_m(m.mean),
                "moment_sd_pNm": _pn_m(m.mean_sd),
                "moment_low_pNm": _pn_m(m.mean_low),
                "moment_high_pNm": _pn_m(m.mean_high),
                "spread_pNm": _pn_m(m.spread),
                "spread_low_pNm": _pn_m(m.spread_low),
                "spread_high_pNm": _pn_m(m.spread_high),
                "naive_spread_pNm": _pn_m(m.naive_spread),
                "pull_along_pNm": _pn_m(along.mean if along else None),
                "pull_along_sd_pNm": _pn_m(along.mean_sd if along else None),
                "pull_across_pNm": _pn_m(across.mean if across else None),
                "pull_across_sd_pNm": _pn_m(across.mean_sd if across else None),
                "cells_without_axis": summary.without_axis,
            }
        )
    return _table(_CONDITION_COLUMNS, rows)


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


_PLAN_COLUMNS = (
    "change", "moment_sd_pNm", "moment_sd_percent", "axis_sd_deg", "smallest_moment_pNm", "pair_energy_fJ",
    "pair_energy_sd_fJ", "displacement_peak_um", "displacement_noise_um", "better_by",
)  # fmt: skip


def write_plan(setup: Setup, output: Path, *, cells: int = 3, seed: int = 1) -> list[str]:
    """Expected errors of a planned experiment and of the same with one thing changed: ``plan.csv`` and ``plan.png``.

    Raises
    ------
    InputError
        For a setup that makes no sense.
    """
    results = {name: expected_errors(changed, cells=cells, seed=seed) for name, changed in improvements(setup).items()}
    base = results["as asked"]
    rows = [_plan_row(name, results[name], base, setup) for name in ["as asked", *(n for n, _ in ranked(results))]]
    write_text(output / "plan.csv", _table(_PLAN_COLUMNS, rows))
    from tfm.population.figures import draw_plan

    _drawn(output / "plan.png", lambda path: draw_plan(path, results, setup.contractile_moment))
    best, factor = ranked(results)[0]
    said = [
        f"expected error of the contractile moment: {base.moment_sd * 1e12:.3g} pN m"
        f" ({100 * base.moment_sd / setup.contractile_moment:.2g} % of {setup.contractile_moment * 1e12:.3g} pN m)",
        f"axis ± {math.degrees(base.axis_sd):.2g} degrees; smallest moment that stands out by three of its errors:"
        f" {base.smallest_moment * 1e12:.3g} pN m",
        f"largest displacement {base.displacement_peak * 1e6:.2g} um",
    ]
    if base.pair_energy is not None and base.pair_energy_sd is not None:
        said.append(
            f"pair energy {base.pair_energy * 1e15:.3g} ± {base.pair_energy_sd * 1e15:.2g} fJ (from the tensors)"
        )
    if setup.distance is not None and setup.distance < 1.5 * setup.cell_length:
        said.append("the two cells are less than 1.5 cell lengths apart: the pair energy from tensors is a rough guide")
    return [*said, f"what would help most: {best} (error divided by {factor:.2f})"]


def _plan_row(name: str, r: ExpectedErrors, base: ExpectedErrors, setup: Setup) -> dict[str, Any]:
    return {
        "change": name,
        "moment_sd_pNm": _pn_m(r.moment_sd),
        "moment_sd_percent": 100 * r.moment_sd / setup.contractile_moment,
        "axis_sd_deg": math.degrees(r.axis_sd),
        "smallest_moment_pNm": _pn_m(r.smallest_moment),
        "pair_energy_fJ": None if r.pair_energy is None else r.pair_energy * 1e15,
        "pair_energy_sd_fJ": None if r.pair_energy_sd is None else r.pair_energy_sd * 1e15,
        "displacement_peak_um": r.displacement_peak * 1e6,
        "displacement_noise_um": r.displacement_noise * 1e6,
        "better_by": base.moment_sd / r.moment_sd,
    }


def write_map(
    table: Path,
    field: str,
    cell: str,
    gel: Gel,
    output: Path,
    *,
    frame: str = "0",
    second: tuple[float, float] | None = None,
    reach: float = 100e-6,
    nearest: float | None = None,
) -> list[str]:
    """Energy map around one cell of a cells table: ``energy_map.nc`` and ``energy_map.png`` in ``output``.

    Parameters
    ----------
    table
        ``cells.csv`` or a table with ``field, cell`` and the dipole columns.
    field, cell, frame
        Which row.
    gel
        The gel.
    second
        Principal values (major, minor) of the second cell, N m; the measured cell's own when None.
    reach, nearest
        m: half-width of the map, and the distance below which it stays empty (default: 1.5 times the diameter of a disc
        of the outline's area, about the cell's length; without an area a quarter of ``reach``).

    Raises
    ------
    InputError
        When the row does not exist, holds no dipole, or two rows match.
    """
    needed = ("field", "cell", "dipole_xx_pNm", "dipole_xy_pNm", "dipole_yy_pNm")
    rows = read_rows(table, needed)
    found = [
        (line, row)
        for line, row in enumerate(rows, start=2)
        if row["field"] == field and row["cell"] == cell and row.get("frame", frame) == frame
    ]
    if len(found) != 1:
        what = "no row" if not found else f"{len(found)} rows"
        raise InputError(
            f"{what} for field '{field}', cell {cell}, frame {frame}", code="no-such-cell", file=str(table),
            remedy="name one row of the table",
        )  # fmt: skip
    line, row = found[0]
    unit = to_si(1.0, "pN*m", "energy")
    values = [row_number(row, f"dipole_{k}_pNm", table, line) for k in ("xx", "xy", "yy")]
    if None in values:
        raise InputError(
            "the row holds no dipole", code="no-dipole", file=str(table), row=line, remedy="name another cell"
        )
    dipole = np.array([v for v in values if v is not None]) * unit
    sds = [row_number(row, f"dipole_{k}_sd_pNm", table, line) for k in ("xx", "xy", "yy")]
    covariance = None
    if None not in sds:
        covariance = np.diag(np.square([float(v) for v in sds if v is not None])) * unit**2
        for (i, j), name in zip(((0, 1), (0, 2), (1, 2)), ("xx_xy", "xx_yy", "xy_yy"), strict=True):
            number = row_number(row, f"cov_{name}_pNm2", table, line)
            covariance[i, j] = covariance[j, i] = (number or 0.0) * unit**2
    if second is None:
        own = np.linalg.eigvalsh(np.array([[dipole[0], dipole[1]], [dipole[1], dipole[2]]]))
        own = own[np.argsort(-np.abs(own))]
        second = (float(own[0]), float(own[1]))
    area = row_number(row, "area_um2", table, line)
    if nearest is None:
        nearest = 0.25 * reach if area is None else min(1.5 * 2 * math.sqrt(area / math.pi) * 1e-6, 0.8 * reach)
    result = energy_map(
        gel, dipole, major=second[0], minor=second[1], reach=reach, nearest=nearest, covariance=covariance
    )
    _write_map_netcdf(output / "energy_map.nc", result, field, cell)
    from tfm.population.figures import draw_energy_map

    title = f"{field}, cell {cell}: second cell of {second[0] * 1e12:.3g} and {second[1] * 1e12:.3g} pN m"
    _drawn(output / "energy_map.png", lambda path: draw_energy_map(path, result, title=title, dipole=dipole))
    i, j = divmod(int(np.nanargmin(result.lowest)), result.lowest.shape[1])
    return [
        f"lowest energy on the map: {result.lowest[i, j] * 1e15:.3g} fJ at x {result.x[j] * 1e6:+.1f} um,"
        f" y {result.y[i] * 1e6:+.1f} um (down), angle {math.degrees(result.lowest_angle[i, j]):.0f} degrees",
        f"point dipoles: nothing is said within {nearest * 1e6:.0f} um; {output}",
    ]


def _write_map_netcdf(path: Path, result: EnergyMap, field: str, cell: str) -> None:
    import xarray as xr

    place, dims = ("y", "x"), ("angle", "y", "x")
    data = {
        "energy": (dims, result.energy * 1e15, {"units": "fJ", "long_name": "interaction energy of two point dipoles"}),
        "lowest": (
            place,
            result.lowest * 1e15,
            {"units": "fJ", "long_name": "energy at the angle that lowers it most"},
        ),
        "lowest_angle": (
            place,
            np.degrees(result.lowest_angle),
            {"units": "degree", "long_name": "that angle, from +x to +y"},
        ),
    }
    if result.energy_sd is not None:
        meaning = "standard deviation of energy from the measured cell's covariance"
        data["energy_sd"] = (dims, result.energy_sd * 1e15, {"units": "fJ", "long_name": meaning})
    dataset = xr.Dataset(
        data,
        coords={
            "x": ("x", result.x * 1e6, {"units": "um", "long_name": "second minus measured cell, to the right"}),
            "y": ("y", result.y * 1e6, {"units": "um", "long_name": "second minus measured cell, down"}),
            "angle": (
                "angle",
                np.degrees(result.angle),
                {"units": "degree", "long_name": "major axis of the second cell"},
            ),
        },
        attrs={
            "Conventions": "CF-1.11",
            "title": "interaction energy around a measured cell",
            "field": field,
            "cell": cell,
            "second_major_pNm": result.major * 1e12,
            "second_minor_pNm": result.minor * 1e12,
            "nearest_um": result.nearest * 1e6,
        },
    )

    def save(temporary: Path) -> None:
        temporary.parent.mkdir(parents=True, exist_ok=True)
        dataset.to_netcdf(temporary, engine="h5netcdf")

    _drawn(path, save)

"""Reading result folders for the population commands: an error names file, row and column."""

from __future__ import annotations

import csv
import json
import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from tfm.errors import InputError, TfmError
from tfm.population.conditions import MeasuredCell
from tfm.units import parse_quantity, to_si

__all__ = ["Folder", "as_json", "measured_cells", "read_folder", "read_rows", "row_number"]

_HEADER = re.compile(r"^\s*([A-Za-z_]+)\s*(?:\[(.*)\])?\s*$")


@dataclass(frozen=True)
class Folder:
    """The tables of one results folder.

    Attributes
    ----------
    path
        The folder.
    cells, pairs, gels
        Rows as text, in file order; empty where the file is missing (never for cells).
    modulus_sd
        field -> Pa, from the sheet that run.json repeats; empty where the run recorded none.
    changes
        Fields measured against their frame of least pull: their numbers are changes and not totals.
    """

    path: Path
    cells: tuple[Mapping[str, str], ...]
    pairs: tuple[Mapping[str, str], ...]
    gels: tuple[Mapping[str, str], ...]
    modulus_sd: Mapping[str, float]
    changes: frozenset[str]


def read_rows(path: Path, needed: Sequence[str]) -> tuple[Mapping[str, str], ...]:
    """Rows of a CSV table as text.

    Raises
    ------
    InputError
        When the file is missing, is not UTF-8 text, lacks a needed column, or a row has a different number of cells.
    """
    try:
        with path.open(encoding="utf-8-sig", newline="") as handle:
            reader = csv.reader(handle)
            header = next(reader, None)
            body = list(reader)
    except FileNotFoundError as error:
        raise InputError(
            "the file does not exist", code="missing-file", file=str(path), remedy="give the folder of a finished run"
        ) from error
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise InputError(
            f"the table cannot be read ({type(error).__name__})", code="unreadable-file", file=str(path),
            remedy="give a CSV table in UTF-8",
        ) from error  # fmt: skip
    if header is None:
        raise InputError("the table is empty", code="empty-table", file=str(path), remedy="run the measurement first")
    for name in needed:
        if name not in header:
            raise InputError(
                "the column is missing",
                code="missing-column",
                file=str(path),
                column=name,
                remedy="give a table of a run",
            )
    rows = []
    for number, cells in enumerate(body, start=2):
        if not cells:
            continue
        if len(cells) != len(header):
            raise InputError(
                f"{len(cells)} cells, the header has {len(header)}", code="ragged-row", file=str(path), row=number,
                remedy="give the table as the run wrote it",
            )  # fmt: skip
        rows.append(dict(zip(header, cells, strict=True)))
    return tuple(rows)


def row_number(row: Mapping[str, str], column: str, path: Path, line: int) -> float | None:
    """The number in a cell of a table; None where it is empty.

    Raises
    ------
    InputError
        For text that is not a finite number, with its place.
    """
    text = row.get(column, "").strip()
    if not text:
        return None
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise InputError(
            f"'{text}' is not a number", code="bad-number", file=str(path), row=line, column=column,
            remedy="give a number or leave the cell empty",
        )  # fmt: skip
    return value


def read_folder(path: Path) -> Folder:
    """The tables of a results folder.

    Raises
    ------
    InputError
        When cells.csv is missing or a table cannot be read.
    """
    cells = read_rows(path / "cells.csv", ("field", "cell", "dipole_xx_pNm", "dipole_xy_pNm", "dipole_yy_pNm"))
    pairs = read_rows(path / "pairs.csv", ("field", "cell_a", "cell_b")) if (path / "pairs.csv").is_file() else ()
    gels = read_rows(path / "gel.csv", ("field", "youngs_modulus_Pa")) if (path / "gel.csv").is_file() else ()
    sheet = _sheet_rows(path / "run.json")
    return Folder(path, cells, pairs, gels, _modulus_sd(sheet, path), _changes(sheet))


def _sheet_rows(path: Path) -> list[dict[str, tuple[str, str]]]:
    """Rows of the sheet as run.json repeats them: column -> (text, unit of the header)."""
    if not path.is_file():
        return []
    try:
        run = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise InputError(
            "the file cannot be read", code="unreadable-file", file=str(path), remedy="run again to write it anew"
        ) from error
    rows = []
    for row in run.get("sheet_rows", []) if isinstance(run, dict) else []:
        named = {}
        for header, text in row.items():
            match = _HEADER.match(str(header))
            if match:
                named[match.group(1).lower()] = (str(text), match.group(2) or "")
        rows.append(named)
    return rows


def _modulus_sd(sheet: Sequence[Mapping[str, tuple[str, str]]], path: Path) -> dict[str, float]:
    out = {}
    for row in sheet:
        field = row.get("field", ("", ""))[0]
        for column, factor in (("youngs_modulus_sd", None), ("shear_modulus_sd", "poisson")):
            text, unit = row.get(column, ("", ""))
            if not text.strip():
                continue
            try:
                value = parse_quantity(text, "stress", header_unit=unit)
                # E = 2 G (1 + nu) at the entered nu.
                scale = 1.0 if factor is None else 2 * (1 + parse_quantity(row[factor][0], "dimensionless"))
            except TfmError as error:
                raise error.at(file=str(path / "run.json"), column=column) from error
            out[field] = value * scale
    return out


def _changes(sheet: Sequence[Mapping[str, tuple[str, str]]]) -> frozenset[str]:
    return frozenset(
        row.get("field", ("", ""))[0] for row in sheet if row.get("relaxed", ("", ""))[0].strip().lower() == "quietest"
    )


def measured_cells(folder: Folder, *, prefix: str = "") -> tuple[list[MeasuredCell], list[str]]:
    """Rows that carry a dipole with an error bar, and sentences about what was left out.

    A column ``same_cell`` (copied through from the sheet) names cells that were imaged in several fields; without it a
    cell is its field and number. Rows of changes are left out: a change against the frame of least pull is no dipole.

    Raises
    ------
    InputError
        For text where a number should be.
    """
    path = folder.path / "cells.csv"
    moduli = {}
    for line, row in enumerate(folder.gels, start=2):
        moduli[row["field"]] = row_number(row, "youngs_modulus_Pa", folder.path / "gel.csv", line)
    out: list[MeasuredCell] = []
    left = {"failed": 0, "without error bar": 0, "changes, not totals": 0}
    unit = to_si(1.0, "pN*m", "energy")
    for line, row in enumerate(folder.cells, start=2):
        values = [row_number(row, f"dipole_{k}_pNm", path, line) for k in ("xx", "xy", "yy")]
        sds = [row_number(row, f"dipole_{k}_sd_pNm", path, line) for k in ("xx", "xy", "yy")]
        cross = [row_number(row, f"cov_{k}_pNm2", path, line) for k in ("xx_xy", "xx_yy", "xy_yy")]
        if row.get("status") == "failed" or None in values:
            left["failed"] += 1
            continue
        if None in sds:
            left["without error bar"] += 1
            continue
        if row["field"] in folder.changes:
            left["changes, not totals"] += 1
            continue
        known = [float(v) for v in sds if v is not None]
        covariance = np.diag(np.square(known))
        for (i, j), value in zip(((0, 1), (0, 2), (1, 2)), cross, strict=True):
            covariance[i, j] = covariance[j, i] = value or 0.0
        axis = row_number(row, "outline_axis_deg", path, line)
        own = row.get("same_cell", "").strip()
        out.append(
            MeasuredCell(
                identity=f"{prefix}{own}" if own else f"{prefix}{row['field']} / {row['cell']}",
                source=f"{prefix}{row['field']}",
                condition=row.get("condition", "").strip() or "all cells",
                dipole=np.array([v for v in values if v is not None]) * unit,
                covariance=covariance * unit**2,
                outline_axis=None if axis is None else math.radians(axis),
                youngs_modulus=moduli.get(row["field"]),
                youngs_modulus_sd=folder.modulus_sd.get(row["field"], 0.0),
            )
        )
    said = [f"{count} rows left out: {reason}" for reason, count in left.items() if count]
    return out, said


def as_json(document: Any) -> str:
    """Text of a JSON document, the same bytes for the same content."""
    return json.dumps(document, indent=1, ensure_ascii=False, allow_nan=False) + "\n"

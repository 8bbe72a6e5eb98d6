"""The cell sheet: one row per imaged field, every quantity with its unit, every problem said at once.

What can be told from the text alone makes the whole sheet unusable (:class:`~tfm.batch.problems.SheetError`, exit 2):
a sheet with one bare number cannot be trusted in its other rows. What only the files behind a row show is the matter of
:mod:`tfm.batch.precheck`.
"""

from __future__ import annotations

import hashlib
import re
import unicodedata
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from tfm.batch.problems import Problem, SheetError, readable
from tfm.batch.settings import RowValues
from tfm.batch.sheet_columns import COLUMNS
from tfm.batch.sheet_header import Header, missing_columns, read_header
from tfm.batch.sheet_text import SheetText, read_sheet_text
from tfm.batch.sheet_values import read_value
from tfm.errors import TfmError

__all__ = ["Sheet", "read_sheet"]

_LONGEST_NAME = 200
#: Marks that turn the direction of writing: a name with them shows as something else than it is.
_TURNING = re.compile("[\u202a-\u202e\u2066-\u2069]")


@dataclass(frozen=True)
class Sheet:
    """A cell sheet that can be run.

    Attributes
    ----------
    path
        The file; paths in its rows are relative to its folder.
    rows
        One record per imaged field, in the sheet's order.
    raw
        The rows as typed: header cell -> text, for a sheet that can be written again.
    extra_columns
        Columns that the tables copy through, by the names that they get there.
    sha256
        Hash of the file's bytes.
    """

    path: Path
    rows: tuple[RowValues, ...]
    raw: tuple[dict[str, str], ...]
    extra_columns: tuple[str, ...]
    sha256: str


def _check_name(name: str) -> tuple[str, str, str] | None:
    if not name:
        return "the field has no name", "give every field a unique name", "empty-cell"
    if len(name) > _LONGEST_NAME:
        return f"the name has {len(name)} characters", f"use at most {_LONGEST_NAME}", "bad-name"
    if _TURNING.search(name) or any(unicodedata.category(c) in {"Cc", "Cs", "Zl", "Zp"} for c in name):
        return (
            "the name holds a character that cannot be shown",
            "use letters, digits and signs in one line",
            "bad-name",
        )
    return None


def _combinations(values: dict[str, Any]) -> list[tuple[str, str, str, str]]:
    """What only several cells of a row together show: column, message, remedy, code."""
    found = []
    sources = [name for name in ("stressed", "displacement", "traction") if values.get(name)]
    if len(sources) != 1:
        said = "none of them is filled in" if not sources else f"{' and '.join(sources)} are filled in"
        found.append(
            (
                "stressed",
                f"a row starts from stressed images, displacement or traction; {said}",
                "fill in exactly one",
                "which-source",
            )
        )
    elif sources == ["stressed"] and not values.get("relaxed"):
        found.append(
            (
                "relaxed",
                "the relaxed image is not given",
                "name the image, or write quietest for a time series",
                "empty-cell",
            )
        )
    elif values.get("relaxed") and sources != ["stressed"]:
        found.append(("relaxed", f"a relaxed image is of no use beside {sources[0]}", "empty the cell", "which-source"))
    moduli = [name for name in ("youngs_modulus", "shear_modulus") if values.get(name) is not None]
    if len(moduli) == 2:
        found.append(
            ("shear_modulus", "both youngs_modulus and shear_modulus are given", "keep one of the two", "two-moduli")
        )
    elif not moduli:
        found.append(
            ("youngs_modulus", "no stiffness is given", "fill in youngs_modulus or shear_modulus", "empty-cell")
        )
    if values.get("poisson") is None:
        found.append(("poisson", "the Poisson ratio is not given", "fill in a number from 0 to 0.5", "empty-cell"))
    for name, column in COLUMNS.items():
        if column.sd_of and values.get(name) is not None and values.get(column.sd_of) is None:
            found.append(
                (name, f"a standard deviation without {column.sd_of}", f"fill in {column.sd_of} as well", "sd-alone")
            )
    return found


def _read_row(
    number: int, cells: tuple[str, ...], header: Header, file: str, problems: list[Problem]
) -> RowValues | None:
    values: dict[str, Any] = {}
    bad: set[str] = set()
    name = cells[header.known["field"][0]] if "field" in header.known else ""

    def say(column: str, message: str, remedy: str, code: str) -> None:
        index = header.known[column][0] if column in header.known else None
        value = readable(cells[index]) if index is not None else ""
        problems.append(Problem(file, number, column, value, message, remedy, code, readable(name)))

    for column, (index, unit) in header.known.items():
        if not cells[index]:
            continue
        try:
            values[column] = read_value(cells[index], COLUMNS[column], unit)
        except TfmError as error:
            bad.add(column)
            say(column, error.message, error.remedy, error.code)
    for column in list(values):
        mean = COLUMNS[column].sd_of
        if isinstance(values[column], str) and mean:  # '10 %' of a mean that stands in another cell
            share = float(values[column])
            if values.get(mean) is None:
                values[column] = 0.0 if mean in bad else share
            else:
                values[column] = float(f"{share * values[mean]:.15g}")
    wrong = _check_name(values.get("field", ""))
    if wrong and "field" in header.known:
        say("field", *wrong)
    for column, message, remedy, code in _combinations({**values, **dict.fromkeys(bad, 0.0)}):
        present = column in header.known or header.known.keys() & {"youngs_modulus", "shear_modulus"}
        if present and column not in bad and not (column == "stressed" and "field" not in header.known):
            say(column, message, remedy, code)
    if any(p.row == number for p in problems) or "field" not in values:
        return None
    extra = {label: cells[index] for label, index in header.extra.items()}
    return RowValues(row=number, extra=extra, **values)


def _duplicates(text: SheetText, header: Header, file: str, problems: list[Problem]) -> None:
    if "field" not in header.known:
        return
    index = header.known["field"][0]
    seen: dict[str, int] = {}
    for number, cells in text.rows:
        # Two spellings that look the same on a screen are the same name.
        name = unicodedata.normalize("NFC", cells[index])
        if not name:
            continue
        if name in seen:
            message = f"the field '{readable(name)}' stands in row {seen[name]} already"
            problems.append(
                Problem(
                    file,
                    number,
                    "field",
                    readable(name),
                    message,
                    "give every field a unique name",
                    "duplicate-field",
                    readable(name),
                )
            )
        else:
            seen[name] = number


def read_sheet(path: str | Path, *, reserved: frozenset[str] = frozenset()) -> Sheet:
    """Read and validate a cell sheet.

    Parameters
    ----------
    path
        CSV file, UTF-8.
    reserved
        Names of columns that the result tables use themselves; a copied column of such a name gets
        ``sheet_`` put before it.

    Returns
    -------
    Sheet

    Raises
    ------
    SheetError
        With everything that is wrong, in the order of rows and columns.
    """
    path = Path(path)
    file = str(path)
    text = read_sheet_text(path, file=file)
    problems: list[Problem] = []
    header = read_header(text, file, reserved, problems)
    missing_columns(header, file, problems)
    if not text.rows and not problems:
        problems.append(
            Problem(file, None, "", "", "the sheet has a header and no rows", "add a row per field", "empty-sheet")
        )
    rows = []
    for number, cells in text.rows:
        row = _read_row(number, cells, header, file, problems)
        if row is not None:
            rows.append(row)
    _duplicates(text, header, file, problems)
    if problems:
        order = {name: index for index, name in enumerate(text.header)}
        problems.sort(key=lambda p: (p.row or 0, order.get(p.column, len(order))))
        raise SheetError(problems)
    raw = tuple({c: v for c, v in zip(text.header, cells, strict=True) if c} for _, cells in text.rows)
    return Sheet(path, tuple(rows), raw, tuple(header.extra), hashlib.sha256(path.read_bytes()).hexdigest())

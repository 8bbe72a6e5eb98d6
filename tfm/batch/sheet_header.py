"""The header row of a cell sheet: which column stands where, with which unit, and which are only copied through."""

from __future__ import annotations

from dataclasses import dataclass

from tfm.batch.problems import Problem, readable
from tfm.batch.sheet_columns import COLUMNS, near_miss, split_header
from tfm.batch.sheet_text import SheetText
from tfm.errors import InputError
from tfm.units import to_si

__all__ = ["Header", "missing_columns", "read_header"]


@dataclass
class Header:
    """Where each known column stands, its unit, and the columns to copy through."""

    known: dict[str, tuple[int, str]]
    extra: dict[str, int]
    meant: frozenset[str] = frozenset()


def read_header(text: SheetText, file: str, reserved: frozenset[str], problems: list[Problem]) -> Header:
    """Sort the columns into known and copied ones; whatever is wrong with them is added to ``problems``."""
    known: dict[str, tuple[int, str]] = {}
    extra: dict[str, int] = {}

    def say(column: str, value: str, message: str, remedy: str, code: str) -> None:
        problems.append(Problem(file, 1, readable(column), readable(value), message, remedy, code))

    names: dict[str, int] = {}
    near: set[str] = set()
    for index, cell in enumerate(text.header):
        name, unit = split_header(cell)
        if not cell:
            if any(row[index] for _, row in text.rows):
                say("", "", f"column {index + 1} has values and no name", "name the column", "unnamed-column")
            continue
        if name in names:
            say(
                name,
                cell,
                f"the column stands twice ({names[name] + 1} and {index + 1})",
                "keep one of them",
                "duplicate-column",
            )
            continue
        names[name] = index
        if name in COLUMNS:
            known[name] = (index, unit)
            column = COLUMNS[name]
            if unit and (column.kind != "quantity" or column.dimension == "dimensionless"):
                say(name, cell, f"the column has no unit and the header says [{unit}]", f"write '{name}'", "wrong-unit")
            elif unit and unit != "%":
                try:
                    to_si(1.0, unit, column.dimension)
                except InputError as error:
                    problems.append(Problem.from_error(error, file=file, row=1, column=name, value=cell))
            continue
        meant = near_miss(cell if cell not in COLUMNS else name) or near_miss(name)
        if meant:
            near.add(split_header(meant)[0])
            say(
                cell,
                cell,
                f"unknown column; did you mean '{meant}'?",
                f"write '{meant}' or rename the column",
                "near-miss-column",
            )
            continue
        label = cell
        while label in reserved or label in extra:
            label = f"sheet_{label}"
        extra[label] = index
    return Header(known, extra, frozenset(near))


def missing_columns(header: Header, file: str, problems: list[Problem]) -> None:
    """Add the columns that every sheet needs and this one lacks to ``problems``."""
    have = set(header.known)

    def say(column: str, message: str, remedy: str) -> None:
        # A mistyped header is said once, as a near miss, and not again as a missing column.
        if column not in header.meant:
            problems.append(Problem(file, 1, column, "", message, remedy, "missing-column"))

    if "field" not in have:
        say("field", "the column is missing", "add a column 'field' with a unique name in every row")
    if not have & {"stressed", "displacement", "traction"}:
        say(
            "stressed",
            "the column is missing",
            "add 'stressed' and 'relaxed' (images), or 'displacement', or 'traction'",
        )
    if "stressed" in have and "relaxed" not in have:
        say("relaxed", "the column is missing", "add 'relaxed', with an image or the word quietest in every row")
    if not have & {"youngs_modulus", "shear_modulus"}:
        say("youngs_modulus", "the column is missing", "add 'youngs_modulus [kPa]' or 'shear_modulus [kPa]'")
    if "poisson" not in have:
        say("poisson", "the column is missing", "add 'poisson', a number from 0 to 0.5")

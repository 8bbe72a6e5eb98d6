"""One cell of the sheet: text in, a value in SI units out, or one line that says what to write instead."""

from __future__ import annotations

import math
import re
import unicodedata
from functools import lru_cache
from typing import Any

from tfm.batch.sheet_columns import Column
from tfm.errors import InputError
from tfm.units import DIMENSIONS, parse_quantity

__all__ = ["read_value"]

_NUMBER = re.compile(r"[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d{1,3})?", re.ASCII)
#: Units are words with small powers, joined by * or /: anything else is not handed to the units library.
_WORD = r"[A-Za-z\u00b5\u03bc\u2126\u03a9]{1,16}(?:(?:\^|\*\*)?-?[1-4]|[\u00b2\u00b3])?"
_UNIT = re.compile(rf"{_WORD}(?:\s*[*/\u00b7 ]\s*{_WORD}){{0,3}}")
_PERCENT = re.compile(r"(\d+(?:\.\d*)?|\.\d+)\s*%", re.ASCII)
_NOTHING = {
    "na",
    "n/a",
    "nan",
    "none",
    "null",
    "-",
    "--",
    "?",
    "inf",
    "infinity",
    "infinite",
    "#n/a",
    "#ref!",
    "#value!",
}


def _spaces(text: str) -> str:
    return "".join(" " if unicodedata.category(c) == "Zs" else c for c in text).strip()


@lru_cache(maxsize=4096)  # a column mostly repeats the same few quantities
def _quantity(text: str, column: Column, header_unit: str) -> float | str:
    example = DIMENSIONS[column.dimension][1]
    plain = _spaces(text).replace("\u2212", "-")
    if plain.lower() in _NOTHING:
        raise InputError(f"'{text}' is no number", code="bad-number", remedy="leave the cell empty if it is not known")
    if column.sd_of:
        percent = _PERCENT.fullmatch(plain if header_unit != "%" else f"{plain} %")
        if percent:
            return str(float(percent.group(1)) / 100)
    number = _NUMBER.match(plain)
    unit = plain[number.end() :].strip() if number else ""
    if (
        number
        and unit
        and not unit.startswith(",")
        and column.dimension != "dimensionless"
        and not _UNIT.fullmatch(unit)
    ):
        raise InputError(
            f"'{text}' has no unit of {column.dimension}", code="wrong-unit", remedy=f"write for instance '{example}'"
        )
    value = parse_quantity(plain, column.dimension, header_unit=header_unit)
    low_text = "0" if column.sd_of or not column.low else f"{column.low:g} {DIMENSIONS[column.dimension][0]}".strip()
    if not math.isfinite(value) or not column.low <= value <= column.high:
        high_text = f"{column.high:g} {DIMENSIONS[column.dimension][0]}".strip()
        raise InputError(
            f"'{text}' is outside {low_text} to {high_text}",
            code="out-of-range",
            remedy="check the number and its unit",
        )
    return value


def _index(text: str, what: str, remedy: str) -> int:
    if not re.fullmatch(r"\d{1,6}", text, re.ASCII):
        raise InputError(f"'{text}' is no {what}", code="bad-number", remedy=remedy)
    return int(text)


def read_value(text: str, column: Column, header_unit: str = "") -> Any:
    """The value of one cell that is not empty.

    Quantities come back as SI floats. A standard deviation may be a percentage of its mean; it then comes back as
    text, a share, because the mean stands in another cell.

    Raises
    ------
    InputError
        Without a place; the caller knows row and column.

    Examples
    --------
    >>> from tfm.batch.sheet_columns import COLUMNS
    >>> read_value("5 kPa", COLUMNS["youngs_modulus"]), read_value("30", COLUMNS["thickness"], "um")
    (5000.0, 3e-05)
    >>> read_value("10 %", COLUMNS["youngs_modulus_sd"])
    '0.1'
    """
    if column.kind == "quantity":
        return _quantity(text, column, header_unit)
    if column.kind == "index":
        return _index(text, "channel", "count channels from 0")
    if column.kind == "plane":
        if text in {"sharpest", "max"}:
            return text
        return _index(text, "plane", "write a plane's index from 0, sharpest or max")
    if column.kind == "path":
        if "\x00" in text or any(unicodedata.category(c) == "Cc" for c in text):
            raise InputError("the path holds a control character", code="bad-path", remedy="write the path in one line")
        return text
    return text

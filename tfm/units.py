"""Units live at the edges: text with a unit comes in here, SI floats go on, and tables turn back.

``pint`` does the arithmetic; it is imported on first use because it costs a quarter of a second.
"""

from __future__ import annotations

import re
from functools import cache
from typing import Any

from tfm.errors import InputError

__all__ = ["DIMENSIONS", "OUTPUT_UNITS", "from_si", "normalise_unit", "parse_quantity", "to_si"]

#: Dimension word -> (SI unit, example for error messages).
DIMENSIONS: dict[str, tuple[str, str]] = {
    "length": ("m", "30 um"),
    "stress": ("Pa", "5 kPa"),
    "time": ("s", "2 min"),
    "energy": ("J", "0.5 fJ"),
    "dimensionless": ("", "0.45"),
}

#: Unit suffix of a table column -> unit that pint understands.
OUTPUT_UNITS: dict[str, str] = {
    "um": "um",
    "um2": "um**2",
    "deg": "degree",
    "s": "s",
    "pNm": "pN*m",
    "pNm2": "(pN*m)**2",
    "nN": "nN",
    "pN": "pN",
    "fNm": "fN*m",
    "fJ": "fJ",
    "Pa": "Pa",
}

_MICRO = ("\u00b5", "\u03bc", "\\u00B5", "\\u00b5", "\\u03BC", "\\u03bc")
_NUMBER = re.compile(r"^\s*([+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d+)?)\s*(.*?)\s*$", re.ASCII)


@cache
def _registry() -> Any:
    import pint

    return pint.UnitRegistry(cache_folder=None)


def normalise_unit(unit: str) -> str:
    """The unit's spelling that pint understands: micro signs of every kind, ``micron``, stray brackets.

    Examples
    --------
    >>> normalise_unit("\\u00b5m"), normalise_unit("[micron]"), normalise_unit("kPa")
    ('um', 'um', 'kPa')
    """
    text = unit.strip().strip("[]()").strip()
    for sign in _MICRO:
        text = text.replace(sign, "u")
    if text.lower() in {"micron", "microns", "micrometer", "micrometers", "micrometre", "micrometres"}:
        return "um"
    return text


def to_si(value: float, unit: str, dimension: str) -> float:
    """``value`` in ``unit`` as an SI float of the given dimension.

    Raises
    ------
    InputError
        When the unit is unknown or of another dimension.

    Examples
    --------
    >>> to_si(5.0, "kPa", "stress")
    5000.0
    """
    si, example = DIMENSIONS[dimension]
    text = normalise_unit(unit)
    try:
        quantity = _registry().Quantity(value, text)
        # Fifteen digits: '30 um' is 3e-05 and not 2.9999999999999997e-05.
        return float(f"{quantity.to(si).magnitude:.15g}")
    except Exception as error:  # pint raises several unrelated classes on malformed units
        raise InputError(
            f"'{unit}' is not a unit of {dimension}", code="wrong-unit", remedy=f"write for instance '{example}'"
        ) from error


def parse_quantity(text: str, dimension: str, *, header_unit: str = "") -> float:
    """A quantity typed by a person, as an SI float.

    Parameters
    ----------
    text
        For instance ``5 kPa``, or ``5`` where the header carries the unit.
    dimension
        A key of :data:`DIMENSIONS`.
    header_unit
        The unit in square brackets behind the column's name, if any.

    Raises
    ------
    InputError
        For a bare number, a number that cannot be read, a decimal comma, or a unit of another dimension.

    Examples
    --------
    >>> parse_quantity("5 kPa", "stress"), parse_quantity("200", "length", header_unit="um")
    (5000.0, 0.0002)
    """
    _, example = DIMENSIONS[dimension]
    match = _NUMBER.match(text)
    if match is None:
        raise InputError(
            f"'{text}' cannot be read as a number with a unit",
            code="bad-number",
            remedy=f"write for instance '{example}'",
        )
    number, unit = float(match.group(1)), match.group(2)
    if unit.startswith(","):
        raise InputError(f"'{text}' has a decimal comma", code="decimal-comma", remedy="write a decimal point")
    if dimension == "dimensionless":
        if unit:
            raise InputError(
                f"'{text}' should be a plain number", code="wrong-unit", remedy=f"write for instance {example}"
            )
        return number
    if unit and header_unit and normalise_unit(unit) != normalise_unit(header_unit):
        raise InputError(
            f"'{text}' carries a unit and the header says [{header_unit}]",
            code="two-units",
            remedy="keep one of the two",
        )
    if not unit and not header_unit:
        raise InputError(f"'{text}' has no unit", code="bare-number", remedy=f"write for instance '{example}'")
    return to_si(number, unit or header_unit, dimension)


def from_si(value: float, suffix: str) -> float:
    """An SI float in the unit that a table column's suffix names.

    Examples
    --------
    >>> from_si(1e-12, "pNm")  # 1 pN m = 1e-12 N m = 1 pJ
    1.0
    """
    return value * _factor(suffix)


_SI_OF = {"um": "m", "um2": "m**2", "deg": "radian", "s": "s", "pNm": "N*m", "pNm2": "(N*m)**2", "nN": "N", "pN": "N",
          "fNm": "N*m", "fJ": "J", "Pa": "Pa"}  # fmt: skip


@cache
def _factor(suffix: str) -> float:
    # The exact decimal factor is wanted (1.0, not 0.9999999999999999): round to the 15 digits that a float carries.
    return float(f"{_registry().Quantity(1.0, _SI_OF[suffix]).to(OUTPUT_UNITS[suffix]).magnitude:.15g}")

"""The columns that a cell sheet may have, and how close to one of them a mistyped name is."""

from __future__ import annotations

import difflib
import re
from dataclasses import dataclass

__all__ = ["COLUMNS", "Column", "near_miss", "split_header"]


@dataclass(frozen=True)
class Column:
    """A known column of the cell sheet.

    ``kind`` is ``text``, ``path``, ``quantity``, ``index`` or ``plane``; ``low`` and ``high`` bound a quantity in SI
    units (a value outside cannot be meant: common practice); ``sd_of`` names the column whose standard deviation it is.
    """

    name: str
    kind: str
    dimension: str = ""
    low: float = 0.0
    high: float = float("inf")
    sd_of: str = ""


#: Known columns in the contract's order.
COLUMNS: dict[str, Column] = {
    column.name: column
    for column in (
        Column("field", "text"),
        Column("stressed", "path"),
        Column("relaxed", "path"),
        Column("displacement", "path"),
        Column("traction", "path"),
        Column("outline", "path"),
        Column("pixel", "quantity", "length", 1e-9, 1e-3),
        Column("pixel_sd", "quantity", "length", 0.0, 1e-3, "pixel"),
        Column("youngs_modulus", "quantity", "stress", 1.0, 1e9),
        Column("youngs_modulus_sd", "quantity", "stress", 0.0, 1e9, "youngs_modulus"),
        Column("shear_modulus", "quantity", "stress", 1.0, 1e9),
        Column("shear_modulus_sd", "quantity", "stress", 0.0, 1e9, "shear_modulus"),
        Column("poisson", "quantity", "dimensionless", 0.0, 0.5),
        Column("poisson_sd", "quantity", "dimensionless", 0.0, 0.5, "poisson"),
        Column("thickness", "quantity", "length", 1e-7, 0.1),
        Column("thickness_sd", "quantity", "length", 0.0, 0.1, "thickness"),
        Column("condition", "text"),
        Column("frame_interval", "quantity", "time", 1e-6, 1e7),
        Column("bead_channel", "index"),
        Column("z", "plane"),
        Column("noise_energy", "quantity", "energy", 1e-24, 1.0),
    )
}

#: Other spellings of a known column. Kept and copied through, such a column would look as if it had been used.
_MEANT = {
    "e": "youngs_modulus",
    "young": "youngs_modulus",
    "youngs": "youngs_modulus",
    "young_modulus": "youngs_modulus",
    "elastic_modulus": "youngs_modulus",
    "g": "shear_modulus",
    "nu": "poisson",
    "poisson_ratio": "poisson",
    "poissons_ratio": "poisson",
    "pixel_size": "pixel",
    "pixelsize": "pixel",
    "px": "pixel",
    "h": "thickness",
    "gel_thickness": "thickness",
    "dt": "frame_interval",
    "time_step": "frame_interval",
    "interval": "frame_interval",
    "channel": "bead_channel",
    "plane": "z",
    "outlines": "outline",
    "mask": "outline",
    "reference": "relaxed",
    "loaded": "stressed",
}
_BRACKET = re.compile(r"^(.*?)\s*\[([^\[\]]*)\]$")
_UNIT_TAIL = re.compile(r"^(.*?)[\s_]*(?:\(([^()]*)\)|_(um|nm|mm|m|kpa|pa|mpa|s|ms|min|fj|j))$", re.IGNORECASE)


def split_header(cell: str) -> tuple[str, str]:
    """A header cell as name and unit.

    Examples
    --------
    >>> split_header("youngs_modulus [kPa]"), split_header("poisson")
    (('youngs_modulus', 'kPa'), ('poisson', ''))
    """
    match = _BRACKET.match(cell)
    return (match.group(1).strip(), match.group(2).strip()) if match else (cell, "")


def _plain(name: str) -> str:
    return re.sub(r"[\s.\-_']+", "_", name.strip().lower()).strip("_")


def near_miss(name: str) -> str:
    """The header cell that a mistyped name most likely stands for; empty when it resembles none.

    Examples
    --------
    >>> near_miss("Youngs modulus"), near_miss("thicknes (um)"), near_miss("nu"), near_miss("donor")
    ('youngs_modulus', 'thickness [um]', 'poisson', '')
    """
    if name in COLUMNS:
        return ""
    unit = ""
    tail = _UNIT_TAIL.match(name)
    candidates = [(_plain(name), "")]
    if tail:
        unit = tail.group(2) or tail.group(3) or ""
        candidates.append((_plain(tail.group(1)), unit))
    for plain, found in candidates:
        known = plain if plain in COLUMNS else _MEANT.get(plain, "")
        if not known and len(plain) >= 4:
            close = difflib.get_close_matches(plain, [c for c in COLUMNS if len(c) >= 4], n=1, cutoff=0.82)
            known = close[0] if close else ""
        if known:
            return f"{known} [{found}]" if found and COLUMNS[known].kind == "quantity" else known
    return ""

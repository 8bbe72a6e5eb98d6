"""Numbers and sentences as people read them: value with error, alt texts, the name of a direction."""

from __future__ import annotations

import math

from tfm.report.results import FieldResult, Row, number

__all__ = ["alt_maps", "cell_sentence", "direction", "plain", "with_error"]


def plain(value: float | None, digits: int = 3) -> str:
    """Significant digits without an exponent where that is readable; an em dash for what was not measured.

    Examples
    --------
    >>> plain(1234.5), plain(0.012345), plain(None), plain(-0.0), plain(2209.0)
    ('1230', '0.0123', '—', '0', '2209')
    """
    if value is None:
        return "—"
    if value == 0:
        return "0"
    if float(value).is_integer() and abs(value) < 1e6:
        return f"{value:.0f}"  # counts, and values typed as whole numbers
    places = digits - 1 - math.floor(math.log10(abs(value)))
    if abs(value) < 1e-4 or abs(value) >= 1e6:
        return f"{value:.{digits - 1}e}"
    rounded = round(value, places)
    return f"{rounded:.{max(places, 0)}f}"


def with_error(value: float | None, sd: float | None) -> str:
    """Value and one standard deviation, rounded by the error's second digit.

    Examples
    --------
    >>> with_error(1.2345, 0.0567), with_error(1.2345, None), with_error(153.2, 21.0)
    ('1.234 ± 0.057', '1.23', '153 ± 21')
    """
    if value is None or sd is None or sd <= 0:
        return plain(value)
    places = max(1 - math.floor(math.log10(sd)), 0)
    return f"{value:.{places}f} ± {sd:.{places}f}"


def direction(degrees: float) -> str:
    """How an axis lies in the picture (y points down).

    Examples
    --------
    >>> direction(3.0), direction(45.0), direction(-45.0), direction(88.0)
    ('left to right', 'upper left to lower right', 'lower left to upper right', 'top to bottom')
    """
    if abs(degrees) <= 22.5:
        return "left to right"
    if abs(degrees) >= 67.5:
        return "top to bottom"
    return "upper left to lower right" if degrees > 0 else "lower left to upper right"


def cell_sentence(row: Row, *, change: bool = False) -> str:
    """What one row of cells.csv says, in words."""
    moment = number(row, "contractile_moment_pNm")
    if moment is None:
        return f"Cell {row.get('cell', '?')}: no number is given."
    sd = number(row, "contractile_moment_total_sd_pNm") or number(row, "contractile_moment_sd_pNm")
    verb = ("pulls inwards" if moment > 0 else "pushes outwards") if not change else "changed its pull"
    text = f"Cell {row.get('cell', '?')} {verb} with a contractile moment of {with_error(moment, sd)} pN m"
    if change:
        text = f"Cell {row.get('cell', '?')} {verb} by {with_error(moment, sd)} pN m against the quietest frame"
    axis, axis_sd = number(row, "axis_deg"), number(row, "axis_sd_deg")
    if axis is not None:
        text += f", most along {with_error(axis, axis_sd)}° ({direction(axis)})"
    if moment and sd is not None and abs(moment) < 1.96 * sd:
        text += "; zero is within its 95 % interval"
    return text + "."


def alt_maps(field: FieldResult, rows: list[Row]) -> str:
    """Alt text of the maps: the picture's content with its numbers."""
    peaks = [number(r, "displacement_peak_um") for r in rows]
    tractions = [number(r, "traction_peak_Pa") for r in rows]
    known, pulls = [p for p in peaks if p is not None], [t for t in tractions if t is not None]
    parts = [
        "Three maps, x to the right and y down: displacement arrows over the beads, traction with outlines, "
        "and where the moment is made."
    ]
    if known:
        parts.append(f"Largest displacement {max(known):.2g} µm.")
    if pulls:
        parts.append(f"Largest traction {max(pulls) / 1e3:.2g} kPa.")
    parts += [cell_sentence(r, change=field.change_only) for r in rows]
    return " ".join(parts)

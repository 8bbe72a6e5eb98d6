"""Lines of the index: one per field, one per condition."""

from __future__ import annotations

from collections.abc import Sequence
from statistics import median
from typing import Any

from tfm.report.drawing import Pictures
from tfm.report.groups import Group, group_label
from tfm.report.results import FieldResult, Row, number
from tfm.report.triage import relative_error
from tfm.report.words import plain, with_error

__all__ = ["field_line", "group_line"]

_MOST = 6


def group_line(group: Group, fields: Sequence[FieldResult]) -> dict[str, Any]:
    """One line of the table of conditions: its fields by status, its cells, their mean and how well each is known."""
    mine = [f for f in fields if group_label(f) == group.condition]
    errors = [100 * c.sd / abs(c.value) for c in group.cells if c.sd is not None and c.value]
    interval = f" ({plain(group.low)} to {plain(group.high)})" if group.low is not None else ""
    count = {s: sum(f.status == s for f in mine) for s in ("ok", "caution", "failed")}
    error = f"{plain(median(errors), 2)} %" if errors else "—"
    return {
        "name": group.condition,
        **count,
        "cells": len(group.cells),
        "mean": plain(group.mean) + interval,
        "error": error,
    }


def _top(rows: Sequence[Row], key: str, factor: float = 1.0) -> float | None:
    """Largest number of a column, None where nothing was measured."""
    return max((factor * v for v in (number(r, key) for r in rows) if v is not None), default=None)


def _cells(field: FieldResult, cells: Sequence[Row]) -> tuple[list[str], list[str]]:
    """Moment and axis of every cell as text; of a series, of the frame of strongest pull."""
    series = len({r.get("frame") for r in cells}) > 1
    moments, axes = [], []
    for name in field.cell_names[:_MOST]:
        rows = [r for r in cells if r.get("cell") == name]
        if not rows:
            continue
        best = max(rows, key=lambda r: abs(number(r, "contractile_moment_pNm") or 0.0))
        sd = number(best, "contractile_moment_total_sd_pNm") or number(best, "contractile_moment_sd_pNm")
        moments.append(("max " if series else "") + with_error(number(best, "contractile_moment_pNm"), sd))
        axes.append(with_error(number(best, "axis_deg"), number(best, "axis_sd_deg")))
    if len(field.cell_names) > _MOST:
        moments.append(f"and {len(field.cell_names) - _MOST} more")
    return moments, axes


def field_line(field: FieldResult, pictures: Pictures) -> dict[str, Any]:
    """One line of the table of fields; ``data`` is what the page sorts and filters by."""
    cells = [r for r in field.cells if number(r, "contractile_moment_pNm") is not None]
    moments, axes = _cells(field, cells)
    error, gel = relative_error(field), (field.gel or {}).get("verdict", "")
    top = {
        "moment": _top(cells, "contractile_moment_pNm"),
        "error": error,
        "axis": number(cells[0], "axis_deg") if cells else None,
        "energy": _top(cells, "strain_energy_fJ"),
        "misfit": _top(field.frames, "misfit"),
        "noise": _top(field.frames, "displacement_noise_um", 1e3),
    }
    data: dict[str, Any] = {"status": field.status, "condition": field.condition, "gel": gel, "notes": field.message}
    data["cells"] = len(field.cell_names)
    data |= {k: "" if v is None else f"{v:.6g}" for k, v in top.items()}
    lowest = _top(cells, "contractile_moment_pNm", -1.0)
    if lowest is not None:
        data["moment-low"] = f"{-lowest:.6g}"
    said = "; ".join(f"cell {n}: {m} pN m" for n, m in zip(field.cell_names, moments, strict=False))
    return {
        "field": field,
        "thumb": f"figures/{field.folder}/{pictures.thumb}" if pictures.thumb else "",
        "alt": f"{field.name}: {said or 'no number'}",
        "search": " ".join((field.name, field.condition, field.message, field.status, gel)).lower(),
        "data": data,
        "cells": len(field.cell_names) or "—",
        "moments": moments or ["—"],
        "axes": axes or ["—"],
        "error": plain(error, 2),
        "energy": plain(top["energy"]),
        "misfit": plain(top["misfit"]),
        "noise": plain(top["noise"], 2),
        "gel": gel or "—",
    }

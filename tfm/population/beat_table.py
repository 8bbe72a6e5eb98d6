"""``beats.csv``: what the time traces of a results folder show, one row per cell and one per pair of cells."""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from tfm.population.beats import Beat, beat_pair, measure_beat
from tfm.population.output import write_text
from tfm.population.tables import read_rows, row_number
from tfm.units import to_si

__all__ = ["BEAT_COLUMNS", "beat_rows", "write_beats"]

#: Columns of beats.csv with their meaning. A row with ``other_cell`` is about two cells, one without about one.
BEAT_COLUMNS: dict[str, str] = {
    "field": "name of the imaged field",
    "cell": "number of the cell",
    "other_cell": "second cell of a pair; empty in the rows of single cells",
    "condition": "group label from the cell sheet",
    "frames": "frames that were used",
    "beating": "yes or no; empty for pairs",
    "period_s": "period of the beat",
    "period_sd_s": "its standard deviation",
    "amplitude_pNm": "highest minus lowest contractile moment of the mean beat",
    "amplitude_sd_pNm": "its standard deviation",
    "rise_rate_pNm_per_s": "steepest increase of the contractile moment",
    "rise_rate_sd_pNm_per_s": "its standard deviation",
    "relaxation_rate_pNm_per_s": "steepest decrease of the contractile moment, as a positive number",
    "relaxation_rate_sd_pNm_per_s": "its standard deviation",
    "beats": "periods that the trace covers",
    "interval_sd_s": "standard deviation of the intervals between single beats",
    "misfit": "chi-square per degree of freedom of the mean beat; 1 is expected",
    "coherence": "0 to 1, of the two cells at the beat's frequency",
    "lag_s": "how long the second cell follows the first; negative: it leads",
    "lag_sd_s": "its standard deviation",
    "notes": "what a reader of this row has to know",
}


def _text(value: object) -> str:
    if value is None:
        return ""
    return f"{value:.8g}" if isinstance(value, float) else str(value)


Trace = tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]


def _traces(path: Path) -> dict[str, dict[str, tuple[str, Trace, int]]]:
    """field -> cell -> (condition, (time, moment, sd) in SI, frames left out)."""
    needed = ("field", "cell", "frame", "time_s", "contractile_moment_pNm", "contractile_moment_sd_pNm")
    unit = to_si(1.0, "pN*m", "energy")
    gathered: dict[str, dict[str, tuple[str, list[tuple[float, float, float]], int]]] = {}
    for line, row in enumerate(read_rows(path, needed), start=2):
        numbers = [
            row_number(row, name, path, line)
            for name in ("time_s", "contractile_moment_pNm", "contractile_moment_sd_pNm")
        ]
        condition, points, missing = gathered.setdefault(row["field"], {}).setdefault(
            row["cell"], (row.get("condition", ""), [], 0)
        )
        if row.get("status") == "failed" or None in numbers:
            gathered[row["field"]][row["cell"]] = (condition, points, missing + 1)
            continue
        known = [float(v) for v in numbers if v is not None]
        points.append((known[0], known[1] * unit, known[2] * unit))
    out: dict[str, dict[str, tuple[str, Trace, int]]] = {}
    for field, cells in gathered.items():
        for cell, (condition, points, missing) in cells.items():
            table = np.array(sorted(points), dtype=np.float64).reshape(-1, 3)
            out.setdefault(field, {})[cell] = (condition, (table[:, 0], table[:, 1], table[:, 2]), missing)
    return out


def _cell_row(field: str, cell: str, condition: str, frames: int, missing: int, beat: Beat) -> dict[str, object]:
    scale = 1e12

    def out(value: float | None) -> float | None:
        return None if value is None else value * scale

    notes = list(beat.notes)
    if missing:
        notes.append(f"{missing} frames left out: failed, or without time or error bar")
    return {
        "field": field, "cell": cell, "condition": condition, "frames": frames,
        "beating": "yes" if beat.beating else "no",
        "period_s": beat.period, "period_sd_s": beat.period_sd, "amplitude_pNm": out(beat.amplitude),
        "amplitude_sd_pNm": out(beat.amplitude_sd), "rise_rate_pNm_per_s": out(beat.rise_rate),
        "rise_rate_sd_pNm_per_s": out(beat.rise_rate_sd), "relaxation_rate_pNm_per_s": out(beat.relaxation_rate),
        "relaxation_rate_sd_pNm_per_s": out(beat.relaxation_rate_sd), "beats": beat.beats if beat.beating else None,
        "interval_sd_s": beat.interval_sd, "misfit": beat.misfit, "notes": "; ".join(notes),
    }  # fmt: skip


def _pair_row(
    field: str, a: str, b: str, condition: str, traces: tuple[Trace, Trace], beats: tuple[Beat, Beat]
) -> dict[str, object] | None:
    """Lag and coherence at the stronger beat's frequency, over the frames that both cells have."""
    strong = max((beat for beat in beats if beat.beating), key=lambda beat: beat.amplitude or 0.0, default=None)
    if strong is None or strong.period is None:
        return None
    shared, ia, ib = np.intersect1d(traces[0][0], traces[1][0], return_indices=True)
    row: dict[str, object] = {"field": field, "cell": a, "other_cell": b, "condition": condition, "frames": shared.size}
    if shared.size < 3 or np.ptp(np.diff(shared)) > 0.1 * np.median(np.diff(shared)):
        return {**row, "notes": "frames are missing: lag and coherence need an unbroken series"}
    pair = beat_pair(shared, traces[0][1][ia], traces[1][1][ib], 1 / strong.period)
    note = "" if pair.coherence_significant else "not more coherent than unrelated cells: no lag is given"
    return {**row, "coherence": pair.coherence, "lag_s": pair.lag, "lag_sd_s": pair.lag_sd, "notes": note}


def beat_rows(path: Path) -> list[dict[str, object]]:
    """Rows of beats.csv from a cells table: cells with at least two frames, then pairs of one field where one beats.

    Raises
    ------
    InputError
        When the table lacks a column or holds text where a number should be.
    """
    rows: list[dict[str, object]] = []
    for field, cells in _traces(path).items():
        found: dict[str, Beat] = {}
        for cell, (condition, trace, missing) in cells.items():
            if trace[0].size + missing < 2 or trace[0].size == 0:
                continue
            found[cell] = measure_beat(*trace)
            rows.append(_cell_row(field, cell, condition, trace[0].size, missing, found[cell]))
        names = list(found)
        for i, a in enumerate(names):
            for b in names[i + 1 :]:
                pair = _pair_row(field, a, b, cells[a][0], (cells[a][1], cells[b][1]), (found[a], found[b]))
                if pair is not None:
                    rows.append(pair)
    return rows


def table_text(rows: Sequence[Mapping[str, object]]) -> str:
    """CSV text of the rows."""
    buffer = io.StringIO()
    writer = csv.DictWriter(buffer, fieldnames=list(BEAT_COLUMNS), lineterminator="\n", restval="")
    writer.writeheader()
    for row in rows:
        writer.writerow({name: _text(value) for name, value in row.items()})
    return buffer.getvalue()


def write_beats(folder: Path, output: Path) -> list[str]:
    """Write ``beats.csv`` for a results folder and return sentences about it."""
    rows = beat_rows(folder / "cells.csv")
    write_text(output, table_text(rows))
    cells = [row for row in rows if not row.get("other_cell")]
    beating = sum(row.get("beating") == "yes" for row in cells)
    return [f"{len(cells)} traces, {beating} beat, {len(rows) - len(cells)} pairs compared: {output}"]

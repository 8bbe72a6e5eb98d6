"""What the report reads: a results folder, and nothing else.

Tables are read as they were written; an empty cell stays ``None`` and no number is made up for it. Everything that is
optional in the folder (fields as netCDF, records, decisions) may be missing.
"""

from __future__ import annotations

import csv
import hashlib
import json
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from tfm.errors import InputError

__all__ = ["STATUSES", "FieldResult", "Results", "Row", "folder_name", "number", "read_results"]

Row = Mapping[str, str]

#: Worst first. ``unfinished`` stands for a field of the sheet that has no row yet (a run that was stopped).
STATUSES = ("failed", "unfinished", "caution", "ok")


@dataclass(frozen=True)
class FieldResult:
    """Everything the folder says about one row of the sheet.

    Attributes
    ----------
    name, position
        The field's name and its place in the sheet (from 0).
    folder
        Name of its folder below ``figures/``: letters, digits, ``-`` and ``_`` only.
    status, message
        Worst status of its frames and cells, and the sentences that go with it.
    frames, cells, pairs
        Its rows of fields.csv, cells.csv and pairs.csv.
    gel
        Its row of gel.csv.
    record
        Its JSON record (error budget, hashes, seconds), empty when there is none.
    data
        Its netCDF file, when there is one.
    sheet
        Its row of the sheet, when the folder keeps it.
    """

    name: str
    position: int
    folder: str
    status: str
    message: str
    frames: tuple[Row, ...] = ()
    cells: tuple[Row, ...] = ()
    pairs: tuple[Row, ...] = ()
    gel: Row | None = None
    record: Mapping[str, Any] = field(default_factory=dict)
    data: Path | None = None
    sheet: Row | None = None

    @property
    def condition(self) -> str:
        """Group label, empty when the sheet gives none."""
        for row in (*self.cells, self.sheet or {}):
            if row.get("condition"):
                return row["condition"]
        return ""

    @property
    def cell_names(self) -> tuple[str, ...]:
        """Cells measured in at least one frame, in table order."""
        return tuple(dict.fromkeys(r["cell"] for r in self.cells if r.get("status") != "failed" and r.get("cell")))

    @property
    def change_only(self) -> bool:
        """True when the numbers are changes against the quietest frame and not totals."""
        typed = {k.strip().lower(): v for k, v in (self.sheet or {}).items()}
        return typed.get("relaxed", "").strip().lower() == "quietest"


@dataclass(frozen=True)
class Results:
    """A results folder."""

    root: Path
    fields: tuple[FieldResult, ...]
    columns: Mapping[str, Mapping[str, Any]]
    run: Mapping[str, Any]
    decisions: Mapping[str, tuple[str, str]]

    def counts(self) -> dict[str, int]:
        """Number of fields by status, in the order of :data:`STATUSES`."""
        return {s: sum(f.status == s for f in self.fields) for s in STATUSES}


def number(row: Row | None, key: str) -> float | None:
    """The cell's number, or None where it was not measured.

    Examples
    --------
    >>> number({"a": "1.5", "b": ""}, "a"), number({"a": "1.5", "b": ""}, "b"), number(None, "a")
    (1.5, None, None)
    """
    text = (row or {}).get(key, "")
    try:
        return float(text) if text not in ("", None) else None
    except ValueError:
        return None


def folder_name(name: str) -> str:
    """A folder name that every file system and every URL accepts, different for different names.

    Examples
    --------
    >>> folder_name("tendon-07")
    'tendon-07'
    >>> folder_name("<script>").startswith("script-")
    True
    """
    plain = re.sub(r"[^A-Za-z0-9_-]+", "-", name).strip("-")[:60]
    if plain == name:
        return plain
    return f"{plain or 'field'}-{hashlib.sha256(name.encode()).hexdigest()[:8]}"


def _read_table(path: Path, *, needed: bool) -> list[dict[str, str]]:
    if not path.exists():
        if needed:
            raise InputError(
                "there is no such table",
                code="no-results",
                file=str(path),
                remedy="give the folder that 'tfm run' wrote",
            )
        return []
    with path.open(newline="", encoding="utf-8-sig") as stream:
        return [{k: v or "" for k, v in row.items() if k} for row in csv.DictReader(stream)]


def _read_json(path: Path) -> dict[str, Any]:
    if not path.exists():
        return {}
    try:
        found = json.loads(path.read_text(encoding="utf-8"))
    except ValueError as error:
        raise InputError(
            "this file is cut or not JSON",
            code="bad-json",
            file=str(path),
            remedy="run 'tfm run' again: it mends the folder",
        ) from error
    return found if isinstance(found, dict) else {}


def _records(root: Path, run: Mapping[str, Any]) -> dict[str, tuple[dict[str, Any], Path | None]]:
    """Field name -> its record and its netCDF file.

    run.json says which record is current; without it, the records themselves say whose they are (their file name is
    only a safe form of the field's name).
    """
    listed = {str(e["field"]): str(e.get("record", "")) for e in _entries(run)}
    if listed:
        paths = [root / path for path in listed.values() if path]
    else:
        paths = sorted((root / "fields").glob("*.json"))
    found: dict[str, tuple[dict[str, Any], Path | None]] = {}
    for path in paths:
        record = _read_json(path)
        data = path.with_suffix(".nc")
        found[str(record.get("field", path.stem))] = (record, data if data.exists() else None)
    return found


def _entries(run: Mapping[str, Any]) -> list[Mapping[str, Any]]:
    """run.json's entries, one per row of the sheet."""
    listed = run.get("fields")
    return [e for e in listed if isinstance(e, Mapping) and "field" in e] if isinstance(listed, list) else []


def _meanings(columns: Mapping[str, Any]) -> dict[str, Mapping[str, Any]]:
    """Column name -> ``{"unit": ..., "meaning": ...}``, whether columns.json is flat or split by table."""
    flat: dict[str, Mapping[str, Any]] = {}
    for key, value in columns.items():
        if isinstance(value, Mapping) and any(k in value for k in ("unit", "meaning", "description")):
            flat[key] = value
        elif isinstance(value, Mapping):
            flat.update({k: v for k, v in _meanings(value).items() if k not in flat})
        elif isinstance(value, str):
            flat[key] = {"unit": "", "meaning": value}
    return flat


def _worst(statuses: Sequence[str]) -> str:
    if not statuses:
        return "unfinished"
    if all(s == "failed" for s in statuses):
        return "failed"
    return "ok" if all(s == "ok" for s in statuses) else "caution"


def _sentences(*groups: Sequence[Row]) -> str:
    """Messages and notes without repeats, in table order."""
    seen: dict[str, None] = {}
    for rows in groups:
        for row in rows:
            for key in ("message", "notes"):
                for part in re.split(r"\s*;\s+", row.get(key, "")):
                    if part.strip():
                        seen.setdefault(part.strip(), None)
    return "; ".join(seen)


def read_results(root: Path) -> Results:
    """Read a results folder.

    Raises
    ------
    InputError
        When fields.csv or cells.csv is missing, or a JSON file is cut.
    """
    root = Path(root)
    tables = [
        _read_table(root / f"{n}.csv", needed=n in ("fields", "cells")) for n in ("fields", "cells", "pairs", "gel")
    ]
    run = _read_json(root / "run.json")
    entries = {str(e["field"]): e for e in _entries(run)}
    records, sheet = _records(root, run), _sheet_rows(run)
    by_field = [_by_field(table) for table in tables]
    names = list(dict.fromkeys([*entries, *(r.get("field", "") for r in tables[0])]))
    fields = []
    for position, name in enumerate(names):
        frames, cells, pairs, gels = (table.get(name, ()) for table in by_field)
        record, data = records.get(name, ({}, None))
        status, message = _outcome(entries.get(name), frames, cells)
        fields.append(
            FieldResult(
                name=name,
                position=position,
                folder=folder_name(name),
                status=status,
                message=message,
                frames=frames,
                cells=cells,
                pairs=pairs,
                gel=gels[0] if gels else None,
                record=record,
                data=data,
                sheet=sheet.get(name),
            )
        )
    decisions = {
        r.get("field", ""): (r.get("decision", ""), r.get("note", ""))
        for r in _read_table(root / "decisions.csv", needed=False)
    }
    return Results(root, tuple(fields), _meanings(_read_json(root / "columns.json")), run, decisions)


def _by_field(table: Sequence[Row]) -> dict[str, tuple[Row, ...]]:
    found: dict[str, list[Row]] = {}
    for row in table:
        found.setdefault(row.get("field", ""), []).append(row)
    return {name: tuple(rows) for name, rows in found.items()}


def _outcome(entry: Mapping[str, Any] | None, frames: Sequence[Row], cells: Sequence[Row]) -> tuple[str, str]:
    """Status and message: what the run said of the field; without run.json, what its rows say."""
    said = _sentences(frames, cells)
    if entry is None:
        return _worst([r.get("status", "") for r in (*frames, *cells)]), said
    status = str(entry.get("status", ""))
    if not entry.get("finished", True) or status not in STATUSES:
        status = "unfinished"
    return status, str(entry.get("message") or said)


def _sheet_rows(run: Mapping[str, Any]) -> dict[str, Row]:
    """Field name -> its row of the sheet as typed. Rows stand in the order of run.json's entries."""
    listed = run.get("sheet_rows")
    rows = (
        [{str(k): str(v) for k, v in r.items()} for r in listed if isinstance(r, Mapping)]
        if isinstance(listed, list)
        else []
    )
    entries = _entries(run)
    if len(entries) == len(rows):
        return {str(e["field"]): row for e, row in zip(entries, rows, strict=True)}
    return {row["field"]: row for row in rows if "field" in row}

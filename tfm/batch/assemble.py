"""Tables and run.json from the stored records, in the sheet's order, with a row for every row of the sheet."""

from __future__ import annotations

import json
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from tfm.batch.atomic import folder_lock, write_text
from tfm.batch.key import ALGORITHM_VERSION
from tfm.batch.schema import TABLES
from tfm.batch.settings import RowValues, RunSettings
from tfm.batch.sheet import Sheet
from tfm.batch.store import Store
from tfm.batch.tables import columns_json, table_text
from tfm.batch.task import Outcome

__all__ = ["Entry", "assemble", "write_results"]

PENDING = "not computed yet: repeat the command, finished fields are kept"


@dataclass
class Entry:
    """What is known of one row of the sheet."""

    row: RowValues
    stem: str
    status: str
    message: str
    code: str = ""
    finished: bool = True
    record: Mapping[str, Any] = field(default_factory=dict)
    outcome: Outcome | None = None

    @property
    def rows(self) -> Mapping[str, Sequence[Mapping[str, Any]]]:
        """Table rows without the columns that the sheet gives."""
        if self.record:
            return self.record["rows"]  # type: ignore[no-any-return]
        text = self.message + (f" [{self.code}]" if self.code else "")
        return {"fields": [{"frame": 0, "status": "failed", "message": text}]}


def _entry(
    row: RowValues, stem: str, store: Store, settings: RunSettings, outcome: Outcome | None, mine: bool
) -> Entry:
    """The record of a row when it is of these settings and values, else its failure, else that it is still to do.

    A row that this run was to do counts only when this run has said so: an older record may be of other images.
    """
    given = {"settings": settings.model_dump(), "sheet": row.used()}

    def same(found: Mapping[str, Any]) -> bool:
        parts = found.get("parts", found)
        return bool(
            {name: parts.get(name) for name in given} == json.loads(json.dumps(given))
            and parts.get("algorithm", ALGORITHM_VERSION) == ALGORITHM_VERSION
        )

    if mine and outcome is None:
        return Entry(row, stem, "failed", PENDING, "pending", finished=False)
    failure = store.read_failure(stem, row.field)
    if failure is not None and same(failure):
        return Entry(row, stem, "failed", failure["message"], failure["code"], outcome=outcome)
    record = store.read_record(stem, row.field)
    if record is not None and same(record):
        return Entry(
            row, stem, record["status"], record["message"], record.get("code", ""), record=record, outcome=outcome
        )
    if outcome is not None:
        return Entry(row, stem, "failed", outcome.message, outcome.code, outcome=outcome)
    return Entry(row, stem, "failed", PENDING, "pending", finished=False)


def assemble(
    sheet: Sheet,
    stems: Mapping[str, str],
    store: Store,
    settings: RunSettings,
    outcomes: Mapping[str, Outcome],
    mine: frozenset[str],
) -> list[Entry]:
    """One entry per row of the sheet, in its order."""
    return [
        _entry(row, stems[row.field], store, settings, outcomes.get(row.field), row.field in mine) for row in sheet.rows
    ]


def _table(name: str, entries: Sequence[Entry], extra: Sequence[str]) -> str:
    own = {column.name for column in TABLES[name]}
    rows = []
    for entry in entries:
        given: dict[str, Any] = {"field": entry.row.field, **entry.row.extra}
        if "condition" in own:
            given["condition"] = entry.row.condition
        found = entry.rows.get(name, ())
        if name == "gel" and not found:
            found = [{"notes": "the field was not measured"}]
        rows += [{**given, **row} for row in found]
    return table_text(name, rows, extra)


def write_results(
    sheet: Sheet,
    store: Store,
    entries: Sequence[Entry],
    run: Mapping[str, Any],
) -> None:
    """Write the four tables, columns.json and run.json, each atomically.

    Raises
    ------
    StorageError
        When the disk refuses; what stood there stays.
    """
    extra = sheet.extra_columns
    for name in TABLES:
        write_text(store.root / f"{name}.csv", _table(name, entries, extra))
    write_text(store.root / "columns.json", columns_json(extra))
    body = {
        **run,
        "sheet": {"file": _relative(sheet.path, store.root), "sha256": sheet.sha256, "rows": len(sheet.rows)},
        "counts": {word: sum(e.status == word for e in entries) for word in ("ok", "caution", "failed")},
        "unfinished": sum(not e.finished for e in entries),
        "fields": [_field_entry(entry) for entry in entries],
        "sheet_rows": [dict(row) for row in sheet.raw],
    }
    write_text(store.root / "run.json", json.dumps(body, indent=1, ensure_ascii=False) + "\n")


def _relative(path: Path, root: Path) -> str:
    return Path(os.path.relpath(path.resolve(), root.resolve())).as_posix()


def _field_entry(entry: Entry) -> dict[str, Any]:
    record = entry.record
    parts = record.get("parts", {})
    found: dict[str, Any] = {
        "field": entry.row.field,
        "row": entry.row.row,
        "status": entry.status,
        "finished": entry.finished,
        "message": entry.message,
        "code": entry.code,
        "record": f"fields/{entry.stem}.json" if record else "",
        "inputs": {
            role: {"file": record.get("files", {}).get(role, ""), "sha256": digest}
            for role, digest in parts.get("inputs", {}).items()
        },
        "outputs": {f"fields/{name}": digest for name, digest in record.get("outputs", {}).items()},
        "key": record.get("key", ""),
        "frames": len(entry.rows["fields"]),
        "seconds": record.get("seconds", {}),
        "versions": record.get("versions", {}),
    }
    if entry.outcome is not None:
        found["reused"] = entry.outcome.reused
        found["attempts"] = entry.outcome.attempts
        found["seconds_now"] = round(entry.outcome.seconds, 3)
    return found


def locked(store: Store) -> Any:
    """The lock under which records are read and tables written, so that shards do not overwrite each other's tables."""
    return folder_lock(store.root)

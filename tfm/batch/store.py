"""Records of the fields in the results folder, and the tables that are put together from them.

``fields/<name>.nc`` holds the arrays of a field and ``fields/<name>.json`` its record: table rows, hashes of inputs and
outputs, settings, versions, seconds, error budget. The record is written last and names the hash of the arrays, so that
a field counts as finished only when both are whole. Tables are rebuilt from the records in the sheet's order.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from tfm.batch.atomic import file_sha256, storage_guard, write_text

__all__ = ["Store"]

RECORD_FORMAT = 1


def _digest(record: Mapping[str, Any]) -> str:
    body = {key: value for key, value in record.items() if key != "sha256"}
    return hashlib.sha256(json.dumps(body, sort_keys=True, separators=(",", ":"), allow_nan=False).encode()).hexdigest()


def _load(path: Path) -> dict[str, Any] | None:
    """A JSON object, or None when the file is absent, cut or something else."""
    try:
        found = json.loads(path.read_text(encoding="utf-8"))
    except (ValueError, OSError):
        return None
    return found if isinstance(found, dict) else None


@dataclass(frozen=True)
class Store:
    """A results folder.

    Attributes
    ----------
    root
        The folder; ``fields`` and ``logs`` stand in it.
    """

    root: Path

    @property
    def fields(self) -> Path:
        """Folder of arrays and records."""
        return self.root / "fields"

    @property
    def logs(self) -> Path:
        """Folder of the logs, one per field."""
        return self.root / "logs"

    def data_path(self, stem: str) -> Path:
        """Arrays of a field."""
        return self.fields / f"{stem}.nc"

    def record_path(self, stem: str) -> Path:
        """Record of a field."""
        return self.fields / f"{stem}.json"

    def log_path(self, stem: str) -> Path:
        """Log of a field."""
        return self.logs / f"{stem}.log"

    def write_record(self, stem: str, record: Mapping[str, Any]) -> dict[str, Any]:
        """Write a record with its own hash; returns what was written."""
        whole = {"format": RECORD_FORMAT, **record}
        whole["sha256"] = _digest(whole)
        write_text(self.record_path(stem), json.dumps(whole, indent=1, allow_nan=False) + "\n")
        return whole

    def read_record(self, stem: str, field: str) -> dict[str, Any] | None:
        """The record of a field, or None when there is none that is whole and of this field."""
        record = _load(self.record_path(stem))
        if record is None or record.get("format") != RECORD_FORMAT or record.get("field") != field:
            return None
        return record if record.get("sha256") == _digest(record) else None

    def failure_path(self, stem: str) -> Path:
        """Why a field has no result although it was tried; removed when it gets one."""
        return self.root / "failures" / f"{stem}.json"

    def write_failure(self, stem: str, field: str, message: str, code: str, given: Mapping[str, Any]) -> None:
        """Keep the reason of a failure that says nothing about the data, so that it is tried again next time."""
        path = self.failure_path(stem)
        with storage_guard(path):
            path.parent.mkdir(parents=True, exist_ok=True)
        body = {"field": field, "message": message, "code": code, **given}
        write_text(path, json.dumps(body, indent=1, allow_nan=False) + "\n")

    def remove_failure(self, stem: str) -> None:
        """Forget an earlier failure."""
        with storage_guard(self.failure_path(stem)):
            self.failure_path(stem).unlink(missing_ok=True)

    def read_failure(self, stem: str, field: str) -> dict[str, Any] | None:
        """The reason why a field has no result, or None."""
        found = _load(self.failure_path(stem))
        return found if found is not None and found.get("field") == field else None

    def outputs_whole(self, record: Mapping[str, Any]) -> bool:
        """True when every output that the record names has the hash that it had when it was written."""
        for name, digest in record.get("outputs", {}).items():
            path = self.fields / name
            if "/" in name or not path.is_file() or file_sha256(path) != digest:
                return False
        return True

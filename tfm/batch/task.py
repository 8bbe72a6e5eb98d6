"""One field as a unit of work: is it done already, and if not, measure it and store it whole.

This is what runs in a worker process, here or on a cluster. It answers with an :class:`Outcome` and never raises for
what is wrong with a field; only a disk that cannot be written stops a run (:class:`~tfm.batch.atomic.StorageError`).
"""

from __future__ import annotations

import os
import time
import traceback
from dataclasses import dataclass, replace
from dataclasses import field as dataclass_field
from pathlib import Path
from typing import Any

from tfm.batch.atomic import StorageError, atomic_file, file_sha256
from tfm.batch.fieldlog import FieldLog, TimeLimitError, captured_warnings, time_limit
from tfm.batch.inputs import RowFiles, locate
from tfm.batch.key import changes, key_of, key_parts
from tfm.batch.settings import RowValues, RunSettings
from tfm.batch.store import Store
from tfm.errors import MeasurementError, TfmError

__all__ = ["Outcome", "Task", "execute"]

#: A field is tried again once after a fault that is not in its data.
_ATTEMPTS = 2


@dataclass(frozen=True)
class Task:
    """What a worker needs to know about one row.

    Attributes
    ----------
    row, settings
        What to measure and how.
    sheet, folder, root
        Name of the sheet for messages, its folder, and the folder that files have to lie in.
    results, stem
        Results folder and the field's file stem in it.
    redo
        Compute even if the stored result is current.
    limit
        Seconds without progress after which the field is given up; None = never.
    """

    row: RowValues
    settings: RunSettings
    sheet: str
    folder: Path
    root: Path
    results: Path
    stem: str
    redo: bool = False
    limit: float | None = None


@dataclass(frozen=True)
class Outcome:
    """What became of a task.

    Attributes
    ----------
    stem, field
        Which one.
    status, message, code
        Worst status of the field, the sentences that go with it, and the short code of a failure.
    reused
        True when the stored result was current and whole, so that nothing was computed.
    reasons
        Why it was computed, in words.
    seconds, attempts
        Time spent now, and how often it was tried.
    frames
        Frames in the record.
    """

    stem: str
    field: str
    status: str
    message: str = ""
    code: str = ""
    reused: bool = False
    reasons: tuple[str, ...] = ()
    seconds: float = 0.0
    attempts: int = 1
    frames: int = 1
    trace: str = dataclass_field(default="", repr=False)


def execute(task: Task) -> Outcome:
    """Do a task, trying a second time after a fault that is not in the data.

    Raises
    ------
    StorageError
        When results cannot be written.
    """
    began = time.perf_counter()
    store = Store(task.results)
    with FieldLog(store.log_path(task.stem), task.row.field) as log:
        attempt = 0
        while attempt < _ATTEMPTS:
            attempt += 1
            try:
                with time_limit(task.limit) as limiter:
                    log.alive = limiter
                    outcome = _attempt(task, store, log)
                break
            except StorageError as error:
                log(f"stopped: {error}")
                raise
            except TimeLimitError:
                message = f"gave up after {task.limit:g} s without progress; see --timeout"
                outcome = _fail(task, store, message, "timeout")
                break
            except TfmError as error:
                # What a file is like will not change by trying again.
                outcome = _fail(task, store, _line(error), error.code)
                break
            except Exception as error:  # a fault of ours or of the machine: said, logged, tried once more
                log(traceback.format_exc())
                text = f"a fault of ours ({type(error).__name__}: {error}); the log {log.path.name} has the details"
                outcome = replace(_fail(task, store, text, "fault"), trace=traceback.format_exc())
        outcome = replace(outcome, seconds=time.perf_counter() - began, attempts=attempt)
        log(f"{'kept' if outcome.reused else 'done'}: {outcome.status} {outcome.message}".rstrip())
    return outcome


def _line(error: TfmError) -> str:
    place = f"{error.column}: " if error.column else ""
    file = f"{Path(error.file).name}: " if error.file and Path(error.file).name not in error.message else ""
    return f"{place}{file}{error.message}" + (f"; {error.remedy}" if error.remedy else "")


def _fail(task: Task, store: Store, message: str, code: str) -> Outcome:
    store.write_failure(task.stem, task.row.field, message, code, _given(task))
    return Outcome(task.stem, task.row.field, "failed", message, code)


def _given(task: Task) -> dict[str, Any]:
    return {"settings": task.settings.model_dump(), "sheet": task.row.used()}


def _fingerprint(files: RowFiles) -> dict[str, tuple[int, int]]:
    return {role: (s.st_size, s.st_mtime_ns) for role, s in ((r, os.stat(p)) for r, p in files.paths.items())}


def _attempt(task: Task, store: Store, log: FieldLog) -> Outcome:
    row = task.row
    files = locate(row, task.folder, task.root)
    before = _fingerprint(files)
    parts = key_parts(files.paths, task.settings.model_dump(), row.used())
    key = key_of(parts)
    record = store.read_record(task.stem, row.field)
    reasons = _why(task, store, record, key, parts)
    if not reasons and record is not None:
        store.remove_failure(task.stem)
        return Outcome(
            task.stem,
            row.field,
            record["status"],
            record["message"],
            record.get("code", ""),
            reused=True,
            frames=len(record["rows"]["fields"]),
        )
    log("computing: " + "; ".join(reasons))
    made = _measure(task, files, parts, key, store, log, before)
    store.remove_failure(task.stem)
    return replace(made, reasons=tuple(reasons))


def _why(task: Task, store: Store, record: dict[str, Any] | None, key: str, parts: dict[str, Any]) -> list[str]:
    """Reasons to compute; none when the stored result is current and whole."""
    if task.redo:
        return ["asked for by --redo"]
    if record is None:
        return ["there is no finished result"]
    if record.get("key") != key:
        return changes(record.get("parts", {}), parts) or ["the key changed"]
    if not store.outputs_whole(record):
        return ["a stored file is missing or damaged"]
    return []


def _measure(
    task: Task,
    files: RowFiles,
    parts: dict[str, Any],
    key: str,
    store: Store,
    log: FieldLog,
    before: dict[str, tuple[int, int]],
) -> Outcome:
    # The rooms are imported here: a run in which nothing changed needs none of them.
    from tfm.batch.arrays import make_attributes
    from tfm.batch.field import FieldResult, measure_field
    from tfm.batch.netcdf import FieldWriter, verify_netcdf
    from tfm.batch.rows import failed_field_row
    from tfm.batch.versions import versions

    row = task.row
    began = time.perf_counter()
    data = store.data_path(task.stem)
    outputs: dict[str, str] = {}
    code = ""
    with captured_warnings(log):
        try:
            with atomic_file(data, verify=verify_netcdf) as temporary:
                with FieldWriter(temporary, make_attributes(row, task.settings, task.folder)) as writer:
                    result = measure_field(row, files, task.settings, writer, log)
                if before != _fingerprint(files):
                    raise MeasurementError(
                        "a file changed while it was read", code="file-changed", remedy="repeat when it is complete"
                    )
                if result.status == "failed":
                    raise _Unmeasured
            outputs[data.name] = file_sha256(data)
        except _Unmeasured:
            code = "not-measurable"
        except StorageError:
            raise
        except TfmError as error:
            if error.code == "file-changed":
                raise
            text, code = _line(error), error.code
            log(f"failed: {error}")
            result = FieldResult(status="failed", message=text, fields=[failed_field_row(f"{text} [{code}]")])
    record = store.write_record(
        task.stem,
        {
            "field": row.field,
            "key": key,
            "parts": parts,
            "files": {role: getattr(row, role) for role in files.paths},
            "status": result.status,
            "message": result.message,
            "code": code,
            "rows": {
                "cells": result.cells,
                "pairs": result.pairs,
                "gel": [result.gel] if result.gel else [],
                "fields": result.fields,
            },
            "outputs": outputs,
            "gel_evidence": result.gel_evidence,
            "budget": result.budget,
            "quality": result.quality,
            "statistics": result.statistics,
            "seconds": {**result.seconds, "all": time.perf_counter() - began},
            "versions": versions(),
        },
    )
    if not outputs:
        data.unlink(missing_ok=True)
    return Outcome(
        task.stem, row.field, record["status"], record["message"], code, frames=len(record["rows"]["fields"])
    )


class _Unmeasured(TfmError):
    """Leaves the file of arrays unwritten: no frame could be measured."""

    def __init__(self) -> None:
        super().__init__("no frame could be measured")

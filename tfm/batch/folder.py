"""The results folder before a run: made, tidied, and never on top of a user's own files."""

from __future__ import annotations

from pathlib import Path

from tfm.batch.atomic import LOCK_NAME, remove_leftovers, storage_guard
from tfm.batch.schema import TABLES
from tfm.batch.sheet import Sheet
from tfm.batch.store import Store
from tfm.errors import InputError

__all__ = ["prepare_folder"]


def prepare_folder(out: Path, sheet: Sheet) -> Store:
    """Make the results folder ready, without touching a file that no run has written.

    Raises
    ------
    InputError
        ``not-a-folder``, or ``would-overwrite`` when a file of the user's own stands where a table goes.
    StorageError
        When the disk refuses.
    """
    names = {f"{name}.csv" for name in TABLES} | {"columns.json", "run.json", "report.html"}
    with storage_guard(out):
        if out.exists() and not out.is_dir():
            raise InputError("is a file", code="not-a-folder", file=str(out), remedy="name a folder for the results")
        if sheet.path.resolve().parent == out.resolve() and sheet.path.name in names:
            raise InputError(
                f"the sheet '{sheet.path.name}' would be overwritten by the results",
                code="would-overwrite",
                file=str(out),
                remedy="choose another folder for the results",
            )
        strange = [name for name in sorted(names) if (out / name).exists()] if out.is_dir() else []
        if strange and not any((out / mark).exists() for mark in ("run.json", LOCK_NAME)):
            raise InputError(
                f"holds '{strange[0]}' that no run has written",
                code="would-overwrite",
                file=str(out),
                remedy="choose another folder for the results",
            )
        store = Store(out)
        store.fields.mkdir(parents=True, exist_ok=True)
        store.logs.mkdir(exist_ok=True)
        for folder in (out, store.fields, out / "failures"):
            remove_leftovers(folder)
    return store

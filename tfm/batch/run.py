"""``tfm run``: a sheet in, a results folder out, whatever breaks on the way."""

from __future__ import annotations

import math
import signal
import threading
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from types import FrameType
from typing import Any

from tfm import __version__
from tfm.batch.assemble import Entry, assemble, locked, write_results
from tfm.batch.atomic import StorageError
from tfm.batch.folder import prepare_folder
from tfm.batch.inputs import check_row
from tfm.batch.names import file_stems
from tfm.batch.problems import Problem, SheetError
from tfm.batch.schema import reserved_names
from tfm.batch.settings import RunSettings
from tfm.batch.sheet import Sheet, read_sheet
from tfm.batch.store import Store
from tfm.batch.task import Outcome, Task, execute
from tfm.batch.versions import versions
from tfm.batch.workers import run_tasks

__all__ = ["RunOptions", "RunSummary", "check_sheet", "run_sheet"]


@dataclass(frozen=True)
class RunOptions:
    """How to run, as opposed to what to compute: nothing here changes a number.

    Attributes
    ----------
    workers, scheduler
        Local processes, or the address of a Dask scheduler.
    shard
        ``(i, n)``: only every n-th row, from the i-th (1..n).
    redo
        Compute fields whose stored result is current.
    root
        Folder that the files of the sheet have to lie in; None = the sheet's own.
    limit
        Seconds without progress after which a field is given up; None = never.
    """

    workers: int = 1
    scheduler: str | None = None
    shard: tuple[int, int] | None = None
    redo: bool = False
    root: Path | None = None
    limit: float | None = 1800.0


@dataclass(frozen=True)
class RunSummary:
    """How a run ended.

    Attributes
    ----------
    exit_code
        0 all usable, 1 some failed, 101 a fault of ours, 130 interrupted.
    entries
        One per row of the sheet.
    mine
        Names of the fields that this run was to do.
    seconds
        Wall time.
    stopped
        Why it stopped before the end; empty otherwise.
    """

    exit_code: int
    entries: tuple[Entry, ...]
    mine: frozenset[str]
    seconds: float
    stopped: str = ""

    def counts(self) -> dict[str, int]:
        """Fields of this run by status; what is not finished counts as ``unfinished``."""
        words = ["unfinished" if not e.finished else e.status for e in self.entries if e.row.field in self.mine]
        return {word: words.count(word) for word in ("ok", "caution", "failed", "unfinished")}


def check_sheet(
    path: Path,
    *,
    settings: RunSettings | None = None,
    root: Path | None = None,
    tick: Callable[[int], None] | None = None,
) -> tuple[Sheet, list[Problem]]:
    """Read a sheet and the headers of all its files.

    Returns
    -------
    The sheet, and the problems of single rows.

    Raises
    ------
    SheetError
        When the sheet itself cannot be used.
    """
    sheet = read_sheet(path, reserved=reserved_names())
    folder = sheet.path.resolve().parent
    problems: list[Problem] = []
    for number, row in enumerate(sheet.rows):
        problems += check_row(row, sheet=str(path), folder=folder, root=root or folder, settings=settings)
        if tick is not None:
            tick(number + 1)
    return sheet, problems


@contextmanager
def _terminated() -> Iterator[None]:
    """Let SIGTERM end the run as Ctrl-C does: in order."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return

    def stop(number: int, frame: FrameType | None) -> None:
        raise KeyboardInterrupt

    before = signal.signal(signal.SIGTERM, stop)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


@dataclass
class _State:
    """What a run knows while it goes on."""

    sheet: Sheet
    stems: Mapping[str, str]
    store: Store
    settings: RunSettings
    options: RunOptions
    mine: frozenset[str]
    began: float
    outcomes: dict[str, Outcome] = field(default_factory=dict)
    written: float = -math.inf
    cost: float = 0.0

    def write(self, outcome: str, exit_code: int | None) -> list[Entry]:
        """Tables and run.json as things stand."""
        since = time.monotonic()
        with locked(self.store):
            entries = assemble(self.sheet, self.stems, self.store, self.settings, self.outcomes, self.mine)
            write_results(self.sheet, self.store, entries, self._about(outcome, exit_code))
        self.written = time.monotonic()
        self.cost = self.written - since
        return entries

    def write_now_and_then(self) -> None:
        """Write when the last time is long enough ago for writing to take a small part of the time."""
        if time.monotonic() - self.written > max(5.0, 25.0 * self.cost):
            self.write("running", None)

    def _about(self, outcome: str, exit_code: int | None) -> dict[str, Any]:
        shard = self.options.shard
        return {
            "tfm": __version__,
            "outcome": outcome,
            "exit_code": exit_code,
            "settings": self.settings.model_dump(),
            "versions": versions(),
            "workers": self.options.scheduler or self.options.workers,
            "shard": f"{shard[0]}/{shard[1]}" if shard else "",
            "seconds": round(time.monotonic() - self.began, 3),
        }


def run_sheet(
    path: Path,
    out: Path,
    *,
    settings: RunSettings | None = None,
    options: RunOptions | None = None,
    on_start: Callable[[int, Sheet, list[Problem]], None] | None = None,
    on_field: Callable[[Outcome], None] | None = None,
    work: Callable[[Task], Outcome] = execute,
) -> RunSummary:
    """Measure every field of a sheet and write a results folder.

    Parameters
    ----------
    path, out
        The sheet and the results folder.
    settings, options
        What to compute and how to run.
    on_start, on_field
        Called with the number of fields to do, and with every outcome.
    work
        What a worker does with a task.

    Raises
    ------
    SheetError
        When the sheet cannot be used, or none of its rows: nothing was computed.
    InputError
        When options cannot be used.
    StorageError
        When nothing at all could be written.
    """
    began = time.monotonic()
    settings, options = settings or RunSettings(), options or RunOptions()
    sheet, problems = check_sheet(path, settings=settings, root=options.root)
    bad = {problem.row for problem in problems}
    if sheet.rows and all(row.row in bad for row in sheet.rows):
        raise SheetError(problems)
    index, count = options.shard or (1, 1)
    mine = frozenset(row.field for row in sheet.rows[index - 1 :: count])
    store = prepare_folder(out, sheet)
    state = _State(sheet, file_stems(row.field for row in sheet.rows), store, settings, options, mine, began)
    folder = sheet.path.resolve().parent
    todo = [
        Task(
            row,
            settings,
            str(path),
            folder,
            options.root or folder,
            out,
            state.stems[row.field],
            options.redo,
            options.limit,
        )
        for row in sheet.rows
        if row.field in mine and row.row not in bad
    ]
    if on_start is not None:
        on_start(len(mine), sheet, problems)
    stopped, exit_code, outcome = "", 0, "finished"
    try:
        with _terminated():
            for row in sheet.rows:
                if row.field in mine and row.row in bad:
                    _note(state, _refused(state, row.field, [p for p in problems if p.row == row.row]), on_field)
            state.write("running", None)
            for done in run_tasks(todo, workers=options.workers, scheduler=options.scheduler, work=work):
                _note(state, done, on_field)
                state.write_now_and_then()
    except KeyboardInterrupt:
        stopped, exit_code, outcome = "interrupted", 130, "interrupted"
    except StorageError as error:
        stopped, exit_code, outcome = str(error), 1, "stopped"
    lost = mine - state.outcomes.keys()
    if lost and not stopped:  # success is counted, never inferred from the absence of an error
        stopped, exit_code, outcome = f"a fault of ours: {len(lost)} fields were never worked on", 101, "stopped"
    entries = _finish(state, outcome, exit_code, stopped)
    if exit_code == 0 and any(e.status == "failed" for e in entries if e.row.field in mine):
        exit_code = 1
    return RunSummary(exit_code, tuple(entries), mine, time.monotonic() - began, stopped)


def _finish(state: _State, outcome: str, exit_code: int, stopped: str) -> list[Entry]:
    failed = any(o.status == "failed" for o in state.outcomes.values())
    try:
        return state.write(outcome, exit_code or int(failed))
    except StorageError:
        if not stopped or outcome != "stopped":
            raise
        # The disk is full: what was written before is whole, and that is what there is.
        return assemble(state.sheet, state.stems, state.store, state.settings, state.outcomes, state.mine)


def _note(state: _State, outcome: Outcome, on_field: Callable[[Outcome], None] | None) -> None:
    state.outcomes[outcome.field] = outcome
    if on_field is not None:
        on_field(outcome)


def _refused(state: _State, name: str, problems: list[Problem]) -> Outcome:
    """A row whose files cannot be used, as far as their headers tell."""
    lines = [f"{p.column}: {p.message}; {p.remedy}" if p.column else f"{p.message}; {p.remedy}" for p in problems]
    row = next(r for r in state.sheet.rows if r.field == name)
    given = {"settings": state.settings.model_dump(), "sheet": row.used()}
    message, code = " | ".join(lines), problems[0].code
    state.store.write_failure(state.stems[name], name, message, code, given)
    return Outcome(state.stems[name], name, "failed", message, code)

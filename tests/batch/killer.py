"""Runs of the batch that are killed at every write, in forked children of one process (run as a script by the tests).

An audit hook counts what touches files for writing (open, rename, remove, mkdir), and every file is written in two
halves with an event between them; at the n-th event the process kills itself with SIGKILL, which nothing can catch.
"""

from __future__ import annotations

import csv
import json
import os
import random
import signal
import sys
import time
from pathlib import Path
from typing import Any

from standin import make_sheet, work

from tfm.batch.run import RunOptions, run_sheet
from tfm.batch.store import Store
from tfm.batch.task import Outcome

TABLES = ("cells.csv", "pairs.csv", "gel.csv", "fields.csv", "columns.json")
NAMES = ["a", "b", "bad-1", "d"]
_count, _limit, _watch = 0, -1, ""


def _tick(place: str) -> None:
    """One event; the n-th kills."""
    global _count
    if _limit < 0 or _watch not in place:
        return
    _count += 1
    if _count == _limit:
        os.kill(os.getpid(), signal.SIGKILL)


def _write_in_halves(self: Path, data: bytes) -> int:
    """``Path.write_bytes`` with an event in the middle of the file."""
    with self.open("wb", buffering=0) as stream:
        stream.write(data[: len(data) // 2])
        _tick(str(self))
        stream.write(data[len(data) // 2 :])
    return len(data)


def _hook(event: str, args: tuple[Any, ...]) -> None:
    if _limit < 0 or event not in ("open", "os.rename", "os.remove", "os.mkdir"):
        return
    if event == "open" and not (isinstance(args[2], int) and args[2] & (os.O_WRONLY | os.O_RDWR)):
        return
    _tick(str(args[0]))


def _run(sheet: Path, out: Path, seen: list[Outcome] | None = None) -> None:
    log: list[Outcome] = [] if seen is None else seen
    run_sheet(sheet, out, options=RunOptions(), on_field=log.append, work=work)


def _child(action: Any, delay: float | None = None) -> int:
    """Run in a forked child, killed after ``delay`` s; returns how it ended (negative = killed by a signal)."""
    pid = os.fork()
    if pid == 0:
        code = 1
        try:
            action()
            code = 0
        finally:
            os._exit(code)
    if delay is not None:
        time.sleep(delay)
        os.kill(pid, signal.SIGKILL)
    return os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1])


def inspect(out: Path) -> list[str]:
    """What is wrong with a results folder as a killed run left it."""
    wrong = []
    for name in TABLES[:4]:
        path = out / name
        if path.exists():
            with path.open(newline="", encoding="utf-8") as stream:
                rows = list(csv.DictReader(stream))
            if name == "fields.csv" and [r["field"] for r in rows] != NAMES:
                wrong.append(f"{name} has not every row of the sheet")
            if not path.read_bytes().endswith(b"\n"):
                wrong.append(f"{name} is cut")
    for name in ("run.json", "columns.json"):
        if (out / name).exists():
            json.loads((out / name).read_text())
    store = Store(out)
    for path in store.fields.glob("*.json") if store.fields.exists() else ():
        record = json.loads(path.read_text())
        if store.read_record(path.stem, record["field"]) is None:
            wrong.append(f"{path.name} is not whole")
    return wrong


def finished(out: Path) -> set[str]:
    """Fields whose result is whole."""
    store = Store(out)
    found = set()
    for name in NAMES:
        record = store.read_record(name, name)
        if record is not None and store.outputs_whole(record):
            found.add(name)
    return found


def _resume(sheet: Path, out: Path, want: dict[str, bytes], label: str) -> list[str]:
    wrong = [f"{label}: {w}" for w in inspect(out)]
    before = finished(out)
    seen: list[Outcome] = []
    _run(sheet, out, seen)
    again = {o.field for o in seen if o.field in before and not o.reused}
    if again:
        wrong.append(f"{label}: computed again although finished: {sorted(again)}")
    for name, data in want.items():
        if (out / name).read_bytes() != data:
            wrong.append(f"{label}: {name} differs from an undisturbed run")
    left = [p.name for p in out.rglob(".tfm-tmp-*")]
    if left:
        wrong.append(f"{label}: temporary files left: {left}")
    return wrong


def main() -> None:
    """``killer.py FOLDER every STRIDE`` or ``killer.py FOLDER random COUNT``; prints JSON."""
    global _limit, _watch, _count
    folder, mode, number = Path(sys.argv[1]), sys.argv[2], int(sys.argv[3])
    sys.addaudithook(_hook)
    Path.write_bytes = _write_in_halves  # type: ignore[method-assign,assignment]
    sheet = make_sheet(folder, NAMES)
    _run(sheet, folder / "whole")
    want = {name: (folder / "whole" / name).read_bytes() for name in TABLES}
    _watch, _limit = "counted", 10**9
    began = time.monotonic()
    _run(sheet, folder / "counted")
    duration, events = time.monotonic() - began, _count
    _limit = -1
    wrong, kills = [], 0
    rng = random.Random(11)
    for n in range(1, events + 1, number) if mode == "every" else range(1, number + 1):
        out = folder / f"killed{n}"

        def action(out: Path = out, n: int = n) -> None:
            global _count, _limit, _watch
            _count, _watch = 0, out.name
            _limit = n if mode == "every" else -1
            _run(sheet, out)

        kills += _child(action, None if mode == "every" else rng.uniform(0.01, duration)) < 0
        wrong += _resume(sheet, out, want, f"kill {n}")
    sys.stdout.write(json.dumps({"events": events, "kills": kills, "wrong": wrong}) + "\n")


if __name__ == "__main__":
    main()

"""What a run says on the terminal: progress on stderr, and a summary whose last lines say what to do next."""

from __future__ import annotations

import os
import sys
import time
from collections import defaultdict
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from rich.progress import Progress as Bar
    from rich.progress import TaskID

from tfm.batch.assemble import Entry
from tfm.batch.problems import readable
from tfm.batch.run import RunSummary
from tfm.batch.task import Outcome

__all__ = ["Progress", "summary_lines"]

_PLAIN_EVERY = 5.0


def _duration(seconds: float) -> str:
    """
    Examples
    --------
    >>> _duration(42.4), _duration(150), _duration(7300)
    ('42 s', '2 min 30 s', '2 h 1 min')
    """
    whole = round(seconds)
    if whole < 60:
        return f"{whole} s"
    if whole < 3600:
        return f"{whole // 60} min {whole % 60} s"
    return f"{whole // 3600} h {whole % 3600 // 60} min"


class Progress:
    """Counts fields on stderr: a bar on a terminal, a line now and then elsewhere.

    Parameters
    ----------
    explain
        Say for every field why it was computed or kept.
    """

    def __init__(self, *, explain: bool = False) -> None:
        self.explain = explain
        self.total = self.done = self.failed = self.kept = 0
        self.began = self.said = time.monotonic()
        self.terminal = sys.stderr.isatty() and os.environ.get("TERM") != "dumb"
        self._bar: Bar | None = None
        self._task: TaskID

    def start(self, total: int) -> None:
        """Begin with so many fields."""
        self.total, self.began = total, time.monotonic()
        if self.terminal:
            from rich.console import Console
            from rich.progress import BarColumn, MofNCompleteColumn, TextColumn
            from rich.progress import Progress as Bar

            bar = Bar(
                BarColumn(),
                MofNCompleteColumn(),
                TextColumn("{task.description}", markup=False),
                console=Console(stderr=True),
            )
            bar.start()
            self._task = bar.add_task(self._words(), total=total)
            self._bar = bar
        else:
            self._say(f"{total} fields to do")

    def field(self, outcome: Outcome) -> None:
        """One field is ready."""
        self.done += 1
        self.failed += outcome.status == "failed"
        self.kept += outcome.reused
        if self.explain:
            why = "kept: inputs, settings and version are unchanged" if outcome.reused else "; ".join(outcome.reasons)
            self._say(f"{readable(outcome.field)}: {why or readable(outcome.message, limit=200)}")
        if self._bar is not None:
            self._bar.update(self._task, completed=self.done, description=self._words())
        elif time.monotonic() - self.said > _PLAIN_EVERY or self.done == self.total:
            self._say(f"{self.done} of {self.total} fields, {self._words()}")

    def stop(self) -> None:
        """Take the bar away."""
        if self._bar is not None:
            self._bar.stop()
            self._bar = None

    def _words(self) -> str:
        computed = self.done - self.kept
        left = ""
        if computed and self.done < self.total:
            rate = (time.monotonic() - self.began) / computed
            left = f", about {_duration(rate * (self.total - self.done))} left"
        return f"{self.failed} failed{left}"

    def _say(self, text: str) -> None:
        self.said = time.monotonic()
        if self._bar is not None:
            self._bar.console.print(text, markup=False, highlight=False)
        else:
            sys.stderr.write(text + "\n")
            sys.stderr.flush()


def _groups(entries: Sequence[Entry], room: int) -> list[str]:
    """Failures by their code: how many, the first one's reason, and names as far as they fit."""
    by_code: dict[str, list[Entry]] = defaultdict(list)
    for entry in entries:
        by_code[entry.code or "failed"].append(entry)
    ordered = sorted(by_code.items(), key=lambda item: (-len(item[1]), item[0]))
    lines = []
    for code, group in ordered[:room]:
        names = ", ".join(readable(e.row.field, limit=24) for e in group[:3]) + (", ..." if len(group) > 3 else "")
        reason = readable(group[0].message, limit=110)
        lines.append(f"  {len(group)} x [{code}] {names}: {reason}")
    if len(ordered) > room:
        lines.append(f"  and {sum(len(g) for _, g in ordered[room:])} more for {len(ordered) - room} other reasons")
    return lines


def summary_lines(summary: RunSummary, out: Path, *, report: Path | None, command: str) -> list[str]:
    """At most fifteen lines that close a run; the last one is the outcome in one sentence."""
    counts = summary.counts()
    mine = [e for e in summary.entries if e.row.field in summary.mine]
    cells = [row for e in mine for row in e.rows.get("cells", ()) if row.get("status") != "failed"]
    kept = sum(bool(e.outcome and e.outcome.reused) for e in mine)
    lines = [
        "fields:  " + ", ".join(f"{n} {word}" for word, n in counts.items() if n or word != "unfinished"),
        f"cells:   {len(cells)} rows in {out / 'cells.csv'}",
    ]
    if kept:
        lines.append(f"kept:    {kept} fields were finished and unchanged")
    failures = [e for e in mine if e.status == "failed" and e.finished]
    if failures:
        lines += ["failed, by reason:", *_groups(failures, 5)]
    elsewhere = sum(not e.finished for e in summary.entries if e.row.field not in summary.mine)
    if elsewhere:
        lines.append(f"other shards: {elsewhere} fields are not there yet")
    if report is not None:
        lines.append(f"report:  {report}")
    again = summary.stopped or failures or counts["unfinished"]
    lines.append(
        f"next:    {'correct what is named above and repeat: ' if failures else ''}{command}"
        if again
        else f"next:    open {report or out}"
    )
    lines.append(_outcome(summary, counts, len(mine)))
    return lines


def _outcome(summary: RunSummary, counts: dict[str, int], total: int) -> str:
    """The last line: the outcome in one sentence, with the exit code."""
    usable, code = counts["ok"] + counts["caution"], f"(exit {summary.exit_code})"
    if summary.exit_code == 130:
        return f"interrupted: {usable} of {total} fields are finished and kept; repeat the command to go on {code}"
    if summary.stopped:
        return f"stopped: {summary.stopped} {code}"
    took = _duration(summary.seconds)
    if counts["failed"]:
        return f"{usable} of {total} fields measured, {counts['failed']} failed, {took} {code}"
    return f"all {total} fields measured, {took} {code}"

"""The log of one field, warnings that belong in it, and the limit on how long it may stand still."""

from __future__ import annotations

import datetime
import signal
import threading
import warnings
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from types import FrameType, TracebackType

from tfm.batch.atomic import storage_guard

__all__ = ["FieldLog", "TimeLimitError", "captured_warnings", "time_limit"]


class TimeLimitError(BaseException):
    """A field stood still for longer than it may.

    Not an ``Exception``: readers that turn whatever a damaged file raises into words must not swallow it.
    """


class FieldLog:
    """Appends lines with the time of day to a field's log; each run starts a new paragraph.

    A log is no result: it is written line by line, so that it shows where a field hung.
    """

    def __init__(self, path: Path, field: str) -> None:
        self.path, self.field = path, field
        self.alive: Callable[[], None] = _nothing

    def __enter__(self) -> FieldLog:
        with storage_guard(self.path):
            self.path.parent.mkdir(parents=True, exist_ok=True)
            self._stream = self.path.open("a", encoding="utf-8", buffering=1)
        self(f"field {self.field!r}")
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._stream.close()

    def __call__(self, text: str) -> None:
        """Write a line; counts as a sign of life."""
        now = datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds")
        with storage_guard(self.path):
            self._stream.write(f"{now} {text}\n")
        self.alive()


def _nothing() -> None:
    return


@contextmanager
def captured_warnings(log: FieldLog) -> Iterator[None]:
    """Send warnings to the field's log instead of the terminal.

    Only in the main thread: warning filters belong to the whole process.
    """
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("default")
        try:
            yield
        finally:
            for warning in caught:
                log(f"warning: {warning.category.__name__}: {' '.join(str(warning.message).split())}")


@contextmanager
def time_limit(seconds: float | None) -> Iterator[Callable[[], None]]:
    """Raise :class:`TimeLimitError` when the yielded function was not called for ``seconds``.

    Uses the alarm signal, so it acts in main threads only, which is where local workers compute; elsewhere it does
    nothing.
    """
    if seconds is None or threading.current_thread() is not threading.main_thread():
        yield _nothing
        return

    def ring(number: int, frame: FrameType | None) -> None:
        raise TimeLimitError

    over = False

    def again() -> None:
        if not over:  # an alarm set after the handler is gone would end the process
            signal.setitimer(signal.ITIMER_REAL, seconds)

    before = signal.signal(signal.SIGALRM, ring)
    again()
    try:
        yield again
    finally:
        over = True
        signal.setitimer(signal.ITIMER_REAL, 0)
        signal.signal(signal.SIGALRM, before)

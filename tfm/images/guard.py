"""What stands between a file from anywhere and the reader: nothing hangs, nothing leaks, every failure has a code.

``tifffile`` answers a damaged file with many unrelated classes of error, and with log records where it goes on with a
part of the data. All of them end here. Seen on thirty thousand cut and flipped files: ``TiffFileError``,
``ValueError``, ``RuntimeError``, ``ZeroDivisionError``, ``TypeError``, ``AssertionError``, ``KeyError``,
``IndexError``, ``OverflowError``, ``MemoryError``, and the codecs' own ``ImcdError`` and ``DeflateError``.
"""

from __future__ import annotations

import logging
import os
import stat
import threading
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from tfm.errors import InputError, MeasurementError, TfmError

__all__ = ["MAX_FILE_TEXT", "guarded", "regular_file", "small_file"]

#: Bytes. An outline file larger than this is not an outline file.
MAX_FILE_TEXT = 64 * 1024 * 1024

_LOCK = threading.RLock()


def regular_file(path: str | os.PathLike[str], *, what: str = "image") -> Path:
    """The path, when it is a readable regular file that is not empty. Never opens a pipe, so it never hangs.

    Raises
    ------
    InputError
        ``missing-file``, ``not-a-file`` (directory, pipe, device), ``unreadable-file`` or ``empty-file``.
    """
    name = os.fspath(path)
    shown = name if len(name) < 400 else "..." + name[-300:]
    if "\0" in name or not name:
        raise InputError(
            f"the {what}'s path is empty or holds a zero byte",
            code="missing-file",
            file=name.replace("\0", "\\0"),
            remedy="correct the path in the cell sheet",
        )
    try:
        status = os.stat(name)
    except OSError as error:
        reason = "is not there" if isinstance(error, FileNotFoundError) else f"cannot be reached ({error.strerror})"
        raise InputError(
            f"the {what} {reason}",
            code="missing-file",
            file=shown,
            remedy="correct the path in the cell sheet; paths count from the sheet's folder",
        ) from error
    if not stat.S_ISREG(status.st_mode):
        kind = "a folder" if stat.S_ISDIR(status.st_mode) else "a pipe or device"
        raise InputError(f"the {what} is {kind}, not a file", code="not-a-file", file=shown, remedy="name a file")
    if status.st_size == 0:
        raise InputError(
            f"the {what} is empty (0 bytes)", code="empty-file", file=shown, remedy="copy it again from the microscope"
        )
    if not os.access(name, os.R_OK):
        raise InputError(
            f"the {what} may not be read",
            code="unreadable-file",
            file=shown,
            remedy="change the permissions of the file",
        )
    return Path(name)


def small_file(path: str | os.PathLike[str], *, what: str) -> bytes:
    """All bytes of a regular file that must not be huge.

    Raises
    ------
    InputError
        As :func:`regular_file`; ``too-large`` above :data:`MAX_FILE_TEXT`.
    """
    name = regular_file(path, what=what)
    with open(name, "rb") as handle:
        data = handle.read(MAX_FILE_TEXT + 1)
    if len(data) > MAX_FILE_TEXT:
        raise InputError(
            f"the {what} is larger than {MAX_FILE_TEXT // 2**20} MB",
            code="too-large",
            file=str(name),
            remedy="keep only the outlines in it",
        )
    return data


class _Collector(logging.Handler):
    def __init__(self) -> None:
        super().__init__(logging.WARNING)
        self.messages: list[str] = []

    def emit(self, record: logging.LogRecord) -> None:
        self.messages.append(record.getMessage())


@contextmanager
def guarded(file: str | os.PathLike[str], *, what: str = "image", logger: str = "tifffile") -> Iterator[list[str]]:
    """Run a third-party reader: its log records are collected, its warnings silenced, its errors given a code.

    Yields the list of log messages, which fills while the reader works.

    Raises
    ------
    MeasurementError
        ``damaged-file`` for whatever the reader raised; ``too-large`` when memory ran out.
    """
    collector = _Collector()
    log = logging.getLogger(logger)
    # Loggers and warning filters belong to the whole process: one reader at a time touches them.
    with _LOCK, warnings.catch_warnings():
        warnings.simplefilter("ignore")
        propagate, log.propagate = log.propagate, False
        log.addHandler(collector)
        try:
            yield collector.messages
        except TfmError:
            raise
        except MemoryError as error:
            raise MeasurementError(
                f"the {what} needs more memory than there is",
                code="too-large",
                file=os.fspath(file),
                remedy="crop it or run on a larger machine",
            ) from error
        except Exception as error:  # see the module's docstring: the classes have nothing in common
            raise MeasurementError(
                f"the {what} is damaged or not of the format it claims ({_short(error)})",
                code="damaged-file",
                file=os.fspath(file),
                remedy="copy it again from the microscope, or open it in ImageJ and save it as TIFF",
            ) from error
        finally:
            log.removeHandler(collector)
            log.propagate = propagate


def _short(error: Exception) -> str:
    text = " ".join(str(error).split())
    text = "".join(character if character.isprintable() else "?" for character in text)
    return f"{type(error).__name__}: {text[:120]}" if text else type(error).__name__

"""How the population commands write: tables and figures whole or not at all, an unmeasured value empty."""

from __future__ import annotations

import csv
import io
import os
from collections.abc import Callable, Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from tfm.errors import TfmError
from tfm.units import from_si

__all__ = ["csv_table", "pn_m", "write_drawn", "write_text"]


def _number(value: float | None) -> str:
    """Eight significant digits; an unmeasured value is empty."""
    return "" if value is None else f"{value:.8g}"


def csv_table(columns: Sequence[str], rows: Iterable[Mapping[str, Any]]) -> str:
    buffer = io.StringIO()
    writer = csv.DictWriter(buffer, fieldnames=list(columns), lineterminator="\n")
    writer.writeheader()
    for row in rows:
        writer.writerow({k: _number(v) if v is None or isinstance(v, float) else v for k, v in row.items()})
    return buffer.getvalue()


def _storage(path: Path, error: OSError) -> TfmError:
    return TfmError(
        f"'{path}' cannot be written ({error.strerror or type(error).__name__})", code="storage",
        remedy="free space or choose a folder that you may write to",
    )  # fmt: skip


def write_text(path: Path, text: str) -> None:
    """Write a file in one step: a reader sees the old one or the new one."""
    temporary = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        temporary.write_text(text, encoding="utf-8", newline="")
        temporary.replace(path)
    except OSError as error:
        _forget(temporary)
        raise _storage(path, error) from error


def _forget(temporary: Path) -> None:
    """Take away what a failed write left, where anything was left."""
    if temporary.is_file():
        temporary.unlink()


def write_drawn(path: Path, draw: Callable[[Path], None]) -> None:
    """The same for a figure: ``draw`` gets a temporary path of the same ending."""
    temporary = path.with_name(f".{os.getpid()}.part.{path.name}")
    try:
        draw(temporary)
        temporary.replace(path)
    except OSError as error:
        _forget(temporary)
        raise _storage(path, error) from error


def pn_m(value: float | None) -> float | None:
    return None if value is None else from_si(value, "pNm")

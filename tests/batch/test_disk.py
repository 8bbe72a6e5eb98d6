"""A disk that is full, read-only or fails: said with the path, nothing that was written before is harmed."""

from __future__ import annotations

import csv
import errno
import json
import os
import resource
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest
from killer import inspect
from standin import make_sheet, work

import tfm.batch.atomic as atomic
from tfm.batch.atomic import StorageError, atomic_file, remove_leftovers, write_text
from tfm.batch.run import RunOptions, RunSummary, run_sheet
from tfm.batch.task import Outcome

NAMES = ["a", "b", "bad-1", "d"]


@pytest.fixture(autouse=True)
def _restored(monkeypatch: pytest.MonkeyPatch) -> None:
    import tfm.batch.field as real

    monkeypatch.setattr(real, "measure_field", real.measure_field)


def _run(sheet: Path, out: Path, seen: list[Outcome]) -> RunSummary:
    return run_sheet(sheet, out, options=RunOptions(), on_field=seen.append, work=work)


@contextmanager
def _failing(monkeypatch: pytest.MonkeyPatch, number: int, code: int) -> Iterator[list[int]]:
    """The n-th rename or sync raises; counts them."""
    count = [0]

    def wrap(real: Any) -> Any:
        def call(*args: Any) -> Any:
            count[0] += 1
            if count[0] >= number:
                raise OSError(code, os.strerror(code))
            return real(*args)

        return call

    with monkeypatch.context() as patch:
        patch.setattr(atomic.os, "replace", wrap(os.replace))
        patch.setattr(atomic.os, "fsync", wrap(os.fsync))
        yield count


@pytest.mark.parametrize("code", [errno.ENOSPC, errno.EROFS, errno.EIO])
def test_a_disk_fault_at_any_write_keeps_what_was_written(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, code: int
) -> None:
    sheet = make_sheet(tmp_path, NAMES)
    _run(sheet, tmp_path / "whole", [])
    want = (tmp_path / "whole" / "cells.csv").read_bytes()
    for number in (1, 8, 21, 34):
        out = tmp_path / f"out{code}-{number}"
        with _failing(monkeypatch, number, code) as count:
            try:
                summary = _run(sheet, out, [])
            except StorageError as error:
                text = str(error)
            else:
                assert summary.exit_code == 1
                text = summary.stopped
        assert count[0] >= number
        assert str(out) in text
        assert "make room or choose another folder" in text
        assert inspect(out) == []
        assert list(out.rglob(".tfm-tmp-*")) == []
        assert _run(sheet, out, []).exit_code == 1  # one field is bad on purpose
        assert (out / "cells.csv").read_bytes() == want


def test_a_disk_that_fills_up_under_the_arrays(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path, NAMES)
    out = tmp_path / "out"
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (9000, hard))
    try:
        summary = _run(sheet, out, [])
        text = summary.stopped
    except StorageError as error:
        text = str(error)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    assert "larger than this disk allows" in text
    assert inspect(out) == []
    assert list((out / "fields").glob("*.nc")) == []
    assert _run(sheet, out, []).exit_code == 1


def _fill() -> None:
    with atomic.storage_guard(Path("/dev/full")), open("/dev/full", "w") as stream:
        stream.write("x" * 10)


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs /dev/full")
def test_a_full_file_system() -> None:
    with pytest.raises(StorageError, match="disk is full") as caught:
        _fill()
    assert caught.value.code == "disk-full"


def _write_half(path: Path) -> None:
    with atomic_file(path) as temporary:
        temporary.write_text("new")
        raise RuntimeError("in the middle")


def test_an_error_inside_leaves_the_old_file(tmp_path: Path) -> None:
    path = tmp_path / "table.csv"
    write_text(path, "old\n")
    with pytest.raises(RuntimeError, match="in the middle"):
        _write_half(path)
    assert path.read_text() == "old\n"
    assert [p.name for p in tmp_path.iterdir()] == ["table.csv"]


def test_leftovers_of_the_dead_are_removed_and_those_of_the_living_kept(tmp_path: Path) -> None:
    import socket

    host = socket.gethostname()[:32]
    gone, alive, other = (
        tmp_path / f".tfm-tmp-{h}-{pid}-1" for h, pid in ((host, 2**22 + 1), (host, os.getpid()), ("far", 1))
    )
    for path in (gone, alive, other):
        path.touch()
    assert remove_leftovers(tmp_path) == 1
    assert sorted(p.name for p in tmp_path.iterdir()) == sorted([alive.name, other.name])
    os.utime(other, (1, 1))
    assert remove_leftovers(tmp_path) == 1


def test_accounts_agree_after_a_stop(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    sheet = make_sheet(tmp_path, NAMES)
    out = tmp_path / "out"

    def full(task: Any) -> Outcome:
        if task.row.field == "b":
            raise StorageError("cannot be written: the disk is full", file="x", code="disk-full", remedy="make room")
        return work(task)

    summary = run_sheet(sheet, out, work=full)
    assert summary.exit_code == 1
    assert "disk is full" in summary.stopped
    run = json.loads((out / "run.json").read_text())
    assert (run["outcome"], run["exit_code"], run["unfinished"]) == ("stopped", 1, 3)
    with (out / "fields.csv").open(newline="") as stream:
        assert [r["status"] for r in csv.DictReader(stream)] == ["ok", "failed", "failed", "failed"]

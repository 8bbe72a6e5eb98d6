"""Workers that die, hang or are left behind; a Dask cluster with a worker that is killed."""

from __future__ import annotations

import concurrent.futures as cf
import csv
import os
import signal
import subprocess
import sys
import time
from concurrent.futures.process import BrokenProcessPool
from pathlib import Path
from typing import Any

import pytest
from standin import make_sheet, work

import tfm.batch.workers as workers
from tfm.batch.run import RunOptions, RunSummary, run_sheet
from tfm.batch.task import Outcome
from tfm.errors import InputError

HERE = Path(__file__).parent
ROOT = HERE.parents[1]


def _run(sheet: Path, out: Path, seen: list[Outcome], **options: object) -> RunSummary:
    return run_sheet(sheet, out, options=RunOptions(**options), on_field=seen.append, work=work)  # type: ignore[arg-type]


def _statuses(out: Path) -> dict[str, str]:
    with (out / "fields.csv").open(newline="") as stream:
        return {r["field"]: r["status"] for r in csv.DictReader(stream)}


def test_the_field_that_kills_its_worker_is_named_and_no_other_is_lost(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path, ["a", "die-1", "slow-1", "dieonce-1", "e"])
    seen: list[Outcome] = []
    summary = _run(sheet, tmp_path / "out", seen, workers=2)
    assert {o.field: o.code for o in seen if o.code} == {"die-1": "worker-died"}
    assert summary.exit_code == 1
    assert _statuses(tmp_path / "out") == {"a": "ok", "die-1": "failed", "slow-1": "ok", "dieonce-1": "ok", "e": "ok"}


@pytest.mark.parametrize("count", [1, 2])
def test_a_field_that_hangs_times_out(tmp_path: Path, count: int) -> None:
    sheet = make_sheet(tmp_path, ["a", "hang-1", "c"])
    seen: list[Outcome] = []
    began = time.monotonic()
    summary = _run(sheet, tmp_path / "out", seen, workers=count, limit=1.0)
    assert time.monotonic() - began < 40
    assert summary.exit_code == 1
    assert {o.field: o.code for o in seen} == {"a": "", "hang-1": "timeout", "c": ""}
    assert "gave up after 1 s" in seen[[o.field for o in seen].index("hang-1")].message


def test_a_worker_that_does_not_hear_its_alarm_is_killed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(workers, "_GRACE", 2.0)
    sheet = make_sheet(tmp_path, ["a", "deaf-1", "c", "d"])
    seen: list[Outcome] = []
    _run(sheet, tmp_path / "out", seen, workers=2, limit=2.0)
    assert {o.field: o.code for o in seen} == {"a": "", "deaf-1": "timeout", "c": "", "d": ""}


DRIVER = """
import sys
from concurrent.futures.process import BrokenProcessPool
from pathlib import Path
from typing import Any
from standin import work
from tfm.batch.run import RunOptions, run_sheet
if __name__ == "__main__":
    options = RunOptions(workers=2)
    summary = run_sheet(Path(sys.argv[1]), Path(sys.argv[2]), options=options, work=work,
                        on_field=lambda o: print(o.field, flush=True))
    sys.exit(summary.exit_code)
"""


def _start(folder: Path, mark: str) -> subprocess.Popen[str]:
    sheet = make_sheet(folder, [f"slow-{i}" for i in range(30)])
    (folder / "driver.py").write_text(DRIVER)
    path = os.pathsep.join([str(HERE), str(ROOT), os.environ.get("PYTHONPATH", "")])
    process = subprocess.Popen(
        [sys.executable, str(folder / "driver.py"), str(sheet), str(folder / "out")],
        env={**os.environ, "PYTHONPATH": path, "TFM_TEST_MARK": mark, "OMP_NUM_THREADS": "1"},
        stdout=subprocess.PIPE,
        text=True,
    )
    assert process.stdout is not None
    assert process.stdout.readline().startswith("slow-")
    return process


def _marked(mark: str) -> list[int]:
    """Processes that carry the mark in their environment."""
    found = []
    for path in Path("/proc").glob("[0-9]*/environ"):
        try:
            if f"TFM_TEST_MARK={mark}".encode() in path.read_bytes():
                found.append(int(path.parent.name))
        except OSError:
            continue
    return found


@pytest.mark.skipif(not Path("/proc/self/environ").exists(), reason="looks for processes in /proc")
@pytest.mark.parametrize("sign", [signal.SIGTERM, signal.SIGKILL])
def test_signals_end_a_run_at_once_with_all_its_workers(tmp_path: Path, sign: signal.Signals) -> None:
    mark = f"{tmp_path}"
    process = _start(tmp_path, mark)
    began = time.monotonic()
    process.send_signal(sign)
    code = process.wait(timeout=20)
    took = time.monotonic() - began
    assert code == (-9 if sign == signal.SIGKILL else 130)
    assert took < 10  # the requirement is 2 s on a quiet machine; bench_batch.py measures it
    while _marked(mark) and time.monotonic() - began < 15:
        time.sleep(0.1)
    assert _marked(mark) == []
    assert process.stdout is not None
    process.stdout.close()
    rows = _statuses(tmp_path / "out")
    assert len(rows) == 30
    seen: list[Outcome] = []
    sheet = tmp_path / "sheet.csv"
    sheet.write_text("\n".join(sheet.read_text().splitlines()[:4]) + "\n")
    assert _run(sheet, tmp_path / "out", seen).exit_code == 0
    assert sum(o.reused for o in seen) >= 1


def test_a_missing_scheduler_is_said(tmp_path: Path) -> None:
    pytest.importorskip("distributed")
    sheet = make_sheet(tmp_path, ["a"])
    with pytest.raises(InputError, match="no Dask scheduler answers"):
        _run(sheet, tmp_path / "out", [], scheduler="nonsense://x")


CLUSTER = """
import os, signal, sys, threading, time
from concurrent.futures.process import BrokenProcessPool
from pathlib import Path
from typing import Any
from distributed import LocalCluster
from standin import work
from tfm.batch.run import RunOptions, run_sheet

if __name__ == "__main__":
    cluster = LocalCluster(n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None)
    pids = [w.pid for w in cluster.workers.values()]
    assert len(set(pids)) == 2
    seen = []
    def note(outcome):
        seen.append(outcome)
        if len(seen) == 2:
            from distributed import Client
            with Client(cluster) as client:
                victim = next(iter(client.run(os.getpid).values()))
            os.kill(victim, signal.SIGKILL)
    summary = run_sheet(Path(sys.argv[1]), Path(sys.argv[2]), work=work, on_field=note,
                        options=RunOptions(scheduler=cluster.scheduler_address))
    cluster.close()
    print("CODES", sorted({o.code for o in seen}), len(seen))
    sys.exit(summary.exit_code)
"""


def test_a_dask_cluster_with_a_killed_worker_gives_the_bytes_of_one_process(tmp_path: Path) -> None:
    pytest.importorskip("distributed")
    sheet = make_sheet(tmp_path, [f"slow-{i}" for i in range(8)])
    (tmp_path / "cluster.py").write_text(CLUSTER)
    path = os.pathsep.join([str(HERE), str(ROOT), os.environ.get("PYTHONPATH", "")])
    done = subprocess.run(
        [sys.executable, str(tmp_path / "cluster.py"), str(sheet), str(tmp_path / "dask")],
        env={**os.environ, "PYTHONPATH": path, "OMP_NUM_THREADS": "1"},
        capture_output=True,
        text=True,
        timeout=200,
        check=False,
        cwd=tmp_path,
    )
    assert done.returncode == 0, done.stderr[-3000:]
    assert "CODES [''] 8" in done.stdout
    run_sheet(sheet, tmp_path / "here", work=work)
    for name in ("cells.csv", "pairs.csv", "gel.csv", "fields.csv"):
        assert (tmp_path / "dask" / name).read_bytes() == (tmp_path / "here" / name).read_bytes()


class _Brittle(cf.ThreadPoolExecutor):
    """A pool that is found broken at its third submission."""

    made = 0

    def __init__(self, workers: int, **_: object) -> None:
        super().__init__(workers)
        self.submitted = 0
        type(self).made += 1

    def submit(self, *args: Any, **options: Any) -> Any:
        self.submitted += 1
        if self.submitted > 2 and type(self).made == 1:
            raise BrokenProcessPool
        return super().submit(*args, **options)


def test_a_pool_found_broken_between_two_fields_loses_none(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(workers.cf, "ProcessPoolExecutor", _Brittle)
    sheet = make_sheet(tmp_path, [f"f{i}" for i in range(6)])
    seen: list[Outcome] = []
    assert _run(sheet, tmp_path / "out", seen, workers=2).exit_code == 0
    assert len(seen) == 6
    assert _Brittle.made == 2

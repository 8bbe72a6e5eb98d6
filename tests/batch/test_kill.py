"""SIGKILL at writes and at random times: whole files only, the same bytes after resuming, nothing done twice."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

HERE = Path(__file__).parent
ROOT = HERE.parents[1]


@pytest.mark.parametrize(("mode", "number", "least"), [("every", 6, 8), ("random", 5, 2)])
def test_killed_runs_resume_to_the_same_bytes(tmp_path: Path, mode: str, number: int, least: int) -> None:
    path = os.pathsep.join([str(HERE), str(ROOT), os.environ.get("PYTHONPATH", "")])
    done = subprocess.run(
        [sys.executable, str(HERE / "killer.py"), str(tmp_path), mode, str(number)],
        env={**os.environ, "PYTHONPATH": path, "OMP_NUM_THREADS": "1"},
        capture_output=True,
        text=True,
        timeout=240,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    found = json.loads(done.stdout)
    assert found["wrong"] == []
    assert found["kills"] >= least, found

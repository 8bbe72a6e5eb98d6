"""A stand-in for the numeric rooms, so that what is tested is the batch alone: quick, and able to misbehave on request.

What a field does follows from its name: ``die`` kills its worker, ``dieonce`` does so the first time only, ``bug``
raises an error that nobody expects, ``bugonce`` does so the first time only, ``bad`` cannot be measured, ``hang``
stands still, ``deaf`` does so and cannot be woken, ``slow`` takes a while.
"""

from __future__ import annotations

import hashlib
import os
import signal
import time
from pathlib import Path
from typing import Any

import numpy as np
import tifffile

import tfm.batch.field as real
from tfm.batch.field import FieldResult
from tfm.batch.task import Outcome, Task, execute
from tfm.errors import MeasurementError

HEAD = "field,stressed,relaxed,pixel,youngs_modulus,poisson,condition,donor"


def make_sheet(folder: Path, names: list[str], *, modulus: str = "5 kPa") -> Path:
    """A sheet with small TIFF files whose pixels differ from field to field."""
    (folder / "img").mkdir(parents=True, exist_ok=True)
    lines = [HEAD]
    for i, name in enumerate(names):
        for kind in ("s", "r"):
            path = folder / "img" / f"{i}_{kind}.tif"
            if not path.exists():
                pixels = np.random.default_rng(i).integers(0, 4000, (40, 40)).astype(np.uint16)
                tifffile.imwrite(path, pixels, photometric="minisblack")
        cell = f'"{name}"' if "," in name else name
        lines.append(f"{cell},img/{i}_s.tif,img/{i}_r.tif,0.2 um,{modulus},0.45,group {i % 2},D{i}")
    path = folder / "sheet.csv"
    path.write_text("\n".join(lines) + "\n")
    return path


def _once(task_results: Path, name: str) -> bool:
    flag = task_results / f"once-{name}"
    if flag.exists():
        return False
    flag.touch()
    return True


def _misbehave(name: str, results: Path) -> None:
    word = name.split("-")[0]
    if word == "die" or (word == "dieonce" and _once(results, name)):
        os.kill(os.getpid(), signal.SIGKILL)
    if word == "bug" or (word == "bugonce" and _once(results, name)):
        raise ZeroDivisionError("nobody expected this")
    if word == "bad":
        raise MeasurementError("no bead is in focus", code="no-beads", remedy="focus on the beads")
    if word == "deaf":
        signal.pthread_sigmask(signal.SIG_BLOCK, [signal.SIGALRM])
        time.sleep(60)
    if word == "hang":
        time.sleep(60)
    if word == "slow":
        time.sleep(0.4)


def _measure(row: Any, files: Any, settings: Any, writer: Any, log: Any) -> FieldResult:
    _misbehave(row.field, Path(os.environ.get("TFM_TEST_RESULTS", ".")))
    digest = hashlib.sha256(files.paths["stressed"].read_bytes()).digest()
    moment = digest[0] / 100 + row.youngs_modulus / 1e4
    log("measured by the stand-in")
    for name in ("x", "y", "lattice_x", "lattice_y"):
        writer.axis(name, np.arange(16) * 1e-6, direction="along")
    writer.put(0, {"displacement": np.full((2, 16, 16), moment), "traction": np.zeros((2, 16, 16))})
    cell = {
        "cell": 1, "frame": 0, "status": "ok", "notes": "", "x_um": 1.5, "y_um": 2.5, "dipole_xx_pNm": -moment / 2,
        "dipole_xy_pNm": 0.0, "dipole_yy_pNm": -moment / 2, "contractile_moment_pNm": moment, "major_pNm": -moment / 2,
        "minor_pNm": -moment / 2, "dipole_xx_sd_pNm": 0.1, "dipole_xy_sd_pNm": 0.1, "dipole_yy_sd_pNm": 0.1,
        "cov_xx_xy_pNm2": 0.0, "cov_xx_yy_pNm2": 0.0, "cov_xy_yy_pNm2": 0.0, "contractile_moment_sd_pNm": 0.1 * 2**0.5,
    }  # fmt: skip
    result = FieldResult(cells=[cell], fields=[{"frame": 0, "status": "ok", "message": "", "vectors": 7}])
    result.gel = {
        "youngs_modulus_Pa": row.youngs_modulus,
        "poisson": row.poisson,
        "verdict": "cannot tell",
        "notes": "",
    }
    result.settle()
    return result


def work(task: Task) -> Outcome:
    """What a worker does in these tests: everything real but the measurement."""
    real.measure_field = _measure  # type: ignore[assignment]
    os.environ["TFM_TEST_RESULTS"] = str(task.results)
    return execute(task)

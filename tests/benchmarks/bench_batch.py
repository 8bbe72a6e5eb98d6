"""Figures of the batch, each as a ratio or against a limit within one run; run by hand on a quiet machine.

``python tests/benchmarks/bench_batch.py [help check kill signal workers memory]`` (all when none is named)

help     whole process of ``tfm --help`` against ``python -c "import numpy, scipy.fft"``; limit 3
check    ``tfm check`` of 1,000 rows with headers to read; limit 5 s
kill     SIGKILL at every write and at 20 random times; resumed bytes equal, nothing finished done twice
signal   seconds from Ctrl-C to the end of the process, with two workers in the middle of a field; limit 2 s
workers  100 demo-like fields with 1 and with 2 workers; at least 1.7 times as fast
memory   peak memory of a field of 5 and of 100 frames; within 10 %
"""

from __future__ import annotations

import csv
import json
import os
import signal
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import tifffile

HERE = Path(__file__).parent
ROOT = HERE.parents[1]
STANDIN = ROOT / "tests" / "batch"
TFM = [sys.executable, "-c", "from tfm.cli import main; main()"]
PIXEL = 0.25e-6


def _environment() -> dict[str, str]:
    path = os.pathsep.join([str(STANDIN), str(ROOT), os.environ.get("PYTHONPATH", "")])
    return {**os.environ, "PYTHONPATH": path, "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}


def _timed(command: list[str]) -> float:
    began = time.perf_counter()
    subprocess.run(command, env=_environment(), stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, check=False)
    return time.perf_counter() - began


def bench_help(folder: Path) -> str:
    pairs = [(_timed([*TFM, "--help"]), _timed([sys.executable, "-c", "import numpy, scipy.fft"])) for _ in range(9)][
        2:
    ]
    ours, theirs = (statistics.median(p[i] for p in pairs) for i in (0, 1))
    return f"tfm --help {ours:.2f} s, import numpy and scipy.fft {theirs:.2f} s: ratio {ours / theirs:.2f} (limit 3)"


def _images(folder: Path, number: int, size: int = 256, frames: int = 1) -> None:
    from tfm.gel import Gel
    from tfm.synth.cells import make_cell_traction
    from tfm.synth.fields import make_field

    rng = np.random.default_rng(number)
    middle = size * PIXEL / 2
    cell = make_cell_traction(
        (size, size), PIXEL, centre=(middle, middle), length=0.45 * size * PIXEL, width=0.22 * size * PIXEL,
        angle=float(rng.uniform(-1, 1)), contractile_moment=0.6e-12, rng=rng, kind="elongated",
    )  # fmt: skip
    made = make_field([cell], Gel(4e3, 0.45, 40e-6), rng, density_per_px2=0.03, photons=900.0, drift=(0.5, -0.3))
    tifffile.imwrite(folder / f"r{number}.tif", made.relaxed, photometric="minisblack")
    tifffile.imwrite(folder / f"o{number}.tif", made.labels.astype(np.uint8), photometric="minisblack")
    if frames == 1:
        tifffile.imwrite(folder / f"s{number}.tif", made.stressed, photometric="minisblack")
    else:
        stack = np.repeat(made.stressed[None], frames, axis=0)
        tifffile.imwrite(folder / f"s{number}.tif", stack, imagej=True, metadata={"axes": "TYX", "finterval": 10.0})


HEAD = "field,stressed,relaxed,outline,pixel,youngs_modulus,poisson,thickness"


def _sheet(folder: Path, numbers: list[int]) -> Path:
    rows = [f"f{i},s{n}.tif,r{n}.tif,o{n}.tif,0.25 um,4 kPa,0.45,40 um" for i, n in enumerate(numbers)]
    path = folder / "sheet.csv"
    path.write_text("\n".join([HEAD, *rows]) + "\n")
    return path


def bench_check(folder: Path) -> str:
    _images(folder, 0)
    blob = {kind: (folder / f"{kind}0.tif").read_bytes() for kind in "sro"}
    for n in range(1000):
        for kind, data in blob.items():
            (folder / f"{kind}{n}.tif").write_bytes(data)
    sheet = _sheet(folder, list(range(1000)))
    took = min(_timed([*TFM, "check", str(sheet)]) for _ in range(3))
    return f"tfm check of 1,000 rows (3,000 TIFF headers): {took:.1f} s (limit 5)"


def bench_kill(folder: Path) -> str:
    said = []
    for mode, number in (("every", 1), ("random", 20)):
        done = subprocess.run(
            [sys.executable, str(STANDIN / "killer.py"), str(folder / mode), mode, str(number)],
            env=_environment(), capture_output=True, text=True, check=True,
        )  # fmt: skip
        found = json.loads(done.stdout)
        said.append(f"{mode}: {found['kills']} kills ({found['events']} writes a run), {len(found['wrong'])} faults")
        said += found["wrong"]
    return "; ".join(said)


def bench_signal(folder: Path) -> str:
    _images(folder, 0, size=512)
    sheet = _sheet(folder, [0] * 8)
    took = []
    for i in range(3):
        process = subprocess.Popen(
            [*TFM, "run", str(sheet), "-o", str(folder / f"out{i}"), "--workers", "2", "--no-report"],
            env=_environment(), stderr=subprocess.DEVNULL,
        )  # fmt: skip
        logs = folder / f"out{i}" / "logs"
        while not (logs.exists() and len(list(logs.iterdir())) >= 2):
            time.sleep(0.05)
        time.sleep(1.0)
        began = time.perf_counter()
        process.send_signal(signal.SIGINT)
        code = process.wait()
        took.append(time.perf_counter() - began)
        if code != 130:
            return f"exit code {code} instead of 130"
    return f"Ctrl-C to end, two workers busy: {max(took):.2f} s at most of 3 (limit 2)"


def bench_workers(folder: Path) -> str:
    for n in range(4):
        _images(folder, n)
    sheet = _sheet(folder, [i % 4 for i in range(100)])
    took, tables = [], []
    for count in (1, 2):
        out = folder / f"workers{count}"
        command = ["run", str(sheet), "-o", str(out), "--workers", str(count), "--no-report", "--no-gel-check"]
        took.append(_timed([*TFM, *command]))
        tables.append((out / "cells.csv").read_bytes())
    with (folder / "workers1" / "cells.csv").open(newline="") as stream:
        cells = len(list(csv.DictReader(stream)))
    same = "the same bytes" if tables[0] == tables[1] else "DIFFERENT bytes"
    ratio = took[0] / took[1]
    times = f"1 worker {took[0]:.0f} s, 2 workers {took[1]:.0f} s"
    return f"100 fields, {cells} cells: {times}: {ratio:.2f} times (limit 1.7), {same}"


MEMORY = """
import resource, sys
from pathlib import Path
from tfm.batch.run import RunOptions, run_sheet
from tfm.batch.settings import RunSettings
s = run_sheet(Path(sys.argv[1]), Path(sys.argv[2]), settings=RunSettings(gel_check=False))
print(s.exit_code, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024)
"""


def bench_memory(folder: Path) -> str:
    peak = {}
    for frames in (5, 100):
        part = folder / f"{frames}"
        part.mkdir()
        _images(part, 0, frames=frames)
        done = subprocess.run(
            [sys.executable, "-c", MEMORY, str(_sheet(part, [0])), str(part / "out")],
            env=_environment(), capture_output=True, text=True, check=True,
        )  # fmt: skip
        peak[frames] = float(done.stdout.split()[1])
    ratio = peak[100] / peak[5]
    return f"peak memory: 5 frames {peak[5]:.0f} MB, 100 frames {peak[100]:.0f} MB: ratio {ratio:.3f} (limit 1.10)"


BENCHES: dict[str, Callable[[Path], str]] = {
    "help": bench_help,
    "check": bench_check,
    "kill": bench_kill,
    "signal": bench_signal,
    "workers": bench_workers,
    "memory": bench_memory,
}


def main() -> None:
    sys.path[:0] = [str(ROOT), str(STANDIN)]
    for name in sys.argv[1:] or BENCHES:
        with tempfile.TemporaryDirectory() as folder:
            sys.stdout.write(f"{name:8} {BENCHES[name](Path(folder))}\n")
            sys.stdout.flush()


if __name__ == "__main__":
    main()

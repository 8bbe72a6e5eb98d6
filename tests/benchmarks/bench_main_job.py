"""One field from images to tables and report, as a ratio to OpenPIV's own passes in the same run; peak memory;
start-up.

    python tests/benchmarks/bench_main_job.py

Targets: a 640 x 640 field with one cell at most 2.5 times OpenPIV's three window-deformation passes (64, 32, 32 px,
step 8 on the
last) for 1024 x 1024; peak memory at most 800 MB; ``tfm --help`` at most 3 times ``python -c "import numpy,
scipy.fft"``; the pixel
method at most 3 s beyond the start (640 px), 6 s and 1 GB (1024 px).
"""

from __future__ import annotations

import json
import resource
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import tifffile

PIV = """
import time, numpy as np
from openpiv import windef
s = windef.PIVSettings() if hasattr(windef, "PIVSettings") else __import__("openpiv.settings",
fromlist=["x"]).PIVSettings()
a, b = (np.load(p).astype(float) for p in {paths!r})
s.windowsizes, s.overlap, s.num_iterations = (64, 32, 32), (32, 16, 24), 3
s.show_plot = s.save_plot = s.show_all_plots = False
t = time.perf_counter()
x, y, u, v, s2n = windef.first_pass(a, b, s)
u, v = np.ma.masked_array(u, mask=np.ma.nomask), np.ma.masked_array(v, mask=np.ma.nomask)
for i in (1, 2):
    x, y, u, v, *_ = windef.multipass_img_deform(a, b, i, x, y, u, v, s)
    u, v = np.ma.masked_array(np.asarray(u), mask=np.ma.nomask), np.ma.masked_array(np.asarray(v), mask=np.ma.nomask)
print(time.perf_counter() - t)
"""


def timed(command: list[str]) -> tuple[float, float]:
    """Wall seconds and peak MB of a process."""
    before = time.perf_counter()
    process = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    _, _, usage = __import__("os").wait4(process.pid, 0)
    return time.perf_counter() - before, usage.ru_maxrss / 1024


def pixel_seconds(side: int) -> str:
    """Seconds of the pixel method beyond its start, in this process."""
    from scipy import ndimage

    from tfm.displacement import measure_displacement
    from tfm.images.model import Outlines
    from tfm.moments import cell_dipoles
    from tfm.synth import random_field
    from tfm.traction import infer_image

    field = random_field(np.random.default_rng(3), shape_px=(side, side), pixel_size=2e-7, cells=1)
    frames = [np.asarray(a, np.float32) for a in (field.relaxed, field.stressed)]
    outlines = Outlines(field.labels, "label image")
    quiet = ndimage.distance_transform_edt(field.labels == 0) * field.pixel_size > 8e-6
    seconds = []
    start_seconds = []
    for _ in range(3):
        t = time.perf_counter()
        start = measure_displacement(*frames, field.pixel_size, quiet=quiet, mode="start")
        start_seconds.append(time.perf_counter() - t)
        t = time.perf_counter()
        cell_dipoles(
            infer_image(*frames, field.pixel_size, outlines, field.gel, start=start), outlines, field.pixel_size
        )
        seconds.append(time.perf_counter() - t)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    return (
        f"{side} px: start {statistics.median(start_seconds):.2f} s, pixel method with error bars "
        f"{statistics.median(seconds):.2f} s, peak so far {peak:.0f} MB"
    )


def main() -> None:
    """Print every figure."""
    from tfm.synth import random_field

    with tempfile.TemporaryDirectory() as folder:
        root = Path(folder)
        large = random_field(np.random.default_rng(2), shape_px=(1024, 1024), pixel_size=2e-7, cells=1)
        paths = []
        for name, frame in (("a", large.relaxed), ("b", large.stressed)):
            np.save(root / f"{name}.npy", frame)
            paths.append(str(root / f"{name}.npy"))
        small = random_field(np.random.default_rng(1), shape_px=(640, 640), pixel_size=2e-7, cells=1)
        for name, frame in (
            ("relaxed", small.relaxed),
            ("stressed", small.stressed),
            ("outline", small.labels.astype(np.uint8)),
        ):
            tifffile.imwrite(root / f"{name}.tif", frame)
        (root / "sheet.csv").write_text(
            "field,stressed,relaxed,outline,pixel,youngs_modulus,poisson\n"
            f"one,stressed.tif,relaxed.tif,outline.tif,0.2 um,{small.gel.youngs_modulus} Pa,{small.gel.poisson}\n"
        )
        ratios, jobs, pivs, peaks = [], [], [], []
        for i in range(3):
            out = subprocess.run(
                [sys.executable, "-c", PIV.format(paths=paths)], capture_output=True, text=True, check=True
            )
            piv = float(out.stdout.strip().splitlines()[-1])
            job, peak = timed(
                [sys.executable, "-m", "tfm", "run", str(root / "sheet.csv"), "-o", str(root / f"out{i}")]
            )
            json.loads((root / f"out{i}" / "run.json").read_text())
            ratios.append(job / piv)
            jobs.append(job)
            pivs.append(piv)
            peaks.append(peak)
        print(
            f"job {statistics.median(jobs):.2f} s, OpenPIV 1024 px {statistics.median(pivs):.2f} s, ratio "
            f"{statistics.median(ratios):.2f} (target 2.5), peak {max(peaks):.0f} MB (target 800)"
        )
        helps = [
            timed([sys.executable, "-m", "tfm", "--help"])[0]
            / timed([sys.executable, "-c", "import numpy, scipy.fft"])[0]
            for _ in range(5)
        ]
        print(f"tfm --help / import numpy, scipy.fft = {statistics.median(helps):.2f} (target 3)")
    print(pixel_seconds(640))
    print(pixel_seconds(1024))


if __name__ == "__main__":
    main()

"""Displacement against the photon limit and against OpenPIV: error, bias, truth of the error bar, time, memory.

    python tests/benchmarks/bench_displacement.py             # everything, about ten minutes on a quiet machine
    python tests/benchmarks/bench_displacement.py error bias  # some of it

Synthetic beads: 0.02 per px^2, 500 photons, 10 photons of background, spot of 1.25 px, 16-bit counts. OpenPIV:
``windef``, windows 64, 32, 32 px, 8 px step on the last pass, both sides on the same pair in the same run. The bound is
the Cramer-Rao bound from the exact gradients and variances of the square that is as large as the affine window.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import contextlib
import io
import resource
import subprocess
import sys
import tempfile
import time
import warnings

import numpy as np
from scipy.ndimage import distance_transform_edt, map_coordinates

PIXEL = 0.2e-6


def openpiv_windef(relaxed, stressed, step=8):
    from openpiv import filters, validation, windef
    from openpiv.settings import PIVSettings

    settings = PIVSettings()
    settings.windowsizes, settings.overlap, settings.num_iterations = (64, 32, 32), (32, 16, 32 - step), 3
    settings.use_vectorized, settings.sig2noise_method, settings.sig2noise_validate = False, None, False
    a, b = relaxed.astype(float), stressed.astype(float)
    with contextlib.redirect_stdout(io.StringIO()), warnings.catch_warnings():
        warnings.simplefilter("ignore")
        x, y, u, v, s2n = windef.first_pass(a, b, settings)
        u, v = (np.ma.array(part, mask=np.zeros(part.shape, bool)) for part in (u, v))
        u, v = filters.replace_outliers(u, v, validation.typical_validation(u, v, s2n, settings))
        for k in (1, 2):
            x, y, u, v, _, _ = windef.multipass_img_deform(a, b, k, x, y, u, v, settings)
    return x[0] - 0.5, y[:, 0] - 0.5, np.stack([np.ma.filled(u, np.nan), np.ma.filled(v, np.nan)])


def pair(size, motion, seed, photons=500.0):
    """Two frames of beads that ``motion(x, y) -> (2, ...)`` px moves, the sum of variances, exact gradients."""
    from tfm.synth import Camera, expected_photons, make_bead_images, make_beads

    rng = np.random.default_rng(seed)
    beads = make_beads((size, size), 0.02, rng, margin=40.0, photons=photons)
    shifts = motion(beads.positions[:, 0], beads.positions[:, 1]).T
    relaxed, stressed, va, vb = make_bead_images((size, size), beads, shifts, rng, camera=Camera())
    gradients = []
    for step in (np.array([0.01, 0.0]), np.array([0.0, 0.01])):
        ends = [expected_photons((size, size), beads.positions - s * step, beads.photons, 1.25) for s in (1, -1)]
        gradients.append((ends[0] - ends[1]) / 0.02)
    return relaxed, stressed, va + vb, gradients


def bound(variance, gradients, field, nodes):
    """Mean Cramer-Rao variance (px^2) of one component over ``nodes`` for the square of the affine window's area."""
    half = round(5 / 6 * field.settings["window_radius_px"][0])
    total = []
    for i, j in np.argwhere(nodes):
        y, x = round(field.y[i]), round(field.x[j])
        cut = (slice(y - half, y + half), slice(x - half, x + half))
        g = np.stack([part[cut].ravel() for part in gradients])
        total.append(np.trace(np.linalg.inv((g / variance[cut].ravel()) @ g.T)) / 2)
    return float(np.mean(total))


def gradient(strength):
    """Stretch along x that reaches ``strength`` and dies out towards the rim (320 px from the middle)."""

    def motion(x, y):
        hill = np.exp(-((x - 320) ** 2 + (y - 320) ** 2) / (2 * 90.0**2))
        return np.stack([strength * (x - 320) * hill, 0 * x])

    return motion


def hill(peak, width):
    """Large displacement: the steepest gradient is 0.61 peak / width."""

    def motion(x, y):
        h = peak * np.exp(-((x - 320) ** 2 + (y - 320) ** 2) / (2 * width**2))
        return np.stack([h, 0.5 * h])

    return motion


def cell_field(seed, strain):
    """Displacement (px) of an invented cell on a gel, scaled to a steepest gradient of ``strain``; and its outline."""
    from tfm.synth import random_field

    made = random_field(np.random.default_rng([77, seed]), cells=1, shape_px=(640, 640), pixel_size=PIXEL, drift=False)
    u = made.displacement / PIXEL
    steepest = max(np.abs(np.gradient(part, axis=k)).max() for part in u for k in (0, 1))
    u *= strain / steepest

    def motion(x, y):
        return np.stack([map_coordinates(part, [y, x], order=3, mode="nearest") for part in u])

    return motion, made.labels > 0, float(np.hypot(*u).max())


def measure_error() -> None:
    from tfm.displacement import measure_displacement

    print("\n| field | quiet: rms px | /bound | error^2/var | under: rms px | OpenPIV px | ratio | error^2/var |")
    print("|---|---|---|---|---|---|---|---|")
    cases = [("uniform 0.4, -0.3 px", lambda x, y: np.stack([0 * x + 0.4, 0 * x - 0.3]), None)]
    cases += [(f"gradient {s}", gradient(s), None) for s in (0.05, 0.1, 0.2)]
    for seed, strain in ((0, 0.05), (1, 0.1), (2, 0.2), (3, 0.2)):
        motion, inside, peak = cell_field(seed, strain)
        cases.append((f"cell {seed}, strain {strain}, peak {peak:.1f} px", motion, inside))
    cases.append(("hill of 25 px, strain 0.2", hill(25.0, 76.0), None))
    for name, motion, inside in cases:
        rows = []
        for seed in range(3):
            relaxed, stressed, variance, gradients = pair(640, motion, seed)
            field = measure_displacement(relaxed, stressed, 1.0)
            gx, gy = np.meshgrid(field.x, field.y)
            # Add the drift back: what counts here is the whole motion, whatever the split.
            error = field.u + field.drift[:, None, None] - motion(gx, gy)
            p = field.precision
            z = (p[0] * error[0] ** 2 + 2 * p[1] * error[0] * error[1] + p[2] * error[1] ** 2) / 2
            inner = field.valid & (np.minimum(gx, 639 - gx) > 28) & (np.minimum(gy, 639 - gy) > 28)
            quiet, under = zones(motion, inside, gx, gy)
            quiet, under = quiet & inner, under & inner
            x, y, u = openpiv_windef(relaxed, stressed)
            ox, oy = np.meshgrid(x, y)
            theirs = zones(motion, inside, ox, oy)[1]
            theirs &= (np.minimum(ox, 639 - ox) > 28) & (np.minimum(oy, 639 - oy) > 28)
            rows.append(
                (
                    np.mean(error[:, quiet] ** 2) if quiet.any() else np.nan,
                    bound(variance, gradients, field, quiet) if quiet.any() else np.nan,
                    z[quiet].mean() if quiet.any() else np.nan,
                    np.mean(error[:, under] ** 2) if under.any() else np.nan,
                    np.nanmean((u - motion(ox, oy))[:, theirs] ** 2) if theirs.any() else np.nan,
                    z[under].mean() if under.any() else np.nan,
                )
            )
        q, b, zq, e, o, ze = np.mean(rows, axis=0)
        print(
            f"| {name} | {np.sqrt(q):.4f} | {np.sqrt(q / b):.2f} | {zq:.2f} | {np.sqrt(e):.4f} | {np.sqrt(o):.4f} |"
            f" {np.sqrt(e / o):.2f} | {ze:.2f} |",
            flush=True,
        )


def zones(motion, inside, x, y):
    """Quiet ground (strain below 0.01, away from the cell) and ground under the cell or in the steep part."""
    step = 0.5
    dx = (motion(x + step, y) - motion(x - step, y)) / (2 * step)
    dy = (motion(x, y + step) - motion(x, y - step)) / (2 * step)
    strain = np.sqrt((dx**2 + dy**2).sum(axis=0))
    if inside is None:
        return strain < 0.01, strain > 0.04
    rows, cols = np.clip(np.rint(y).astype(int), 0, 639), np.clip(np.rint(x).astype(int), 0, 639)
    return (distance_transform_edt(~inside)[rows, cols] > 40) & (strain < 0.01), inside[rows, cols]


def measure_bias() -> None:
    from tfm.displacement import measure_displacement

    print("\n| shift px | bias x px | bias y px | standard error |\n|---|---|---|---|")
    for shift in np.linspace(0, 1, 9):
        motion = lambda x, y, s=shift: np.stack([0 * x + s, 0 * x - s / 3])  # noqa: E731
        means, spread = [], []
        for seed in range(4):
            relaxed, stressed, _, _ = pair(384, motion, 100 + seed, photons=1000.0)
            field = measure_displacement(relaxed, stressed, 1.0)
            total = (field.u + field.drift[:, None, None])[:, field.valid]
            means.append(total.mean(axis=1) - [shift, -shift / 3])
            spread.append(total.std(axis=1).mean() / np.sqrt(384**2 / field.independent_area))
        bias = np.mean(means, axis=0)
        print(f"| {shift:.3f} | {bias[0]:+.4f} | {bias[1]:+.4f} | {np.mean(spread) / 2:.4f} |", flush=True)


def one(which: str, frames: str) -> None:
    """In a process of its own: seconds of processor time and peak memory (MB) above what the imports need."""
    relaxed, stressed = np.load(frames)
    from openpiv import windef  # noqa: F401  (both sides pay for the same imports)

    from tfm.displacement import measure_displacement

    measure_displacement(relaxed[:128, :128], stressed[:128, :128], 1.0, mode="start")
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    start = time.process_time()
    if which == "openpiv":
        openpiv_windef(relaxed, stressed)
    else:
        measure_displacement(relaxed, stressed, 1.0, mode=which)
    seconds = time.process_time() - start
    after = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    print(seconds, (after - before) / 1024, after / 1024)


def measure_cost() -> None:
    print("\n| size px | full s | start s | OpenPIV s | full/OpenPIV | full MB | OpenPIV MB | ratio | process MB |")
    print("|---|---|---|---|---|---|---|---|---|")
    for size in (640, 1024, 2048):
        scale = size / 640
        relaxed, stressed, _, _ = pair(size, lambda x, y, s=scale: gradient(0.1)(x / s, y / s), 0)
        got = {}
        with tempfile.TemporaryDirectory() as folder:
            frames = os.path.join(folder, "frames.npy")
            np.save(frames, np.stack([relaxed, stressed]))
            for which in ("full", "start", "openpiv"):
                command = [sys.executable, __file__, "one", which, frames]
                out = subprocess.run(command, capture_output=True, text=True, check=True).stdout.split()
                got[which] = [float(word) for word in out]
        (s, m, whole), (s0, _, _), (so, mo, _) = (got[key] for key in ("full", "start", "openpiv"))
        print(
            f"| {size} | {s:.2f} | {s0:.2f} | {so:.2f} | {s / so:.2f} | {m:.0f} | {mo:.0f} | {m / mo:.2f} |"
            f" {whole:.0f} |",
            flush=True,
        )


def measure_real() -> None:
    from importlib.resources import files

    from skimage.io import imread
    from skimage.registration import phase_cross_correlation

    from tfm.displacement import measure_displacement

    data = files("openpiv") / "data"
    print("\n| near-rest pair | shift px | skimage px | noise px (whole image) | vectors |\n|---|---|---|---|---|")
    for k in range(1, 11):
        a, b = (np.asarray(imread(str(data / f"test5/Pattern_{k}_{c}.tif")), np.float32) for c in "AB")
        a, b = (im.mean(axis=-1) if im.ndim == 3 else im for im in (a, b))
        field = measure_displacement(a, b, 1.0)
        outside = -phase_cross_correlation(a, b, upsample_factor=100, normalization=None)[0][::-1]
        print(
            f"| test5/{k} | {field.drift[0]:+.3f}, {field.drift[1]:+.3f} | {outside[0]:+.3f}, {outside[1]:+.3f} |"
            f" {field.noise:.4f} | {field.valid.mean():.0%} |",
            flush=True,
        )


if __name__ == "__main__":
    if sys.argv[1:2] == ["one"]:
        one(sys.argv[2], sys.argv[3])
    else:
        jobs = {"error": measure_error, "bias": measure_bias, "cost": measure_cost, "real": measure_real}
        for chosen in sys.argv[1:] or jobs:
            jobs[chosen]()

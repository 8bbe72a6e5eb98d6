"""Dipoles from random invented fields against what was put in: bias, scatter, coverage, seconds, by method.

    python tests/benchmarks/bench_accuracy.py --fields 200 --methods image bounded gcv lcurve discrepancy evidence
    --out accuracy.csv

Prints the table of docs/accuracy.md. ``--first N`` starts at another seed, so that two processes can share the work;
``--read FILE...`` prints the table of earlier runs without computing.
"""

from __future__ import annotations

import argparse
import contextlib
import csv
import time
from pathlib import Path

import numpy as np
from scipy import ndimage

COLUMNS = (
    "seed",
    "method",
    "cell",
    "cells",
    "seconds",
    "moment",
    "moment_sd",
    "moment_true",
    "xx",
    "xx_sd",
    "xx_true",
    "xy",
    "xy_sd",
    "xy_true",
    "yy",
    "yy_sd",
    "yy_true",
    "energy",
    "energy_sd",
    "energy_true",
    "misfit",
    "converged",
    "peak_px",
    "photons",
    "density",
    "thickness",
    "poisson",
    "bound_sd",
)


def measure(seed: int, methods: list[str]) -> list[dict[str, float | str]]:
    """Every method on one random field; moments in pN m, energies in fJ."""
    from tfm.displacement import measure_displacement
    from tfm.errors import MeasurementError
    from tfm.images.model import Outlines
    from tfm.moments import cell_dipoles
    from tfm.synth import random_field
    from tfm.traction import infer_bounded, infer_fourier, infer_image

    rng = np.random.default_rng([2026, seed])
    field = None
    while field is None:  # a draw may ask for more cells than the image has room for: draw again
        with contextlib.suppress(MeasurementError):
            field = random_field(rng)
    outlines = Outlines(field.labels, "label image")
    pixel = field.pixel_size
    quiet = ndimage.distance_transform_edt(field.labels == 0) * pixel > 8e-6
    frames = [np.asarray(a, np.float32) for a in (field.relaxed, field.stressed)]
    start = measure_displacement(*frames, pixel, quiet=quiet, mode="start")
    full = measure_displacement(*frames, pixel, quiet=quiet, mode="full") if set(methods) - {"image"} else None
    rows = []
    for method in methods:
        began = time.perf_counter()
        if method == "image":
            result = infer_image(*frames, pixel, outlines, field.gel, start=start)
        elif method == "bounded":
            result = infer_bounded(full, pixel, outlines, field.gel)
        else:
            result = infer_fourier(full, pixel, outlines, field.gel, choice=method)
        cells = cell_dipoles(result, outlines, pixel)
        seconds = time.perf_counter() - began
        for c in cells:
            i = c.cell - 1
            sd = np.sqrt(np.diag(c.covariance)) * 1e12
            row = {
                "seed": seed,
                "method": method,
                "cell": c.cell,
                "cells": len(cells),
                "seconds": seconds,
                "moment": c.contractile_moment * 1e12,
                "moment_sd": c.contractile_moment_sd * 1e12,
                "moment_true": field.contractile_moments[i] * 1e12,
                "energy": c.strain_energy * 1e15,
                "energy_sd": c.strain_energy_sd * 1e15,
                "energy_true": field.strain_energies[i] * 1e15,
                "misfit": result.misfit,
                "converged": result.statistics.get("converged", True),
                "peak_px": float(np.hypot(*field.displacement).max() / pixel),
                "photons": field.settings["photons"],
                "density": field.settings["density_per_px2"],
                "thickness": field.gel.thickness or np.inf,
                "poisson": field.gel.poisson,
                "bound_sd": np.nan,
            }
            for k, name in enumerate(("xx", "xy", "yy")):
                row |= {name: c.dipole[k] * 1e12, f"{name}_sd": sd[k], f"{name}_true": field.dipoles[i, k] * 1e12}
            rows.append(row)
    return rows


def report(rows: list[dict[str, str]]) -> None:
    """The table of docs/accuracy.md."""
    print(
        "| method | cells | moment: bias strong % | bias all (weighted) % | rms error/quoted | covers | xx | xy | yy |"
        " energy: bias % | covers | misfit median | seconds median |"
    )
    print("|---|---|---|---|---|---|---|---|---|---|---|---|---|")
    for method in dict.fromkeys(r["method"] for r in rows):
        sub = [r for r in rows if r["method"] == method]
        v = {k: np.array([float(r[k]) for r in sub]) for k in COLUMNS if k not in ("method", "converged")}
        error = (v["moment"] - v["moment_true"]) / v["moment_true"]
        quoted = v["moment_sd"] / v["moment_true"]
        strong = quoted < 0.05
        z = error / quoted
        cover = {
            k: 100 * np.mean(np.abs(v[k] - v[f"{k}_true"]) < 1.96 * v[f"{k}_sd"]) for k in ("xx", "xy", "yy", "energy")
        }
        print(
            f"| {method} | {len(sub)} | {100 * error[strong].mean():+.2f} (n={strong.sum()}) |"
            f" {100 * np.average(error, weights=1 / quoted**2):+.2f} | {np.sqrt(np.mean(z**2)):.2f} ({z.mean():+.2f}) |"
            f" {100 * np.mean(np.abs(z) < 1.96):.1f} | {cover['xx']:.1f} | {cover['xy']:.1f} | {cover['yy']:.1f} |"
            f" {100 * np.median(v['energy'] / v['energy_true'] - 1):+.1f} | {cover['energy']:.1f} |"
            f" {np.median(v['misfit']):.2f} | {np.median(v['seconds']):.2f} |"
        )
        faint = ~strong
        if faint.any():
            share = np.mean(error[faint]) / np.mean(quoted[faint])
            print(f"  {method}: faint cells n={faint.sum()}, mean bias / mean quoted error = {share:+.2f}")


def main() -> None:
    """Measure, append to the table as fields finish, print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--fields", type=int, default=200)
    parser.add_argument("--first", type=int, default=0)
    parser.add_argument(
        "--methods", nargs="+", default=["image", "bounded", "gcv", "lcurve", "discrepancy", "evidence"]
    )
    parser.add_argument("--out", type=Path, default=Path("accuracy.csv"))
    parser.add_argument("--read", type=Path, nargs="+")
    options = parser.parse_args()
    if options.read:
        report([row for path in options.read for row in csv.DictReader(path.open())])
        return
    with options.out.open("w", newline="") as stream:
        writer = csv.DictWriter(stream, COLUMNS)
        writer.writeheader()
        for seed in range(options.first, options.first + options.fields):
            writer.writerows(measure(seed, options.methods))
            stream.flush()
    report(list(csv.DictReader(options.out.open())))


if __name__ == "__main__":
    main()

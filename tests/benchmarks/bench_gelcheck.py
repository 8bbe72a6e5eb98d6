"""Does the check of the gel tell the truth? Coverage, verdicts, pooling and cost on random invented fields.

    python tests/benchmarks/bench_gelcheck.py --fields 60 --out gelcheck.csv     # coverage, verdicts, share of the time
    python tests/benchmarks/bench_gelcheck.py --pooled 10 --out pooled.csv       # ten fields on one gel

Every field is measured twice, with the right Poisson ratio entered and with one wrong by 0.15. ``--first`` starts at
another seed, so that processes can share the work; ``--read FILE...`` prints the table of earlier runs.
"""

from __future__ import annotations

import argparse
import csv
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
from scipy import ndimage

from tfm.displacement import measure_displacement
from tfm.gel import Gel
from tfm.gelcheck import GelEvidence, check_gel, pool_gel
from tfm.images.model import Outlines
from tfm.moments import cell_dipoles
from tfm.synth import SyntheticField, random_field
from tfm.traction import infer_image

COLUMNS = (
    "seed", "entry", "poisson", "thickness", "entered", "best", "low", "high", "mean", "sd", "h_best", "h_low",
    "h_high", "surprise_poisson", "surprise_thickness", "verdict", "misfit", "cells", "moment_error", "seconds",
    "seconds_check",
)  # fmt: skip
#: A field counts as strong when its beads measure the Poisson ratio this well (one sd): 0.15 is then five of them.
STRONG = 0.03


def random_test_gel(rng: np.random.Generator) -> Gel:
    """E 1-20 kPa, nu 0.25-0.5, two thirds of the gels 15-75 um thick, the others infinitely thick."""
    modulus = float(np.exp(rng.uniform(np.log(1e3), np.log(20e3))))
    nu = float(rng.uniform(0.25, 0.5))
    thickness = float(15e-6 * np.exp(rng.uniform(0, np.log(5)))) if rng.uniform() < 0.67 else None
    return Gel(modulus, nu, thickness)


def measure(field: SyntheticField, entered: Gel) -> tuple[GelEvidence, dict[str, float]]:
    """One field with one entry: evidence, and processor seconds."""
    outlines = Outlines(field.labels, "label image")
    quiet = ndimage.distance_transform_edt(field.labels == 0) * field.pixel_size > 8e-6
    frames = [np.asarray(a, np.float32) for a in (field.relaxed, field.stressed)]
    began = time.process_time()
    start = measure_displacement(*frames, field.pixel_size, quiet=quiet, mode="start")
    traction = infer_image(*frames, field.pixel_size, outlines, entered, start=start)
    dipoles = cell_dipoles(traction, outlines, field.pixel_size)
    middle = time.process_time()
    evidence = check_gel(traction, dipoles, pixel_size=field.pixel_size)
    ended = time.process_time()
    first = dipoles[0]
    return evidence, {
        "seconds": middle - began, "seconds_check": ended - middle, "misfit": traction.misfit, "cells": len(dipoles),
        "moment_error": first.contractile_moment / field.contractile_moments[first.cell - 1] - 1.0,
    }  # fmt: skip


def row_of(seed: int, entry: str, field: SyntheticField, e: GelEvidence, extra: dict[str, float]) -> dict[str, object]:
    """One line of the table; thicknesses in um, infinite as inf."""
    estimate = e.estimate
    assert estimate is not None
    h = estimate.thickness
    return {
        "seed": seed, "entry": entry, "poisson": field.gel.poisson, "thickness": (field.gel.thickness or np.inf) * 1e6,
        "entered": e.gel.poisson, "best": e.poisson_best, "low": e.poisson_low, "high": e.poisson_high,
        "mean": estimate.poisson_mean, "sd": estimate.poisson_sd, "h_best": h.best * 1e6, "h_low": h.low * 1e6,
        "h_high": h.high * 1e6, "surprise_poisson": estimate.poisson.surprise, "surprise_thickness": h.surprise,
        "verdict": e.verdict, **extra,
    }  # fmt: skip


def report(rows: list[dict[str, str]]) -> None:
    """The table of docs/gelcheck.md."""
    for entry in ("right", "wrong"):
        part = [r for r in rows if r["entry"] == entry]
        if not part:
            continue
        v = {k: np.array([float(r[k]) for r in part]) for k in COLUMNS if k not in ("entry", "verdict")}
        nu = (v["low"] - 1e-9 <= v["poisson"]) & (v["poisson"] <= v["high"] + 1e-9)
        h = (v["h_low"] * 0.999 <= v["thickness"]) & (v["thickness"] <= v["h_high"] * 1.001)
        strong = v["sd"] < STRONG
        z = (v["mean"] - v["poisson"]) / v["sd"]
        verdict = np.array([r["verdict"] for r in part])
        print(f"{entry} entry, {len(part)} fields")
        print(f"  95 % intervals cover: nu {100 * nu.mean():.1f} %, thickness {100 * h.mean():.1f} %")
        print(f"  nu: median sd {np.median(v['sd']):.3f}, rms error/sd {np.sqrt(np.mean(z**2)):.2f} (strong"
              f" {np.sqrt(np.mean(z[strong] ** 2)) if strong.any() else np.nan:.2f})")  # fmt: skip
        print("  verdicts:", {w: int((verdict == w).sum()) for w in np.unique(verdict)})
        print(f"  strong cells {strong.sum()}: contradicted {100 * np.mean(verdict[strong] == 'contradicted'):.1f} %"
              if strong.any() else "  no strong cell")  # fmt: skip
        print(f"  all: contradicted {100 * np.mean(verdict == 'contradicted'):.1f} %")
        share = v["seconds_check"] / v["seconds"]
        print(f"  cost: check / (displacement + traction + moments), median {np.median(share):.2f},"
              f" total {v['seconds_check'].sum() / v['seconds'].sum():.2f}")  # fmt: skip


def pooled(count: int, gel: Gel, first: int, writer: csv.DictWriter[str]) -> None:
    """Fields of one gel, one by one and together."""
    found = []
    for seed in range(first, first + count):
        field = random_field(np.random.default_rng([11, seed]), gel=gel, cells=1)
        evidence, extra = measure(field, replace(gel, poisson=gel.poisson - 0.05))
        writer.writerow(row_of(seed, "pooled", field, evidence, extra))
        found.append(evidence)
        together = pool_gel(found).estimate
        assert together is not None
        nu, h = together.poisson, together.thickness
        print(
            f"{len(found)} fields: nu {nu.best:.3f} ({nu.low:.3f} to {nu.high:.3f}; true {gel.poisson:g}),"
            f" h {h.best * 1e6:.1f} ({h.low * 1e6:.1f} to {h.high * 1e6:.1f} um;"
            f" true {(gel.thickness or np.inf) * 1e6:.1f})",
            flush=True,
        )


def main() -> None:
    """Measure, append to the table as fields finish, print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--fields", type=int, default=60)
    parser.add_argument("--first", type=int, default=0)
    parser.add_argument("--pooled", type=int, default=0)
    parser.add_argument("--out", type=Path, default=Path("gelcheck.csv"))
    parser.add_argument("--read", type=Path, nargs="+")
    options = parser.parse_args()
    if options.read:
        report([row for path in options.read for row in csv.DictReader(path.open())])
        return
    with options.out.open("w", newline="") as stream:
        writer = csv.DictWriter(stream, COLUMNS)
        writer.writeheader()
        if options.pooled:
            pooled(options.pooled, Gel(6e3, 0.42, 30e-6), options.first, writer)
            return
        for seed in range(options.first, options.first + options.fields):
            rng = np.random.default_rng([7, seed])
            field = random_field(rng, gel=random_test_gel(rng))
            nu = field.gel.poisson
            wrong = nu - 0.15 if (nu + 0.15 > 0.5 or seed % 2) else nu + 0.15
            for entry, gel in (("right", field.gel), ("wrong", replace(field.gel, poisson=wrong))):
                writer.writerow(row_of(seed, entry, field, *measure(field, gel)))
            stream.flush()
    report(list(csv.DictReader(options.out.open())))


if __name__ == "__main__":
    main()

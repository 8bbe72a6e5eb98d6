"""Heavy checks of the population room, by hand:

    python tests/benchmarks/bench_population.py stiffness --experiments 200
    python tests/benchmarks/bench_population.py plan --accuracy accuracy.csv      (made by bench_accuracy.py)
    python tests/benchmarks/bench_population.py plan --fields 60                  (makes its own, single cells)
    python tests/benchmarks/bench_population.py pairs --pairs 100
    python tests/benchmarks/bench_population.py spread --populations 300

Each prints what was asked of it and what was found.
"""

from __future__ import annotations

import argparse
import csv
import sys
from pathlib import Path

import numpy as np


def stiffness(experiments: int) -> None:
    """Coverage of the intervals of E* and P_inf over simulated experiments of several designs."""
    from tfm.population.stiffness import fit_stiffness, saturating_moment

    plateau, half = 2e-12, 5e3
    designs = {
        "4 gels x 5 cells, spread 20 %, modulus 8 %": ((1e3, 3e3, 9e3, 27e3), 5, 0.2, 0.08),
        "4 gels x 3 cells, spread 20 %, modulus 8 %": ((1e3, 3e3, 9e3, 27e3), 3, 0.2, 0.08),
        "3 gels x 8 cells, spread 30 %, modulus exact": ((2e3, 6e3, 18e3), 8, 0.3, 0.0),
    }
    print("asked: 90-98 % of intervals cover; unconstrained E* reported as unconstrained")
    for name, (gels, per_gel, spread, modulus) in designs.items():
        hits, bounded = np.zeros(2), 0
        for seed in range(experiments):
            rng = np.random.default_rng((7, seed))
            e = np.repeat(gels, per_gel)
            factor = np.repeat(1 + modulus * rng.normal(size=len(gels)), per_gel)
            true = saturating_moment(e * factor, plateau, half) * (1 + spread * rng.normal(size=e.size))
            y = true / factor + 1e-13 * rng.normal(size=e.size)
            fit = fit_stiffness(e, y, np.full(e.size, 1e-26), stiffness_sd=modulus * e)
            hits += [
                (fit.e_star_low or 0) <= half <= (fit.e_star_high or np.inf),
                (fit.p_inf_low or 0) <= plateau <= (fit.p_inf_high or np.inf),
            ]
            bounded += fit.constrained
        share = 100 * hits / experiments
        print(f"{name}: E* {share[0]:.1f} %, P_inf {share[1]:.1f} %; E* has both bounds in {bounded} of {experiments}")
    open_ended = 0
    for seed in range(experiments):
        rng = np.random.default_rng((8, seed))
        e = np.repeat([100.0, 200.0, 400.0], 6)
        y = saturating_moment(e, plateau, half) * (1 + 0.2 * rng.normal(size=e.size))
        fit = fit_stiffness(e, y, np.full(e.size, 1e-30))
        open_ended += fit.e_star_high is None
    print(f"gels far below E*: no upper bound reported in {open_ended} of {experiments} (at least 95 % expected)")


def plan(fields: int, accuracy: Path | None, first: int) -> None:
    """Scatter seen in the accuracy benchmark against the error planned from setup and cell size alone."""
    from tfm.population.plan import Setup, expected_errors
    from tfm.synth import random_field

    rows = (
        _accuracy_rows(accuracy) if accuracy is not None else [_measured(seed) for seed in range(first, first + fields)]
    )
    print("asked: planned error equals the scatter seen within 15 %")
    z, ratio = [], []
    for seed, moment, quoted, true in rows:
        field = random_field(np.random.default_rng([2026, seed]))
        if len(field.cells) != 1:
            continue
        ys, xs = np.nonzero(field.cells[0].mask)
        spread = np.linalg.eigvalsh(np.cov(np.stack([xs, ys]))) * field.pixel_size**2
        # An ellipse's axes are four standard deviations of its area.
        width, length = 4 * np.sqrt(spread)
        chosen, camera = field.settings, field.settings["camera"]
        setup = Setup(
            gel=field.gel,
            pixel_size=field.pixel_size,
            field_px=field.labels.shape[0],
            beads_per_area=chosen["density_per_px2"] / field.pixel_size**2,
            photons=chosen["photons"],
            bead_sigma=chosen["sigma"] * field.pixel_size,
            background=camera.background,
            read_noise=camera.read_noise,
            cell_length=float(length),
            cell_width=float(width),
            contractile_moment=true,
        )
        planned = expected_errors(setup, cells=1, seed=seed).moment_sd
        z.append((moment - true) / planned)
        ratio.append(quoted / planned)
        print(
            f"seed {seed}: error/planned {z[-1]:+.2f}, quoted/planned {ratio[-1]:.2f},"
            f" planned {100 * planned / true:.1f} % of the moment",
            flush=True,
        )
    z_all, r = np.array(z), np.array(ratio)
    robust = 1.4826 * np.median(np.abs(z_all))
    print(
        f"{z_all.size} fields: rms error/planned {np.sqrt((z_all**2).mean()):.2f}, robust {robust:.2f}"
        f" (sampling error about {1 / np.sqrt(2 * max(z_all.size, 1)):.2f}); quoted/planned median {np.median(r):.2f},"
        f" middle 80 % {np.quantile(r, 0.1):.2f}-{np.quantile(r, 0.9):.2f}"
    )


def _accuracy_rows(path: Path) -> list[tuple[int, float, float, float]]:
    with path.open(encoding="utf-8", newline="") as handle:
        return [
            (int(r["seed"]), float(r["moment"]) * 1e-12, float(r["moment_sd"]) * 1e-12, float(r["moment_true"]) * 1e-12)
            for r in csv.DictReader(handle)
            if r["method"] == "image" and r["cells"] == "1"
        ]


def _infer(field):  # type: ignore[no-untyped-def]
    """The main job's own path on an invented field: displacement, pixels, posterior."""
    from scipy import ndimage

    from tfm.displacement import measure_displacement
    from tfm.images.model import Outlines
    from tfm.traction import infer_image

    outlines = Outlines(field.labels, "label image")
    quiet = ndimage.distance_transform_edt(field.labels == 0) * field.pixel_size > 8e-6
    frames = [np.asarray(a, np.float32) for a in (field.relaxed, field.stressed)]
    start = measure_displacement(*frames, field.pixel_size, quiet=quiet, mode="start")
    return outlines, infer_image(*frames, field.pixel_size, outlines, field.gel, start=start)


def _measured(seed: int) -> tuple[int, float, float, float]:
    from tfm.moments import cell_dipoles
    from tfm.synth import random_field

    field = random_field(np.random.default_rng([2026, seed]))
    if len(field.cells) != 1:
        return seed, 0.0, 1.0, 1.0
    outlines, traction = _infer(field)
    cell = cell_dipoles(traction, outlines, field.pixel_size)[0]
    return seed, cell.contractile_moment, cell.contractile_moment_sd or np.nan, field.contractile_moments[0]


def pairs(count: int, first: int) -> None:
    """Coverage of the whole-field pair energy over random invented pairs."""
    from tfm.moments import cell_dipoles, cell_pairs
    from tfm.synth import random_field

    print("asked: 95 % intervals of the whole-field energy cover in 90-99 % of 100 pairs")
    covered, z, point = 0, [], []
    for seed in range(first, first + count):
        rng = np.random.default_rng([2027, seed])
        field = random_field(rng, cells=2, shape_px=(512, 512), pixel_size=0.21e-6)
        outlines, traction = _infer(field)
        pair = cell_pairs(traction, cell_dipoles(traction, outlines, field.pixel_size))[0]
        true = field.pair_energies[1, 2]
        z.append((pair.energy - true) / pair.energy_sd)
        covered += abs(z[-1]) <= 1.96
        point.append((pair.dipole_energy - true) / true)
        print(
            f"pair {seed}: W {pair.energy * 1e15:+.4f} ± {pair.energy_sd * 1e15:.4f} fJ, true {true * 1e15:+.4f},"
            f" z {z[-1]:+.2f}; point dipoles off by {100 * point[-1]:+.0f} %"
            f" at {pair.extras['lengths_apart']:.1f} lengths",
            flush=True,
        )
    print(f"{covered} of {count} covered; rms error/quoted {np.sqrt(np.mean(np.square(z))):.2f}")


def spread(populations: int) -> None:
    """Bias of the between-cell spread, corrected and naive."""
    from tfm.population import random_effects

    print("asked: the spread is recovered without bias, the naive one is not")
    for cells, noise in ((6, 0.3), (12, 0.3), (30, 0.5)):
        found, naive, hits = [], [], 0
        for seed in range(populations):
            rng = np.random.default_rng((9, seed))
            v = (noise * rng.uniform(0.5, 1.5, cells)) ** 2
            y = 2 + 0.4 * rng.normal(size=cells) + np.sqrt(v) * rng.normal(size=cells)
            result = random_effects(y, v)
            found.append((result.spread or 0.0) ** 2)
            naive.append((result.naive_spread or 0.0) ** 2)
            hits += (result.spread_low or 0.0) <= 0.4 <= (result.spread_high or np.inf)
        error = np.std(found) / np.sqrt(populations)
        print(
            f"{cells} cells, noise {noise}: variance {np.mean(found):.4f} ± {error:.4f}, naive {np.mean(naive):.4f},"
            f" true 0.1600; interval covers {100 * hits / populations:.1f} %"
        )


def main() -> None:
    """Choose a part."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parts = parser.add_subparsers(dest="part", required=True)
    one = parts.add_parser("stiffness")
    one.add_argument("--experiments", type=int, default=200)
    two = parts.add_parser("plan")
    two.add_argument("--fields", type=int, default=60)
    two.add_argument("--first", type=int, default=0)
    two.add_argument("--accuracy", type=Path)
    three = parts.add_parser("pairs")
    three.add_argument("--pairs", type=int, default=100)
    three.add_argument("--first", type=int, default=0)
    four = parts.add_parser("spread")
    four.add_argument("--populations", type=int, default=300)
    given = parser.parse_args()
    if given.part == "stiffness":
        stiffness(given.experiments)
    elif given.part == "plan":
        plan(given.fields, given.accuracy, given.first)
    elif given.part == "pairs":
        pairs(given.pairs, given.first)
    else:
        spread(given.populations)


if __name__ == "__main__":
    sys.exit(main())

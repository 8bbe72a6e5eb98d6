"""``tfm plan``: expected errors of an experiment and of the same with one thing changed, as table and figure."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

from tfm.population.output import csv_table, pn_m, write_drawn, write_text
from tfm.population.plan import ExpectedErrors, Setup, expected_errors, improvements, ranked

__all__ = ["write_plan"]

_PLAN_COLUMNS = (
    "change", "moment_sd_pNm", "moment_sd_percent", "axis_sd_deg", "smallest_moment_pNm", "pair_energy_fJ",
    "pair_energy_sd_fJ", "displacement_peak_um", "displacement_noise_um", "better_by",
)  # fmt: skip


def write_plan(setup: Setup, output: Path, *, cells: int = 3, seed: int = 1, most_coefficients: int = 300) -> list[str]:
    """Expected errors of a planned experiment and of the same with one thing changed: ``plan.csv`` and ``plan.png``.

    Raises
    ------
    InputError
        For a setup that makes no sense.
    """
    results = {
        name: expected_errors(changed, cells=cells, seed=seed, most_coefficients=most_coefficients)
        for name, changed in improvements(setup).items()
    }
    base = results["as asked"]
    rows = [_plan_row(name, results[name], base, setup) for name in ["as asked", *(n for n, _ in ranked(results))]]
    write_text(output / "plan.csv", csv_table(_PLAN_COLUMNS, rows))
    from tfm.population.figures import draw_plan

    write_drawn(output / "plan.png", lambda path: draw_plan(path, results, setup.contractile_moment))
    best, factor = ranked(results)[0]
    said = [
        f"expected error of the contractile moment: {base.moment_sd * 1e12:.3g} pN m"
        f" ({100 * base.moment_sd / setup.contractile_moment:.2g} % of {setup.contractile_moment * 1e12:.3g} pN m)",
        f"axis ± {math.degrees(base.axis_sd):.2g} degrees; smallest moment that stands out by three of its errors:"
        f" {base.smallest_moment * 1e12:.3g} pN m",
        f"largest displacement {base.displacement_peak * 1e6:.2g} um",
    ]
    if base.pair_energy is not None and base.pair_energy_sd is not None:
        said.append(
            f"pair energy {base.pair_energy * 1e15:.3g} ± {base.pair_energy_sd * 1e15:.2g} fJ (from the tensors)"
        )
    if setup.distance is not None and setup.distance < 1.5 * setup.cell_length:
        said.append("the two cells are less than 1.5 cell lengths apart: the pair energy from tensors is a rough guide")
    return [*said, f"what would help most: {best} (error divided by {factor:.2f})"]


def _plan_row(name: str, r: ExpectedErrors, base: ExpectedErrors, setup: Setup) -> dict[str, Any]:
    return {
        "change": name,
        "moment_sd_pNm": pn_m(r.moment_sd),
        "moment_sd_percent": 100 * r.moment_sd / setup.contractile_moment,
        "axis_sd_deg": math.degrees(r.axis_sd),
        "smallest_moment_pNm": pn_m(r.smallest_moment),
        "pair_energy_fJ": None if r.pair_energy is None else r.pair_energy * 1e15,
        "pair_energy_sd_fJ": None if r.pair_energy_sd is None else r.pair_energy_sd * 1e15,
        "displacement_peak_um": r.displacement_peak * 1e6,
        "displacement_noise_um": r.displacement_noise * 1e6,
        "better_by": base.moment_sd / r.moment_sd,
    }

"""Pictures of one field's numbers: time traces, pair links, error budget, evidence for the gel."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from functools import partial
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from tfm.report import plots
from tfm.report.fielddata import FieldArrays
from tfm.report.figures import rows_of_frame
from tfm.report.results import FieldResult, Row, number
from tfm.report.style import INK, LINE, QUIET, new_figure
from tfm.report.words import plain, with_error

__all__ = [
    "BUDGET_WORDS",
    "budget_shares",
    "draw_budget",
    "draw_evidence",
    "draw_links",
    "draw_traces",
    "numbers_figure",
]

#: Source of variance -> (words, grey tone and hatch that stay apart in print).
BUDGET_WORDS = {
    "images": ("images", "#0b5a6b", ""),
    "youngs_modulus": ("Young's modulus", "#c8a24a", "///"),
    "poisson": ("Poisson ratio", "#8d7bb5", "..."),
    "thickness": ("thickness", "#d9d4c6", "xxx"),
    "pixel": ("pixel size", "#4a4f57", ""),
}
_LINES = ("-", "--", ":", "-.")


def budget_shares(record: Mapping[str, Any], frame: int) -> dict[str, dict[str, float]]:
    """Cell -> share of the contractile moment's variance by source, in one frame; empty when nothing is known."""
    shares: dict[str, dict[str, float]] = {}
    for entry in record.get("budget") or ():
        parts = entry.get("variance_pNm2")
        if entry.get("frame", 0) != frame or not isinstance(parts, Mapping):
            continue
        known = {str(k): float(v) for k, v in parts.items() if isinstance(v, int | float) and v >= 0}
        total = sum(known.values())
        if total > 0:
            shares[str(entry.get("cell"))] = {k: v / total for k, v in known.items()}
    return shares


def draw_budget(ax: Axes, shares: Mapping[str, Mapping[str, float]]) -> None:
    """Where the variance of each cell's contractile moment comes from, as shares of 100 %."""
    shown = list(shares.items())[:8]
    for i, (_, parts) in enumerate(shown):
        left = 0.0
        for key, share in parts.items():
            words, colour, hatch = BUDGET_WORDS.get(key, (key, "#999999", ""))
            ax.barh(
                i,
                share * 100,
                left=left,
                color=colour,
                hatch=hatch,
                edgecolor="#ffffff",
                height=0.62,
                linewidth=0.6,
                label=words if i == 0 else None,
            )
            if share > 0.12:
                ax.text(
                    left + share * 50,
                    i,
                    f"{share * 100:.0f} %",
                    ha="center",
                    va="center",
                    fontsize=8,
                    color=INK,
                    bbox={"boxstyle": "round,pad=0.15", "facecolor": "#ffffff", "edgecolor": "none", "alpha": 0.9},
                )
            left += share * 100
    ax.set_yticks(range(len(shown)), [f"cell {name}" for name, _ in shown])
    ax.set_ylim(len(shown) - 0.4, -0.6)
    ax.set_xlim(0, 100)
    ax.set_xlabel("share of the variance, %")
    ax.legend(
        loc="upper center",
        bbox_to_anchor=(0.5, -0.2),
        ncols=3,
        fontsize=7.5,
        frameon=False,
        handlelength=1.2,
        columnspacing=1.0,
    )
    ax.set_title("Error budget of the contractile moment")


#: Quantity -> (words, unit of the axis, columns of gel.csv: entered, best, low, high; narrowest limits of the axis).
_EVIDENCE: dict[str, tuple[str, str, tuple[str, str, str, str], tuple[float, float] | None]] = {
    "poisson": ("Poisson ratio", "", ("poisson", "poisson_best", "poisson_low", "poisson_high"), (0.19, 0.505)),
    "thickness": (
        "gel thickness",
        "µm",
        ("thickness_um", "thickness_best_um", "thickness_low_um", "thickness_high_um"),
        None,
    ),
}


def draw_evidence(
    ax: Axes, gel: Row, quantity: str = "poisson", curve: tuple[Sequence[float], Sequence[float]] | None = None
) -> None:
    """What the beads say about the Poisson ratio or the thickness: best value, 95 % interval, and what was entered.

    ``curve`` is the log-evidence (values, natural logarithms) where it was kept.
    """
    words, unit, columns, limits = _EVIDENCE[quantity]
    entered, best, low, high = (number(gel, c) for c in columns)
    if curve is not None:
        height = np.asarray(curve[1], float) - np.max(curve[1])
        ax.plot(curve[0], height, color=LINE, marker="o" if len(height) <= 25 else "", ms=3, lw=1.5)
        ax.set_ylim(max(float(height.min()), -30.0) * 1.1, 2.0)
        ax.set_ylabel("log-evidence − best")
    else:
        ax.set_yticks([])
        ax.set_ylim(-1, 1)
    said = []
    if entered is not None:
        ax.axvline(entered, color=INK, lw=1.6, ls="--")
        said.append(f"entered: {plain(entered)} {unit} (dashed)")
    if best is not None:
        ax.axvline(best, color=LINE, lw=1.6)
        text = f"beads: {plain(best)} {unit}"
        if low is not None and high is not None:
            ax.axvspan(low, high, color=LINE, alpha=0.16, lw=0)
            text += f" (95 %: {plain(low)} to {plain(high)})"
        said.append(text)
    known = [v for v in (entered, best, low, high) if v is not None]
    if limits is None:
        span = max(known) - min(known) or max(known)
        limits = (max(min(known) - 0.5 * span, 0.0), max(known) + 0.5 * span)
    ax.set_xlim(min([limits[0], *known]), max([limits[1], *known]))
    ax.set_xlabel(f"{words}, {unit}" if unit else words)
    ax.set_title(f"Evidence for the {words}")
    box = {"facecolor": "#ffffff", "alpha": 0.8, "edgecolor": "none", "pad": 1.0}
    ax.text(0.03, 0.05, "\n".join(said), transform=ax.transAxes, fontsize=8, va="bottom", bbox=box)


def _curve(record: Mapping[str, Any], quantity: str) -> tuple[Sequence[float], Sequence[float]] | None:
    """The kept evidence, ``{"poisson": {"value": [...], "log_evidence": [...]}, ...}`` in the tables' units."""
    kept = (record.get("gel_evidence") or {}).get(quantity)
    if not isinstance(kept, Mapping) or not kept.get("value") or len(kept["value"]) != len(kept["log_evidence"]):
        return None
    return kept["value"], kept["log_evidence"]


def draw_traces(ax: Axes, field: FieldResult) -> None:
    """Contractile moment of every cell against time (or frame), with its 95 % band from the images."""
    timed = any(number(r, "time_s") is not None for r in field.cells)
    for i, cell in enumerate(field.cell_names):
        rows = [r for r in field.cells if r.get("cell") == cell and number(r, "contractile_moment_pNm") is not None]
        t = np.array([(number(r, "time_s") if timed else number(r, "frame")) or 0.0 for r in rows])
        value = np.array([number(r, "contractile_moment_pNm") or 0.0 for r in rows])
        sd = np.array([number(r, "contractile_moment_sd_pNm") or 0.0 for r in rows])
        minutes = timed and np.ptp(t) > 600
        t = t / 60 if minutes else t
        ax.fill_between(t, value - 1.96 * sd, value + 1.96 * sd, color=LINE, alpha=0.16, lw=0)
        ax.plot(
            t,
            value,
            color=LINE if i % 2 == 0 else INK,
            ls=_LINES[i % 4],
            marker="o",
            ms=3,
            lw=1.3,
            label=f"cell {cell}",
        )
        ax.set_xlabel("time, min" if minutes else "time, s" if timed else "frame")
    ax.axhline(0, color=QUIET, lw=0.6)
    ax.set_ylabel("pN m")
    ax.set_title(("Change of the contractile" if field.change_only else "Contractile") + " moment over time")
    if len(field.cell_names) > 1:
        ax.legend(fontsize=7.5, frameon=False)


def draw_links(ax: Axes, field: FieldResult, frame: int) -> None:
    """Pairs of cells as links: solid where together they store less (W < 0), dashed where more; width by size."""
    place = {r["cell"]: (number(r, "x_um"), number(r, "y_um")) for r in rows_of_frame(field.cells, frame)}
    rows = [r for r in rows_of_frame(field.pairs, frame) if r.get("cell_a") in place and r.get("cell_b") in place]
    sizes = [abs(number(r, "energy_fJ") or number(r, "dipole_energy_fJ") or 0.0) for r in rows]
    for row, size in sorted(zip(rows, sizes, strict=True), key=lambda p: p[1])[-15:]:
        (ax0, ay0), (bx0, by0) = place[row["cell_a"]], place[row["cell_b"]]
        energy, sd = number(row, "energy_fJ"), number(row, "energy_sd_fJ")
        if energy is None or ax0 is None or ay0 is None or bx0 is None or by0 is None:
            continue
        width = 1.0 + 4.0 * size / max(max(sizes), 1e-30)
        ax.plot(
            [ax0, bx0],
            [ay0, by0],
            color=LINE if energy < 0 else "#a0522d",
            lw=width,
            ls="-" if energy < 0 else (0, (2, 1.2)),
            zorder=2,
        )
        text = with_error(energy, sd).replace("-", "−") + " fJ"
        if len(rows) <= 6:
            ax.annotate(
                text,
                ((ax0 + bx0) / 2, (ay0 + by0) / 2),
                (0, 15),
                textcoords="offset points",
                ha="center",
                fontsize=8.5,
                zorder=4,
                path_effects=plots.halo(2.5, "#ffffff"),
            )
    for name, (x, y) in place.items():
        if x is not None and y is not None:
            ax.plot(x, y, "o", ms=13, color="#ffffff", mec=INK, mew=1.2, zorder=3)
            ax.annotate(name, (x, y), ha="center", va="center", fontsize=8, weight="bold", zorder=5)
    xs, ys = zip(*[(x, y) for x, y in place.values() if x is not None and y is not None], strict=True)
    reach = 0.5 * max(np.ptp(xs), np.ptp(ys), 10.0) + 8.0
    mx, my = (max(xs) + min(xs)) / 2, (max(ys) + min(ys)) / 2
    plots.frame_axes(
        ax, ((mx - 1.45 * reach) * 1e-6, (mx + 1.45 * reach) * 1e-6), ((my - reach) * 1e-6, (my + reach) * 1e-6)
    )
    plots.draw_scale_bar(ax, colour=INK)
    plots.draw_axes_sign(ax, colour=INK)
    ax.set_title("Interaction energy: solid < 0, dashed > 0")


def numbers_figure(field: FieldResult, a: FieldArrays) -> Figure | None:
    """All of the above that the folder has numbers for, in one row."""
    frame = a.frame
    jobs: list[Callable[[Axes], None]] = []
    shares = budget_shares(field.record, frame)
    gel = field.gel
    if len({r.get("frame") for r in field.cells}) > 1:
        jobs.append(lambda ax: draw_traces(ax, field))
    if rows_of_frame(field.pairs, frame):
        jobs.append(lambda ax: draw_links(ax, field, frame))
    if shares:
        jobs.append(lambda ax: draw_budget(ax, shares))
    for quantity, (_, _, columns, _) in _EVIDENCE.items():
        if gel is not None and number(gel, columns[1]) is not None:
            jobs.append(partial(draw_evidence, gel=gel, quantity=quantity, curve=_curve(field.record, quantity)))
    if not jobs:
        return None
    wide, high = 3.9, 3.2
    figure = new_figure(wide * len(jobs), high)
    for i, job in enumerate(jobs):
        job(figure.add_axes(((i + 0.14) / len(jobs), 0.3, 0.80 / len(jobs), 0.6)))
    return figure

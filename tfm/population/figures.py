"""Figures of the population commands. Drawn with matplotlib's object interface: no display, no global state."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from matplotlib import patheffects, rc_context
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ticker import LogLocator, NullFormatter, StrMethodFormatter
from numpy.typing import NDArray

from tfm.population.conditions import ConditionSummary, MeasuredCell
from tfm.population.maps import EnergyMap
from tfm.population.plan import ExpectedErrors, ranked
from tfm.population.stiffness import StiffnessFit, coupling_strength, saturating_moment

__all__ = ["draw_conditions", "draw_energy_map", "draw_plan", "draw_stiffness"]

_INK, _SOFT, _FIT, _SECOND = "#1c1c1c", "#767676", "#1f5a96", "#b35806"
_STYLE: Any = {"font.size": 10.0, "axes.spines.top": False, "axes.spines.right": False, "svg.hashsalt": "tfm"}


def _save(figure: Figure, path: Path) -> None:
    FigureCanvasAgg(figure)
    metadata: dict[str, Any] = {"Software": None} if path.suffix == ".png" else {"Date": None}
    figure.savefig(path, dpi=150, metadata=metadata)


def draw_stiffness(path: Path, cells: Sequence[MeasuredCell], fit: StiffnessFit) -> None:
    """Moments against stiffness with the fitted law and, below, the coupling of two cells."""
    with rc_context(_STYLE):
        figure = Figure(figsize=(6.4, 6.2), layout="constrained")
        top, bottom = figure.subplots(2, 1, sharex=True, height_ratios=[3, 2])
        e = np.array([cell.youngs_modulus for cell in cells], dtype=np.float64)
        y = np.array([cell.contractile_moment for cell in cells]) * 1e12
        sd = np.sqrt([cell.contractile_moment_variance for cell in cells]) * 1e12
        # Cells of one stiffness side by side, so that their error bars can be told apart.
        order = np.array([np.sum(e[:k] == e[k]) for k in range(e.size)])
        count = np.array([np.sum(e == value) for value in e])
        shifted = e * np.exp(0.035 * (order - 0.5 * (count - 1)))
        top.errorbar(
            shifted / 1e3,
            y,
            sd,
            fmt="o",
            ms=5,
            color=_INK,
            mfc="white",
            elinewidth=1,
            capsize=2,
            label="one cell, ± 1 sd",
        )
        x = np.geomspace(e.min() / 2, e.max() * 2, 200)
        laws = {law.law: law for law in fit.laws}
        p = laws["saturating"].parameters
        top.plot(x / 1e3, saturating_moment(x, p["P_inf"], p["E_star"]) * 1e12, color=_FIT, lw=2, label="saturating")
        top.plot(
            x / 1e3, np.full_like(x, laws["constant"].parameters["P"]) * 1e12, color=_SOFT, ls="--", label="constant"
        )
        top.plot(x / 1e3, laws["linear"].parameters["slope"] * x * 1e12, color=_SECOND, ls=":", label="linear")
        top.set_ylim(min(0.0, float((y - sd).min())), 1.25 * float((y + sd).max()))
        top.set_ylabel("contractile moment (pN m)")
        weights = ", ".join(f"{law.law} {law.weight:.2f}" for law in fit.laws)
        top.set_title(f"{fit.cells} cells on {fit.gels} gels; Akaike weights: {weights}", fontsize=9, loc="left")
        top.legend(frameon=False, fontsize=9)
        strength = coupling_strength(x, p["P_inf"], p["E_star"])
        bottom.plot(x / 1e3, strength / strength.max(), color=_FIT, lw=2)
        if fit.optimum is not None:
            low = (fit.optimum_low or x[0] / 1e3) / 1e3
            high = (fit.optimum_high or x[-1] * 1e3) / 1e3
            bottom.axvspan(low, high, color=_FIT, alpha=0.15, lw=0)
            bottom.axvline(fit.optimum / 1e3, color=_FIT, lw=1)
        open_end = "" if fit.constrained else " (open: the data set no bound)"
        bottom.set_title(
            f"coupling of two cells, P²/E; band: 95 % interval of its optimum{open_end}", fontsize=9, loc="left"
        )
        bottom.set_xscale("log")
        bottom.xaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
        bottom.xaxis.set_major_formatter(StrMethodFormatter("{x:g}"))
        bottom.xaxis.set_minor_formatter(NullFormatter())
        bottom.set_xlim(x[0] / 1e3, x[-1] / 1e3)
        bottom.set_ylim(0, 1.1)
        bottom.set_ylabel("relative to its best")
        bottom.set_xlabel("Young's modulus (kPa)")
        _save(figure, path)


def draw_conditions(path: Path, cells: Sequence[MeasuredCell], summaries: Sequence[ConditionSummary]) -> None:
    """Every cell, and per condition the mean with its 95 % interval (bar) and the spread between cells (box)."""
    with rc_context(_STYLE):
        figure = Figure(figsize=(max(4.0, 1.6 + 1.2 * len(summaries)), 4.0), layout="constrained")
        axes = figure.subplots()
        for place, summary in enumerate(summaries):
            group = [cell for cell in cells if cell.condition == summary.condition]
            y = np.array([cell.contractile_moment for cell in group]) * 1e12
            sd = np.sqrt([cell.contractile_moment_variance for cell in group]) * 1e12
            # A fixed, even spread sideways: the same picture every time, and error bars side by side.
            x = place - 0.28 + 0.2 * (np.argsort(np.argsort(y)) + 0.5) / y.size
            axes.errorbar(x, y, sd, fmt="o", ms=4, color=_SOFT, mfc="white", elinewidth=0.8)
            m = summary.moment
            if m.spread is not None:
                low, height = (m.mean - m.spread) * 1e12, 2 * m.spread * 1e12
                axes.bar(place + 0.15, height, bottom=low, width=0.22, color=_FIT, alpha=0.18, lw=0)
            if m.mean_low is not None and m.mean_high is not None:
                axes.plot([place + 0.15] * 2, [m.mean_low * 1e12, m.mean_high * 1e12], color=_FIT, lw=2)
            axes.plot([place + 0.15], [m.mean * 1e12], "s", ms=6, color=_FIT)
        axes.set_xticks(range(len(summaries)), [f"{s.condition}\n{s.cells} cells" for s in summaries])
        axes.set_xlim(-0.5, len(summaries) - 0.5)
        axes.axhline(0, color=_SOFT, lw=0.6)
        axes.set_ylabel("contractile moment (pN m)")
        axes.set_title(
            "circles: cells ± 1 sd; square: mean, 95 % interval; box: spread between cells", fontsize=8, loc="left"
        )
        _save(figure, path)


def draw_plan(path: Path, results: Mapping[str, ExpectedErrors], moment: float) -> None:
    """Expected relative error of the moment now and with one change at a time."""
    with rc_context(_STYLE):
        figure = Figure(figsize=(6.6, 3.4), layout="constrained")
        axes = figure.subplots()
        names = [name for name, _ in reversed(ranked(results))] + ["as asked"]
        values = [100 * results[name].moment_sd / moment for name in names]
        bars = axes.barh(names, values, color=[_SOFT] * (len(names) - 1) + [_FIT], height=0.6)
        axes.bar_label(bars, [f"{v:.2g} %" for v in values], padding=4)
        axes.set_xlim(0, 1.2 * max(values))
        axes.set_xlabel(f"expected error of a contractile moment of {moment * 1e12:.3g} pN m (1 sd, % of it)")
        _save(figure, path)


def _colour_reach(values: NDArray[np.float64]) -> float:
    """Symmetric colour limit: the 98th percentile, because energies rise steeply towards the cell."""
    return float(np.nanquantile(np.abs(values), 0.98)) or 1.0


def _strokes(axes: Any, result: EnergyMap, angle: NDArray[np.float64]) -> None:
    """Short lines along the second cell's axis, readable on dark and light ground."""
    step = max(1, result.x.size // 13)
    chosen = slice(step // 2, None, step)
    xs, ys = np.meshgrid(result.x[chosen] * 1e6, result.y[chosen] * 1e6)
    half = 0.33 * step * (result.x[1] - result.x[0]) * 1e6
    for px, py, a in zip(xs.ravel(), ys.ravel(), angle[chosen, chosen].ravel(), strict=True):
        if np.isfinite(a):
            dx, dy = half * np.cos(a), half * np.sin(a)
            outline = [patheffects.withStroke(linewidth=2.6, foreground="white")]
            axes.plot([px - dx, px + dx], [py - dy, py + dy], color=_INK, lw=1.1, path_effects=outline)


def draw_energy_map(path: Path, result: EnergyMap, *, title: str, dipole: NDArray[np.float64]) -> None:
    """Energy of a parallel second cell (left) and of one at its best angle (right) around the measured cell."""
    values, vectors = np.linalg.eigh(np.array([[dipole[0], dipole[1]], [dipole[1], dipole[2]]]))
    major = vectors[:, int(np.argmax(np.abs(values)))]
    own = float(np.arctan2(major[1], major[0]))
    # The map's angle nearest to the measured cell's own axis.
    nearest = int(np.argmin(np.abs(np.sin(result.angle - own))))
    parallel = result.energy[nearest]
    reach = max(_colour_reach(parallel), _colour_reach(result.lowest)) * 1e15
    with rc_context({**_STYLE, "axes.spines.top": True, "axes.spines.right": True}):
        figure = Figure(figsize=(9.6, 4.6), layout="constrained")
        left, right = figure.subplots(1, 2, sharey=True)
        x, y = result.x * 1e6, result.y * 1e6
        far = np.isfinite(result.lowest)
        angles = (np.where(far, result.angle[nearest], np.nan), result.lowest_angle)
        heads = ("second cell parallel to the measured one", "second cell at its best angle")
        for axes, energy, angle, head in zip((left, right), (parallel, result.lowest), angles, heads, strict=True):
            image = axes.pcolormesh(x, y, energy * 1e15, cmap="PuOr_r", vmin=-reach, vmax=reach, shading="nearest")
            _strokes(axes, result, angle)
            ends = major * 0.75 * result.nearest * 1e6
            axes.plot([-ends[0], ends[0]], [-ends[1], ends[1]], color=_INK, lw=4, solid_capstyle="round")
            axes.set_aspect("equal")
            axes.set_xlim(x[0], x[-1])
            axes.set_ylim(y[-1], y[0])  # y points down, as in the image
            axes.set_xlabel("x (um, to the right)")
            axes.set_title(head, fontsize=9, loc="left")
        left.set_ylabel("y (um, down)")
        bar = figure.colorbar(image, ax=[left, right], extend="both", shrink=0.9)
        bar.set_label("energy (fJ); below 0: together they store less")
        figure.suptitle(title, fontsize=9, x=0.01, ha="left")
        _save(figure, path)

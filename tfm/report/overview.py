"""The one figure of the first screen: the contractile moment of every cell, by condition."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from tfm.report.groups import Group
from tfm.report.style import INK, LINE, MARKS, QUIET, new_figure

__all__ = ["draw_moments", "moments_figure"]


def draw_moments(ax: Axes, groups: Sequence[Group], *, links: bool = False) -> None:
    """One band per condition: cells sorted by moment, each with its 95 % interval; behind them the mean and its own.

    A cell whose field is ``ok`` is a filled circle, one that asks for ``caution`` a hollow triangle.
    ``links`` ties every mark to its field's page (SVG only).
    """
    for band, group in enumerate(groups):
        cells = sorted(group.cells, key=lambda c: c.value)
        high = 0.36 if len(cells) > 1 else 0.0
        rows = band + np.linspace(high, -high, len(cells))
        if group.low is not None and group.high is not None and len(cells) > 2:
            ax.fill_betweenx([band - 0.45, band + 0.45], group.low, group.high, color=LINE, alpha=0.16, lw=0)
        ax.plot([group.mean, group.mean], [band - 0.45, band + 0.45], color=LINE, lw=2.0, zorder=2)
        reach = np.array([1.96 * (c.sd or 0.0) for c in cells])
        values = np.array([c.value for c in cells])
        ax.hlines(
            rows,
            values - reach,
            values + reach,
            color="#9aa3ad",
            lw=float(np.clip(24 / len(cells), 0.2, 1.0)),
            zorder=1.5,
        )
        for status, marker, face in (("ok", "o", MARKS["ok"][1]), ("caution", "^", "#ffffff")):
            chosen = [i for i, c in enumerate(cells) if c.status == status]
            if chosen:
                size = float(np.clip(900 / len(cells), 5, 26))
                drawn = ax.scatter(
                    values[chosen],
                    rows[chosen],
                    s=size,
                    marker=marker,
                    facecolor=face,
                    edgecolor=MARKS[status][1],
                    lw=0.9,
                    zorder=4,
                )
                if links:
                    drawn.set_urls([f"figures/{cells[i].field.folder}/index.html" for i in chosen])
        words = "\n".join(textwrap.wrap(group.condition, 17, max_lines=2, placeholder="…")) or "—"
        ax.text(
            -0.02,
            band - 0.02,
            words,
            transform=ax.get_yaxis_transform(),
            ha="right",
            va="bottom",
            weight="bold",
            linespacing=1.0,
        )
        ax.text(
            -0.02,
            band + 0.06,
            f"{len(cells)} cell{'s' if len(cells) != 1 else ''}",
            transform=ax.get_yaxis_transform(),
            ha="right",
            va="top",
            color=QUIET,
            fontsize=8,
        )
    ax.axvline(0, color=INK, lw=0.8)
    ax.set_ylim(len(groups) - 0.5, -0.5)
    ax.set_yticks([])
    ax.grid(axis="x", color="#d8d5cb", lw=0.6)
    ax.set_axisbelow(True)
    ax.set_xlabel("contractile moment, pN m (positive: pulls inwards)")
    for side in ("top", "right", "left"):
        ax.spines[side].set_visible(False)


def moments_figure(groups: Sequence[Group], *, links: bool = False) -> Figure | None:
    """:func:`draw_moments` at the size of the first screen; None when no cell was measured."""
    if not groups:
        return None
    band = 0.75 if len(groups) <= 3 else 0.62 if len(groups) <= 5 else 0.5
    high = 0.55 + band * len(groups)
    figure = new_figure(5.6, high)
    draw_moments(figure.add_axes((0.27, 0.48 / high, 0.71, (high - 0.55) / high)), groups, links=links)
    return figure

"""What every map carries: limits with y down, scale bar, the frame's sign, outlines, the key of a scale."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from contourpy import contour_generator
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.patches import Rectangle
from matplotlib.patheffects import withStroke
from mpl_toolkits.axes_grid1.anchored_artists import AnchoredSizeBar
from numpy.typing import ArrayLike, NDArray

from tfm.report.style import PAPER

__all__ = [
    "UM",
    "draw_axes_sign",
    "draw_key_bar",
    "draw_outlines",
    "draw_scale_bar",
    "extent_of",
    "frame_axes",
    "halo",
    "round_length",
]

#: um per m: the one place where pictures turn SI into what their axes show.
UM = 1e6

Array = NDArray[np.float64]


def halo(width: float = 2.5, colour: str = "#000000") -> list[Any]:
    return [withStroke(linewidth=width, foreground=colour)]


def round_length(value: float) -> float:
    """The largest of 1, 2, 5 times a power of ten that is not above ``value``.

    Examples
    --------
    >>> round_length(37.0), round_length(0.19)
    (20.0, 0.1)
    """
    power = 10.0 ** np.floor(np.log10(value))
    step = max(s for s in (1.0, 2.0, 5.0) if s * power <= value * (1 + 1e-12))
    return float(f"{step * power:.6g}")


def frame_axes(ax: Axes, x: Sequence[float], y: Sequence[float]) -> None:
    """Set limits in um with y **down** and equal scales, and take ticks away: a scale bar says the size."""
    ax.set_xlim(x[0] * UM, x[1] * UM)
    ax.set_ylim(y[1] * UM, y[0] * UM)
    ax.set_aspect("equal")
    ax.set_xticks([])
    ax.set_yticks([])


def extent_of(x: Array, y: Array) -> tuple[float, float, float, float]:
    """Image extent whose pixel centres lie on ``x`` and ``y``."""
    hx, hy = 0.5 * (x[1] - x[0]) * UM, 0.5 * (y[1] - y[0]) * UM
    return (x[0] * UM - hx, x[-1] * UM + hx, y[-1] * UM + hy, y[0] * UM - hy)


def draw_scale_bar(ax: Axes, length: float | None = None, *, colour: str = "#ffffff") -> AnchoredSizeBar:
    """A bar of a round number of um in the lower right corner; ``length`` in m, by default a fifth of the width."""
    width = abs(float(np.subtract(*ax.get_xlim())))
    value = round_length(0.25 * width) if length is None else length * UM
    dark = colour == "#ffffff"
    bar = AnchoredSizeBar(
        ax.transData,
        value,
        f"{value:g} µm",
        "lower right",
        pad=0.35,
        borderpad=0.4,
        sep=3,
        color=colour,
        frameon=True,
        size_vertical=width / 130,
        label_top=True,
    )
    bar.patch.set(facecolor="#000000" if dark else PAPER, alpha=0.62 if dark else 0.85, edgecolor="none")
    ax.add_artist(bar)
    return bar


def draw_axes_sign(ax: Axes, *, colour: str = "#ffffff") -> list[Artist]:
    """The frame, drawn in the upper left corner: x to the right, y down."""
    back = "#000000" if colour == "#ffffff" else PAPER
    style = {"arrowstyle": "<|-", "color": colour, "lw": 1.1, "mutation_scale": 7, "shrinkA": 0, "shrinkB": 0}
    backing = Rectangle((0.015, 0.835), 0.15, 0.15, transform=ax.transAxes, facecolor=back, alpha=0.6, lw=0, zorder=8)
    drawn: list[Artist] = [ax.add_patch(backing)]
    for tip, text, shift in (((24, 0), "x", (6, 0)), ((0, -24), "y", (0, -7))):
        drawn.append(
            ax.annotate(
                "",
                xy=(0.045, 0.955),
                xycoords="axes fraction",
                xytext=tip,
                textcoords="offset points",
                arrowprops=style,
                zorder=9,
            )
        )
        drawn.append(
            ax.annotate(
                text,
                xy=(0.045, 0.955),
                xycoords="axes fraction",
                xytext=(tip[0] + shift[0], tip[1] + shift[1]),
                textcoords="offset points",
                color=colour,
                fontsize=8,
                ha="center",
                va="center",
                zorder=9,
                path_effects=halo(2, back),
            )
        )
    return drawn


def draw_outlines(ax: Axes, x: ArrayLike, y: ArrayLike, labels: ArrayLike, *, names: bool = True) -> list[Artist]:
    """Outline of every cell as a white line on a black one, which reads on any map and in grey, with its number."""
    xs, ys, number = np.asarray(x, float) * UM, np.asarray(y, float) * UM, np.asarray(labels)
    gx = np.concatenate(([2 * xs[0] - xs[1]], xs, [2 * xs[-1] - xs[-2]]))
    gy = np.concatenate(([2 * ys[0] - ys[1]], ys, [2 * ys[-1] - ys[-2]]))
    drawn: list[Artist] = []
    for cell in np.unique(number[number > 0]):
        here = number == cell
        lines: Any = contour_generator(gx, gy, np.pad(here.astype(float), 1)).lines(0.5)
        for line in lines:
            for colour, width in (("#000000", 2.4), ("#ffffff", 1.0)):
                drawn += ax.plot(line[:, 0], line[:, 1], color=colour, lw=width, zorder=4)
        if names:
            rows, columns = np.nonzero(here)
            right = int(np.argmax(columns))
            drawn.append(
                ax.annotate(
                    str(cell),
                    (float(xs[columns[right]]), float(ys[rows[right]])),
                    (5, 0),
                    textcoords="offset points",
                    color="#ffffff",
                    fontsize=9,
                    weight="bold",
                    va="center",
                    path_effects=halo(),
                    zorder=7,
                )
            )
    return drawn


def draw_key_bar(ax: Axes, value: float, scale: float, text: str, colour: str) -> None:
    """The arrow of a round value, drawn to the same scale, in the lower left corner."""
    bar = AnchoredSizeBar(
        ax.transData,
        value * scale * UM,
        text,
        "lower left",
        pad=0.35,
        borderpad=0.4,
        sep=3,
        color=colour,
        frameon=True,
        size_vertical=abs(float(np.subtract(*ax.get_xlim()))) / 250,
        label_top=True,
    )
    dark = colour == "#ffffff"
    bar.patch.set(facecolor="#000000" if dark else PAPER, alpha=0.62 if dark else 0.85, edgecolor="none")
    ax.add_artist(bar)

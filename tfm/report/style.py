"""One look for pages and figures: colours that survive grey print and colour-blind readers, and the marks of a status.

Status is told by word, shape and colour together; signs by PuOr with zero in the middle; size by cividis and viridis.
"""

from __future__ import annotations

from contextlib import AbstractContextManager
from typing import Any, Final

import matplotlib as mpl
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

__all__ = [
    "GROUND",
    "INK",
    "LINE",
    "MARKS",
    "PAPER",
    "QUIET",
    "SIGN_MAP",
    "SIZE_MAP",
    "TRACTION_MAP",
    "drawing",
    "new_figure",
]

PAPER: Final = "#fcfbf7"
INK: Final = "#17202b"
GROUND: Final = "#eeece4"
QUIET: Final = "#5a6470"
LINE: Final = "#0b5a6b"

SIZE_MAP: Final = "cividis"
TRACTION_MAP: Final = "viridis"
SIGN_MAP: Final = "PuOr"

#: Status -> (sign drawn before the word, text colour on paper). Every colour has contrast above 4.5 : 1 on paper.
MARKS: Final[dict[str, tuple[str, str]]] = {
    "failed": ("■", "#8c1c4b"),
    "unfinished": ("□", "#4a4f57"),
    "caution": ("▲", "#8a4b00"),
    "ok": ("●", "#0b5a6b"),
}

_SETTINGS: Final[Any] = {
    "svg.fonttype": "none",  # text stays text in the vector files
    "svg.hashsalt": "tfm",  # the same picture is the same bytes
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans", "Liberation Sans", "Arial", "Helvetica"],
    "font.size": 9,
    "axes.titlesize": 9.5,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.labelsize": 9,
    "axes.edgecolor": QUIET,
    "axes.labelcolor": INK,
    "axes.facecolor": "#ffffff",
    "axes.linewidth": 0.7,
    "text.color": INK,
    "xtick.color": QUIET,
    "ytick.color": QUIET,
    "xtick.labelsize": 8,
    "ytick.labelsize": 8,
    "figure.facecolor": PAPER,
    "savefig.facecolor": PAPER,
    "image.interpolation": "none",  # one square per measured node, nothing smoothed in
    "path.simplify": True,
}


def drawing() -> AbstractContextManager[None]:
    """Context in which every figure of the report is drawn; it leaves the caller's settings alone."""
    return mpl.rc_context(_SETTINGS)


def new_figure(width: float, height: float) -> Figure:
    """A figure in inches that belongs to no window system, so that any worker can draw it."""
    figure = Figure(figsize=(width, height), dpi=100)
    FigureCanvasAgg(figure)
    return figure

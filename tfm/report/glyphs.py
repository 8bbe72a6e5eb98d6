"""A force dipole as a mark: principal axes to scale, and the region in which their tips lie."""

from __future__ import annotations

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.patches import Polygon
from numpy.typing import ArrayLike, NDArray

from tfm.report.marks import UM

__all__ = ["draw_dipole"]

Array = NDArray[np.float64]


def _principal(dipole: Array) -> tuple[Array, Array]:
    """Principal values (larger magnitude first) and their unit vectors as rows."""
    values, vectors = np.linalg.eigh(np.array([[dipole[0], dipole[1]], [dipole[1], dipole[2]]]))
    order = np.argsort(-np.abs(values))
    return values[order], vectors.T[order]


def _tip_regions(dipole: Array, covariance: Array, scale: float) -> list[Array]:
    """For each principal axis the 95 % region of its tip as a closed line around the tip, in m from the centroid."""
    values, vectors = _principal(dipole)
    gap = values[0] - values[1]
    turn = np.linspace(0, 2 * np.pi, 49)
    regions = []
    for k in (0, 1):
        (c, s), (d, e) = vectors[k], vectors[1 - k]
        along = np.array([c * c, 2 * c * s, s * s])  # d(value) / d(xx, xy, yy)
        across = np.array([c * d, c * e + s * d, s * e]) / (gap if abs(gap) > 0 else np.inf)
        sd = float(np.sqrt(max(along @ covariance @ along, 0.0)))
        angle_sd = min(float(np.sqrt(max(across @ covariance @ across, 0.0))), np.pi / 2 / 1.96)
        theta = np.arctan2(s, c) + 1.96 * angle_sd * np.cos(turn)
        radius = (abs(values[k]) + 1.96 * sd * np.sin(turn)).clip(min=0) * scale
        regions.append(np.stack([radius * np.cos(theta), radius * np.sin(theta)], axis=1))
    return regions


def _draw_half(ax: Axes, centre: Array, tip: Array, *, inwards: bool, colours: tuple[str, str]) -> list[Artist]:
    """One half of a principal axis from the centre to its tip (um), with a head that points in or out."""
    drawn: list[Artist] = []
    for width, shade in ((3.4, colours[1]), (1.7, colours[0])):
        line = ax.plot(
            [centre[0], tip[0]], [centre[1], tip[1]], color=shade, lw=width, solid_capstyle="butt", zorder=5.5
        )
        drawn += line
    reach = float(np.hypot(*(tip - centre)))
    if reach > 0.035 * abs(float(np.subtract(*ax.get_xlim()))):  # a head longer than its axis would tell a lie
        start, end = (tip, tip + 0.45 * (centre - tip)) if inwards else (centre, tip)
        style = {"arrowstyle": "-|>", "facecolor": colours[0], "edgecolor": colours[1], "lw": 0.6}
        style |= {"mutation_scale": 10, "shrinkA": 0, "shrinkB": 0}
        points = [(float(p[0]), float(p[1])) for p in (end, start)]
        drawn.append(ax.annotate("", xy=points[0], xytext=points[1], zorder=6, arrowprops=style))
    return drawn


def draw_dipole(
    ax: Axes,
    centroid: ArrayLike,
    dipole: ArrayLike,
    covariance: ArrayLike | None = None,
    *,
    scale: float,
    colour: str = "#ffffff",
    back: str = "#000000",
) -> list[Artist]:
    """Principal axes of a force dipole, drawn to scale, with the 95 % region of each tip.

    Arrow heads point inwards along an axis that contracts (negative principal value) and outwards along one that
    extends. The shaded region at the tips spans 1.96 standard deviations of the angle and of the principal value; it is
    bent into a fan where the angle is the uncertain one.

    Parameters
    ----------
    centroid, dipole
        ``(2,)`` m, and ``(3,)`` N m in the order xx, xy, yy.
    covariance
        ``(3, 3)`` (N m)^2 in the same order, or None for no region.
    scale
        m of half axis per N m.
    """
    centre, tensor = np.asarray(centroid, float) * UM, np.asarray(dipole, float)
    values, vectors = _principal(tensor)
    drawn: list[Artist] = []
    if covariance is not None:
        for region in _tip_regions(tensor, np.asarray(covariance, float), scale):
            for sign in (1, -1):
                shape = Polygon(
                    centre + sign * region * UM,
                    closed=True,
                    facecolor=colour,
                    alpha=0.6,
                    edgecolor=back,
                    lw=0.6,
                    zorder=5,
                )
                drawn.append(ax.add_patch(shape))
    for value, direction in zip(values, vectors, strict=True):
        reach = abs(value) * scale * UM * direction
        for sign in (1, -1):
            drawn += _draw_half(ax, centre, centre + sign * reach, inwards=value < 0, colours=(colour, back))
    drawn.append(ax.plot(*centre, marker="o", ms=3.2, color=colour, mec=back, mew=0.8, zorder=7)[0])
    return drawn

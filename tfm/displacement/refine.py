"""Displacement at the limit of the photons: iterated patch matching with local deformation on every node at once."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import spline_filter

from tfm.displacement.blur import WINDOWS, choose_windows
from tfm.displacement.grid import fill_smoothly, node_axis, spline_matrix, to_pixels
from tfm.displacement.information import HALO, FramePair, strip_information
from tfm.displacement.match import BrightnessSums
from tfm.displacement.noise import camera_noise
from tfm.displacement.patches import Patches, PatchSums
from tfm.displacement.piv import PivField
from tfm.displacement.prepare import PreparedFrame, bead_width, brightness_ratio

__all__ = ["RefinedField", "refine_displacement"]

#: Residual, in standard deviations over a bead, beyond which a bead counts as lost or added.
_REJECT = 6.0
#: px; when 98 % of the nodes move less than this, one more step is the last.
_SETTLED = 0.25
_LONGEST_STEP = 1.0
#: px; a node that wants to go further has lost its beads, and no number of steps brings it back.
_ASTRAY = 5.0


@dataclass(frozen=True)
class RefinedField:
    """Displacement and covariance on the nodes, in pixels.

    Attributes
    ----------
    x, y
        ``(nx,)``, ``(ny,)`` px in the relaxed frame.
    u
        ``(2, ny, nx)`` px, drift included; NaN where not valid.
    covariance
        ``(3, ny, nx)`` px^2: xx, xy, yy; NaN where not valid.
    valid
        ``(ny, nx)`` bool.
    area
        ``(ny, nx)`` px^2, ground per independent vector at that node.
    misfit
        ``(ny, nx)`` mean squared residual over its expectation.
    variance
        ``(c0, c1)`` of the camera: variance = c0 + c1 * counts.
    lost
        Share of the pixels in beads that one frame has and the other has not.
    settings
        For run.json.
    """

    x: NDArray[np.float64]
    y: NDArray[np.float64]
    u: NDArray[np.float64]
    covariance: NDArray[np.float64]
    valid: NDArray[np.bool_]
    area: NDArray[np.float64]
    misfit: NDArray[np.float64]
    variance: tuple[float, float]
    lost: float
    settings: Mapping[str, Any]


@dataclass(frozen=True)
class _Nodes:
    x: NDArray[np.float64]
    y: NDArray[np.float64]
    u: NDArray[np.float64]


@dataclass(frozen=True)
class _Sweep:
    """What one walk over the image brings home."""

    patches: list[Patches]
    variance: tuple[float, float]
    least_variance: float
    gain: NDArray[np.float32]
    offset: NDArray[np.float32]
    lost: float


def refine_displacement(
    relaxed: PreparedFrame,
    stressed: PreparedFrame,
    start: PivField,
    *,
    spacing_px: int = 8,
    radius: float = 19.2,
    quiet: NDArray[np.bool_] | None = None,
    most_iterations: int = 8,
) -> RefinedField:
    """Refine ``start`` until it stops moving, then choose the patch at every node.

    Each iteration brings the stressed frame back with the present field, gathers the information of every pixel and
    fits local polynomials to it (subset matching with local deformation; Sutton, Orteu & Schreier, Image Correlation,
    Springer 2009, ch. 5, solved for all subsets in one step). Camera noise and brightness are measured from the
    residuals on the way. Last, every node takes the window of least expected squared error
    (:func:`tfm.displacement.blur.choose_windows`).
    """
    shape = relaxed.image.shape
    x, y = node_axis(shape[1], spacing_px), node_axis(shape[0], spacing_px)
    # On the way to convergence a node every half radius carries all that a quadratic window can show.
    coarse = max(spacing_px, int(min(0.5 * radius, min(shape) / 8)))
    coarse_x, coarse_y = node_axis(shape[1], coarse), node_axis(shape[0], coarse)
    nodes = _Nodes(start.x, start.y, fill_smoothly(start.u, start.valid))
    dark = relaxed.image[::3, ::3]
    variance = (float((1.4826 * np.median(np.abs(dark - np.median(dark)))) ** 2) + 1e-12, 0.0)
    ones, zeros = np.ones(shape, dtype=np.float32), np.zeros(shape, dtype=np.float32)
    level = brightness_ratio(relaxed, stressed)
    pair = FramePair(
        relaxed=relaxed.image,
        stressed=spline_filter(stressed.image, 3, output=np.float32),
        floor_relaxed=relaxed.background,
        floor_stressed=stressed.background,
        usable_relaxed=relaxed.usable,
        usable_stressed=stressed.usable,
        linear=relaxed.linear,
        gain=level * ones,
        offset=zeros,
        variance=variance,
        least_variance=0.5 * variance[0],
        bead_width=_shared_width(relaxed, stressed),
    )
    moves: list[float] = []
    for _ in range(most_iterations):
        sweep = _sweep(pair, nodes, [(coarse_x, coarse_y, 1.25 * radius, 2)], np.inf, quiet, with_covariance=False)
        nodes, move = _step(nodes, sweep.patches[0], coarse_x, coarse_y)
        moves.append(move)
        pair = replace(
            pair, variance=sweep.variance, least_variance=sweep.least_variance, gain=sweep.gain, offset=sweep.offset
        )
        # The last sweep is a step of its own, and a step leaves a tenth of the way or less.
        if moves[-1] < _SETTLED:
            break
    windows = [(x, y, factor * radius, order) for order, factor in WINDOWS]
    last = _sweep(pair, nodes, windows, _REJECT, quiet, with_covariance=True)
    chosen = choose_windows([_within_reach(patches, nodes, x, y) for patches in last.patches])
    settings = {
        "refinement": "patches with local deformation",
        "window_radius_px": [factor * radius for _, factor in WINDOWS],
        "window_order": [order for order, _ in WINDOWS],
        "window_shares": list(chosen.shares),
        "blur_factors": list(chosen.blur_factors),
        "iterations": len(moves) + 1,
        "last_move_px": moves[-1],
        "camera_noise": list(last.variance),
        "lost_share": last.lost,
    }
    return RefinedField(x, y, chosen.u, chosen.covariance, chosen.valid, chosen.area, chosen.misfit, last.variance,
                        last.lost, settings)  # fmt: skip


def _shared_width(relaxed: PreparedFrame, stressed: PreparedFrame) -> float:
    widths = [bead_width(frame.image, frame.usable) for frame in (relaxed, stressed)]
    return float(np.mean(widths)) if np.isfinite(widths).all() else 0.0


def _sweep(
    pair: FramePair,
    nodes: _Nodes,
    windows: list[tuple[NDArray[np.float64], NDArray[np.float64], float, int]],
    reject: float,
    quiet: NDArray[np.bool_] | None,
    *,
    with_covariance: bool,
) -> _Sweep:
    height, width = pair.relaxed.shape
    sums = [PatchSums(wx, wy, (height, width), radius, order, with_covariance) for wx, wy, radius, order in windows]
    brightness = BrightnessSums((height, width))
    columns = np.ascontiguousarray(spline_matrix(nodes.x, np.arange(width, dtype=np.float64)).T)
    samples: list[NDArray[np.float32]] = []
    lost = used = 0
    thin = max(1, int(np.sqrt(height * width / 250_000)))
    for block in range(len(brightness.rows) - 1):
        first, last = int(brightness.rows[block]), int(brightness.rows[block + 1])
        rows = np.arange(max(0, first - HALO), min(height, last + HALO))
        u = to_pixels(nodes.u, spline_matrix(nodes.y, rows), columns.T)
        strip = strip_information(pair, u, first, last, reject=reject, final=with_covariance)
        for part in sums:
            part.add(first, strip.information, strip.pull, strip.scatter, strip.squares)
        honest = strip.used & pair.linear[first:last]
        brightness.add(block, strip.relaxed, strip.warped, honest)
        lost += strip.lost
        used += int(strip.used.sum())
        ground = honest if quiet is None else honest & quiet[first:last]
        pick = ground[::thin, ::thin]
        samples.append(np.stack([part[::thin, ::thin][pick] for part in (strip.residual, strip.units, strip.level)]))
    residual, units, level = np.concatenate(samples, axis=1)
    variance = camera_noise(residual, units, level) if residual.size > 2000 else pair.variance
    # Half the variance of the darkest ground: what falls below is a fault of the straight line, not a better pixel.
    darkest = float(np.quantile(level, 0.02)) if level.size else 0.0
    least = max(0.5 * (variance[0] + variance[1] * darkest), 1e-9)
    gain, offset = brightness.maps()
    return _Sweep([part.solve() for part in sums], variance, least, gain * pair.gain, offset * pair.gain + pair.offset,
                  lost / max(1, used + lost))  # fmt: skip


def _step(before: _Nodes, found: Patches, x: NDArray[np.float64], y: NDArray[np.float64]) -> tuple[_Nodes, float]:
    """The next field, and the distance that 98 % of its nodes stay below.

    A node moves at most one pixel, about a bead's width, beyond which a linear step means nothing; a node without an
    answer stays where it was.
    """
    old = to_pixels(before.u, spline_matrix(before.y, y), spline_matrix(before.x, x)).astype(np.float64)
    step = np.where(found.valid, found.u - old, 0.0)
    size = np.hypot(*step)
    step *= np.minimum(1.0, _LONGEST_STEP / np.maximum(size, 1e-12))
    settled = size[found.valid & (size < _ASTRAY)]
    return _Nodes(x, y, old + step), float(np.quantile(settled, 0.98)) if settled.size else 0.0


def _within_reach(patches: Patches, nodes: _Nodes, x: NDArray[np.float64], y: NDArray[np.float64]) -> Patches:
    """Patches whose last step was longer than a linear step can be are not valid: they have not converged."""
    old = to_pixels(nodes.u, spline_matrix(nodes.y, y), spline_matrix(nodes.x, x))
    valid = patches.valid & (np.hypot(*np.nan_to_num(patches.u - old, nan=np.inf)) < _LONGEST_STEP)
    return replace(
        patches,
        u=np.where(valid, patches.u, np.nan),
        covariance=np.where(valid, patches.covariance, np.nan),
        valid=valid,
    )

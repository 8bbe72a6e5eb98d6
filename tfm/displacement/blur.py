"""Which window at which node, and what the window's blur adds to the error of the vector.

A window that is wider than the structure under it blurs. The blur cannot be read off one window; the difference between
two windows shows where it is, and how it falls from wide to sharp windows, over the whole image, shows how much of it
is left in each.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter

from tfm.displacement.patches import Patches

__all__ = ["WINDOWS", "Chosen", "choose_windows"]

#: (order, radius in units of the affine window's), widest first.
WINDOWS: tuple[tuple[int, float], ...] = ((1, 1.0), (2, 1.25), (2, 1.0), (2, 0.8))

#: Squared blur of each window over the squared difference of the first two, where an image says nothing itself: means
#: over random synthetic adherent cells. Images with a strong pull overrule them.
_PRIOR = (7.5, 4.5)
#: What difference to the sharpest window leaves out, since that window blurs too; share of the last two windows.
_BEYOND = (1.4, 1.5)
_SHARPER = (0.6, 0.4)


@dataclass(frozen=True)
class Chosen:
    """One vector per node.

    Attributes
    ----------
    u, covariance, valid, area, misfit
        As in :class:`tfm.displacement.patches.Patches`; the covariance holds the blur.
    blur_factors
        Squared blur of each window in units of the squared difference of the first two.
    shares
        Share of nodes that took each window.
    """

    u: NDArray[np.float64]
    covariance: NDArray[np.float64]
    valid: NDArray[np.bool_]
    area: NDArray[np.float64]
    misfit: NDArray[np.float64]
    blur_factors: tuple[float, ...]
    shares: tuple[float, ...]


def choose_windows(patches: list[Patches], *, most_misfit: float = 3.0) -> Chosen:
    """At every node the window of :data:`WINDOWS` with the least variance plus squared blur.

    d = |u_1 - u_2|^2 minus what noise explains, averaged over neighbouring nodes, is large where the first window
    blurs. The squared blur of window k is c_k d; c_k is estimated from the whole image by regressing the squared
    difference to the sharpest window on d, and leans on :data:`_PRIOR` where d is not above its own noise. The mean of
    squared error over variance is then about 1 where structure is steep and well sampled by beads; where beads are few
    it rises to 2 (measured on synthetic fields, tests/benchmarks/bench_displacement.py).

    Parameters
    ----------
    patches
        One per window, in the order of :data:`WINDOWS`.
    most_misfit
        Nodes whose mean squared residual exceeds its expectation, or the image's median where that is higher, by
        more than this factor are not valid.
    """
    wide, second, sharp = patches[0], patches[1], patches[-1]
    d = np.maximum(_difference(wide, second), 0.0)
    scale = np.nansum(np.where(wide.valid & second.valid, _trace(second) - _trace(wide), 0.0) ** 2)
    weight, lean = float((d * d).sum()), 0.3 * float(scale)
    factors = [
        (beyond * float((_difference(patch, sharp) * d).sum()) + lean * prior) / max(weight + lean, 1e-300)
        for patch, beyond, prior in zip((wide, second), _BEYOND, _PRIOR, strict=True)
    ]
    first, middle = float(np.clip(factors[0], 1.0, 8.0)), float(np.clip(factors[1], 0.0, 4.0)) + 0.05
    blur_factors = (first, middle, _SHARPER[0] * middle, _SHARPER[1] * middle)
    best = np.full(d.shape, np.inf)
    taken = np.full(d.shape, -1)
    u, covariance = np.full_like(sharp.u, np.nan), np.full_like(sharp.covariance, np.nan)
    area, misfit = np.full_like(d, np.nan), np.full_like(d, np.nan)
    # The camera's noise was measured one step before the end; the median misfit of the last step corrects it.
    level = float(np.median(wide.misfit[wide.valid])) if wide.valid.any() else 1.0
    for k, (patch, factor) in enumerate(zip(patches, blur_factors, strict=True)):
        blur = factor * d
        total = np.where(patch.valid, _trace(patch) + blur, np.inf)
        better = total < best
        best, taken = np.where(better, total, best), np.where(better, k, taken)
        # Residuals above their expectation say that more than noise is at work: the variance grows with them.
        widened = patch.covariance + 0.5 * blur * np.array([1.0, 0.0, 1.0])[:, None, None]
        widened *= np.maximum(level, patch.misfit)
        u, covariance = np.where(better, patch.u, u), np.where(better, widened, covariance)
        # A vector carries the information of the ground that it is worth: less where its error was widened.
        own = patch.area * _trace(patch) / (widened[0] + widened[2])
        area, misfit = np.where(better, own, area), np.where(better, patch.misfit, misfit)
    # Against the image's own level: with very bright beads the optics, not photons, set the misfit everywhere.
    valid = np.isfinite(best) & (misfit < most_misfit * max(1.0, level))
    return Chosen(
        u=np.where(valid, u, np.nan),
        covariance=np.where(valid, covariance, np.nan),
        valid=valid,
        area=area,
        misfit=misfit,
        blur_factors=blur_factors,
        shares=tuple(float(np.mean(taken == k)) for k in range(len(patches))),
    )


def _trace(patch: Patches) -> NDArray[np.float64]:
    return np.asarray(patch.covariance[0] + patch.covariance[2])


def _difference(a: Patches, b: Patches) -> NDArray[np.float64]:
    """Squared difference beyond noise, averaged over neighbours; nested windows differ by Var b - Var a."""
    both = a.valid & b.valid
    excess = np.where(both, ((a.u - b.u) ** 2).sum(axis=0) - (_trace(b) - _trace(a)), 0.0)
    share = gaussian_filter(both.astype(float), 1.0)
    return np.asarray(gaussian_filter(excess, 1.0) / np.maximum(share, 1e-3))

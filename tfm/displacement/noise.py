"""How noisy the camera and the vectors are, measured on quiet ground."""

from __future__ import annotations

import itertools

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import nnls

__all__ = ["camera_noise", "vector_noise"]


def vector_noise(u: NDArray[np.float64], on_quiet: NDArray[np.bool_], apart: int) -> float:
    """Root mean square error of one component of independent vectors, from second differences on quiet ground.

    u(-k) - 2 u(0) + u(k) has 6 times the variance of one vector and is blind to a uniform gradient; ``apart`` (k, in
    nodes) is chosen so that the windows share no pixel. Robust (median absolute value). NaN with fewer than 12 triples.

    Examples
    --------
    >>> u = np.random.default_rng(0).normal(0, 0.05, (2, 40, 40))
    >>> round(vector_noise(u, np.ones((40, 40), bool), 2), 2)
    0.05
    """
    triples = []
    for axis in (0, 1):
        part = np.moveaxis(u, axis + 1, 1)
        ok = np.moveaxis(on_quiet, axis, 0)
        if ok.shape[0] <= 2 * apart:
            continue
        second = part[:, : -2 * apart] - 2 * part[:, apart:-apart] + part[:, 2 * apart :]
        good = ok[: -2 * apart] & ok[apart:-apart] & ok[2 * apart :]
        triples.append(second[:, good].ravel())
    values = np.concatenate(triples) if triples else np.zeros(0)
    if len(values) < 24:
        return float("nan")
    return float(1.4826 * np.median(np.abs(values)) / np.sqrt(6))


def camera_noise(
    residual: NDArray[np.floating], units: NDArray[np.floating], level: NDArray[np.floating]
) -> tuple[float, float]:
    """Camera noise ``(c0, c1)``, variance = c0 + c1 * counts, from the difference of two frames that lie on each other.

    Photon noise grows with the counts (slope c1 = the camera's gain, counts per photon), read noise and offset make c0
    (photon transfer method, common practice; Janesick, Photon Transfer, SPIE 2007). Pixels are binned by counts; in
    each bin the variance is a robust one (median absolute value), so that beads that do not match do not count.

    Parameters
    ----------
    residual
        ``(n,)`` counts, stressed frame (brought back) minus relaxed one.
    units
        ``(n,)`` expected variance of the residual over that of one raw pixel (2 without interpolation).
    level
        ``(n,)`` counts of the pixel, both frames together, floor included.

    Examples
    --------
    >>> rng = np.random.default_rng(0)
    >>> mean = rng.uniform(20, 200, 100_000)
    >>> a, b = (2.0 * rng.poisson(mean) + rng.normal(100, 3, mean.size) for _ in range(2))
    >>> c0, c1 = camera_noise(b - a, np.full(mean.size, 2.0), 2 * mean + 100)
    >>> bool(abs(c1 - 2) < 0.05), bool(abs(c0 + 200 - 9) < 8)  # 9 = read noise squared, -200 = gain * offset
    (True, True)
    """
    order = np.argsort(level)
    # Equal steps in rank see the dark ground only; the brightest tenth, where photons are, gets bins of its own.
    shares = np.concatenate([np.linspace(0, 0.9, 10), 0.9 + 0.1 * np.linspace(0, 1, 11)[1:]])
    cuts = np.unique((shares * len(order)).astype(int))
    points = []
    for low, high in itertools.pairwise(cuts):
        pick = order[low:high]
        if len(pick) < 30:
            continue
        z = residual[pick] / np.sqrt(units[pick])
        points.append((float(np.mean(level[pick])), float((1.4826 * np.median(np.abs(z))) ** 2), len(pick)))
    if not points:
        return 1.0, 0.0
    x, v, n = (np.array(column, dtype=float) for column in zip(*points, strict=True))
    if len(points) < 3 or np.ptp(x) < 1e-9 * max(1.0, float(np.abs(x).max())):
        return float(np.average(v, weights=n)), 0.0
    fitted = v.copy()
    for _ in range(5):
        # A variance from n pixels is known to a share of about sqrt(2.7 / n) of itself.
        root = np.sqrt(n) / np.maximum(fitted, 0.3 * float(v.min()) + 1e-30)
        # Variance at the darkest bin and slope, neither below 0: a negative variance would be an infinite weight.
        design = np.stack([np.ones_like(x), x - x.min()], axis=1)
        (dark, slope), _ = nnls(design * root[:, None], v * root)
        fitted = dark + slope * (x - x.min())
    return float(dark - slope * x.min()), float(slope)

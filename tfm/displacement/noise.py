"""How noisy the camera and the vectors are, measured on quiet ground."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["vector_noise"]


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

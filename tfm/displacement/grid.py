"""Node grids over an image, and the step from values at nodes to a value at every pixel."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import make_interp_spline
from scipy.ndimage import gaussian_filter

from tfm.errors import InputError

__all__ = ["fill_smoothly", "node_axis", "spline_matrix", "to_pixels"]


def node_axis(length_px: int, spacing_px: int) -> NDArray[np.float64]:
    """Node positions (px) along one axis: centres of the squares of edge ``spacing_px`` that tile it, centred.

    Raises
    ------
    InputError
        When fewer than four squares fit.

    Examples
    --------
    >>> node_axis(32, 8)
    array([ 3.5, 11.5, 19.5, 27.5])
    """
    count = length_px // spacing_px
    if count < 4:
        raise InputError(
            f"an image {length_px} px wide holds fewer than 4 vectors at {spacing_px} px spacing",
            code="image-too-small",
            remedy="use a larger image or a finer spacing",
        )
    return np.asarray((np.arange(count) + 0.5) * spacing_px - 0.5 + (length_px - count * spacing_px) / 2)


def spline_matrix(nodes: NDArray[np.float64], places: NDArray[np.float64]) -> NDArray[np.float32]:
    """``(len(places), len(nodes))`` weights of the interpolating cubic spline; the first order goes on beyond the ends.

    Examples
    --------
    >>> nodes = np.arange(5.0)
    >>> weights = spline_matrix(nodes, np.array([-1.0, 2.5]))
    >>> np.round(weights @ nodes, 4)  # a straight line stays one, beyond the ends too
    array([-1. ,  2.5])
    """
    if len(nodes) == 1:
        return np.ones((len(places), 1), dtype=np.float32)
    degree = 3 if len(nodes) >= 4 else 1
    spline = make_interp_spline(nodes, np.eye(len(nodes)), k=degree)
    inside = np.clip(places, nodes[0], nodes[-1])
    weights = spline(inside) + spline(inside, nu=1) * (places - inside)[:, None]
    return np.asarray(weights, dtype=np.float32)


def to_pixels(
    values: NDArray[np.floating], rows: NDArray[np.float32], columns: NDArray[np.float32]
) -> NDArray[np.float32]:
    """Values on nodes ``(..., ny, nx)`` at the pixels of two spline matrices: ``rows @ values @ columns.T``."""
    # One plain matrix product at a time: a stacked one with a transposed factor leaves the fast path.
    parts = values.astype(np.float32).reshape(-1, *values.shape[-2:])
    across = np.ascontiguousarray(columns.T)
    out = np.empty((len(parts), rows.shape[0], columns.shape[0]), dtype=np.float32)
    for part, target in zip(parts, out, strict=True):
        np.matmul(rows @ part, across, out=target)
    return out.reshape(*values.shape[:-2], *out.shape[1:])


def fill_smoothly(values: NDArray[np.float64], valid: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Holes closed from valid neighbours, for a *predictor* only: such values never leave the room as measurements.

    ``values`` is ``(2, ny, nx)``. Where nothing is valid the result is 0. The reach grows until every hole is met.
    """
    if valid.all():
        return values.copy()
    out = np.where(valid, values, 0.0)
    weight = valid.astype(float)
    missing = ~valid
    sigma = 1.0
    while missing.any() and valid.any():
        share = gaussian_filter(weight, sigma, mode="constant")
        reached = missing & (share > 1e-3)
        for k in range(len(values)):
            total = gaussian_filter(np.where(valid, values[k], 0.0), sigma, mode="constant")
            out[k][reached] = total[reached] / share[reached]
        missing &= ~reached
        sigma *= 2
    return out

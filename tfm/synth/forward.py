"""Traction to displacement, and displacement at beads between lattice points."""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.typing import NDArray
from scipy.interpolate import RectBivariateSpline

from tfm.gel import Gel, node_kernel

__all__ = ["displacement_at", "node_mean", "surface_displacement"]


def surface_displacement(
    traction: NDArray[np.float64], spacing: float, gel: Gel, *, margin: int = 0
) -> NDArray[np.float64]:
    """Displacement (m) at the node centres of a lattice that reaches ``margin`` nodes beyond the traction's.

    u_i(r) = sum over nodes of K_ij(r - r') T_j(r'), with every node's traction uniform over its square and the lattice
    aperiodic: zero-padded FFT, exact to rounding for the kernel given.

    Parameters
    ----------
    traction
        ``(2, ny, nx)`` Pa.
    spacing
        m, edge of a node.

    Returns
    -------
    ``(2, ny + 2 margin, nx + 2 margin)`` m.
    """
    padded = np.pad(traction, ((0, 0), (margin, margin), (margin, margin)))
    ny, nx = padded.shape[1:]
    size = (scipy.fft.next_fast_len(2 * ny - 1, real=True), scipy.fft.next_fast_len(2 * nx - 1, real=True))
    kernel = node_kernel(gel, (ny, nx), spacing)
    sources = scipy.fft.rfft2(padded, size)
    response = [scipy.fft.rfft2(part, size) for part in kernel]
    out = np.empty((2, ny, nx))
    for component, (kx, ky) in enumerate(((0, 1), (1, 2))):
        whole = scipy.fft.irfft2(response[kx] * sources[0] + response[ky] * sources[1], size)
        out[component] = whole[ny - 1 : 2 * ny - 1, nx - 1 : 2 * nx - 1]
    return out


def node_mean(u: NDArray[np.float64]) -> NDArray[np.float64]:
    """Mean of a smooth field over every node's square, from its values at the centres.

    mean = u + (d^2/24) laplacian(u) + O(d^4), the midpoint rule's next term; an energy sums T times this mean.
    """
    padded = np.pad(u, ((0, 0), (1, 1), (1, 1)), mode="edge")
    laplacian = (
        padded[:, 2:, 1:-1]
        + padded[:, :-2, 1:-1]
        + padded[:, 1:-1, 2:]
        + padded[:, 1:-1, :-2]
        - 4 * padded[:, 1:-1, 1:-1]
    )
    out: NDArray[np.float64] = u + laplacian / 24
    return out


def displacement_at(
    u: NDArray[np.float64], origin: float, spacing: float, positions: NDArray[np.float64]
) -> NDArray[np.float64]:
    """``(n, 2)`` values of the lattice field ``u`` at ``positions`` (x, y, same unit as ``origin`` and ``spacing``).

    ``origin`` is the coordinate of the first node on both axes; bicubic spline.
    """
    y = origin + spacing * np.arange(u.shape[1])
    x = origin + spacing * np.arange(u.shape[2])
    values = [RectBivariateSpline(y, x, part, kx=3, ky=3).ev(positions[:, 1], positions[:, 0]) for part in u]
    return np.stack(values, axis=1)

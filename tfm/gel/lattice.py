"""Averages over square nodes: quadrature rules, and the half-space's lattice in closed form.

The source is one square node of edge 1. With ``receiver="average"`` the displacement is averaged over a square of the
same size: both squares together weigh the separation with a tent (1 - |t|) along each axis. With ``receiver="point"``
the weight is the box of the source alone.

A half-space needs the averages of d_i d_j r only, because 1/r = d_x d_x r + d_y d_y r. Their antiderivatives are
elementary (integrate r twice by parts), so near the source the averages are differences of closed forms. Far away those
differences would cancel to nothing; there the function is smooth on the scale of a node, and its average is a short
filter of its values at the nodes.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import correlate1d

from tfm.errors import InputError

__all__ = [
    "FAR",
    "box",
    "filtered_average",
    "half_space_gradient_lattice",
    "half_space_lattice",
    "node_filter",
    "node_rule",
    "rectangles",
    "tent",
    "weight_of",
    "weighted_average",
]

Array = NDArray[np.float64]

_CLOSED = 12  # nodes: within, closed forms (their relative error grows to 1e-11 here); then quadrature
#: Nodes beyond which a half-space is smooth enough for the filter.
FAR = 40


def tent(t: Array) -> Array:
    """Weight of the separation of two points, each uniform on a unit interval."""
    return np.maximum(0.0, 1.0 - np.abs(t))


def box(t: Array) -> Array:
    """Weight of a point uniform on the unit interval around 0; one half on the very edge."""
    size = np.abs(t)
    return np.where(size < 0.5, 1.0, np.where(size == 0.5, 0.5, 0.0))


def weight_of(receiver: str) -> Callable[[Array], Array]:
    """The weight function of a receiver.

    Raises
    ------
    InputError
        For a receiver other than ``average`` or ``point``.
    """
    if receiver == "average":
        return tent
    if receiver == "point":
        return box
    raise InputError(f"receiver is '{receiver}'", code="bad-receiver", remedy="give 'average' or 'point'")


@lru_cache(maxsize=32)
def node_rule(receiver: str, count: int) -> tuple[Array, Array]:
    """Gaussian rule of ``count`` points for the weight: exact for polynomials up to degree 2 count - 1.

    Golub & Welsch, Math Comp 23:221, 1969, with the recurrence found by Stieltjes' procedure on a fine Gauss-Legendre
    rule.
    """
    if receiver == "point":
        points, weights = np.polynomial.legendre.leggauss(count)
        return 0.5 * points, 0.5 * weights
    fine, weight = np.polynomial.legendre.leggauss(4 * count)
    x = np.concatenate([0.5 * fine - 0.5, 0.5 * fine + 0.5])
    w = 0.5 * np.concatenate([weight, weight]) * tent(x)
    off_diagonal = []  # the weight is even: the diagonal of the Jacobi matrix is 0
    before, now, norm_before = np.zeros_like(x), np.ones_like(x), 1.0
    for n in range(count):
        norm = float((w * now * now).sum())
        ratio = norm / norm_before if n else 0.0
        if n:
            off_diagonal.append(np.sqrt(ratio))
        before, now, norm_before = now, x * now - ratio * before, norm
    jacobi = np.diag(off_diagonal, 1) + np.diag(off_diagonal, -1)
    points, vectors = np.linalg.eigh(jacobi)
    return points, vectors[0] ** 2


@lru_cache(maxsize=16)
def node_filter(receiver: str, order: int) -> Array:
    """``(2 order + 1,)`` symmetric filter: values at the nodes -> average with the weight, error of order 2 order + 2.

    With D = d/dt and the central difference delta = 2 sinh(D/2), the box averages by delta / D and the tent by its
    square; D = 2 asinh(delta/2) turns that into a power series in delta^2.
    """
    # asinh(x)/x = sum (-1)^n (2n)! / (4^n n!^2 (2n + 1)) x^(2n); then its reciprocal, with x = delta / 2
    series = np.empty(order + 1)
    binomial = 1.0
    for n in range(order + 1):
        series[n] = binomial / (2 * n + 1)
        binomial *= -(2 * n + 1) / (2 * n + 2)
    reciprocal = np.zeros(order + 1)
    reciprocal[0] = 1.0
    for n in range(1, order + 1):
        reciprocal[n] = -(series[1 : n + 1] * reciprocal[n - 1 :: -1][:n]).sum()
    if receiver == "average":
        reciprocal = np.convolve(reciprocal, reciprocal)[: order + 1]
    taps = np.zeros(2 * order + 1)
    difference = np.ones(1)
    for n in range(order + 1):
        taps[order - n : order + n + 1] += reciprocal[n] * difference / 4.0**n
        difference = np.convolve(difference, [1.0, -2.0, 1.0])
    return taps


def filtered_average(function: Callable[[Array, Array], Array], rows: slice, columns: slice, taps: Array) -> Array:
    """Average of ``function(x, y) -> (m, ny, nx)`` by the filter around the integer offsets of two slices.

    For functions that are smooth on the scale of a node; one evaluation per node.
    """
    margin = taps.size // 2
    dy = np.arange(rows.start - margin, rows.stop + margin, dtype=np.float64)[:, None]
    dx = np.arange(columns.start - margin, columns.stop + margin, dtype=np.float64)[None, :]
    values = correlate1d(function(dx, dy), taps, axis=2)[:, :, margin:-margin]
    return np.asarray(correlate1d(values, taps, axis=1)[:, margin:-margin])


def rectangles(first: int, last: int, shape: tuple[int, int]) -> Iterator[tuple[slice, slice]]:
    """The offsets with ``first <= max(dy, dx) < last`` as slices of a quadrant of the given shape."""
    ny, nx = min(last, shape[0]), min(last, shape[1])
    if first < ny:
        yield slice(first, ny), slice(0, nx)
    if first < nx and first > 0:
        yield slice(0, min(first, ny)), slice(first, nx)


def weighted_average(
    function: Callable[[Array, Array], Array], rows: slice, columns: slice, rule: tuple[Array, Array]
) -> Array:
    """Average of ``function(x, y) -> (m, ny, nx)`` with the rule around the integer offsets of two slices."""
    dy = np.arange(rows.start, rows.stop, dtype=np.float64)[:, None]
    dx = np.arange(columns.start, columns.stop, dtype=np.float64)[None, :]
    total: Array | None = None
    for step_y, weight_y in zip(*rule, strict=True):
        for step_x, weight_x in zip(*rule, strict=True):
            value = function(dx + step_x, dy + step_y)
            value *= weight_x * weight_y
            total = value if total is None else np.add(total, value, out=total)
    if total is None:
        raise ValueError("the rule has no points")
    return total


def _far(x: Array, y: Array) -> Array:
    """d_x d_x r, d_x d_y r, d_y d_y r."""
    square = x * x + y * y
    cube = 1.0 / (square * np.sqrt(square))
    out = np.empty((3, *cube.shape))
    np.multiply(y * y, cube, out=out[0])
    np.multiply(x * x, cube, out=out[2])
    cube *= -x
    np.multiply(cube, y, out=out[1])
    return out


def _log_ratio(x: Array, y: Array) -> Array:
    """asinh(y / |x|), 0 where x = 0 (it is multiplied by a power of x there)."""
    safe = np.where(x == 0.0, 1.0, np.abs(x))
    return np.asarray(np.where(x == 0.0, 0.0, np.arcsinh(y / safe)))


def _closed(receiver: str, ny: int, nx: int) -> Array:
    """Averages of the second derivatives of r on offsets 0..ny-1, 0..nx-1 from their antiderivatives."""
    if receiver == "average":
        y, x = np.arange(-1.0, ny + 1.0)[:, None], np.arange(-1.0, nx + 1.0)[None, :]
    else:
        y, x = np.arange(ny + 1.0)[:, None] - 0.5, np.arange(nx + 1.0)[None, :] - 0.5
    r = np.hypot(x, y)
    along_y, along_x = _log_ratio(x, y), _log_ratio(y, x)  # asinh(y/|x|), asinh(x/|y|)
    if receiver == "point":  # antiderivatives once in x and once in y
        parts = np.stack([x * along_y, r, y * along_x])
        return np.diff(np.diff(parts, axis=1), axis=2)
    # Twice in x and twice in y. For xx and yy the derivative itself undoes one of the pairs.
    second_xx = r**3 / 6.0 - 0.5 * x * x * r + 0.5 * x * x * y * along_y
    second_yy = r**3 / 6.0 - 0.5 * y * y * r + 0.5 * x * y * y * along_x
    second_xy = x * y * r / 3.0 + x**3 * along_y / 6.0 + y**3 * along_x / 6.0
    parts = np.stack([second_xx, second_xy, second_yy])
    return np.diff(np.diff(parts, n=2, axis=1), n=2, axis=2)


@lru_cache(maxsize=4)
def half_space_lattice(receiver: str, ny: int, nx: int) -> Array:
    """``(3, ny, nx)`` averages of d_x d_x r, d_x d_y r, d_y d_y r at offsets dy, dx >= 0 (read-only, cached)."""
    out = np.empty((3, ny, nx))
    near_y, near_x = min(ny, _CLOSED), min(nx, _CLOSED)
    out[:, :near_y, :near_x] = _closed(receiver, near_y, near_x)
    for rows, columns in rectangles(_CLOSED, FAR, (ny, nx)):
        out[:, rows, columns] = weighted_average(_far, rows, columns, node_rule(receiver, 4))
    for rows, columns in rectangles(FAR, max(ny, nx), (ny, nx)):
        out[:, rows, columns] = filtered_average(_far, rows, columns, node_filter(receiver, 5))
    out.flags.writeable = False
    return out


def _far_gradient(x: Array, y: Array) -> Array:
    """d_xxx r, d_xxy r, d_xyy r, d_yyy r."""
    square = x * x + y * y
    fifth = 1.0 / (square * square * np.sqrt(square))
    return np.stack(
        [
            -3.0 * x * y * y * fifth,
            (2.0 * x * x * y - y**3) * fifth,
            (2.0 * y * y * x - x**3) * fifth,
            -3.0 * y * x * x * fifth,
        ]
    )


@lru_cache(maxsize=4)
def half_space_gradient_lattice(ny: int, nx: int) -> Array:
    """``(4, ny, nx)`` tent averages of d_xxx r, d_xxy r, d_xyy r, d_yyy r at offsets dy, dx >= 0 (read-only,
    cached)."""
    out = np.empty((4, ny, nx))
    near_y, near_x = min(ny, _CLOSED), min(nx, _CLOSED)
    y, x = np.arange(-1.0, near_y + 1.0)[:, None], np.arange(-1.0, near_x + 1.0)[None, :]
    r = np.hypot(x, y)
    along_y, along_x = _log_ratio(x, y), _log_ratio(y, x)
    parts = np.stack(  # twice integrated in x and twice in y
        [
            x * y * along_y - x * r,
            0.5 * (y * r + x * x * along_y),
            0.5 * (x * r + y * y * along_x),
            x * y * along_x - y * r,
        ]
    )
    out[:, :near_y, :near_x] = np.diff(np.diff(parts, n=2, axis=1), n=2, axis=2)
    for rows, columns in rectangles(_CLOSED, FAR, (ny, nx)):
        out[:, rows, columns] = weighted_average(_far_gradient, rows, columns, node_rule("average", 4))
    for rows, columns in rectangles(FAR, max(ny, nx), (ny, nx)):
        out[:, rows, columns] = filtered_average(_far_gradient, rows, columns, node_filter("average", 5))
    out.flags.writeable = False
    return out

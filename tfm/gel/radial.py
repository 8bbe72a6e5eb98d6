"""Radial functions that every real-space quantity is assembled from.

The response is G_ij = a delta_ij - d_i d_j b with a = F^-1[g_T] and b = F^-1[(g_L - g_T) / k^2]. With the operator
D = (1/r) d/dr and f_n = D^n f, derivatives of any order are polynomials in the position::

    d_i f         = r_i f_1
    d_i d_j f     = delta_ij f_1 + r_i r_j f_2
    d_i d_j d_k f = (delta_ij r_k + delta_ik r_j + delta_jk r_i) f_2 + r_i r_j r_k f_3

and so on, so that a_0..a_3 and b_1..b_5 give the response and its first three derivatives (a force needs the third).

Half-space, in units of 1/(2 pi G): a = 1/r and b = nu r. Layer: :mod:`tfm.gel.layer`, put on piecewise polynomials once
per Poisson ratio, because everything else scales with the thickness.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.polynomial import Polynomial, chebyshev
from numpy.typing import NDArray
from scipy.interpolate import PPoly

from tfm.gel.layer import layer_columns, layer_difference
from tfm.gel.model import Gel

__all__ = ["CUTOFF", "RadialFunctions", "radial_functions"]

Array = NDArray[np.float64]
RadialFunctions = dict[str, Array]

#: rho beyond which a layer's response is set to 0: it has fallen below 1e-18 of the half-space's.
CUTOFF = 60.0
_JOIN = 1.0  # rho where the table passes from difference to layer
_DEGREE = 11
_A = ("a0", "a1", "a2", "a3")
_B = ("b1", "b2", "b3", "b4", "b5")
_NAMES = _A + _B
#: Columns that the response (0) and its derivatives of order 1, 2, 3 need; 4 = orders 2 and 3 together.
_ORDERS = (
    ("a0", "b1", "b2"),
    ("a1", "b2", "b3"),
    ("a1", "a2", "b2", "b3", "b4"),
    ("a2", "a3", "b3", "b4", "b5"),
    ("a1", "a2", "a3", "b2", "b3", "b4", "b5"),
)
#: Power of the length that each column carries: a_n ~ length^-(2n + 1), b_n ~ length^-(2n - 1).
_POWER = {**{f"a{n}": 2 * n + 1 for n in range(4)}, **{f"b{n}": 2 * n - 1 for n in range(1, 6)}}
_STEP = 1e-3  # in nu, for the five-point derivative of the table: truncation and rounding are both near 1e-11


def _half_space(r: Array, nu: float, names: tuple[str, ...]) -> RadialFunctions:
    """a_n and b_n of a = 1/r and b = nu r."""
    factor = dict(zip(_NAMES, (1.0, -1.0, 3.0, -15.0, nu, -nu, 3 * nu, -15 * nu, 105 * nu), strict=True))
    inverse = 1.0 / r
    square = inverse * inverse
    powers = {1: inverse}
    for p in range(3, 1 + max(_POWER[name] for name in names), 2):
        powers[p] = powers[p - 2] * square
    return {name: factor[name] * powers[_POWER[name]] for name in names}


@lru_cache(maxsize=1)
def _grid() -> tuple[Array, Array, Array, Array]:
    """Breakpoints, sampling points on [-1, 1], samples -> Chebyshev coefficients, those -> powers of u in [0, 1]."""
    edges = np.concatenate(
        [
            np.linspace(0.0, _JOIN, 5),
            np.linspace(_JOIN, 2.0, 10)[1:],
            np.linspace(2.0, 8.0, 19)[1:],
            np.linspace(8.0, CUTOFF, 53)[1:],
        ]
    )
    points = chebyshev.chebpts1(_DEGREE + 1)
    order = np.arange(_DEGREE + 1)
    to_chebyshev = np.cos(order[:, None] * np.arccos(points)) * (2.0 / points.size)
    to_chebyshev[0] *= 0.5
    to_powers = np.zeros((_DEGREE + 1, _DEGREE + 1))
    for n in order:  # T_n(2 u - 1)
        shifted = Polynomial(chebyshev.cheb2poly(np.eye(_DEGREE + 1)[n]))(Polynomial([-1.0, 2.0]))
        to_powers[n, : shifted.coef.size] = shifted.coef
    return edges, points, to_chebyshev, to_powers


@lru_cache(maxsize=64)
def _coefficients(nu: float) -> Array:
    """Local power coefficients ``(degree + 1, intervals, 9)``: difference below rho = 1, the layer itself above."""
    edges, points, to_chebyshev, to_powers = _grid()
    width = np.diff(edges)
    rho = edges[:-1, None] + 0.5 * width[:, None] * (1.0 + points)
    values = np.empty((9, *rho.shape))
    for low, high in ((0.0, _JOIN), (_JOIN, 2.0), (2.0, 4.0), (4.0, 12.0), (12.0, CUTOFF)):
        block = (edges[:-1] > low - 1e-9) & (edges[1:] < high + 1e-9)
        columns = layer_difference if low == 0.0 else layer_columns
        values[:, block] = columns(rho[block].ravel(), nu).reshape(9, -1, points.size)
    # Two stages on purpose: one combined matrix has entries of 1e8, and the digits above that would be lost.
    powers = (values @ to_chebyshev.T) @ to_powers / width[:, None] ** np.arange(_DEGREE + 1)
    return np.ascontiguousarray(np.moveaxis(powers, (2, 1, 0), (0, 1, 2))[::-1])


@lru_cache(maxsize=256)
def _table(nu: float, names: tuple[str, ...], by_nu: bool) -> PPoly:
    if by_nu:
        near = _coefficients(nu + _STEP) - _coefficients(nu - _STEP)
        far = _coefficients(nu + 2 * _STEP) - _coefficients(nu - 2 * _STEP)
        coefficients = (8.0 * near - far) / (12.0 * _STEP)
    else:
        coefficients = _coefficients(nu)
    columns = [_NAMES.index(name) for name in names]
    return PPoly(np.ascontiguousarray(coefficients[:, :, columns]), _grid()[0])


def radial_functions(gel: Gel, r: Array, order: int, *, part: str = "total", by_nu: bool = False) -> RadialFunctions:
    """The columns that a derivative of ``order`` needs, at distances ``r`` (m), in units of 1/(2 pi G).

    Parameters
    ----------
    gel, r
        Gel and distances; r > 0 for ``total``, r >= 0 for ``difference``.
    order
        0 response, 1 gradient, 2 second, 3 third derivatives, 4 second and third.
    part
        ``total``, or ``difference`` = layer minus half-space (0 on a half-space).
    by_nu
        Derivative with respect to nu at fixed shear modulus instead of the value.
    """
    names = _ORDERS[order]
    half_nu = 1.0 if by_nu else gel.poisson
    if gel.thickness is None:
        functions = _half_space(r, half_nu, names) if part == "total" else {name: np.zeros_like(r) for name in names}
        if by_nu:
            functions.update({name: np.zeros_like(r) for name in names if name in _A})
        return functions
    h = gel.thickness
    rho = r / h
    layer = _table(gel.poisson, names, by_nu)(np.minimum(rho, CUTOFF))
    layer[rho > CUTOFF] = 0.0
    # Below the join the table holds the difference, above it the layer: move the half-space to where it is missing.
    where = rho < _JOIN if part == "total" else rho >= _JOIN
    sign = 1.0 if part == "total" else -1.0
    if np.any(where):
        half = _half_space(rho[where], half_nu, names)
        for column, name in enumerate(names):
            if not (by_nu and name in _A):
                layer[where, column] += sign * half[name]
    return {name: layer[..., column] * h ** -_POWER[name] for column, name in enumerate(names)}

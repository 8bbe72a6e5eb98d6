"""Radial functions that every real-space quantity is assembled from.

The response is G_ij = a delta_ij - d_i d_j b with a = F^-1[g_T] and b = F^-1[(g_L - g_T) / k^2]. With the operator
D = (1/r) d/dr and f_n = D^n f, derivatives of any order are polynomials in the position::

    d_i f = r_i f_1,   d_i d_j f = delta_ij f_1 + r_i r_j f_2,   d_i d_j d_k f = (delta_ij r_k + 2 more) f_2 + r_i r_j r_k f_3, ...

so a_0..a_3 and b_1..b_5 give the response and its first three derivatives (the third is what a force needs).

Half-space, in units of 1/(2 pi G): a = 1/r and b = nu r.

Layer, in units of 1/(2 pi G) and of the thickness, with rho = r/h:

* rho < 1: half-space in closed form plus a smooth difference, the Hankel integral of what the layer lacks in Fourier space
  (it decays as exp(-2 s), so that Gauss-Legendre quadrature is exact to rounding; the difference is an even power series in rho);
* rho > 1: the Hankel integral closed in the upper half plane, a sum over the poles of g_L and g_T of Hankel functions.
  It keeps *relative* accuracy where the layer's response has died exponentially and half-space minus difference would not.

Both are put on piecewise polynomials once per Poisson ratio. Poles: tanh s has i (n + 1/2) pi with residue 1; g_L has one imaginary
pole and one complex pair per strip, found by Newton's method.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.polynomial import chebyshev
from numpy.typing import NDArray
from scipy.interpolate import PPoly
from scipy.special import hankel1, hyp0f1, kv

from tfm.gel.model import Gel
from tfm.gel.response import layer_deficits

__all__ = ["CUTOFF", "RadialFunctions", "layer_difference", "longitudinal_poles", "radial_functions"]

Array = NDArray[np.float64]

#: rho beyond which a layer's response is set to 0: it has fallen below 1e-18 of the half-space's.
CUTOFF = 60.0
_JOIN = 1.0  # rho where the difference hands over to the poles
_DEGREE = 11
_A = ("a0", "a1", "a2", "a3")
_B = ("b1", "b2", "b3", "b4", "b5")
_NAMES = _A + _B
#: Columns needed for the response (0) and its derivatives of order 1, 2, 3.
_ORDERS = (("a0", "b1", "b2"), ("a1", "b2", "b3"), ("a1", "a2", "b2", "b3", "b4"), ("a2", "a3", "b3", "b4", "b5"))
#: Power of h that each column carries: a_n ~ length^-(2n+1), b_n ~ length^-(2n-1).
_POWER = {**{f"a{n}": 2 * n + 1 for n in range(4)}, **{f"b{n}": 2 * n - 1 for n in range(1, 6)}}
_STEP = 4e-3  # in nu, for the five-point derivative of the table: error of order step^4 / 30

RadialFunctions = dict[str, Array]


def _half_space(r: Array, nu: float, names: tuple[str, ...]) -> RadialFunctions:
    """a_n and b_n of a = 1/r and b = nu r."""
    inverse = 1.0 / r
    square = inverse * inverse
    factor = {"a0": 1.0, "a1": -1.0, "a2": 3.0, "a3": -15.0, "b1": nu, "b2": -nu, "b3": 3 * nu, "b4": -15 * nu, "b5": 105 * nu}
    powers = {1: inverse}
    for p in range(3, 1 + max(_POWER[name] for name in names), 2):
        powers[p] = powers[p - 2] * square
    return {name: factor[name] * powers[_POWER[name]] for name in names}


def longitudinal_poles(nu: float, count: int) -> NDArray[np.complex128]:
    """Roots of (3 - 4 nu) cosh 2s + 2 s^2 + 5 - 12 nu + 8 nu^2 with Re >= 0, Im > 0, by growing Im.

    The first lies on the imaginary axis; the n-th complex one near ln(4 n^2 pi^2 / (3 - 4 nu)) / 2 + i n pi.
    """
    m = 3.0 - 4.0 * nu
    c = 5.0 - 12.0 * nu + 8.0 * nu * nu
    n = np.arange(1, count)
    guess = 0.5 * np.log(4.0 * (n * np.pi) ** 2 / m) + 1j * np.pi * n
    s = np.concatenate([[1j * (0.74 + 0.8 * (0.5 - nu))], guess])
    for _ in range(60):
        value = m * np.cosh(2 * s) + 2 * s * s + c
        step = value / (2 * m * np.sinh(2 * s) + 4 * s)
        s = s - step
        if np.all(np.abs(step) <= 4e-16 * np.abs(s)):
            break
    s[0] = 1j * s[0].imag
    return np.asarray(s, dtype=np.complex128)


def _by_poles(rho: Array, nu: float) -> Array:
    """All columns of the layer at rho >= 1, ``(9, n)``."""
    count = 4 + int(np.ceil(38.0 / (np.pi * rho.min())))
    kappa = (np.arange(count) + 0.5) * np.pi
    s = longitudinal_poles(nu, count)
    m = 3.0 - 4.0 * nu
    residue = (1.0 - nu) * (m * np.sinh(2 * s) + 2 * s) / (2 * m * np.sinh(2 * s) + 4 * s)
    # The imaginary pole counts once; a complex one stands for itself and for -conj(s), hence twice the real part.
    weight = np.pi * 1j * residue * np.where(np.arange(count) == 0, 1.0, 2.0)
    out = np.empty((9, rho.size))
    for n in range(6):
        k_n = kv(n, kappa[:, None] * rho)
        h_n = hankel1(n, s[:, None] * rho)
        power = (-1.0 / rho) ** n
        if n < 4:
            out[n] = 2.0 * power * (kappa[:, None] ** n * k_n).sum(axis=0)
        if n > 0:
            longitudinal = (weight[:, None] * s[:, None] ** (n - 2) * h_n).real.sum(axis=0)
            out[3 + n] = power * (longitudinal + 2.0 * (kappa[:, None] ** (n - 2) * k_n).sum(axis=0))
    return out


def layer_difference(rho: Array, nu: float) -> Array:
    """All columns of layer minus half-space, ``(9, n)``, by quadrature; for rho up to about 2.

    a_n: integral of (1 - T_T)(s) (-s^2)^n J_n(s rho)/(s rho)^n ds with T_T - 1 the (negative) transverse deficit;
    b_n the same with the deficit of g_L - g_T over s^2.
    """
    nodes, weights = np.polynomial.legendre.leggauss(24)
    edges = np.linspace(0.0, 34.0, 11)
    half = 0.5 * np.diff(edges)
    s = (edges[:-1, None] + half[:, None] * (1.0 + nodes)).ravel()
    w = (half[:, None] * weights).ravel()
    deficit_l, deficit_t = layer_deficits(s, nu)
    a_hat = -deficit_t * w
    b_hat = -((1.0 - nu) * deficit_l - deficit_t) * w
    z = 0.25 * (s[:, None] * rho) ** 2
    out = np.empty((9, rho.size))
    factorial = 1.0
    for n in range(6):
        factorial *= 2.0 * n if n else 1.0
        bessel = hyp0f1(n + 1.0, -z) / factorial  # J_n(x) / x^n
        if n < 4:
            out[n] = (-1.0) ** n * (a_hat * s ** (2 * n)) @ bessel
        if n > 0:
            out[3 + n] = (-1.0) ** n * (b_hat * s ** (2 * n - 2)) @ bessel
    return out


def _breakpoints() -> Array:
    near = np.linspace(0.0, _JOIN, 5)
    return np.concatenate(
        [near, np.linspace(_JOIN, 2.0, 10)[1:], np.linspace(2.0, 8.0, 25)[1:], np.linspace(8.0, CUTOFF, 105)[1:]]
    )


@lru_cache(maxsize=64)
def _coefficients(nu: float) -> Array:
    """Local power coefficients ``(degree + 1, intervals, 9)``: difference below rho = 1, the layer itself above."""
    edges = _breakpoints()
    width = np.diff(edges)
    points = chebyshev.chebpts1(_DEGREE + 1)
    rho = edges[:-1, None] + 0.5 * width[:, None] * (1.0 + points)
    near = edges[1:] <= _JOIN
    values = np.empty((9, *rho.shape))
    values[:, near] = layer_difference(rho[near].ravel(), nu).reshape(9, -1, points.size)
    for low, high in ((1.0, 2.0), (2.0, 4.0), (4.0, 12.0), (12.0, CUTOFF)):
        block = (edges[:-1] >= low) & (edges[1:] <= high)
        values[:, block] = _by_poles(rho[block].ravel(), nu).reshape(9, -1, points.size)
    # Two stages on purpose: values -> Chebyshev (well conditioned) -> powers (integers). One combined matrix would lose digits.
    order = np.arange(_DEGREE + 1)
    to_chebyshev = np.cos(order[:, None] * np.arccos(points)) * (2.0 / points.size)
    to_chebyshev[0] *= 0.5
    spectrum = values @ to_chebyshev.T
    shift = np.zeros((_DEGREE + 1, _DEGREE + 1))  # T_n(2u - 1) in powers of u
    for n in order:
        power = chebyshev.cheb2poly(np.eye(_DEGREE + 1)[n])
        polynomial = np.zeros(1)
        for coefficient in power[::-1]:
            polynomial = np.polynomial.polynomial.polyadd(
                np.polynomial.polynomial.polymul(polynomial, [-1.0, 2.0]), [coefficient]
            )
        shift[n, : polynomial.size] = polynomial[: _DEGREE + 1]
    powers = spectrum @ shift / width[:, None] ** order
    return np.ascontiguousarray(np.moveaxis(powers, (2, 1, 0), (0, 1, 2))[::-1])


@lru_cache(maxsize=256)
def _table(nu: float, names: tuple[str, ...], by_nu: bool) -> PPoly:
    if by_nu:
        step = _STEP
        near = _coefficients(nu + step) - _coefficients(nu - step)
        far = _coefficients(nu + 2 * step) - _coefficients(nu - 2 * step)
        coefficients = (8.0 * near - far) / (12.0 * step)
    else:
        coefficients = _coefficients(nu)
    columns = [_NAMES.index(name) for name in names]
    return PPoly(np.ascontiguousarray(coefficients[:, :, columns]), _breakpoints())


def radial_functions(gel: Gel, r: Array, order: int, *, part: str = "total", by_nu: bool = False) -> RadialFunctions:
    """The columns that a derivative of ``order`` needs, at distances ``r`` (m), in units of 1/(2 pi G).

    Parameters
    ----------
    gel, r
        Gel and distances; r > 0 for ``total``, r >= 0 for ``difference``.
    order
        0 response, 1 gradient, 2 second, 3 third derivatives.
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

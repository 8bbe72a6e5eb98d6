"""Radial functions of a bonded layer: a power series near the source, a sum over poles away from it.

Columns are a_0..a_3 and b_1..b_5 of :mod:`tfm.gel.radial` in units of 1/(2 pi G) and of the thickness, at rho = r/h.

Near: layer minus half-space is a Hankel integral of what the layer lacks in Fourier space. That decays as exp(-2 s), so
the integral is a power series in rho^2 with radius of convergence 2, whose coefficients are moments of the deficit.

Away: the Hankel integral of the layer itself is closed in the upper half plane and becomes a sum over the poles of g_T
(i (n + 1/2) pi, residue 1) and g_L (one imaginary pole and one complex pair per strip, by Newton's method) of Hankel
functions. It keeps *relative* accuracy where the response has died exponentially and a difference would not.

The two agree to 14 digits where both hold, which is tested; so is each of them against quadrature by mpmath.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.special import hankel1, kv

from tfm.errors import ConvergenceError
from tfm.gel.response import layer_deficits

__all__ = ["layer_columns", "layer_difference", "longitudinal_poles"]

Array = NDArray[np.float64]
_TERMS = 32  # of the power series: (1/2)^(2 * 32) at rho = 1


def longitudinal_poles(nu: float, count: int) -> NDArray[np.complex128]:
    """Roots of (3 - 4 nu) cosh 2s + 2 s^2 + 5 - 12 nu + 8 nu^2 with Re >= 0, Im > 0, by growing Im.

    The first lies on the imaginary axis (0.739 i at nu = 0.5, 1.190 i at nu = 0), the n-th complex one near
    ln(4 n^2 pi^2 / (3 - 4 nu)) / 2 + i n pi.
    """
    m = 3.0 - 4.0 * nu
    c = 5.0 - 12.0 * nu + 8.0 * nu * nu
    n = np.arange(1, count)
    guess = 0.5 * np.log(4.0 * (n * np.pi) ** 2 / m) + 1j * np.pi * n
    s = np.concatenate([[1j * (0.74 + 0.8 * (0.5 - nu))], guess])
    for _ in range(50):
        step = (m * np.cosh(2 * s) + 2 * s * s + c) / (2 * m * np.sinh(2 * s) + 4 * s)
        s = s - step
        if np.all(np.abs(step) <= 1e-14 * np.abs(s)):
            s[0] = 1j * s[0].imag
            return np.asarray(s, dtype=np.complex128)
    raise ConvergenceError(f"the poles of a layer with Poisson ratio {nu} were not found", code="no-poles")


def layer_columns(rho: Array, nu: float) -> Array:
    """All columns of the layer, ``(9, n)``, by the sum over poles; for rho of 0.5 or more."""
    nearest = float(rho.min())
    count = 3 + int(np.ceil((37.0 / nearest + 1.2) / np.pi))  # exp(-37) of the leading pole is rounding
    kappa = ((np.arange(count) + 0.5) * np.pi)[:, None]
    s = longitudinal_poles(nu, count)[:, None]
    m = 3.0 - 4.0 * nu
    residue = (1.0 - nu) * (m * np.sinh(2 * s) + 2 * s) / (2 * m * np.sinh(2 * s) + 4 * s)
    # The imaginary pole counts once; a complex one stands for itself and for -conj(s), hence twice the real part.
    weight = np.pi * 1j * residue
    weight[1:] *= 2.0
    # D^n H_0(s rho) = (-s / rho)^n H_n(s rho), and the same for K; upward recurrence is stable for both.
    z_k, z_h = kappa * rho, s * rho
    k_n = [kv(0, z_k), kv(1, z_k)]
    h_n = [hankel1(0, z_h), hankel1(1, z_h)]
    for n in range(1, 5):
        k_n.append(k_n[n - 1] + 2.0 * n / z_k * k_n[n])
        h_n.append(2.0 * n / z_h * h_n[n] - h_n[n - 1])
    out = np.empty((9, rho.size))
    for n in range(6):
        power = (-1.0 / rho) ** n
        if n < 4:
            out[n] = 2.0 * power * (kappa**n * k_n[n]).sum(axis=0)
        if n > 0:
            longitudinal = (weight * s ** (n - 2.0) * h_n[n]).real.sum(axis=0)
            out[3 + n] = power * (longitudinal + 2.0 * (kappa ** (n - 2.0) * k_n[n]).sum(axis=0))
    return out


def layer_difference(rho: Array, nu: float) -> Array:
    """All columns of layer minus half-space, ``(9, n)``, by the power series; for 0 <= rho <= 1.

    J_n(z) / z^n = sum_j (-1)^j (z/2)^(2j) / (2^n j! (n + j)!), integrated term by term.
    """
    nodes, weights = np.polynomial.legendre.leggauss(20)
    edges = np.linspace(0.0, 96.0, 33)
    half = 0.5 * np.diff(edges)[:, None]
    s = (edges[:-1, None] + half * (1.0 + nodes)).ravel()
    w = (half * weights).ravel()
    deficit_l, deficit_t = layer_deficits(s, nu)
    powers = s ** (2 * np.arange(_TERMS + 5))[:, None]
    a_moment = powers @ (-deficit_t * w)
    b_moment = powers @ (((1.0 - nu) * deficit_l - deficit_t) * -w)  # of s^2 times the transform of b
    variable = rho * rho
    out = np.empty((9, rho.size))
    for n in range(6):
        factor = np.empty(_TERMS)  # (-1)^(n + j) / (2^(n + 2 j) j! (n + j)!)
        factor[0] = (-1.0) ** n / (2.0**n * float(np.prod(np.arange(1, n + 1))))
        for j in range(1, _TERMS):
            factor[j] = -factor[j - 1] / (4.0 * j * (n + j))
        if n < 4:
            out[n] = np.polynomial.polynomial.polyval(variable, factor * a_moment[n : n + _TERMS])
        if n > 0:
            out[3 + n] = np.polynomial.polynomial.polyval(variable, factor * b_moment[n - 1 : n - 1 + _TERMS])
    return out

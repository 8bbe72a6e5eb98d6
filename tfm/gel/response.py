"""The gel's surface in Fourier space: how far a wave of in-plane traction moves it.

Split displacement and traction along the wave vector k (longitudinal, L) and across it (transverse, T); no normal
traction acts. With G the shear modulus, h the thickness and s = k h (Landau & Lifshitz, *Theory of Elasticity*, sec. 8;
Johnson, *Contact Mechanics*, 1985, ch. 3; layer: Navier's equations with a bonded base)::

    half-space   g_L = (1 - nu) / (G k)             g_T = 1 / (G k)
    layer        g_L = (1 - nu) R(s) / (G k)        g_T = tanh(s) / (G k)
                 R = [(3 - 4 nu) sinh 2s + 2 s] / [(3 - 4 nu) cosh 2s + 2 s^2 + 5 - 12 nu + 8 nu^2]

Everything is written in exp(-2 s), so that nothing overflows and no digit is lost for any s.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from tfm.errors import InputError
from tfm.gel.model import Gel

__all__ = ["fourier_response", "fourier_response_derivatives", "layer_deficits"]

_FAR = 400.0  # exp(-2 * 400) underflows to 0: beyond it the layer *is* the half-space in double precision


def _wave_numbers(k: ArrayLike) -> NDArray[np.float64]:
    array = np.asarray(k, dtype=np.float64)
    if not np.all(np.isfinite(array)) or np.any(array < 0.0):
        raise InputError(
            "k holds values that are negative or not finite",
            code="bad-wave-number",
            remedy="give magnitudes in 1/m, 0 or more",
        )
    return array


def _ratio_parts(s: NDArray[np.float64], nu: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Numerator and denominator of R, both times 2 exp(-2 s)."""
    m = 3.0 - 4.0 * nu
    c = 5.0 - 12.0 * nu + 8.0 * nu * nu
    e2 = np.exp(-2.0 * s)
    numerator = -m * np.expm1(-4.0 * s) + 4.0 * s * e2
    denominator = m * (1.0 + e2 * e2) + 2.0 * e2 * (2.0 * s * s + c)
    return numerator, denominator


def layer_deficits(s: NDArray[np.float64], nu: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """What a layer lacks to the half-space, ``1 - R(s)`` and ``1 - tanh(s)``; both decay as exp(-2 s).

    Written without a difference of nearly equal numbers, so that it is exact to rounding for large s too.
    """
    s = np.minimum(s, _FAR)
    c = 5.0 - 12.0 * nu + 8.0 * nu * nu
    e2 = np.exp(-2.0 * s)
    _, denominator = _ratio_parts(s, nu)
    longitudinal = 2.0 * e2 * ((3.0 - 4.0 * nu) * e2 + 2.0 * s * s - 2.0 * s + c) / denominator
    return longitudinal, 2.0 * e2 / (1.0 + e2)


def fourier_response(gel: Gel, k: ArrayLike) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Surface displacement per in-plane traction of wave number k, along and across the wave vector.

    Parameters
    ----------
    gel
        The gel.
    k
        Any shape, 1/m, 0 or more.

    Returns
    -------
    g_L, g_T
        Both of the shape of ``k``, m/Pa: u_L = g_L T_L and u_T = g_T T_T. At k = 0 a layer gives h/G for both; a
        half-space has no answer to a uniform traction and gives ``inf``.

    Raises
    ------
    InputError
        For negative or non-finite wave numbers.

    Notes
    -----
    Landau & Lifshitz, *Theory of Elasticity*, sec. 8 (half-space); module docstring for the layer. Valid for linear
    elasticity, 0 <= nu <= 0.5, and any k h.

    Examples
    --------
    >>> g_L, g_T = fourier_response(Gel(3e3, 0.5), [1e6])
    >>> float(g_L[0]), float(g_T[0])
    (5e-10, 1e-09)
    >>> [round(float(g[0]), 12) for g in fourier_response(Gel(3e3, 0.5, 30e-6), [0.0])]  # h / G
    [3e-08, 3e-08]
    """
    wave = _wave_numbers(k)
    nu, shear = gel.poisson, gel.shear_modulus
    if gel.thickness is None:
        with np.errstate(divide="ignore"):
            transverse = np.asarray(1.0 / (shear * wave))
        return np.asarray((1.0 - nu) * transverse), transverse
    zero = wave == 0.0
    safe = np.where(zero, 1.0 / gel.thickness, wave)
    s = safe * gel.thickness
    numerator, denominator = _ratio_parts(np.minimum(s, _FAR), nu)
    per_wave = 1.0 / (shear * safe)
    uniform = gel.thickness / shear
    longitudinal = np.where(zero, uniform, (1.0 - nu) * per_wave * numerator / denominator)
    return longitudinal, np.where(zero, uniform, per_wave * np.tanh(s))


def fourier_response_derivatives(gel: Gel, k: ArrayLike) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Derivatives of :func:`fourier_response` with respect to Young's modulus, Poisson ratio and thickness.

    Parameters
    ----------
    gel
        The gel. Each derivative keeps the other two of (E, nu, h) fixed; G = E / (2 (1 + nu)) moves with nu.
    k
        Any shape, 1/m, above 0 on a half-space.

    Returns
    -------
    dg_L, dg_T
        Both ``(3,) + k.shape``: [0] per Pa (m/Pa^2), [1] per unit of Poisson ratio (m/Pa), [2] per metre of thickness
        (1/Pa; exactly 0 on a half-space).

    Raises
    ------
    InputError
        For negative or non-finite wave numbers, and for k = 0 on a half-space.

    Examples
    --------
    >>> dg_L, dg_T = fourier_response_derivatives(Gel(3e3, 0.5, 30e-6), [0.0])  # h/G = 2 h (1 + nu) / E
    >>> [f"{float(v):.3e}" for v in dg_T[:, 0]]
    ['-1.000e-11', '2.000e-08', '1.000e-03']
    """
    wave = _wave_numbers(k)
    g_l, g_t = fourier_response(gel, wave)
    nu, shear = gel.poisson, gel.shear_modulus
    if gel.thickness is None:
        if np.any(wave == 0.0):
            raise InputError(
                "k = 0 has no response on an infinitely thick gel", code="bad-wave-number", remedy="leave k = 0 out"
            )
        zero = np.zeros_like(wave)
        by_nu_l = g_l / (1.0 + nu) - g_t
        return (
            np.stack([-g_l / gel.youngs_modulus, by_nu_l, zero]),
            np.stack([-g_t / gel.youngs_modulus, g_t / (1.0 + nu), zero]),
        )
    h = gel.thickness
    s_all = wave * h
    s = np.minimum(s_all, _FAR)
    m, m_nu = 3.0 - 4.0 * nu, -4.0
    c, c_nu = 5.0 - 12.0 * nu + 8.0 * nu * nu, -12.0 + 16.0 * nu
    e2 = np.exp(-2.0 * s)
    e4 = e2 * e2
    n, d = _ratio_parts(s, nu)
    # dR/dnu and dR/ds by the quotient rule; dR/dnu ~ s for small s, so divide by s before h/G is multiplied on.
    n_nu, d_nu = -m_nu * np.expm1(-4.0 * s), m_nu * (1.0 + e4) + 2.0 * e2 * c_nu
    n_s = 4.0 * m * e4 + 4.0 * e2 * (1.0 - 2.0 * s)
    d_s = -4.0 * m * e4 + 4.0 * e2 * (2.0 * s - 2.0 * s * s - c)
    ratio_s = (n_s * d - n * d_s) / (d * d)
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio_nu = np.where(s_all == 0.0, 0.0, (n_nu * d - n * d_nu) / (d * d) * (h / shear) / s_all)
    zero_limit = s_all == 0.0
    by_nu_l = g_l / (1.0 + nu) - g_l / (1.0 - nu) + (1.0 - nu) * ratio_nu
    by_nu_l = np.where(zero_limit, h / shear / (1.0 + nu), by_nu_l)
    sech = 2.0 * np.exp(-s) / (1.0 + e2)
    return (
        np.stack([-g_l / gel.youngs_modulus, by_nu_l, (1.0 - nu) / shear * ratio_s]),
        np.stack([-g_t / gel.youngs_modulus, g_t / (1.0 + nu), sech * sech / shear]),
    )

"""The surface response in real space: displacement at r per newton at the origin, and its derivatives."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from tfm.errors import InputError
from tfm.gel.model import Gel
from tfm.gel.radial import RadialFunctions, radial_functions

__all__ = [
    "assemble_gradient",
    "assemble_tensor",
    "positions",
    "surface_tensor",
    "surface_tensor_derivatives",
    "surface_tensor_gradient",
    "surface_tensor_second_gradient",
]

Array = NDArray[np.float64]


def positions(x: ArrayLike, y: ArrayLike) -> tuple[Array, Array, Array]:
    """``x``, ``y`` broadcast against each other, and r, refusing r = 0.

    Raises
    ------
    InputError
        For coordinates that are not finite or that coincide with the source.
    """
    x_array, y_array = np.broadcast_arrays(np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64))
    r = np.hypot(x_array, y_array)
    if not np.all(np.isfinite(r)):
        raise InputError("x or y holds values that are not finite", code="bad-position", remedy="leave such points out")
    if np.any(r == 0.0):
        raise InputError(
            "a point coincides with its source, where the response is infinite",
            code="zero-distance",
            remedy="leave r = 0 out, or use node_kernel, which integrates over a node",
        )
    return x_array, y_array, r


def assemble_tensor(x: Array, y: Array, f: RadialFunctions) -> Array:
    """(G_xx, G_xy, G_yy) = a_0 delta - b_1 delta - r r b_2, from the columns of order 0."""
    diagonal = f["a0"] - f["b1"]
    b2 = f["b2"]
    return np.stack([diagonal - x * x * b2, -x * y * b2, diagonal - y * y * b2])


def assemble_gradient(x: Array, y: Array, f: RadialFunctions) -> Array:
    """d_k (G_xx, G_xy, G_yy), ``(2, 3, ...)``, from the columns of order 1."""
    a1, b2, b3 = f["a1"], f["b2"], f["b3"]
    out = np.empty((2, 3, *np.broadcast(x, y).shape))
    xx, yy = x * x, y * y
    along = a1 - b2
    out[0, 0] = x * (along - 2.0 * b2 - xx * b3)
    out[0, 1] = -y * (b2 + xx * b3)
    out[0, 2] = x * (along - yy * b3)
    out[1, 0] = y * (along - xx * b3)
    out[1, 1] = -x * (b2 + yy * b3)
    out[1, 2] = y * (along - 2.0 * b2 - yy * b3)
    return out


def surface_tensor(gel: Gel, x: ArrayLike, y: ArrayLike) -> Array:
    """Surface displacement at (x, y) per newton of in-plane force at the origin.

    Parameters
    ----------
    gel
        The gel.
    x, y
        m, any shapes that broadcast; not both 0.

    Returns
    -------
    ``(3, ...)`` m/N = 1/(Pa m): G_xx, G_xy = G_yx, G_yy. u_i = G_ij F_j.

    Raises
    ------
    InputError
        At r = 0 and for coordinates that are not finite.

    Notes
    -----
    Half-space: G_ij = (1 + nu)/(pi E r) [(1 - nu) delta_ij + nu r_i r_j / r^2] (Landau & Lifshitz, *Theory of
    Elasticity*, sec. 8; Johnson 1985, ch. 3). Layer: see :mod:`tfm.gel.radial`; relative accuracy 1e-12 where the
    response is above 1e-18 of the half-space's, 0 beyond 60 thicknesses.

    Examples
    --------
    >>> G = surface_tensor(Gel(1e3, 0.5), 10e-6, 0.0)
    >>> [round(float(g), 6) for g in G]  # along the force twice as much as across it
    [47.746483, 0.0, 23.873241]
    """
    x_array, y_array, r = positions(x, y)
    functions = radial_functions(gel, r, 0)
    return assemble_tensor(x_array, y_array, functions) / (2.0 * np.pi * gel.shear_modulus)


def surface_tensor_gradient(gel: Gel, x: ArrayLike, y: ArrayLike) -> Array:
    """First derivatives of :func:`surface_tensor`.

    Returns
    -------
    ``(2, 3, ...)`` 1/(Pa m^2): [k, :] = d/dx_k of (G_xx, G_xy, G_yy), k = 0 for x and 1 for y.

    Raises
    ------
    InputError
        At r = 0 and for coordinates that are not finite.

    Notes
    -----
    d_k G_ij = delta_ij r_k a_1 - (delta_ij r_k + delta_ik r_j + delta_jk r_i) b_2 - r_i r_j r_k b_3 with the radial
    functions of :mod:`tfm.gel.radial`. Closed form on a half-space.

    Examples
    --------
    >>> dG = surface_tensor_gradient(Gel(1e3, 0.5), 10e-6, 0.0)
    >>> round(float(dG[0, 0]), 3)  # G_xx falls as 1/r: -G_xx / r
    -4774648.293
    """
    x_array, y_array, r = positions(x, y)
    return assemble_gradient(x_array, y_array, radial_functions(gel, r, 1)) / (2.0 * np.pi * gel.shear_modulus)


def surface_tensor_second_gradient(gel: Gel, x: ArrayLike, y: ArrayLike) -> Array:
    """Second derivatives of :func:`surface_tensor`.

    Returns
    -------
    ``(3, 3, ...)`` 1/(Pa m^3): [kl, :] = d_k d_l of (G_xx, G_xy, G_yy), kl = xx, xy, yy.

    Raises
    ------
    InputError
        At r = 0 and for coordinates that are not finite.

    Examples
    --------
    >>> ddG = surface_tensor_second_gradient(Gel(1e3, 0.5), 10e-6, 0.0)
    >>> round(float(ddG[0, 0]) * (10e-6) ** 2, 6)  # 2 G_xx / r^2
    95.492966
    """
    x_array, y_array, r = positions(x, y)
    f = radial_functions(gel, r, 2)
    out = np.empty((3, 3, *r.shape))
    v = (x_array, y_array)
    pairs = ((0, 0), (0, 1), (1, 1))
    for row, (k, m) in enumerate(pairs):
        for column, (i, j) in enumerate(pairs):
            d = np.eye(2)
            deltas = d[i, j] * d[k, m] + d[i, k] * d[j, m] + d[i, m] * d[j, k]
            mixed = (
                d[i, j] * v[k] * v[m] + d[k, m] * v[i] * v[j] + d[i, k] * v[j] * v[m]
                + d[i, m] * v[j] * v[k] + d[j, k] * v[i] * v[m] + d[j, m] * v[i] * v[k]
            )  # fmt: skip
            out[row, column] = (
                d[i, j] * (d[k, m] * f["a1"] + v[k] * v[m] * f["a2"])
                - deltas * f["b2"] - mixed * f["b3"] - v[i] * v[j] * v[k] * v[m] * f["b4"]
            )  # fmt: skip
    return out / (2.0 * np.pi * gel.shear_modulus)


def surface_tensor_derivatives(gel: Gel, x: ArrayLike, y: ArrayLike) -> Array:
    """Derivatives of :func:`surface_tensor` with respect to Young's modulus, Poisson ratio and thickness.

    Returns
    -------
    ``(3, 3, ...)``: [0] per Pa, [1] per unit of Poisson ratio (E fixed), [2] per metre of thickness (0 on a
    half-space); second index (G_xx, G_xy, G_yy).

    Raises
    ------
    InputError
        At r = 0 and for coordinates that are not finite.

    Notes
    -----
    G_ij = Phi_ij(r/h, nu) / (E h) gives the thickness derivative as -(G + r . grad G)/h; the derivative of the layer's
    radial functions with nu is a five-point difference of their tables (relative error below 1e-9).

    Examples
    --------
    >>> d = surface_tensor_derivatives(Gel(1e3, 0.5), 10e-6, 0.0)
    >>> round(float(d[0, 0]) * 1e3, 6), float(d[2, 0])  # -G_xx for dE, no thickness
    (-47.746483, 0.0)
    """
    x_array, y_array, r = positions(x, y)
    value = surface_tensor(gel, x_array, y_array)
    by_nu = assemble_tensor(x_array, y_array, radial_functions(gel, r, 0, by_nu=True))
    by_nu = by_nu / (2.0 * np.pi * gel.shear_modulus) + value / (1.0 + gel.poisson)
    if gel.thickness is None:
        by_thickness = np.zeros_like(value)
    else:
        gradient = surface_tensor_gradient(gel, x_array, y_array)
        by_thickness = -(value + x_array * gradient[0] + y_array * gradient[1]) / gel.thickness
    return np.stack([-value / gel.youngs_modulus, by_nu, by_thickness])

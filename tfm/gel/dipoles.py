"""Point force dipoles on the surface: what they displace and strain, and how two of them interact.

A dipole is P_ij = integral of (x_i - c_i) T_j dA, symmetric, given as (P_xx, P_xy, P_yy) in N m; a contracting cell has
negative principal values. With G_ij = a delta_ij - d_i d_j b (:mod:`tfm.gel.radial`) and r from the dipole to the
point::

    u_j    = -P_kl d_k G_jl
    e_mj   = sym(-P_kl d_m d_k G_jl)
    W      = -P^a_ij P^b_kl d_i d_k G_jl = P^a_mj e^b_mj
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from tfm.errors import InputError
from tfm.gel.model import Gel
from tfm.gel.radial import RadialFunctions, radial_functions
from tfm.gel.tensor import positions

__all__ = [
    "DipoleInteraction",
    "dipole_displacement",
    "dipole_interaction",
    "dipole_interaction_derivatives",
    "dipole_strain",
]

Array = NDArray[np.float64]


def _dipole(name: str, dipole: ArrayLike) -> tuple[Array, Array, Array]:
    array = np.asarray(dipole, dtype=np.float64)
    if array.ndim == 0 or array.shape[-1] != 3:
        raise InputError(
            f"{name} has shape {array.shape}",
            code="bad-dipole",
            remedy="give (P_xx, P_xy, P_yy) in N m along the last axis",
        )
    if not np.all(np.isfinite(array)):
        raise InputError(
            f"{name} holds values that are not finite", code="bad-dipole", remedy="leave unmeasured cells out"
        )
    return array[..., 0], array[..., 1], array[..., 2]


def dipole_displacement(gel: Gel, dipole: ArrayLike, x: ArrayLike, y: ArrayLike) -> Array:
    """Surface displacement that point dipoles at the origin cause at (x, y).

    Parameters
    ----------
    gel
        The gel.
    dipole
        ``(..., 3)`` N m: P_xx, P_xy, P_yy.
    x, y
        m, from the dipole to the point; shapes broadcast against ``dipole.shape[:-1]``.

    Returns
    -------
    ``(2, ...)`` m.

    Raises
    ------
    InputError
        For a dipole of the wrong shape, values that are not finite, and r = 0.

    Examples
    --------
    A contracting dipole draws the gel in:

    >>> u = dipole_displacement(Gel(5e3, 0.5), [-1e-12, 0.0, 0.0], 30e-6, 0.0)
    >>> [round(float(v) * 1e9, 3) for v in u]  # nm
    [-106.103, 0.0]
    """
    p_xx, p_xy, p_yy = _dipole("dipole", dipole)
    x_array, y_array, r = positions(x, y)
    f = radial_functions(gel, r, 1)
    p_x, p_y = p_xx * x_array + p_xy * y_array, p_xy * x_array + p_yy * y_array
    along = x_array * p_x + y_array * p_y
    trace = p_xx + p_yy
    radial = trace * f["b2"] + along * f["b3"]
    turned = 2.0 * f["b2"] - f["a1"]
    scale = 1.0 / (2.0 * np.pi * gel.shear_modulus)
    return np.stack([x_array * radial + p_x * turned, y_array * radial + p_y * turned]) * scale


def dipole_strain(gel: Gel, dipole: ArrayLike, x: ArrayLike, y: ArrayLike) -> Array:
    """In-plane surface strain that point dipoles at the origin cause at (x, y).

    Parameters
    ----------
    gel, dipole, x, y
        As in :func:`dipole_displacement`.

    Returns
    -------
    ``(3, ...)``: e_xx, e_xy (tensor component, half the engineering shear), e_yy.

    Raises
    ------
    InputError
        As :func:`dipole_displacement`.

    Examples
    --------
    >>> e = dipole_strain(Gel(5e3, 0.5), [-1e-12, 0.0, 0.0], 30e-6, 0.0)
    >>> [f"{float(v):.3e}" for v in e]
    ['7.074e-03', '0.000e+00', '-3.537e-03']
    """
    p = _dipole("dipole", dipole)
    x_array, y_array, r = positions(x, y)
    f = radial_functions(gel, r, 2)
    return _strain(p, x_array, y_array, f) / (2.0 * np.pi * gel.shear_modulus)


def _strain(p: tuple[Array, Array, Array], x: Array, y: Array, f: RadialFunctions) -> Array:
    p_xx, p_xy, p_yy = p
    p_x, p_y = p_xx * x + p_xy * y, p_xy * x + p_yy * y
    along = x * p_x + y * p_y
    trace = p_xx + p_yy
    isotropic = trace * f["b2"] + along * f["b3"]
    dyad = trace * f["b3"] + along * f["b4"]
    own = 2.0 * f["b2"] - f["a1"]
    cross = 2.0 * f["b3"] - 0.5 * f["a2"]
    return np.stack(
        [
            isotropic + p_xx * own + 2.0 * x * p_x * cross + x * x * dyad,
            p_xy * own + (x * p_y + y * p_x) * cross + x * y * dyad,
            isotropic + p_yy * own + 2.0 * y * p_y * cross + y * y * dyad,
        ]
    )


@dataclass(frozen=True)
class DipoleInteraction:
    """Elastic interaction of two point dipoles.

    Attributes
    ----------
    energy
        ``(...)`` J: W = integral of T_a . u_b dA in the limit of small cells. Below 0: together they store less than
        apart.
    force_on_b
        ``(..., 2)`` N: -dW/d(position of b); the force on a is the opposite.
    torque_on_b, torque_on_a
        ``(...)`` N m: -dW/d(angle of that cell), angles from +x towards +y; the torque of the pair as a whole is
        balanced: torque_on_a + torque_on_b + (x F_y - y F_x) = 0.
    energy_by_dipole_a, energy_by_dipole_b
        ``(..., 3)`` J/(N m), dimensionless: dW/d(P_xx, P_xy, P_yy) of each cell, with P_xy = P_yx one variable. W is
        bilinear, so these carry each cell's covariance to the energy: var = g_a C_a g_a + g_b C_b g_b.
    """

    energy: Array
    force_on_b: Array
    torque_on_b: Array
    torque_on_a: Array
    energy_by_dipole_a: Array
    energy_by_dipole_b: Array


def dipole_interaction(
    gel: Gel, dipole_a: ArrayLike, dipole_b: ArrayLike, x: ArrayLike, y: ArrayLike
) -> DipoleInteraction:
    """Energy, force and torque between point dipoles a and b.

    Parameters
    ----------
    gel
        The gel.
    dipole_a, dipole_b
        ``(..., 3)`` N m: P_xx, P_xy, P_yy.
    x, y
        m: position of **b minus position of a**; shapes broadcast against the dipoles'.

    Returns
    -------
    DipoleInteraction

    Raises
    ------
    InputError
        For dipoles of the wrong shape, values that are not finite, and r = 0.

    Notes
    -----
    W = -P^a_ij P^b_kl d_i d_k G_jl(r), even in r; forces and torques are -dW/d(position, angle): what acts on b if
    cells move so as to store less. For dead loads (passive defects that keep their force while they move) signs are
    opposite. Valid where the distance is large against the cells. A few microseconds a pair on a layer, less on a
    half-space.

    Examples
    --------
    Two equal dipoles in line, W = -2 P^2 (1 + nu) / (pi E r^3):

    >>> pair = dipole_interaction(Gel(1e3, 0.5), [-1e-12, 0, 0], [-1e-12, 0, 0], 20e-6, 0.0)
    >>> round(float(pair.energy) * 1e15, 6)  # fJ
    -119.366207
    >>> bool(pair.force_on_b[0] < 0)  # drawn towards a
    True
    """
    a, b = _dipole("dipole_a", dipole_a), _dipole("dipole_b", dipole_b)
    x_array, y_array, r = positions(x, y)
    scale = 1.0 / (2.0 * np.pi * gel.shear_modulus)
    f = radial_functions(gel, r, 4)
    strain_b = scale * _strain(b, x_array, y_array, f)
    strain_a = scale * _strain(a, x_array, y_array, f)
    a_xx, a_xy, a_yy = a
    b_xx, b_xy, b_yy = b
    energy = a_xx * strain_b[0] + 2.0 * a_xy * strain_b[1] + a_yy * strain_b[2]
    # Turning a tensor by an angle changes (xx, xy, yy) at the rate (-2 xy, xx - yy, 2 xy).
    torque_a = 2.0 * a_xy * (strain_b[0] - strain_b[2]) - 2.0 * (a_xx - a_yy) * strain_b[1]
    torque_b = 2.0 * b_xy * (strain_a[0] - strain_a[2]) - 2.0 * (b_xx - b_yy) * strain_a[1]
    force = -scale * _energy_gradient(a, b, x_array, y_array, f)
    doubled = np.array([1.0, 2.0, 1.0])
    components = (*energy.shape, 3)
    return DipoleInteraction(
        energy=energy,
        force_on_b=np.moveaxis(force, 0, -1),
        torque_on_b=torque_b,
        torque_on_a=torque_a,
        energy_by_dipole_a=np.broadcast_to(np.moveaxis(strain_b, 0, -1) * doubled, components).copy(),
        energy_by_dipole_b=np.broadcast_to(np.moveaxis(strain_a, 0, -1) * doubled, components).copy(),
    )


def _energy_gradient(
    a: tuple[Array, Array, Array], b: tuple[Array, Array, Array], x: Array, y: Array, f: RadialFunctions
) -> Array:
    """dW/dr times 2 pi G, from W = -tr(ab) a_1 - ar.br a_2 + [tr a tr b + 2 tr(ab)] b_2 + [...] b_3 + (rar)(rbr)
    b_4."""
    a_x, a_y = a[0] * x + a[1] * y, a[1] * x + a[2] * y
    b_x, b_y = b[0] * x + b[1] * y, b[1] * x + b[2] * y
    raa, rbb = x * a_x + y * a_y, x * b_x + y * b_y
    trace_a, trace_b = a[0] + a[2], b[0] + b[2]
    both = a[0] * b[0] + 2.0 * a[1] * b[1] + a[2] * b[2]
    product = a_x * b_x + a_y * b_y
    mixed = trace_a * rbb + trace_b * raa + 4.0 * product
    radial = (
        -both * f["a2"] - product * f["a3"]
        + (trace_a * trace_b + 2.0 * both) * f["b3"] + mixed * f["b4"] + raa * rbb * f["b5"]
    )  # fmt: skip
    ab_x = a[0] * b_x + a[1] * b_y + b[0] * a_x + b[1] * a_y
    ab_y = a[1] * b_x + a[2] * b_y + b[1] * a_x + b[2] * a_y
    on_product = 4.0 * f["b3"] - f["a2"]
    on_a = 2.0 * (trace_b * f["b3"] + rbb * f["b4"])
    on_b = 2.0 * (trace_a * f["b3"] + raa * f["b4"])
    return np.stack(
        [
            x * radial + ab_x * on_product + a_x * on_a + b_x * on_b,
            y * radial + ab_y * on_product + a_y * on_a + b_y * on_b,
        ]
    )


def dipole_interaction_derivatives(
    gel: Gel, dipole_a: ArrayLike, dipole_b: ArrayLike, x: ArrayLike, y: ArrayLike
) -> Array:
    """Derivatives of the interaction energy with respect to Young's modulus, Poisson ratio and thickness.

    Parameters
    ----------
    gel, dipole_a, dipole_b, x, y
        As in :func:`dipole_interaction`.

    Returns
    -------
    ``(3, ...)``: J/Pa, J, J/m (0 on a half-space), at fixed dipoles.

    Raises
    ------
    InputError
        As :func:`dipole_interaction`.

    Examples
    --------
    >>> d = dipole_interaction_derivatives(Gel(1e3, 0.5), [-1e-12, 0, 0], [-1e-12, 0, 0], 20e-6, 0.0)
    >>> round(float(d[0]) * 1e3 * 1e15, 6), float(d[2])  # -W for dE
    (119.366207, 0.0)
    """
    pair = dipole_interaction(gel, dipole_a, dipole_b, x, y)
    a, b = _dipole("dipole_a", dipole_a), _dipole("dipole_b", dipole_b)
    x_array, y_array, r = positions(x, y)
    strain = _strain(b, x_array, y_array, radial_functions(gel, r, 2, by_nu=True))
    by_nu = (a[0] * strain[0] + 2.0 * a[1] * strain[1] + a[2] * strain[2]) / (2.0 * np.pi * gel.shear_modulus)
    by_nu = by_nu + pair.energy / (1.0 + gel.poisson)
    if gel.thickness is None:
        by_thickness = np.zeros_like(pair.energy)
    else:  # W = F(r/h) / (E h^3)
        along = x_array * pair.force_on_b[..., 0] + y_array * pair.force_on_b[..., 1]
        by_thickness = (along - 3.0 * pair.energy) / gel.thickness
    return np.stack([-pair.energy / gel.youngs_modulus, by_nu, by_thickness])

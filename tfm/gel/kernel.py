"""Discrete kernels: what one square node of traction displaces and strains on another."""

from __future__ import annotations

from collections.abc import Callable
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from tfm.gel.assembly import Quantity, checked_lattice, whole_lattice
from tfm.gel.lattice import half_space_gradient_lattice, half_space_lattice, weight_of
from tfm.gel.model import Gel
from tfm.gel.radial import RadialFunctions, radial_functions
from tfm.gel.tensor import assemble_gradient, assemble_tensor

__all__ = ["Receiver", "node_kernel", "node_kernel_derivatives", "node_strain_kernel"]

Array = NDArray[np.float64]
Receiver = Literal["average", "point"]
_Function = Callable[[Array, Array], Array]

_TENSOR_PARITY = ((False, False), (True, True), (False, False))


def _half_space_value(gel: Gel, receiver: str, ny: int, nx: int, spacing: float) -> Array:
    second = half_space_lattice(receiver, ny, nx)
    out = -gel.poisson * second
    whole = second[0] + second[2]
    out[0] += whole
    out[2] += whole
    return np.asarray(out * spacing)


def _half_space_by_nu(gel: Gel, receiver: str, ny: int, nx: int, spacing: float) -> Array:
    return np.asarray(-spacing * half_space_lattice(receiver, ny, nx))


def _half_space_by_thickness(gel: Gel, receiver: str, ny: int, nx: int, spacing: float) -> Array:
    return np.zeros((3, ny, nx))


def _response(by_nu: bool) -> Callable[[Gel, float, str], _Function]:
    def at(gel: Gel, spacing: float, part: str) -> _Function:
        def value(x: Array, y: Array) -> Array:
            x, y = x * spacing, y * spacing
            functions = radial_functions(gel, np.hypot(x, y), 0, part=part, by_nu=by_nu)
            return assemble_tensor(x, y, functions) * spacing**2

        return value

    return at


def _response_by_thickness(gel: Gel, spacing: float, part: str) -> _Function:
    """-(G + r . grad G) / h, because G = Phi(r/h) / h."""
    thickness = float(gel.thickness or np.inf)

    def value(x: Array, y: Array) -> Array:
        x, y = x * spacing, y * spacing
        r = np.hypot(x, y)
        zero, one = (radial_functions(gel, r, order, part=part) for order in (0, 1))
        square = r * r
        scaled: RadialFunctions = {
            "a0": zero["a0"] + square * one["a1"],
            "b1": zero["b1"] + square * one["b2"],
            "b2": zero["b2"] + 2.0 * one["b2"] + square * one["b3"],
        }
        return assemble_tensor(x, y, scaled) * (-(spacing**2) / thickness)

    return value


def _strain_of(gradient: Array) -> Array:
    """(e_xx|x, e_xx|y, e_xy|x, e_xy|y, e_yy|x, e_yy|y) of d_k (G_xx, G_xy, G_yy); |x = by traction along x."""
    (xx_x, xy_x, yy_x), (xx_y, xy_y, yy_y) = gradient  # last letter: derivative
    return np.stack([xx_x, xy_x, 0.5 * (xx_y + xy_x), 0.5 * (xy_y + yy_x), xy_y, yy_y])


def _half_space_strain(gel: Gel, receiver: str, ny: int, nx: int, spacing: float) -> Array:
    xxx, xxy, xyy, yyy = half_space_gradient_lattice(ny, nx)
    along_x, along_y = xxx + xyy, xxy + yyy  # gradient of 1/r
    nu = gel.poisson
    return _strain_of(
        np.stack(
            [
                np.stack([along_x - nu * xxx, -nu * xxy, along_x - nu * xyy]),
                np.stack([along_y - nu * xxy, -nu * xyy, along_y - nu * yyy]),
            ]
        )
    )


def _response_strain(gel: Gel, spacing: float, part: str) -> _Function:
    def value(x: Array, y: Array) -> Array:
        x, y = np.broadcast_arrays(x * spacing, y * spacing)
        return _strain_of(assemble_gradient(x, y, radial_functions(gel, np.hypot(x, y), 1, part=part))) * spacing**2

    return value


_VALUE = Quantity(
    _TENSOR_PARITY,
    _half_space_value,
    _response(by_nu=False),
    lambda gel: (float(gel.thickness or np.inf), 0.0, float(gel.thickness or np.inf)),
)
_BY_NU = Quantity(_TENSOR_PARITY, _half_space_by_nu, _response(by_nu=True), lambda gel: (0.0, 0.0, 0.0))
_BY_THICKNESS = Quantity(_TENSOR_PARITY, _half_space_by_thickness, _response_by_thickness, lambda gel: (1.0, 0.0, 1.0))
_STRAIN = Quantity(
    ((True, False), (False, True), (False, True), (True, False), (True, False), (False, True)),
    _half_space_strain,
    _response_strain,
    lambda gel: (0.0,) * 6,
)


def node_kernel(gel: Gel, shape: tuple[int, int], spacing: float, *, receiver: Receiver = "average") -> Array:
    """Displacement at a lattice offset per pascal of traction on one square node.

    Parameters
    ----------
    gel
        The gel.
    shape
        ``(ny, nx)`` of the lattice.
    spacing
        m: edge of a node = distance of neighbours.
    receiver
        ``average``: displacement averaged over a node (a piecewise constant traction then has the exact strain energy
        1/2 sum T . u spacing^2); ``point``: at the node's centre.

    Returns
    -------
    ``(3, 2 ny - 1, 2 nx - 1)`` m/Pa: K_xx, K_xy = K_yx, K_yy; [:, ny - 1 + dy, nx - 1 + dx] is the displacement at
    offset (dy, dx) from the source. Exactly even under (dy, dx) -> (-dy, -dx).

    Raises
    ------
    InputError
        For a shape, spacing or receiver that makes no sense.

    Notes
    -----
    K_ij = integral of G_ij over the source node, averaged over the receiver. Half-space: closed antiderivatives of
    d_i d_j r near, Gaussian rules far (relative error below 1e-10 everywhere). Layer: plus the smooth difference, or
    the layer's own response where it has died away; right for any thickness, also far below the spacing, where the
    node's own value tends to h/G.

    Examples
    --------
    >>> K = node_kernel(Gel(1e3, 0.5), (3, 4), 1e-6, receiver="point")
    >>> K.shape
    (3, 5, 7)
    >>> round(float(K[0, 2, 3]) * 1e9, 6)  # nm/Pa: a asinh(1) (2 - nu) / (pi G)
    1.262475
    """
    ny, nx, edge = checked_lattice(shape, spacing)
    weight_of(receiver)
    return whole_lattice(_VALUE, gel, ny, nx, edge, receiver)


def node_kernel_derivatives(
    gel: Gel, shape: tuple[int, int], spacing: float, *, receiver: Receiver = "average"
) -> Array:
    """Derivatives of :func:`node_kernel` with respect to Young's modulus, Poisson ratio and thickness.

    Returns
    -------
    ``(3, 3, 2 ny - 1, 2 nx - 1)``: [0] m/Pa^2, [1] m/Pa per unit of Poisson ratio (E fixed), [2] 1/Pa (0 on a
    half-space).

    Raises
    ------
    InputError
        As :func:`node_kernel`.

    Notes
    -----
    ``displacement(gel, T, spacing, kernel=derivatives[1])`` is the derivative of the displacement with nu, and so on.
    Those with nu are five-point differences of the layer's radial table (relative error near 1e-10), the others closed
    forms of it.

    Examples
    --------
    >>> gel = Gel(1e3, 0.5)
    >>> K, dK = node_kernel(gel, (3, 4), 1e-6), node_kernel_derivatives(gel, (3, 4), 1e-6)
    >>> bool(np.allclose(dK[0], -K / 1e3, rtol=1e-12))
    True
    """
    ny, nx, edge = checked_lattice(shape, spacing)
    weight_of(receiver)
    value, by_nu, by_thickness = (
        whole_lattice(quantity, gel, ny, nx, edge, receiver) for quantity in (_VALUE, _BY_NU, _BY_THICKNESS)
    )
    return np.stack([-value / gel.youngs_modulus, by_nu + value / (1.0 + gel.poisson), by_thickness])


def node_strain_kernel(gel: Gel, shape: tuple[int, int], spacing: float) -> Array:
    """In-plane strain, averaged over a node, per pascal of traction on another node.

    Parameters
    ----------
    gel, shape, spacing
        As in :func:`node_kernel`.

    Returns
    -------
    ``(3, 2, 2 ny - 1, 2 nx - 1)`` 1/Pa: [ij, c] is the strain (e_xx, e_xy, e_yy) by a traction along c = x, y. Exactly
    odd under (dy, dx) -> (-dy, -dx).

    Raises
    ------
    InputError
        For a shape or spacing that makes no sense.

    Notes
    -----
    The strain of piecewise constant traction is infinite (as a logarithm) on the edges where traction jumps; its
    average over a node is finite, and exact here.

    Examples
    --------
    >>> K = node_strain_kernel(Gel(1e3, 0.5), (3, 4), 1e-6)
    >>> K.shape, float(K[0, 0, 2, 3]), bool(K[0, 0, 2, 4] < 0)  # pulled along x: compressed in front
    ((3, 2, 5, 7), 0.0, True)
    """
    ny, nx, edge = checked_lattice(shape, spacing)
    return whole_lattice(_STRAIN, gel, ny, nx, edge, "average").reshape(3, 2, 2 * ny - 1, 2 * nx - 1)

"""Discrete kernels: the displacement of one square node per pascal on another."""

from __future__ import annotations

from collections.abc import Callable
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from tfm.errors import InputError
from tfm.gel.lattice import (
    FAR,
    filtered_average,
    half_space_lattice,
    node_filter,
    node_rule,
    rectangles,
    weight_of,
    weighted_average,
)
from tfm.gel.model import Gel
from tfm.gel.radial import CUTOFF, radial_functions
from tfm.gel.tensor import assemble_tensor

__all__ = ["Receiver", "checked_lattice", "node_kernel", "node_kernel_derivatives"]

Array = NDArray[np.float64]
Receiver = Literal["average", "point"]
_Kind = Literal["value", "by_nu", "by_thickness"]

_THIN = 0.02  # thickness over spacing: below, the layer's response is integrated directly instead of as a difference
_GRADED = 2.0  # below, the difference varies within a node: graded panels
_NEAR = 4  # offsets integrated with graded panels
#: Smallest thickness/spacing -> order of the filter; the remaining error is below 1e-10 of the half-space's response.
_FILTERS = ((12.0, 5), (4.0, 8))
#: The same for Gauss points per axis, for thinner layers.
_POINTS = ((2.0, 6), (0.0, 12))


def checked_lattice(shape: tuple[int, int], spacing: float) -> tuple[int, int, float]:
    """``ny, nx, spacing`` of a lattice.

    Raises
    ------
    InputError
        For a shape that is not two positive integers or a spacing that is not a positive length.
    """
    if len(shape) != 2 or any(int(n) != n or n < 1 for n in shape):
        raise InputError(f"shape is {shape}", code="bad-lattice", remedy="give (ny, nx), both 1 or more")
    if not (np.isfinite(spacing) and spacing > 0.0):
        raise InputError(f"spacing is {spacing}", code="bad-lattice", remedy="give the edge of a node in m, for instance 1e-6")
    return int(shape[0]), int(shape[1]), float(spacing)


def _tensor(gel: Gel, spacing: float, part: str, kind: _Kind) -> Callable[[Array, Array], Array]:
    """``function(x, y)`` in nodes -> (xx, xy, yy) times spacing^2, in units of 1/(2 pi G)."""

    def value(x: Array, y: Array) -> Array:
        x, y = x * spacing, y * spacing
        r = np.hypot(x, y)
        if kind != "by_thickness" or gel.thickness is None:
            return assemble_tensor(x, y, radial_functions(gel, r, 0, part=part, by_nu=kind == "by_nu")) * spacing**2
        zero, one = (radial_functions(gel, r, order, part=part) for order in (0, 1))
        square = r * r
        diagonal = zero["a0"] - zero["b1"] + square * (one["a1"] - one["b2"])
        dyad = zero["b2"] + 2.0 * one["b2"] + square * one["b3"]
        out = np.stack([diagonal - x * x * dyad, -x * y * dyad, diagonal - y * y * dyad])
        return out * (-(spacing**2) / gel.thickness)

    return value


def _half_space(gel: Gel, receiver: str, ny: int, nx: int, spacing: float, kind: _Kind) -> Array:
    """Quadrant of the half-space part, in units of 1/(2 pi G)."""
    if kind == "by_thickness":
        return np.zeros((3, ny, nx))
    second = half_space_lattice(receiver, ny, nx)
    out = -(1.0 if kind == "by_nu" else gel.poisson) * second
    if kind == "value":
        whole = second[0] + second[2]
        out[0] += whole
        out[2] += whole
    return np.asarray(out * spacing)


def _panels(eta: float, finest: float) -> tuple[Array, Array]:
    """Gauss-Legendre nodes and weights on [0, 5.5], graded towards 0 down to ``finest``, split at half-integers."""
    edges = [0.0]
    size = min(finest, 0.5)
    while size < 0.5:
        edges.append(size)
        size *= 2.0
    edges.extend(np.arange(0.5, _NEAR + 2.0, 0.5))
    bounds = np.array(edges)
    count = 14
    points, weights = np.polynomial.legendre.leggauss(count)
    half = 0.5 * np.diff(bounds)[:, None]
    nodes = (bounds[:-1, None] + half * (1.0 + points)).ravel()
    all_weights = (half * weights).ravel()
    keep = nodes < 1.5 * CUTOFF * max(eta, _THIN / 2)  # nothing is left of a layer's response further out
    return (nodes[keep], all_weights[keep]) if finest < eta / 2 else (nodes, all_weights)


def _near_block(gel: Gel, spacing: float, receiver: str, kind: _Kind) -> Array:
    """``(3, 5, 5)`` averages at offsets 0..4 for layers thinner than two nodes, in units of 1/(2 pi G).

    Returns the difference to the half-space for thickness > 0.02 spacing, the layer's response itself below; there the
    node's own value is the k = 0 response (h / G) minus what the weight leaves out.
    """
    eta = float(gel.thickness or 0.0) / spacing
    thin = eta < _THIN
    nodes, weights = _panels(eta, eta * 2.0**-24 if thin else eta)
    values = _tensor(gel, spacing, "total" if thin else "difference", kind)(nodes[None, :], nodes[:, None])
    weight = weight_of(receiver)
    offsets = np.arange(_NEAR + 1.0)[:, None]
    here, mirrored = weight(nodes - offsets), weight(nodes + offsets)
    even, odd = (here + mirrored) * weights, (here - mirrored) * weights
    even[0] = 2.0 * here[0] * weights
    odd[0] = 0.0
    out = np.stack([even @ values[0] @ even.T, odd @ values[1] @ odd.T, even @ values[2] @ even.T])
    if thin:
        uniform = 2.0 * np.pi * {"value": float(gel.thickness or 0.0), "by_nu": 0.0, "by_thickness": 1.0}[kind]
        missing = 4.0 * weights[:, None] * weights * (1.0 - here[0][:, None] * here[0])
        out[0, 0, 0] = uniform - float((missing * values[0]).sum())
        out[2, 0, 0] = uniform - float((missing * values[2]).sum())
    return out


def _quadrant(gel: Gel, ny: int, nx: int, spacing: float, receiver: str, kind: _Kind) -> Array:
    """``(3, ny, nx)`` at offsets dy, dx >= 0, in units of 1/(2 pi G)."""
    if gel.thickness is None:
        return _half_space(gel, receiver, ny, nx, spacing, kind)
    eta = gel.thickness / spacing
    reach = 2 + int(np.ceil(min(CUTOFF * eta, float(max(ny, nx)))))  # offsets that the layer reaches at all
    order = next((order for least, order in _FILTERS if eta >= least), None)
    graded = eta < _GRADED
    edge = _NEAR + 1 if graded or order is None else max(FAR, int(np.ceil(1.5 * eta)))
    near_y, near_x = min(ny, edge), min(nx, edge)

    def average(part: str, rows: slice, columns: slice) -> Array:
        function = _tensor(gel, spacing, part, kind)
        if order is not None:
            return filtered_average(function, rows, columns, node_filter(receiver, order))
        points = next(points for least, points in _POINTS if eta >= least)
        return weighted_average(function, rows, columns, node_rule(receiver, points))

    out = np.zeros((3, ny, nx))
    near = out[:, :near_y, :near_x]
    if eta >= _THIN:
        near += _half_space(gel, receiver, near_y, near_x, spacing, kind)
    if graded:
        near += _near_block(gel, spacing, receiver, kind)[:, :near_y, :near_x]
    else:
        near += average("difference", slice(0, near_y), slice(0, near_x))
    for rows, columns in rectangles(edge, reach, (ny, nx)):
        out[:, rows, columns] = average("total", rows, columns)
    return out


def _mirror(quadrant: Array) -> Array:
    """The whole lattice from the quadrant: xx and yy are even in both offsets, xy odd in both."""
    _, ny, nx = quadrant.shape
    out = np.empty((3, 2 * ny - 1, 2 * nx - 1))
    out[:, ny - 1 :, nx - 1 :] = quadrant
    sign = np.array([1.0, -1.0, 1.0])[:, None, None]
    out[:, ny - 1 :, : nx - 1] = sign * quadrant[:, :, :0:-1]
    out[:, : ny - 1, :] = sign * out[:, : ny - 1 : -1, :]
    return out


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
    ``(3, 2 ny - 1, 2 nx - 1)`` m/Pa: K_xx, K_xy = K_yx, K_yy; [:, ny - 1 + dy, nx - 1 + dx] is the displacement at offset
    (dy, dx) from the source. Exactly even under (dy, dx) -> (-dy, -dx).

    Raises
    ------
    InputError
        For a shape, spacing or receiver that makes no sense.

    Notes
    -----
    K_ij = integral of G_ij over the source node, averaged over the receiver. Half-space: closed antiderivatives of
    d_i d_j r near, Gaussian rules far (relative error below 1e-10 everywhere). Layer: plus the smooth difference, or the
    layer's own response where it has died away; right for any thickness, also far below the spacing, where the node's
    own value tends to h/G.

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
    return _mirror(_quadrant(gel, ny, nx, edge, receiver, "value") / (2.0 * np.pi * gel.shear_modulus))


def node_kernel_derivatives(
    gel: Gel, shape: tuple[int, int], spacing: float, *, receiver: Receiver = "average"
) -> Array:
    """Derivatives of :func:`node_kernel` with respect to Young's modulus, Poisson ratio and thickness.

    Returns
    -------
    ``(3, 3, 2 ny - 1, 2 nx - 1)``: [0] m/Pa^2, [1] m/Pa per unit of Poisson ratio (E fixed), [2] 1/Pa (0 on a half-space).

    Raises
    ------
    InputError
        As :func:`node_kernel`.

    Examples
    --------
    >>> gel = Gel(1e3, 0.5)
    >>> bool(np.allclose(node_kernel_derivatives(gel, (3, 4), 1e-6)[0], -node_kernel(gel, (3, 4), 1e-6) / 1e3, rtol=1e-12))
    True
    """
    ny, nx, edge = checked_lattice(shape, spacing)
    weight_of(receiver)
    scale = 1.0 / (2.0 * np.pi * gel.shear_modulus)
    value, by_nu, by_thickness = (
        scale * _quadrant(gel, ny, nx, edge, receiver, kind) for kind in ("value", "by_nu", "by_thickness")
    )
    parts = (-value / gel.youngs_modulus, by_nu + value / (1.0 + gel.poisson), by_thickness)
    return np.stack([_mirror(part) for part in parts])

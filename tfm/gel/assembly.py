"""From a response at a point to its average over square nodes, for any thickness.

A :class:`Quantity` says what is averaged (the response, one of its derivatives, the strain); the assembly is the same
for all. Half-space: the lattice of :mod:`tfm.gel.lattice`. Layer: half-space plus the smooth difference near the
source, the layer's own response further out, where it has died away. How a function is averaged depends on the
thickness in nodes:

* 4 nodes and more: a filter of its values at the nodes;
* 2 to 4: Gaussian rules;
* below 2: the difference varies within a node, and panels graded towards the source integrate it;
* below 0.02: the difference would cancel the half-space, so the panels integrate the response itself.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfm.errors import InputError
from tfm.gel.lattice import (
    FAR,
    filtered_average,
    node_filter,
    node_rule,
    rectangles,
    weight_of,
    weighted_average,
)
from tfm.gel.model import Gel
from tfm.gel.radial import CUTOFF

__all__ = ["Quantity", "checked_field", "checked_lattice", "whole_lattice"]

Array = NDArray[np.float64]

_THIN = 0.02
_GRADED = 2.0
_NEAR = 4  # offsets integrated with graded panels
#: Smallest thickness/spacing -> order of the filter; the remaining error is below 1e-9 of the half-space's response.
_FILTERS = ((12.0, 5), (4.0, 8))
#: The same for Gauss points per axis, for thinner layers.
_POINTS = ((2.0, 6), (0.0, 12))


@dataclass(frozen=True)
class Quantity:
    """What is to be averaged, in units of 1/(2 pi G) and times spacing^2 (the area of the source).

    Attributes
    ----------
    parity
        Per component, whether it is odd in x and odd in y.
    half_space
        ``(gel, receiver, ny, nx, spacing) -> (m, ny, nx)`` averages at offsets dy, dx >= 0 on the half-space.
    response
        ``(gel, spacing, part) -> function(x, y) -> (m, ...)`` at points in nodes; part ``total`` or ``difference``.
    uniform
        ``gel -> (m,)``: integral of the response over the plane, for nodes much wider than the layer is thick.
    """

    parity: tuple[tuple[bool, bool], ...]
    half_space: Callable[[Gel, str, int, int, float], Array]
    response: Callable[[Gel, float, str], Callable[[Array, Array], Array]]
    uniform: Callable[[Gel], tuple[float, ...]]


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
        raise InputError(
            f"spacing is {spacing}", code="bad-lattice", remedy="give the edge of a node in m, for instance 1e-6"
        )
    return int(shape[0]), int(shape[1]), float(spacing)


def checked_field(name: str, field: Any, components: int) -> NDArray[Any]:
    """A finite ``(components, ny, nx)`` array.

    Raises
    ------
    InputError
        For another shape or values that are not finite.
    """
    array = np.asarray(field)
    if array.ndim != 3 or array.shape[0] != components or 0 in array.shape:
        raise InputError(
            f"{name} has shape {array.shape}", code="bad-field", remedy=f"give an array ({components}, ny, nx), x first"
        )
    if not np.all(np.isfinite(array)):
        raise InputError(f"{name} holds values that are not finite", code="bad-field", remedy="set unknown nodes to 0")
    return array


def _panels(eta: float, thin: bool) -> tuple[Array, Array]:
    """Gauss-Legendre nodes and weights on [0, 5.5], graded towards 0 and split at half-integers.

    The difference is smooth on the scale of the thickness; the response itself (``thin``) is 1/r below it, which asks
    for finer panels, and nothing beyond 60 thicknesses.
    """
    size = min(eta * 2.0**-24 if thin else eta, 0.5)
    edges = [0.0]
    while size < 0.5:
        edges.append(size)
        size *= 4.0 if size < eta else 2.0  # where only 1/r is left, wide panels suffice
    edges.extend(np.arange(0.5, _NEAR + 2.0, 0.5))
    bounds = np.array(edges)
    points, weights = np.polynomial.legendre.leggauss(14)
    half = 0.5 * np.diff(bounds)[:, None]
    nodes, all_weights = (bounds[:-1, None] + half * (1.0 + points)).ravel(), (half * weights).ravel()
    keep = nodes < (CUTOFF * eta if thin else np.inf)
    return nodes[keep], all_weights[keep]


def _near_block(quantity: Quantity, gel: Gel, spacing: float, receiver: str) -> Array:
    """``(m, 5, 5)`` averages at offsets 0..4 for layers thinner than two nodes.

    Returns the difference to the half-space for thickness > 0.02 spacing, the layer's response itself below; there the
    node's own value is the response to a uniform traction minus what the weight leaves out.
    """
    eta = float(gel.thickness or 0.0) / spacing
    thin = eta < _THIN
    nodes, weights = _panels(eta, thin)
    response = quantity.response(gel, spacing, "total" if thin else "difference")
    values = response(nodes[None, :], nodes[:, None])
    weight = weight_of(receiver)
    offsets = np.arange(_NEAR + 1.0)[:, None]
    here, mirrored = weight(nodes - offsets), weight(nodes + offsets)
    folded = {False: (here + mirrored) * weights, True: (here - mirrored) * weights}
    out = np.stack(
        [folded[odd_y] @ value @ folded[odd_x].T for value, (odd_x, odd_y) in zip(values, quantity.parity, strict=True)]
    )
    if thin:
        missing = 4.0 * weights[:, None] * weights * (1.0 - here[0][:, None] * here[0])
        for component, (odd, uniform) in enumerate(zip(quantity.parity, quantity.uniform(gel), strict=True)):
            if odd == (False, False):
                out[component, 0, 0] = 2.0 * np.pi * uniform - float((missing * values[component]).sum())
    return out


def _quadrant(quantity: Quantity, gel: Gel, ny: int, nx: int, spacing: float, receiver: str) -> Array:
    """``(m, ny, nx)`` at offsets dy, dx >= 0."""
    if gel.thickness is None:
        return quantity.half_space(gel, receiver, ny, nx, spacing)
    eta = gel.thickness / spacing
    reach = 2 + int(np.ceil(min(CUTOFF * eta, float(max(ny, nx)))))  # offsets that the layer reaches at all
    order = next((order for least, order in _FILTERS if eta >= least), None)
    graded = eta < _GRADED
    edge = _NEAR + 1 if order is None else FAR
    near_y, near_x = min(ny, edge), min(nx, edge)

    def average(part: str, rows: slice, columns: slice) -> Array:
        function = quantity.response(gel, spacing, part)
        if order is not None:
            return filtered_average(function, rows, columns, node_filter(receiver, order))
        points = next(points for least, points in _POINTS if eta >= least)
        return weighted_average(function, rows, columns, node_rule(receiver, points))

    out = np.zeros((len(quantity.parity), ny, nx))
    near = out[:, :near_y, :near_x]
    if eta >= _THIN:
        near += quantity.half_space(gel, receiver, near_y, near_x, spacing)
    if graded:
        near += _near_block(quantity, gel, spacing, receiver)[:, :near_y, :near_x]
    else:
        near += average("difference", slice(0, near_y), slice(0, near_x))
    for rows, columns in rectangles(edge, reach, (ny, nx)):
        out[:, rows, columns] = average("total", rows, columns)
    return out


def whole_lattice(quantity: Quantity, gel: Gel, ny: int, nx: int, spacing: float, receiver: str) -> Array:
    """``(m, 2 ny - 1, 2 nx - 1)`` averages of a quantity at all offsets of a lattice, in SI units."""
    quadrant = _quadrant(quantity, gel, ny, nx, spacing, receiver) / (2.0 * np.pi * gel.shear_modulus)
    out = np.empty((len(quantity.parity), 2 * ny - 1, 2 * nx - 1))
    out[:, ny - 1 :, nx - 1 :] = quadrant
    for component, (odd_x, odd_y) in enumerate(quantity.parity):
        whole = out[component]
        whole[ny - 1 :, : nx - 1] = (-1.0 if odd_x else 1.0) * whole[ny - 1 :, : nx - 1 : -1]
        whole[: ny - 1] = (-1.0 if odd_y else 1.0) * whole[: ny - 1 : -1]
        if odd_x:  # exactly 0 by symmetry; rounding must not remain
            whole[:, nx - 1] = 0.0
        if odd_y:
            whole[ny - 1] = 0.0
    return out

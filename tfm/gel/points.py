"""Displacement and strain at any points of the surface: a direct sum over the loaded nodes of a lattice.

Each node is integrated: antiderivatives of the derivatives of r on a half-space, Gaussian quadrature of the smooth
difference on a layer. A node that is wide against the layer is divided until it is not.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from tfm.errors import InputError
from tfm.gel.assembly import checked_field, checked_lattice
from tfm.gel.model import Gel
from tfm.gel.radial import CUTOFF, radial_functions
from tfm.gel.tensor import assemble_gradient, assemble_tensor

__all__ = ["displacement_at", "strain_at"]

Array = NDArray[np.float64]
_PAIRS = 200_000  # points x nodes handled at once
_ON_EDGE = 1e-9  # in nodes
_FINEST = 65  # sub-nodes per edge at most


@dataclass(frozen=True)
class _Sum:
    """Points and loaded nodes in units of ``edge``; ``load`` is ``(2, nodes)`` Pa."""

    shape: tuple[int, ...]
    x: Array
    y: Array
    node_x: Array
    node_y: Array
    load: Array
    edge: float

    def blocks(self) -> Iterator[tuple[slice, Array, Array]]:
        """Offsets from every node to a block of points at a time."""
        block = max(1, _PAIRS // max(1, self.node_x.size))
        for start in range(0, self.x.size, block):
            part = slice(start, start + block)
            yield part, self.x[part, None] - self.node_x, self.y[part, None] - self.node_y

    def divided(self, thickness: float | None) -> _Sum:
        """The same traction on nodes that are at most half as wide as the layer is thick."""
        if thickness is None or thickness >= 2.0 * self.edge or self.node_x.size == 0:
            return self
        parts = 2 * int(np.ceil(self.edge / thickness)) + 1  # odd: a node's centre is the centre of a sub-node
        if parts > _FINEST:
            raise InputError(
                f"the layer ({thickness:g} m) is thinner than 1/32 of a node ({self.edge:g} m)",
                code="coarse-lattice",
                remedy="use smaller nodes",
            )
        step = (np.arange(parts) - parts // 2) / parts
        shift_y, shift_x = (shift.ravel() for shift in np.meshgrid(step, step, indexing="ij"))
        return _Sum(
            self.shape,
            self.x * parts,
            self.y * parts,
            (self.node_x[:, None] + shift_x).ravel() * parts,
            (self.node_y[:, None] + shift_y).ravel() * parts,
            np.repeat(self.load, parts * parts, axis=1),
            self.edge / parts,
        )


def _prepared(traction: ArrayLike, spacing: float, x: ArrayLike, y: ArrayLike, origin: tuple[float, float]) -> _Sum:
    field = checked_field("traction", traction, 2).astype(np.float64, copy=False)
    _, _, edge = checked_lattice((field.shape[1], field.shape[2]), spacing)
    x_array, y_array = np.broadcast_arrays(np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64))
    if not (np.all(np.isfinite(x_array)) and np.all(np.isfinite(y_array))):
        raise InputError("x or y holds values that are not finite", code="bad-position", remedy="leave such points out")
    rows, columns = np.nonzero(np.any(field != 0.0, axis=0))
    return _Sum(
        x_array.shape,
        (x_array.ravel() - origin[0]) / edge,
        (y_array.ravel() - origin[1]) / edge,
        columns.astype(np.float64),
        rows.astype(np.float64),
        field[:, rows, columns],
        edge,
    )


def displacement_at(
    gel: Gel,
    traction: ArrayLike,
    spacing: float,
    x: ArrayLike,
    y: ArrayLike,
    *,
    origin: tuple[float, float] = (0.0, 0.0),
) -> Array:
    """Surface displacement at any points, for instance at single beads, from tractions on a lattice.

    Parameters
    ----------
    gel
        The gel.
    traction
        ``(2, ny, nx)`` Pa on the gel, constant on each node.
    spacing
        m, edge of a node.
    x, y
        m, shapes that broadcast: where the displacement is wanted, on the lattice or off it.
    origin
        m: (x, y) of the centre of node [0, 0].

    Returns
    -------
    ``(2, ...)`` m.

    Raises
    ------
    InputError
        For a traction of the wrong shape, values that are not finite, a spacing that is not positive, and for a layer
        thinner than 1/32 of a node.

    Notes
    -----
    Cost: points x loaded nodes. On the lattice itself :func:`tfm.gel.displacement` is much faster.

    Examples
    --------
    >>> T = np.zeros((2, 3, 3)); T[0, 1, 1] = 100.0
    >>> u = displacement_at(Gel(1e3, 0.5), T, 1e-6, [1e-6, 5e-6], 1e-6)  # in the loaded node, and 4 um in front of it
    >>> [round(float(v) * 1e9, 3) for v in u[0]]  # nm
    [126.247, 11.936]
    """
    pairs = _prepared(traction, spacing, x, y, origin).divided(gel.thickness)
    out = np.empty((2, pairs.x.size))
    for part, dx, dy in pairs.blocks():
        xx, xy, yy = _node_response(gel, dx, dy, pairs.edge, 0)
        out[0, part] = xx @ pairs.load[0] + xy @ pairs.load[1]
        out[1, part] = xy @ pairs.load[0] + yy @ pairs.load[1]
    return out.reshape(2, *pairs.shape)


def strain_at(
    gel: Gel,
    traction: ArrayLike,
    spacing: float,
    x: ArrayLike,
    y: ArrayLike,
    *,
    origin: tuple[float, float] = (0.0, 0.0),
) -> Array:
    """In-plane surface strain at any points, from tractions on a lattice.

    Parameters
    ----------
    gel, traction, spacing, x, y, origin
        As in :func:`displacement_at`.

    Returns
    -------
    ``(3, ...)``: e_xx, e_xy, e_yy.

    Raises
    ------
    InputError
        As :func:`displacement_at`; for points on the edge of a loaded node, where traction jumps and the strain is
        infinite.

    Notes
    -----
    A direct sum over the loaded nodes, their closed forms on a half-space, Gaussian quadrature of the difference on a
    layer. Cost: points x loaded nodes. For dipoles instead of tractions: :func:`tfm.gel.dipole_strain`.

    Examples
    --------
    >>> T = np.zeros((2, 3, 3)); T[0, 1, 1] = 100.0
    >>> e = strain_at(Gel(1e3, 0.5), T, 1e-6, [1e-6, 5e-6], 1e-6)  # in the loaded node, and 4 um in front of it
    >>> [f"{float(v):.3e}" for v in e[0]]
    ['0.000e+00', '-2.983e-03']
    """
    pairs = _prepared(traction, spacing, x, y, origin)
    _refuse_edges(pairs)
    pairs = pairs.divided(gel.thickness)
    out = np.empty((3, pairs.x.size))
    for part, dx, dy in pairs.blocks():
        gradient = _node_response(gel, dx, dy, pairs.edge, 1)
        slope_x = gradient[:, 0] @ pairs.load[0] + gradient[:, 1] @ pairs.load[1]  # d_k u_x
        slope_y = gradient[:, 1] @ pairs.load[0] + gradient[:, 2] @ pairs.load[1]  # d_k u_y
        out[:, part] = slope_x[0], 0.5 * (slope_x[1] + slope_y[0]), slope_y[1]
    return out.reshape(3, *pairs.shape)


def _refuse_edges(pairs: _Sum) -> None:
    """Points on an edge of a loaded node: only the four nodes around a point can be concerned."""
    loaded = set(zip(pairs.node_x.astype(int).tolist(), pairs.node_y.astype(int).tolist(), strict=True))
    x, y = pairs.x, pairs.y
    near_x, near_y = np.abs(x - np.floor(x) - 0.5) < _ON_EDGE, np.abs(y - np.floor(y) - 0.5) < _ON_EDGE
    for index in np.flatnonzero(near_x | near_y):
        around_x = {int(np.floor(x[index] + 0.5 + s)) for s in (-1e-6, 1e-6)}
        around_y = {int(np.floor(y[index] + 0.5 + s)) for s in (-1e-6, 1e-6)}
        if any((i, j) in loaded for i in around_x for j in around_y):
            raise InputError(
                f"point {index} lies on the edge of a loaded node, where the strain is infinite",
                code="on-edge",
                remedy="move it off the edge, for instance to a node's centre",
            )


def _node_response(gel: Gel, dx: Array, dy: Array, spacing: float, order: int) -> Array:
    """The response (order 0, ``(3, ...)`` m/Pa) or its gradient (1, ``(2, 3, ...)`` 1/Pa) integrated over a node."""
    closed: Callable[[Array, Array, float], Array] = (_closed_tensor, _closed_gradient)[order]
    assemble = (assemble_tensor, assemble_gradient)[order]
    scale = spacing ** (1 - order) / (2.0 * np.pi * gel.shear_modulus)  # of the closed forms, which are in nodes
    if gel.thickness is None:
        return scale * closed(dx, dy, gel.poisson)
    r = np.hypot(dx, dy)
    near = r <= max(4.0, 1.5 * gel.thickness / spacing)
    reached = ~near & (r <= CUTOFF * gel.thickness / spacing + 1.0)
    out = np.zeros(((3,), (2, 3))[order] + dx.shape)
    out[..., near] = scale * closed(dx[near], dy[near], gel.poisson)
    scale = spacing**2 / (2.0 * np.pi * gel.shear_modulus)
    points, weights = np.polynomial.legendre.leggauss(5)
    for where, part in ((reached, "total"), (near, "difference")):
        for step_y, weight_y in zip(0.5 * points, 0.5 * weights, strict=True):
            for step_x, weight_x in zip(0.5 * points, 0.5 * weights, strict=True):
                x, y = (dx[where] + step_x) * spacing, (dy[where] + step_y) * spacing
                functions = radial_functions(gel, np.hypot(x, y), order, part=part)
                out[..., where] += scale * weight_x * weight_y * assemble(x, y, functions)
    return out


def _corners(dx: Array, dy: Array) -> Iterator[tuple[float, Array, Array, Array, Array, Array]]:
    """Sign, x, y, r, asinh(y/|x|) and asinh(x/|y|) at the four corners of the source node."""
    for sign_y in (-1.0, 1.0):
        for sign_x in (-1.0, 1.0):
            x, y = dx + 0.5 * sign_x, dy + 0.5 * sign_y
            r = np.maximum(np.hypot(x, y), 1e-300)
            # The floor makes logarithms finite on inner edges of a divided node, where they cancel.
            along_y = np.arcsinh(y / np.maximum(np.abs(x), 1e-12))
            along_x = np.arcsinh(x / np.maximum(np.abs(y), 1e-12))
            yield sign_x * sign_y, x, y, r, along_y, along_x


def _closed_tensor(dx: Array, dy: Array, nu: float) -> Array:
    """The half-space's, in units of spacing / (2 pi G), from antiderivatives of the second derivatives of r."""
    xx, xy, yy = (np.zeros(dx.shape) for _ in range(3))
    for sign, x, y, r, along_y, along_x in _corners(dx, dy):
        xx += sign * x * along_y
        xy += sign * r
        yy += sign * y * along_x
    return np.stack([(1.0 - nu) * xx + yy, -nu * xy, xx + (1.0 - nu) * yy])


def _closed_gradient(dx: Array, dy: Array, nu: float) -> Array:
    """Its gradient, in units of 1 / (2 pi G), from antiderivatives of the third derivatives of r."""
    xxx, xxy, xyy, yyy = (np.zeros(dx.shape) for _ in range(4))
    for sign, x, y, r, along_y, along_x in _corners(dx, dy):
        xxx += sign * (along_y - y / r)
        yyy += sign * (along_x - x / r)
        xxy += sign * x / r
        xyy += sign * y / r
    along_x, along_y = xxx + xyy, xxy + yyy  # gradient of 1/r
    return np.stack(
        [
            np.stack([along_x - nu * xxx, -nu * xxy, along_x - nu * xyy]),
            np.stack([along_y - nu * xxy, -nu * xyy, along_y - nu * yyy]),
        ]
    )

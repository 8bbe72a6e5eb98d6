"""Strain of the gel's surface under tractions.

In-plane components follow from the displacement. The rest of the tensor is fixed by the surface being free of normal
traction: with the outward normal as the third axis, e_zz = -nu / (1 - nu) (e_xx + e_yy) and e_iz = T_i / (2 G), where T
is the traction that the cell applies to the gel (Landau & Lifshitz, *Theory of Elasticity*, sec. 5).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.fft
from numpy.typing import ArrayLike, NDArray

from tfm.errors import InputError
from tfm.gel.assembly import checked_field, checked_lattice
from tfm.gel.kernel import node_strain_kernel
from tfm.gel.model import Gel
from tfm.gel.operator import padded_shape, wrapped_kernel
from tfm.gel.radial import CUTOFF, radial_functions
from tfm.gel.tensor import assemble_gradient

__all__ = ["full_strain", "strain_at", "surface_strain"]

Array = NDArray[np.float64]
_PAIRS = 200_000  # points x nodes handled at once
_ON_EDGE = 1e-9  # in nodes
_FINEST = 65  # sub-nodes per edge at most


def surface_strain(gel: Gel, traction: ArrayLike, spacing: float, *, workers: int = 1) -> Array:
    """In-plane strain of the surface, averaged over each node, by aperiodic convolution.

    Parameters
    ----------
    gel
        The gel.
    traction
        ``(2, ny, nx)`` Pa on the gel, constant on each node.
    spacing
        m, edge of a node.
    workers
        Threads for the transforms.

    Returns
    -------
    ``(3, ny, nx)``: e_xx, e_xy (tensor component, half the engineering shear), e_yy.

    Raises
    ------
    InputError
        For a traction of the wrong shape, values that are not finite, or a spacing that is not positive.

    Examples
    --------
    >>> T = np.zeros((2, 32, 32)); T[0, 16, 8], T[0, 16, 24] = 100.0, -100.0  # pulled together along x
    >>> e = surface_strain(Gel(1e3, 0.5), T, 1e-6)
    >>> e.shape, bool(e[0, 16, 16] < 0)
    ((3, 32, 32), True)
    """
    field = checked_field("traction", traction, 2).astype(np.float64, copy=False)
    ny, nx, edge = checked_lattice((field.shape[1], field.shape[2]), spacing)
    kernel = node_strain_kernel(gel, (ny, nx), edge)
    shape = padded_shape((ny, nx))
    spectrum = scipy.fft.rfft2(field, s=shape, workers=workers)
    out = np.empty((3, ny, nx))
    for row in range(3):
        transform = scipy.fft.rfft2(wrapped_kernel(kernel[row]), workers=workers)
        product = transform[0] * spectrum[0] + transform[1] * spectrum[1]
        out[row] = scipy.fft.irfft2(product, s=shape, workers=workers)[:ny, :nx]
    return out


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
    gel, traction, spacing
        As in :func:`surface_strain`.
    x, y
        m, shapes that broadcast: where the strain is wanted, on the lattice or off it.
    origin
        m: (x, y) of the centre of node [0, 0].

    Returns
    -------
    ``(3, ...)``: e_xx, e_xy, e_yy.

    Raises
    ------
    InputError
        As :func:`surface_strain`; for points on the edge of a loaded node, where traction jumps and the strain is
        infinite; and for a layer thinner than 1/32 of a node.

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
    field = checked_field("traction", traction, 2).astype(np.float64, copy=False)
    _, _, edge = checked_lattice((field.shape[1], field.shape[2]), spacing)
    x_array, y_array = np.broadcast_arrays(np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64))
    if not (np.all(np.isfinite(x_array)) and np.all(np.isfinite(y_array))):
        raise InputError("x or y holds values that are not finite", code="bad-position", remedy="leave such points out")
    rows, columns = np.nonzero(np.any(field != 0.0, axis=0))
    node_x, node_y = columns.astype(np.float64), rows.astype(np.float64)
    load = field[:, rows, columns]
    point_x = (x_array.ravel() - origin[0]) / edge
    point_y = (y_array.ravel() - origin[1]) / edge
    _refuse_edges(point_x, point_y, node_x, node_y)
    if gel.thickness is not None and gel.thickness < 2.0 * edge and rows.size:
        parts = 2 * int(np.ceil(edge / gel.thickness)) + 1  # odd: a node's centre is the centre of a sub-node
        if parts > _FINEST:
            raise InputError(
                f"the layer ({gel.thickness:g} m) is thinner than 1/32 of a node ({edge:g} m)",
                code="coarse-lattice",
                remedy="use smaller nodes",
            )
        step = (np.arange(parts) - parts // 2) / parts
        shift_y, shift_x = (shift.ravel() for shift in np.meshgrid(step, step, indexing="ij"))
        node_x = (node_x[:, None] + shift_x).ravel() * parts
        node_y = (node_y[:, None] + shift_y).ravel() * parts
        load = np.repeat(load, parts * parts, axis=1)
        point_x, point_y, edge = point_x * parts, point_y * parts, edge / parts
    out = np.empty((3, point_x.size))
    block = max(1, _PAIRS // max(1, node_x.size))
    for start in range(0, point_x.size, block):
        part = slice(start, start + block)
        gradient = _node_gradient(gel, point_x[part, None] - node_x, point_y[part, None] - node_y, edge)
        xx = gradient[:, 0] * load[0] + gradient[:, 1] * load[1]  # d_k u_x
        yy = gradient[:, 1] * load[0] + gradient[:, 2] * load[1]  # d_k u_y
        out[0, part] = xx[0].sum(axis=-1)
        out[1, part] = 0.5 * (xx[1] + yy[0]).sum(axis=-1)
        out[2, part] = yy[1].sum(axis=-1)
    return out.reshape(3, *x_array.shape)


def _refuse_edges(x: Array, y: Array, node_x: Array, node_y: Array) -> None:
    """Points on an edge of a loaded node: only the four nodes around a point can be concerned."""
    loaded = set(zip(node_x.astype(int).tolist(), node_y.astype(int).tolist(), strict=True))
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


def _node_gradient(gel: Gel, dx: Array, dy: Array, spacing: float) -> Array:
    """d_k (G_xx, G_xy, G_yy) integrated over the source node, ``(2, 3, ...)`` 1/Pa, at offsets in nodes."""
    scale = 1.0 / (2.0 * np.pi * gel.shear_modulus)
    if gel.thickness is None:
        return scale * _closed_gradient(dx, dy, gel.poisson)
    out = np.zeros((2, 3, *dx.shape))
    r = np.hypot(dx, dy)
    near = r <= max(4.0, 1.5 * gel.thickness / spacing)
    reached = ~near & (r <= CUTOFF * gel.thickness / spacing + 1.0)
    out[:, :, near] = _closed_gradient(dx[near], dy[near], gel.poisson)
    points, weights = np.polynomial.legendre.leggauss(5)
    for where, part in ((reached, "total"), (near, "difference")):
        for step_y, weight_y in zip(0.5 * points, 0.5 * weights, strict=True):
            for step_x, weight_x in zip(0.5 * points, 0.5 * weights, strict=True):
                x, y = (dx[where] + step_x) * spacing, (dy[where] + step_y) * spacing
                functions = radial_functions(gel, np.hypot(x, y), 1, part=part)
                out[:, :, where] += weight_x * weight_y * spacing**2 * assemble_gradient(x, y, functions)
    return scale * out


def _closed_gradient(dx: Array, dy: Array, nu: float) -> Array:
    """The half-space's, in units of 1/(2 pi G), from antiderivatives of the third derivatives of r."""
    xxx, xxy, xyy, yyy = (np.zeros(dx.shape) for _ in range(4))
    for sign_y in (-1.0, 1.0):
        for sign_x in (-1.0, 1.0):
            x, y = dx + 0.5 * sign_x, dy + 0.5 * sign_y
            sign = sign_x * sign_y
            r = np.maximum(np.hypot(x, y), 1e-300)
            # The floor makes logarithms finite on inner edges of a divided node, where they cancel.
            xxx += sign * (np.arcsinh(y / np.maximum(np.abs(x), 1e-12)) - y / r)
            yyy += sign * (np.arcsinh(x / np.maximum(np.abs(y), 1e-12)) - x / r)
            xxy += sign * x / r
            xyy += sign * y / r
    along_x, along_y = xxx + xyy, xxy + yyy
    return np.stack(
        [
            np.stack([along_x - nu * xxx, -nu * xxy, along_x - nu * xyy]),
            np.stack([along_y - nu * xxy, -nu * xyy, along_y - nu * yyy]),
        ]
    )


def full_strain(gel: Gel, strain: ArrayLike, traction: ArrayLike) -> Array:
    """The whole strain tensor at the surface from its in-plane part and the local traction.

    Parameters
    ----------
    gel
        The gel.
    strain
        ``(3, ...)``: e_xx, e_xy, e_yy.
    traction
        ``(2, ...)`` Pa that the cell applies to the gel at the same points.

    Returns
    -------
    ``(3, 3, ...)``: symmetric tensor, axes x, y and the outward normal of the gel. Its largest principal value is what
    decides whether linear elasticity still holds.

    Raises
    ------
    InputError
        When the shapes do not belong together.

    Examples
    --------
    >>> e = full_strain(Gel(3e3, 0.5), [0.1, 0.0, 0.0], [400.0, 0.0])
    >>> [[round(float(v), 3) for v in row] for row in e]
    [[0.1, 0.0, 0.2], [0.0, 0.0, 0.0], [0.2, 0.0, -0.1]]
    """
    e = np.asarray(strain, dtype=np.float64)
    t: NDArray[Any] = np.asarray(traction, dtype=np.float64)
    if e.shape[:1] != (3,) or t.shape[:1] != (2,) or e.shape[1:] != t.shape[1:]:
        raise InputError(
            f"strain has shape {e.shape}, traction {t.shape}", code="bad-field", remedy="give (3, ...) and (2, ...)"
        )
    shear = t / (2.0 * gel.shear_modulus)
    normal = -gel.poisson / (1.0 - gel.poisson) * (e[0] + e[2])
    return np.stack(
        [np.stack([e[0], e[1], shear[0]]), np.stack([e[1], e[2], shear[1]]), np.stack([shear[0], shear[1], normal])]
    )

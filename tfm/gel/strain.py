"""Strain of the gel's surface under tractions on a lattice; at other points: :func:`tfm.gel.strain_at`.

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

__all__ = ["full_strain", "surface_strain"]

Array = NDArray[np.float64]


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

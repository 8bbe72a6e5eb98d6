"""Traction on a lattice to displacement on the same lattice, without wrap-around."""

from __future__ import annotations

from functools import lru_cache
from typing import Any

import numpy as np
import scipy.fft
from numpy.typing import ArrayLike, NDArray

from tfm.errors import InputError
from tfm.gel.assembly import checked_field, checked_lattice
from tfm.gel.kernel import Receiver, node_kernel
from tfm.gel.model import Gel

__all__ = ["SurfaceOperator", "displacement", "padded_shape", "wrapped_kernel"]

Array = NDArray[np.float64]


class SurfaceOperator:
    """The kernel of a lattice, transformed once, to be applied many times.

    The convolution is aperiodic: fields are padded with zeros to at least 2 n - 1 nodes a side, so nothing wraps around
    and the result is the direct sum to rounding. The transform of the kernel is real (the kernel is even), and only the
    rows that hold data are transformed along x.

    Parameters
    ----------
    gel, shape, spacing, receiver
        As in :func:`tfm.gel.node_kernel`.
    dtype
        ``float64``, or ``float32`` for half the memory and time at a relative error of about 1e-6.
    workers
        Threads for the transforms.

    Raises
    ------
    InputError
        As :func:`tfm.gel.node_kernel`, and for another dtype.

    Examples
    --------
    >>> operator = SurfaceOperator(Gel(1e3, 0.5, 30e-6), (64, 48), 1e-6)
    >>> traction = np.zeros((2, 64, 48)); traction[0, 32, 24] = 100.0
    >>> u = operator.displacement(traction)
    >>> u.shape, bool(u[0].argmax() == 32 * 48 + 24)
    ((2, 64, 48), True)
    """

    def __init__(
        self,
        gel: Gel,
        shape: tuple[int, int],
        spacing: float,
        *,
        receiver: Receiver = "average",
        dtype: Any = np.float64,
        workers: int = 1,
    ) -> None:
        self.gel = gel
        ny, nx, self.spacing = checked_lattice(shape, spacing)
        self.shape = (ny, nx)
        self.receiver = receiver
        self.dtype = np.dtype(dtype)
        if self.dtype not in (np.dtype(np.float32), np.dtype(np.float64)):
            raise InputError(f"dtype is {self.dtype}", code="bad-dtype", remedy="give float32 or float64")
        self.workers = workers
        self._transform = _transformed(node_kernel(gel, shape, spacing, receiver=receiver), self.dtype, workers)

    def displacement(self, traction: ArrayLike) -> NDArray[Any]:
        """Displacement ``(2, ny, nx)`` m of a traction ``(2, ny, nx)`` Pa.

        The operator is symmetric: ``sum(S * displacement(T)) == sum(T * displacement(S))``.

        Raises
        ------
        InputError
            For a traction of another shape or with values that are not finite.
        """
        field = checked_field("traction", traction, 2)
        if field.shape[1:] != self.shape:
            raise InputError(
                f"traction has shape {field.shape}, the operator (2, {self.shape[0]}, {self.shape[1]})",
                code="bad-field",
                remedy="make the operator for the traction's lattice",
            )
        return _apply(self._transform, field.astype(self.dtype, copy=False), self.workers)


def padded_shape(shape: tuple[int, int]) -> tuple[int, int]:
    """Lengths of at least 2 n - 1 that transform quickly: nothing wraps around."""
    return (
        scipy.fft.next_fast_len(2 * shape[0] - 1, real=False),
        scipy.fft.next_fast_len(2 * shape[1] - 1, real=True),
    )


def wrapped_kernel(kernel: NDArray[Any]) -> Array:
    """The kernel ``(m, 2 ny - 1, 2 nx - 1)`` padded for the transform, its centre moved to [0, 0]."""
    ny, nx = (kernel.shape[1] + 1) // 2, (kernel.shape[2] + 1) // 2
    my, mx = padded_shape((ny, nx))
    out = np.zeros((kernel.shape[0], my, mx))
    out[:, :ny, :nx] = kernel[:, ny - 1 :, nx - 1 :]
    out[:, :ny, mx - nx + 1 :] = kernel[:, ny - 1 :, : nx - 1]
    out[:, my - ny + 1 :, :nx] = kernel[:, : ny - 1, nx - 1 :]
    out[:, my - ny + 1 :, mx - nx + 1 :] = kernel[:, : ny - 1, : nx - 1]
    return out


def _transformed(kernel: NDArray[Any], dtype: Any, workers: int) -> NDArray[Any]:
    """Transform ``(3, my, mx // 2 + 1)`` of an even kernel, which is real."""
    transform = scipy.fft.rfft2(wrapped_kernel(kernel), workers=workers, overwrite_x=True).real
    return np.ascontiguousarray(transform.astype(dtype, copy=False))


def _apply(transform: NDArray[Any], field: NDArray[Any], workers: int) -> NDArray[Any]:
    ny, nx = field.shape[1:]
    my, mx = padded_shape((ny, nx))
    spectrum = scipy.fft.rfft(field, n=mx, axis=2, workers=workers)
    spectrum = scipy.fft.fft(spectrum, n=my, axis=1, workers=workers, overwrite_x=True)
    x, y = spectrum
    product = np.empty_like(spectrum)
    scratch = np.empty_like(x)
    np.multiply(transform[0], x, out=product[0])
    np.multiply(transform[1], y, out=scratch)
    product[0] += scratch
    np.multiply(transform[1], x, out=product[1])
    np.multiply(transform[2], y, out=scratch)
    product[1] += scratch
    back = scipy.fft.ifft(product, axis=1, workers=workers, overwrite_x=True)[:, :ny]
    return np.ascontiguousarray(scipy.fft.irfft(back, n=mx, axis=2, workers=workers)[:, :, :nx])


@lru_cache(maxsize=2)
def _operator(gel: Gel, shape: tuple[int, int], spacing: float, workers: int) -> SurfaceOperator:
    return SurfaceOperator(gel, shape, spacing, workers=workers)


def displacement(
    gel: Gel, traction: ArrayLike, spacing: float, *, kernel: NDArray[Any] | None = None, workers: int = 1
) -> Array:
    """Displacement of a lattice of tractions by aperiodic convolution.

    Parameters
    ----------
    gel
        The gel.
    traction
        ``(2, ny, nx)`` Pa, component 0 = x: force per area that the cells apply to the gel, constant on each node.
    spacing
        m, edge of a node.
    kernel
        A :func:`tfm.gel.node_kernel` of this lattice to use instead of the node-averaged one; must be even, as those
        are.
    workers
        Threads for the transforms.

    Returns
    -------
    ``(2, ny, nx)`` m.

    Raises
    ------
    InputError
        For a traction or kernel of the wrong shape, values that are not finite, or a spacing that is not positive.

    Notes
    -----
    Transforms of the last few gels and lattices are kept, so that a second call costs the transforms of the field only;
    :class:`SurfaceOperator` makes that explicit.

    Examples
    --------
    >>> T = np.zeros((2, 32, 32)); T[0, 10, 16], T[0, 20, 16] = 100.0, -100.0
    >>> u = displacement(Gel(1e3, 0.5), T, 1e-6)
    >>> bool(abs(u[0, 10, 16] + u[0, 20, 16]) < 1e-12 * u[0, 10, 16])
    True
    """
    field = checked_field("traction", traction, 2).astype(np.float64, copy=False)
    ny, nx, edge = checked_lattice((field.shape[1], field.shape[2]), spacing)
    if kernel is None:
        plain = Gel(gel.youngs_modulus, gel.poisson, gel.thickness)  # uncertainties do not change the operator
        return np.asarray(_operator(plain, (ny, nx), edge, workers).displacement(field))
    if kernel.shape != (3, 2 * ny - 1, 2 * nx - 1):
        raise InputError(
            f"kernel has shape {kernel.shape}, the traction {field.shape}",
            code="bad-kernel",
            remedy="make the kernel with node_kernel for the traction's lattice",
        )
    return np.asarray(_apply(_transformed(kernel, np.float64, workers), field, workers))

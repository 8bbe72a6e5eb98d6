r"""Regularised inversion in Fourier space, the trade's classic, for comparison and for fields without images.

:math:`\hat T = (\hat G^T\hat G + \lambda^2)^{-1}\hat G^T \hat u` (Butler et al., Am J Physiol Cell 282:C595, 2002;
Sabass et al.,
Biophys J 94:207, 2008). The kernel is the aperiodic one of :mod:`tfm.gel` on a padded grid, so cells do not feel their
periodic images; displacement beyond the field of view is taken as zero.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import fft, interpolate

from tfm.displacement.model import DisplacementField
from tfm.errors import MeasurementError
from tfm.gel import Gel, displacement, node_kernel
from tfm.images.model import Outlines
from tfm.traction.lattice import Lattice, cover_outlines
from tfm.traction.model import TractionField
from tfm.traction.regularisation import choose_lambda

__all__ = ["infer_fourier"]


def _complete(field: DisplacementField) -> NDArray[np.float64]:
    """Displacement on every grid position: gaps between valid vectors are filled linearly (said in the notes)."""
    u = np.where(field.valid, field.u, 0.0)
    if field.valid.all():
        return u
    if field.valid.sum() < 20:
        raise MeasurementError(
            f"only {int(field.valid.sum())} valid displacement vectors",
            code="too-few-vectors",
            remedy="use more or brighter beads",
        )
    known = np.argwhere(field.valid)
    for i in range(2):
        fill = interpolate.NearestNDInterpolator(known, field.u[i][field.valid])(np.argwhere(~field.valid))
        linear = interpolate.LinearNDInterpolator(known, field.u[i][field.valid])(np.argwhere(~field.valid))
        u[i][~field.valid] = np.where(np.isfinite(linear), linear, fill)
    return u


class _Filter:
    """The Tikhonov filter on the padded grid, diagonal in Fourier space up to a symmetric 2 x 2 matrix."""

    def __init__(self, kernel: NDArray[np.float64], shape: tuple[int, int]) -> None:
        self.shape = shape
        self.padded = tuple(fft.next_fast_len(2 * n - 1, real=True) for n in shape)
        rolled = np.zeros((3, *self.padded))
        rolled[:, : kernel.shape[1], : kernel.shape[2]] = kernel
        rolled = np.roll(rolled, (-(shape[0] - 1), -(shape[1] - 1)), axis=(1, 2))
        # The kernel is even, so its transform is real: rounding leaves an imaginary part of 1e-16.
        self.g = fft.rfft2(rolled).real
        half = np.hypot(0.5 * (self.g[0] - self.g[2]), self.g[1])
        mean = 0.5 * (self.g[0] + self.g[2])
        self.values = np.stack([mean + half, mean - half])
        angle = 0.5 * np.arctan2(2 * self.g[1], self.g[0] - self.g[2])
        self.cos, self.sin = np.cos(angle), np.sin(angle)
        weight = np.full(self.g.shape[1:], 2.0)
        weight[:, 0] = 1.0
        if self.padded[1] % 2 == 0:
            weight[:, -1] = 1.0
        self.weight = weight

    def spectrum(self, u: NDArray[np.float64]) -> NDArray[np.complex128]:
        a, b = (fft.rfft2(v, s=self.padded, norm="ortho") for v in u)
        return np.stack([self.cos * a + self.sin * b, -self.sin * a + self.cos * b])

    def solve(self, u: NDArray[np.float64], lam: float) -> NDArray[np.float64]:
        s = self.spectrum(u) * self.values / (self.values**2 + lam**2)
        t = np.stack([self.cos * s[0] - self.sin * s[1], self.sin * s[0] + self.cos * s[1]])
        full = fft.irfft2(t, s=self.padded, norm="ortho")
        return np.asarray(full[:, : self.shape[0], : self.shape[1]])


def infer_fourier(
    field: DisplacementField, pixel_size: float, outlines: Outlines, gel: Gel, *, choice: str = "gcv"
) -> TractionField:
    """Traction on the grid of the displacement, smoothed with lambda from one of four published choices.

    Parameters
    ----------
    choice
        ``gcv``, ``lcurve``, ``discrepancy`` or ``evidence``.

    Returns
    -------
    TractionField
        Traction everywhere (the method does not know the outlines); ``dipole_covariance`` carries the displacement
        noise
        but not the bias of the smoothing, which is why ``image`` and ``bounded`` exist.

    Raises
    ------
    MeasurementError
        With fewer than 20 valid vectors or an unknown noise where the choice needs it.
    """
    spacing = float(field.x[1] - field.x[0])
    lattice = Lattice(float(field.x[0]), float(field.y[0]), spacing, (field.y.size, field.x.size))
    covered = cover_outlines(lattice, outlines.labels, pixel_size)
    kernel = node_kernel(gel, lattice.shape, spacing, receiver="average")
    u = _complete(field)
    u = (
        u
        - np.median(
            u[:, field.valid & (covered == 0)] if (field.valid & (covered == 0)).any() else u.reshape(2, -1), axis=1
        )[:, None, None]
    )
    tikhonov = _Filter(kernel, lattice.shape)
    power = np.abs(tikhonov.spectrum(u)) ** 2 * tikhonov.weight
    counts = np.broadcast_to(tikhonov.weight, power.shape)
    noise = field.noise if np.isfinite(field.noise) else None
    # Padding adds zeros, not data: the noise per transformed coefficient is that of the share of the grid that is
    # measured.
    share = lattice.shape[0] * lattice.shape[1] / (tikhonov.padded[0] * tikhonov.padded[1])
    g = np.repeat(np.abs(tikhonov.values).ravel(), counts.ravel().astype(int))
    p = np.repeat((power / tikhonov.weight).ravel(), counts.ravel().astype(int))
    lam = choose_lambda(g, p, choice=choice, noise=None if noise is None else noise * np.sqrt(share))
    traction = tikhonov.solve(u, lam)
    covariance, energy_sd = _noise_of_moments(
        tikhonov, lam, lattice, covered, field, outlines, pixel_size, traction, noise
    )
    notes = list(field.notes)
    if not field.valid.all():
        notes.append(f"{field.rejected} gaps in the displacement were filled for the Fourier inversion")
    return TractionField(
        lattice.x,
        lattice.y,
        spacing,
        traction,
        displacement(gel, traction, spacing, kernel=kernel),
        covered,
        gel,
        "fourier",
        None,
        np.zeros(2),
        float("nan"),
        {"lambda_m_per_Pa": lam, "lambda_choice": choice},
        tuple(notes),
        dipole_covariance=covariance,
        energy_sd=energy_sd,
    )


def _noise_of_moments(
    tikhonov: _Filter,
    lam: float,
    lattice: Lattice,
    covered: NDArray[np.int32],
    field: DisplacementField,
    outlines: Outlines,
    pixel: float,
    traction: NDArray[np.float64],
    noise: float | None,
) -> tuple[dict[int, NDArray[np.float64]], dict[int, float]]:
    """Displacement noise carried to every dipole through the adjoint of the (self-adjoint) filter."""
    if noise is None:
        return {}, {}
    da = lattice.spacing**2
    correlated = max(1.0, field.independent_area / da)
    covariances, energies = {}, {}
    for label in (int(v) for v in np.unique(covered) if v > 0):
        on = covered == label
        rows, columns = np.nonzero(outlines.labels == label)
        dx = (lattice.x - columns.mean() * pixel)[None, :] * on * da
        dy = (lattice.y - rows.mean() * pixel)[:, None] * on * da
        zero = np.zeros_like(dx)
        gains = [
            tikhonov.solve(np.stack(pair), lam) * field.valid for pair in ((dx, zero), (0.5 * dy, 0.5 * dx), (zero, dy))
        ]
        flat = np.stack([gain.ravel() for gain in gains])
        covariances[label] = noise**2 * correlated * flat @ flat.T
        energies[label] = float(noise * np.sqrt(correlated * np.sum(traction[:, on] ** 2)) * da)
    return covariances, energies

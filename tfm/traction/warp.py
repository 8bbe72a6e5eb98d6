r"""What two bead images say of a displacement: gradient products, their noise, and the score that pulls on the
estimate.

With :math:`r = I_s(x + u) - I_r(x)` and the gradient :math:`g`, a small error of the assumed displacement changes the
residual by :math:`g \cdot \delta u` (digital image correlation; Hild & Roux, Strain 42:69, 2006). Per block of pixels

- sensitivity :math:`J = \sum w\, \mathrm{sym}(\hat g_r \otimes g_s)`, a product of gradients of **independent**
  frames, so that
  its expectation carries no noise (the product of one frame's gradient with itself overstates the information);
- score :math:`s = -\sum w\, \hat g\, r`;
- variance of the score :math:`V = \sum w^2 v\, \hat g \otimes \hat g`, with ``v`` the noise of the **raw** pixels:
  interpolation
  correlates neighbouring residuals without removing noise in the band where the gradients live.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy import interpolate, ndimage, optimize

from tfm.errors import MeasurementError

__all__ = [
    "FramePair",
    "NoiseModel",
    "PixelTerms",
    "bead_width",
    "fit_noise",
    "pixel_terms",
    "prepare_pair",
    "resample_matrix",
    "rigid_beads",
]

Float32 = NDArray[np.float32]


@dataclass(frozen=True)
class NoiseModel:
    """Variance of a raw pixel of one frame, ``gain * I + floor`` in squared grey levels (photon and read noise)."""

    gain: float
    floor: float

    def variance(self, level: Float32) -> Float32:
        """Variance at a grey level (above the background)."""
        return np.asarray(self.gain * np.maximum(level, 0.0) + self.floor, np.float32)


@dataclass(frozen=True)
class FramePair:
    """Two frames ready to be compared.

    ``relaxed`` ``(ny, nx)``, background taken off; ``coefficients`` cubic-spline coefficients of the stressed frame,
    ditto;
    ``trusted`` masks of usable pixels in each frame as float (1 good, 0 bad).
    """

    relaxed: Float32
    coefficients: Float32
    trusted_relaxed: Float32
    trusted_stressed: Float32
    cache: dict[float, tuple[Float32, Float32]] = field(default_factory=dict, compare=False, repr=False)

    def relaxed_gradient(self, smoothing: float) -> tuple[Float32, Float32]:
        """Gradient of the relaxed frame (x, y), smoothed by a Gaussian of so many pixels; kept, as the frame never
        changes."""
        if smoothing not in self.cache:
            if smoothing == 0.0:
                self.cache[smoothing] = _gradient(self.relaxed)
            else:
                gx, gy = self.relaxed_gradient(0.0)
                self.cache[smoothing] = (_smooth(gx, smoothing), _smooth(gy, smoothing))
        return self.cache[smoothing]


@dataclass(frozen=True)
class PixelTerms:
    """Sums over lattice blocks of ``b x b`` pixels: ``sensitivity`` and ``variance`` ``(3, ny, nx)``, ``score`` ``(2,
    ny, nx)``.

    Displacements in these are pixels. ``residual``, ``level`` and ``weight`` ``(NY, NX)`` are per pixel, for the
    noise fit
    and the pictures; ``carried`` is the stressed frame carried back to the relaxed one; ``noise_factor`` is the
    variance of
    ``residual`` in units of one raw pixel's.
    """

    sensitivity: NDArray[np.float64]
    variance: NDArray[np.float64]
    score: NDArray[np.float64]
    residual: Float32
    level: Float32
    weight: Float32
    carried: Float32
    noise_factor: Float32


def prepare_pair(relaxed: Float32, stressed: Float32, *, background_px: float = 16.0) -> FramePair:
    """Take off slow background, mark saturated, stuck and non-finite pixels, and prefilter the stressed frame.

    Raises
    ------
    MeasurementError
        When a frame is constant or the shapes differ.
    """
    if relaxed.shape != stressed.shape:
        raise MeasurementError(
            f"stressed image is {stressed.shape[1]} x {stressed.shape[0]} px "
            f"and relaxed {relaxed.shape[1]} x {relaxed.shape[0]} px",
            code="frames-differ",
            remedy="use two frames of the same camera region",
        )
    clean, trusted = [], []
    for frame in (relaxed, stressed):
        image = np.asarray(frame, np.float32)
        good = np.isfinite(image)
        if not good.any() or np.ptp(image[good]) == 0:
            raise MeasurementError("a bead image is constant", code="constant-image", remedy="check the bead channel")
        top = image[good].max()
        # A flat top of several pixels at the highest value is saturation; a single brightest pixel is not.
        if np.count_nonzero(image == top) > 20:
            good &= image < top
        clean.append(image)
        trusted.append(good)
    # A lone bright pixel in both frames at the same place belongs to the camera, not to a bead.
    spikes = []
    for i, image in enumerate(clean):
        filled = np.where(np.isfinite(image), image, np.nanmedian(image))
        clean[i] = filled
        spikes.append(_lone_pixels(filled))
    stuck = spikes[0] & spikes[1]
    for i in range(2):
        image = clean[i]
        if stuck.any():
            image = np.where(stuck, ndimage.median_filter(image, size=3), image)
        clean[i] = image - ndimage.gaussian_filter(image, background_px, mode="reflect")
        trusted[i] &= ~stuck
    return FramePair(
        clean[0].astype(np.float32),
        ndimage.spline_filter(clean[1].astype(np.float64), order=3, mode="mirror").astype(np.float32),
        trusted[0].astype(np.float32),
        trusted[1].astype(np.float32),
    )


def _lone_pixels(image: Float32) -> NDArray[np.bool_]:
    """Pixels that stand out alone: three quarters of their height above the ground is missing in all eight neighbours.

    The optics spreads a bead over more than one pixel (a Gaussian of 0.7 px still leaves 0.36 in the next), a hot
    pixel not.
    """
    around = np.ones((3, 3), bool)
    around[1, 1] = False
    step = image - ndimage.maximum_filter(image, footprint=around)
    # Above the mean of the 24 pixels around: what a median would say, at a twentieth of its time.
    height = (image - ndimage.uniform_filter(image, size=5)) * np.float32(25.0 / 24.0)
    noise = 1.4826 * float(np.median(np.abs(height - np.median(height)))) + 1e-6
    return np.asarray((height > 12.0 * noise) & (step > 0.75 * height))


def bead_width(pair: FramePair, carried: Float32, weight: Float32) -> float:
    """Standard deviation (px) of the beads' image, taken as Gaussian.

    For sparse Gaussian spots sum(I^2) / sum(|grad I|^2) = sigma^2 (elementary integrals); products of two independent
    frames
    keep the noise out of both sums.
    """
    gr, gs = _gradient(pair.relaxed), _gradient(carried)
    power = float(np.sum(weight * pair.relaxed * carried, dtype=np.float64))
    steepness = float(np.sum(weight * (gr[0] * gs[0] + gr[1] * gs[1]), dtype=np.float64))
    if not (power > 0 and steepness > 0):  # frames that do not match at all: a usual width, the misfit tells
        return 1.3
    return float(np.sqrt(np.clip(power / steepness, 0.3, 16.0)))


def rigid_beads(u: NDArray[np.float64], spread: float) -> NDArray[np.float64]:
    r"""Displacement field that makes a *rigid* bead appear where the field ``u`` carries its centre.

    A bead moves as a whole, but carrying the image back with ``u(x)`` also deforms it; where ``u`` curves, its apparent
    position then shifts. To second order, with weights :math:`\partial_i I\,\partial_j I` of a Gaussian spot,
    :math:`\tilde u_i = u_i - \tfrac12 q (3 u_{i,ii} + u_{i,jj}) - q\,u_{j,ij}`.

    Parameters
    ----------
    u
        ``(2, ny, nx)`` on a lattice, any unit.
    spread
        q in squared lattice units: harmonic sum of the bead's and the weighting gradient's variances.

    Examples
    --------
    >>> linear = np.stack([np.tile(np.arange(6.0), (5, 1)), np.zeros((5, 6))])
    >>> stretched = rigid_beads(linear, 0.5)[:, :, 1:-1]  # a uniform stretch needs no correction
    >>> bool(np.allclose(stretched, linear[:, :, 1:-1], rtol=1e-12))
    True
    """
    second = np.array([1.0, -2.0, 1.0])
    xx, yy = (ndimage.correlate1d(u, second, axis=axis, mode="nearest") for axis in (2, 1))
    mixed = np.gradient(np.gradient(u, axis=2), axis=1)
    return np.stack(
        [
            u[0] - 0.5 * spread * (3.0 * xx[0] + yy[0]) - spread * mixed[1],
            u[1] - 0.5 * spread * (3.0 * yy[1] + xx[1]) - spread * mixed[0],
        ]
    )


def resample_matrix(n_pixels: int, n_lattice: int, b: int) -> NDArray[np.float32]:
    """``(n_pixels, n_lattice)`` cubic-spline interpolation from block centres to pixels, end slopes extrapolated.

    Examples
    --------
    >>> m = resample_matrix(32, 8, 4)
    >>> bool(np.allclose(m @ (4.0 * np.arange(8) + 1.5), np.arange(32), rtol=1e-5, atol=1e-4))
    True
    """
    centres = np.arange(n_lattice) * b + 0.5 * (b - 1)
    pixels = np.arange(n_pixels, dtype=float)
    inner = np.clip(pixels, centres[0], centres[-1])
    spline = interpolate.CubicSpline(centres, np.eye(n_lattice), axis=0)
    return np.asarray(spline(inner) + (pixels - inner)[:, None] * spline(inner, 1), np.float32)


def _gradient(image: Float32) -> tuple[Float32, Float32]:
    """Derivative of the cubic-spline interpolant at the pixels (x, y): accurate up to half the sampling frequency."""
    out = []
    for axis in (1, 0):
        c = ndimage.spline_filter1d(image, 3, axis=axis, output=np.float32, mode="mirror")
        out.append(ndimage.correlate1d(c, np.array([-0.5, 0.0, 0.5], np.float32), axis=axis, mode="mirror"))
    return out[0], out[1]


def _smooth(image: Float32, sigma: float) -> Float32:
    return np.asarray(ndimage.gaussian_filter(image, sigma, truncate=3.0), np.float32)


def _brightness_ratio(relaxed: Float32, carried: Float32, weight: Float32, *, block: int = 8) -> Float32:
    """Local factor that matches the stressed frame's contrast to the relaxed one's, over about 40 px.

    Lamps drift and beads bleach. The contrast is compared in blocks of 8 px, which loses nothing at that scale.
    """
    ny, nx = relaxed.shape[0] // block * block, relaxed.shape[1] // block * block
    power = []
    for image in (relaxed, carried):
        square = _smooth(image, 1.5) ** 2 * weight
        tiles = square[:ny, :nx].reshape(ny // block, block, nx // block, block).mean(axis=(1, 3))
        power.append(ndimage.gaussian_filter(tiles, 40.0 / block, mode="nearest"))
    ratio = np.clip(np.sqrt(np.maximum(power[0], 1e-12) / np.maximum(power[1], 1e-12)), 0.05, 20.0)
    up = [resample_matrix(n, m, block) for n, m in zip(relaxed.shape, ratio.shape, strict=True)]
    return np.asarray(np.clip(up[0] @ ratio.astype(np.float32) @ up[1].T, 0.05, 20.0), np.float32)


def _interpolation_noise(shift: Float32) -> Float32:
    """Share of a white frame's variance that survives cubic-spline interpolation at a fraction of a pixel, per axis.

    Sum of the squared cardinal-spline weights at the fraction, tabulated once: 1 at whole pixels, about 0.6 half-way.
    """
    fraction = np.linspace(0.0, 1.0, 33)
    impulse = np.zeros(61)
    impulse[30] = 1.0
    c = ndimage.spline_filter1d(impulse, 3, mode="mirror")
    table = [
        np.sum(ndimage.map_coordinates(c, [np.arange(5, 56) + f], order=3, prefilter=False) ** 2) for f in fraction
    ]
    return np.asarray(np.interp(shift - np.floor(shift), fraction, table), np.float32)


def pixel_terms(
    pair: FramePair,
    ux: Float32,
    uy: Float32,
    *,
    b: int,
    shape: tuple[int, int],
    smoothing: float,
    noise: NoiseModel,
    outlier_sigma: float = 6.0,
) -> PixelTerms:
    """Everything that the two frames say at the assumed displacement ``ux, uy`` (pixels, per pixel of the relaxed
    frame).

    Parameters
    ----------
    smoothing
        px. Gaussian width that the weighting gradients are smoothed with: the bead's own width is near the optimum.
    """
    ny, nx = pair.relaxed.shape
    x = np.arange(nx, dtype=np.float32) + ux
    y = np.arange(ny, dtype=np.float32)[:, None] + uy
    inside = (x >= 1.5) & (x <= nx - 2.5) & (y >= 1.5) & (y <= ny - 2.5)
    where = np.stack([y, x])
    carried = ndimage.map_coordinates(
        pair.coefficients, where, order=3, prefilter=False, output=np.float32, mode="mirror"
    )
    weight = inside.astype(np.float32)
    weight[:2] = weight[-2:] = weight[:, :2] = weight[:, -2:] = 0.0
    for bad, moved in ((pair.trusted_relaxed, False), (pair.trusted_stressed, True)):
        if bad.min() < 1.0:
            mask = ndimage.minimum_filter(bad, size=5)
            weight *= (
                ndimage.map_coordinates(mask, where, order=0, output=np.float32, mode="nearest") if moved else mask
            )
    ratio = _brightness_ratio(pair.relaxed, carried, weight)
    carried = carried * ratio
    residual = carried - pair.relaxed
    level = _smooth(0.5 * (carried + pair.relaxed), 1.0)
    # Both frames carry the noise; the stressed one is stretched by the ratio (its photons are 1/ratio of the level).
    variance = noise.variance(level) * (1.0 + ratio)
    gr, gs = pair.relaxed_gradient(0.0), _gradient(carried)
    hr, hs = pair.relaxed_gradient(smoothing), (_smooth(gs[0], smoothing), _smooth(gs[1], smoothing))
    if np.isfinite(outlier_sigma):
        # A lost or a new bead leaves a residual that noise and a small misalignment cannot explain.
        steep = np.sqrt(_smooth(hr[0] ** 2 + hr[1] ** 2 + hs[0] ** 2 + hs[1] ** 2, 1.5))
        odd = np.abs(residual) > outlier_sigma * np.sqrt(variance) + steep
        if odd.any():
            weight = weight * (1.0 - ndimage.maximum_filter(odd.astype(np.float32), size=5))
    w = weight / variance

    def block(values: Float32) -> NDArray[np.float64]:
        tile = values[: shape[0] * b, : shape[1] * b].reshape(shape[0], b, shape[1], b)
        return np.asarray(tile.sum(axis=(1, 3), dtype=np.float64))

    hx, hy = 0.5 * (hr[0] + hs[0]), 0.5 * (hr[1] + hs[1])
    sensitivity = np.stack(
        [
            block(0.5 * w * (hr[0] * gs[0] + hs[0] * gr[0])),
            block(0.25 * w * (hr[0] * gs[1] + hs[0] * gr[1] + hr[1] * gs[0] + hs[1] * gr[0])),
            block(0.5 * w * (hr[1] * gs[1] + hs[1] * gr[1])),
        ]
    )
    spread = np.stack([block(w * weight * hx * hx), block(w * weight * hx * hy), block(w * weight * hy * hy)])
    score = -np.stack([block(w * hx * residual), block(w * hy * residual)])
    factor = 1.0 + ratio * _interpolation_noise(ux) * _interpolation_noise(uy)
    return PixelTerms(sensitivity, spread, score, residual, level, weight, carried, factor.astype(np.float32))


def fit_noise(terms: PixelTerms, quiet: NDArray[np.bool_], *, bins: int = 16) -> NoiseModel:
    """Noise of one raw pixel from the residuals on quiet ground, ``variance = gain * level + floor``.

    Residual squares are averaged in bins of the grey level, corrected for the variance that interpolation removes,
    and a
    line with non-negative coefficients is fitted (weights: the bins' own scatter).
    """
    use = quiet & (terms.weight > 0)
    level = np.maximum(terms.level[use], 0.0)
    square = terms.residual[use] ** 2 / terms.noise_factor[use]
    if level.size < 500:
        raise MeasurementError(
            "too little ground to measure the noise on", code="no-ground", remedy="image a larger field"
        )
    edges = np.unique(np.quantile(level, np.linspace(0.0, 1.0, bins + 1)))
    which = np.clip(np.searchsorted(edges, level, side="right") - 1, 0, edges.size - 2)
    count = np.bincount(which, minlength=edges.size - 1)
    mean_level = np.bincount(which, level, edges.size - 1) / np.maximum(count, 1)
    mean_square = np.bincount(which, square, edges.size - 1) / np.maximum(count, 1)
    good = (count > 30) & (mean_square > 0)
    # Relative errors of the bins: a mean square has relative scatter sqrt(2 / count).
    scale = np.sqrt(count[good]) / mean_square[good]
    (gain, floor), _ = optimize.nnls(
        np.stack([mean_level[good], np.ones(good.sum())], axis=1) * scale[:, None], mean_square[good] * scale
    )
    smallest = 1e-3 * float(np.median(mean_square[good])) if good.any() else 1e-6
    return NoiseModel(float(gain), max(float(floor), smallest))

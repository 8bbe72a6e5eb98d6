"""Invented beads and their images: a point in the gel becomes photons, photons become counts."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.special import erf

from tfm.errors import InputError

__all__ = ["Beads", "Camera", "expected_photons", "make_bead_image", "make_beads"]


@dataclass(frozen=True)
class Camera:
    """What turns photons into 16-bit counts.

    Attributes
    ----------
    gain
        Counts per photon.
    offset
        Counts without light.
    read_noise
        Photons, one standard deviation.
    background
        Photons per pixel that do not come from a bead.
    """

    gain: float = 1.0
    offset: float = 100.0
    read_noise: float = 1.5
    background: float = 10.0


@dataclass(frozen=True)
class Beads:
    """Bead positions and brightness.

    Attributes
    ----------
    positions
        ``(n, 2)`` px, x and y of every bead in the relaxed gel, continuous.
    photons
        ``(n,)`` expected photons per frame.
    """

    positions: NDArray[np.float64]
    photons: NDArray[np.float64]


def make_beads(
    shape_px: tuple[int, int],
    density_per_px2: float,
    rng: np.random.Generator,
    *,
    margin: float = 12.0,
    photons: float = 500.0,
    brightness_spread: float = 0.25,
) -> Beads:
    """Beads at random in the image and a margin around it (px), with lognormal brightness of mean ``photons``.

    The margin lets beads enter and leave the picture as they move.

    Raises
    ------
    InputError
        When density or photons are not positive.

    Examples
    --------
    >>> beads = make_beads((100, 100), 0.02, np.random.default_rng(1), margin=0.0)
    >>> 150 < len(beads.photons) < 250
    True
    """
    if not (density_per_px2 > 0 and photons > 0):
        raise InputError(
            "bead density and photons must be positive", code="bad-beads", remedy="give for instance 0.02 and 500"
        )
    height, width = shape_px[0] + 2 * margin, shape_px[1] + 2 * margin
    count = int(rng.poisson(density_per_px2 * height * width))
    positions = rng.uniform(0, 1, (count, 2)) * np.array([width, height]) - margin - 0.5
    level = rng.lognormal(-0.5 * brightness_spread**2, brightness_spread, count) * photons
    return Beads(positions=positions, photons=level)


def expected_photons(
    shape_px: tuple[int, int], positions: NDArray[np.float64], photons: NDArray[np.float64], sigma: float
) -> NDArray[np.float64]:
    """Noise-free image (photons per pixel) of points blurred by a Gaussian and **integrated over each pixel**.

    ``sigma`` in px; positions ``(n, 2)`` x, y in px with the origin at the centre of pixel (0, 0).

    Raises
    ------
    InputError
        When ``sigma`` is not positive.

    Examples
    --------
    >>> image = expected_photons((31, 31), np.array([[15.3, 14.8]]), np.array([100.0]), 1.2)
    >>> round(float(image.sum()), 3)
    100.0
    """
    if not sigma > 0:
        raise InputError("sigma of the bead image must be positive", code="bad-sigma", remedy="give for instance 1.2")
    columns = _profiles(positions[:, 0], shape_px[1], sigma)
    rows = _profiles(positions[:, 1], shape_px[0], sigma)
    # A Gaussian integrated over pixels separates: image = sum over beads of photons * row profile * column profile.
    image: NDArray[np.float64] = (rows.multiply(photons[:, None]).T @ columns).toarray()
    return image


def _profiles(places: NDArray[np.float64], pixels: int, sigma: float) -> csr_array:
    """``(beads, pixels)`` sparse: share of a bead's light in every row (or column) of pixels, to 5 sigma."""
    reach = int(np.ceil(5 * sigma)) + 1
    middle = np.rint(places).astype(np.int64)
    edges = np.arange(-reach, reach + 2) - 0.5
    share = 0.5 * np.diff(erf((edges[None, :] - (places - middle)[:, None]) / (np.sqrt(2) * sigma)), axis=1)
    index = middle[:, None] + np.arange(-reach, reach + 1)[None, :]
    bead = np.broadcast_to(np.arange(len(places))[:, None], index.shape)
    seen = (index >= 0) & (index < pixels)
    return csr_array((share[seen], (bead[seen], index[seen])), shape=(len(places), pixels))


def make_bead_image(
    mean_photons: NDArray[np.float64], camera: Camera, rng: np.random.Generator
) -> tuple[NDArray[np.uint16], NDArray[np.float64]]:
    """One exposure: 16-bit counts and the variance (counts^2) to expect in each pixel.

    Poisson photons, Gaussian read noise, gain, offset, rounding (variance 1/12).

    Examples
    --------
    >>> image, variance = make_bead_image(np.full((4, 4), 100.0), Camera(read_noise=0.0), np.random.default_rng(0))
    >>> image.dtype, round(float(variance[0, 0]), 4)
    (dtype('uint16'), 100.0833)
    """
    light = rng.poisson(mean_photons).astype(float) + rng.normal(0, 1, mean_photons.shape) * camera.read_noise
    counts = np.clip(np.rint(camera.gain * light + camera.offset), 0, 65535).astype(np.uint16)
    return counts, camera.gain**2 * (mean_photons + camera.read_noise**2) + 1 / 12

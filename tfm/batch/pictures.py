"""Small grey pictures of bead images for the report, which reads nothing but the results folder."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from tfm.batch.netcdf import RESIDUAL_STEP
from tfm.traction.model import TractionField

__all__ = ["Thumbnails", "residual"]

#: px, longest side of a stored picture.
_LARGEST = 512


@dataclass(frozen=True)
class Thumbnails:
    """How the images of one field are made small: mean over ``block`` pixels, grey levels from the relaxed image.

    Attributes
    ----------
    block
        Pixels along each side that become one.
    low, high
        Grey levels that become 0 and 255.
    """

    block: int
    low: float
    high: float

    @classmethod
    def of(cls, relaxed: NDArray[np.float32]) -> Thumbnails:
        """Block size and grey levels that suit an image."""
        block = max(1, math.ceil(max(relaxed.shape) / _LARGEST))
        low, high = (float(v) for v in np.percentile(_mean(relaxed, block), (1.0, 99.7)))
        return cls(block, low, high if high > low else low + 1.0)

    def picture(self, image: NDArray[np.float32]) -> NDArray[np.uint8]:
        """The image as 8-bit grey levels."""
        small = _mean(image, self.block)
        return np.asarray(np.clip(np.rint((small - self.low) / (self.high - self.low) * 255.0), 0, 255), dtype=np.uint8)

    def axis(self, pixels: int, pixel_size: float) -> NDArray[np.float64]:
        """Centres of the picture's pixels along an axis of the image, in m."""
        centres = np.arange(pixels // self.block) * self.block + 0.5 * (self.block - 1)
        return np.asarray(centres * pixel_size, dtype=np.float64)

    def residual(self, values: NDArray[np.float32]) -> NDArray[np.int8]:
        """A residual in standard deviations as stored units."""
        small = _mean(values, self.block)
        return np.asarray(np.clip(np.rint(small / RESIDUAL_STEP), -127, 127), dtype=np.int8)


def _mean(image: NDArray[np.float32], block: int) -> NDArray[np.float32]:
    ny, nx = image.shape[0] // block, image.shape[1] // block
    cut = image[: ny * block, : nx * block].reshape(ny, block, nx, block)
    return np.asarray(cut.mean(axis=(1, 3)), dtype=np.float32)


def residual(
    relaxed: NDArray[np.float32],
    stressed: NDArray[np.float32],
    traction: TractionField,
    drift: NDArray[np.float64],
    pixel_size: float,
) -> NDArray[np.float32]:
    """What the measured displacement leaves of the images' difference, in standard deviations of the relaxed one.

    The stressed image is read at x + u + offset + drift (linear interpolation) and its grey levels are matched to the
    relaxed image by a straight line first: lamps drift.
    """
    ny, nx = relaxed.shape
    rows = (np.arange(ny) * pixel_size - traction.y[0]) / traction.spacing
    columns = (np.arange(nx) * pixel_size - traction.x[0]) / traction.spacing
    grid = np.meshgrid(rows, columns, indexing="ij")
    moved = []
    for component, pixels in ((1, np.arange(ny)[:, None]), (0, np.arange(nx)[None, :])):
        u = ndimage.map_coordinates(traction.displacement[component], grid, order=1, mode="nearest")
        moved.append(pixels + (u + traction.offset[component] + drift[component]) / pixel_size)
    back = ndimage.map_coordinates(stressed, moved, order=1, mode="nearest", output=np.float32)
    spread = float(back.std())
    slope = float(np.mean((back - back.mean()) * (relaxed - relaxed.mean()))) / spread**2 if spread else 0.0
    difference = slope * (back - back.mean()) - (relaxed - relaxed.mean())
    scale = float(relaxed.std())
    return np.asarray(difference / scale if scale else difference, dtype=np.float32)

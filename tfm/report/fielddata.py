"""Arrays of one field and frame, out of its netCDF file. What the file does not hold is ``None``."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import h5py
import numpy as np
from numpy.typing import NDArray

__all__ = ["FieldArrays", "read_arrays"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class FieldArrays:
    """Arrays of one frame of one field, SI, frame of the image (x right, y down).

    Attributes
    ----------
    frame, frames
        Which frame this is, and how many the file holds.
    x, y, u
        Displacement ``(2, ny, nx)`` m at positions ``(nx,)``, ``(ny,)`` m; NaN where no vector is valid.
    precision
        ``(3, ny, nx)`` 1/m^2.
    xt, yt, traction, predicted, labels
        Lattice positions m, traction ``(2, nyt, nxt)`` Pa, displacement that it predicts (m), cell labels.
    xi, yi, relaxed, stressed, residual
        Positions m of the pictures' pixels, pictures of the bead images, and what is left of their difference in
        standard deviations of the relaxed one, ``[row, column]``.
    path
        The file, for the other frames.
    """

    frame: int
    frames: int
    x: Array | None = None
    y: Array | None = None
    u: Array | None = None
    precision: Array | None = None
    xt: Array | None = None
    yt: Array | None = None
    traction: Array | None = None
    predicted: Array | None = None
    labels: NDArray[np.int32] | None = None
    xi: Array | None = None
    yi: Array | None = None
    relaxed: Array | None = None
    stressed: Array | None = None
    residual: Array | None = None
    path: Path | None = None

    @property
    def camera_pixel(self) -> float | None:
        """m, edge of a pixel of the recorded image: pictures may be means over blocks of such pixels."""
        if self.xi is None or len(self.xi) < 2:
            return None
        # The first block of n pixels is centred at (n - 1) / 2 pixels, and blocks follow every n pixels.
        return float(self.xi[1] - self.xi[0] - 2 * self.xi[0])


def _take(file: h5py.File, name: str, frame: int, dimensions: int) -> Array | None:
    """One frame of a variable with its scale factor; None when absent or NaN throughout."""
    if name not in file:
        return None
    variable = file[name]
    if variable.ndim > dimensions:
        if variable.shape[0] == 0:
            return None
        raw = variable[min(frame, variable.shape[0] - 1)]
    else:
        raw = variable[...]
    values = np.asarray(raw, dtype=float) * float(np.ravel(variable.attrs.get("scale_factor", 1.0))[0])
    return values if values.ndim == dimensions and values.size and np.isfinite(values).any() else None


def _axis(file: h5py.File, name: str) -> Array | None:
    """Positions (m) along a dimension, if there are at least two."""
    if name not in file or file[name].shape[0] < 2:
        return None
    return np.asarray(file[name][...], dtype=float)


def read_arrays(path: Path, *, frame: int = 0) -> FieldArrays:
    """The arrays of one frame of ``fields/<field>.nc``, laid out as :mod:`tfm.batch.netcdf` says."""
    with h5py.File(path, "r") as file:
        labels = _take(file, "labels", frame, 2)
        frames = [file[n].shape[0] for n in ("traction", "displacement", "stressed_image") if n in file]
        return FieldArrays(
            frame=frame,
            frames=max(frames, default=1),
            x=_axis(file, "x"),
            y=_axis(file, "y"),
            u=_take(file, "displacement", frame, 3),
            precision=_take(file, "displacement_precision", frame, 3),
            xt=_axis(file, "lattice_x"),
            yt=_axis(file, "lattice_y"),
            traction=_take(file, "traction", frame, 3),
            predicted=_take(file, "traction_displacement", frame, 3),
            labels=None if labels is None else labels.astype(np.int32),
            xi=_axis(file, "image_x"),
            yi=_axis(file, "image_y"),
            relaxed=_take(file, "relaxed_image", frame, 2),
            stressed=_take(file, "stressed_image", frame, 2),
            residual=_take(file, "residual_image", frame, 2),
            path=path,
        )

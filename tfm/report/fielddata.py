"""Arrays of one field and frame, out of its netCDF file. What the file does not hold is ``None``."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import h5netcdf
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

    @property
    def camera_pixel(self) -> float | None:
        """m, edge of a pixel of the recorded image: pictures may be means over blocks of such pixels."""
        if self.xi is None or len(self.xi) < 2:
            return None
        # The first block of n pixels is centred at (n - 1) / 2 pixels, and blocks follow every n pixels.
        return float(self.xi[1] - self.xi[0] - 2 * self.xi[0])


def _take(file: Any, name: str, frame: int, dimensions: int) -> Array | None:
    """One frame of a variable with its scale factor; None when absent or NaN throughout."""
    if name not in file.variables:
        return None
    variable = file.variables[name]
    if variable.ndim > dimensions:
        if variable.shape[0] == 0:
            return None
        raw = variable[min(frame, variable.shape[0] - 1)]
    else:
        raw = variable[...]
    values = np.asarray(raw, dtype=float) * float(variable.attrs.get("scale_factor", 1.0))
    return values if values.ndim == dimensions and values.size and np.isfinite(values).any() else None


def _axis(file: Any, like: str, position: int) -> Array | None:
    """Positions (m) along one of the last dimensions of a variable."""
    if like not in file.variables:
        return None
    name = file.variables[like].dimensions[position]
    if name not in file.variables or file.variables[name].shape[0] < 2:
        return None
    factor = 1e-6 if file.variables[name].attrs.get("units") in ("um", "micrometer") else 1.0
    return np.asarray(file.variables[name][...], dtype=float) * factor


def read_arrays(path: Path, *, frame: int = 0) -> FieldArrays:
    """The arrays of one frame of ``fields/<field>.nc``."""
    with h5netcdf.File(path, "r") as file:
        labels = _take(file, "labels", frame, 2)
        return FieldArrays(
            frame=frame,
            frames=max(int(file.dimensions["frame"].size), 1) if "frame" in file.dimensions else 1,
            x=_axis(file, "displacement", -1),
            y=_axis(file, "displacement", -2),
            u=_take(file, "displacement", frame, 3),
            precision=_take(file, "displacement_precision", frame, 3),
            xt=_axis(file, "traction", -1),
            yt=_axis(file, "traction", -2),
            traction=_take(file, "traction", frame, 3),
            predicted=_take(file, "traction_displacement", frame, 3),
            labels=None if labels is None else labels.astype(np.int32),
            xi=_axis(file, "relaxed_image", -1),
            yi=_axis(file, "relaxed_image", -2),
            relaxed=_take(file, "relaxed_image", frame, 2),
            stressed=_take(file, "stressed_image", frame, 2),
            residual=_take(file, "residual_image", frame, 2),
        )

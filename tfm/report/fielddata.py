"""Arrays of one field and frame, out of its netCDF file. What the file does not hold is ``None``: pictures draw what is there."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr
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
    relaxed, stressed, residual
        Bead images and what is left of their difference, ``[row, column]``.
    pixel
        m, edge of a pixel of those images.
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
    relaxed: Array | None = None
    stressed: Array | None = None
    residual: Array | None = None
    pixel: float | None = None


def _take(data: xr.Dataset, name: str, frame: int, dimensions: int) -> Array | None:
    if name not in data:
        return None
    variable = data[name]
    extra = [d for d in variable.dims[: max(variable.ndim - dimensions, 0)]]
    for dim in extra:
        variable = variable.isel({dim: min(frame, variable.sizes[dim] - 1)})
    values = np.asarray(variable.values, dtype=float)
    return values if values.ndim == dimensions and values.size else None


def _axis(data: xr.Dataset, like: str, position: int) -> Array | None:
    """Positions along one of the last dimensions of a variable, in metres."""
    if like not in data:
        return None
    dim = str(data[like].dims[position])
    if dim not in data.coords:
        return None
    coordinate = data[dim]
    factor = 1e-6 if coordinate.attrs.get("units") in ("um", "micrometer") else 1.0
    return np.asarray(coordinate.values, dtype=float) * factor


def read_arrays(path: Path, *, frame: int = 0) -> FieldArrays:
    """The arrays of one frame."""
    with xr.open_dataset(path, engine="h5netcdf") as data:
        frames = max([data.sizes[d] for d in ("frame", "time") if d in data.sizes], default=1)
        column = _axis(data, "relaxed_image", -1)
        pixel = (
            float(column[1] - column[0]) if column is not None and len(column) > 1 else data.attrs.get("image_pixel_m")
        )
        labels = _take(data, "labels", frame, 2)
        return FieldArrays(
            frame=frame,
            frames=frames,
            x=_axis(data, "displacement", -1),
            y=_axis(data, "displacement", -2),
            u=_take(data, "displacement", frame, 3),
            precision=_take(data, "displacement_precision", frame, 3),
            xt=_axis(data, "traction", -1),
            yt=_axis(data, "traction", -2),
            traction=_take(data, "traction", frame, 3),
            predicted=_take(data, "traction_displacement", frame, 3),
            labels=None if labels is None else labels.astype(np.int32),
            relaxed=_take(data, "relaxed_image", frame, 2),
            stressed=_take(data, "stressed_image", frame, 2),
            residual=_take(data, "residual_image", frame, 2),
            pixel=None if pixel is None else float(pixel),
        )

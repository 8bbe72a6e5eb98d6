"""What of a frame goes into the field's netCDF file."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfm.batch.frames import FrameResult
from tfm.batch.netcdf import FieldWriter
from tfm.batch.pictures import Thumbnails, residual
from tfm.batch.settings import RowValues, RunSettings

__all__ = ["make_attributes", "store_arrays", "store_pictures"]


def store_arrays(writer: FieldWriter, found: FrameResult) -> None:
    """Write displacement and traction of one frame."""
    traction, field_ = found.traction, found.displacement
    arrays: dict[str, Any] = {
        "traction": traction.traction,
        "traction_displacement": traction.displacement,
        "labels": traction.labels,
    }
    writer.axis("lattice_x", traction.x, direction="to the right")
    writer.axis("lattice_y", traction.y, direction="downwards")
    if field_ is not None:
        writer.axis("x", field_.x, direction="to the right")
        writer.axis("y", field_.y, direction="downwards")
        arrays["displacement"], arrays["displacement_precision"] = field_.u, field_.precision
    writer.put(found.frame, arrays)


def store_pictures(
    writer: FieldWriter,
    found: FrameResult,
    relaxed: NDArray[np.float32],
    stressed: NDArray[np.float32],
    pixel: float,
) -> None:
    """Write the small bead images of one frame and what is left of their difference."""
    thumbs = Thumbnails.of(relaxed)
    writer.axis("image_x", thumbs.axis(relaxed.shape[1], pixel), direction="to the right")
    writer.axis("image_y", thumbs.axis(relaxed.shape[0], pixel), direction="downwards")
    drift = found.displacement.drift if found.displacement is not None else np.zeros(2)
    left = residual(relaxed, stressed, found.traction, drift, pixel)
    pictures = {
        "relaxed_image": thumbs.picture(relaxed),
        "stressed_image": thumbs.picture(stressed),
        "residual_image": thumbs.residual(left),
    }
    writer.put(found.frame, pictures)


def make_attributes(row: RowValues, settings: RunSettings, folder: Path) -> dict[str, str | float | int]:
    """Global attributes of the field's netCDF file."""
    found: dict[str, str | float | int] = {
        "title": f"traction of field {row.field}",
        "field": row.field,
        "frame_of_reference": "x to the right, y down, origin at the centre of pixel (0, 0)",
        "method": settings.method,
        "source": row.source,
        "sheet": folder.name,
    }
    for name in ("youngs_modulus", "shear_modulus", "poisson", "thickness"):
        value = getattr(row, name)
        if value is not None:
            found[name] = value
    return found

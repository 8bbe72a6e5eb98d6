"""The room's door: two bead images in, a displacement field with the precision of every vector out."""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray

from tfm.displacement.drift import RigidMotion, estimate_drift, fit_rigid_motion
from tfm.displacement.model import DisplacementField
from tfm.displacement.noise import vector_noise
from tfm.displacement.piv import PivField, piv_start
from tfm.displacement.prepare import PreparedFrame, prepare_frame
from tfm.errors import InputError, MeasurementError

__all__ = ["measure_displacement"]


def measure_displacement(
    relaxed: NDArray[np.floating],
    stressed: NDArray[np.floating],
    pixel_size: float,
    *,
    quiet: NDArray[np.bool_] | None = None,
    spacing_px: int = 8,
    mode: Literal["start", "full"] = "full",
    rotation: bool = False,
    magnification: bool = False,
    saturation: float | None = None,
) -> DisplacementField:
    """Displacement of the beads from the relaxed to the stressed image, on a grid in the relaxed image's frame."""
    frames = _checked(relaxed, stressed, pixel_size, quiet, saturation)
    a, b = frames
    drift = estimate_drift(a.image, b.image, quiet=quiet, usable=a.usable & b.usable)
    start = piv_start(a.image, b.image, shift=drift.shift, spacing_px=16 if mode == "full" else spacing_px)
    return _from_start(start, drift, pixel_size, quiet, rotation, magnification)


def _checked(
    relaxed: NDArray[np.floating],
    stressed: NDArray[np.floating],
    pixel_size: float,
    quiet: NDArray[np.bool_] | None,
    saturation: float | None,
) -> tuple[PreparedFrame, PreparedFrame]:
    if relaxed.shape != stressed.shape:
        raise InputError(
            f"the relaxed image has shape {relaxed.shape}, the stressed one {stressed.shape}",
            code="shape-mismatch",
            remedy="crop both to the same field of view",
        )
    if not (np.isfinite(pixel_size) and pixel_size > 0):
        raise InputError(f"pixel size {pixel_size} m", code="bad-pixel-size", remedy="give a positive length in m")
    if quiet is not None and quiet.shape != relaxed.shape:
        raise InputError(
            f"the mask of quiet ground has shape {quiet.shape}, the images {relaxed.shape}",
            code="shape-mismatch",
            remedy="make the mask on the image's pixels",
        )
    return prepare_frame(relaxed, saturation=saturation), prepare_frame(stressed, saturation=saturation)


def quiet_nodes(
    x: NDArray[np.float64], y: NDArray[np.float64], quiet: NDArray[np.bool_] | None, valid: NDArray[np.bool_]
) -> tuple[NDArray[np.bool_], bool]:
    """Valid nodes on quiet ground, and whether there was enough of it (else all valid nodes stand in)."""
    if quiet is not None:
        rows = np.clip(np.rint(y).astype(int), 0, quiet.shape[0] - 1)
        cols = np.clip(np.rint(x).astype(int), 0, quiet.shape[1] - 1)
        on_quiet = quiet[np.ix_(rows, cols)] & valid
        if on_quiet.sum() >= 12:
            return on_quiet, True
    return valid, False


def _from_start(
    start: PivField,
    drift: RigidMotion,
    pixel_size: float,
    quiet: NDArray[np.bool_] | None,
    rotation: bool,
    magnification: bool,
) -> DisplacementField:
    on_quiet, measured = quiet_nodes(start.x, start.y, quiet, start.valid)
    grid_y, grid_x = np.meshgrid(start.y, start.x, indexing="ij")
    if on_quiet.sum() < 12:
        raise MeasurementError(
            "fewer than 12 vectors could be measured", code="no-match", remedy="check the bead images"
        )
    motion = fit_rigid_motion(grid_x[on_quiet], grid_y[on_quiet], start.u[:, on_quiet], np.ones(int(on_quiet.sum())),
                              rotation=rotation, magnification=magnification)  # fmt: skip
    u = start.u - motion.at(grid_x, grid_y)
    noise = vector_noise(u, on_quiet, max(1, round(32 / (start.x[1] - start.x[0]))))
    weight = np.where(start.valid, 1 / max(noise, 1e-6) ** 2 if np.isfinite(noise) else 0.0, 0.0) / pixel_size**2
    return DisplacementField(
        x=start.x * pixel_size,
        y=start.y * pixel_size,
        u=u * pixel_size,
        precision=np.stack([weight, np.zeros_like(weight), weight]),
        valid=start.valid & (weight > 0),
        drift=np.array(motion.shift) * pixel_size,
        noise=noise * pixel_size,
        independent_area=(32 * pixel_size) ** 2,
        rejected=int((~start.valid).sum()),
        settings={**start.settings, "mode": "start", "rotation_rad": motion.rotation,
                  "magnification": motion.magnification, "quiet_ground": measured},
    )  # fmt: skip

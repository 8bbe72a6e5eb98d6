"""The room's door: two bead images in, a displacement field with the precision of every vector out."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from tfm.displacement.drift import RigidMotion, estimate_drift, fit_rigid_motion
from tfm.displacement.model import DisplacementField
from tfm.displacement.noise import vector_noise
from tfm.displacement.piv import PivField, piv_start
from tfm.displacement.prepare import PreparedFrame, prepare_frame
from tfm.displacement.quality import bead_count, judge_quality
from tfm.displacement.refine import RefinedField, refine_displacement
from tfm.errors import InputError, MeasurementError

__all__ = ["measure_displacement", "quiet_nodes"]

#: Beads that an affine window should hold: 6 unknowns against 2 x 20 coordinates.
_BEADS_PER_WINDOW = 20.0


def measure_displacement(
    relaxed: NDArray[np.floating],
    stressed: NDArray[np.floating],
    pixel_size: float,
    *,
    quiet: NDArray[np.bool_] | None = None,
    spacing_px: int | None = None,
    mode: Literal["start", "full"] = "full",
    rotation: bool = False,
    magnification: bool = False,
    saturation: float | None = None,
) -> DisplacementField:
    """Displacement of the beads from the relaxed to the stressed image, on a grid in the relaxed image's frame.

    A bead at ``x`` in the relaxed image sits at ``x + drift + u(x)`` in the stressed one (with rotation and
    magnification, where asked for, taken out as well).

    Parameters
    ----------
    relaxed, stressed
        ``(ny, nx)`` bead images in counts, at least 48 px a side.
    pixel_size
        m.
    quiet
        ``(ny, nx)`` bool, True = ground away from cells. Drift and noise are measured there. ``None``: everywhere,
        robustly.
    spacing_px
        Distance of the vectors; ``None`` = 8 for ``full``, 16 for ``start``. Smaller than the windows, so that
        neighbours share pixels: see ``independent_area``.
    mode
        ``start``: window deformation from 128 to 32 px, fast, for methods that go on from the pixels. ``full``:
        refined to the photon limit, with the precision of every vector.
    rotation, magnification
        Take a rotation and a change of scale between the frames out of ``u`` too.
    saturation
        Top of the camera's range in counts; ``None`` = recognised from the image.

    Returns
    -------
    DisplacementField
        With ``settings["quality"]`` (numbers of :class:`tfm.displacement.quality.FieldQuality`) and ``notes``.

    Raises
    ------
    InputError
        When the images differ in shape or are too small.
    MeasurementError
        When a frame is blank or the frames do not match.

    Examples
    --------
    >>> from scipy.ndimage import gaussian_filter
    >>> rng = np.random.default_rng(0)
    >>> image = 4000 * gaussian_filter((rng.random((160, 164)) < 0.02).astype(float), 1.2)
    >>> relaxed, stressed = (rng.poisson(part + 10.0) for part in (image[:, 4:], image[:, :-4]))
    >>> field = measure_displacement(relaxed, stressed, 0.2e-6)
    >>> bool(abs(field.drift[0] - 0.8e-6) < 5e-9), field.u.shape
    (True, (2, 20, 20))
    """
    if mode not in ("start", "full"):
        raise InputError(f"mode '{mode}'", code="bad-mode", remedy="use 'start' or 'full'")
    a, b = _checked(relaxed, stressed, pixel_size, quiet, saturation)
    drift = estimate_drift(a.image, b.image, quiet=quiet, usable=a.usable & b.usable)
    spacing = spacing_px or (16 if mode == "start" else 8)
    start = _start(a, b, drift, spacing if mode == "start" else 16)
    if mode == "start":
        return _from_start(start, (a, b), pixel_size, quiet, rotation, magnification)
    density = bead_count(a)[0]
    radius = float(np.clip(0.6 * np.sqrt(_BEADS_PER_WINDOW / max(density, 1e-9)), 12.0, 40.0))
    refined = refine_displacement(a, b, start, spacing_px=spacing, radius=radius, quiet=quiet)
    return _from_refined(refined, start, (a, b), pixel_size, quiet, rotation, magnification)


def _start(a: PreparedFrame, b: PreparedFrame, drift: RigidMotion, spacing: int) -> PivField:
    """Start from the drift, or from no shift where strain is so large that the whole frames share none."""
    try:
        return piv_start(a.image, b.image, shift=drift.shift, spacing_px=spacing, usable=a.usable)
    except MeasurementError:
        return piv_start(a.image, b.image, spacing_px=spacing, usable=a.usable)


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
    frames: tuple[PreparedFrame, PreparedFrame],
    pixel_size: float,
    quiet: NDArray[np.bool_] | None,
    rotation: bool,
    magnification: bool,
) -> DisplacementField:
    on_quiet, measured = quiet_nodes(start.x, start.y, quiet, start.valid)
    motion = _motion(start.x, start.y, start.u, on_quiet, np.ones(on_quiet.shape), rotation, magnification)
    u = start.u - motion.at(*np.meshgrid(start.x, start.y))
    noise = vector_noise(u, on_quiet, max(1, int(np.ceil(32 / (start.x[1] - start.x[0])))))
    # Windows of the start carry no covariance of their own; the scatter on quiet ground stands for all of them.
    weight = np.where(start.valid, 1 / max(noise, 1e-6) ** 2 if np.isfinite(noise) else 0.0, 0.0)
    precision = np.stack([weight, np.zeros_like(weight), weight])
    return _field(start.x, start.y, u, precision, start.valid & (weight > 0), motion, noise, 32.0**2, frames,
                  pixel_size, {**start.settings, "mode": "start"}, measured)  # fmt: skip


def _from_refined(
    refined: RefinedField,
    start: PivField,
    frames: tuple[PreparedFrame, PreparedFrame],
    pixel_size: float,
    quiet: NDArray[np.bool_] | None,
    rotation: bool,
    magnification: bool,
) -> DisplacementField:
    xx, xy, yy = refined.covariance
    det = xx * yy - xy**2
    precision = np.where(refined.valid, np.stack([yy, -xy, xx]) / det, 0.0)
    on_quiet, measured = quiet_nodes(refined.x, refined.y, quiet, refined.valid)
    weight = np.where(refined.valid, 2 / (xx + yy), 0.0)
    motion = _motion(refined.x, refined.y, refined.u, on_quiet, weight, rotation, magnification)
    u = refined.u - motion.at(*np.meshgrid(refined.x, refined.y))
    spacing = refined.x[1] - refined.x[0]
    apart = max(1, int(np.ceil(2 * refined.settings["window_radius_px"][0] / spacing)))
    noise = vector_noise(u, on_quiet, apart)
    if not np.isfinite(noise):
        noise = float(np.sqrt(np.median(0.5 * (xx + yy)[on_quiet])))
    trust = precision[0] + precision[2]
    area = float(trust[refined.valid].sum() / (trust / refined.area)[refined.valid].sum())
    settings = {**start.settings, **refined.settings, "mode": "full"}
    return _field(refined.x, refined.y, u, precision, refined.valid, motion, noise, area, frames, pixel_size, settings,
                  measured, lost=refined.lost)  # fmt: skip


def _motion(
    x: NDArray[np.float64],
    y: NDArray[np.float64],
    u: NDArray[np.float64],
    on_quiet: NDArray[np.bool_],
    weight: NDArray[np.float64],
    rotation: bool,
    magnification: bool,
) -> RigidMotion:
    if on_quiet.sum() < 12:
        raise MeasurementError(
            "fewer than 12 vectors could be measured", code="no-match", remedy="check the bead images"
        )
    grid_x, grid_y = np.meshgrid(x, y)
    return fit_rigid_motion(grid_x[on_quiet], grid_y[on_quiet], u[:, on_quiet], weight[on_quiet],
                            rotation=rotation, magnification=magnification)  # fmt: skip


def _field(
    x: NDArray[np.float64],
    y: NDArray[np.float64],
    u: NDArray[np.float64],
    precision: NDArray[np.float64],
    valid: NDArray[np.bool_],
    motion: RigidMotion,
    noise: float,
    area: float,
    frames: tuple[PreparedFrame, PreparedFrame],
    pixel: float,
    settings: Mapping[str, Any],
    measured: bool,
    *,
    lost: float = float("nan"),
) -> DisplacementField:
    """Pixels to metres, once."""
    rejected = int((~valid).sum())
    quality = judge_quality(*frames, noise_px=noise, rejected_share=rejected / valid.size,
                            drift_px=float(np.hypot(*motion.shift)), lost_share=lost)  # fmt: skip
    notes = quality.notes
    if not measured:
        notes += ("drift and noise were measured on the whole image: leave ground free of cells, or give outlines",)
    motion_settings = {
        "rotation_rad": motion.rotation,
        "magnification": motion.magnification,
        "rotation_centre_px": list(motion.centre),
        "quiet_ground": measured,
        "quality": quality.as_dict(),
    }
    return DisplacementField(
        x=x * pixel,
        y=y * pixel,
        u=np.where(valid, u, np.nan) * pixel,
        precision=np.where(valid, precision, 0.0) / pixel**2,
        valid=valid,
        drift=np.array(motion.shift) * pixel,
        noise=noise * pixel,
        independent_area=area * pixel**2,
        rejected=rejected,
        settings={**settings, **motion_settings},
        notes=notes,
    )

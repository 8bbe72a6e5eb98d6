"""From two bead images to traction: one frame of a field that starts from images."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from tfm.batch.settings import RowValues, RunSettings
from tfm.displacement import DisplacementField, measure_displacement
from tfm.errors import InputError, MeasurementError
from tfm.gel import Gel
from tfm.images import BeadStack, Outlines, OutlineStack, image_faults, propose_outline
from tfm.traction import TractionField, infer_bounded, infer_fourier, infer_image

__all__ = ["FrameResult", "ImageSource", "infer", "quiet_ground", "quietest_frame"]

#: m, from an outline to the ground that counts as quiet.
_AWAY = 5e-6
_LAMBDA = {"l-curve": "lcurve"}


@dataclass(frozen=True)
class FrameResult:
    """What one frame gave, before it is turned into table rows."""

    frame: int
    displacement: DisplacementField | None
    traction: TractionField
    outlines: Outlines
    notes: tuple[str, ...]


def quiet_ground(labels: NDArray[np.int32], pixel_size: float) -> NDArray[np.bool_]:
    """Pixels away from all cells; with too few of them, all pixels without a cell.

    Examples
    --------
    >>> quiet_ground(np.zeros((4, 4), np.int32), 1e-6).all()
    np.True_
    """
    free = labels == 0
    if free.all():
        return np.asarray(free, dtype=bool)
    away = ndimage.distance_transform_edt(free) * pixel_size > _AWAY
    return np.asarray(away if away.mean() > 0.05 else free, dtype=bool)


def infer(
    method: str,
    row_settings: RunSettings,
    displacement: DisplacementField,
    pixel_size: float,
    outlines: Outlines,
    gel: Gel,
) -> TractionField:
    """Traction from displacement by ``bounded`` or ``fourier``."""
    if method == "fourier":
        choice = _LAMBDA.get(row_settings.lambda_choice, row_settings.lambda_choice)
        return infer_fourier(displacement, pixel_size, outlines, gel, choice=choice)
    return infer_bounded(displacement, pixel_size, outlines, gel)


def _note_faults(frame: NDArray[np.float32], stack: BeadStack, which: str) -> list[str]:
    notes = []
    for fault in image_faults(frame, saturation_level=stack.saturation_level):
        if fault.fatal:
            raise MeasurementError(
                f"{which} image: {fault.sentence}",
                code=fault.code,
                column=which,
                remedy="use another image of this field",
            )
        notes.append(f"{which} image: {fault.sentence}")
    return notes


@dataclass
class ImageSource:
    """Bead images of one field, measured frame by frame; remembers the last frame's result as the next one's start."""

    row: RowValues
    settings: RunSettings
    stressed: BeadStack
    relaxed: BeadStack | None
    outlines: OutlineStack | None
    gel: Gel
    pixel: float
    reference: int | None = None
    previous: TractionField | None = None
    proposed: Outlines | None = None
    _reference_image: NDArray[np.float32] | None = None

    def image(self, stack: BeadStack, t: int) -> NDArray[np.float32]:
        """One bead frame."""
        return stack.frame(t, channel=self.row.bead_channel or 0, plane=self.row.z)

    def reference_image(self, t: int) -> NDArray[np.float32]:
        """The relaxed frame that belongs to a stressed frame."""
        if self.relaxed is not None and self.relaxed.n_frames > 1:
            return self.image(self.relaxed, t)
        if self._reference_image is None:
            stack, index = (self.stressed, self.reference or 0) if self.relaxed is None else (self.relaxed, 0)
            self._reference_image = self.image(stack, index)
        return self._reference_image

    def measure(self, t: int, relaxed: NDArray[np.float32], stressed: NDArray[np.float32]) -> FrameResult:
        """Displacement and traction of one frame.

        Raises
        ------
        TfmError
            When this frame cannot be measured.
        """
        which = self.relaxed if self.relaxed is not None else self.stressed
        notes = _note_faults(stressed, self.stressed, "stressed") + _note_faults(relaxed, which, "relaxed")
        method = "image" if self.settings.method == "auto" else self.settings.method
        mode = "start" if method == "image" else "full"
        outlines = self.outlines.at(t) if self.outlines is not None else self.proposed
        quiet = None if outlines is None else quiet_ground(outlines.labels, self.pixel)
        level = self.stressed.saturation_level
        field = measure_displacement(relaxed, stressed, self.pixel, quiet=quiet, mode=mode, saturation=level)  # type: ignore[arg-type]
        if outlines is None:
            outlines = propose_outline(
                field.u,
                field.x,
                field.y,
                self.pixel,
                relaxed.shape,
                field.noise,
                independent_area=field.independent_area,
            )
            self.proposed = outlines
            quiet = quiet_ground(outlines.labels, self.pixel)
            field = measure_displacement(relaxed, stressed, self.pixel, quiet=quiet, mode=mode, saturation=level)  # type: ignore[arg-type]
        if method == "image":
            traction = infer_image(
                relaxed, stressed, self.pixel, outlines, self.gel, start=field, previous=self.previous
            )
            self.previous = traction
        else:
            traction = infer(method, self.settings, field, self.pixel, outlines, self.gel)
        return FrameResult(t, field, traction, outlines, tuple(notes))


def quietest_frame(source: ImageSource) -> int:
    """The frame of least pull in a series without a relaxed image.

    Beads around a cell that pulls move towards it. For every frame the displacement against frame 0 is projected on the
    direction to the nearest cell's centroid and averaged around the cells; the frame where it is smallest pulls least.
    Ties go to the earlier frame.
    """
    first = source.image(source.stressed, 0)
    outlines = None if source.outlines is None else source.outlines.at(0)
    best, best_pull = 0, 0.0
    for t in range(1, source.stressed.n_frames):
        quiet = None if outlines is None else quiet_ground(outlines.labels, source.pixel)
        with _place(t):
            field = measure_displacement(
                first, source.image(source.stressed, t), source.pixel, quiet=quiet, mode="start",
                saturation=source.stressed.saturation_level,
            )  # fmt: skip
        if outlines is None:
            raise InputError(
                "quietest needs to know where the cells are",
                code="quietest-outline",
                column="outline",
                remedy="give an outline, or name a relaxed image",
            )
        pull = _inward(field, outlines, source.pixel)
        if pull < best_pull:
            best, best_pull = t, pull
    return best


@contextlib.contextmanager
def _place(t: int) -> Iterator[None]:
    try:
        yield
    except MeasurementError as error:
        error.message = f"frame {t}: {error.message}"
        raise


def _inward(field: DisplacementField, outlines: Outlines, pixel: float) -> float:
    """m. Mean displacement towards the cells, summed over cells, on the ground within half a cell's size of each."""
    total = 0.0
    grid_x, grid_y = np.meshgrid(field.x, field.y)
    for cell in outlines.cells:
        rows, columns = np.nonzero(outlines.labels == cell)
        dx, dy = columns.mean() * pixel - grid_x, rows.mean() * pixel - grid_y
        distance = np.hypot(dx, dy)
        radius = np.sqrt(rows.size / np.pi) * pixel
        near = field.valid & (distance < 1.5 * radius) & (distance > 0.3 * radius)
        if near.any():
            total += float(np.mean((field.u[0] * dx + field.u[1] * dy)[near] / distance[near]))
    return total

"""The sheet's ``outline`` column: a label TIFF, GeoJSON, ImageJ regions or ``auto:IMAGE``, as label images."""

from __future__ import annotations

import os
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from tfm.errors import InputError, MeasurementError
from tfm.images.automatic import segment_cells
from tfm.images.follow import LabelFollower, apply_mapping
from tfm.images.frames import BeadStack, open_frames
from tfm.images.guard import regular_file, small_file
from tfm.images.model import Outlines
from tfm.images.polygons import rasterise, read_geojson
from tfm.images.roi import read_roi

__all__ = ["OutlineStack", "read_outline_stack", "read_outlines"]

#: px^2. A cell of fewer pixels carries no tensor.
_FEW_PIXELS = 25


@dataclass(frozen=True)
class OutlineStack:
    """Outlines of a field, one set for all frames or one per frame; frames are read when asked for.

    Attributes
    ----------
    n_frames
        1 when the outlines hold for every frame.
    source
        As in :class:`~tfm.images.Outlines`.
    """

    n_frames: int
    source: str
    _fixed: Outlines | None = field(default=None, repr=False)
    _stack: BeadStack | None = field(default=None, repr=False)
    _shape: tuple[int, int] = field(default=(0, 0), repr=False)
    _mappings: tuple[dict[int, int], ...] = field(default=(), repr=False)

    def at(self, frame: int) -> Outlines:
        """Outlines at a stressed frame, from 0; ``cell`` means the same cell in all of them."""
        if self._fixed is not None:
            return self._fixed
        if self._stack is None or not 0 <= frame < self.n_frames:
            raise InputError(
                f"there is no outline for frame {frame}; the file has {self.n_frames}",
                code="no-such-frame",
                file=self._stack.path if self._stack else "",
                remedy="give one label image per stressed frame",
            )
        plain = _frame_outlines(self._stack, frame, self._shape, self.source)
        mapping = self._mappings[frame]
        notes = {mapping[cell]: sentences for cell, sentences in plain.cell_notes.items()}
        return replace(plain, labels=apply_mapping(plain.labels, mapping), cell_notes=notes)


def read_outlines(text: str, shape: tuple[int, int], *, base: str | os.PathLike[str] = ".", frame: int = 0) -> Outlines:
    """Outlines of one frame, from what stands in the sheet's column ``outline``.

    Parameters
    ----------
    text
        Path of a label TIFF, a GeoJSON file, an ImageJ ``.roi`` or ``.zip``, or ``auto:`` and the path of an image of
        the cells.
    shape
        ``(ny, nx)`` of the bead image.
    base
        Folder that a relative path starts from.
    frame
        Stressed frame, from 0; matters for label stacks only.

    Raises
    ------
    InputError
        ``missing-file``, ``not-a-file``, ``outline-format``, ``outline-shape``, ``outline-labels``, ``no-outline``,
        ``bad-polygon``, ``outline-outside``, ``outline-overlap``, ``not-an-area``, ``geojson``, ``roi``, ...
    MeasurementError
        ``damaged-file``, ``truncated-file``, ``no-cell-found``.
    """
    return read_outline_stack(text, shape, base=base).at(frame)


def read_outline_stack(
    text: str, shape: tuple[int, int], *, base: str | os.PathLike[str] = ".", n_frames: int | None = None
) -> OutlineStack:
    """Outlines of all frames; see :func:`read_outlines`.

    Parameters
    ----------
    n_frames
        Number of stressed frames, when known: a label stack must have as many.

    Raises
    ------
    InputError
        As :func:`read_outlines`, and ``outline-frames`` when the numbers of frames differ.
    """
    entry = text.strip()
    automatic = entry.startswith("auto:")
    path = Path(base) / (entry.removeprefix("auto:").strip() if automatic else entry)
    if automatic and path == Path(base):
        raise InputError(
            "'auto:' names no image", code="outline-format", remedy="write auto: and the image of the cells"
        )
    regular_file(path, what="image of the cells" if automatic else "outline")
    if automatic or _is_tiff(path):
        stack = open_frames(path) if automatic else open_frames(path, labels=True)
        return _image_outlines(stack, shape, "automatic" if automatic else "label image", n_frames)
    data = small_file(path, what="outline")
    if data[:4] in (b"Iout", b"PK\x03\x04"):
        outlines = rasterise(read_roi(data, file=str(path)), shape, file=str(path), source="roi")
    elif data.lstrip(b"\xef\xbb\xbf \t\r\n")[:1] in (b"{", b"["):
        outlines = rasterise(read_geojson(data, file=str(path)), shape, file=str(path), source="polygons")
    else:
        raise InputError(
            "this is no label TIFF, GeoJSON or ImageJ region",
            code="outline-format",
            file=str(path),
            remedy="save the outlines in one of these formats",
        )
    return OutlineStack(1, outlines.source, _with_cell_notes(outlines))


def _is_tiff(path: Path) -> bool:
    with open(path, "rb") as handle:
        return handle.read(4) in (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")


def _image_outlines(stack: BeadStack, shape: tuple[int, int], source: str, n_frames: int | None) -> OutlineStack:
    if stack.shape != tuple(shape):
        raise InputError(
            f"the outline image has {stack.shape[1]} x {stack.shape[0]} pixels, the bead image {shape[1]} x {shape[0]}",
            code="outline-shape",
            file=stack.path,
            remedy="draw the outlines on the bead image's own frame",
        )
    if stack.n_channels > 1 or (stack.n_planes > 1 and source == "label image"):
        raise InputError(
            f"it has {stack.n_channels} channels and {stack.n_planes} planes",
            code="outline-format",
            file=stack.path,
            remedy="save one label image, or one per stressed frame with a time axis",
        )
    if stack.n_frames == 1:
        return OutlineStack(1, source, _frame_outlines(stack, 0, shape, source))
    if n_frames is not None and stack.n_frames != n_frames:
        raise InputError(
            f"it has {stack.n_frames} frames and the stressed stack {n_frames}",
            code="outline-frames",
            file=stack.path,
            remedy="give one label image, or one per stressed frame",
        )
    follower = LabelFollower()
    mappings = tuple(follower.step(_labels_or_none(stack, t, shape, source)) for t in range(stack.n_frames))
    if not any(mappings):
        raise InputError(
            "no frame holds a cell",
            code="no-outline",
            file=stack.path,
            remedy="draw the outlines, or name another image of the cells",
        )
    return OutlineStack(stack.n_frames, source, None, stack, (int(shape[0]), int(shape[1])), mappings)


def _labels_or_none(stack: BeadStack, t: int, shape: tuple[int, int], source: str) -> NDArray[np.int32]:
    """Labels of a frame, for following; a frame in which no cell is found says so when it is asked for."""
    try:
        return _frame_outlines(stack, t, shape, source).labels
    except MeasurementError as error:
        if error.code != "no-cell-found":
            raise
        return np.zeros(shape, dtype=np.int32)


def _frame_outlines(stack: BeadStack, t: int, shape: tuple[int, int], source: str) -> Outlines:
    if source == "automatic":
        return _with_cell_notes(segment_cells(stack.frame(t), file=stack.path))
    # In a series the cells may have left before the last frame; a single empty image is a mistake.
    labels = _as_labels(stack.stored(t), stack.path, may_be_empty=stack.n_frames > 1)
    return _with_cell_notes(Outlines(labels, source))


def _as_labels(values: NDArray[Any], file: str, *, may_be_empty: bool) -> NDArray[np.int32]:
    remedy = "save 0 for no cell and 1, 2, 3, ... for the cells"
    if values.dtype.kind == "f" and not (np.isfinite(values).all() and np.array_equal(values, np.round(values))):
        raise InputError(
            "the label image holds numbers that are not whole", code="outline-labels", file=file, remedy=remedy
        )
    low, high = values.min(), values.max()
    if low < 0 or high >= 2**31:
        raise InputError(
            f"the label image holds the number {low if low < 0 else high:g}",
            code="outline-labels",
            file=file,
            remedy=remedy,
        )
    if high == 0 and not may_be_empty:
        raise InputError(
            "the label image is empty: no pixel belongs to a cell", code="no-outline", file=file, remedy=remedy
        )
    present = np.unique(values)
    if values.dtype.kind == "b" or (values.dtype == np.uint8 and present.tolist() in ([0, 255], [255])):
        # A black and white mask says where cells are, not which is which.
        labels, count = ndimage.label(values, structure=np.ones((3, 3)))
        if count > 1:
            raise InputError(
                f"this is a black and white mask with {count} areas, not a label image",
                code="outline-labels",
                file=file,
                remedy="give each cell its own number (in ImageJ: Analyze Particles, show Count Masks)",
            )
        return np.asarray(labels, dtype=np.int32)
    if present.size > 20 and np.count_nonzero(values) < _FEW_PIXELS * (present.size - 1):
        raise MeasurementError(
            f"the label image holds {present.size} numbers: is it a grey image?",
            code="outline-labels",
            file=file,
            remedy="write auto: before the path of a grey image",
        )
    return values.astype(np.int32)


def _with_cell_notes(outlines: Outlines) -> Outlines:
    notes = dict(outlines.cell_notes)
    boxes = ndimage.find_objects(outlines.labels) if outlines.labels.max() < 100_000 else None
    for cell in outlines.cells:
        mask = outlines.labels[boxes[cell - 1]] == cell if boxes is not None else outlines.labels == cell
        sentences = []
        _, pieces = ndimage.label(mask, structure=np.ones((3, 3)))
        area = int(np.count_nonzero(mask))
        if pieces > 1:
            sentences.append(f"the outline is in {pieces} pieces")
        if area < _FEW_PIXELS:
            sentences.append(f"the outline covers only {area} pixels")
        if sentences:
            notes[cell] = (*notes.get(cell, ()), *sentences)
    return replace(outlines, cell_notes=notes)

"""ImageJ regions: a single ``.roi`` or a zip of them, decoded by :mod:`roifile`.

ImageJ measures from the **corner** of pixel (0, 0), this project from its centre: half a pixel is taken off both
coordinates. A rectangle with left 10 and width 5 covers columns 10 to 14 in both.
"""

from __future__ import annotations

import io
import zipfile
from typing import Any

import numpy as np

from tfm.errors import InputError
from tfm.images.guard import guarded
from tfm.images.polygons import Shape, check_ring, ellipse_ring

__all__ = ["read_roi"]

#: Bytes of one region, unpacked. A hand-drawn outline has a few thousand points.
_MAX_ROI = 4 * 1024 * 1024
_MAX_COUNT = 10_000
_AREAS = {0: "polygon", 1: "rectangle", 2: "oval", 7: "freehand", 8: "traced"}
_DECORATIONS = (1, 2, 4)  # text, arrow, image: boxes on the picture that outline nothing
_OTHERS = {3: "line", 4: "freehand line", 5: "segmented line", 6: "no region", 9: "angle", 10: "point"}


def read_roi(data: bytes, *, file: str) -> list[Shape]:
    """Regions of a ``.roi`` file or of a zip of them, in the order of the file, in our frame.

    Raises
    ------
    InputError
        ``roi`` for bytes that are no region, ``not-an-area`` for lines and points, ``several-frames`` when the
        regions belong to different frames, ``too-large``.
    MeasurementError
        ``damaged-file``.
    """
    entries = _unzip(data, file) if data[:4] == b"PK\x03\x04" else [("the region", data)]
    shapes, positions = [], set()
    for name, content in entries:
        if content[:4] != b"Iout":
            raise InputError(
                f"{name} is not an ImageJ region", code="roi", file=file, remedy="save it from ImageJ's ROI Manager"
            )
        with guarded(file, what="region file", logger="roifile"):
            import roifile

            roi = roifile.ImagejRoi.frombytes(content)
            shapes.append(_shape(roi, name, file))
            positions.add((int(roi.position), int(roi.t_position)))
    positions.discard((0, 0))
    if len(positions) > 1:
        raise InputError(
            "the regions belong to different slices or frames",
            code="several-frames",
            file=file,
            remedy="remove their positions in the ROI Manager, or give a label stack",
        )
    return shapes


def _unzip(data: bytes, file: str) -> list[tuple[str, bytes]]:
    with guarded(file, what="zip of regions", logger="roifile"), zipfile.ZipFile(io.BytesIO(data)) as archive:
        members = [
            m for m in archive.infolist() if m.filename.lower().endswith(".roi") and "__MACOSX" not in m.filename
        ]
        if not members:
            raise InputError("the zip holds no .roi", code="roi", file=file, remedy="save it from ImageJ's ROI Manager")
        if len(members) > _MAX_COUNT or any(m.file_size > _MAX_ROI for m in members):
            raise InputError(
                "the zip holds more than outlines",
                code="too-large",
                file=file,
                remedy="keep only the cells' regions in it",
            )
        # read(n) stops at n bytes, whatever the entry unpacks to.
        found: list[tuple[str, bytes]] = []
        for member in members:
            with archive.open(member) as handle:
                found.append((f"region {len(found) + 1} ({member.filename[-60:]})", handle.read(_MAX_ROI)))
        return found


def _shape(roi: Any, name: str, file: str) -> Shape:
    kind = int(roi.roitype)
    if int(roi.subtype) in _DECORATIONS:
        raise InputError(
            f"{name} is a text, arrow or picture, not an area",
            code="not-an-area",
            file=file,
            remedy="keep only the cells' outlines",
        )
    if kind not in _AREAS:
        raise InputError(
            f"{name} is a {_OTHERS.get(kind, 'region of an unknown kind')}, not an area",
            code="not-an-area",
            file=file,
            remedy="outline the cell with the polygon, freehand or wand tool",
        )
    if roi.multi_coordinates is not None and roi.composite:
        rings = [np.asarray(ring, dtype=np.float64).reshape(-1, 2) for ring in roi.coordinates(multi=True)]
        checked = tuple(check_ring(ring - 0.5, name, file) for ring in rings if len(ring) > 2)
        if not checked:
            raise InputError(f"{name} encloses no area", code="bad-polygon", file=file, remedy="draw it again")
        return Shape(name, (checked,), even_odd=True)
    if kind in (1, 2):
        if kind == 1 and int(roi.rounded_rect_arc_size) > 0:
            raise InputError(f"{name} is a rounded rectangle", code="roi", file=file, remedy="draw it as a polygon")
        if roi.subpixelrect:
            left, top, width, height = (float(v) for v in (roi.xd, roi.yd, roi.widthd, roi.heightd))
        else:
            left, top = float(roi.left), float(roi.top)
            width, height = float(roi.right) - left, float(roi.bottom) - top
        if width <= 0 or height <= 0 or not np.isfinite([left, top, width, height]).all():
            raise InputError(f"{name} encloses no area", code="bad-polygon", file=file, remedy="draw it again")
        ring = (
            ellipse_ring(left, top, width, height)
            if kind == 2
            else np.array([[left, top], [left + width, top], [left + width, top + height], [left, top + height]])
        )
    else:
        ring = np.asarray(roi.coordinates(), dtype=np.float64).reshape(-1, 2)
    return Shape(name, ((check_ring(ring - 0.5, name, file),),))

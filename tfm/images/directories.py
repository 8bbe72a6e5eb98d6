"""The chain of image directories of a TIFF, walked with a handful of bytes each before any library trusts it.

TIFF 6.0 (1992), section 2, and its 64-bit form: a header names the first directory, each directory lists tags and names
the next. A damaged file names places outside itself, tags longer than itself, or a directory that was there before, and
a reader that follows goes on for ever or asks for memory that no machine has.
"""

from __future__ import annotations

import os
import struct
from typing import BinaryIO

import numpy as np

from tfm.errors import InputError, MeasurementError

__all__ = ["RESAVE", "check_directories", "is_tiff", "truncated"]

RESAVE = "copy it again from the microscope, or open it in ImageJ and save it as TIFF"
_MAGIC = {b"II*\0": ("<", 4), b"MM\0*": (">", 4), b"II+\0": ("<", 8), b"MM\0+": (">", 8)}
_MAX_DIRECTORIES = 1_000_000
_MAX_TAGS = 4096
#: Tags of this number and above are private: makers fill them as they like.
_PRIVATE = 32768
#: Bytes of one value, by the number of its type (TIFF 6.0, section 2; 16 to 18 are the 64-bit ones).
_TYPE_SIZE = np.array([0, 1, 1, 2, 4, 8, 1, 1, 2, 4, 8, 4, 8, 4, 0, 0, 8, 8, 8], dtype=np.int64)


def is_tiff(start: bytes) -> bool:
    """Whether a file that begins with these four bytes is a TIFF of either byte order and offset size."""
    return start[:4] in _MAGIC


def truncated(path: str, detail: str) -> MeasurementError:
    """The error of a file that ends before what its header promises."""
    return MeasurementError(f"the file is cut short: {detail}", code="truncated-file", file=path, remedy=RESAVE)


def _damaged(path: str, detail: str) -> MeasurementError:
    return MeasurementError(f"the file's structure is damaged: {detail}", code="damaged-file", file=path, remedy=RESAVE)


def check_directories(path: str) -> int:
    """Number of image directories, when the whole chain is sound.

    Raises
    ------
    InputError
        ``not-a-tiff``.
    MeasurementError
        ``truncated-file`` for a place outside the file, ``damaged-file`` for a loop or an impossible tag.
    """
    size = os.path.getsize(path)
    with open(path, "rb") as handle:
        start = handle.read(16)
        if not is_tiff(start):
            raise InputError(
                "this is not a TIFF file",
                code="not-a-tiff",
                file=path,
                remedy="save the image as TIFF (microscopes' own formats need the extra nd2, liffile or czi)",
            )
        order, width = _MAGIC[start[:4]]
        header = 8 if width == 4 else 16
        if len(start) < header:
            raise truncated(path, "its header is incomplete")
        offset = int(struct.unpack(order + ("I" if width == 4 else "Q"), start[header - width : header])[0])
        seen: set[int] = set()
        while offset:
            if offset in seen or len(seen) >= _MAX_DIRECTORIES:
                raise _damaged(path, f"image {len(seen)} is followed by an earlier one")
            seen.add(offset)
            offset = _next_directory(handle, path, offset, size, order, width, len(seen))
    if not seen:
        raise MeasurementError("the file holds no image", code="no-image", file=path, remedy=RESAVE)
    return len(seen)


def _next_directory(handle: BinaryIO, path: str, offset: int, size: int, order: str, width: int, number: int) -> int:
    """Offset of the directory after this one (0 = none), once its tags have been checked."""
    count_size, pointer = (2, "I") if width == 4 else (8, "Q")
    fields = [("tag", "u2"), ("type", "u2"), ("count", f"u{width}"), ("value", f"u{width}")]
    entry = np.dtype([(name, order + code) for name, code in fields])
    if offset + count_size > size:
        raise truncated(path, f"image {number} would begin at byte {offset} of {size}")
    handle.seek(offset)
    tags = int(struct.unpack(order + ("H" if width == 4 else "Q"), handle.read(count_size))[0])
    if not 0 < tags <= _MAX_TAGS:
        raise _damaged(path, f"image {number} lists {tags} tags")
    data = handle.read(tags * entry.itemsize + width)
    if len(data) < tags * entry.itemsize + width:
        raise truncated(path, f"the tags of image {number} end early")
    entries = np.frombuffer(data, dtype=entry, count=tags)
    types = np.where(entries["type"] < _TYPE_SIZE.size, entries["type"], 0).astype(np.int64)
    lengths = _TYPE_SIZE[types].astype(np.float64) * entries["count"].astype(np.float64)
    if lengths.sum() > size + 64.0 * tags:
        worst = int(np.argmax(lengths))
        raise _damaged(
            path, f"tag {entries['tag'][worst]} of image {number} claims {lengths[worst]:.0f} bytes of {size}"
        )
    outside = (lengths > width) & (entries["value"].astype(np.float64) + lengths > size) & (entries["tag"] < _PRIVATE)
    if outside.any():
        raise truncated(path, f"tag {entries['tag'][outside][0]} of image {number} lies beyond its end")
    return int(struct.unpack(order + pointer, data[-width:])[0])

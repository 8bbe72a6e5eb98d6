"""TIFF, OME-TIFF and ImageJ-TIFF: the header becomes a table of planes, and a plane is read when it is asked for.

Before any pixel is read, what the header claims is held against what the file holds: size of a plane, number of planes,
place of every strip and tile. A claim that the file cannot keep is refused here, so no memory is set aside for it.
"""

from __future__ import annotations

import importlib.util
import math
import os
import zlib
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import tifffile
from numpy.typing import NDArray

from tfm.errors import InputError, MeasurementError
from tfm.images import metadata as meta
from tfm.images.claims import MAX_PLANE_PIXELS, check_ome_claims, check_pixel_type, check_plane_size, check_segments
from tfm.images.directories import RESAVE, check_directories, truncated
from tfm.images.guard import guarded, regular_file

__all__ = ["TiffPlanes", "read_tiff_header"]

_DEFLATE = (8, 32946)


@dataclass(frozen=True)
class TiffPlanes:
    """Where the planes of one TIFF lie.

    Attributes
    ----------
    path
        The file.
    axes, sizes
        Leading axes as the file declares them, slowest first, and their lengths; Y and X are not listed.
    shape
        ``(ny, nx)`` of a plane.
    dtype
        Stored type with its byte order.
    offsets
        Byte offset of each plane for uncompressed files; empty for compressed ones.
    pages
        Page number of each plane for compressed files.
    inverted
        True where the file declares that 0 is white.
    """

    path: str
    axes: str
    sizes: tuple[int, ...]
    shape: tuple[int, int]
    dtype: np.dtype[Any]
    offsets: tuple[int, ...]
    pages: tuple[int, ...]
    inverted: bool = False

    def read(self, index: tuple[int, ...]) -> NDArray[Any]:
        """One plane, by its position along the leading axes."""
        flat = int(np.ravel_multi_index(index, self.sizes)) if self.sizes else 0
        plane = self._read_raw(self.offsets[flat]) if self.offsets else self._decode(flat)
        if not self.inverted or plane.dtype.kind == "b":
            return plane
        return np.asarray(np.iinfo(plane.dtype).max - plane if plane.dtype.kind == "u" else -plane)

    def _read_raw(self, offset: int) -> NDArray[Any]:
        count = self.shape[0] * self.shape[1]
        with guarded(regular_file(self.path)), open(self.path, "rb") as handle:
            handle.seek(offset)
            data = np.fromfile(handle, dtype=self.dtype, count=count)
        if data.size < count:
            raise truncated(self.path, "a plane ends early")
        return np.asarray(data, dtype=self.dtype.newbyteorder("=")).reshape(self.shape)

    def _decode(self, flat: int) -> NDArray[Any]:
        per_page = max(1, math.prod(self.sizes) // len(self.pages))
        with guarded(regular_file(self.path)), tifffile.TiffFile(self.path, _multifile=False) as tif:
            # The keyframe answers for all pages; without it the reader would parse the tags of every one on the way.
            page = tif.pages[self.pages[flat // per_page]]
            if not hasattr(page, "chunked"):
                raise MeasurementError("the file has changed since it was opened", code="damaged-file", file=self.path)
            _check_unpacked_size(self.path, page)
            data = np.asarray(page.asarray(maxworkers=1))
        if data.size != per_page * self.shape[0] * self.shape[1]:
            raise MeasurementError(
                "a plane holds another number of pixels than the header says",
                code="damaged-file",
                file=self.path,
                remedy=RESAVE,
            )
        plane: NDArray[Any] = data.reshape(per_page, *self.shape)[flat % per_page]
        return plane


def _check_unpacked_size(path: str, page: Any) -> None:
    """Without imagecodecs a strip is unpacked without bound; one that swells beyond its place in the image is a lie."""
    if int(page.compression) not in _DEFLATE or importlib.util.find_spec("imagecodecs") is not None:
        return
    limit = math.prod(page.chunks) * page.dtype.itemsize
    with open(path, "rb") as handle:
        for offset, count in zip(page.dataoffsets, page.databytecounts, strict=True):
            handle.seek(offset)
            unpacker = zlib.decompressobj()
            unpacker.decompress(handle.read(count), limit)
            if unpacker.unconsumed_tail and unpacker.decompress(unpacker.unconsumed_tail, 1):
                raise MeasurementError(
                    "a strip unpacks to more than its place in the image", code="damaged-file", file=path, remedy=RESAVE
                )


def read_tiff_header(
    path: str | os.PathLike[str], *, labels: bool = False, named: bool = False, max_pixels: int = MAX_PLANE_PIXELS
) -> tuple[TiffPlanes, meta.FileMetadata]:
    """The table of planes and the scale of a TIFF; no pixel is read.

    Parameters
    ----------
    labels
        Allow black-and-white and palette images.
    named
        The caller knows what the planes are, so planes called RGB by a careless writer pass.
    max_pixels
        Largest plane that is read.

    Raises
    ------
    InputError
        Not a TIFF, colour, several images in one file, a codec that is not installed.
    MeasurementError
        Cut short, tiles missing, or claims that the file cannot keep.
    """
    name = str(regular_file(path))
    count = check_directories(name)
    with guarded(name) as log, tifffile.TiffFile(name, _multifile=False) as tif:
        first = tif.pages.first
        check_plane_size(name, first, max_pixels)
        root = meta.parse_ome(str(first.description), file=name) if tif.is_ome else None
        if root is not None:
            check_ome_claims(name, root, pages=count, samples=int(first.samplesperpixel))
        series = _one_series(name, tif, log)
        check_pixel_type(name, series.keyframe, str(series.axes), labels=labels, imagej=tif.is_imagej, named=named)
        check_plane_size(name, series.keyframe, max_pixels)
        return _planes(name, tif, series, max_pixels), _scale(tif, root, series.keyframe)


def _one_series(name: str, tif: Any, log: list[str]) -> Any:
    series = [s for s in tif.series if not s.keyframe.is_reduced]
    kinds = {s.kind for s in series}
    declared = next((f for f in ("ome", "imagej", "shaped") if getattr(tif, f"is_{f}")), "")
    if declared and declared not in kinds:
        # The reader gave up on the declared structure and would go on with whatever pages it finds.
        detail = "; ".join(log).rpartition(">")[2].strip()[-120:] or "planes are missing"
        raise truncated(name, f"the stack that it declares is not there ({detail})")
    if not series:
        raise MeasurementError("the file holds no image", code="no-image", file=name, remedy=RESAVE)
    if len(series) > 1:
        shapes = ", ".join(" x ".join(map(str, s.shape)) for s in series[:4])
        raise InputError(
            f"the file holds {len(series)} images ({shapes})",
            code="several-images",
            file=name,
            remedy="save the image that is meant as its own file",
        )
    return series[0]


def _scale(tif: Any, ome: Any, keyframe: Any) -> meta.FileMetadata:
    """The first source that gives a pixel size; the frame interval may come from another one."""
    first = tif.pages.first
    tags = [first.tags.valueof(code) for code in ("XResolution", "YResolution", "ResolutionUnit")]
    found = []
    if ome is not None:
        found.append(meta.from_ome(ome))
    if tif.is_imagej:
        # ImageJ's resolution tags count in its own unit: read as inches or centimetres they would be wrong.
        found.append(meta.from_imagej(tif.imagej_metadata or {}, tags[0], tags[1]))
    else:
        found.append(meta.from_resolution_tags(*tags))
    best = next((f for f in found if f.pixel_x is not None), meta.FileMetadata())
    bits = next((f.significant_bits for f in found if f.significant_bits is not None), None)
    if bits is None and isinstance(keyframe.bitspersample, int):
        bits = keyframe.bitspersample
    interval = next((f.frame_interval for f in found if f.frame_interval is not None), None)
    return replace(best, frame_interval=interval, significant_bits=bits)


def _planes(name: str, tif: Any, series: Any, max_pixels: int) -> TiffPlanes:
    key, axes, shape = series.keyframe, str(series.axes), tuple(int(n) for n in series.shape)
    if axes[-2:] != "YX" or len(axes) != len(shape):
        raise InputError(
            f"the axes are {axes or 'unnamed'}; the last two must be rows and columns (YX)",
            code="unknown-axes",
            file=name,
            remedy="save the image with plain T, Z and C axes",
        )
    plane, sizes = (shape[-2], shape[-1]), shape[:-2]
    count, size = math.prod(sizes), os.path.getsize(name)
    dtype = np.dtype(key.dtype).newbyteorder(tif.byteorder)
    inverted = int(key.photometric) == 0
    if series.dataoffset is not None and int(key.compression) == 1:
        step = plane[0] * plane[1] * dtype.itemsize
        if series.dataoffset + count * step > size:
            raise truncated(name, f"it claims {count * step} bytes of pixels and has {size}")
        offsets = tuple(int(series.dataoffset) + i * step for i in range(count))
        return TiffPlanes(name, axes[:-2], sizes, plane, dtype, offsets, (), inverted)
    pages = list(series.pages)
    missing = sum(page is None for page in pages)
    if missing or not pages:
        raise MeasurementError(
            f"{missing} of {len(pages)} planes are not in the file", code="missing-planes", file=name, remedy=RESAVE
        )
    if count % len(pages):
        raise MeasurementError(
            f"the header claims {count} planes and the file holds {len(pages)}",
            code="missing-planes",
            file=name,
            remedy=RESAVE,
        )
    largest = max(math.prod(key.shape), math.prod(key.chunks))
    if largest > max_pixels:
        raise MeasurementError(
            f"one page or tile claims {largest} pixels",
            code="too-large",
            file=name,
            remedy="save every plane as a page of its own",
        )
    for page in pages:
        check_segments(name, page, size)
    numbers = tuple(int(page.index) for page in pages)
    return TiffPlanes(name, axes[:-2], sizes, plane, dtype, (), numbers, inverted)

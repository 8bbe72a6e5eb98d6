"""TIFF, OME-TIFF and ImageJ-TIFF: the header becomes a table of planes, and a plane is read when it is asked for.

Before any pixel is read, what the header claims is held against what the file holds: size of a plane, number of planes,
place of every strip and tile. A claim that the file cannot keep is refused here, so no memory is set aside for it.
"""

from __future__ import annotations

import math
import os
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import tifffile
from numpy.typing import NDArray

from tfm.errors import InputError, MeasurementError
from tfm.images import metadata as meta
from tfm.images.guard import guarded, regular_file

__all__ = ["MAX_PLANE_PIXELS", "TiffPlanes", "read_tiff_header"]

#: Pixels of one plane. The largest cameras have 1e8; a plane in float32 then takes 0.5 GB.
MAX_PLANE_PIXELS = 2**27
_RESAVE = "copy it again from the microscope, or open it in ImageJ and save it as TIFF"


@dataclass(frozen=True)
class TiffPlanes:
    """Where the planes of one TIFF lie.

    Attributes
    ----------
    path
        The file.
    axes, sizes
        Leading axes as the file declares them, slowest first, and their lengths; the plane's own Y and X are not listed.
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
        if self.offsets:
            plane = self._read_raw(self.offsets[flat])
        else:
            plane = self._decode(flat)
        if not self.inverted or plane.dtype.kind == "b":
            return plane
        return np.iinfo(plane.dtype).max - plane if plane.dtype.kind == "u" else -plane

    def _read_raw(self, offset: int) -> NDArray[Any]:
        count = self.shape[0] * self.shape[1]
        with guarded(regular_file(self.path)), open(self.path, "rb") as handle:
            handle.seek(offset)
            data = np.fromfile(handle, dtype=self.dtype, count=count)
        if data.size < count:
            raise _truncated(self.path, "a plane ends early")
        return data.astype(self.dtype.newbyteorder("="), copy=False).reshape(self.shape)

    def _decode(self, flat: int) -> NDArray[Any]:
        per_page = max(1, math.prod(self.sizes) // len(self.pages))
        with guarded(regular_file(self.path)), tifffile.TiffFile(self.path, _multifile=False) as tif:
            data = np.asarray(tif.pages[self.pages[flat // per_page]].asarray(maxworkers=1))
        if data.size != per_page * self.shape[0] * self.shape[1]:
            raise MeasurementError("a plane holds another number of pixels than the header says", code="damaged-file",
                                   file=self.path, remedy=_RESAVE)  # fmt: skip
        return data.reshape(per_page, *self.shape)[flat % per_page]


def _truncated(path: str, detail: str) -> MeasurementError:
    return MeasurementError(f"the file is cut short: {detail}", code="truncated-file", file=path, remedy=_RESAVE)


def read_tiff_header(
    path: str | os.PathLike[str], *, labels: bool = False, max_pixels: int = MAX_PLANE_PIXELS
) -> tuple[TiffPlanes, meta.FileMetadata]:
    """The table of planes and the scale of a TIFF; no pixel is read.

    Raises
    ------
    InputError
        Not a TIFF, colour, several images in one file, an axis without a name, a codec that is not installed.
    MeasurementError
        Cut short, tiles missing, or claims that the file cannot keep.
    """
    name = str(regular_file(path))
    with open(name, "rb") as handle:
        start = handle.read(4)
    if start[:2] + start[2:] not in (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+"):
        raise InputError("this is not a TIFF file", code="not-a-tiff", file=name,
                         remedy="save the image as TIFF (microscope formats need the extra nd2, liffile or czi)")  # fmt: skip
    with guarded(name) as log, tifffile.TiffFile(name, _multifile=False) as tif:
        if len(tif.pages) == 0:
            raise MeasurementError("the file holds no image", code="no-image", file=name, remedy=_RESAVE)
        first = tif.pages.first
        _check_plane_size(name, first, max_pixels)
        if tif.is_ome:
            _check_ome_claims(name, tif)
        series = _one_series(name, tif, log)
        scale = _scale(name, tif)
        _check_pixels(name, tif, series.keyframe, str(series.axes), labels)
        return _planes(name, tif, series, max_pixels), scale


def _check_plane_size(name: str, page: Any, max_pixels: int) -> None:
    pixels = int(page.imagewidth) * int(page.imagelength)
    if pixels <= 0 or not page.shape or 0 in page.shape:
        raise MeasurementError(f"the image has no pixels ({page.imagewidth} x {page.imagelength})", code="zero-size",
                               file=name, remedy=_RESAVE)  # fmt: skip
    if pixels > max_pixels:
        raise MeasurementError(
            f"one plane claims {page.imagewidth} x {page.imagelength} pixels; at most {max_pixels} are read",
            code="too-large", file=name, remedy="crop the image to the cell's surroundings")  # fmt: skip


def _check_ome_claims(name: str, tif: Any) -> None:
    """Counts in OME-XML are held against the pages before the reader builds lists of that length."""
    root = meta.parse_ome(str(tif.pages.first.description), file=name)
    pages = len(tif.pages)
    tags = {"Pixels": ("SizeC", "SizeT", "SizeZ"), "TiffData": ("PlaneCount", "NumPlanes", "IFD", "FirstT", "FirstC", "FirstZ")}
    samples = int(tif.pages.first.samplesperpixel)
    images = 0
    for element in root.iter():
        kind = element.tag.rpartition("}")[2]
        images += kind == "Pixels"
        if "Along" in kind:
            raise InputError(f"the OME metadata splits an axis ({kind})", code="ome-metadata", file=name,
                             remedy="save the image with plain T, Z and C axes")  # fmt: skip
        if kind == "UUID" and element.get("FileName", os.path.basename(name)).lower() != os.path.basename(name).lower():
            raise InputError(f"its planes lie in other files ('{element.get('FileName', '')[:80]}')",
                             code="several-files", file=name, remedy="save the stack as one file")  # fmt: skip
        values = [_whole(name, key, element.get(key)) for key in tags.get(kind, ()) if element.get(key) is not None]
        claim = math.prod(values) if kind == "Pixels" else max(values, default=0)
        if claim > pages * samples:
            raise MeasurementError(f"the OME metadata claims {claim} planes and the file holds {pages}",
                                   code="missing-planes", file=name, remedy=_RESAVE)  # fmt: skip
    if images > 1:
        raise InputError(f"the file holds {images} images (positions)", code="several-images", file=name,
                         remedy="save each position as its own file")  # fmt: skip


def _whole(name: str, key: str, text: str | None) -> int:
    if text is None or not text.strip().isdigit() or len(text) > 18:
        raise MeasurementError(f"the OME metadata says {key}='{str(text)[:40]}'", code="ome-metadata", file=name, remedy=_RESAVE)
    return int(text)


def _one_series(name: str, tif: Any, log: list[str]) -> Any:
    series = [s for s in tif.series if not s.keyframe.is_reduced]
    kinds = {s.kind for s in series}
    for flavour, claimed in (("ome", tif.is_ome), ("imagej", tif.is_imagej), ("shaped", tif.is_shaped)):
        if claimed:
            if flavour not in kinds:
                # The reader gave up on the declared structure and would go on with whatever pages it finds.
                raise _truncated(name, f"the declared stack does not fit the data ({'; '.join(log)[-160:] or 'no detail'})")
            break
    if not series:
        raise MeasurementError("the file holds no image", code="no-image", file=name, remedy=_RESAVE)
    if len(series) > 1:
        shapes = ", ".join(" x ".join(map(str, s.shape)) for s in series[:4])
        raise InputError(f"the file holds {len(series)} images ({shapes})", code="several-images", file=name,
                         remedy="save the image that is meant as its own file")  # fmt: skip
    return series[0]


def _scale(name: str, tif: Any) -> meta.FileMetadata:
    """The first source that gives a pixel size; the frame interval may come from another one."""
    first = tif.pages.first
    tags = [first.tags.valueof(code) for code in ("XResolution", "YResolution", "ResolutionUnit")]
    found = []
    if tif.is_ome:
        found.append(meta.from_ome(meta.parse_ome(str(first.description), file=name)))
    if tif.is_imagej:
        found.append(meta.from_imagej(tif.imagej_metadata or {}, tags[0], tags[1]))
    if not tif.is_imagej:
        found.append(meta.from_resolution_tags(*tags))
    best = next((f for f in found if f.pixel_x is not None), meta.FileMetadata())
    return replace(
        best,
        frame_interval=next((f.frame_interval for f in found if f.frame_interval is not None), None),
        significant_bits=next((f.significant_bits for f in found if f.significant_bits is not None), None),
    )


def _planes(name: str, tif: Any, series: Any, max_pixels: int) -> TiffPlanes:
    key, axes, shape = series.keyframe, str(series.axes), tuple(int(n) for n in series.shape)
    _check_plane_size(name, key, max_pixels)
    if axes[-2:] != "YX" or len(axes) != len(shape):
        raise InputError(f"the axes are {axes or 'unnamed'}; the last two must be rows and columns (YX)",
                         code="unknown-axes", file=name, remedy="save the image with plain T, Z and C axes")  # fmt: skip
    plane = (shape[-2], shape[-1])
    sizes = shape[:-2]
    count = math.prod(sizes)
    pages = list(series.pages)
    stored = len(pages)
    if any(page is None for page in pages):
        missing = sum(page is None for page in pages)
        raise MeasurementError(f"{missing} of {stored} planes are not in the file", code="missing-planes", file=name, remedy=_RESAVE)
    dtype = np.dtype(f"{tif.byteorder}{key.dtype.char}" if key.dtype.itemsize > 1 else key.dtype)
    size = os.path.getsize(name)
    bytes_per_plane = plane[0] * plane[1] * dtype.itemsize
    if series.dataoffset is not None and key.compression == 1:
        if series.dataoffset + count * bytes_per_plane > size:
            raise _truncated(name, f"it claims {count * bytes_per_plane} bytes of pixels and has {size}")
        offsets = tuple(series.dataoffset + i * bytes_per_plane for i in range(count))
        return TiffPlanes(name, axes[:-2], sizes, plane, dtype, offsets, (), key.photometric == 0)
    if stored == 0 or count % stored:
        raise MeasurementError(f"the header claims {count} planes and the file holds {stored}", code="missing-planes",
                               file=name, remedy=_RESAVE)  # fmt: skip
    if key.nbytes > max_pixels * 8:
        raise MeasurementError(f"one page claims {key.nbytes} bytes", code="too-large", file=name, remedy="save planes as pages")
    for page in pages:
        _check_segments(name, page, size)
    return TiffPlanes(name, axes[:-2], sizes, plane, dtype, (), tuple(int(page.index) for page in pages), key.photometric == 0)


def _check_pixels(name: str, tif: Any, key: Any, axes: str, labels: bool) -> None:
    if axes.endswith("S") or key.photometric in (2, 5, 6, 8, 9, 10):
        raise InputError("this is a colour image", code="colour-image", file=name,
                         remedy="save the channel with the beads alone, as grey values")  # fmt: skip
    if key.photometric == 3 and not tif.is_imagej and not labels:
        raise InputError("this is an image with a colour palette", code="colour-image", file=name,
                         remedy="save the channel with the beads alone, as grey values")  # fmt: skip
    if key.dtype is None or key.dtype.kind not in ("uifb" if labels else "uif"):
        kind = "black and white" if key.dtype is not None and key.dtype.kind == "b" else f"of type {key.dtype}"
        raise InputError(f"the pixels are {kind}, not numbers", code="pixel-type", file=name,
                         remedy="save it as 8-bit, 16-bit or float grey values")  # fmt: skip
    try:
        tifffile.TIFF.DECOMPRESSORS[key.compression]
        tifffile.TIFF.UNPREDICTORS[key.predictor]
    except KeyError as error:
        method = getattr(key.compression, "name", str(key.compression))
        raise InputError(f"it is compressed by {method}, which needs another package", code="missing-codec", file=name,
                         remedy="install the extra: pip install 'tugtensor[codecs]'") from error  # fmt: skip


def _check_segments(name: str, page: Any, size: int) -> None:
    """Every strip or tile lies inside the file. An absent one would be read as zeros: numbers that nobody measured."""
    offsets, counts = page.dataoffsets, page.databytecounts
    expected = math.prod(page.chunked) if page.chunked else 0
    if len(offsets) != len(counts) or len(offsets) < expected or not expected:
        raise MeasurementError(f"the header lists {len(offsets)} of {expected} tiles or strips", code="missing-tiles",
                               file=name, remedy=_RESAVE)  # fmt: skip
    if any(count <= 0 or offset <= 0 for offset, count in zip(offsets, counts, strict=True)):
        raise MeasurementError("tiles or strips are missing", code="missing-tiles", file=name, remedy=_RESAVE)
    if any(offset + count > size for offset, count in zip(offsets, counts, strict=True)):
        raise _truncated(name, "tiles or strips lie beyond its end")

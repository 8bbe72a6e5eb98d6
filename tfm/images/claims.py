"""What a TIFF's header claims, held against what can be true, before memory is set aside for it."""

from __future__ import annotations

import math
import os
from typing import Any
from xml.etree.ElementTree import Element

import tifffile

from tfm.errors import InputError, MeasurementError
from tfm.images.directories import RESAVE, truncated

__all__ = ["MAX_PLANE_PIXELS", "check_ome_claims", "check_pixel_type", "check_plane_size", "check_segments"]

#: Pixels of one plane. The largest cameras have 1e8; a plane in float32 then takes 0.5 GB.
MAX_PLANE_PIXELS = 2**27
_GREY = "save the channel with the beads alone, as grey values"
#: PhotometricInterpretation (TIFF 6.0).
_RGB, _PALETTE = 2, 3
_OTHER_COLOUR = (5, 6, 8, 9, 10)  # CMYK, YCbCr, CIELab, ICCLab, ITULab
_COUNTS = {
    "Pixels": ("SizeC", "SizeT", "SizeZ"),
    "TiffData": ("PlaneCount", "NumPlanes", "IFD", "FirstT", "FirstC", "FirstZ"),
}


def check_plane_size(name: str, page: Any, max_pixels: int) -> None:
    """``zero-size`` or ``too-large`` for a plane of impossible size."""
    width, length = int(page.imagewidth), int(page.imagelength)
    if width <= 0 or length <= 0 or not page.shape or 0 in page.shape:
        raise MeasurementError(
            f"the image has no pixels ({width} x {length})", code="zero-size", file=name, remedy=RESAVE
        )
    if width * length > max_pixels:
        raise MeasurementError(
            f"one plane claims {width} x {length} pixels; at most {max_pixels} are read",
            code="too-large",
            file=name,
            remedy="crop the image to the cell's surroundings",
        )


def check_ome_claims(name: str, root: Element, *, pages: int, samples: int) -> None:
    """Counts in OME-XML are held against the pages before a reader builds lists of that length.

    Raises
    ------
    InputError
        ``several-images`` (positions), ``several-files``, ``ome-metadata`` for split axes.
    MeasurementError
        ``missing-planes``, ``ome-metadata`` for counts that are no numbers.
    """
    images, own = 0, os.path.basename(name).lower()
    for element in root.iter():
        kind = element.tag.rpartition("}")[2] if isinstance(element.tag, str) else ""
        images += kind == "Pixels"
        if kind.startswith("ModuloAlong"):
            raise InputError(
                f"the OME metadata splits an axis ({kind})",
                code="ome-metadata",
                file=name,
                remedy="save the image with plain T, Z and C axes",
            )
        # A renamed file still carries its own identifier; only another file's planes are out of reach.
        is_own = element.text == root.get("UUID") if root.get("UUID") else element.get("FileName", own).lower() == own
        if kind == "BinaryOnly" or (kind == "UUID" and not is_own):
            other = element.get("FileName") or element.get("MetadataFile") or "another file"
            raise InputError(
                f"it is a part of several files ('{other[:80]}')",
                code="several-files",
                file=name,
                remedy="save the stack as one file; if it was one and was renamed, give it that name back",
            )
        values = [_whole(name, key, text) for key in _COUNTS.get(kind, ()) if (text := element.get(key)) is not None]
        claim = math.prod(values) if kind == "Pixels" else max(values, default=0)
        if claim > pages * samples:
            raise MeasurementError(
                f"the OME metadata claims {claim} planes and the file holds {pages}",
                code="missing-planes",
                file=name,
                remedy=RESAVE,
            )
    if images > 1:
        raise InputError(
            f"the file holds {images} images (positions)",
            code="several-images",
            file=name,
            remedy="save each position as its own file",
        )


def _whole(name: str, key: str, text: str) -> int:
    if not (text.isascii() and text.isdigit() and len(text) <= 18):
        raise MeasurementError(
            f"the OME metadata says {key}='{text[:40]}'", code="ome-metadata", file=name, remedy=RESAVE
        )
    return int(text)


def check_pixel_type(name: str, key: Any, axes: str, *, labels: bool, imagej: bool, named: bool) -> None:
    """Grey numbers only: ``colour-image``, ``pixel-type``, or ``missing-codec`` where they cannot be unpacked.

    ImageJ stores an 8-bit image with a look-up table as a palette image; its numbers are the measured ones. Writers
    that know no better call a stack of three planes RGB: it passes where the file or the caller (``named``) says what
    the planes are.
    """
    called_colour = int(key.photometric) == _RGB and "S" in axes and not named
    if axes.endswith("S") or called_colour or int(key.photometric) in _OTHER_COLOUR:
        raise InputError("this is a colour image", code="colour-image", file=name, remedy=_GREY)
    if int(key.photometric) == _PALETTE and not imagej and not labels:
        raise InputError("this is an image with a colour palette", code="colour-image", file=name, remedy=_GREY)
    kind = None if key.dtype is None else key.dtype.kind
    if kind not in ("u", "i", "f") and not (labels and kind == "b"):
        what = "black and white" if kind == "b" else f"of type {key.dtype}"
        raise InputError(
            f"the pixels are {what}, not grey values",
            code="pixel-type",
            file=name,
            remedy="save it as 8-bit, 16-bit or float grey values",
        )
    try:
        tifffile.TIFF.DECOMPRESSORS[key.compression]
        tifffile.TIFF.UNPREDICTORS[key.predictor]
    except KeyError as error:
        method = getattr(key.compression, "name", str(key.compression))
        raise InputError(
            f"it is compressed by {method}, which needs another package",
            code="missing-codec",
            file=name,
            remedy="install the extra: pip install 'tugtensor[codecs]', or save it uncompressed",
        ) from error


def check_segments(name: str, page: Any, size: int) -> None:
    """Every strip or tile lies inside the file. An absent one would be read as zeros: numbers that nobody measured."""
    offsets, counts = page.dataoffsets, page.databytecounts
    expected = math.prod(page.chunked) if page.chunked else 0
    if len(offsets) != len(counts) or len(offsets) < expected or not expected:
        raise MeasurementError(
            f"the header lists {len(offsets)} of {expected} tiles or strips",
            code="missing-tiles",
            file=name,
            remedy=RESAVE,
        )
    if any(count <= 0 or offset <= 0 for offset, count in zip(offsets, counts, strict=True)):
        raise MeasurementError("tiles or strips are missing", code="missing-tiles", file=name, remedy=RESAVE)
    if any(offset + count > size for offset, count in zip(offsets, counts, strict=True)):
        raise truncated(name, "tiles or strips lie beyond its end")
    # Rows of samples that are no whole bytes (12-bit cameras) are padded to a byte.
    bits = page.keyframe.bitspersample if isinstance(page.keyframe.bitspersample, int) else 0
    needed = math.prod(page.shape[:-1]) * math.ceil(page.shape[-1] * bits / 8)
    if int(page.compression) == 1 and sum(counts) < needed:
        raise truncated(name, f"its strips hold {sum(counts)} bytes of {needed}")

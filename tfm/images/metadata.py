"""Pixel size and frame interval from the metadata that microscopes and ImageJ write into a TIFF.

The order is fixed: OME-XML, then ImageJ's unit with ``XResolution``, then the TIFF resolution tags. Every number is
checked before it is believed: a file that says ``1.0`` of nothing, or that carries a printer's 72 dots per inch, has no
pixel size, and the cell sheet has to give it.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any
from xml.etree import ElementTree

from tfm.errors import InputError
from tfm.units import normalise_unit

__all__ = ["FileMetadata", "from_imagej", "from_ome", "from_resolution_tags", "length_in_m", "time_in_s"]

# Only the units that microscopes write; a table is safer here than a parser that also knows 'light-year' and 'in_Hg'.
_LENGTHS = {
    "pm": 1e-12,
    "angstrom": 1e-10,
    "å": 1e-10,
    "nm": 1e-9,
    "um": 1e-6,
    "mm": 1e-3,
    "cm": 1e-2,
    "m": 1.0,
    "in": 0.0254,
    "inch": 0.0254,
    "inches": 0.0254,
    "nanometer": 1e-9,
    "nanometers": 1e-9,
    "nanometre": 1e-9,
    "millimeter": 1e-3,
    "millimetre": 1e-3,
    "mil": 2.54e-5,
    "thou": 2.54e-5,
}
_TIMES = {
    "ns": 1e-9,
    "us": 1e-6,
    "ms": 1e-3,
    "msec": 1e-3,
    "s": 1.0,
    "sec": 1.0,
    "secs": 1.0,
    "second": 1.0,
    "seconds": 1.0,
    "min": 60.0,
    "mins": 60.0,
    "minute": 60.0,
    "minutes": 60.0,
    "h": 3600.0,
    "hr": 3600.0,
    "hour": 3600.0,
    "hours": 3600.0,
    "d": 86400.0,
}
#: m. Light does not resolve pixels smaller than this, and beads cannot be seen in larger ones: outside, the number
#: describes a printed page or nothing at all.
PLAUSIBLE_PIXEL = (1e-9, 2e-5)


@dataclass(frozen=True)
class FileMetadata:
    """What a file says about its own scale.

    Attributes
    ----------
    pixel_x, pixel_y
        m per pixel along x and y, or None.
    frame_interval
        s, or None.
    significant_bits
        Bits that the camera used, where the file says so (12-bit cameras saturate at 4095, not at 65535).
    origin
        ``OME``, ``ImageJ``, ``resolution tags`` or empty.
    """

    pixel_x: float | None = None
    pixel_y: float | None = None
    frame_interval: float | None = None
    significant_bits: int | None = None
    origin: str = ""


def _finite_positive(value: Any) -> float | None:
    try:
        number = float(value)
    except (TypeError, ValueError, OverflowError):
        return None
    return number if math.isfinite(number) and number > 0 else None


def _unescape(unit: str) -> str:
    # ImageJ writes the micro sign as the six characters \u00B5.
    return re.sub(r"\\u([0-9a-fA-F]{4})", lambda match: chr(int(match.group(1), 16)), unit)


def length_in_m(value: Any, unit: Any) -> float | None:
    """A length in m, or None where the unit is no unit of length or the number is not a positive finite one.

    Examples
    --------
    >>> length_in_m("0.5", "\\u00b5m"), length_in_m(0.5, "micron"), length_in_m(1.0, "pixel")
    (5e-07, 5e-07, None)
    """
    number = _finite_positive(value)
    if number is None or not isinstance(unit, str):
        return None
    factor = _LENGTHS.get(normalise_unit(_unescape(unit)).strip().lower())
    if factor is None:
        return None
    result = float(f"{number * factor:.15g}")
    return result if math.isfinite(result) and result > 0 else None


def time_in_s(value: Any, unit: Any) -> float | None:
    """A duration in s, or None.

    Examples
    --------
    >>> time_in_s(2, "min"), time_in_s(0, "s"), time_in_s(5, "furlong")
    (120.0, None, None)
    """
    number = _finite_positive(value)
    if number is None or not isinstance(unit, str):
        return None
    factor = _TIMES.get(normalise_unit(_unescape(unit)).strip().lower())
    return None if factor is None else float(f"{number * factor:.15g}")


def _plausible(size: float | None) -> float | None:
    if size is None or not PLAUSIBLE_PIXEL[0] <= size <= PLAUSIBLE_PIXEL[1]:
        return None
    return size


def _name(element: ElementTree.Element) -> str:
    return element.tag.rpartition("}")[2] if isinstance(element.tag, str) else ""


def parse_ome(xml: str, *, file: str = "") -> ElementTree.Element:
    """The OME-XML tree; entity definitions are refused, because they can be made to expand without end.

    Raises
    ------
    InputError
        ``ome-metadata`` for text that is no XML or defines entities.
    """
    if "<!DOCTYPE" in xml or "<!ENTITY" in xml:
        raise InputError(
            "the OME metadata defines entities",
            code="ome-metadata",
            file=file,
            remedy="save the image again from the microscope's software or from ImageJ",
        )
    try:
        return ElementTree.fromstring(xml.encode("utf-8", "replace"))
    except (ElementTree.ParseError, ValueError, LookupError) as error:
        raise InputError(
            f"the OME metadata is damaged ({error})",
            code="ome-metadata",
            file=file,
            remedy="save the image again from the microscope's software or from ImageJ",
        ) from error


def from_ome(root: ElementTree.Element) -> FileMetadata:
    """Scale from an OME-XML tree (first ``Pixels`` element).

    The OME schema (2016-06) makes um the default unit of ``PhysicalSizeX`` and s that of ``TimeIncrement``. Without
    ``TimeIncrement``, evenly spaced ``DeltaT`` of the planes give the interval.

    Examples
    --------
    >>> pixels = '<Pixels PhysicalSizeX="200" PhysicalSizeXUnit="nm"/>'
    >>> from_ome(ElementTree.fromstring(f"<OME><Image>{pixels}</Image></OME>")).pixel_x
    2e-07
    """
    pixels = next((e for e in root.iter() if _name(e) == "Pixels"), None)
    if pixels is None:
        return FileMetadata()
    sizes = []
    for axis in "XY":
        value, unit = pixels.get(f"PhysicalSize{axis}"), pixels.get(f"PhysicalSize{axis}Unit")
        # 1.0 without a unit is what software writes that never knew the pixel size.
        unknown = unit is None and _finite_positive(value) == 1.0
        sizes.append(None if unknown else _plausible(length_in_m(value, unit or "um")))
    bits = pixels.get("SignificantBits", "")
    return FileMetadata(
        pixel_x=sizes[0],
        pixel_y=sizes[1] if sizes[1] is not None else sizes[0],
        frame_interval=time_in_s(pixels.get("TimeIncrement"), pixels.get("TimeIncrementUnit", "s")) or _delta_t(pixels),
        significant_bits=int(bits) if bits.isascii() and bits.isdigit() and 1 <= int(bits[:4]) <= 32 else None,
        origin="OME" if sizes[0] is not None else "",
    )


def _delta_t(pixels: ElementTree.Element) -> float | None:
    times: dict[int, float] = {}
    for plane in pixels.iter():
        if _name(plane) != "Plane" or plane.get("TheZ", "0") != "0" or plane.get("TheC", "0") != "0":
            continue
        frame, delta, unit = plane.get("TheT", ""), plane.get("DeltaT"), plane.get("DeltaTUnit", "s")
        scale = time_in_s(1, unit)
        try:
            if delta is not None and scale is not None:
                times[int(frame)] = float(delta) * scale
        except ValueError:
            return None
    if len(times) < 2 or sorted(times) != list(range(len(times))):
        return None
    steps = [times[i + 1] - times[i] for i in range(len(times) - 1)]
    mean = sum(steps) / len(steps)
    # Uneven frames have no interval; a tenth of a step is the jitter of an ordinary stage.
    if not math.isfinite(mean) or mean <= 0 or max(abs(step - mean) for step in steps) > 0.1 * mean:
        return None
    return float(f"{mean:.6g}")


def _ratio(value: Any) -> float | None:
    """Pixels per unit from a TIFF rational."""
    try:
        numerator, denominator = value
        return _finite_positive(numerator / denominator)
    except (TypeError, ValueError, ZeroDivisionError, OverflowError):
        return None


def _sizes(x_resolution: Any, y_resolution: Any, unit: Any) -> list[float | None]:
    ratios = (_ratio(x_resolution), _ratio(y_resolution))
    return [None if ratio is None else _plausible(length_in_m(1.0 / ratio, unit)) for ratio in ratios]


def from_imagej(metadata: Mapping[str, Any], x_resolution: Any, y_resolution: Any) -> FileMetadata:
    """Scale from ImageJ's description: ``unit`` (pixels per unit are in the resolution tags), ``finterval``, ``tunit``.

    Examples
    --------
    >>> from_imagej({"unit": "micron", "finterval": 30.0}, (5, 1), (5, 1)).pixel_x
    2e-07
    """
    unit = metadata.get("unit")
    sizes = _sizes(x_resolution, y_resolution, unit)
    interval = time_in_s(metadata.get("finterval"), metadata.get("tunit", "s"))
    if interval is None and (rate := _finite_positive(metadata.get("fps"))) is not None:
        interval = float(f"{1.0 / rate:.15g}")
    return FileMetadata(
        pixel_x=sizes[0],
        pixel_y=sizes[1] if sizes[1] is not None else sizes[0],
        frame_interval=interval,
        origin="ImageJ" if sizes[0] is not None else "",
    )


def from_resolution_tags(x_resolution: Any, y_resolution: Any, unit: Any) -> FileMetadata:
    """Scale from ``XResolution``, ``YResolution`` and ``ResolutionUnit`` (TIFF 6.0: 1 none, 2 inch, 3 centimetre).

    72 dots per inch is a setting for print: it would make a pixel of 353 um, and is taken for no pixel size.

    Examples
    --------
    >>> from_resolution_tags((50000, 1), (50000, 1), 3).pixel_x, from_resolution_tags((72, 1), (72, 1), 2).pixel_x
    (2e-07, None)
    """
    try:
        name = {2: "inch", 3: "cm", 4: "mm", 5: "um"}.get(int(unit))
    except (TypeError, ValueError):
        name = None
    sizes = _sizes(x_resolution, y_resolution, name)
    return FileMetadata(
        pixel_x=sizes[0],
        pixel_y=sizes[1] if sizes[1] is not None else sizes[0],
        origin="resolution tags" if sizes[0] is not None else "",
    )

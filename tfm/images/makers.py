"""Thin readers for microscopes' own formats, each behind the extra that brings its library.

``.nd2`` through :mod:`nd2`, ``.lif`` through :mod:`liffile`, ``.czi`` through :mod:`czifile`. A file must hold one
image; positions, tiles and colour are refused. Nothing is read but the header until a plane is asked for.
"""

from __future__ import annotations

import importlib
import math
import os
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import numpy as np
from numpy.typing import NDArray

from tfm.errors import InputError, MeasurementError
from tfm.images.claims import MAX_PLANE_PIXELS
from tfm.images.guard import guarded, regular_file
from tfm.images.metadata import FileMetadata, length_in_m, parse_ome, time_in_s

__all__ = ["MakerPlanes", "maker_of", "read_maker_header"]

#: Suffix -> (module, extra).
_MAKERS = {".nd2": ("nd2", "nd2"), ".lif": ("liffile", "liffile"), ".czi": ("czifile", "czi")}


def maker_of(path: str | os.PathLike[str]) -> str:
    """The suffix when it is that of a format read here, else an empty text."""
    suffix = Path(os.fspath(path)).suffix.lower()
    return suffix if suffix in _MAKERS else ""


@dataclass(frozen=True)
class MakerPlanes:
    """Planes of one such file; the attributes are those of :class:`~tfm.images.tiff.TiffPlanes`."""

    path: str
    axes: str
    sizes: tuple[int, ...]
    shape: tuple[int, int]
    dtype: np.dtype[Any]

    def read(self, index: tuple[int, ...]) -> NDArray[Any]:
        """One plane, by its position along the leading axes."""
        module = _library(self.path)
        with guarded(regular_file(self.path), logger=module.__name__):
            position = dict(zip(self.axes, index, strict=True))
            plane = np.asarray(_READ[maker_of(self.path)](module, self.path, position))
        if plane.size != self.shape[0] * self.shape[1]:
            raise MeasurementError(
                "a plane holds another number of pixels than the header says",
                code="damaged-file",
                file=self.path,
                remedy="export the stack as OME-TIFF from the microscope's software",
            )
        return plane.reshape(self.shape)


def _library(path: str) -> Any:
    name, extra = _MAKERS[maker_of(path)]
    try:
        return importlib.import_module(name)
    except ImportError as error:
        raise InputError(
            f"reading {maker_of(path)} files needs the package {name}",
            code="missing-extra",
            file=path,
            remedy=f"install the extra: pip install 'tugtensor[{extra}]', or export the stack as OME-TIFF",
        ) from error


def read_maker_header(path: str | os.PathLike[str]) -> tuple[MakerPlanes, FileMetadata]:
    """Planes and scale of a microscope's own file.

    Raises
    ------
    InputError
        ``missing-extra``, ``several-images``, ``colour-image``, ``pixel-type``.
    MeasurementError
        ``damaged-file``, ``too-large``, ``missing-planes``.
    """
    name = str(regular_file(path))
    module = _library(name)
    with guarded(name, logger=module.__name__):
        sizes, dtype, scale = _HEADER[maker_of(name)](module, name)
    if any(axis in sizes for axis in "S0") or np.dtype(dtype).kind not in "uif":
        raise InputError(
            "this is a colour image", code="colour-image", file=name, remedy="export the channel with the beads alone"
        )
    others = {axis: n for axis, n in sizes.items() if axis not in "TZCYX" and n > 1}
    if others:
        raise InputError(
            f"the file holds several images ({', '.join(f'{axis}: {n}' for axis, n in others.items())})",
            code="several-images",
            file=name,
            remedy="export each position as its own file",
        )
    shape = (int(sizes.get("Y", 0)), int(sizes.get("X", 0)))
    if not 0 < math.prod(shape) <= MAX_PLANE_PIXELS:
        raise MeasurementError(
            f"one plane claims {shape[1]} x {shape[0]} pixels",
            code="too-large" if math.prod(shape) else "zero-size",
            file=name,
            remedy="crop the image to the cell's surroundings",
        )
    leading = {axis: int(n) for axis, n in sizes.items() if axis in "TZC"}
    return MakerPlanes(name, "".join(leading), tuple(leading.values()), shape, np.dtype(dtype)), scale


Header = tuple[Mapping[str, int], Any, FileMetadata]


def _scale(x: float | None, y: float | None, interval: float | None, bits: int | None, origin: str) -> FileMetadata:
    return FileMetadata(x, y if y is not None else x, interval, bits, origin if x is not None else "")


def _nd2_header(nd2: Any, path: str) -> Header:
    with nd2.ND2File(path) as file:
        voxel = file.voxel_size()
        period = next((loop.parameters.periodMs for loop in file.experiment if loop.type == "TimeLoop"), None)
        bits = int(file.attributes.bitsPerComponentSignificant)
        x, y = length_in_m(voxel.x, "um"), length_in_m(voxel.y, "um")
        return dict(file.sizes), file.dtype, _scale(x, y, time_in_s(period, "ms"), bits, "ND2")


def _nd2_plane(nd2: Any, path: str, position: Mapping[str, int]) -> Any:
    with nd2.ND2File(path) as file:
        wanted = {axis: n for axis, n in position.items() if axis != "C"}
        matching = (
            i for i, loop in enumerate(file.loop_indices) if all(loop.get(a, 0) == n for a, n in wanted.items())
        )
        frame = np.asarray(file.read_frame(next(matching)))
        return frame[position["C"]] if "C" in position else frame


def _lif_image(file: Any, path: str) -> Any:
    images = [image for image in file.images if {"Y", "X"} <= set(image.sizes)]
    if len(images) != 1:
        raise InputError(
            f"the file holds {len(images)} images ({', '.join(str(i.name) for i in images[:4])})",
            code="several-images",
            file=path,
            remedy="export the image that is meant as OME-TIFF",
        )
    return images[0]


def _lif_header(liffile: Any, path: str) -> Header:
    with liffile.LifFile(path) as file:
        image = _lif_image(file, path)
        step = {axis: float(c[1] - c[0]) for axis, c in image.coords.items() if len(c) > 1}
        x, y = length_in_m(step.get("X"), "m"), length_in_m(step.get("Y"), "m")
        return dict(image.sizes), image.dtype, _scale(x, y, time_in_s(step.get("T"), "s"), None, "LIF")


def _lif_plane(liffile: Any, path: str, position: Mapping[str, int]) -> Any:
    with liffile.LifFile(path) as file:
        return _lif_image(file, path).frame(**position)


def _czi_entries(file: Any) -> list[Any]:
    """Sub-blocks at full size; smaller copies for display are left out."""
    return [entry for entry in file.subblock_directory if entry.shape == entry.stored_shape and not entry.pyramid_type]


def _czi_header(czifile: Any, path: str) -> Header:
    with czifile.CziFile(path, multifile=False) as file:
        entries = _czi_entries(file)
        if len({entry.mosaic_index for entry in entries}) > 1:
            raise InputError(
                "the image is a mosaic of tiles", code="several-images", file=path, remedy="export one tile as OME-TIFF"
            )
        sizes: dict[str, int] = {}
        for entry in entries:
            for axis, start, n in zip(entry.axes, entry.start, entry.shape, strict=True):
                sizes[axis] = max(sizes.get(axis, 0), int(start + n) if axis not in "YX" else int(n))
        if sizes.pop("0", 1) > 1:
            sizes["S"] = 3
        sizes = {axis: n for axis, n in sizes.items() if axis in "YX" or n > 1}
        root = parse_ome(str(file.metadata(raw=True) or "<a/>"), file=path)
        return sizes, file.dtype, _czi_scale(root)


def _czi_scale(root: ElementTree.Element) -> FileMetadata:
    def metres(axis: str) -> float | None:
        return length_in_m(root.findtext(f".//Scaling/Items/Distance[@Id='{axis}']/Value"), "m")

    interval = time_in_s(root.findtext(".//Dimensions/T/Positions/Interval/Increment"), "s")
    bits = root.findtext(".//Information/Image/ComponentBitCount", "")
    return _scale(metres("X"), metres("Y"), interval, int(bits) if bits.isdigit() and int(bits) else None, "CZI")


def _czi_plane(czifile: Any, path: str, position: Mapping[str, int]) -> Any:
    with czifile.CziFile(path, multifile=False) as file:
        for entry in _czi_entries(file):
            start = dict(zip(entry.axes, entry.start, strict=True))
            if all(start.get(axis, 0) == n for axis, n in position.items()):
                return entry.data_segment().data()
    raise MeasurementError(
        f"the plane at {dict(position)} is not in the file",
        code="missing-planes",
        file=path,
        remedy="export the stack as OME-TIFF from the microscope's software",
    )


_HEADER: dict[str, Callable[[Any, str], Header]] = {".nd2": _nd2_header, ".lif": _lif_header, ".czi": _czi_header}
_READ: dict[str, Callable[[Any, str, Mapping[str, int]], Any]] = {
    ".nd2": _nd2_plane,
    ".lif": _lif_plane,
    ".czi": _czi_plane,
}

"""Bead stacks: one 2-D plane at a time, whatever order of time, planes and channels the file declares."""

from __future__ import annotations

import math
import os
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from tfm.errors import InputError, MeasurementError
from tfm.images import metadata as meta
from tfm.images.makers import maker_of, read_maker_header
from tfm.images.tiff import read_tiff_header

__all__ = ["BeadStack", "focus_measure", "matching_shape", "open_frames", "resolve_pixel_size"]

#: Relative difference of two statements of the pixel size that rounding explains.
_SAME_PIXEL = 0.01
#: Relative difference of x and y pixel size that rounding explains; beyond it a length would depend on its direction.
_SQUARE = 0.005


class PlaneSource(Protocol):
    """Anything that can return one stored plane by its position along the leading axes."""

    @property
    def axes(self) -> str: ...
    @property
    def sizes(self) -> tuple[int, ...]: ...
    @property
    def shape(self) -> tuple[int, int]: ...
    @property
    def dtype(self) -> np.dtype[Any]: ...
    def read(self, index: tuple[int, ...]) -> NDArray[Any]: ...


@dataclass(frozen=True)
class BeadStack:
    """An image file, opened: its header is known, its pixels are read when asked for.

    Attributes
    ----------
    path
        The file.
    axes
        Leading axes in the order of the file (letters of ``TZC``), then ``YX``.
    n_frames, n_planes, n_channels
        Lengths along T, Z and C; 1 where the axis is absent.
    shape
        ``(ny, nx)`` pixels.
    dtype
        Name of the stored type, for instance ``uint16``.
    pixel_size
        m along x as the file says, or None.
    pixel_size_y
        m along y as the file says, or None.
    frame_interval
        s as the file says, or None.
    saturation_level
        Largest value that the camera can store, or None for float images.
    origin
        Which part of the metadata gave the pixel size: ``OME``, ``ImageJ``, ``resolution tags``, the maker's format
        (``ND2``, ``LIF``, ``CZI``) or empty.
    source
        What reads the planes.
    """

    path: str
    axes: str
    n_frames: int
    n_planes: int
    n_channels: int
    shape: tuple[int, int]
    dtype: str
    pixel_size: float | None
    pixel_size_y: float | None
    frame_interval: float | None
    saturation_level: float | None
    origin: str
    source: PlaneSource = field(repr=False, compare=False)

    def frame(self, t: int = 0, *, channel: int = 0, plane: str | int = "sharpest") -> NDArray[np.float32]:
        """One frame as ``(ny, nx)`` float32; at most two planes are in memory at any time.

        Parameters
        ----------
        t, channel
            From 0.
        plane
            ``sharpest`` (the plane with the largest :func:`focus_measure`), ``max`` (maximum over the planes) or a
            plane number from 0.

        Raises
        ------
        InputError
            ``no-such-frame``, ``no-such-channel`` or ``no-such-plane``.
        MeasurementError
            ``truncated-file``, ``damaged-file``.
        """
        if isinstance(plane, str):
            if plane not in ("sharpest", "max"):
                raise InputError(
                    f"'{plane}' names no plane",
                    code="no-such-plane",
                    file=self.path,
                    remedy="write sharpest, max or a plane number from 0",
                )
            if self.n_planes == 1:
                return self._plane(t, 0, channel)
            if plane == "sharpest":
                return self._plane(t, self.sharpest_plane(t, channel=channel), channel)
            result = self._plane(t, 0, channel)
            for z in range(1, self.n_planes):
                np.maximum(result, self._plane(t, z, channel), out=result)
            return result
        return self._plane(t, plane, channel)

    def stored(self, t: int = 0, *, channel: int = 0, plane: int = 0) -> NDArray[Any]:
        """One plane in the type in which it is stored (label numbers do not survive float32)."""
        for what, value, length in (
            ("frame", t, self.n_frames),
            ("plane", plane, self.n_planes),
            ("channel", channel, self.n_channels),
        ):
            if isinstance(value, bool) or not isinstance(value, (int, np.integer)) or not 0 <= value < length:
                raise InputError(
                    f"there is no {what} {value}; the file has {length}",
                    code=f"no-such-{what}",
                    file=self.path,
                    remedy=f"write a number from 0 to {length - 1}",
                )
        position = {"T": int(t), "Z": int(plane), "C": int(channel)}
        return self.source.read(tuple(position.get(axis, 0) for axis in self.axes[:-2]))

    def sharpest_plane(self, t: int = 0, *, channel: int = 0) -> int:
        """Number of the plane with the largest :func:`focus_measure`; the first of equals."""
        scores = [focus_measure(self._plane(t, z, channel)) for z in range(self.n_planes)]
        if not any(math.isfinite(score) for score in scores):
            raise MeasurementError(
                "no plane has finite pixels, so none is sharpest",
                code="not-finite",
                file=self.path,
                remedy="name the plane in column z, or export the stack again",
            )
        return int(np.nanargmax(scores))

    def _plane(self, t: int, z: int, c: int) -> NDArray[np.float32]:
        with np.errstate(over="ignore"):
            return np.array(self.stored(t, channel=c, plane=z), dtype=np.float32)


def focus_measure(plane: NDArray[Any]) -> float:
    """Variance of the Laplacian of the plane, smoothed by a Gaussian of 1 px; NaN for a plane that is not finite.

    The variance of the Laplacian is a standard measure of focus (Pech-Pacheco et al., Proc. ICPR 3:314, 2000). The
    smoothing keeps the camera's pixel noise, which is as sharp out of focus as in it, from deciding.

    Examples
    --------
    >>> rng = np.random.default_rng(0)
    >>> sharp = rng.random((64, 64))
    >>> bool(focus_measure(sharp) > focus_measure(ndimage.gaussian_filter(sharp, 2)))
    True
    """
    data = np.asarray(plane, dtype=np.float32)
    with np.errstate(all="ignore"):
        score = float(np.var(ndimage.gaussian_laplace(data, 1.0), dtype=np.float64))
    return score if math.isfinite(score) else math.nan


def open_frames(path: str | os.PathLike[str], *, axes: str | None = None, labels: bool = False) -> BeadStack:
    """Open a bead image or stack; only its header is read.

    Parameters
    ----------
    path
        TIFF, OME-TIFF or ImageJ-TIFF; ``.nd2``, ``.lif`` and ``.czi`` with the extra of that name.
    axes
        Names for the leading axes, slowest first, for a file that does not name them: ``T``, ``TZ``, ``TZYX``, ...
    labels
        True for a label image, where black-and-white and palette files are allowed.

    Raises
    ------
    InputError
        ``missing-file``, ``not-a-file``, ``empty-file``, ``not-a-tiff``, ``colour-image``, ``pixel-type``,
        ``several-images``, ``several-files``, ``unnamed-axis``, ``unknown-axes``, ``missing-codec``, ``missing-extra``.
    MeasurementError
        ``truncated-file``, ``damaged-file``, ``missing-planes``, ``missing-tiles``, ``too-large``, ``zero-size``.
    """
    source, scale = _open_source(path, labels=labels, named=axes is not None)
    letters, sizes = _name_axes(str(path), source.axes, source.sizes, axes)
    length = dict(zip(letters, sizes, strict=True))
    dtype = source.dtype.newbyteorder("=")
    level: float | None = None
    if dtype.kind in "ui":
        bits = scale.significant_bits
        top = int(np.iinfo(dtype).max)
        level = float(min(top, 2**bits - 1) if bits else top)
    return BeadStack(
        path=str(path),
        axes=letters + "YX",
        n_frames=length.get("T", 1),
        n_planes=length.get("Z", 1),
        n_channels=length.get("C", 1),
        shape=source.shape,
        dtype=dtype.name,
        pixel_size=scale.pixel_x,
        pixel_size_y=scale.pixel_y,
        frame_interval=scale.frame_interval,
        saturation_level=level,
        origin=scale.origin,
        source=source,
    )


def _open_source(path: str | os.PathLike[str], *, labels: bool, named: bool) -> tuple[PlaneSource, meta.FileMetadata]:
    if maker_of(path):
        return read_maker_header(path)
    return read_tiff_header(path, labels=labels, named=named)


def _name_axes(path: str, declared: str, sizes: tuple[int, ...], given: str | None) -> tuple[str, tuple[int, ...]]:
    if given is not None:
        letters = given.strip().upper()
        letters = letters.removesuffix("YX")
        if len(letters) != len(declared) or len(set(letters)) != len(letters) or not set(letters) <= set("TZC"):
            stack = " x ".join(map(str, sizes)) or "a single plane"
            raise InputError(
                f"axes '{given}' do not name this stack ({stack} before rows and columns)",
                code="unknown-axes",
                file=path,
                remedy=f"give {len(declared)} different letters of T, Z and C",
            )
        return letters, sizes
    if not set(declared) <= set("TZC") or len(set(declared)) != len(declared):
        stack = " x ".join(map(str, sizes))
        raise InputError(
            f"the file does not say what its {stack} planes are (time, height or channel)",
            code="unnamed-axis",
            file=path,
            remedy="save it with named axes (in ImageJ: Image > Properties, number of slices and frames)",
        )
    return declared, sizes


def matching_shape(stressed: BeadStack, relaxed: BeadStack) -> tuple[int, int]:
    """The common ``(ny, nx)`` of two stacks.

    Raises
    ------
    InputError
        ``shape-mismatch``.
    """
    if stressed.shape != relaxed.shape:
        sizes = [f"{s.shape[1]} x {s.shape[0]}" for s in (stressed, relaxed)]
        raise InputError(
            f"the stressed image has {sizes[0]} pixels and the relaxed one {sizes[1]}",
            code="shape-mismatch",
            file=relaxed.path,
            remedy="use the same camera region for both",
        )
    return stressed.shape


def resolve_pixel_size(stacks: Sequence[BeadStack], sheet_value: float | None = None) -> float:
    """The pixel size in m: from the files, else from the sheet; disagreement above 1 % is refused.

    Raises
    ------
    InputError
        ``no-pixel-size``, ``pixel-size-conflict``, ``non-square-pixels`` or ``implausible-pixel-size``.
    """
    found: list[tuple[str, float]] = []
    for stack in stacks:
        x, y = stack.pixel_size, stack.pixel_size_y
        if x is not None and y is not None:
            if abs(x - y) > _SQUARE * max(x, y):
                raise InputError(
                    f"the pixels are not square ({x * 1e6:.6g} um x {y * 1e6:.6g} um)",
                    code="non-square-pixels",
                    file=stack.path,
                    remedy="correct the calibration, or resample to square pixels",
                )
            found.append((stack.path, x))
    low, high = meta.PLAUSIBLE_PIXEL
    if sheet_value is not None:
        if not (math.isfinite(sheet_value) and low <= sheet_value <= high):
            raise InputError(
                f"a pixel of {sheet_value * 1e6:.6g} um cannot be",
                code="implausible-pixel-size",
                column="pixel",
                remedy="give the size of one pixel on the gel, for instance '0.2 um'",
            )
        found.append(("the cell sheet", sheet_value))
    if not found:
        raise InputError(
            "neither the image nor the sheet gives the pixel size",
            code="no-pixel-size",
            column="pixel",
            file=stacks[0].path if stacks else "",
            remedy="fill the column, for instance '0.2 um'",
        )
    first_name, first = found[0]
    for other_name, other in found[1:]:
        if abs(other - first) > _SAME_PIXEL * min(first, other):
            raise InputError(
                f"pixel size {first * 1e6:.6g} um here, {other * 1e6:.6g} um in {other_name}",
                code="pixel-size-conflict",
                file=first_name,
                column="pixel",
                remedy="correct the wrong one; leave the column empty to use the file's",
            )
    return first

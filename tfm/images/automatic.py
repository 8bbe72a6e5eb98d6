"""Outlines found in an image of the cells (fluorescence: bright cells on a dark ground)."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from skimage import feature, filters, segmentation

from tfm.errors import MeasurementError
from tfm.images.model import Outlines

__all__ = ["segment_cells"]

# The library declares no types.
_threshold_li: Any = filters.threshold_li
_threshold_otsu: Any = filters.threshold_otsu
_peak_local_max: Any = feature.peak_local_max
_watershed: Any = segmentation.watershed

#: Two halves are two cells when the neck between them is narrower than this part of the smaller half's inner radius.
_NECK = 0.7
#: The rim lies where the brightness falls below this part of the object's median: half, less room for uneven staining.
_RIM = 0.35
#: px on both sides of the rim that are compared, and the part of the object's brightness that must be lost there.
_RING = 5
_STEP = 0.3


def segment_cells(
    image: NDArray[np.float32], *, file: str = "", smoothing: float = 2.0, min_area: int | None = None
) -> Outlines:
    """Bright cells on a dark ground: smoothing, threshold, holes filled, specks removed, touching cells parted.

    The uneven ground is fitted by a quadratic surface and taken off. The threshold minimises the cross-entropy (Li &
    Tam, Pattern Recognition Letters 19:771, 1998) of the inverse hyperbolic sine of what is left, in units of the
    ground's noise, so that a dim cell beside a bright one counts; the rim of each object is then drawn at a fixed part
    of its own brightness. Touching cells are parted by a watershed on the distance to the rim where the neck between
    them is clearly narrower than either.

    Parameters
    ----------
    image
        ``(ny, nx)``.
    smoothing
        Sigma of the Gaussian in px.
    min_area
        px^2; smaller objects are dust. Default: a thousandth of the image.

    Raises
    ------
    MeasurementError
        ``no-cell-found`` when the bright part does not stand out of the ground, or is most of the image;
        ``not-finite``.
    """
    if not np.isfinite(image).all():
        raise MeasurementError(
            "the image of the cells has pixels that are not finite",
            code="not-finite",
            file=file,
            remedy="export it again, or draw the outlines",
        )
    if np.ptp(image) == 0:
        raise _nothing(file, "the image is uniform")
    smooth = ndimage.gaussian_filter(np.asarray(image, dtype=np.float64), smoothing)
    least = min_area if min_area is not None else max(16, image.size // 1000)
    rise, spread = _above_ground(smooth)
    mask = _clean(_foreground(rise, spread, file), least)
    mask = _with_a_step(_clean(_own_rims(mask, rise), least), rise)
    if not mask.any():
        raise _nothing(file, f"no bright object with a rim covers {least} pixels")
    return Outlines(_part_touching(mask), "automatic")


def _nothing(file: str, why: str) -> MeasurementError:
    return MeasurementError(
        f"no cell was found automatically: {why}", code="no-cell-found", file=file, remedy="draw the outlines"
    )


def _clean(mask: NDArray[np.bool_], least: int) -> NDArray[np.bool_]:
    opened = ndimage.binary_fill_holes(ndimage.binary_opening(mask, iterations=2))
    labels, count = ndimage.label(opened)
    size = np.bincount(labels.ravel(), minlength=count + 1)
    size[0] = 0
    return np.asarray((size >= least)[labels])


def _above_ground(smooth: NDArray[np.float64]) -> tuple[NDArray[np.float64], float]:
    """The image less its ground, and the ground's noise.

    The ground is a quadratic surface through blocks of the image; blocks that rise above the fit are left out in turn,
    so that it settles on the dark part.
    """
    ny, nx = smooth.shape
    step = max(1, min(ny, nx) // 48)
    rows, columns = np.meshgrid(np.arange(step // 2, ny, step), np.arange(step // 2, nx, step), indexing="ij")

    def terms(y: NDArray[Any], x: NDArray[Any]) -> NDArray[np.float64]:
        v, u = 2.0 * y.ravel() / ny - 1.0, 2.0 * x.ravel() / nx - 1.0
        return np.stack([np.ones_like(u), u, v, u * u, u * v, v * v], axis=1)

    basis, value = terms(rows, columns), smooth[rows, columns].ravel()
    keep = np.ones(value.size, dtype=bool)
    for _ in range(30):
        coefficients = np.linalg.lstsq(basis[keep], value[keep], rcond=None)[0]
        residual = value - basis @ coefficients
        # The lower half of the residuals is ground whatever stands on it.
        below = residual[keep & (residual < 0)]
        spread = 1.4826 * float(np.median(np.abs(below))) if below.size else 0.0
        now = residual < 2.5 * spread
        if np.array_equal(now, keep) or np.count_nonzero(now) < 0.15 * value.size:
            break
        keep = now
    all_rows, all_columns = np.mgrid[:ny, :nx]
    rise = smooth - (terms(all_rows, all_columns) @ coefficients).reshape(ny, nx)
    return rise, max(spread, 1e-6 * float(np.ptp(smooth)))


def _foreground(rise: NDArray[np.float64], spread: float, file: str) -> NDArray[np.bool_]:
    scaled = np.arcsinh(rise / (3.0 * spread))
    level = float(_threshold_li(scaled, initial_guess=float(_threshold_otsu(scaled))))
    mask = scaled > level
    share = float(mask.mean())
    if not 0.0005 <= share <= 0.8:
        raise _nothing(file, f"the bright part is {100 * share:.1f} % of the image")
    ground = rise[~mask]
    centre = float(np.median(ground))
    variation = 1.4826 * float(np.median(np.abs(ground - centre)))
    if float(np.median(rise[mask])) - centre < 4.0 * variation:
        raise _nothing(file, "nothing stands out of the ground's own variation")
    return mask


def _with_a_step(mask: NDArray[np.bool_], rise: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Objects whose brightness falls at the rim. A swelling of the ground has a level line too, but no step there."""
    labels, count = ndimage.label(mask)
    keep = np.zeros(count + 1, dtype=bool)
    inner, outer = ndimage.distance_transform_edt(mask), ndimage.distance_transform_edt(~mask)
    near = ndimage.grey_dilation(labels, size=(2 * _RING + 1, 2 * _RING + 1))
    for number in range(1, count + 1):
        mine = labels == number
        inside = mine & (inner > 1) & (inner <= _RING)
        outside = (near == number) & (outer > 1) & (outer <= _RING)
        if inside.any() and outside.any():
            step = float(np.median(rise[inside])) - float(np.median(rise[outside]))
            keep[number] = step > _STEP * float(np.median(rise[mine]))
    return np.asarray(keep[labels])


def _own_rims(mask: NDArray[np.bool_], rise: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Each object cut at a part of its own brightness: the blur of a bright cell would widen it otherwise."""
    labels, count = ndimage.label(mask)
    level = np.zeros(count + 1)
    if count:
        level[1:] = _RIM * ndimage.median(rise, labels, np.arange(1, count + 1))
    return np.asarray(mask & (rise > level[labels]))


def _part_touching(mask: NDArray[np.bool_]) -> NDArray[np.int32]:
    distance = ndimage.gaussian_filter(ndimage.distance_transform_edt(mask), 1.0) * mask
    components, _ = ndimage.label(mask, structure=np.ones((3, 3)))
    peaks = _peak_local_max(distance, min_distance=3, labels=components, exclude_border=False)
    markers = np.zeros(mask.shape, dtype=np.int32)
    markers[tuple(peaks.T)] = np.arange(1, len(peaks) + 1)
    pieces = _watershed(-distance, markers, mask=mask).astype(np.int32)
    return _merge_wide_necks(pieces, distance)


def _merge_wide_necks(pieces: NDArray[np.int32], distance: NDArray[np.float64]) -> NDArray[np.int32]:
    """Neighbouring pieces become one where the pass between them is nearly as wide as the narrower piece."""
    count = int(pieces.max())
    height = np.zeros(count + 1)
    np.maximum.at(height, pieces.ravel(), distance.ravel())
    passes: dict[tuple[int, int], float] = {}
    for first, second, d1, d2 in (
        (pieces[:, :-1], pieces[:, 1:], distance[:, :-1], distance[:, 1:]),
        (pieces[:-1], pieces[1:], distance[:-1], distance[1:]),
        (pieces[:-1, :-1], pieces[1:, 1:], distance[:-1, :-1], distance[1:, 1:]),
        (pieces[:-1, 1:], pieces[1:, :-1], distance[:-1, 1:], distance[1:, :-1]),
    ):
        border = (first != second) & (first > 0) & (second > 0)
        for a, b, w in zip(first[border], second[border], np.minimum(d1, d2)[border], strict=True):
            key = (int(min(a, b)), int(max(a, b)))
            passes[key] = max(passes.get(key, 0.0), float(w))
    root = list(range(count + 1))

    def find(i: int) -> int:
        while root[i] != i:
            i = root[i]
        return i

    # The widest pass first, so that a long cell grows together from its middle before its ends are judged.
    for (a, b), width in sorted(passes.items(), key=lambda item: -item[1]):
        ra, rb = find(a), find(b)
        if ra != rb and width > _NECK * min(height[ra], height[rb]):
            root[max(ra, rb)] = min(ra, rb)
            height[min(ra, rb)] = max(height[ra], height[rb])
    roots = np.array([find(i) for i in range(count + 1)])
    _, renumbered = np.unique(roots, return_inverse=True)
    return renumbered.astype(np.int32)[pieces]

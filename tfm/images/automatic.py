"""Outlines found in an image of the cells (fluorescence: bright cells on a dark ground)."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from skimage import feature, filters, segmentation
from skimage.morphology import remove_small_objects

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


def segment_cells(
    image: NDArray[np.float32], *, file: str = "", smoothing: float = 2.0, min_area: int | None = None
) -> Outlines:
    """Bright cells on a dark ground: smoothing, threshold, holes filled, specks removed, touching cells parted.

    The threshold minimises the cross-entropy (Li & Tam, Pattern Recognition Letters 19:771, 1998), on intensities
    clipped at the 99.9th percentile so that a few bright spots do not set it. Touching cells are parted by a watershed
    on the distance to the rim where the neck between them is clearly narrower than either.

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
    smooth = ndimage.gaussian_filter(np.asarray(image, dtype=np.float64), smoothing)
    smooth = np.minimum(smooth, np.percentile(smooth, 99.9))
    least = min_area if min_area is not None else max(16, image.size // 1000)
    mask = _foreground(smooth, file)
    mask = ndimage.binary_fill_holes(ndimage.binary_opening(mask, iterations=2))
    mask = remove_small_objects(mask, max_size=least - 1)
    if not mask.any():
        raise _nothing(file, f"no bright object covers {least} pixels")
    labels = _part_touching(mask)
    return Outlines(labels, "automatic")


def _nothing(file: str, why: str) -> MeasurementError:
    return MeasurementError(
        f"no cell was found automatically: {why}", code="no-cell-found", file=file, remedy="draw the outlines"
    )


def _foreground(smooth: NDArray[np.float64], file: str) -> NDArray[np.bool_]:
    if np.ptp(smooth) <= 1e-6 * max(1e-30, float(np.abs(smooth).max())):
        raise _nothing(file, "the image is uniform")
    level = float(_threshold_li(smooth, initial_guess=float(_threshold_otsu(smooth))))
    mask = smooth > level
    share = float(mask.mean())
    if not 0.0005 <= share <= 0.8:
        raise _nothing(file, f"the bright part is {100 * share:.1f} % of the image")
    ground = smooth[~mask]
    centre = float(np.median(ground))
    spread = 1.4826 * float(np.median(np.abs(ground - centre)))
    contrast = float(np.median(smooth[mask])) - centre
    if contrast < 4.0 * spread:
        raise _nothing(file, "nothing stands out of the ground's own variation")
    return mask


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

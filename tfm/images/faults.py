"""What is wrong with a frame although it could be read."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["ImageFault", "image_faults"]

#: Share of saturated pixels above which bead positions suffer; one bead in a hundred at 0.02 beads per px^2.
SATURATED_SHARE = 0.002
#: Pixels at a frame's own maximum that chance does not explain.
_PILE = 20


@dataclass(frozen=True)
class ImageFault:
    """One fault: a stable ``code``, a ``sentence`` for the table, and whether the frame is useless (``fatal``)."""

    code: str
    sentence: str
    fatal: bool


def image_faults(frame: NDArray[Any], *, saturation_level: float | None = None) -> tuple[ImageFault, ...]:
    """Faults of one frame, gravest first; empty for a good one.

    Parameters
    ----------
    frame
        ``(ny, nx)``.
    saturation_level
        Value at which the camera saturates, from :class:`~tfm.images.BeadStack`. A pile of pixels at the frame's own
        maximum counts as well: 10 to 14-bit cameras saturate far below what 16 bits can hold.

    Returns
    -------
    tuple of ImageFault
        Codes: ``not-finite`` (fatal), ``constant-image`` (fatal), ``too-small`` (fatal), ``saturated``, ``few-levels``.

    Examples
    --------
    >>> [fault.code for fault in image_faults(np.zeros((64, 64)))]
    ['constant-image']
    """
    data = np.asarray(frame)
    faults = []
    if min(data.shape) < 32:
        faults.append(ImageFault("too-small", f"the frame has only {data.shape[1]} x {data.shape[0]} pixels", True))
    finite = np.isfinite(data)
    bad = int(data.size - np.count_nonzero(finite))
    if bad:
        faults.append(ImageFault("not-finite", f"{bad} of {data.size} pixels are not finite numbers", True))
    good = data[finite]
    if good.size == 0:
        return tuple(faults)
    low, high = float(good.min()), float(good.max())
    if low == high:
        faults.append(ImageFault("constant-image", f"all pixels have the value {high:g}: nothing was imaged", True))
        return tuple(faults)
    at_top = int(np.count_nonzero(good == high))
    share = at_top / good.size if at_top > _PILE else 0.0
    if saturation_level is not None:
        share = max(share, float(np.mean(good >= saturation_level)))
    levels = np.unique(good[:: max(1, good.size // 100_000)]).size
    if levels < 8:
        faults.append(ImageFault("few-levels", f"the frame has only {levels} different grey values", False))
    if share > SATURATED_SHARE:
        faults.append(ImageFault("saturated", f"{100 * share:.1f} % of the pixels are saturated at {high:g}", False))
    return tuple(faults)

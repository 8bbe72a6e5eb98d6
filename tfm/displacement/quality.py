"""How good the images of one field are: each number with its limit, and what to do at the microscope."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass, field

import numpy as np
from scipy.ndimage import gaussian_filter, maximum_filter

from tfm.displacement.prepare import PreparedFrame, bead_width

__all__ = ["QUALITY_LIMITS", "FieldQuality", "bead_count", "judge_quality"]

#: Name -> (limit, "above" or "below": the side that is a reason for caution).
QUALITY_LIMITS: Mapping[str, tuple[float, str]] = {
    "noise_px": (0.15, "above"),
    "beads_per_window": (8.0, "below"),
    "signal_to_noise": (5.0, "below"),
    "rejected_share": (0.1, "above"),
    "drift_px": (25.0, "above"),
    "focus_change": (0.15, "above"),
    "lost_share": (0.05, "above"),
    "saturated_share": (0.002, "above"),
    "brightness_change": (0.5, "above"),
}

_ADVICE: Mapping[str, str] = {
    "noise_px": "expose longer or use brighter beads",
    "beads_per_window": "use a higher bead density, about 20 beads in 32 x 32 pixels",
    "signal_to_noise": "expose longer, use brighter beads, or lower the background light",
    "rejected_share": "check focus and bead coverage where vectors are missing",
    "drift_px": "let the stage settle, or fix the dish, before the second image",
    "focus_change": "refocus on the same bead plane before the second image, or take a z-stack of it",
    "lost_share": "keep the same plane and do not disturb the beads when the cells are taken off",
    "saturated_share": "lower exposure or gain until no bead reaches the top of the camera's range",
    "brightness_change": "keep lamp, exposure and gain the same for both images",
}

_WORDS: Mapping[str, str] = {
    "noise_px": "displacement noise is {:.2f} px",
    "beads_per_window": "only {:.0f} beads per 32 x 32 pixels",
    "signal_to_noise": "beads stand only {:.1f} times above the noise",
    "rejected_share": "{:.0%} of the vectors could not be measured",
    "drift_px": "the image drifted by {:.0f} px",
    "focus_change": "bead images of the two frames differ in width by {:.0%}",
    "lost_share": "{:.1%} of the ground holds beads that only one of the images has",
    "saturated_share": "{:.1%} of the pixels are saturated",
    "brightness_change": "brightness changed by {:.0%} between the images",
}


@dataclass(frozen=True)
class FieldQuality:
    """Numbers that say whether a field can be trusted; NaN = not measured.

    Attributes
    ----------
    noise_px
        Root mean square error of one component on quiet ground.
    bead_density
        Beads per px^2 of the relaxed frame.
    beads_per_window
        The same per 32 x 32 px.
    signal_to_noise
        Median height of a bead above the background over the noise of the dark ground, the worse frame.
    rejected_share
        Share of grid positions without a vector.
    drift_px
        Length of the rigid shift.
    bead_width_px
        Standard deviation of a bead's image in the relaxed frame.
    focus_change
        Ratio of the two frames' bead widths, minus 1 (the wider over the narrower).
    lost_share
        Share of used ground in beads that only one frame has.
    saturated_share
        Share of saturated pixels, the worse frame.
    hot_pixels
        Number of hot or dead pixels, the worse frame.
    brightness_change
        Ratio of bead heights, minus 1 (the brighter over the darker).
    notes
        A sentence for every limit of :data:`QUALITY_LIMITS` that is passed.
    """

    noise_px: float
    bead_density: float
    beads_per_window: float
    signal_to_noise: float
    rejected_share: float
    drift_px: float
    bead_width_px: float
    focus_change: float
    lost_share: float
    saturated_share: float
    hot_pixels: int
    brightness_change: float
    notes: tuple[str, ...] = field(default=())

    @property
    def caution(self) -> bool:
        """True when any limit is passed."""
        return bool(self.notes)

    def as_dict(self) -> dict[str, float | int]:
        """The numbers without the notes."""
        return {key: value for key, value in asdict(self).items() if key != "notes"}


def bead_count(frame: PreparedFrame) -> tuple[float, float, float]:
    """Beads per px^2, their median height (counts) and the dark ground's noise (counts).

    A bead is a local maximum of the lightly smoothed frame that stands four standard deviations above the ground.

    Examples
    --------
    >>> from tfm.displacement.prepare import prepare_frame
    >>> rng = np.random.default_rng(0)
    >>> image = rng.normal(100, 1, (96, 96)); image[10::12, 10::12] += 500
    >>> round(96**2 * bead_count(prepare_frame(gaussian_filter(image, 1.2)))[0])
    64
    """
    # A quarter of a million pixels hold thousands of beads, enough for a density and two medians.
    height_px, width_px = frame.image.shape
    rows = min(height_px, max(64, 262_144 // width_px))
    part = slice((height_px - rows) // 2, (height_px - rows) // 2 + rows)
    image, ground = frame.image[part], max(1, int(frame.usable[part].sum()))
    smooth = gaussian_filter(image, 0.8)
    level = float(np.median(smooth))
    # The lower half of the ground is free of beads; its spread below the median is that of a half normal distribution.
    low = smooth[smooth <= level]
    spread = float(np.sqrt(np.mean((low - level) ** 2))) + 1e-12
    tops = (smooth == maximum_filter(smooth, 3)) & (smooth > level + 4 * spread)
    rough = image[:, 1:] - image[:, :-1]
    dark = (smooth[:, 1:] < level + spread) & (smooth[:, :-1] < level + spread)
    noise = float(np.sqrt(0.5 * np.mean(rough[dark] ** 2))) if dark.any() else float("nan")
    height = float(np.median(image[tops])) if tops.any() else float("nan")
    return float(tops.sum()) / ground, height, noise


def judge_quality(
    relaxed: PreparedFrame,
    stressed: PreparedFrame,
    *,
    noise_px: float,
    rejected_share: float,
    drift_px: float,
    lost_share: float = float("nan"),
) -> FieldQuality:
    """Quality of one field.

    Parameters
    ----------
    relaxed, stressed
        Prepared frames.
    noise_px, rejected_share, drift_px, lost_share
        What the measurement found.
    """
    (density, height, noise), (_, height_s, noise_s) = bead_count(relaxed), bead_count(stressed)
    width, width_s = (bead_width(frame.image, frame.usable) for frame in (relaxed, stressed))
    values = {
        "noise_px": noise_px,
        "beads_per_window": density * 1024,
        "signal_to_noise": float(np.fmin(height / noise, height_s / noise_s)) if noise > 0 and noise_s > 0 else np.nan,
        "rejected_share": rejected_share,
        "drift_px": drift_px,
        "focus_change": _ratio(width, width_s),
        "lost_share": lost_share,
        "saturated_share": max(relaxed.saturated, stressed.saturated) / relaxed.image.size,
        "brightness_change": _ratio(height, height_s),
    }
    notes = []
    for name, (limit, side) in QUALITY_LIMITS.items():
        value = values[name]
        if np.isfinite(value) and (value > limit if side == "above" else value < limit):
            notes.append(f"{_WORDS[name].format(value)}: {_ADVICE[name]}")
    return FieldQuality(
        bead_density=density,
        bead_width_px=width,
        hot_pixels=max(relaxed.hot, stressed.hot),
        notes=tuple(notes),
        **values,
    )


def _ratio(a: float, b: float) -> float:
    return max(a, b) / min(a, b) - 1 if a > 0 and b > 0 else float("nan")

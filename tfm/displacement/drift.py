"""Rigid motion of the stressed frame against the relaxed one: shift, and on request rotation and magnification."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter, map_coordinates, spline_filter

from tfm.errors import MeasurementError

__all__ = ["RigidMotion", "estimate_drift", "fit_rigid_motion"]


@dataclass(frozen=True)
class RigidMotion:
    """What the microscope did between the frames: ``x -> x + shift + (magnification R(rotation) - 1)(x - centre)``.

    Attributes
    ----------
    shift
        ``(2,)`` px, x and y.
    rotation
        rad, from +x towards +y.
    magnification
        Ratio, 1 = none.
    centre
        ``(2,)`` px, x and y of the point about which rotation and magnification act.
    points
        Pixels or vectors that took part.
    """

    shift: tuple[float, float]
    rotation: float = 0.0
    magnification: float = 1.0
    centre: tuple[float, float] = (0.0, 0.0)
    points: int = 0

    def at(self, x: NDArray[np.float64], y: NDArray[np.float64]) -> NDArray[np.float64]:
        """Motion ``(2, ...)`` px of the points ``x``, ``y`` px (arrays that broadcast).

        Examples
        --------
        >>> RigidMotion((1.0, 0.0), rotation=0.01).at(np.array(0.0), np.array(10.0)).round(3).tolist()
        [0.9, -0.0]
        """
        dx, dy = x - self.centre[0], y - self.centre[1]
        c, s = self.magnification * np.cos(self.rotation) - 1, self.magnification * np.sin(self.rotation)
        return np.stack(np.broadcast_arrays(self.shift[0] + c * dx - s * dy, self.shift[1] + s * dx + c * dy))


def estimate_drift(
    relaxed: NDArray[np.float32],
    stressed: NDArray[np.float32],
    *,
    quiet: NDArray[np.bool_] | None = None,
    usable: NDArray[np.bool_] | None = None,
) -> RigidMotion:
    """Shift of the stressed frame against the relaxed one, in px, to a few hundredths of a pixel.

    Phase correlation of the whole frames, upsampled (Guizar-Sicairos et al., Opt. Lett. 33:156, 2008, in scikit-image),
    then robust Gauss-Newton steps on quiet ground alone (Tukey's biweight), so that cells do not pull the answer.

    Parameters
    ----------
    relaxed, stressed
        ``(ny, nx)`` prepared frames.
    quiet
        ``(ny, nx)`` bool, True = ground away from cells; ``None`` = the whole image.
    usable
        ``(ny, nx)`` bool, pixels to use in both frames; ``None`` = all.

    Raises
    ------
    MeasurementError
        When the frames hold no structure.

    Examples
    --------
    >>> rng = np.random.default_rng(0)
    >>> image = gaussian_filter(rng.random((96, 128)), 1.5).astype(np.float32)
    >>> estimate_drift(image[:, 4:], image[:, :-4]).shift  # the picture moves 4 px to the right
    (4.0..., ...)
    """
    from skimage.registration import phase_cross_correlation

    correlate: Any = phase_cross_correlation  # it carries no types

    keep = np.ones(relaxed.shape, dtype=bool) if usable is None else usable
    if not keep.any() or np.ptp(relaxed[keep]) == 0 or np.ptp(stressed[keep]) == 0:
        raise MeasurementError(
            "a bead image is blank", code="blank-image", remedy="check channel, exposure and plane of the bead images"
        )
    a = np.where(keep, relaxed - relaxed[keep].mean(), 0).astype(np.float32)
    b = np.where(keep, stressed - stressed[keep].mean(), 0).astype(np.float32)
    # A soft frame keeps the picture's edges, which do not move, out of the correlation.
    factor = max(1, min(a.shape) // 512)
    small_a, small_b = _block_means(a, factor), _block_means(b, factor)
    soft = _soft_edge(small_a.shape)
    found, _, _ = correlate(small_a * soft, small_b * soft, upsample_factor=10, normalization=None)
    shift = -np.asarray(found, dtype=float)[::-1] * factor
    ground = keep if quiet is None or (quiet & keep).sum() < 2000 else quiet & keep
    shift, points = _refine_shift(a, b, shift, ground)
    return RigidMotion((float(shift[0]), float(shift[1])), points=points)


def _block_means(image: NDArray[np.float32], factor: int) -> NDArray[np.float32]:
    if factor == 1:
        return image
    rows, cols = (n // factor for n in image.shape)
    blocks = image[: rows * factor, : cols * factor].reshape(rows, factor, cols, factor)
    return np.asarray(blocks.mean(axis=(1, 3)), dtype=np.float32)


def _soft_edge(shape: tuple[int, ...]) -> NDArray[np.float32]:
    ramps = []
    for length in shape:
        width = max(4, length // 16)
        ramp = np.minimum(1, (np.minimum(np.arange(length), np.arange(length)[::-1]) + 0.5) / width)
        ramps.append(np.sin(0.5 * np.pi * ramp) ** 2)
    return np.outer(ramps[0], ramps[1]).astype(np.float32)


def _refine_shift(
    a: NDArray[np.float32], b: NDArray[np.float32], shift: NDArray[np.float64], ground: NDArray[np.bool_]
) -> tuple[NDArray[np.float64], int]:
    # Smoothing by about a bead's width widens the range in which a Gauss-Newton step goes the right way and quiets
    # the gradients; the shift itself is not changed by smoothing both frames alike.
    a, b = gaussian_filter(a, 1.0), gaussian_filter(b, 1.0)
    coefficients = spline_filter(b, 3, output=np.float32)
    rows, cols = np.nonzero(ground)
    if len(rows) > 100_000:
        # A hundred thousand pixels fix a shift to a thousandth of a pixel; more only cost time.
        pick = np.linspace(0, len(rows) - 1, 100_000).astype(int)
        rows, cols = rows[pick], cols[pick]
    gy, gx = (np.asarray(part) for part in np.gradient(a))
    g = np.stack([gx[rows, cols], gy[rows, cols]]).astype(np.float64)
    start = shift.copy()
    for _ in range(6):
        at_y, at_x = rows + shift[1], cols + shift[0]
        inside = (at_y >= 2) & (at_y <= b.shape[0] - 3) & (at_x >= 2) & (at_x <= b.shape[1] - 3)
        if inside.sum() < 500:
            return start, 0
        r = map_coordinates(coefficients, [at_y, at_x], order=3, prefilter=False, mode="nearest") - a[rows, cols]
        r -= np.median(r[inside])
        scale = 1.4826 * np.median(np.abs(r[inside])) + 1e-12
        weight = np.where(inside, np.clip(1 - (r / (4.7 * scale)) ** 2, 0, None) ** 2, 0)
        step = np.linalg.lstsq((weight * g) @ g.T, -(weight * g) @ r, rcond=None)[0]
        size = float(np.hypot(*step))
        shift = shift + step * min(1.0, 0.5 / max(size, 1e-12))
        if size < 2e-3:
            break
    if np.hypot(*(shift - start)) > 2:
        # The phase correlation is good to a fraction of a pixel; a walk of pixels means that the ground does not match.
        return start, 0
    return shift, int(inside.sum())


def fit_rigid_motion(
    x: NDArray[np.float64],
    y: NDArray[np.float64],
    u: NDArray[np.float64],
    weight: NDArray[np.float64],
    *,
    rotation: bool = False,
    magnification: bool = False,
) -> RigidMotion:
    """The rigid motion that vectors on quiet ground share: weighted least squares with Huber's weights.

    Parameters
    ----------
    x, y
        ``(n,)`` px, places.
    u
        ``(2, n)`` px.
    weight
        ``(n,)`` relative weight of each vector.
    rotation, magnification
        Whether to fit them besides the shift; both act about the weighted centre of the vectors.

    Raises
    ------
    MeasurementError
        With fewer than three vectors.

    Examples
    --------
    >>> x, y = np.meshgrid(np.arange(5.0), np.arange(5.0))
    >>> turned = RigidMotion((0.3, 0.0), rotation=0.02, centre=(2.0, 2.0)).at(x.ravel(), y.ravel())
    >>> found = fit_rigid_motion(x.ravel(), y.ravel(), turned, np.ones(25), rotation=True)
    >>> round(found.rotation, 6), round(found.magnification, 6)
    (0.02, 1.0)
    """
    if len(x) < 3 or not (weight > 0).any():
        raise MeasurementError(
            "too few vectors on quiet ground to fix the drift", code="no-quiet-ground", remedy="leave more free ground"
        )
    centre = (float(np.average(x, weights=weight)), float(np.average(y, weights=weight)))
    dx, dy = x - centre[0], y - centre[1]
    zero, one = np.zeros_like(dx), np.ones_like(dx)
    columns = [np.concatenate([one, zero]), np.concatenate([zero, one])]
    # Similarity transform: displacement (c dx - s dy, s dx + c dy) is linear in c and s.
    columns += [np.concatenate([dx, dy])] if magnification else []
    columns += [np.concatenate([-dy, dx])] if rotation else []
    design, data = np.stack(columns, axis=1), np.concatenate([u[0], u[1]])
    base = np.concatenate([weight, weight])
    robust = np.ones_like(base)
    answer = np.zeros(design.shape[1])
    for _ in range(20):
        root = np.sqrt(base * robust)
        new = np.linalg.lstsq(design * root[:, None], data * root, rcond=None)[0]
        done = np.abs(new - answer).max() < 1e-9
        answer = new
        r = (data - design @ answer) * np.sqrt(base)
        length = np.hypot(*r.reshape(2, -1))
        scale = np.median(length) / 1.177 + 1e-15  # median of a Rayleigh distribution
        robust = np.tile(np.minimum(1, 2.0 * scale / np.maximum(length, 1e-15)), 2)
        if done:
            break
    c = float(answer[2]) if magnification else 0.0
    s = float(answer[-1]) if rotation else 0.0
    if rotation and not magnification:
        # A pure rotation has cos - 1 in place of c; to second order the fit of s alone is the sine.
        angle, factor = float(np.arcsin(np.clip(s, -1, 1))), 1.0
    else:
        angle, factor = float(np.arctan2(s, 1 + c)), float(np.hypot(1 + c, s))
    return RigidMotion((float(answer[0]), float(answer[1])), angle, factor, centre, int((weight > 0).sum()))

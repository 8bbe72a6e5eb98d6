"""Principal values and axis of a symmetric 2 x 2 tensor, with the error that its covariance implies."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["PrincipalAxes", "axis_deviation", "outline_axis", "principal_axes", "wrap_axis"]


@dataclass(frozen=True)
class PrincipalAxes:
    """``major`` is the principal value of larger magnitude, ``axis`` its direction in (-pi/2, pi/2] from +x towards
    +y."""

    major: float
    minor: float
    axis: float | None
    anisotropy: float


def wrap_axis(angle: float) -> float:
    """An angle as an axis in (-pi/2, pi/2].

    Examples
    --------
    >>> round(wrap_axis(2.0), 6), wrap_axis(-np.pi / 2) == np.pi / 2
    (-1.141593, True)
    """
    wrapped = (angle + np.pi / 2) % np.pi - np.pi / 2
    return float(np.pi / 2 if np.isclose(wrapped, -np.pi / 2, rtol=1e-12, atol=0.0) else wrapped)


def principal_axes(tensor: NDArray[np.float64]) -> PrincipalAxes:
    """Principal axes of ``(3,)`` xx, xy, yy; ``axis`` is None for an isotropic tensor.

    Examples
    --------
    >>> principal_axes(np.array([-2.0, 0.0, -1.0]))
    PrincipalAxes(major=-2.0, minor=-1.0, axis=0.0, anisotropy=0.3333333333333333)
    """
    xx, xy, yy = (float(v) for v in tensor)
    mean, half = 0.5 * (xx + yy), float(np.hypot(0.5 * (xx - yy), xy))
    upper = abs(mean + half) >= abs(mean - half)
    major, minor = (mean + half, mean - half) if upper else (mean - half, mean + half)
    size = abs(major) + abs(minor)
    if half <= 1e-12 * size or size == 0:
        return PrincipalAxes(major, minor, None, 0.0)
    angle = 0.5 * np.arctan2(2 * xy, xx - yy) + (0.0 if upper else 0.5 * np.pi)
    return PrincipalAxes(major, minor, wrap_axis(angle), (abs(major) - abs(minor)) / size)


def axis_deviation(tensor: NDArray[np.float64], covariance: NDArray[np.float64], *, draws: int = 4000) -> float:
    """Standard deviation (rad) of the axis of a tensor with Gaussian error.

    By the delta method where the difference of the principal values is more than five times its own error, else by
    sampling with a fixed seed; an axis about which nothing is known has 52 degrees (uniform on half a turn).
    """
    xx, xy, yy = tensor
    half = np.hypot(0.5 * (xx - yy), xy)
    gradient = np.array([-xy, xx - yy, xy]) / (4.0 * half**2) if half > 0 else np.zeros(3)
    delta = float(np.sqrt(max(gradient @ covariance @ gradient, 0.0)))
    if half > 0 and delta < 0.1:
        return delta
    rng = np.random.default_rng(20)
    sample = rng.multivariate_normal(tensor, covariance, size=draws, method="eigh")
    mean, split = 0.5 * (sample[:, 0] + sample[:, 2]), np.hypot(0.5 * (sample[:, 0] - sample[:, 2]), sample[:, 1])
    angle = 0.5 * np.arctan2(2 * sample[:, 1], sample[:, 0] - sample[:, 2])
    angle = np.where(np.abs(mean + split) >= np.abs(mean - split), angle, angle + 0.5 * np.pi)
    centre = principal_axes(tensor).axis or 0.0
    away = (angle - centre + np.pi / 2) % np.pi - np.pi / 2
    return float(np.sqrt(np.mean(away**2)))


def outline_axis(mask: NDArray[np.bool_]) -> float | None:
    """Direction of the outline's long axis (rad) from its second moments of area; None where no direction is longer.

    Examples
    --------
    >>> bar = np.zeros((9, 9), bool); bar[4, 1:8] = True
    >>> outline_axis(bar)
    0.0
    """
    rows, columns = np.nonzero(mask)
    c = np.cov(np.stack([columns, rows])) if rows.size > 2 else np.eye(2)
    return principal_axes(np.array([c[0, 0], c[0, 1], c[1, 1]])).axis

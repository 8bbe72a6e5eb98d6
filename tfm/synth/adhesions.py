"""Adhesions of an invented cell: where they sit, how they pull, and how the pulls are made to balance."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["adhesion_forces", "adhesion_places", "balanced", "patches"]


def adhesion_places(
    rim: NDArray[np.float64],
    centroid: NDArray[np.float64],
    angle: float,
    count: int,
    polarity: float,
    rng: np.random.Generator,
) -> NDArray[np.float64]:
    """``(count, 2)`` m: places 1-3 um inside the rim, more of them towards the two ends."""
    arm = rim - centroid
    along = arm @ np.array([np.cos(angle), np.sin(angle)])
    along = along / np.abs(along).max()
    step = np.linalg.norm(np.roll(rim, -1, axis=0) - rim, axis=1)
    weight = step * (0.25 + np.abs(along) ** 2) * np.clip(1 + polarity * np.sign(along), 0.1, None)
    # One draw in every count-th part of the weight: adhesions spread along the rim instead of piling up.
    cumulative = np.cumsum(weight) / weight.sum()
    chosen = np.searchsorted(cumulative, (np.arange(count) + rng.uniform(0.1, 0.9, count)) / count).clip(
        0, len(rim) - 1
    )
    distance = np.linalg.norm(arm[chosen], axis=1)
    inward = np.minimum(rng.uniform(1.0e-6, 3.0e-6, count) / distance, 0.45)
    places: NDArray[np.float64] = rim[chosen] - arm[chosen] * inward[:, None]
    return places


def adhesion_forces(
    places: NDArray[np.float64],
    centroid: NDArray[np.float64],
    angle: float,
    anisotropy: float,
    polarity: float,
    rng: np.random.Generator,
) -> NDArray[np.float64]:
    """``(count, 2)`` relative forces, roughly inwards, unequal in size."""
    arm = places - centroid
    axis = np.array([np.cos(angle), np.sin(angle)])
    across = np.array([-axis[1], axis[0]])
    inward = -arm / np.linalg.norm(arm, axis=1, keepdims=True)
    turn = rng.normal(0, 0.25, len(places))
    cosine, sine = np.cos(turn)[:, None], np.sin(turn)[:, None]
    inward = inward * cosine + np.stack([-inward[:, 1], inward[:, 0]], axis=1) * sine
    pull = (inward @ axis)[:, None] * axis + (1 - anisotropy) * (inward @ across)[:, None] * across
    size = rng.lognormal(0.0, 0.3, len(places)) * (
        0.5 + np.linalg.norm(arm, axis=1) / np.linalg.norm(arm, axis=1).max()
    )
    size = size * np.clip(1 + 0.5 * polarity * np.sign(arm @ axis), 0.1, None)
    forces: NDArray[np.float64] = pull * size[:, None]
    return forces


def patches(
    x: NDArray[np.float64],
    y: NDArray[np.float64],
    inside: NDArray[np.float64],
    places: NDArray[np.float64],
    forces: NDArray[np.float64],
    centroid: NDArray[np.float64],
    rng: np.random.Generator,
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Every adhesion's force spread over an elliptical patch that points at the cell's middle; sum, weight, forces."""
    applied = np.zeros_like(forces)
    traction = np.zeros((2, len(y), len(x)))
    weight = np.zeros((len(y), len(x)))
    areas = rng.uniform(1.5e-12, 8.0e-12, len(places))
    for number, ((px, py), pull, area) in enumerate(zip(places, forces, areas, strict=True)):
        # A larger adhesion carries more force: the stress on it is what cells keep alike (common practice).
        force, stretch = pull * area, rng.uniform(1.2, 2.0)
        # The profile (1 - r^2)^2 falls to half where r^2 = 1 - 1/sqrt(2); that contour encloses the quoted area.
        minor = np.sqrt(area / (np.pi * stretch * (1 - np.sqrt(0.5))))
        major = minor * stretch
        theta = np.arctan2(py - centroid[1], px - centroid[0])
        cols = np.flatnonzero(np.abs(x - px) <= major)
        rows = np.flatnonzero(np.abs(y - py) <= major)
        if not (len(cols) and len(rows)):
            continue
        dx, dy = x[cols][None, :] - px, y[rows][:, None] - py
        r2 = ((dx * np.cos(theta) + dy * np.sin(theta)) / major) ** 2 + (
            (dy * np.cos(theta) - dx * np.sin(theta)) / minor
        ) ** 2
        profile = np.where(r2 < 1, (1 - r2) ** 2, 0.0) * inside[np.ix_(rows, cols)]
        total = profile.sum()
        if total <= 0:
            continue
        applied[number] = force
        block = np.ix_(rows, cols)
        weight[block] += profile / total * np.linalg.norm(force)
        for component in range(2):
            traction[component][block] += profile / total * force[component]
    return traction, weight, applied


def balanced(
    traction: NDArray[np.float64], weight: NDArray[np.float64], x: NDArray[np.float64], y: NDArray[np.float64]
) -> NDArray[np.float64]:
    """The traction with net force and torque taken out, changed only where adhesions are (in proportion to pull)."""
    share = weight / weight.sum()
    cx, cy = float((share * x[None, :]).sum()), float((share * y[:, None]).sum())
    dx, dy = np.broadcast_to(x[None, :] - cx, weight.shape), np.broadcast_to(y[:, None] - cy, weight.shape)
    out = traction
    for _ in range(3):  # the second and third pass only remove rounding
        out = out - share * out.sum(axis=(1, 2))[:, None, None]
        torque = float((dx * out[1] - dy * out[0]).sum())
        swirl = np.stack([-dy * share, dx * share])
        out = out - swirl * torque / float((share * (dx**2 + dy**2)).sum())
    return out

"""An outline guessed from the displacement itself, for fields where nobody drew one.

Displacement reaches far beyond the cell (it falls as 1/r^2), so its size alone says little about where the cell is. On
a gel, traction is to displacement as k in Fourier space (u_L = (1 - nu)/(G k) T_L, u_T = 1/(G k) T_T; Landau &
Lifshitz, Theory of Elasticity, sec. 8), and **that** is local: |k| u, smoothed as far as the noise demands, stands
where the cell pulls. Stiffness only scales it; for the ratio of the two factors a nearly incompressible gel is assumed.
It serves to find the place and is never used as a traction.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import fft, ndimage
from scipy.spatial import ConvexHull
from skimage import draw

from tfm.errors import InputError, MeasurementError
from tfm.images.model import Outlines

__all__ = ["propose_outline"]

_fill_polygon: Any = draw.polygon  # the library declares no types

Field = NDArray[np.float64]

#: Standard deviations above which a spot is no noise: exp(-5^2 / 2) of 10^4 grid points is once in 30 fields, and three
#: neighbours must agree.
_ABOVE_NOISE = 5.0
#: A spot counts when its own peak is above this many: the errors of real vectors have longer tails than a Gaussian.
_CERTAIN = 7.0
#: Part of the peak nearby (within a square of this many grid points) below which pull is the blur of a stronger spot.
_OF_PEAK = 0.15
_REACH = 21
#: |sum of pull| / sum of |pull| above which a spot cannot be a whole cell.
_UNBALANCED = 0.35
_NOTE = (
    "outline proposed from the displacement, not drawn: a fainter cell may be missing and neighbours may be joined; "
    "give an outline for numbers to rely on"
)


@dataclass
class _Spot:
    points: NDArray[np.intp]  # (n, 2) row, column on the grid
    pull: Field  # (2,) summed indicator
    strength: float  # summed magnitude

    @property
    def unbalanced(self) -> bool:
        return float(np.hypot(*self.pull)) > _UNBALANCED * self.strength


def propose_outline(
    u: Field,
    x: Field,
    y: Field,
    pixel_size: float,
    shape: tuple[int, int],
    noise: float,
    *,
    independent_area: float | None = None,
) -> Outlines:
    """Regions that contain the pull that the displacement shows, generously; one per group of spots in balance.

    Parameters
    ----------
    u
        ``(2, ny, nx)`` m, component 0 = x; NaN where not measured.
    x, y
        ``(nx,)`` and ``(ny,)`` m, evenly spaced grid positions.
    pixel_size
        m.
    shape
        ``(rows, columns)`` of the bead image.
    noise
        m, root mean square error of one component; NaN when unknown (then the field's own median decides).
    independent_area
        m^2 of ground per independent vector; larger than the square of the spacing where windows overlap.

    Raises
    ------
    InputError
        ``displacement-grid`` for a grid that is too small or uneven.
    MeasurementError
        ``no-displacement`` when nothing rises above the noise.
    """
    spacing = _spacing(u, x, y)
    valid: NDArray[np.bool_] = np.asarray(np.isfinite(u).all(axis=0))
    if np.count_nonzero(valid) < 0.2 * valid.size:
        raise MeasurementError(
            "too few displacements were measured to propose an outline",
            code="no-displacement",
            remedy="draw the outline",
        )
    filled = np.stack([_fill_gaps(component, valid) for component in u])
    overlap = 1.0 if independent_area is None else max(1.0, independent_area / spacing**2)
    pull, width, sd = _local_pull(filled, noise if math.isfinite(noise) else 0.0, overlap)
    size = np.hypot(*pull) / _border_gain(width, valid.shape)
    # Blur reaches as far as the spots of one cell lie apart; a faint cell farther off is not measured by a strong one.
    core = size > np.maximum(_ABOVE_NOISE * sd, _OF_PEAK * ndimage.maximum_filter(size, size=_REACH))
    core &= ndimage.binary_dilation(valid, iterations=2)
    spots = _spots(core, pull, size, least=_CERTAIN * sd)
    if not spots:
        raise _nothing()
    groups = _join_unbalanced(spots)
    hulls = _separate_hulls(groups, x, y, pixel_size, spacing)
    labels = _draw(hulls, shape, margin=(1.0 + width) * spacing / pixel_size)
    notes = [_NOTE]
    if any(group.unbalanced for group in groups):
        notes.append("the displacement shows one-sided pull: a part of the cell may lie outside the image")
    return Outlines(labels, "proposed from displacement", tuple(notes))


def _nothing() -> MeasurementError:
    return MeasurementError(
        "no displacement rises above the noise, so no outline can be proposed",
        code="no-displacement",
        remedy="draw the outline, or check that the cells pull in this field",
    )


def _spacing(u: Field, x: Field, y: Field) -> float:
    if u.ndim != 3 or u.shape != (2, y.size, x.size) or min(x.size, y.size) < 8:
        raise InputError(
            f"a displacement of shape {u.shape} on {y.size} x {x.size} positions",
            code="displacement-grid",
            remedy="give u as (2, ny, nx) on a grid of at least 8 x 8",
        )
    steps = np.concatenate([np.diff(x), np.diff(y)])
    spacing = float(np.median(steps))
    if not spacing > 0 or np.abs(steps - spacing).max() > 0.01 * spacing:
        raise InputError(
            "the displacement's grid is uneven", code="displacement-grid", remedy="give equal steps in x and y"
        )
    return spacing


def _fill_gaps(component: Field, valid: NDArray[np.bool_]) -> Field:
    """Gaps from their neighbours (normalised convolution); these values find a place and enter no result."""
    if valid.all():
        return component.astype(np.float64)
    known = np.where(valid, component, 0.0)
    result = known.copy()
    for sigma in (1.5, 4.0, 16.0):
        weight = ndimage.gaussian_filter(valid.astype(np.float64), sigma)
        smooth = ndimage.gaussian_filter(known, sigma)
        todo = ~valid & (result == 0.0) & (weight > 0.02)
        result[todo] = smooth[todo] / weight[todo]
    return result


def _local_pull(u: Field, noise: float, overlap: float) -> tuple[Field, float, float]:
    """|k| u at the finest smoothing whose peak is clear of noise: ``(2, ny, nx)``, smoothing in grid steps, its sd."""
    for width in (1.0, 1.5, 2.2, 3.2):
        pull, gain = _half_laplacian(u, width, overlap)
        size = np.hypot(*pull) / _border_gain(width, u.shape[1:])
        # Away from the cells only noise is left, and a Rayleigh variable's median is 1.177 sd.
        measured = float(np.median(size)) / 1.1774
        sd = max(noise * gain, measured)
        if float(size.max()) > 2.0 * _ABOVE_NOISE * sd:
            break
    return pull, width, sd


def _border_gain(width: float, shape: tuple[int, ...]) -> Field:
    """How much more noise there is at the mirrored border (twice the variance) and in its corners (four times)."""
    gains = []
    for length in shape:
        from_border = np.minimum(np.arange(length), np.arange(length)[::-1])
        gains.append(1.0 + (math.sqrt(2.0) - 1.0) * np.exp(-((from_border / width) ** 2)))
    return np.outer(gains[0], gains[1])


def _half_laplacian(u: Field, width: float, overlap: float) -> tuple[Field, float]:
    ny, nx = u.shape[1:]
    py, px = ny // 2, nx // 2
    # A mirrored border has no jump, which |k| would turn into a spot.
    padded = np.pad(u, ((0, 0), (py, py), (px, px)), mode="symmetric")
    shape = padded.shape[1:]
    ky = 2.0 * np.pi * fft.fftfreq(shape[0])[:, None]
    kx = 2.0 * np.pi * fft.rfftfreq(shape[1])[None, :]
    k = np.hypot(kx, ky)
    low_pass = k * np.exp(-0.5 * (k * width) ** 2)
    safe = np.where(k > 0, k, 1.0)
    spectrum = fft.rfft2(padded, axes=(1, 2))
    along = (kx * spectrum[0] + ky * spectrum[1]) / safe
    # u_L carries (1 - nu) = 1/2 of what the same transverse traction gives: twice the weight.
    scaled = np.stack([low_pass * (spectrum[0] + along * kx / safe), low_pass * (spectrum[1] + along * ky / safe)])
    pull = fft.irfft2(scaled, s=shape, axes=(1, 2))[:, py : py + ny, px : px + nx]
    full = 2.0 * np.pi * np.hypot(fft.fftfreq(256)[:, None], fft.fftfreq(256)[None, :])
    # Errors of overlapping windows are white noise smoothed over as many grid points as share their pixels: a Gaussian
    # of s^2 = overlap / (4 pi) leaves the variance at 1 and the spectrum at overlap * exp(-k^2 s^2).
    spectrum_of_noise = (
        overlap * np.exp(-(full**2) * overlap / (4.0 * math.pi)) if overlap > 1.0 else np.ones_like(full)
    )
    # Mean square gain of one component: half longitudinal (weight 2), half transverse (weight 1).
    gain = math.sqrt(2.5 * float(np.mean((full * np.exp(-0.5 * (full * width) ** 2)) ** 2 * spectrum_of_noise)))
    return pull, gain


def _spots(core: NDArray[np.bool_], pull: Field, size: Field, *, least: float) -> list[_Spot]:
    labels, count = ndimage.label(core, structure=np.ones((3, 3)))
    spots = []
    for number in range(1, count + 1):
        inside = labels == number
        if np.count_nonzero(inside) >= 3 and float(size[inside].max()) > least:
            spots.append(_Spot(np.argwhere(inside), pull[:, inside].sum(axis=1), float(size[inside].sum())))
    return spots


def _join_unbalanced(spots: list[_Spot]) -> list[_Spot]:
    """Spots that pull one way only are joined with the partner that balances them best, near ones preferred."""
    groups = list(spots)
    while len(groups) > 1:
        worst = max(groups, key=lambda g: float(np.hypot(*g.pull)) if g.unbalanced else -1.0)
        if not worst.unbalanced:
            break
        others = [g for g in groups if g is not worst]

        def cost(other: _Spot, worst: _Spot = worst) -> float:
            gap = np.sqrt(((worst.points[:, None, :] - other.points[None, :, :]) ** 2).sum(axis=2)).min()
            left = float(np.hypot(*(worst.pull + other.pull))) / float(np.hypot(*worst.pull))
            return float(gap) * (0.3 + left)

        partner = min(others, key=cost)
        joined = _Spot(
            np.concatenate([worst.points, partner.points]), worst.pull + partner.pull, worst.strength + partner.strength
        )
        groups = [g for g in others if g is not partner] + [joined]
    return groups


def _corners(spot: _Spot, x: Field, y: Field, pixel_size: float, spacing: float) -> Field:
    """Corners of the spot's grid cells, ``(n, 2)`` x, y in pixels."""
    half = 0.5 * spacing
    px, py = x[spot.points[:, 1]], y[spot.points[:, 0]]
    corners = [np.stack([px + sx * half, py + sy * half], axis=1) for sx in (-1, 1) for sy in (-1, 1)]
    return np.concatenate(corners) / pixel_size


def _separate_hulls(groups: list[_Spot], x: Field, y: Field, pixel_size: float, spacing: float) -> list[Field]:
    """Convex hulls, ``(n, 2)`` x, y in pixels; groups whose hulls overlap are one cell."""
    clouds = [_corners(group, x, y, pixel_size, spacing) for group in groups]
    while True:
        hulls = [cloud[ConvexHull(cloud).vertices] for cloud in clouds]
        pair = next(
            ((i, j) for i in range(len(hulls)) for j in range(i + 1, len(hulls)) if _overlap(hulls[i], hulls[j])), None
        )
        if pair is None:
            return hulls
        clouds[pair[0]] = np.concatenate([clouds[pair[0]], clouds[pair[1]]])
        del clouds[pair[1]]


def _overlap(first: Field, second: Field) -> bool:
    """Separating axis: two convex polygons are apart when some edge's normal parts them."""
    for polygon in (first, second):
        for edge in np.roll(polygon, -1, axis=0) - polygon:
            normal = np.array([-edge[1], edge[0]])
            a, b = first @ normal, second @ normal
            if a.max() < b.min() or b.max() < a.min():
                return False
    return True


def _draw(hulls: list[Field], shape: tuple[int, int], *, margin: float) -> NDArray[np.int32]:
    labels = np.zeros(shape, dtype=np.int32)
    nearest = np.full(shape, np.inf)
    # Cells from the top left, so that the same field always numbers them alike.
    for number, hull in enumerate(sorted(hulls, key=lambda h: (h[:, 1].mean(), h[:, 0].mean())), start=1):
        inside = np.zeros(shape, dtype=bool)
        rows, columns = _fill_polygon(hull[:, 1], hull[:, 0], shape)
        inside[rows, columns] = True
        if not inside.any():
            continue
        # Generous: adhesions at the rim must lie inside, and a tenth of the cell's radius costs little.
        reach = margin + 0.1 * math.sqrt(np.count_nonzero(inside) / math.pi)
        distance = ndimage.distance_transform_edt(~inside)
        take = (distance <= reach) & (distance < nearest)
        labels[take] = number
        nearest[take] = distance[take]
    if not labels.any():
        raise _nothing()
    return labels

"""Fields measured elsewhere, as the rooms want them: displacement with its precision, or traction and what it moves."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from tfm.batch.frames import FrameResult, infer, quiet_ground
from tfm.batch.inputs import RowFiles
from tfm.batch.measured import MeasuredField, read_measured
from tfm.batch.settings import RowValues, RunSettings
from tfm.displacement import DisplacementField
from tfm.displacement.noise import vector_noise
from tfm.errors import InputError, MeasurementError
from tfm.gel import Gel, displacement
from tfm.images import Outlines, open_frames, propose_outline, read_outlines
from tfm.traction import TractionField
from tfm.traction.lattice import Lattice, cover_outlines

__all__ = ["MeasuredSource", "open_measured"]

#: Noise below this share of the largest displacement cannot be told from rounding.
_LEAST_NOISE = 1e-3


@dataclass(frozen=True)
class MeasuredSource:
    """A field measured elsewhere, with its outlines on an image of ``pixel`` metres."""

    row: RowValues
    settings: RunSettings
    field: MeasuredField
    outlines: Outlines | None
    gel: Gel
    pixel: float
    shape: tuple[int, int]

    @property
    def frames(self) -> int:
        """Number of frames in the file."""
        return int(self.field.values.shape[0])

    def measure(self, t: int) -> FrameResult:
        """Traction of one frame.

        Raises
        ------
        TfmError
            When this frame cannot be measured.
        """
        values = self.field.values[t]
        if self.row.source == "traction":
            return self._from_traction(t, values)
        outlines = self.outlines
        mask = None if outlines is None else quiet_ground(outlines.labels, self.pixel)
        field = _with_precision(self.field, values, mask, self.pixel)
        if outlines is None:
            outlines = propose_outline(
                field.u, field.x, field.y, self.pixel, self.shape, field.noise, independent_area=field.independent_area
            )
            field = _with_precision(self.field, values, quiet_ground(outlines.labels, self.pixel), self.pixel)
        method = "bounded" if self.settings.method == "auto" else self.settings.method
        traction = infer(method, self.settings, field, self.pixel, outlines, self.gel)
        return FrameResult(t, field, traction, outlines, ())

    def _from_traction(self, t: int, values: NDArray[np.float64]) -> FrameResult:
        if self.outlines is None:
            raise InputError(
                "a traction field needs outlines: moments are sums over cells",
                code="no-outline",
                column="outline",
                remedy="give a label image or polygons",
            )
        gaps = int(np.count_nonzero(~np.isfinite(values).all(axis=0)))
        filled = np.where(np.isfinite(values), values, 0.0)
        lattice = Lattice(float(self.field.x[0]), float(self.field.y[0]), self.field.spacing, filled.shape[1:])
        labels = cover_outlines(lattice, self.outlines.labels, self.pixel)
        covered_gap = int(np.count_nonzero(~np.isfinite(values).all(axis=0) & (labels > 0)))
        if covered_gap:
            raise MeasurementError(
                f"{covered_gap} of {int((labels > 0).sum())} points under the cells have no traction",
                code="gaps-under-cell",
                remedy="give the traction of every point inside the outlines",
            )
        inside = np.where(labels > 0, filled, 0.0)
        covariance = _traction_noise(filled, labels, lattice, self.outlines, self.pixel)
        notes = ["traction was measured elsewhere: what lies outside the outlines is left out"]
        if covariance:
            notes.append("error bars come from the scatter of the given traction outside the outlines")
        else:
            notes.append("the given traction is zero outside the outlines, so its error is not known")
        if gaps:
            notes.append(f"{gaps} points outside the cells have no traction")
        traction = TractionField(
            x=lattice.x,
            y=lattice.y,
            spacing=lattice.spacing,
            traction=inside,
            displacement=displacement(self.gel, inside, lattice.spacing),
            labels=labels,
            gel=self.gel,
            method="given",
            posterior=None,
            offset=np.zeros(2),
            misfit=math.nan,
            notes=tuple(notes),
            dipole_covariance=covariance,
        )
        return FrameResult(t, None, traction, self.outlines, ())


def _with_precision(
    grid: MeasuredField, values: NDArray[np.float64], quiet: NDArray[np.bool_] | None, pixel: float
) -> DisplacementField:
    """A displacement field with the noise that its own quiet ground shows.

    Vectors of overlapping windows are alike: the second differences grow with the distance of the vectors until the
    windows share nothing. That distance is the independent one, and the noise found there is the vectors' noise.
    """
    valid: NDArray[np.bool_] = np.asarray(np.isfinite(values).all(axis=0), dtype=bool)
    ground = valid.copy()
    if quiet is not None:
        rows = np.clip(np.rint(grid.y / pixel).astype(int), 0, quiet.shape[0] - 1)
        columns = np.clip(np.rint(grid.x / pixel).astype(int), 0, quiet.shape[1] - 1)
        ground &= quiet[np.ix_(rows, columns)]
    found = {k: vector_noise(values, ground, k) for k in (1, 2, 3, 4)}
    found = {k: v for k, v in found.items() if math.isfinite(v)}
    notes = []
    if found:
        largest = max(found.values())
        apart = next(k for k, v in found.items() if v >= 0.8 * largest)
        noise = found[apart]
    else:
        apart, noise = 4, math.nan
        notes.append("no quiet ground in the given displacement: its noise is taken as a tenth of its spread")
    size = np.hypot(values[0], values[1])[valid]
    peak = float(size.max()) if size.size else 0.0
    if peak == 0.0:
        raise MeasurementError(
            "all displacements are zero", code="no-displacement", remedy="check the file and its units"
        )
    used = noise if math.isfinite(noise) else 0.1 * float(np.sqrt(np.mean(size**2)))
    used = max(used, _LEAST_NOISE * peak)
    weight = np.where(valid, 1.0 / used**2, 0.0)
    return DisplacementField(
        x=grid.x,
        y=grid.y,
        u=values,
        precision=np.stack([weight, np.zeros_like(weight), weight]),
        valid=valid,
        drift=np.zeros(2),
        noise=noise,
        independent_area=(apart * grid.spacing) ** 2,
        rejected=int(np.count_nonzero(~valid)),
        settings={"source": "measured elsewhere", "independent_spacing": apart},
        notes=tuple(notes),
    )


def _traction_noise(
    traction: NDArray[np.float64], labels: NDArray[np.int32], lattice: Lattice, outlines: Outlines, pixel: float
) -> dict[int, NDArray[np.float64]]:
    """``(3, 3)`` (N m)^2 by cell: scatter of the given traction on ground without cells, carried to the dipole.

    The scatter's own correlation is taken from the ground: the summed autocorrelation multiplies the variance of a sum
    of independent points.
    """
    ground = labels == 0
    away = ndimage.binary_erosion(ground, iterations=2, border_value=1)
    ground = away if away.sum() > 50 else ground
    if ground.sum() < 50:
        return {}
    noise2 = float(np.mean(traction[:, ground] ** 2))
    if noise2 <= (1e-9 * float(np.abs(traction).max())) ** 2:
        return {}
    correlated = 1.0
    for step in range(1, 6):
        pairs = ground[:, step:] & ground[:, :-step]
        if pairs.sum() < 50:
            break
        r = float(np.mean((traction[:, :, step:] * traction[:, :, :-step])[:, pairs])) / noise2
        if r < 0.05:
            break
        correlated += 2.0 * r
    da = lattice.spacing**2
    found = {}
    for label in (int(v) for v in np.unique(labels) if v > 0):
        rows, columns = np.nonzero(outlines.labels == label)
        on = labels == label
        dx = ((lattice.x - columns.mean() * pixel)[None, :] * on)[on] * da
        dy = ((lattice.y - rows.mean() * pixel)[:, None] * on)[on] * da
        zero = np.zeros_like(dx)
        gains = np.stack([np.concatenate(p) for p in ((dx, zero), (0.5 * dy, 0.5 * dx), (zero, dy))])
        found[label] = noise2 * correlated**2 * gains @ gains.T
    return found


def open_measured(row: RowValues, files: RowFiles, settings: RunSettings, gel: Gel) -> MeasuredSource:
    """Read the field and its outlines.

    Raises
    ------
    TfmError
        For a file that cannot be used.
    """
    field = read_measured(files.paths[row.source], row.source)
    pixel = row.pixel if row.pixel is not None else field.spacing
    shape = (round(float(field.y[-1]) / pixel) + 1, round(float(field.x[-1]) / pixel) + 1)
    outlines = None
    if files.outline:
        path = files.paths["outline"]
        if path.suffix.lower() in {".tif", ".tiff"}:
            shape = open_frames(path, labels=not files.outline.startswith("auto:")).shape
        outlines = read_outlines(files.outline, shape)
    if max(shape) > 20000:
        raise InputError(
            f"the field spans {shape[1]} x {shape[0]} pixels",
            code="pixel-size-conflict",
            column="pixel",
            remedy="check the pixel size and the units of the positions",
        )
    return MeasuredSource(row, settings, field, outlines, gel, pixel, shape)

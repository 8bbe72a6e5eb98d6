"""Fields that were measured elsewhere: displacement or traction on a regular grid, as CSV or netCDF.

CSV: one row per grid point with ``x_um,y_um`` and ``ux_um,uy_um`` or ``tx_Pa,ty_Pa``, in any order; an empty cell is a
vector that was not measured. netCDF: the layout of ``fields/<field>.nc`` (:mod:`tfm.batch.netcdf`).
"""

from __future__ import annotations

import csv
import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from tfm.errors import InputError, MeasurementError
from tfm.units import normalise_unit, to_si

__all__ = ["MeasuredField", "check_measured", "read_measured"]

Array = NDArray[np.float64]
_CSV = {"displacement": ("ux_um", "uy_um", 1e-6), "traction": ("tx_Pa", "ty_Pa", 1.0)}
_HDF5 = b"\x89HDF\r\n\x1a\n"
_SMALLEST = 8
_REGULAR = "give a regular square grid: every x with every y, evenly spaced, the same step along x and y"


@dataclass(frozen=True)
class MeasuredField:
    """A vector field on a square grid.

    Attributes
    ----------
    x, y
        ``(nx,)`` and ``(ny,)`` m, ascending.
    values
        ``(frames, 2, ny, nx)`` in m or Pa; NaN where not measured.
    """

    x: Array
    y: Array
    values: Array

    @property
    def spacing(self) -> float:
        """m between neighbouring points."""
        return float(self.x[1] - self.x[0])


def _axis(values: Array, name: str, file: str) -> Array:
    """The sorted positions along one axis; points that differ by rounding of the file are one position."""
    ordered = np.unique(values)
    step = np.median(np.diff(ordered)) if ordered.size > 1 else 0.0
    if ordered.size > 1:
        close = np.diff(ordered) < 1e-3 * (ordered[-1] - ordered[0]) / max(math.sqrt(values.size), 2)
        ordered = ordered[np.concatenate([[True], ~close])]
        step = (ordered[-1] - ordered[0]) / max(ordered.size - 1, 1)
    if ordered.size < _SMALLEST:
        raise InputError(
            f"only {ordered.size} positions along {name}",
            code="small-grid",
            file=file,
            remedy=f"give at least {_SMALLEST}",
        )
    even = ordered[0] + step * np.arange(ordered.size)
    if np.max(np.abs(ordered - even)) > 0.02 * step:
        raise InputError(
            f"the positions along {name} are not evenly spaced", code="irregular-grid", file=file, remedy=_REGULAR
        )
    return np.asarray(even, dtype=float)


def _square(x: Array, y: Array, file: str) -> None:
    dx, dy = x[1] - x[0], y[1] - y[0]
    if abs(dx - dy) > 1e-3 * max(dx, dy):
        raise InputError(
            f"the step is {dx * 1e6:.4g} um along x and {dy * 1e6:.4g} um along y",
            code="irregular-grid",
            file=file,
            remedy=_REGULAR,
        )


def _read_csv(path: Path, kind: str) -> MeasuredField:
    file = str(path)
    first, second, factor = _CSV[kind]
    needed = ("x_um", "y_um", first, second)
    try:
        with path.open(newline="", encoding="utf-8-sig") as stream:
            reader = csv.reader(stream)
            header = [cell.strip() for cell in next(reader, [])]
            missing = [name for name in needed if name not in header]
            if missing:
                raise InputError(
                    f"no column {', '.join(missing)}",
                    code="missing-column",
                    file=file,
                    remedy=f"the header is {','.join(needed)}",
                )
            places = [header.index(name) for name in needed]
            rows = [
                _numbers(row, places, needed, file, reader.line_num)
                for row in reader
                if any(cell.strip() for cell in row)
            ]
    except (UnicodeDecodeError, csv.Error) as error:
        raise InputError(
            f"this is no CSV table ({error})", code="not-csv", file=file, remedy="give CSV in UTF-8, or netCDF"
        ) from error
    data = np.array(rows, dtype=float).reshape(-1, 4)
    x, y = _axis(data[:, 0] * 1e-6, "x_um", file), _axis(data[:, 1] * 1e-6, "y_um", file)
    _square(x, y, file)
    column = np.rint((data[:, 0] * 1e-6 - x[0]) / (x[1] - x[0])).astype(int)
    line = np.rint((data[:, 1] * 1e-6 - y[0]) / (y[1] - y[0])).astype(int)
    if np.unique(line * x.size + column).size != len(data):
        raise InputError("some positions stand twice", code="irregular-grid", file=file, remedy=_REGULAR)
    if len(data) < 0.5 * x.size * y.size:
        raise InputError("the points do not fill a grid", code="irregular-grid", file=file, remedy=_REGULAR)
    values = np.full((1, 2, y.size, x.size), np.nan)
    values[0, 0, line, column], values[0, 1, line, column] = data[:, 2] * factor, data[:, 3] * factor
    return MeasuredField(x, y, values)


def _numbers(row: list[str], places: list[int], names: tuple[str, ...], file: str, line: int) -> list[float]:
    found = []
    for place, name in zip(places, names, strict=True):
        text = row[place].strip() if place < len(row) else ""
        try:
            value = float(text) if text or name in ("x_um", "y_um") else math.nan
        except ValueError:
            value = math.inf
        if math.isinf(value) or (math.isnan(value) and name in ("x_um", "y_um")):
            raise InputError(
                f"line {line}, {name}: '{text[:40]}' is no number",
                code="bad-number",
                file=file,
                remedy="correct the line",
            )
        found.append(value)
    return found


def _read_netcdf(path: Path, kind: str) -> MeasuredField:
    import xarray as xr

    file = str(path)
    try:
        with xr.open_dataset(path, engine="h5netcdf") as data:
            if kind not in data:
                raise InputError(
                    f"no variable '{kind}'",
                    code="missing-variable",
                    file=file,
                    remedy="give our layout: see docs/results.md",
                )
            variable = data[kind]
            if variable.ndim not in (3, 4) or variable.shape[-3] != 2:
                raise InputError(
                    f"'{kind}' has shape {variable.shape}",
                    code="bad-shape",
                    file=file,
                    remedy="give (2, ny, nx) or (frames, 2, ny, nx), component x first",
                )
            factor = _unit(variable.attrs.get("units"), "length" if kind == "displacement" else "stress", file)
            axes = []
            for dim in variable.dims[-2:]:
                if dim not in data.coords:
                    raise InputError(
                        f"no coordinate '{dim}'", code="missing-variable", file=file, remedy="give x and y positions"
                    )
                scale = _unit(data[dim].attrs.get("units"), "length", file)
                axes.append(_axis(np.asarray(data[dim].values, dtype=float) * scale, str(dim), file))
            values = np.asarray(variable.values, dtype=float) * factor
    except (OSError, ValueError, KeyError, RuntimeError) as error:
        raise MeasurementError(
            f"this netCDF file cannot be read ({type(error).__name__})",
            code="damaged-file",
            file=file,
            remedy="write it again",
        ) from error
    y, x = axes
    _square(x, y, file)
    values = values.reshape(-1, 2, y.size, x.size)
    return MeasuredField(x, y, np.where(np.isfinite(values), values, np.nan))


def _unit(unit: object, dimension: str, file: str) -> float:
    if not isinstance(unit, str) or not unit:
        raise InputError(
            "a variable without units", code="bare-number", file=file, remedy="set the CF attribute 'units'"
        )
    try:
        return to_si(1.0, normalise_unit(unit), dimension)
    except InputError as error:
        raise error.at(file=file) from error


def check_measured(path: Path, kind: str) -> None:
    """Quick look at a measured field: right columns or variables, without reading the numbers.

    Raises
    ------
    InputError
        ``missing-column`` or ``not-csv``.
    """
    with path.open("rb") as stream:
        start = stream.read(4096)
    if start.startswith(_HDF5):
        return
    try:
        header = start.splitlines()[0].decode("utf-8-sig") if start.splitlines() else ""
    except UnicodeDecodeError as error:
        raise InputError(
            "this is neither netCDF nor CSV in UTF-8", code="not-csv", file=str(path), remedy="give one of the two"
        ) from error
    needed = ("x_um", "y_um", *_CSV[kind][:2])
    missing = [name for name in needed if name not in [cell.strip() for cell in header.split(",")]]
    if missing:
        raise InputError(
            f"no column {', '.join(map(str, missing))}",
            code="missing-column",
            file=str(path),
            remedy=f"the header is {','.join(map(str, needed))}",
        )


def read_measured(path: Path, kind: str) -> MeasuredField:
    """Read a displacement or traction field.

    Parameters
    ----------
    path
        CSV or netCDF file.
    kind
        ``displacement`` or ``traction``.

    Raises
    ------
    InputError
        For missing columns, units, or a grid that is not regular and square.
    MeasurementError
        For a damaged file or a field without values.
    """
    with path.open("rb") as stream:
        netcdf = stream.read(8) == _HDF5
    field = _read_netcdf(path, kind) if netcdf else _read_csv(path, kind)
    if np.isfinite(field.values).all(axis=1).sum() < 40:
        raise MeasurementError(
            "fewer than 40 vectors have values", code="too-few-vectors", file=str(path), remedy="check the file"
        )
    if field.x[0] < -0.5 * field.spacing or field.y[0] < -0.5 * field.spacing:
        raise InputError(
            "some positions are negative",
            code="negative-position",
            file=str(path),
            remedy="count x to the right and y downwards from the centre of the image's first pixel",
        )
    return field

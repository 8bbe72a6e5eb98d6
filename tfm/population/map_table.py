"""``tfm map``: energy of a second cell around one row of a cells table, as netCDF and picture."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np

from tfm.errors import InputError
from tfm.gel import Gel
from tfm.population.maps import EnergyMap, energy_map
from tfm.population.output import write_drawn
from tfm.population.tables import read_rows, row_number
from tfm.units import to_si

__all__ = ["write_map"]


def write_map(
    table: Path,
    field: str,
    cell: str,
    gel: Gel,
    output: Path,
    *,
    frame: str = "0",
    second: tuple[float, float] | None = None,
    reach: float = 100e-6,
    nearest: float | None = None,
) -> list[str]:
    """Energy map around one cell of a cells table: ``energy_map.nc`` and ``energy_map.png`` in ``output``.

    Parameters
    ----------
    table
        ``cells.csv`` or a table with ``field, cell`` and the dipole columns.
    field, cell, frame
        Which row.
    gel
        The gel.
    second
        Principal values (major, minor) of the second cell, N m; the measured cell's own when None.
    reach, nearest
        m: half-width of the map, and the distance below which it stays empty (default: 1.5 times the diameter of a disc
        of the outline's area, about the cell's length; without an area a quarter of ``reach``).

    Raises
    ------
    InputError
        When the row does not exist, holds no dipole, or two rows match.
    """
    needed = ("field", "cell", "dipole_xx_pNm", "dipole_xy_pNm", "dipole_yy_pNm")
    rows = read_rows(table, needed)
    found = [
        (line, row)
        for line, row in enumerate(rows, start=2)
        if row["field"] == field and row["cell"] == cell and row.get("frame", frame) == frame
    ]
    if len(found) != 1:
        what = "no row" if not found else f"{len(found)} rows"
        raise InputError(
            f"{what} for field '{field}', cell {cell}, frame {frame}", code="no-such-cell", file=str(table),
            remedy="name one row of the table",
        )  # fmt: skip
    line, row = found[0]
    unit = to_si(1.0, "pN*m", "energy")
    values = [row_number(row, f"dipole_{k}_pNm", table, line) for k in ("xx", "xy", "yy")]
    if None in values:
        raise InputError(
            "the row holds no dipole", code="no-dipole", file=str(table), row=line, remedy="name another cell"
        )
    dipole = np.array([v for v in values if v is not None]) * unit
    sds = [row_number(row, f"dipole_{k}_sd_pNm", table, line) for k in ("xx", "xy", "yy")]
    covariance = None
    if None not in sds:
        covariance = np.diag(np.square([float(v) for v in sds if v is not None])) * unit**2
        for (i, j), name in zip(((0, 1), (0, 2), (1, 2)), ("xx_xy", "xx_yy", "xy_yy"), strict=True):
            number = row_number(row, f"cov_{name}_pNm2", table, line)
            covariance[i, j] = covariance[j, i] = (number or 0.0) * unit**2
    if second is None:
        own = np.linalg.eigvalsh(np.array([[dipole[0], dipole[1]], [dipole[1], dipole[2]]]))
        own = own[np.argsort(-np.abs(own))]
        second = (float(own[0]), float(own[1]))
    area = row_number(row, "area_um2", table, line)
    if nearest is None:
        nearest = 0.25 * reach if area is None else min(1.5 * 2 * math.sqrt(area / math.pi) * 1e-6, 0.8 * reach)
    result = energy_map(
        gel, dipole, major=second[0], minor=second[1], reach=reach, nearest=nearest, covariance=covariance
    )
    _write_map_netcdf(output / "energy_map.nc", result, field, cell)
    from tfm.population.figures import draw_energy_map

    title = f"{field}, cell {cell}: second cell of {second[0] * 1e12:.3g} and {second[1] * 1e12:.3g} pN m"
    write_drawn(output / "energy_map.png", lambda path: draw_energy_map(path, result, title=title, dipole=dipole))
    i, j = divmod(int(np.nanargmin(result.lowest)), result.lowest.shape[1])
    return [
        f"lowest energy on the map: {result.lowest[i, j] * 1e15:.3g} fJ at x {result.x[j] * 1e6:+.1f} um,"
        f" y {result.y[i] * 1e6:+.1f} um (down), angle {math.degrees(result.lowest_angle[i, j]):.0f} degrees",
        f"point dipoles: nothing is said within {nearest * 1e6:.0f} um; {output}",
    ]


def _write_map_netcdf(path: Path, result: EnergyMap, field: str, cell: str) -> None:
    import xarray as xr

    place, dims = ("y", "x"), ("angle", "y", "x")
    data = {
        "energy": (dims, result.energy * 1e15, {"units": "fJ", "long_name": "interaction energy of two point dipoles"}),
        "lowest": (
            place,
            result.lowest * 1e15,
            {"units": "fJ", "long_name": "energy at the angle that lowers it most"},
        ),
        "lowest_angle": (
            place,
            np.degrees(result.lowest_angle),
            {"units": "degree", "long_name": "that angle, from +x to +y"},
        ),
    }
    if result.energy_sd is not None:
        meaning = "standard deviation of energy from the measured cell's covariance"
        data["energy_sd"] = (dims, result.energy_sd * 1e15, {"units": "fJ", "long_name": meaning})
    dataset = xr.Dataset(
        data,
        coords={
            "x": ("x", result.x * 1e6, {"units": "um", "long_name": "second minus measured cell, to the right"}),
            "y": ("y", result.y * 1e6, {"units": "um", "long_name": "second minus measured cell, down"}),
            "angle": (
                "angle",
                np.degrees(result.angle),
                {"units": "degree", "long_name": "major axis of the second cell"},
            ),
        },
        attrs={
            "Conventions": "CF-1.11",
            "title": "interaction energy around a measured cell",
            "field": field,
            "cell": cell,
            "second_major_pNm": result.major * 1e12,
            "second_minor_pNm": result.minor * 1e12,
            "nearest_um": result.nearest * 1e6,
        },
    )

    def save(temporary: Path) -> None:
        temporary.parent.mkdir(parents=True, exist_ok=True)
        dataset.to_netcdf(temporary, engine="h5netcdf")

    write_drawn(path, save)

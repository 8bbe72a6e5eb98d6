"""Fields measured elsewhere: what is read, and what is refused with a remedy."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from tfm.batch.measured import check_measured, read_measured
from tfm.errors import TfmError

N = 12


def _table(edit: Callable[[list[list[str]]], None] | None = None, names: str = "x_um,y_um,ux_um,uy_um") -> str:
    rows = [[f"{j * 0.5}", f"{i * 0.5}", f"{0.1 * i:.3f}", f"{-0.2 * j:.3f}"] for i in range(N) for j in range(N)]
    if edit is not None:
        edit(rows)
    return names + "\n" + "\n".join(",".join(row) for row in rows) + "\n"


def _read(folder: Path, text: str | bytes, kind: str = "displacement") -> object:
    path = folder / "field.csv"
    path.write_bytes(text.encode() if isinstance(text, str) else text)
    return read_measured(path, kind)


def test_order_of_rows_and_columns_does_not_matter(tmp_path: Path) -> None:
    plain = read_measured(_write(tmp_path / "a.csv", _table()), "displacement")
    mixed = read_measured(_write(tmp_path / "b.csv", _table(lambda rows: rows.reverse())), "displacement")
    lines = _table().splitlines()
    turned = "\n".join(",".join(reversed(line.split(","))) for line in lines) + "\n"
    swapped = read_measured(_write(tmp_path / "c.csv", turned), "displacement")
    for other in (mixed, swapped):
        np.testing.assert_array_equal(plain.values, other.values)
    assert plain.values.shape == (1, 2, N, N)
    assert plain.spacing == pytest.approx(0.5e-6)
    assert plain.values[0, 0, 3, 5] == pytest.approx(0.3e-6)  # [row, column], component x first
    assert plain.values[0, 1, 3, 5] == pytest.approx(-1.0e-6)


def _write(path: Path, text: str) -> Path:
    path.write_text(text)
    return path


def test_an_empty_cell_is_a_vector_that_was_not_measured(tmp_path: Path) -> None:
    def edit(rows: list[list[str]]) -> None:
        rows[7][2] = ""
        del rows[20]

    field = read_measured(_write(tmp_path / "a.csv", _table(edit)), "displacement")
    assert np.isnan(field.values[0, 0]).sum() == 2


def _set(row: int, column: int, text: str) -> Callable[[list[list[str]]], None]:
    def edit(rows: list[list[str]]) -> None:
        rows[row][column] = text

    return edit


def _stretch(rows: list[list[str]]) -> None:
    for row in rows:
        row[0] = str(float(row[0]) * 2)


def _bend(rows: list[list[str]]) -> None:
    for row in rows:
        row[1] = str(float(row[1]) ** 1.5)


def _scatter(rows: list[list[str]]) -> None:
    rng = np.random.default_rng(0)
    for row in rows:
        row[0], row[1] = (str(v) for v in rng.uniform(0, 6, 2))


def _shift(rows: list[list[str]]) -> None:
    for row in rows:
        row[0] = str(float(row[0]) - 3)


def _thin(rows: list[list[str]]) -> None:
    rows[:] = [row for i, row in enumerate(rows) if i % 5 < 2]


def _blank(rows: list[list[str]]) -> None:
    for row in rows[:120]:
        row[2] = ""


BAD_FIELDS: list[tuple[str, str | bytes]] = [
    ("missing-column", _table(names="x,y,ux,uy")),
    ("missing-column", _table(names="x_um,y_um,tx_Pa,ty_Pa")),
    ("missing-column", _table().replace(",", ";")),
    ("bad-number", _table(_set(3, 2, "n/a"))),
    ("bad-number", _table(_set(3, 2, "inf"))),
    ("bad-number", _table(_set(3, 0, ""))),
    ("bad-number", _table(_set(3, 0, "nan"))),
    ("irregular-grid", _table(_stretch)),
    ("irregular-grid", _table(_bend)),
    ("irregular-grid", _table(_scatter)),
    ("irregular-grid", _table(_set(3, 0, "0.0"))),
    ("irregular-grid", _table(_thin)),
    ("small-grid", "x_um,y_um,ux_um,uy_um\n0,0,1,1\n1,0,1,1\n0,1,1,1\n1,1,1,1\n"),
    ("small-grid", "x_um,y_um,ux_um,uy_um\n"),
    ("negative-position", _table(_shift)),
    ("too-few-vectors", _table(_blank)),
    ("not-csv", _table().encode() + b"\xff\xfe,1,2,3\n"),
    ("damaged-file", b"\x89HDF\r\n\x1a\n" + bytes(200)),
]


@pytest.mark.parametrize(("code", "data"), BAD_FIELDS)
def test_bad_fields_are_refused_with_a_remedy(tmp_path: Path, code: str, data: str | bytes) -> None:
    with pytest.raises(TfmError) as caught:
        _read(tmp_path, data)
    assert caught.value.code == code
    assert caught.value.remedy
    assert str(tmp_path) in str(caught.value)


def test_the_header_alone_tells_a_wrong_table(tmp_path: Path) -> None:
    with pytest.raises(TfmError, match="no column tx_Pa"):
        check_measured(_write(tmp_path / "a.csv", _table()), "traction")
    check_measured(_write(tmp_path / "b.csv", _table()), "displacement")


def _dataset(**units: str) -> xr.Dataset:
    x = np.arange(N) * 0.5
    values = np.arange(2 * N * N, dtype=float).reshape(2, N, N)
    data = xr.Dataset({"displacement": (("component", "y", "x"), values)}, coords={"x": ("x", x), "y": ("y", x)})
    data["displacement"].attrs["units"] = units.get("displacement", "um")
    for name in ("x", "y"):
        data[name].attrs["units"] = units.get(name, "um")
    return data


def test_netcdf_units_are_read_and_not_assumed(tmp_path: Path) -> None:
    path = tmp_path / "a.nc"
    _dataset(displacement="nm").to_netcdf(path, engine="h5netcdf")
    field = read_measured(path, "displacement")
    assert field.values[0, 0, 0, 1] == pytest.approx(1e-9)
    assert field.spacing == pytest.approx(0.5e-6)


@pytest.mark.parametrize(
    ("change", "code"),
    [
        (lambda d: d.rename(displacement="u"), "missing-variable"),
        (lambda d: d.isel(component=0), "bad-shape"),
        (lambda d: d.drop_vars("x"), "missing-variable"),
        (lambda d: d.assign_coords(x=("x", d.x.values)), "bare-number"),
        (lambda d: d.assign_coords(x=("x", d.x.values**2, {"units": "um"})), "irregular-grid"),
    ],
)
def test_bad_netcdf(tmp_path: Path, change: Callable[[xr.Dataset], xr.Dataset], code: str) -> None:
    path = tmp_path / "a.nc"
    change(_dataset()).to_netcdf(path, engine="h5netcdf")
    with pytest.raises(TfmError) as caught:
        read_measured(path, "displacement")
    assert caught.value.code == code
    _dataset(displacement="kPa").to_netcdf(path, engine="h5netcdf")
    with pytest.raises(TfmError, match="not a unit of length"):
        read_measured(path, "displacement")

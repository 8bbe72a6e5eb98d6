"""Whole fields through the real rooms: small invented fields whose forces are known."""

from __future__ import annotations

import csv
import importlib.util
import json
import sys
from pathlib import Path

import numpy as np
import pytest
import tifffile
import xarray as xr
from numpy.typing import NDArray

from tfm.batch.run import RunOptions, RunSummary, run_sheet
from tfm.batch.settings import RunSettings
from tfm.gel import Gel
from tfm.gelcheck import GelEvidence
from tfm.synth.cells import make_cell_traction
from tfm.synth.fields import SyntheticField, make_field
from tfm.traction import TractionField

CHECKER = Path(__file__).parents[3] / "shared" / "check_results.py"
HEAD = "field,stressed,relaxed,outline,pixel,youngs_modulus,youngs_modulus_sd,poisson,thickness,condition"
GEL = "0.25 um,4 kPa,5 %,0.45,40 um,soft"
PIXEL = 0.25e-6


def _field(seed: int, moment: float = 0.6e-12, drift: tuple[float, float] = (0.7, -0.4)) -> SyntheticField:
    rng = np.random.default_rng(seed)
    cell = make_cell_traction(
        (256, 256), PIXEL, centre=(32e-6, 32e-6), length=30e-6, width=15e-6, angle=0.5, contractile_moment=moment,
        rng=rng, kind="elongated",
    )  # fmt: skip
    return make_field([cell], Gel(4e3, 0.45, 40e-6), rng, density_per_px2=0.03, photons=900.0, drift=drift)


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, SyntheticField]:
    """One field's images, outline and true displacement as files."""
    folder = tmp_path_factory.mktemp("study")
    made = _field(3)
    for name, image in (("s", made.stressed), ("r", made.relaxed), ("o", made.labels.astype(np.uint8))):
        tifffile.imwrite(folder / f"{name}.tif", image, photometric="minisblack")
    step = 4
    places = np.arange(0, 256, step)
    rows = ["x_um,y_um,ux_um,uy_um"]
    rng = np.random.default_rng(1)
    for i in places:
        for j in places:
            u = made.displacement[:, i, j] * 1e6 + rng.normal(0, 0.004, 2)
            rows.append(f"{j * 0.25},{i * 0.25},{u[0]:.6f},{u[1]:.6f}")
    rng.shuffle(rows[1:])
    (folder / "u.csv").write_text("\n".join(rows) + "\n")
    return folder, made


def _run(folder: Path, head: str, row: str, out: Path, method: str = "auto") -> RunSummary:
    sheet = folder / "sheet.csv"
    sheet.write_text(f"{head}\n{row}\n")
    settings = RunSettings.model_validate({"method": method, "gel_check": False})
    return run_sheet(sheet, out, settings=settings, options=RunOptions())


def _rows(out: Path, name: str) -> list[dict[str, str]]:
    with (out / name).open(newline="", encoding="utf-8") as stream:
        return list(csv.DictReader(stream))


def _breaches(out: Path, sheet: Path) -> str:
    """What the contract's own checker says, where it is there; the report is another room's."""
    if not CHECKER.exists():
        return ""
    spec = importlib.util.spec_from_file_location("check_results", CHECKER)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(sys, "argv", ["check", str(out), str(sheet)])
        with pytest.raises(SystemExit):
            module.main()
    return "\n".join(line for line in module.breaches if "report.html" not in line)


def _agrees(row: dict[str, str], truth: SyntheticField, share: float = 0.12) -> None:
    found, sd = float(row["contractile_moment_pNm"]), float(row["contractile_moment_sd_pNm"] or 0.0)
    want = float(truth.contractile_moments[0]) * 1e12
    assert abs(found - want) < max(share * want, 4 * sd)


def test_bead_images_to_tables(study: tuple[Path, SyntheticField], tmp_path: Path) -> None:
    folder, made = study
    summary = _run(folder, HEAD, f"one,s.tif,r.tif,o.tif,{GEL}", tmp_path)
    assert summary.exit_code == 0
    (cell,) = _rows(tmp_path, "cells.csv")
    assert (cell["field"], cell["cell"], cell["frame"], cell["condition"]) == ("one", "1", "0", "soft")
    _agrees(cell, made)
    assert float(cell["dipole_xx_pNm"]) < 0  # a contracting cell
    # 5 % of Young's modulus is 5 % of the moment: it has to be in the total error and not in the images' own.
    total, own = (float(cell[f"contractile_moment_{k}"]) for k in ("total_sd_pNm", "sd_pNm"))
    assert total**2 - own**2 > (0.045 * float(cell["contractile_moment_pNm"])) ** 2
    (field,) = _rows(tmp_path, "fields.csv")
    assert float(field["drift_x_px"]) == pytest.approx(0.7, abs=0.15)
    assert float(field["drift_y_px"]) == pytest.approx(-0.4, abs=0.15)
    (gel,) = _rows(tmp_path, "gel.csv")
    assert float(gel["youngs_modulus_Pa"]) == 4000.0
    assert float(gel["thickness_um"]) == 40.0
    assert _breaches(tmp_path, folder / "sheet.csv") == ""
    with xr.open_dataset(tmp_path / "fields" / "one.nc", engine="h5netcdf") as data:
        assert data.displacement.dims == ("frame", "component", "y", "x")
        assert data.traction.attrs["units"] == "Pa"
        force = data.traction.values.sum(axis=(2, 3)) * float(data.lattice_x[1] - data.lattice_x[0]) ** 2
        assert np.abs(force).max() < 1e-3 * float(cell["force_total_nN"]) * 1e-9  # balanced
        assert data.relaxed_image.shape == (256, 256)
        assert float(np.abs(data.residual_image).mean()) < 0.5
    record = json.loads((tmp_path / "fields" / "one.json").read_text())
    assert set(record["parts"]["inputs"]) == {"stressed", "relaxed", "outline"}
    assert record["budget"][0]["variance_pNm2"]["youngs_modulus"] > 0


@pytest.mark.parametrize("method", ["bounded", "fourier"])
def test_a_displacement_measured_elsewhere(study: tuple[Path, SyntheticField], tmp_path: Path, method: str) -> None:
    folder, made = study
    head = HEAD.replace("stressed,relaxed", "displacement")
    assert _run(folder, head, f"one,u.csv,o.tif,{GEL}", tmp_path, method).exit_code == 0
    (cell,) = _rows(tmp_path, "cells.csv")
    _agrees(cell, made, share=0.12 if method == "bounded" else 0.35)  # fourier smooths: docs/methods say how much
    (field,) = _rows(tmp_path, "fields.csv")
    # The scatter that was put on the vectors, from their quiet ground.
    assert 0.003 < float(field["displacement_noise_um"]) < 0.007
    assert field["drift_x_px"] in ("", "0")
    assert _breaches(tmp_path, folder / "sheet.csv") == ""


def test_results_of_one_run_start_another(study: tuple[Path, SyntheticField], tmp_path: Path) -> None:
    folder, _ = study
    head = HEAD.replace("stressed,relaxed", "displacement")
    _run(folder, head, f"one,u.csv,o.tif,{GEL}", tmp_path / "first")
    first = _rows(tmp_path / "first", "cells.csv")[0]
    (folder / "one.nc").write_bytes((tmp_path / "first" / "fields" / "one.nc").read_bytes())
    _run(folder, head, f"one,one.nc,o.tif,{GEL}", tmp_path / "second")
    second = _rows(tmp_path / "second", "cells.csv")[0]
    key = "contractile_moment_pNm"
    assert float(second[key]) == pytest.approx(float(first[key]), rel=1e-3)
    head = HEAD.replace("stressed,relaxed", "traction")
    _run(folder, head, f"one,one.nc,o.tif,{GEL}", tmp_path / "third")
    third = _rows(tmp_path / "third", "cells.csv")[0]
    assert float(third[key]) == pytest.approx(float(first[key]), rel=0.03)
    assert third["contractile_moment_sd_pNm"] == ""  # nothing outside the outlines tells its error
    assert third["status"] == "caution"


def test_a_traction_table_with_scatter_gets_an_error_bar(study: tuple[Path, SyntheticField], tmp_path: Path) -> None:
    folder, made = study
    cell = made.cells[0]
    rng = np.random.default_rng(5)
    noisy = cell.traction + rng.normal(0, 5.0, cell.traction.shape)
    n = cell.traction.shape[1]
    origin = 0.5 * (cell.spacing - PIXEL) * 1e6
    lines = ["x_um,y_um,tx_Pa,ty_Pa"]
    for i in range(n):
        for j in range(cell.traction.shape[2]):
            x, y = origin + j * cell.spacing * 1e6, origin + i * cell.spacing * 1e6
            lines.append(f"{x:.5f},{y:.5f},{noisy[0, i, j]:.4f},{noisy[1, i, j]:.4f}")
    (folder / "t.csv").write_text("\n".join(lines) + "\n")
    head = HEAD.replace("stressed,relaxed", "traction")
    assert _run(folder, head, f"one,t.csv,o.tif,{GEL}", tmp_path).exit_code == 0
    (row,) = _rows(tmp_path, "cells.csv")
    sd = float(row["contractile_moment_sd_pNm"])
    assert abs(float(row["contractile_moment_pNm"]) - float(made.contractile_moments[0]) * 1e12) < 4 * sd
    assert 0 < sd < 0.1
    assert float(row["strain_energy_fJ"]) == pytest.approx(float(made.strain_energies[0]) * 1e15, rel=0.1)


def test_swapped_images_are_suspected_by_the_sign(study: tuple[Path, SyntheticField], tmp_path: Path) -> None:
    folder, _ = study
    _run(folder, HEAD, f"one,r.tif,s.tif,o.tif,{GEL}", tmp_path, "bounded")
    (cell,) = _rows(tmp_path, "cells.csv")
    assert float(cell["contractile_moment_pNm"]) < 0
    assert cell["status"] == "caution"
    assert "are the stressed and the relaxed image swapped?" in cell["notes"]


def test_a_contradicted_gel_makes_every_number_a_caution(
    study: tuple[Path, SyntheticField], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    import tfm.batch.gelrow as gelrow

    folder, _ = study

    def contradicted(traction: TractionField, *_: object, **__: object) -> GelEvidence:
        return GelEvidence(gel=traction.gel, verdict="contradicted", poisson_best=0.45, notes=("nu is wrong",))

    monkeypatch.setattr(gelrow, "check_gel", contradicted)
    sheet = folder / "sheet.csv"
    sheet.write_text(f"{HEAD.replace('stressed,relaxed', 'displacement')}\none,u.csv,o.tif,{GEL}\n")
    assert run_sheet(sheet, tmp_path).exit_code == 0
    for name, key in (("cells", "notes"), ("fields", "message")):
        (row,) = _rows(tmp_path, f"{name}.csv")
        assert row["status"] == "caution"
        assert "the beads contradict the gel that was entered" in row[key]
    (gel,) = _rows(tmp_path, "gel.csv")
    assert (gel["verdict"], gel["notes"], gel["poisson_best"]) == ("contradicted", "nu is wrong", "0.45")


def _stack(folder: Path, frames: list[NDArray[np.uint16]], name: str) -> None:
    tifffile.imwrite(folder / name, np.stack(frames), imagej=True, metadata={"axes": "TYX", "finterval": 30.0})


def test_a_series_against_its_quietest_frame_is_called_a_change(tmp_path: Path) -> None:
    strong, weak = _field(7, 0.6e-12, (0.0, 0.0)), _field(7, 0.2e-12, (0.0, 0.0))
    folder = tmp_path / "study"
    folder.mkdir()
    _stack(folder, [strong.stressed, weak.stressed, strong.stressed], "s.tif")
    tifffile.imwrite(folder / "o.tif", strong.labels.astype(np.uint8), photometric="minisblack")
    summary = _run(folder, HEAD, f"one,s.tif,quietest,o.tif,{GEL}", tmp_path / "out", "bounded")
    assert summary.exit_code == 0
    cells, fields = _rows(tmp_path / "out", "cells.csv"), _rows(tmp_path / "out", "fields.csv")
    assert [f["frame"] for f in fields] == ["0", "1", "2"]
    assert "is the reference" in fields[1]["message"]
    assert [c["frame"] for c in cells] == ["0", "2"]
    assert [c["time_s"] for c in cells] == ["0", "60"]
    for cell in cells:
        assert "not a total" in cell["notes"]
        assert float(cell["contractile_moment_pNm"]) == pytest.approx(0.4, abs=0.12)


def test_a_bad_frame_fails_alone(study: tuple[Path, SyntheticField], tmp_path: Path) -> None:
    folder, made = study
    _stack(folder, [made.stressed, np.zeros_like(made.stressed)], "series.tif")
    summary = _run(folder, HEAD, f"one,series.tif,r.tif,o.tif,{GEL}", tmp_path, "bounded")
    fields = _rows(tmp_path, "fields.csv")
    assert [f["status"] for f in fields] == ["ok", "failed"]
    assert "constant-image" in fields[1]["message"]
    assert summary.exit_code == 0
    assert _breaches(tmp_path, folder / "sheet.csv") == ""

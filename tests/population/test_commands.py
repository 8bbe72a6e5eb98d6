"""The commands of the room on an invented results folder: what is written, what is said, what is refused."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import jsonschema
import numpy as np
import pytest
import xarray as xr

from tfm.errors import InputError, TfmError
from tfm.gel import Gel
from tfm.population.beat_table import BEAT_COLUMNS, write_beats
from tfm.population.commands import write_conditions, write_export, write_map, write_plan, write_stiffness
from tfm.population.plan import Setup
from tfm.population.tables import measured_cells, read_folder

COLUMNS = [
    "field", "cell", "frame", "time_s", "condition", "status", "notes", "x_um", "y_um", "area_um2",
    "outline_axis_deg", "dipole_xx_pNm", "dipole_xy_pNm", "dipole_yy_pNm", "dipole_xx_sd_pNm", "dipole_xy_sd_pNm",
    "dipole_yy_sd_pNm", "cov_xx_xy_pNm2", "cov_xx_yy_pNm2", "cov_xy_yy_pNm2", "contractile_moment_pNm",
    "contractile_moment_sd_pNm",
]  # fmt: skip
SCHEMA = json.loads((Path(__file__).parents[2] / "docs/export.schema.json").read_text(encoding="utf-8"))


def table(path):
    with path.open(encoding="utf-8", newline="") as handle:
        return list(csv.DictReader(handle))


def write_rows(path, columns, rows):
    with path.open("w", newline="", encoding="utf-8") as handle:
        writer = csv.DictWriter(handle, columns, restval="")
        writer.writeheader()
        writer.writerows(rows)


def cell_row(field, xx, yy, **changes):
    return {
        "field": field, "cell": "1", "frame": "0", "condition": "dish", "status": "ok", "x_um": "50", "y_um": "40",
        "area_um2": "600", "outline_axis_deg": "0", "dipole_xx_pNm": f"{xx}", "dipole_xy_pNm": "0.01",
        "dipole_yy_pNm": f"{yy}", "dipole_xx_sd_pNm": "0.02", "dipole_xy_sd_pNm": "0.01", "dipole_yy_sd_pNm": "0.02",
        "cov_xx_xy_pNm2": "0", "cov_xx_yy_pNm2": "0.0001", "cov_xy_yy_pNm2": "0",
        "contractile_moment_pNm": f"{-xx - yy}", "contractile_moment_sd_pNm": "0.03", **changes,
    }  # fmt: skip


@pytest.fixture
def results(tmp_path):
    """Twelve fields on three stiffnesses, moments 1.5 pN m E / (E + 6 kPa)."""
    rng = np.random.default_rng(0)
    cells, gels, sheet = [], [], []
    for e in (2000.0, 6000.0, 18000.0):
        for repeat in range(4):
            field = f"f{e:.0f}{repeat}"
            moment = 1.5 * e / (e + 6000) * (1 + 0.1 * rng.normal())
            cells.append(cell_row(field, -0.8 * moment, -0.2 * moment, condition=f"{e / 1e3:g} kPa"))
            gels.append({"field": field, "youngs_modulus_Pa": f"{e}", "poisson": "0.45", "verdict": "agrees"})
            sheet.append(
                {"field": field, "youngs_modulus [kPa]": f"{e / 1e3}", "youngs_modulus_sd [kPa]": f"{e / 2e4}"}
            )
    write_rows(tmp_path / "cells.csv", COLUMNS, cells)
    write_rows(
        tmp_path / "gel.csv", ["field", "youngs_modulus_Pa", "poisson", "thickness_um", "verdict", "notes"], gels
    )
    (tmp_path / "run.json").write_text(json.dumps({"sheet_rows": sheet}), encoding="utf-8")
    return tmp_path


def test_stiffness_writes_tables_a_figure_and_says_the_answer(results):
    said = write_stiffness([results], results / "out")
    fit = {r["quantity"]: r for r in table(results / "out/stiffness.csv")}
    assert float(fit["E_star"]["low"]) < 6000 < float(fit["E_star"]["high"])
    assert float(fit["P_inf"]["low"]) < 1.5 < float(fit["P_inf"]["high"])
    assert len(table(results / "out/stiffness_cells.csv")) == 12
    conditions = table(results / "out/conditions.csv")
    assert [row["condition"] for row in conditions] == ["2 kPa", "6 kPa", "18 kPa"]
    assert (results / "out/stiffness.png").stat().st_size > 10_000
    assert any("preferred response: saturating" in line for line in said)
    json.loads((results / "out/stiffness.json").read_text(encoding="utf-8"))
    assert not list(results.glob("out/.*"))


def test_conditions_are_compared_on_any_number_of_gels(results):
    rows = table(results / "cells.csv")
    for row in rows:
        row["condition"] = "drug" if row["field"].endswith(("0", "1")) else "control"
    write_rows(results / "cells.csv", list(rows[0]), rows)
    said = write_conditions([results], results / "out")
    difference = table(results / "out/comparisons.csv")
    assert [(r["first"], r["second"]) for r in difference] == [("drug", "control")]
    # The same stiffnesses in both groups: no difference.
    assert float(difference[0]["low_pNm"]) < 0 < float(difference[0]["high_pNm"])
    assert {r["condition"]: r["cells"] for r in table(results / "out/conditions.csv")} == {"drug": "6", "control": "6"}
    assert (results / "out/conditions.png").stat().st_size > 5_000
    assert any("drug: " in line and "over 6 cells" in line for line in said)


def test_the_error_of_the_modulus_comes_from_the_sheet(results):
    cells, _ = measured_cells(read_folder(results))
    assert cells[0].youngs_modulus == 2000
    assert cells[0].youngs_modulus_sd == pytest.approx(100)
    assert cells[0].dipole[0] == pytest.approx(-0.8e-12 * 1.5 * 0.25, rel=0.3)


def test_running_twice_writes_the_same_bytes(results):
    write_stiffness([results], results / "one")
    write_stiffness([results], results / "two")
    for path in sorted((results / "one").iterdir()):
        assert path.read_bytes() == (results / "two" / path.name).read_bytes(), path.name


def test_export_keeps_the_schema_and_says_change_where_it_is_one(results):
    run = json.loads((results / "run.json").read_text(encoding="utf-8"))
    run["sheet_rows"][0]["relaxed"] = "quietest"
    (results / "run.json").write_text(json.dumps(run), encoding="utf-8")
    said = write_export(results, results / "export.json", frame="y-up", draws=7)
    document = json.loads((results / "export.json").read_text(encoding="utf-8"))
    jsonschema.Draft202012Validator(SCHEMA).validate(document)
    assert [c["quantity"] for c in document["cells"][:2]] == ["change", "total"]
    assert document["populations"][0]["cells"] == 3  # the change is not counted
    assert document["cells"][0]["y_um"] == -40
    assert len(document["draws"]) == 21
    assert any("changes, not totals" in line for line in said)


def test_a_map_loads_with_units(results):
    said = write_map(results / "cells.csv", "f60000", "1", Gel(6e3, 0.45), results / "map", reach=60e-6)
    with xr.open_dataset(results / "map/energy_map.nc", engine="h5netcdf") as dataset:
        assert dataset.energy.dims == ("angle", "y", "x")
        assert dataset.energy.attrs["units"] == "fJ"
        assert dataset.x.attrs["units"] == "um"
        best = dataset.lowest.where(dataset.lowest == dataset.lowest.min(), drop=True)
        # The cell pulls along x: the best place is on its axis.
        assert abs(float(best.y[0])) < 5
        assert float(dataset.energy_sd.max()) > 0
    assert (results / "map/energy_map.png").stat().st_size > 10_000
    assert "lowest energy" in said[0]


def test_plan_ranks_what_helps(tmp_path):
    setup = Setup(Gel(5e3, 0.45), 0.5e-6, 112, 0.1e12, 400, 0.6e-6, 8, 1.5, 22e-6, 11e-6, 0.3e-12, distance=60e-6)
    said = write_plan(setup, tmp_path, cells=1, most_coefficients=120)
    rows = table(tmp_path / "plan.csv")
    assert rows[0]["change"] == "as asked"
    assert [float(r["better_by"]) for r in rows[1:]] == sorted((float(r["better_by"]) for r in rows[1:]), reverse=True)
    assert float(rows[0]["pair_energy_fJ"]) < 0
    assert (tmp_path / "plan.png").is_file()
    assert "what would help most" in said[-1]


def test_beats_of_a_series_with_two_cells(tmp_path):
    t = np.arange(0, 30, 0.1)
    rng = np.random.default_rng(1)
    rows = []
    for cell, lag in (("1", 0.0), ("2", 0.2)):
        moment = 1 + 0.3 * np.cos(2 * np.pi * (t - lag) / 1.5) + 0.02 * rng.normal(size=t.size)
        rows += [
            cell_row("heart", -m, 0.0, cell=cell, frame=str(k), time_s=f"{time:.3f}", contractile_moment_sd_pNm="0.02")
            for k, (time, m) in enumerate(zip(t, moment, strict=True))
        ]
    rows[5]["status"], rows[5]["contractile_moment_pNm"] = "failed", ""
    write_rows(tmp_path / "cells.csv", COLUMNS, rows)
    said = write_beats(tmp_path, tmp_path / "beats.csv")
    one, two, pair = table(tmp_path / "beats.csv")
    assert list(one) == list(BEAT_COLUMNS)
    assert float(one["period_s"]) == pytest.approx(1.5, abs=0.01)
    assert float(two["amplitude_pNm"]) == pytest.approx(0.6, abs=0.03)
    assert "1 frames left out" in one["notes"]
    # A frame is missing: no lag is made up.
    assert pair["lag_s"] == ""
    assert "missing" in pair["notes"]
    assert "2 traces, 2 beat" in said[0]
    rows[5]["status"], rows[5]["contractile_moment_pNm"] = "ok", "1.2"
    write_rows(tmp_path / "cells.csv", COLUMNS, rows)
    write_beats(tmp_path, tmp_path / "beats.csv")
    pair = table(tmp_path / "beats.csv")[2]
    assert float(pair["lag_s"]) == pytest.approx(0.2, abs=0.03)


def bad(path, change):
    rows = table(path / "cells.csv")
    change(rows)
    write_rows(path / "cells.csv", list(rows[0]), rows)


def test_errors_name_file_row_and_column(results, tmp_path):
    def spoil(rows):
        rows[2]["dipole_xx_pNm"] = "strong"

    bad(results, spoil)
    with pytest.raises(InputError, match=r"cells\.csv, row 4, column dipole_xx_pNm: 'strong' is not a number"):
        write_stiffness([results], results / "out")
    assert not (results / "out").exists()
    with pytest.raises(InputError, match="does not exist"):
        write_export(tmp_path / "nowhere", tmp_path / "x.json")
    with pytest.raises(InputError, match="no row for field 'f9'"):
        write_map(results / "cells.csv", "f9", "1", Gel(6e3, 0.45), results / "map")


def test_cells_without_error_bars_are_left_out_and_said(results):
    def spoil(rows):
        rows[0]["dipole_xx_sd_pNm"] = ""
        rows[1]["status"] = "failed"

    bad(results, spoil)
    cells, said = measured_cells(read_folder(results))
    assert len(cells) == 10
    assert said == ["1 rows left out: failed", "1 rows left out: without error bar"]


def test_the_same_cell_in_two_fields_counts_once(results):
    rows = table(results / "cells.csv")
    for row in rows:
        row["same_cell"] = "lucky" if row["field"] in ("f20000", "f20001") else ""
    write_rows(results / "cells.csv", list(rows[0]), rows)
    write_stiffness([results], results / "out")
    assert len(table(results / "out/stiffness_cells.csv")) == 11


def test_a_folder_that_cannot_be_written_is_named(results):
    (results / "out").write_text("a file is in the way", encoding="utf-8")
    with pytest.raises(TfmError, match="cannot be written"):
        write_stiffness([results], results / "out")

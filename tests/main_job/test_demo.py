"""The README's main job: the demo study from images to tables, against the forces that were put in."""

from __future__ import annotations

import csv
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

ROOT = Path(__file__).parents[2]
DEMO = ROOT / "data_demo"
CHECKER = ROOT.parent / "shared" / "check_results.py"


def rows(path: Path) -> list[dict[str, str]]:
    with path.open(newline="", encoding="utf-8") as stream:
        return list(csv.DictReader(stream))


@pytest.fixture(scope="module")
def results(tmp_path_factory):
    out = tmp_path_factory.mktemp("demo") / "results"
    command = [sys.executable, "-m", "tfm", "run", str(DEMO / "sheet.csv"), "-o", str(out), "--workers", "2"]
    done = subprocess.run(command, capture_output=True, text=True, timeout=1500)
    assert done.returncode == 0, done.stderr[-2000:]
    return out


def test_everything_is_written(results):
    for name in ("cells.csv", "pairs.csv", "gel.csv", "fields.csv", "columns.json", "run.json", "report.html"):
        assert (results / name).stat().st_size > 0
    fields = [r["field"] for r in rows(DEMO / "sheet.csv")]
    assert len(list((results / "fields").glob("*.nc"))) == len(fields)
    assert list(dict.fromkeys(r["field"] for r in rows(results / "fields.csv"))) == fields


def test_dipoles_are_what_was_put_in(results):
    """Every contractile moment within 6 % and three quoted standard deviations; tensor components within four (of
    some sixty
    numbers one may lie beyond three). A row whose entry in the sheet is wrong on purpose is left out: its gel is
    contradicted."""
    truth = {(r["field"], r["cell"], r["frame"]): r for r in rows(DEMO / "truth.csv")}
    compared = 0
    for row in rows(results / "cells.csv"):
        if row["field"] == "wrong_poisson":
            continue
        true = truth[row["field"], row["cell"], row["frame"]]
        compared += 1
        moment, expected = float(row["contractile_moment_pNm"]), float(true["contractile_moment_pNm"])
        assert abs(moment - expected) < 0.06 * expected, row["field"]
        assert abs(moment - expected) < 3 * float(row["contractile_moment_sd_pNm"]), row["field"]
        for k in ("xx", "xy", "yy"):
            error = float(row[f"dipole_{k}_pNm"]) - float(true[f"dipole_{k}_pNm"])
            assert abs(error) < 4 * float(row[f"dipole_{k}_sd_pNm"]), (row["field"], k)
        assert float(row["contractile_moment_sd_pNm"]) < 0.05 * expected
    assert compared == len(truth) - 1 - sum(
        r["field"] == "missing_outline" and r["cell"] == "2" for r in truth.values()
    )


def test_neighbours_store_less_together(results):
    """The pair's energy is covered by its error bar and has the sign that was put in."""
    (pair,) = [r for r in rows(results / "pairs.csv") if r["field"] == "neighbours_thin_gel"]
    (true,) = [r for r in rows(DEMO / "truth_pairs.csv") if r["field"] == "neighbours_thin_gel"]
    assert abs(float(pair["energy_fJ"]) - float(true["energy_fJ"])) < 3 * float(pair["energy_sd_fJ"])
    assert float(pair["energy_fJ"]) < 0


def test_planted_problems_are_told(results):
    status = {r["field"]: r["status"] for r in rows(results / "fields.csv")}
    gel = {r["field"]: r for r in rows(results / "gel.csv")}
    assert gel["wrong_poisson"]["verdict"] == "contradicted"
    assert status["wrong_poisson"] == "caution"
    (row,) = [r for r in rows(results / "cells.csv") if r["field"] == "missing_outline"]
    assert row["status"] == "caution"
    assert "without an outline" in row["notes"]
    assert [name for name, r in gel.items() if r["verdict"] == "contradicted"] == ["wrong_poisson"]


def test_field_file_opens_and_balances(results):
    """The netCDF carries traction whose sum over a free cell vanishes (Newton's third law)."""
    (path,) = [p for p in (results / "fields").glob("*.nc") if "tendon_6kPa_a" in p.name]
    with xr.open_dataset(path, engine="h5netcdf") as data:
        name = next(v for v in data.data_vars if str(v) == "traction")
        traction = np.nan_to_num(np.asarray(data[name])).reshape(-1, 2, *data[name].shape[-2:])[0]
    assert np.abs(traction.sum(axis=(1, 2))).max() < 1e-6 * np.abs(traction).sum()


@pytest.mark.skipif(not CHECKER.exists(), reason="the contract's checker lies beside the project only in development")
def test_contract(results):
    command = [sys.executable, str(CHECKER), str(results), str(DEMO / "sheet.csv")]
    done = subprocess.run(command, capture_output=True, text=True)
    assert done.returncode == 0, done.stdout

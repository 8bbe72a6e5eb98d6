"""Tables, names, keys: columns of the contract in its order, deterministic text, safe file names."""

from __future__ import annotations

import csv
import json
import math
import string
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tfm.batch.key import changes, key_of, key_parts
from tfm.batch.names import file_stems, safe_stem
from tfm.batch.problems import Problem, readable
from tfm.batch.rows import cell_row, join_notes, pair_row
from tfm.batch.schema import CELLS, FIELDS, GEL, PAIRS
from tfm.batch.tables import columns_json, format_cell, table_text
from tfm.moments.model import CellDipole, CellPair

#: The columns that other programs read, as they were agreed on; written out here so that a change is noticed.
AGREED = {
    "cells": """field cell frame time_s condition status notes x_um y_um area_um2 outline_axis_deg dipole_xx_pNm
    dipole_xy_pNm dipole_yy_pNm dipole_xx_sd_pNm dipole_xy_sd_pNm dipole_yy_sd_pNm cov_xx_xy_pNm2 cov_xx_yy_pNm2
    cov_xy_yy_pNm2 major_pNm minor_pNm axis_deg axis_sd_deg anisotropy contractile_moment_pNm contractile_moment_sd_pNm
    contractile_moment_total_sd_pNm net_force_nN torque_pNm force_total_nN strain_energy_fJ strain_energy_sd_fJ
    traction_peak_Pa traction_rms_Pa displacement_peak_um""",
    "pairs": """field frame cell_a cell_b distance_um bearing_deg energy_fJ energy_sd_fJ dipole_energy_fJ
    dipole_energy_sd_fJ force_on_b_x_pN force_on_b_y_pN torque_on_b_fNm coupling_number status notes""",
    "gel": """field youngs_modulus_Pa poisson thickness_um poisson_best poisson_low poisson_high thickness_best_um
    thickness_low_um thickness_high_um strain_energy_fJ energy_shift_poisson_fJ strain_peak verdict notes""",
    "fields": """field frame status message drift_x_px drift_y_px displacement_noise_um vectors vectors_rejected
    misfit""",
}


@pytest.mark.parametrize(("name", "columns"), [("cells", CELLS), ("pairs", PAIRS), ("gel", GEL), ("fields", FIELDS)])
def test_columns_are_the_agreed_ones_and_each_is_explained(name: str, columns: tuple[object, ...]) -> None:
    names = [column.name for column in columns]  # type: ignore[attr-defined]
    assert names == AGREED[name].split()
    said = json.loads(columns_json(["donor"]))[f"{name}.csv"]
    assert list(said) == [*names, "donor"]
    units = {"s", "um", "um2", "deg", "pNm", "pNm2", "nN", "fJ", "Pa", "pN", "fNm", "px"}
    for column in names:
        assert len(said[column]["meaning"]) > 10
        has_suffix = "_" in column and column.rsplit("_", 1)[-1] in units
        assert bool(said[column]["unit"]) is has_suffix, column


def test_unmeasured_is_empty_and_never_a_word() -> None:
    text = table_text("fields", [{"field": "a", "misfit": float("nan"), "vectors": 3, "drift_x_px": None}], ["donor"])
    (row,) = csv.DictReader(text.splitlines())
    assert row["misfit"] == row["drift_x_px"] == row["donor"] == ""
    assert row["vectors"] == "3"
    assert "nan" not in text.lower()


@given(st.floats(allow_nan=False, allow_infinity=False))
@settings(derandomize=True, deadline=None)
def test_numbers_survive_to_seven_digits(value: float) -> None:
    text = format_cell(value)
    assert math.isclose(float(text), value, rel_tol=1e-7, abs_tol=0.0)
    assert not text.startswith("-0") or value < 0


def _dipole(**changed: object) -> CellDipole:
    values: dict[str, object] = {
        "cell": 2, "centroid": np.array([10e-6, 20e-6]), "area": 500e-12, "outline_axis": -np.pi / 2,
        "dipole": np.array([-2e-12, 0.5e-12, -1e-12]), "covariance": np.diag([1e-26, 4e-26, 9e-26]),
        "total_covariance": None, "major": -2.2e-12, "minor": -0.8e-12, "axis": np.pi / 2, "axis_sd": 0.1,
        "anisotropy": 0.4, "contractile_moment": 3e-12, "contractile_moment_sd": None,
        "contractile_moment_total_sd": None, "net_force": 1e-9, "torque": 0.0, "force_total": 50e-9,
        "strain_energy": 2e-15, "strain_energy_sd": float("nan"), "traction_peak": 300.0, "traction_rms": 100.0,
        "displacement_peak": 0.4e-6, "budget": {},
    }  # fmt: skip
    return CellDipole(**{**values, **changed})  # type: ignore[arg-type]


def test_a_dipole_comes_out_in_the_tables_units() -> None:
    """Hand values: 1e-12 N m = 1 pN m, 1e-13 N m = 0.1 pN m, pi/2 = 90 degrees, 2e-15 J = 2 fJ."""
    row = cell_row(_dipole(), frame=3, time=60.0, status="ok", notes="")
    want = {
        "x_um": 10, "y_um": 20, "area_um2": 500, "dipole_xx_pNm": -2, "dipole_xx_sd_pNm": 0.1, "dipole_xy_sd_pNm": 0.2,
        "dipole_yy_sd_pNm": 0.3, "axis_deg": 90, "outline_axis_deg": 90, "contractile_moment_pNm": 3, "net_force_nN": 1,
        "force_total_nN": 50, "strain_energy_fJ": 2, "displacement_peak_um": 0.4, "time_s": 60, "traction_peak_Pa": 300,
    }  # fmt: skip
    for name, value in want.items():
        assert row[name] == pytest.approx(value, rel=1e-12), name
    assert row["strain_energy_sd_fJ"] is None
    assert row["contractile_moment_sd_pNm"] is None
    assert set(row) <= set(AGREED["cells"].split())


def test_a_pair_comes_out_in_the_tables_units() -> None:
    pair = CellPair(
        1, 2, 40e-6, -np.pi, -3e-15, None, -2e-15, 1e-16, np.array([5e-12, -6e-12]), 7e-15, 0.5, {}, ("close together",)
    )
    row = pair_row(pair, frame=0)
    assert (row["distance_um"], row["bearing_deg"]) == pytest.approx((40, 180))
    assert (row["energy_fJ"], row["dipole_energy_fJ"], row["dipole_energy_sd_fJ"]) == pytest.approx((-3, -2, 0.1))
    assert (row["force_on_b_x_pN"], row["force_on_b_y_pN"], row["torque_on_b_fNm"]) == pytest.approx((5, -6, 7))
    assert row["energy_sd_fJ"] is None
    assert (row["status"], row["notes"]) == ("caution", "close together")
    assert set(row) <= set(AGREED["pairs"].split())


def test_notes_are_said_once() -> None:
    assert join_notes(["a.", "b"], ["a", ""], ["c;"]) == "a; b; c"


@given(st.lists(st.text(min_size=1, max_size=60), min_size=1, max_size=8, unique=True))
@settings(derandomize=True, max_examples=200, deadline=None)
def test_stems_are_safe_and_different_on_every_file_system(names: list[str]) -> None:
    stems = file_stems(names)
    import unicodedata

    same = {unicodedata.normalize("NFC", n) for n in names}
    if len(same) == len(names):
        assert len({stem.casefold() for stem in stems.values()}) == len(names)
    for stem in stems.values():
        assert set(stem) <= set(string.ascii_letters + string.digits + "-_.%~")
        assert 0 < len(stem) <= 120
        assert not stem.startswith(".")
        assert not stem.endswith(".")


def test_ordinary_names_stay_as_they_are() -> None:
    for name in ("tendon_2kPa_a", "Field-07", "2024.11.05-b"):
        assert safe_stem(name) == name


def test_the_key_is_of_contents_and_values(tmp_path: Path) -> None:
    (tmp_path / "a").write_bytes(b"one")
    (tmp_path / "b").write_bytes(b"one")
    first = key_parts({"stressed": tmp_path / "a"}, {"method": "auto"}, {"poisson": 0.45})
    second = key_parts({"stressed": tmp_path / "b"}, {"method": "auto"}, {"poisson": 0.45})
    assert key_of(first) == key_of(second)
    (tmp_path / "b").write_bytes(b"two")
    third = key_parts({"stressed": tmp_path / "b"}, {"method": "auto"}, {"poisson": 0.45})
    assert key_of(first) != key_of(third)
    assert changes(first, third) == ["input file stressed: its content changed"]
    assert changes({"inputs": {}}, {"inputs": {"outline": "x"}}) == ["input file outline: added"]


def test_a_problem_is_one_line_whatever_was_typed() -> None:
    problem = Problem("s.csv", 3, "fie\nld", "\x1b[31m", "bad \x00 value " + "x" * 1000, "write it anew", "bad")
    assert str(problem).isprintable()
    assert len(str(problem)) < 600
    assert readable("\u202etxt") == "\\u202etxt"


def test_the_page_on_bad_input_lists_the_cases_that_the_tests_hold() -> None:
    import reliability_table

    text = reliability_table.PAGE.read_text(encoding="utf-8")
    assert reliability_table.block() in text, "run tests/batch/reliability_table.py"
    assert sum(sum(c.values()) for c in reliability_table.cases().values()) >= 120

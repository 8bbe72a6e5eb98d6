"""The exported document against its published schema, and the mirror against geometry."""

from __future__ import annotations

import json
from pathlib import Path

import jsonschema
import numpy as np
import pytest

from tfm.errors import InputError
from tfm.gel import Gel, dipole_interaction
from tfm.population.conditions import MeasuredCell, combine_repeats, compare_conditions, summarise_conditions
from tfm.population.export import export_document, mirrored_row

SCHEMA = json.loads((Path(__file__).parents[2] / "docs/export.schema.json").read_text(encoding="utf-8"))


def cells(count=8, seed=0, condition="soft", mean=-1.0):
    rng = np.random.default_rng(seed)
    return [
        MeasuredCell(f"{condition}{k}", f"{condition}{k}", condition,
                     np.array([mean - 0.2 * rng.normal(), 0.05, -0.3]) * 1e-12, np.diag([1e-26, 1e-27, 1e-26]), 0.3)
        for k in range(count)
    ]  # fmt: skip


def row(**changes):
    values = {
        "field": "a", "cell": "1", "frame": "0", "condition": "soft", "status": "ok", "notes": "", "x_um": "10.5",
        "y_um": "20.25", "dipole_xx_pNm": "-1.0", "dipole_xy_pNm": "0.25", "dipole_yy_pNm": "-0.5", "axis_deg": "-22.5",
        "cov_xx_xy_pNm2": "0.001", "outline_axis_deg": "90", "time_s": "",
    }  # fmt: skip
    return {**values, **changes}


def test_the_document_keeps_its_schema():
    summaries = summarise_conditions(cells() + cells(9, 1, "stiff", -2.0))
    pair = {
        "field": "a",
        "frame": "0",
        "cell_a": "1",
        "cell_b": "2",
        "status": "ok",
        "distance_um": "40",
        "energy_fJ": "-0.1",
    }
    gel = {
        "field": "a",
        "youngs_modulus_Pa": "5000",
        "poisson": "0.45",
        "thickness_um": "",
        "verdict": "agrees",
        "notes": "",
    }
    for frame in ("y-down", "y-up"):
        differences = compare_conditions(summaries)
        document = export_document([row()], [pair], [gel], summaries, comparisons=differences, frame=frame, draws=5,
                                   quantity={"a": "change"}, version="1")  # fmt: skip
        jsonschema.Draft202012Validator(SCHEMA).validate(json.loads(json.dumps(document, allow_nan=False)))
    assert document["cells"][0]["quantity"] == "change"
    assert document["cells"][0]["time_s"] is None
    assert len(document["draws"]) == 10


def test_the_schema_refuses_what_it_should():
    validator = jsonschema.Draft202012Validator(SCHEMA)
    good = export_document([row()], [], [], [])
    assert validator.is_valid(good)
    for change in (
        {"cells": [{**good["cells"][0], "x_um": "far"}]},
        {"cells": [{"field": "a"}]},
        {"schema": "other"},
        {"extra": 1},
    ):
        assert not validator.is_valid({**good, **change})


def test_y_up_is_a_reflection_of_the_physics():
    # The energy of two mirrored cells is the same number, and the mirrored force is the mirror of the force.
    gel = Gel(5e3, 0.4)
    a = {"x_um": 0.0, "y_um": 0.0, "dipole_xx_pNm": -1.0, "dipole_xy_pNm": 0.3, "dipole_yy_pNm": -0.4}
    b = {"x_um": 30.0, "y_um": 20.0, "dipole_xx_pNm": -0.6, "dipole_xy_pNm": -0.2, "dipole_yy_pNm": -0.9}

    def interaction(first, second):
        tensors = [
            np.array([r["dipole_xx_pNm"], r["dipole_xy_pNm"], r["dipole_yy_pNm"]]) * 1e-12 for r in (first, second)
        ]
        return dipole_interaction(
            gel, *tensors, (second["x_um"] - first["x_um"]) * 1e-6, (second["y_um"] - first["y_um"]) * 1e-6
        )

    down = interaction(a, b)
    up = interaction(mirrored_row(a), mirrored_row(b))
    assert float(up.energy) == pytest.approx(float(down.energy), rel=1e-12)
    force = mirrored_row({"force_on_b_x_pN": float(down.force_on_b[0]), "force_on_b_y_pN": float(down.force_on_b[1]),
                          "torque_on_b_fNm": float(down.torque_on_b)})  # fmt: skip
    assert force["force_on_b_x_pN"] == pytest.approx(float(up.force_on_b[0]), rel=1e-12)
    assert force["force_on_b_y_pN"] == pytest.approx(float(up.force_on_b[1]), rel=1e-12)
    assert force["torque_on_b_fNm"] == pytest.approx(float(up.torque_on_b), rel=1e-12)


def test_mirroring_twice_is_nothing_and_axes_stay_in_range():
    table = {"y_um": 3.0, "dipole_xy_pNm": -0.5, "axis_deg": 90.0, "outline_axis_deg": -30.0, "bearing_deg": 180.0,
             "cov_xx_xy_pNm2": 0.1, "cov_xx_yy_pNm2": 0.2, "cov_xy_yy_pNm2": -0.3}  # fmt: skip
    once = mirrored_row(table)
    assert mirrored_row(once) == table
    assert once["axis_deg"] == 90.0
    assert once["bearing_deg"] == 180.0
    assert once["cov_xx_yy_pNm2"] == 0.2


def test_the_axis_of_a_mirrored_tensor_is_the_mirrored_axis():
    p = np.array([[-1.0, 0.4], [0.4, -0.2]])
    mirrored = mirrored_row({"dipole_xy_pNm": 0.4})["dipole_xy_pNm"]
    q = np.array([[-1.0, mirrored], [mirrored, -0.2]])

    def axis(tensor):
        values, vectors = np.linalg.eigh(tensor)
        v = vectors[:, np.argmax(np.abs(values))]
        return np.degrees(np.arctan(v[1] / v[0]))

    assert mirrored_row({"axis_deg": axis(p)})["axis_deg"] == pytest.approx(axis(q), abs=1e-9)


def test_draws_have_the_spread_of_the_population_and_repeat():
    summaries = summarise_conditions(cells(30))
    one = export_document([], [], [], summaries, draws=3000, seed=4)
    two = export_document([], [], [], summaries, draws=3000, seed=4)
    assert one == two
    along = np.array([d["along_pNm"] for d in one["draws"]])
    tensor = one["populations"][0]["tensor"]
    assert along.mean() == pytest.approx(tensor["mean_pNm"][0], abs=0.02)
    assert along.var() == pytest.approx(tensor["spread_covariance_pNm2"][0][0], rel=0.15)


def test_frames_of_one_cell_are_one_cell():
    rng = np.random.default_rng(2)
    many = []
    for k in range(6):
        own = np.array([-1.0 - 0.3 * rng.normal(), 0.0, -0.4]) * 1e-12
        many += [
            MeasuredCell(f"c{k}", f"f{k}", "soft", own + 5e-14 * rng.normal(size=3), 25e-28 * np.eye(3), 0.0)
            for _ in range(20)
        ]
    summary = summarise_conditions(many)[0]
    assert (summary.cells, summary.rows) == (6, 120)
    assert len(combine_repeats(many)) == 6
    # Counting frames as cells would claim an error 4 times too small.
    assert summary.moment.mean_sd > 0.3e-12 / np.sqrt(6) * 0.4


def test_a_cell_seen_in_two_fields_at_different_angles_is_one_cell():
    own = np.array([-1.0, 0.1, -0.3]) * 1e-12
    from tfm.population.tensors import rotation_of_tensor

    seen = [
        MeasuredCell("same", f"field{k}", "soft", rotation_of_tensor(-a) @ own, 1e-28 * np.eye(3), a)
        for k, a in enumerate((0.2, -1.1))
    ]
    merged = combine_repeats(seen)
    assert len(merged) == 1
    assert np.allclose(rotation_of_tensor(0.2) @ merged[0].dipole, own, rtol=1e-6)


def test_comparison_of_conditions_covers():
    covered = 0
    for seed in range(50):
        summaries = summarise_conditions(cells(6, seed, "soft", -1.0) + cells(9, seed + 1000, "stiff", -1.5))
        difference = compare_conditions(summaries)[0]
        covered += difference.low <= 0.5e-12 <= difference.high
    assert 43 <= covered <= 50


def test_what_cannot_be_exported_is_refused():
    with pytest.raises(InputError, match="frame 'z-up'"):
        export_document([], [], [], [], frame="z-up")
    with pytest.raises(InputError, match="holds 'many' under x_um"):
        export_document([row(x_um="many")], [], [], [])
    with pytest.raises(InputError, match="holds nan"):
        export_document([row(x_um="nan")], [], [], [])
    with pytest.raises(InputError, match="stands under the conditions"):
        summarise_conditions([*cells(2), *[MeasuredCell("soft0", "x", "stiff", np.zeros(3), np.eye(3))]])


def test_the_error_of_a_mean_over_frames_covers_what_the_frames_share():
    # Every frame is compared with the same relaxed frame: half of the variance is common and does not average out.
    rng = np.random.default_rng(6)
    own, v, z = np.array([-1.0, 0.0, -0.4]) * 1e-12, 1e-26, []
    for _ in range(300):
        shared = np.sqrt(v / 2) * rng.normal(size=3)
        frames = [
            MeasuredCell("c", "f", "soft", own + shared + np.sqrt(v / 2) * rng.normal(size=3), v * np.eye(3), 0.0)
            for _ in range(12)
        ]
        merged = combine_repeats(frames)[0]
        z.append((merged.dipole - own) / np.sqrt(np.diag(merged.covariance)))
    assert np.sqrt(np.mean(np.square(z))) == pytest.approx(1.0, abs=0.12)

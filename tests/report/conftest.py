"""A results folder with invented numbers, for the tests of the report. Nothing here was measured."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.ndimage import map_coordinates

from tfm.batch.atomic import file_sha256
from tfm.batch.netcdf import FieldWriter
from tfm.batch.pictures import Thumbnails
from tfm.batch.schema import TABLES
from tfm.batch.tables import columns_json, table_text

Rows = dict[str, list[dict[str, Any]]]

#: (condition, Young's modulus in Pa, mean moment in pN m)
GROUPS = (("soft 2 kPa", 2000.0, 0.6), ("middle 6 kPa", 6000.0, 1.2), ("stiff 18 kPa", 18000.0, 2.1))
CUT = "the stressed image is cut after 60 % of its rows [cut-file]"
MISFIT = "misfit 2.61: the gel model does not explain these beads"
BUDGET = {"images": 0.0025, "youngs_modulus": 0.004, "poisson": 0.0006, "thickness": 0.0, "pixel": 0.0001}


def _cell(rng: np.random.Generator, moment: float, axis: float, x: float, y: float) -> dict[str, Any]:
    """Invented tensor with a given contractile moment and axis, and the columns that follow from it."""
    major, minor = -0.75 * moment, -0.25 * moment
    c, s = np.cos(axis), np.sin(axis)
    sd = 0.05 * moment + 0.01
    return {
        "x_um": x,
        "y_um": y,
        "area_um2": 900.0,
        "outline_axis_deg": np.degrees(axis) + 4.0,
        "dipole_xx_pNm": major * c * c + minor * s * s,
        "dipole_xy_pNm": (major - minor) * c * s,
        "dipole_yy_pNm": major * s * s + minor * c * c,
        "dipole_xx_sd_pNm": sd,
        "dipole_xy_sd_pNm": 0.7 * sd,
        "dipole_yy_sd_pNm": sd,
        "cov_xx_xy_pNm2": 0.0,
        "cov_xx_yy_pNm2": 0.2 * sd * sd,
        "cov_xy_yy_pNm2": 0.0,
        "major_pNm": major,
        "minor_pNm": minor,
        "axis_deg": np.degrees(axis),
        "axis_sd_deg": 3.0,
        "anisotropy": 0.5,
        "contractile_moment_pNm": moment,
        "contractile_moment_sd_pNm": np.sqrt(2.4) * sd,
        "contractile_moment_total_sd_pNm": np.sqrt(2.4) * sd * 1.3,
        "net_force_nN": 0.0,
        "torque_pNm": 0.0,
        "force_total_nN": 90.0 * moment,
        "strain_energy_fJ": 30.0 * moment,
        "strain_energy_sd_fJ": 2.0,
        "traction_peak_Pa": 800.0 * moment,
        "traction_rms_Pa": 210.0 * moment,
        "displacement_peak_um": 0.6,
    }


def _arrays(
    path: Path, rng: np.random.Generator, centres: list[tuple[float, float, float, float]], frames: int
) -> None:
    """A picture-book field: two poles per cell that pull inwards, a displacement that falls off around them."""
    pixel, size = 0.2e-6, 384
    x = (np.arange(7, size, 8)) * pixel
    xt = (np.arange(size // 4) * 4 + 1.5) * pixel
    beads = np.zeros((size, size))
    spots = rng.integers(4, size - 4, (2200, 2))
    for dy in range(-3, 4):
        for dx in range(-3, 4):
            beads[spots[:, 0] + dy, spots[:, 1] + dx] += np.exp(-(dx * dx + dy * dy) / 3.0)
    relaxed = (400 + 9000 * beads + rng.normal(0, 60, beads.shape)).clip(0, 65535).astype("f4")
    u, traction = np.zeros((2, len(x), len(x))), np.zeros((2, len(xt), len(xt)))
    labels = np.zeros((len(xt), len(xt)), np.int32)
    gx, gy = np.meshgrid(x, x)
    tx, ty = np.meshgrid(xt, xt)
    for number, (cx, cy, axis, moment) in enumerate(centres, 1):
        c, s = np.cos(axis), np.sin(axis)
        along, across = (tx - cx) * c + (ty - cy) * s, -(tx - cx) * s + (ty - cy) * c
        labels[(along / 14e-6) ** 2 + (across / 7e-6) ** 2 < 1] = number
        for sign in (-1, 1):
            px, py = cx + sign * 10e-6 * c, cy + sign * 10e-6 * s
            near = np.exp(-((tx - px) ** 2 + (ty - py) ** 2) / (2 * (2.5e-6) ** 2)) * (labels == number)
            fall = 1 / (1 + np.hypot(gx - px, gy - py) / 5e-6)
            for k, part in enumerate((c, s)):
                traction[k] -= sign * part * near * 900 * moment
                u[k] -= sign * part * fall**2 * 0.8e-6 * moment
    observed = u + rng.normal(0, 0.02e-6, u.shape)
    observed[:, 3, 4] = np.nan
    lattice = np.meshgrid((xt - x[0]) / (x[1] - x[0]), (xt - x[0]) / (x[1] - x[0]), indexing="ij")
    predicted = np.stack([map_coordinates(part, lattice, order=1, mode="nearest") for part in u])
    written = {
        "displacement": observed,
        "displacement_precision": np.full((3, *observed.shape[1:]), 2.5e15),
        "traction": traction,
        "traction_displacement": predicted,
    }
    pictures = Thumbnails.of(relaxed)
    path.parent.mkdir(parents=True, exist_ok=True)
    with FieldWriter(path, {"field": path.stem}) as file:
        for name, values in (("x", x), ("y", x), ("lattice_x", xt), ("lattice_y", xt)):
            file.axis(name, values, direction=name)
        for name in ("image_x", "image_y"):
            file.axis(name, pictures.axis(size, pixel), direction=name)
        for frame in range(frames):
            small = {"stressed_image": pictures.picture(np.roll(relaxed, (1, 2), (0, 1)))}
            small["residual_image"] = pictures.residual(rng.normal(0, 0.3, relaxed.shape).astype("f4"))
            if frame == 0:
                small["relaxed_image"] = pictures.picture(relaxed)
            grown = {k: v * (1 + 0.15 * frame) for k, v in written.items()}
            file.put(frame, grown | {"labels": labels} | small)


def _name(i: int) -> str:
    return "<script>alert(1)</script>" if i == 1 else f"plate-{i + 1:03d}"


def _sheet_row(i: int) -> dict[str, str]:
    label, modulus, _ = GROUPS[i % 3]
    return {
        "field": _name(i),
        "stressed": f"img/{i}_s.tif",
        "relaxed": "quietest" if i == 4 else f"img/{i}_r.tif",
        "outline": f"img/{i}, outlines.tif",
        "youngs_modulus [kPa]": f"{modulus / 1000:g}",
        "poisson": "0.45",
        "condition": label,
    }


def _gel(modulus: float, wrong: bool) -> dict[str, Any]:
    return {
        "youngs_modulus_Pa": modulus, "poisson": 0.45, "thickness_um": 40.0, "poisson_best": 0.44, "poisson_low": 0.41,
        "poisson_high": 0.48, "thickness_best_um": 38.0, "thickness_low_um": 31.0, "thickness_high_um": 52.0,
        "strain_energy_fJ": 30.0, "energy_shift_poisson_fJ": -3.2, "strain_peak": 0.31 if wrong else 0.08,
        "verdict": "doubtful" if wrong else "agrees",
    }  # fmt: skip


def _pair() -> dict[str, Any]:
    return {
        "frame": 0, "cell_a": 1, "cell_b": 2, "distance_um": 34.2, "bearing_deg": 6.7, "energy_fJ": -0.84,
        "energy_sd_fJ": 0.11, "dipole_energy_fJ": -0.79, "dipole_energy_sd_fJ": 0.1, "force_on_b_x_pN": -61.0,
        "force_on_b_y_pN": -8.0, "torque_on_b_fNm": 0.4, "coupling_number": 2.1, "status": "ok",
    }  # fmt: skip


def _measured(i: int, rng: np.random.Generator, wrong: bool) -> tuple[Rows, list[dict[str, Any]], list[Any]]:
    """Rows, error budget and centres of one field that gave numbers."""
    _, modulus, mean = GROUPS[i % 3]
    pair, series, status = i % 4 == 2, i == 4, "caution" if wrong else "ok"
    centres = [(22e-6, 36e-6, 0.4, 0.9), (56e-6, 40e-6, -0.5, 1.1)] if pair else [(38e-6, 38e-6, 0.3 + i, 1.0)]
    rows: Rows = {"fields": [], "cells": [], "pairs": [_pair()] if pair else [], "gel": [_gel(modulus, wrong)]}
    budget = []
    for frame in range(5 if series else 1):
        rows["fields"].append(
            {"frame": frame, "status": status, "message": MISFIT if wrong else "", "drift_x_px": 2.0, "drift_y_px": 1.0,
             "displacement_noise_um": 0.02, "vectors": 2209, "vectors_rejected": 31, "misfit": 2.61 if wrong else 1.04}
        )  # fmt: skip
        for number, (cx, cy, axis, size) in enumerate(centres, 1):
            moment = float(mean * size * rng.lognormal(0, 0.25) * (1 + 0.15 * frame))
            row = _cell(rng, moment, (axis + np.pi / 2) % np.pi - np.pi / 2, cx * 1e6, cy * 1e6)
            row |= {"cell": number, "frame": frame, "status": status, "notes": MISFIT if wrong else ""}
            rows["cells"].append(row | ({"time_s": 60.0 * frame} if series else {}))
            budget.append({"cell": number, "frame": frame, "variance_pNm2": BUDGET})
    return rows, budget, centres


def make_folder(
    root: Path, *, fields: int = 9, bad: int = 2, arrays: bool = True, unfinished: int = 0, seed: int = 7
) -> Path:
    """Write a results folder: ``fields`` fields in three conditions, the last ``bad`` of them with something wrong."""
    rng = np.random.default_rng(seed)
    (root / "fields").mkdir(parents=True, exist_ok=True)
    tables: Rows = {name: [] for name in TABLES}
    entries = []
    for i in range(fields):
        given = {"field": _name(i), "condition": GROUPS[i % 3][0]}
        wrong = i >= fields - bad
        entry: dict[str, Any] = {"field": _name(i), "row": i + 2, "finished": i < fields - unfinished}
        if (wrong and i % 2) or not entry["finished"]:
            text = CUT if entry["finished"] else "not computed yet"
            tables["fields"].append({**given, "frame": 0, "status": "failed", "message": text})
            tables["gel"].append({**given, "notes": "the field was not measured"})
            entries.append({**entry, "status": "failed", "message": text, "record": ""})
            continue
        rows, budget, centres = _measured(i, rng, wrong)
        for name, found in rows.items():
            tables[name] += [{**given, **row} for row in found]
        record = {"field": _name(i), "budget": budget, "outputs": {}, "seconds": {"all": 1.3}}
        if i == 0:
            nu = [0.3, 0.35, 0.4, 0.43, 0.45, 0.47, 0.49]
            record["gel_evidence"] = {"poisson": {"value": nu, "log_evidence": [-900 * (v - 0.44) ** 2 for v in nu]}}
        if arrays:
            # Many fields share a few pictures: what is tested is the report, and drawing beads takes time.
            target = root / "fields" / f"f{i}.nc"
            if i < 5:
                _arrays(target, rng, centres, 5 if i == 4 else 1)
            else:
                shutil.copy(root / "fields" / ("f2.nc" if i % 4 == 2 else "f0.nc"), target)
            record["outputs"] = {target.name: file_sha256(target)}
        (root / "fields" / f"f{i}.json").write_text(json.dumps(record))
        message = MISFIT if wrong else ""
        entries.append(
            {**entry, "status": "caution" if wrong else "ok", "message": message, "record": f"fields/f{i}.json"}
        )
    for name, rows in tables.items():
        (root / f"{name}.csv").write_text(table_text(name, rows), encoding="utf-8")
    (root / "columns.json").write_text(columns_json(), encoding="utf-8")
    run = {"tfm": "0.1.0", "settings": {"method": "image"}, "versions": {"numpy": np.__version__}, "fields": entries}
    run["sheet_rows"] = [_sheet_row(i) for i in range(fields)]
    (root / "run.json").write_text(json.dumps(run), encoding="utf-8")
    return root


@pytest.fixture(scope="session", name="make_folder")
def _make_folder() -> Callable[..., Path]:
    return make_folder


@pytest.fixture(scope="session")
def built(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A results folder of nine fields with its report; read only."""
    from tfm.report import build_report

    root = make_folder(tmp_path_factory.mktemp("study") / "results")
    build_report(root)
    return root

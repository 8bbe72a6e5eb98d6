"""A results folder with invented numbers, for the tests of the report. Nothing here was measured."""

from __future__ import annotations

import csv
import json
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tfm.batch.netcdf import FieldWriter
from tfm.batch.pictures import Thumbnails

CELLS = ["field", "cell", "frame", "time_s", "condition", "status", "notes", "x_um", "y_um", "area_um2", "outline_axis_deg", "dipole_xx_pNm", "dipole_xy_pNm", "dipole_yy_pNm", "dipole_xx_sd_pNm", "dipole_xy_sd_pNm", "dipole_yy_sd_pNm", "cov_xx_xy_pNm2", "cov_xx_yy_pNm2", "cov_xy_yy_pNm2", "major_pNm", "minor_pNm", "axis_deg", "axis_sd_deg", "anisotropy", "contractile_moment_pNm", "contractile_moment_sd_pNm", "contractile_moment_total_sd_pNm", "net_force_nN", "torque_pNm", "force_total_nN", "strain_energy_fJ", "strain_energy_sd_fJ", "traction_peak_Pa", "traction_rms_Pa", "displacement_peak_um"]
PAIRS = ["field", "frame", "cell_a", "cell_b", "distance_um", "bearing_deg", "energy_fJ", "energy_sd_fJ", "dipole_energy_fJ", "dipole_energy_sd_fJ", "force_on_b_x_pN", "force_on_b_y_pN", "torque_on_b_fNm", "coupling_number", "status", "notes"]
GEL = ["field", "youngs_modulus_Pa", "poisson", "thickness_um", "poisson_best", "poisson_low", "poisson_high", "thickness_best_um", "thickness_low_um", "thickness_high_um", "strain_energy_fJ", "energy_shift_poisson_fJ", "strain_peak", "verdict", "notes"]
FIELDS = (
    ["field", "frame", "status", "message", "drift_x_px", "drift_y_px", "displacement_noise_um", "vectors", "vectors_rejected", "misfit"]
)

#: (condition, Young's modulus in Pa, mean moment in pN m)
GROUPS = (("soft 2 kPa", 2000.0, 0.6), ("middle 6 kPa", 6000.0, 1.2), ("stiff 18 kPa", 18000.0, 2.1))


def _write(path: Path, columns: list[str], rows: list[dict[str, Any]]) -> None:
    with path.open("w", newline="", encoding="utf-8") as stream:
        writer = csv.DictWriter(stream, columns, restval="")
        writer.writeheader()
        writer.writerows({k: f"{v:.6g}" if isinstance(v, float) else v for k, v in row.items()} for row in rows)


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
    predicted = np.stack([np.interp(xt, x, row)[None, :].repeat(len(xt), 0) for row in u[:, len(x) // 2]])
    grow = 1 + 0.15 * np.arange(frames)
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


def make_folder(root: Path, *, fields: int = 9, bad: int = 2, arrays: bool = True, seed: int = 7) -> Path:
    """Write a results folder: ``fields`` fields in three conditions, the last ``bad`` of them with something wrong."""
    rng = np.random.default_rng(seed)
    (root / "fields").mkdir(parents=True, exist_ok=True)
    tables: dict[str, list[dict[str, Any]]] = {"cells": [], "pairs": [], "gel": [], "fields": [], "sheet": []}
    for i in range(fields):
        name = "<script>alert(1)</script>" if i == 1 else f"plate-{i + 1:03d}"
        label, modulus, mean = GROUPS[i % 3]
        pair, series = i % 4 == 2, i == 4
        wrong = i >= fields - bad
        tables["sheet"].append(
            {
                "field": name,
                "stressed": f"img/{i}_s.tif",
                "relaxed": "quietest" if series else f"img/{i}_r.tif",
                "outline": f"img/{i}_o.tif",
                "youngs_modulus": f"{modulus / 1000:g} kPa",
                "poisson": "0.45",
                "thickness": "40 um",
                "condition": label,
            }
        )
        centres = [(38e-6, 38e-6, 0.3 + i, 1.0)] if not pair else [(22e-6, 36e-6, 0.4, 0.9), (56e-6, 40e-6, -0.5, 1.1)]
        if wrong and i % 2:
            tables["fields"].append(
                {
                    "field": name,
                    "frame": 0,
                    "status": "failed",
                    "message": "the stressed image is cut after 60 % of its rows [cut-file]",
                }
            )
            (root / "fields" / f"f{i}.json").write_text(json.dumps({"field": name, "sheet": tables["sheet"][-1]}))
            continue
        note = "misfit 2.61 is above 1.5: the gel model does not explain these beads" if wrong else ""
        for frame in range(5 if series else 1):
            tables["fields"].append(
                {
                    "field": name,
                    "frame": frame,
                    "status": "caution" if wrong else "ok",
                    "message": note,
                    "drift_x_px": 2.0,
                    "drift_y_px": 1.0,
                    "displacement_noise_um": 0.02,
                    "vectors": 2209,
                    "vectors_rejected": 31,
                    "misfit": 2.61 if wrong else 1.04,
                }
            )
            for number, (cx, cy, axis, size) in enumerate(centres, 1):
                moment = float(mean * size * rng.lognormal(0, 0.25) * (1 + 0.15 * frame))
                row = _cell(rng, moment, (axis + np.pi / 2) % np.pi - np.pi / 2, cx * 1e6, cy * 1e6)
                tables["cells"].append(
                    row
                    | {
                        "field": name,
                        "cell": number,
                        "frame": frame,
                        "time_s": 60.0 * frame if series else "",
                        "condition": label,
                        "status": "caution" if wrong else "ok",
                        "notes": note,
                    }
                )
            if pair:
                tables["pairs"].append(
                    {
                        "field": name,
                        "frame": frame,
                        "cell_a": 1,
                        "cell_b": 2,
                        "distance_um": 34.2,
                        "bearing_deg": 6.7,
                        "energy_fJ": -0.84,
                        "energy_sd_fJ": 0.11,
                        "dipole_energy_fJ": -0.79,
                        "dipole_energy_sd_fJ": 0.1,
                        "force_on_b_x_pN": -61.0,
                        "force_on_b_y_pN": -8.0,
                        "torque_on_b_fNm": 0.4,
                        "coupling_number": 2.1,
                        "status": "ok",
                    }
                )
        tables["gel"].append(
            {
                "field": name,
                "youngs_modulus_Pa": modulus,
                "poisson": 0.45,
                "thickness_um": 40.0,
                "poisson_best": 0.44,
                "poisson_low": 0.41,
                "poisson_high": 0.48,
                "strain_energy_fJ": 30.0,
                "energy_shift_poisson_fJ": -3.2,
                "strain_peak": 0.31 if wrong else 0.08,
                "verdict": "contradicted" if wrong else "agrees",
            }
        )
        record = {
            "field": name,
            "sheet": tables["sheet"][-1],
            "budget": {
                str(n): {
                    "images": 0.0025,
                    "youngs_modulus": 0.004,
                    "poisson": 0.0006,
                    "thickness": 0.0,
                    "pixel": 0.0001,
                }
                for n in range(1, len(centres) + 1)
            },
            "seconds": 1.3,
        }
        (root / "fields" / f"f{i}.json").write_text(json.dumps(record))
        if arrays:
            # Many fields share a few pictures: what is tested is the report, and drawing beads takes time.
            target = root / "fields" / f"f{i}.nc"
            if i < 5:
                _arrays(target, rng, centres, 5 if series else 1)
            else:
                shutil.copy(root / "fields" / ("f2.nc" if pair else "f0.nc"), target)
    for table, columns in (("cells", CELLS), ("pairs", PAIRS), ("gel", GEL), ("fields", FIELDS)):
        _write(root / f"{table}.csv", columns, tables[table])
    meanings = {
        c: {"unit": c.rsplit("_", 1)[-1] if "_" in c else "", "meaning": f"invented meaning of {c}"}
        for c in [*CELLS, *PAIRS, *GEL, *FIELDS]
    }
    (root / "columns.json").write_text(json.dumps(meanings))
    run = {
        "sheet_rows": tables["sheet"],
        "settings": {"method": "image"},
        "versions": {"tugtensor": "0.1.0", "numpy": np.__version__},
    }
    (root / "run.json").write_text(json.dumps(run))
    return root


@pytest.fixture(name="make_folder")
def _make_folder() -> Callable[..., Path]:
    return make_folder


@pytest.fixture(scope="session")
def built(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A results folder of nine fields with its report; read only."""
    from tfm.report import build_report

    root = make_folder(tmp_path_factory.mktemp("study") / "results")
    build_report(root)
    return root

"""Dipoles for a mechanical model: one JSON document, its frame and units stated, every number checked against a schema.

Rows are flat and carry the names of the result tables, so that they load into a data frame as they are. Nothing here
reads or writes a file.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from tfm.errors import InputError
from tfm.population.conditions import Comparison, ConditionSummary
from tfm.population.random_effects import PopulationEstimate
from tfm.population.tensors import TensorPopulation, tensor_draws
from tfm.units import from_si

__all__ = ["CELL_FIELDS", "GEL_FIELDS", "PAIR_FIELDS", "SCHEMA_NAME", "export_document", "mirrored_row"]

#: Name and version that a document carries; docs/export.schema.json describes it.
SCHEMA_NAME = "tugtensor-dipoles/1"

#: Columns of cells.csv that are exported, in order. Text first, then whole numbers, then numbers.
CELL_FIELDS: dict[str, type] = {
    "field": str, "cell": int, "frame": int, "condition": str, "status": str, "notes": str, "time_s": float,
    "x_um": float, "y_um": float, "area_um2": float, "outline_axis_deg": float, "dipole_xx_pNm": float,
    "dipole_xy_pNm": float, "dipole_yy_pNm": float, "dipole_xx_sd_pNm": float, "dipole_xy_sd_pNm": float,
    "dipole_yy_sd_pNm": float,
    "cov_xx_xy_pNm2": float, "cov_xx_yy_pNm2": float, "cov_xy_yy_pNm2": float, "major_pNm": float, "minor_pNm": float,
    "axis_deg": float, "axis_sd_deg": float, "anisotropy": float, "contractile_moment_pNm": float,
    "contractile_moment_sd_pNm": float, "contractile_moment_total_sd_pNm": float, "strain_energy_fJ": float,
    "strain_energy_sd_fJ": float,
}  # fmt: skip

#: Columns of pairs.csv that are exported.
PAIR_FIELDS: dict[str, type] = {
    "field": str, "frame": int, "cell_a": int, "cell_b": int, "status": str, "notes": str, "distance_um": float,
    "bearing_deg": float, "energy_fJ": float, "energy_sd_fJ": float, "dipole_energy_fJ": float,
    "dipole_energy_sd_fJ": float, "force_on_b_x_pN": float, "force_on_b_y_pN": float, "torque_on_b_fNm": float,
    "coupling_number": float,
}  # fmt: skip

#: Columns of gel.csv that are exported.
GEL_FIELDS: dict[str, type] = {
    "field": str, "youngs_modulus_Pa": float, "poisson": float, "thickness_um": float, "verdict": str, "notes": str
}  # fmt: skip

# What turns its sign when y points up: everything odd in y, and every angle or turn.
_ODD = {
    "y_um", "dipole_xy_pNm", "cov_xx_xy_pNm2", "cov_xy_yy_pNm2", "outline_axis_deg", "axis_deg", "bearing_deg",
    "force_on_b_y_pN", "torque_on_b_fNm",
}  # fmt: skip
_AXES = {"outline_axis_deg": 180.0, "axis_deg": 180.0, "bearing_deg": 360.0}

_FRAMES = {
    "y-down": "x = column to the right, y = row down, origin at the centre of pixel (0, 0); angles from +x towards +y",
    "y-up": "x = column to the right, y = up, origin at the centre of pixel (0, 0), so y <= 0 inside the image;"
    " angles from +x towards +y (counter-clockwise)",
}


_SIGNS = (
    "dipole = integral of (x_i - c_i) T_j dA, T = force per area that the cell applies to the gel; a contracting cell"
    " has negative principal values; energy < 0: together two cells store less than apart; forces and torques are"
    " -d(energy)/d(position, angle) of cell b"
)


def mirrored_row(row: Mapping[str, Any]) -> dict[str, Any]:
    """The row in the frame whose y points up: y, xy components, angles and turns change sign.

    Axes stay in (-90, 90] and directions in (-180, 180].

    Examples
    --------
    >>> mirrored_row({"y_um": 3.0, "dipole_xy_pNm": -0.5, "axis_deg": 90.0, "major_pNm": -2.0})
    {'y_um': -3.0, 'dipole_xy_pNm': 0.5, 'axis_deg': 90.0, 'major_pNm': -2.0}
    """
    out = dict(row)
    for name in _ODD & set(out):
        value = out[name]
        if value is None:
            continue
        turned = -value + 0.0  # + 0.0: never minus zero
        period = _AXES.get(name)
        if period is not None and turned <= -period / 2:
            turned += period
        out[name] = turned
    return out


def _typed(row: Mapping[str, Any], fields: Mapping[str, type], kind: str) -> dict[str, Any]:
    """The row's exported columns; an empty or missing value becomes None (text: "")."""
    out: dict[str, Any] = {}
    for name, wanted in fields.items():
        value = row.get(name)
        if wanted is str:
            out[name] = "" if value is None else str(value)
            continue
        if value is None or value == "":
            out[name] = None
            continue
        try:
            number = float(value)
        except (TypeError, ValueError) as error:
            raise InputError(
                f"{kind} holds '{value}' under {name}",
                code="bad-number",
                remedy="run the measurement again",
                column=name,
            ) from error
        if not math.isfinite(number):
            raise InputError(
                f"{kind} holds {number} under {name}", code="bad-number", remedy="leave it empty", column=name
            )
        out[name] = int(number) if wanted is int else number
    return out


def _moment(estimate: PopulationEstimate | None) -> dict[str, Any] | None:
    if estimate is None:
        return None

    def unit(value: float | None) -> float | None:
        return None if value is None else from_si(value, "pNm")

    return {
        "mean_pNm": unit(estimate.mean),
        "mean_sd_pNm": unit(estimate.mean_sd),
        "mean_low_pNm": unit(estimate.mean_low),
        "mean_high_pNm": unit(estimate.mean_high),
        "spread_pNm": unit(estimate.spread),
        "spread_low_pNm": unit(estimate.spread_low),
        "spread_high_pNm": unit(estimate.spread_high),
        "naive_spread_pNm": unit(estimate.naive_spread),
        "real_share_of_variance": estimate.heterogeneity,
    }


def _tensor(population: TensorPopulation | None, sign: float) -> dict[str, Any] | None:
    if population is None:
        return None
    flip = np.array([1.0, sign, 1.0])
    scale = from_si(1.0, "pNm")

    def matrix(value: Any) -> Any:
        return None if value is None else (value * np.outer(flip, flip) * scale**2).tolist()

    return {
        "order": ["along", "shear", "across"],
        "mean_pNm": (population.mean * flip * scale).tolist(),
        "mean_covariance_pNm2": matrix(population.mean_covariance),
        "spread_covariance_pNm2": matrix(population.spread),
        "method": population.method,
    }


def export_document(
    cells: Sequence[Mapping[str, Any]],
    pairs: Sequence[Mapping[str, Any]],
    gels: Sequence[Mapping[str, Any]],
    populations: Sequence[ConditionSummary],
    *,
    comparisons: Sequence[Comparison] = (),
    frame: str = "y-down",
    draws: int = 0,
    seed: int = 0,
    quantity: Mapping[str, str] | None = None,
    version: str = "",
) -> dict[str, Any]:
    """The document that ``tfm export`` writes.

    Parameters
    ----------
    cells, pairs, gels
        Rows of the result tables, numbers as text or float, empty = not measured.
    populations, comparisons
        What :func:`tfm.population.summarise_conditions` and :func:`tfm.population.compare_conditions` gave.
    frame
        ``y-down`` (the image's) or ``y-up``.
    draws
        Number of made-up cells per condition, drawn from mean and spread with the measurement error removed.
    seed
        Of the draws.
    quantity
        field -> ``total`` or ``change`` (against the frame of least pull); ``total`` where not given.
    version
        Of the package.

    Raises
    ------
    InputError
        For an unknown frame, a negative number of draws, or a value that is not a number.

    Examples
    --------
    >>> document = export_document([], [], [], [])
    >>> document["schema"], document["cells"]
    ('tugtensor-dipoles/1', [])
    """
    if frame not in _FRAMES:
        raise InputError(f"frame '{frame}' is unknown", code="bad-frame", remedy=f"choose {' or '.join(_FRAMES)}")
    if draws < 0:
        raise InputError(f"{draws} draws were asked for", code="bad-draws", remedy="give 0 or more")
    up = frame == "y-up"
    said = dict(quantity or {})

    def rows(table: Sequence[Mapping[str, Any]], fields: Mapping[str, type], kind: str) -> list[dict[str, Any]]:
        typed = [_typed(row, fields, kind) for row in table]
        for row in typed:
            if kind != "gel.csv":
                row["quantity"] = said.get(row["field"], "total")
        return [mirrored_row(row) for row in typed] if up else typed

    sign = -1.0 if up else 1.0
    rng = np.random.default_rng(seed)
    made_up: list[dict[str, Any]] = []
    described = []
    for summary in populations:
        described.append(
            {
                "condition": summary.condition,
                "cells": summary.cells,
                "rows": summary.rows,
                "cells_without_axis": summary.without_axis,
                "contractile_moment": _moment(summary.moment),
                "pull_along": _moment(summary.along),
                "pull_across": _moment(summary.across),
                "tensor": _tensor(summary.tensor, sign),
            }
        )
        if draws and summary.tensor is not None and summary.tensor.spread is not None:
            for number, drawn in enumerate(tensor_draws(summary.tensor, draws, rng)):
                along, shear, across = (from_si(float(v), "pNm") for v in drawn * np.array([1.0, sign, 1.0]))
                made_up.append(
                    {
                        "condition": summary.condition,
                        "draw": number,
                        "along_pNm": along,
                        "shear_pNm": shear,
                        "across_pNm": across,
                    }
                )
    return {
        "schema": SCHEMA_NAME,
        "made_with": f"tugtensor {version}".strip(),
        "frame": {"name": frame, "meaning": _FRAMES[frame]},
        "signs": _SIGNS,
        "caution": "measurements with stated assumptions, for research; not medical advice",
        "cells": rows(cells, CELL_FIELDS, "cells.csv"),
        "pairs": rows(pairs, PAIR_FIELDS, "pairs.csv"),
        "gels": rows(gels, GEL_FIELDS, "gel.csv"),
        "populations": described,
        "comparisons": [
            {
                "first": c.first,
                "second": c.second,
                "difference_pNm": from_si(c.difference, "pNm"),
                "difference_sd_pNm": from_si(c.difference_sd, "pNm"),
                "low_pNm": None if c.low is None else from_si(c.low, "pNm"),
                "high_pNm": None if c.high is None else from_si(c.high, "pNm"),
                "comparisons": c.comparisons,
            }
            for c in comparisons
        ],
        "draws": made_up,
    }

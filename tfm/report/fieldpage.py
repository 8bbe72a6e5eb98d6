"""What the page of one field says, as plain values for its template."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from tfm.report.drawing import Pictures
from tfm.report.figures import rows_of_frame
from tfm.report.numbers import BUDGET_WORDS, budget_shares
from tfm.report.results import FieldResult, Row, number
from tfm.report.words import cell_sentence, plain, with_error

__all__ = ["field_context"]

#: Column of the table -> (words, value column, error column).
_CELL: tuple[tuple[str, str, str], ...] = (
    ("Contractile moment, pN m", "contractile_moment_pNm", "contractile_moment_sd_pNm"),
    ("total ±", "contractile_moment_total_sd_pNm", ""),
    ("P xx, pN m", "dipole_xx_pNm", "dipole_xx_sd_pNm"),
    ("P xy, pN m", "dipole_xy_pNm", "dipole_xy_sd_pNm"),
    ("P yy, pN m", "dipole_yy_pNm", "dipole_yy_sd_pNm"),
    ("Major, pN m", "major_pNm", ""),
    ("Minor, pN m", "minor_pNm", ""),
    ("Axis, °", "axis_deg", "axis_sd_deg"),
    ("Strain energy, fJ", "strain_energy_fJ", "strain_energy_sd_fJ"),
    ("Peak traction, Pa", "traction_peak_Pa", ""),
    ("Peak shift, µm", "displacement_peak_um", ""),
)
_PAIR: tuple[tuple[str, str, str], ...] = (
    ("Distance, µm", "distance_um", ""),
    ("Bearing, °", "bearing_deg", ""),
    ("Energy, fJ", "energy_fJ", "energy_sd_fJ"),
    ("From the two tensors, fJ", "dipole_energy_fJ", "dipole_energy_sd_fJ"),
    ("Force on b in x, pN", "force_on_b_x_pN", ""),
    ("in y, pN", "force_on_b_y_pN", ""),
    ("Torque on b, fN m", "torque_on_b_fNm", ""),
    ("Coupling number", "coupling_number", ""),
)
_FRAME: tuple[tuple[str, str, str], ...] = (
    ("drift x", "drift_x_px", "px"),
    ("drift y", "drift_y_px", "px"),
    ("displacement noise (one component)", "displacement_noise_um", "µm"),
    ("vectors used", "vectors", ""),
    ("vectors rejected", "vectors_rejected", ""),
    ("misfit (1 is expected)", "misfit", ""),
)


def _interval(row: Row, name: str, unit: str) -> str:
    best, low, high = (number(row, f"{name}_{k}{unit}") for k in ("best", "low", "high"))
    if best is None:
        return "not measured"
    if low is None or high is None:
        return plain(best)
    return f"{plain(best)} (95 %: {plain(low)} to {plain(high)})"


def _gel(gel: Row) -> list[tuple[str, str]]:
    modulus, thickness = number(gel, "youngs_modulus_Pa"), number(gel, "thickness_um")
    shift = number(gel, "energy_shift_poisson_fJ")
    found = [
        ("verdict", gel.get("verdict") or "not tested"),
        ("Young's modulus, entered", f"{plain(modulus / 1e3)} kPa" if modulus is not None else "—"),
        ("Poisson ratio, entered", plain(number(gel, "poisson"))),
        ("Poisson ratio, from the beads", _interval(gel, "poisson", "")),
        (
            "thickness, entered",
            f"{plain(thickness)} µm" if thickness is not None else "none: treated as infinitely thick",
        ),
        ("thickness, from the beads (µm)", _interval(gel, "thickness", "_um")),
        ("peak strain (linear below 0.2)", plain(number(gel, "strain_peak"))),
        ("a Poisson ratio lower by 0.1 would change the energy by", f"{plain(shift)} fJ" if shift is not None else "—"),
    ]
    if gel.get("notes"):
        found.append(("notes", gel["notes"]))
    return found


def _measurement(field: FieldResult, frame: int) -> list[tuple[str, str]]:
    row = next(iter(rows_of_frame(field.frames, frame)), field.frames[0] if field.frames else {})
    found = [(words, f"{plain(number(row, key))} {unit}".strip()) for words, key, unit in _FRAME]
    record = field.record
    for name, value in (record.get("quality") or {}).items():
        found.append(
            (
                str(name).removesuffix("_um").replace("_", " ") + (", µm" if str(name).endswith("_um") else ""),
                plain(value) if isinstance(value, int | float) else str(value),
            )
        )
    seconds = record.get("seconds")
    if isinstance(seconds, Mapping) and isinstance(seconds.get("all"), int | float):
        found.append(("time taken", f"{seconds['all']:.1f} s"))
    return found


def _provenance(record: Mapping[str, Any]) -> list[tuple[str, str]]:
    """Settings, versions and hashes: what is needed to get the same numbers again."""
    found = []
    parts = record.get("parts") or {}
    for words, values in (("setting", parts.get("settings")), ("version", record.get("versions"))):
        if isinstance(values, Mapping):
            found += [(f"{words}: {k}", str(v)) for k, v in values.items() if not isinstance(v, Mapping | list)]
    files = record.get("files") or {}
    for role, digest in (parts.get("inputs") or {}).items():
        found.append((f"{role}: {files.get(role, '')}", f"SHA-256 {digest}"))
    return found


def field_context(field: FieldResult, pictures: Pictures, meanings: Mapping[str, Any]) -> dict[str, Any]:
    """Everything that ``field.html`` shows."""
    frames = len({r.get("frame") for r in field.frames})
    shown: Sequence[Row] = rows_of_frame(field.cells, pictures.frame)
    head: list[tuple[str, bool]] = [("Cell", True), *([("Frame", True)] if frames > 1 else []), ("Status", False)]
    rows = []
    for r in field.cells:
        start = [r.get("cell", ""), *([r.get("frame", "")] if frames > 1 else []), r.get("status", "")]
        rows.append(
            start
            + [with_error(number(r, key), number(r, sd) if sd else None) for _, key, sd in _CELL]
            + [r.get("notes", "")]
        )
    shares = budget_shares(field.record, pictures.frame)
    sources = list(dict.fromkeys(k for parts in shares.values() for k in parts))
    links = rows_of_frame(field.pairs, pictures.frame)
    return {
        "field": field,
        "frames": frames,
        "frame": pictures.frame,
        "sentences": [cell_sentence(r, change=field.change_only) for r in shown],
        "pictures": pictures.pictures,
        "cell_columns": [*head, *[(words, True) for words, _, _ in _CELL], ("Notes", False)],
        "cell_rows": rows,
        "status_at": 2 if frames > 1 else 1,
        "shown_cells": shown,
        "all_columns": list(shown[0]) if shown else [],
        "meanings": meanings,
        "pair_columns": ["Cells", *[words for words, _, _ in _PAIR], "Status", "Notes"],
        "pair_rows": [
            [
                f"{r.get('cell_a')} → {r.get('cell_b')}",
                *[with_error(number(r, k), number(r, s) if s else None) for _, k, s in _PAIR],
                r.get("status", ""),
                r.get("notes", ""),
            ]
            for r in links
        ],
        "budget_columns": [BUDGET_WORDS.get(k, (k, "", ""))[0] for k in sources],
        "budget_rows": [(f"cell {n}", [f"{100 * p.get(k, 0.0):.1f} %" for k in sources]) for n, p in shares.items()],
        "gel": _gel(field.gel) if field.gel is not None else [],
        "measurement": [
            *_measurement(field, pictures.frame),
            *((f"{k}, %", plain(v)) for k, v in pictures.measures.items()),
        ],
        "provenance": _provenance(field.record),
    }

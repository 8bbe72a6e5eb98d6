"""From the numeric rooms' results in SI units to table rows in the tables' units."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from typing import Any

from tfm.displacement.model import DisplacementField
from tfm.moments.model import CellDipole, CellPair
from tfm.units import from_si

__all__ = ["cell_row", "failed_field_row", "field_row", "join_notes", "pair_row"]


def join_notes(*groups: Iterable[str]) -> str:
    """Sentences without repeats, in their order, as one table cell.

    Examples
    --------
    >>> join_notes(["drift is large."], ["drift is large", "outline is a proposal"])
    'drift is large; outline is a proposal'
    """
    seen: dict[str, None] = {}
    for group in groups:
        for note in group:
            text = " ".join(note.split()).rstrip(".;")
            if text:
                seen.setdefault(text, None)
    return "; ".join(seen)


def _out(value: Any, unit: str) -> float | None:
    if value is None:
        return None
    number = float(value)
    return from_si(number, unit) if math.isfinite(number) else None


def cell_row(dipole: CellDipole, *, frame: int, time: float | None, status: str, notes: str) -> dict[str, Any]:
    """One row of cells.csv without what the sheet gives (field, condition, copied columns)."""
    row: dict[str, Any] = {
        "cell": dipole.cell,
        "frame": frame,
        "time_s": _out(time, "s"),
        "status": status,
        "notes": notes,
    }
    row["x_um"], row["y_um"] = (_out(v, "um") for v in dipole.centroid)
    row["area_um2"] = _out(dipole.area, "um2")
    row["outline_axis_deg"] = _axis(dipole.outline_axis)
    names = ("xx", "xy", "yy")
    for name, value in zip(names, dipole.dipole, strict=True):
        row[f"dipole_{name}_pNm"] = _out(value, "pNm")
    if dipole.covariance is not None:
        for i, name in enumerate(names):
            row[f"dipole_{name}_sd_pNm"] = _out(math.sqrt(max(float(dipole.covariance[i, i]), 0.0)), "pNm")
        for i, j in ((0, 1), (0, 2), (1, 2)):
            row[f"cov_{names[i]}_{names[j]}_pNm2"] = _out(dipole.covariance[i, j], "pNm2")
    row["major_pNm"], row["minor_pNm"] = _out(dipole.major, "pNm"), _out(dipole.minor, "pNm")
    row["axis_deg"], row["axis_sd_deg"] = _axis(dipole.axis), _out(dipole.axis_sd, "deg")
    row["anisotropy"] = dipole.anisotropy
    row["contractile_moment_pNm"] = _out(dipole.contractile_moment, "pNm")
    row["contractile_moment_sd_pNm"] = _out(dipole.contractile_moment_sd, "pNm")
    row["contractile_moment_total_sd_pNm"] = _out(dipole.contractile_moment_total_sd, "pNm")
    row["net_force_nN"], row["torque_pNm"] = _out(dipole.net_force, "nN"), _out(dipole.torque, "pNm")
    row["force_total_nN"] = _out(dipole.force_total, "nN")
    row["strain_energy_fJ"] = _out(dipole.strain_energy, "fJ")
    row["strain_energy_sd_fJ"] = _out(dipole.strain_energy_sd, "fJ")
    row["traction_peak_Pa"], row["traction_rms_Pa"] = _out(dipole.traction_peak, "Pa"), _out(dipole.traction_rms, "Pa")
    row["displacement_peak_um"] = _out(dipole.displacement_peak, "um")
    return row


def _axis(angle: float | None) -> float | None:
    """Degrees in (-90, 90]: rounding to the tables' digits must not carry -89.9999999 to -90."""
    degrees = _out(angle, "deg")
    if degrees is None:
        return None
    return 90.0 if float(f"{degrees:.8g}") <= -90.0 else degrees


def pair_row(pair: CellPair, *, frame: int, notes: Sequence[str] = (), status: str = "") -> dict[str, Any]:
    """One row of pairs.csv without the field's name; any note makes ``caution``."""
    text = join_notes(pair.notes, notes)
    bearing = _out(pair.bearing, "deg")
    return {
        "frame": frame,
        "cell_a": pair.cell_a,
        "cell_b": pair.cell_b,
        "distance_um": _out(pair.distance, "um"),
        "bearing_deg": 180.0 if bearing is not None and float(f"{bearing:.8g}") <= -180.0 else bearing,
        "energy_fJ": _out(pair.energy, "fJ"),
        "energy_sd_fJ": _out(pair.energy_sd, "fJ"),
        "dipole_energy_fJ": _out(pair.dipole_energy, "fJ"),
        "dipole_energy_sd_fJ": _out(pair.dipole_energy_sd, "fJ"),
        "force_on_b_x_pN": _out(pair.force_on_b[0], "pN"),
        "force_on_b_y_pN": _out(pair.force_on_b[1], "pN"),
        "torque_on_b_fNm": _out(pair.torque_on_b, "fNm"),
        "coupling_number": pair.coupling_number,
        "status": status or ("caution" if text else "ok"),
        "notes": text,
    }


def field_row(
    displacement: DisplacementField | None, *, frame: int, pixel: float | None, misfit: float, status: str, message: str
) -> dict[str, Any]:
    """One row of fields.csv without the field's name."""
    row: dict[str, Any] = {"frame": frame, "status": status, "message": message}
    if math.isfinite(misfit):
        row["misfit"] = misfit
    if displacement is not None:
        if pixel:
            row["drift_x_px"], row["drift_y_px"] = (float(v) / pixel for v in displacement.drift)
        row["displacement_noise_um"] = _out(displacement.noise, "um")
        row["vectors"] = int(displacement.valid.sum())
        row["vectors_rejected"] = int(displacement.rejected)
    return row


def failed_field_row(message: str, *, frame: int = 0) -> dict[str, Any]:
    """The row of a field or frame that gives no number."""
    return {"frame": frame, "status": "failed", "message": " ".join(message.split())}

"""The row of gel.csv: what was entered, and what the beads say about it."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from tfm.batch.frames import FrameResult
from tfm.batch.rows import join_notes
from tfm.batch.settings import RowValues, RunSettings
from tfm.errors import TfmError
from tfm.gel import Gel
from tfm.gelcheck import GelEvidence, check_gel
from tfm.moments import CellDipole
from tfm.units import from_si

__all__ = ["gel_row", "make_gel"]


def make_gel(row: RowValues) -> Gel:
    """The gel that a row of the sheet describes.

    Examples
    --------
    >>> make_gel(RowValues(field="a", row=2, shear_modulus=1000.0, poisson=0.5)).youngs_modulus
    3000.0
    """
    poisson = 0.0 if row.poisson is None else row.poisson
    spread = {"poisson_sd": row.poisson_sd or 0.0, "thickness_sd": row.thickness_sd or 0.0}
    if row.shear_modulus is not None:
        return Gel.from_shear_modulus(
            row.shear_modulus, poisson, row.thickness, shear_modulus_sd=row.shear_modulus_sd or 0.0, **spread
        )
    return Gel(
        row.youngs_modulus or 0.0, poisson, row.thickness, youngs_modulus_sd=row.youngs_modulus_sd or 0.0, **spread
    )


def gel_row(
    row: RowValues,
    settings: RunSettings,
    frame: FrameResult,
    dipoles: tuple[CellDipole, ...],
    gel: Gel,
    *,
    pixel: float,
    change: bool,
) -> tuple[dict[str, Any], dict[str, Any]]:
    """The row of gel.csv without the field's name, and the evidence curves for the report.

    Both are of the frame that stores most energy: there the beads say most.
    """
    energy = sum(d.strain_energy for d in dipoles)
    found: dict[str, Any] = {
        "youngs_modulus_Pa": gel.youngs_modulus,
        "poisson": gel.poisson,
        "thickness_um": _um(gel.thickness),
        "strain_energy_fJ": _fj(energy),
        "verdict": "cannot tell",
    }
    notes = []
    if gel.thickness is None:
        notes.append("no thickness was entered: the gel is treated as infinitely thick")
    if change:
        notes.append("energies are changes against the frame of least pull, not totals")
    if not settings.gel_check:
        notes.append("the gel was not tested: asked for by --no-gel-check")
        return {**found, "notes": join_notes(notes)}, {}
    try:
        evidence = check_gel(frame.traction, dipoles, shear=row.shear_modulus is not None, pixel_size=pixel)
    except TfmError as error:  # the dipoles stand without it
        notes.append(f"the gel could not be tested: {error.message}")
        return {**found, "notes": join_notes(notes)}, {}
    found |= {
        "poisson_best": evidence.poisson_best,
        "poisson_low": evidence.poisson_low,
        "poisson_high": evidence.poisson_high,
        "thickness_best_um": _um(evidence.thickness_best),
        "thickness_low_um": _um(evidence.thickness_low),
        "thickness_high_um": _um(evidence.thickness_high),
        "energy_shift_poisson_fJ": _fj(evidence.energy_shift_poisson),
        "strain_peak": evidence.strain_peak,
        "verdict": evidence.verdict,
        "notes": join_notes(notes, evidence.notes),
    }
    return found, _curves(evidence)


def _um(value: float | None) -> float | None:
    return None if value is None or not math.isfinite(value) else from_si(value, "um")


def _fj(value: float | None) -> float | None:
    return None if value is None or not math.isfinite(value) else from_si(value, "fJ")


def _curves(evidence: GelEvidence) -> dict[str, Any]:
    """Log evidence against Poisson ratio and against thickness (um), where there is any."""
    curves: dict[str, Any] = {}
    for name, values, log_evidence in (
        ("poisson", evidence.poisson, evidence.poisson_log_evidence),
        ("thickness", evidence.thickness, evidence.thickness_log_evidence),
    ):
        if values is None or log_evidence is None:
            continue
        finite = np.isfinite(values) & np.isfinite(log_evidence)
        scale = from_si(1.0, "um") if name == "thickness" else 1.0
        curves[name] = {
            "value": (values[finite] * scale).tolist(),
            "log_evidence": log_evidence[finite].tolist(),
        }
    return curves

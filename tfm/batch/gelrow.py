"""The row of gel.csv: what was entered, and what the beads say about it."""

from __future__ import annotations

import math
from typing import Any

from tfm.batch.frames import FrameResult
from tfm.batch.rows import join_notes
from tfm.batch.settings import RowValues, RunSettings
from tfm.gel import Gel
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
    change: bool,
) -> dict[str, Any]:
    """The row of gel.csv, without the field's name, from the frame that stores most energy."""
    energy = sum(d.strain_energy for d in dipoles)
    found: dict[str, Any] = {
        "youngs_modulus_Pa": gel.youngs_modulus,
        "poisson": gel.poisson,
        "thickness_um": None if gel.thickness is None else from_si(gel.thickness, "um"),
        "strain_energy_fJ": from_si(energy, "fJ") if math.isfinite(energy) else None,
        "verdict": "cannot tell",
    }
    notes = []
    if gel.thickness is None:
        notes.append("no thickness was entered: the gel is treated as infinitely thick")
    if change:
        notes.append("energies are changes against the frame of least pull, not totals")
    found["notes"] = join_notes(notes)
    return found

"""The columns of the four result tables, in their order, with the unit and meaning that ``columns.json`` repeats."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["CELLS", "FIELDS", "GEL", "PAIRS", "STATUS_WORDS", "TABLES", "VERDICTS", "TableColumn", "reserved_names"]

STATUS_WORDS = ("ok", "caution", "failed")
VERDICTS = ("agrees", "doubtful", "contradicted", "cannot tell")


@dataclass(frozen=True)
class TableColumn:
    """Name, unit as a reader writes it (empty for text and pure numbers) and meaning of a column."""

    name: str
    unit: str
    meaning: str


def _columns(text: str) -> tuple[TableColumn, ...]:
    rows = [[part.strip() for part in line.split("|")] for line in text.strip().splitlines()]
    return tuple(TableColumn(name, unit, meaning) for name, unit, meaning in rows)


CELLS = _columns("""
field | | name of the imaged field, as in the cell sheet
cell | | number of the cell in the outlines of its field; the same number is the same cell in every frame
frame | | index of the frame, from 0
time_s | s | time since the first frame; empty where the interval between frames is not known
condition | | group label from the cell sheet
status | | ok; caution (usable, read the notes); failed (no number given)
notes | | what a reader of this row has to know, sentences separated by semicolons
x_um | um | centroid of the outline, to the right from the centre of pixel (0, 0)
y_um | um | centroid of the outline, downwards from the centre of pixel (0, 0)
area_um2 | um^2 | area of the outline
outline_axis_deg | deg | long axis of the outline, from +x towards +y (down), in (-90, 90]
dipole_xx_pNm | pN m | force dipole, integral of (x - x_c) T_x over the cell
dipole_xy_pNm | pN m | force dipole, symmetric part of the integral of (x - x_c) T_y over the cell
dipole_yy_pNm | pN m | force dipole, integral of (y - y_c) T_y over the cell
dipole_xx_sd_pNm | pN m | standard deviation of dipole_xx from the images
dipole_xy_sd_pNm | pN m | standard deviation of dipole_xy from the images
dipole_yy_sd_pNm | pN m | standard deviation of dipole_yy from the images
cov_xx_xy_pNm2 | (pN m)^2 | covariance of dipole_xx and dipole_xy from the images
cov_xx_yy_pNm2 | (pN m)^2 | covariance of dipole_xx and dipole_yy from the images
cov_xy_yy_pNm2 | (pN m)^2 | covariance of dipole_xy and dipole_yy from the images
major_pNm | pN m | principal value of the dipole of larger magnitude; negative for a cell that contracts
minor_pNm | pN m | the other principal value
axis_deg | deg | direction of the major principal value, from +x towards +y (down), in (-90, 90]
axis_sd_deg | deg | standard deviation of axis_deg
anisotropy | | (abs(major) - abs(minor)) / (abs(major) + abs(minor))
contractile_moment_pNm | pN m | -(dipole_xx + dipole_yy); positive for a cell that pulls inwards
contractile_moment_sd_pNm | pN m | standard deviation of the contractile moment from the images
contractile_moment_total_sd_pNm | pN m | the same with the stated uncertainty of gel and pixel size added
net_force_nN | nN | magnitude of the summed force of the cell on the gel
torque_pNm | pN m | torque of the cell on the gel about the centroid, from +x towards +y
force_total_nN | nN | integral of the traction's magnitude over the cell
strain_energy_fJ | fJ | elastic energy that the cell stores in the gel
strain_energy_sd_fJ | fJ | standard deviation of the strain energy from the images
traction_peak_Pa | Pa | largest traction inside the outline
traction_rms_Pa | Pa | root mean square traction inside the outline
displacement_peak_um | um | largest displacement under the outline
""")

PAIRS = _columns("""
field | | name of the imaged field, as in the cell sheet
frame | | index of the frame, from 0
cell_a | | number of the first cell
cell_b | | number of the second cell
distance_um | um | distance of the two centroids
bearing_deg | deg | direction from cell a to cell b, from +x towards +y (down), in (-180, 180]
energy_fJ | fJ | stored because both cells pull, from the whole fields; negative: together they store less
energy_sd_fJ | fJ | standard deviation of energy from the images
dipole_energy_fJ | fJ | interaction energy from the two dipole tensors alone
dipole_energy_sd_fJ | fJ | standard deviation of dipole_energy from the images
force_on_b_x_pN | pN | -d(energy)/dx of cell b, to the right
force_on_b_y_pN | pN | -d(energy)/dy of cell b, downwards
torque_on_b_fNm | fN m | -d(energy)/d(angle) of cell b, from +x towards +y
coupling_number | | abs(energy) / noise_energy of the cell sheet
status | | ok; caution (usable, read the notes); failed (no number given)
notes | | what a reader of this row has to know, sentences separated by semicolons
""")

GEL = _columns("""
field | | name of the imaged field, as in the cell sheet
youngs_modulus_Pa | Pa | Young's modulus that was used (from the shear modulus where the sheet gives that)
poisson | | Poisson ratio that was used
thickness_um | um | gel thickness that was used; empty = treated as infinitely thick
poisson_best | | Poisson ratio that explains the beads best
poisson_low | | lower end of its 95 % interval
poisson_high | | upper end of its 95 % interval
thickness_best_um | um | thickness that explains the beads best
thickness_low_um | um | lower end of its 95 % interval
thickness_high_um | um | upper end of its 95 % interval
strain_energy_fJ | fJ | elastic energy of all cells of the field together
energy_shift_poisson_fJ | fJ | what entering a Poisson ratio lower by 0.1 would do to the strain energy
strain_peak | | largest principal strain at the gel's surface; linear elasticity is doubtful above 0.2
verdict | | whether the entered gel explains the beads: agrees, doubtful, contradicted, cannot tell
notes | | what a reader of this row has to know, sentences separated by semicolons
""")

FIELDS = _columns("""
field | | name of the imaged field, as in the cell sheet
frame | | index of the frame, from 0
status | | ok; caution (usable, read the message); failed (no number given)
message | | why the frame failed or needs caution
drift_x_px | px | rigid shift of the stressed against the relaxed frame, to the right
drift_y_px | px | rigid shift of the stressed against the relaxed frame, downwards
displacement_noise_um | um | root mean square error of one displacement component on quiet ground
vectors | | displacement vectors that were used
vectors_rejected | | grid positions without a usable vector
misfit | | chi-square of the data per degree of freedom; 1 is expected
""")

TABLES: dict[str, tuple[TableColumn, ...]] = {"cells": CELLS, "pairs": PAIRS, "gel": GEL, "fields": FIELDS}


def reserved_names() -> frozenset[str]:
    """Names that a column copied from the sheet must not have, because a table uses them itself."""
    return frozenset(column.name for columns in TABLES.values() for column in columns)

"""Moments of the traction: dipole tensors, energies, and the interaction of cells."""

from tfm.moments.dipole import cell_dipoles, dipole_functionals
from tfm.moments.energy import energy_matrix, field_strain_energy, quadratic_moments
from tfm.moments.model import CellDipole, CellPair
from tfm.moments.pairs import cell_pairs
from tfm.moments.tensor import PrincipalAxes, axis_deviation, outline_axis, principal_axes

__all__ = [
    "CellDipole",
    "CellPair",
    "PrincipalAxes",
    "axis_deviation",
    "cell_dipoles",
    "cell_pairs",
    "dipole_functionals",
    "energy_matrix",
    "field_strain_energy",
    "outline_axis",
    "principal_axes",
    "quadratic_moments",
]

"""Many cells: populations, stiffness response, beats, planning, energy maps, export."""

from tfm.population.beats import Beat, BeatPair, beat_pair, measure_beat
from tfm.population.conditions import (
    Comparison,
    ConditionSummary,
    MeasuredCell,
    combine_repeats,
    compare_conditions,
    summarise_conditions,
)
from tfm.population.export import export_document, mirrored_row
from tfm.population.maps import EnergyMap, energy_map
from tfm.population.plan import ExpectedErrors, Setup, bead_information, expected_errors, improvements
from tfm.population.random_effects import PopulationEstimate, random_effects
from tfm.population.stiffness import LawFit, StiffnessFit, coupling_strength, fit_stiffness, saturating_moment
from tfm.population.tensors import TensorPopulation, rotation_of_tensor, tensor_draws, tensor_population, to_cell_frame

__all__ = [
    "Beat",
    "BeatPair",
    "Comparison",
    "ConditionSummary",
    "EnergyMap",
    "ExpectedErrors",
    "LawFit",
    "MeasuredCell",
    "PopulationEstimate",
    "Setup",
    "StiffnessFit",
    "TensorPopulation",
    "bead_information",
    "beat_pair",
    "combine_repeats",
    "compare_conditions",
    "coupling_strength",
    "energy_map",
    "expected_errors",
    "export_document",
    "fit_stiffness",
    "improvements",
    "measure_beat",
    "mirrored_row",
    "random_effects",
    "rotation_of_tensor",
    "saturating_moment",
    "summarise_conditions",
    "tensor_draws",
    "tensor_population",
    "to_cell_frame",
]

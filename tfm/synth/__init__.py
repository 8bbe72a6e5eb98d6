"""Room ``synth``: the forward model cells -> gel -> beads -> images, for the demo, tests and planning."""

from __future__ import annotations

from tfm.synth.beads import Beads, Camera, expected_photons, make_bead_image, make_beads
from tfm.synth.cells import SyntheticCell, lattice_axis, make_cell_traction, make_outline
from tfm.synth.demo import DEMO_SEED, write_demo
from tfm.synth.fields import SyntheticField, cell_displacements, make_bead_images, make_field
from tfm.synth.forward import displacement_at, lattice_work, surface_displacements
from tfm.synth.random_fields import random_cells, random_field, random_gel

__all__ = [
    "DEMO_SEED",
    "Beads",
    "Camera",
    "SyntheticCell",
    "SyntheticField",
    "cell_displacements",
    "displacement_at",
    "expected_photons",
    "lattice_axis",
    "lattice_work",
    "make_bead_image",
    "make_bead_images",
    "make_beads",
    "make_cell_traction",
    "make_field",
    "make_outline",
    "random_cells",
    "random_field",
    "random_gel",
    "surface_displacements",
    "write_demo",
]

"""The gel: the one place that knows elasticity.

Traction is the force per area that the cell applies to the gel, displacement is loaded minus relaxed; frame and signs
are those of
``docs/conventions.md``, formulas and ranges of validity those of ``docs/gel.md``. SI floats throughout.
"""

from tfm.gel.dipoles import (
    DipoleInteraction,
    dipole_displacement,
    dipole_interaction,
    dipole_interaction_derivatives,
    dipole_strain,
)
from tfm.gel.kernel import node_kernel, node_kernel_derivatives, node_strain_kernel
from tfm.gel.model import Gel
from tfm.gel.operator import SurfaceOperator, displacement
from tfm.gel.points import displacement_at, strain_at
from tfm.gel.response import fourier_response, fourier_response_derivatives
from tfm.gel.strain import full_strain, surface_strain
from tfm.gel.tensor import (
    surface_tensor,
    surface_tensor_derivatives,
    surface_tensor_gradient,
    surface_tensor_second_gradient,
)

__all__ = [
    "DipoleInteraction",
    "Gel",
    "SurfaceOperator",
    "dipole_displacement",
    "dipole_interaction",
    "dipole_interaction_derivatives",
    "dipole_strain",
    "displacement",
    "displacement_at",
    "fourier_response",
    "fourier_response_derivatives",
    "full_strain",
    "node_kernel",
    "node_kernel_derivatives",
    "node_strain_kernel",
    "strain_at",
    "surface_strain",
    "surface_tensor",
    "surface_tensor_derivatives",
    "surface_tensor_gradient",
    "surface_tensor_second_gradient",
]

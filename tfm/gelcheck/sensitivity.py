"""What a wrong entry would have done: energy, moment and peak traction of the same beads on other gels."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tfm.gel import Gel, displacement
from tfm.gelcheck.reduced import GelFamily, ReducedProblem, gel_family
from tfm.traction.result import lattice_traction

__all__ = ["GelChange", "Sensitivity", "gel_sensitivity"]

Array = NDArray[np.float64]

#: Poisson ratios of the energy curve.
_CURVE = (0.0, 0.1, 0.2, 0.3, 0.4, 0.5)


@dataclass(frozen=True)
class GelChange:
    """Relative changes, new over old less 1, of a field's strain energy, contractile moment and peak traction."""

    energy: float
    moment: float
    traction_peak: float


@dataclass(frozen=True)
class Sensitivity:
    """Changes if the sheet had said something else. None = not a gel, or there is nothing to change.

    Attributes
    ----------
    poisson_lower
        Poisson ratio entered lower by 0.1.
    modulus_higher
        Young's modulus entered higher by 10 %: tractions are proportional to it.
    thickness_higher
        Thickness entered higher by 10 %.
    infinite
        Thickness left away.
    poisson, energy_ratio, moment_ratio
        ``(6,)`` Poisson ratios, and strain energy and contractile moment there over those of the entered gel, at the
        same Young's modulus.
    """

    poisson_lower: GelChange | None
    modulus_higher: GelChange
    thickness_higher: GelChange | None
    infinite: GelChange | None
    poisson: Array
    energy_ratio: Array
    moment_ratio: Array


def gel_sensitivity(
    problem: ReducedProblem, gel: Gel, entered: GelFamily, reference: float, *, shear: bool = False
) -> Sensitivity:
    """Solve the same beads on other gels.

    Parameters
    ----------
    problem
        Data of the field, nothing merged: a change of 1 % of the moment is worth every patch.
    gel
        As entered.
    entered
        Family of the entered thickness, for the curve of the energy; it may be of merged data.
    reference
        Its softness at the entered Poisson ratio.
    shear
        The shear modulus was entered: another Poisson ratio then changes Young's modulus too.
    """
    home = gel_family(problem, gel.thickness, nodes=(gel.poisson,))
    own = home.softness(gel.poisson)
    old = _state(problem, home, gel, own)

    def change(other: Gel) -> GelChange:
        family = gel_family(problem, other.thickness, nodes=(other.poisson,))
        return GelChange(*(float(v) for v in _state(problem, family, other, own) / old - 1.0))

    def with_poisson(poisson: float) -> Gel:
        factor = (1.0 + poisson) / (1.0 + gel.poisson) if shear else 1.0
        return replace(gel, poisson=poisson, youngs_modulus=gel.youngs_modulus * factor)

    lower = change(with_poisson(gel.poisson - 0.1)) if gel.poisson >= 0.1 else None
    thicker = infinite = None
    if gel.thickness is not None:
        thicker = change(replace(gel, thickness=1.1 * gel.thickness))
        infinite = change(replace(gel, thickness=None, thickness_sd=0.0))
    start = _state(entered.problem, entered, gel, reference)
    curve = [_state(entered.problem, entered, replace(gel, poisson=nu), reference) / start for nu in _CURVE]
    ratio = np.stack(curve)
    return Sensitivity(lower, GelChange(0.1, 0.1, 0.1), thicker, infinite, np.array(_CURVE), ratio[:, 0], ratio[:, 1])


def _state(problem: ReducedProblem, family: GelFamily, gel: Gel, reference: float) -> Array:
    """Strain energy J, contractile moment N m and peak traction Pa of the posterior mean."""
    data = problem.data
    strain = family.mean(gel.poisson, reference=reference)
    traction = lattice_traction(data, strain * (gel.youngs_modulus / (1.0 + gel.poisson)))
    u = displacement(gel, traction, data.lattice.spacing)
    area = data.lattice.spacing**2
    moment = -float((data.lattice.x * traction[0]).sum() + (data.lattice.y[:, None] * traction[1]).sum()) * area
    return np.array([0.5 * area * float((traction * u).sum()), moment, float(np.hypot(*traction).max())])

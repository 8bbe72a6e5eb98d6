"""The same beads on another gel: how the traction would change."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tfm.errors import InputError
from tfm.gel import Gel
from tfm.traction.gaussian import Solution, normal_equations, posterior
from tfm.traction.model import TractionField
from tfm.traction.prior import make_prior

__all__ = ["mean_with_gel", "solution_with_gel"]


def solution_with_gel(traction: TractionField, gel: Gel) -> Solution:
    """Posterior of the same data on another gel, with the same correlation length and a prior strength scaled with E.

    Raises
    ------
    InputError
        When the traction has no posterior (method ``fourier``).
    """
    if traction.data is None or traction.solution is None:
        raise InputError("this traction has no posterior", code="no-posterior", remedy="use the method bounded or image")
    prior = make_prior(traction.data.basis, traction.data.lattice, length=traction.solution.length)
    scale = gel.youngs_modulus / traction.gel.youngs_modulus
    return posterior(
        normal_equations(traction.data, gel), prior, traction.solution.amplitudes * scale, traction.solution.length
    )[0]


def mean_with_gel(traction: TractionField, gel: Gel) -> NDArray[np.float64]:
    """Mean coefficients ``(2 n,)`` Pa of :func:`solution_with_gel`."""
    return solution_with_gel(traction, gel).mean

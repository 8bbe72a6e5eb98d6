"""The same beads on another gel: how the traction would change."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tfm.errors import InputError
from tfm.gel import Gel
from tfm.traction.gaussian import Solution, fixed_posterior, normal_equations
from tfm.traction.model import TractionField

__all__ = ["mean_with_gel", "solution_with_gel"]


def solution_with_gel(traction: TractionField, gel: Gel) -> Solution:
    """Posterior of the same data on another gel, with the same correlation lengths and a prior strength scaled with E.

    Raises
    ------
    InputError
        When the traction has no posterior (method ``fourier``).
    """
    if traction.data is None or traction.solution is None:
        raise InputError(
            "this traction has no posterior", code="no-posterior", remedy="use the method bounded or image"
        )
    return fixed_posterior(
        traction.data,
        normal_equations(traction.data, gel),
        traction.solution.components,
        amplitude_factor=gel.youngs_modulus / traction.gel.youngs_modulus,
    )


def mean_with_gel(traction: TractionField, gel: Gel) -> NDArray[np.float64]:
    """Mean coefficients ``(2 n,)`` Pa of :func:`solution_with_gel`."""
    return solution_with_gel(traction, gel).mean

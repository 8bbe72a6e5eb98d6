"""What the room hands on: traction on a lattice and, for the Bayesian methods, its posterior."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfm.gel import Gel
from tfm.traction.gaussian import LinearData, Solution

__all__ = ["Posterior", "TractionField"]


@dataclass(frozen=True)
class Posterior:
    """Gaussian posterior of the traction's coefficients.

    Traction on the lattice's cells inside the outlines is ``basis @ c`` for each component, with
    ``c ~ N(mean, covariance)``.

    Attributes
    ----------
    basis
        ``(n_cells, n)`` float; rows are the lattice cells listed in ``rows``/``columns``, columns the nodes.
    rows, columns
        ``(n_cells,)`` int: lattice indices [row, column].
    labels
        ``(n_cells,)`` int: the cell that each lattice cell belongs to.
    mean
        ``(2 n,)`` Pa: all x coefficients, then all y coefficients.
    covariance
        ``(2 n, 2 n)`` Pa^2.
    log_evidence
        Natural logarithm of p(data | gel, prior family) at the chosen prior strength.
    """

    basis: Any
    rows: NDArray[np.intp]
    columns: NDArray[np.intp]
    labels: NDArray[np.int32]
    mean: NDArray[np.float64]
    covariance: NDArray[np.float64]
    log_evidence: float


@dataclass(frozen=True)
class TractionField:
    """Force per area that the cells apply to the gel.

    Attributes
    ----------
    x, y
        ``(nx,)`` and ``(ny,)`` m: centres of the square lattice cells.
    spacing
        m, edge of a lattice cell.
    traction
        ``(2, ny, nx)`` Pa, component 0 = x; exactly 0 outside the outlines for the methods that know them.
    displacement
        ``(2, ny, nx)`` m: what this traction (without offset) displaces.
    labels
        ``(ny, nx)`` int32 on the lattice: 0 none, else the cell.
    gel
        The gel that was used.
    method
        ``fourier``, ``bounded`` or ``image``.
    posterior
        None for ``fourier``.
    offset
        ``(2,)`` m: uniform shift estimated together with the traction.
    misfit
        Chi-square of the data per degree of freedom; its expectation is 1. NaN where the method has none.
    statistics
        Iterations, prior strength, lambda and its unit, evidence, node spacing, seconds: for run.json.
    notes
        Sentences for the table; any note makes ``caution``.
    dipole_covariance, energy_sd
        For ``fourier``: noise propagated to every cell's dipole, ``(3, 3)`` (N m)^2 by label, and strain energy, J.
    data, solution
        The linearised problem and its solution, so that other gels can be tried on the same beads
        (:func:`tfm.traction.solve`); None for ``fourier``.
    """

    x: NDArray[np.float64]
    y: NDArray[np.float64]
    spacing: float
    traction: NDArray[np.float64]
    displacement: NDArray[np.float64]
    labels: NDArray[np.int32]
    gel: Gel
    method: str
    posterior: Posterior | None
    offset: NDArray[np.float64]
    misfit: float
    statistics: Mapping[str, Any] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    dipole_covariance: Mapping[int, NDArray[np.float64]] = field(default_factory=dict)
    energy_sd: Mapping[int, float] = field(default_factory=dict)
    data: LinearData | None = None
    solution: Solution | None = None

"""From a posterior to the record that the room hands on."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfm.gel import Gel, displacement, node_kernel
from tfm.traction.gaussian import LinearData, Solution
from tfm.traction.model import Posterior, TractionField

__all__ = ["lattice_traction", "make_result"]


def lattice_traction(data: LinearData, mean: NDArray[np.float64]) -> NDArray[np.float64]:
    """``(2, ny, nx)`` Pa on the lattice for coefficients ``(2 n,)``."""
    n = data.basis.size
    traction = np.zeros((2, *data.lattice.shape))
    for i in range(2):
        traction[i, data.basis.rows, data.basis.columns] = data.basis.weights @ mean[i * n : (i + 1) * n]
    return traction


def make_result(
    data: LinearData,
    gel: Gel,
    covered: NDArray[np.int32],
    solution: Solution,
    *,
    method: str,
    misfit: float,
    cut: tuple[int, ...],
    notes: tuple[str, ...] = (),
    statistics: Mapping[str, Any] | None = None,
    offset_before: NDArray[np.float64] | None = None,
) -> TractionField:
    """The frozen record of a Bayesian method."""
    traction = lattice_traction(data, solution.mean)
    lattice, basis = data.lattice, data.basis
    kernel = node_kernel(gel, lattice.shape, lattice.spacing, receiver="average")
    said = list(notes)
    if cut:
        names = ", ".join(str(c) for c in cut)
        said.append(
            f"cell {names} is cut by the image's edge or touches one that is: "
            "its forces are not balanced inside the image"
        )
    step_um = basis.step * lattice.spacing * 1e6
    if step_um > 3.0:
        said.append(
            f"nodes are {step_um:.1f} um apart, wider than adhesions: fine structure of the traction is not resolved"
        )
    numbers = {
        "prior": [
            {
                "shape": c.shape,
                "length_um": c.length * 1e6,
                "amplitude_Pa": c.amplitudes.tolist(),
                "log_evidence": c.log_evidence,
            }
            for c in solution.components
        ],
        "length_profile": [[shape, length * 1e6, value] for shape, length, value in solution.profile],
        "log_evidence": solution.log_evidence,
        "node_spacing_um": step_um,
        "coefficients": 2 * basis.size,
        "data": 2 * data.rows.size,
        "prior_iterations": solution.iterations,
        "nuisance": list(data.nuisance),
        "nuisance_values": solution.nuisance.tolist(),
        **(statistics or {}),
    }
    return TractionField(
        lattice.x,
        lattice.y,
        lattice.spacing,
        traction,
        displacement(gel, traction, lattice.spacing, kernel=kernel),
        covered,
        gel,
        method,
        Posterior(
            basis.weights,
            basis.rows,
            basis.columns,
            basis.labels,
            solution.mean,
            solution.covariance,
            solution.log_evidence,
        ),
        solution.nuisance[:2] if offset_before is None else offset_before,
        float(misfit),
        numbers,
        tuple(said),
        data=data,
        solution=solution,
    )

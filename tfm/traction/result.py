"""From a posterior to the record that the room hands on."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfm.gel import Gel, displacement, node_kernel
from tfm.traction.gaussian import LinearData, NormalEquations, Solution
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
    normal: NormalEquations,
    *,
    method: str,
    misfit: float | None,
    cut: tuple[int, ...],
    notes: tuple[str, ...] = (),
    statistics: Mapping[str, Any] | None = None,
    offset_before: NDArray[np.float64] | None = None,
) -> TractionField:
    """The frozen record; ``misfit`` None takes the chi-square of the data per degree of freedom."""
    traction = lattice_traction(data, solution.mean)
    lattice, basis = data.lattice, data.basis
    kernel = node_kernel(gel, lattice.shape, lattice.spacing, receiver="average")
    chi = solution.chi_square / max(solution.degrees, 1.0)
    said = list(notes)
    if cut:
        names = ", ".join(str(c) for c in cut)
        said.append(f"cell {names} is cut by the image's edge or touches one that is: its forces are not balanced inside the image")
    step_um = basis.step * lattice.spacing * 1e6
    if step_um > 3.0:
        said.append(f"nodes are {step_um:.1f} um apart, wider than adhesions: fine structure of the traction is not resolved")
    numbers = {
        "amplitude_Pa": solution.amplitudes.tolist(), "length_um": solution.length * 1e6,
        "length_profile": [[length * 1e6, value] for length, value in solution.profile],
        "log_evidence": solution.log_evidence, "node_spacing_um": step_um, "coefficients": 2 * basis.size,
        "data": 2 * data.rows.size, "prior_iterations": solution.iterations, "nuisance": list(data.nuisance),
        "nuisance_values": solution.nuisance.tolist(), **(statistics or {}),
    }  # fmt: skip
    return TractionField(
        lattice.x, lattice.y, lattice.spacing, traction, displacement(gel, traction, lattice.spacing, kernel=kernel), covered,
        gel, method,
        Posterior(
            basis.weights, basis.rows, basis.columns, basis.labels, solution.mean, solution.covariance, solution.log_evidence
        ),
        solution.nuisance[:2] if offset_before is None else offset_before, float(chi if misfit is None else misfit),
        numbers, tuple(said), data=data, solution=solution,
    )  # fmt: skip

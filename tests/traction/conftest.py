"""Small problems that several checks share."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest

from tfm.gel import Gel
from tfm.traction.gaussian import LinearData
from tfm.traction.lattice import Lattice, make_nodes


@dataclass(frozen=True)
class SmallProblem:
    data: LinearData
    gel: Gel
    noise: float


@pytest.fixture
def small_problem() -> SmallProblem:
    """Forty vectors around a cell of 20 lattice cells, noise 3 nm."""
    rng = np.random.default_rng(7)
    lattice = Lattice(0.0, 0.0, 1e-6, (14, 14))
    covered = np.zeros(lattice.shape, np.int32)
    covered[5:9, 4:9] = 1
    rows, columns = (rng.integers(0, 14, 40).astype(float) for _ in range(2))
    noise = 3e-9
    value = 2e-8 * rng.standard_normal((2, 40))
    precision = np.stack([np.full(40, noise**-2), np.full(40, 0.3 * noise**-2), np.full(40, 0.8 * noise**-2)])
    data = LinearData(lattice, make_nodes(covered, step=1), rows, columns, value, precision, groups=())
    return SmallProblem(data, Gel(3000.0, 0.45), noise)

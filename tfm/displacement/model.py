"""What the room hands on: displacement on a regular grid with the precision of every vector."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["DisplacementField"]


@dataclass(frozen=True)
class DisplacementField:
    """Displacement of the gel's surface, position under load minus relaxed position.

    Attributes
    ----------
    x, y
        ``(nx,)`` and ``(ny,)`` m. Grid positions **in the relaxed image's frame**; x right, y down, origin at the
        centre of pixel (0, 0).
    u
        ``(2, ny, nx)`` m, component 0 = x. NaN where ``valid`` is False: no vector is ever invented.
    precision
        ``(3, ny, nx)`` 1/m^2: xx, xy, yy of the inverse covariance of the vector; 0 where ``valid`` is False.
    valid
        ``(ny, nx)`` bool.
    drift
        ``(2,)`` m: rigid shift of the stressed frame against the relaxed one, already taken out of ``u``.
    noise
        m. Root mean square of one component's error on quiet ground (NaN when it could not be measured).
    independent_area
        m^2. Area of ground per independent vector: vectors of overlapping windows share pixels, so ``n`` vectors on a
        finer grid carry the information of ``n * spacing^2 / independent_area``. Equal to ``spacing^2`` when windows
        share nothing.
    rejected
        Number of grid positions with ``valid`` False.
    settings
        Window sizes, passes, backend and versions, for run.json.
    notes
        Sentences for the table.
    """

    x: NDArray[np.float64]
    y: NDArray[np.float64]
    u: NDArray[np.float64]
    precision: NDArray[np.float64]
    valid: NDArray[np.bool_]
    drift: NDArray[np.float64]
    noise: float
    independent_area: float
    rejected: int
    settings: Mapping[str, Any] = field(default_factory=dict)
    notes: tuple[str, ...] = ()

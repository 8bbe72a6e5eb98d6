"""What the room hands on: bead frames and cell outlines."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

__all__ = ["Outlines"]


@dataclass(frozen=True)
class Outlines:
    """Which pixel belongs to which cell.

    Attributes
    ----------
    labels
        ``(ny, nx)`` int32; 0 = no cell, 1..n = cells, one number per cell, in the image's frame.
    source
        ``label image``, ``polygons``, ``roi``, ``automatic`` or ``proposed from displacement``.
    notes
        Sentences for the table that concern all cells (for instance that an outline is a proposal, so ``caution``).
    cell_notes
        Sentences for the table that concern one cell, by its number.
    """

    labels: NDArray[np.int32]
    source: str
    notes: tuple[str, ...] = field(default=())
    cell_notes: Mapping[int, tuple[str, ...]] = field(default_factory=dict)

    @property
    def cells(self) -> tuple[int, ...]:
        """Labels present, ascending, without 0."""
        present = np.unique(self.labels)
        return tuple(int(v) for v in present if v > 0)

    @property
    def proposed(self) -> bool:
        """True when no one drew or segmented this outline."""
        return self.source == "proposed from displacement"

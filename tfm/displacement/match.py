"""Brightness of the stressed frame against the relaxed one, block by block, from frames that already match."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from tfm.displacement.grid import spline_matrix, to_pixels

__all__ = ["BrightnessSums"]

BLOCK = 64


def _edges(length: int) -> NDArray[np.int_]:
    return np.linspace(0, length, max(1, round(length / BLOCK)) + 1).astype(int)


@dataclass
class BrightnessSums:
    """First and second moments of both frames in blocks of about 64 px.

    Parameters
    ----------
    shape
        Of the image.
    """

    shape: tuple[int, int]
    _sums: NDArray[np.float64] = field(init=False)

    def __post_init__(self) -> None:
        self.rows, self.columns = (_edges(n) for n in self.shape)
        self._sums = np.zeros((5, len(self.rows) - 1, len(self.columns) - 1))

    def add(
        self,
        block_row: int,
        relaxed: NDArray[np.float32],
        warped: NDArray[np.float32],
        used: NDArray[np.bool_],
    ) -> None:
        """Take in the rows of one block row; both frames lightly smoothed, the second one brought back."""
        a, b = np.where(used, relaxed, 0), np.where(used, warped, 0)
        for k, part in enumerate((used.astype(np.float32), a, b, a * a, b * b)):
            self._sums[k, block_row] += np.add.reduceat(part.sum(axis=0, dtype=np.float64), self.columns[:-1])

    def maps(self) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        """Gain and offset at every pixel: warped = gain * relaxed + offset.

        The gain is the ratio of the standard deviations: unlike a regression it is not lowered by noise in the
        relaxed frame, nor by a displacement that is not quite right yet. Blocks with few beads lean on the whole image.
        """
        n, a, b, aa, bb = self._sums
        total = np.maximum(n.sum(), 1)
        energy_a = np.maximum(aa - a * a / np.maximum(n, 1), 0)
        energy_b = np.maximum(bb - b * b / np.maximum(n, 1), 0)
        whole = float(np.sqrt(energy_b.sum() / max(energy_a.sum(), 1e-30))) if energy_a.sum() > 0 else 1.0
        # A tenth of the median block's energy as prior weight.
        lean_a = 0.1 * float(np.median(energy_a)) + 1e-30
        gain = np.sqrt((energy_b + whole**2 * lean_a) / (energy_a + lean_a))
        gain = np.clip(gain, 0.2 * whole, 5 * whole)
        mean_offset = float((b.sum() - (gain * a).sum()) / total)
        lean_n = 0.1 * float(np.median(n)) + 1
        offset = (b - gain * a + lean_n * mean_offset) / (n + lean_n)
        centres = [(edges[:-1] + edges[1:] - 1) / 2 for edges in (self.rows, self.columns)]
        weights = [
            spline_matrix(c, np.clip(np.arange(length), c[0], c[-1]))
            for c, length in zip(centres, self.shape, strict=True)
        ]
        return to_pixels(gain, *weights), to_pixels(offset, *weights)

"""Patches of ground: small near a cell, where displacement varies, large far away, where it does not."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

__all__ = ["Blocks", "make_blocks"]


@dataclass(frozen=True)
class Blocks:
    """A partition of a grid into square blocks.

    Attributes
    ----------
    rows, columns
        ``(N,)`` centres in units of the grid.
    size
        ``(N,)`` edge of each block in grid cells.
    member
        ``(ny, nx)`` number of the block that each grid cell belongs to; -1 = none.
    distance
        ``(N,)`` smallest distance to the outlines in grid cells.
    """

    rows: NDArray[np.float64]
    columns: NDArray[np.float64]
    size: NDArray[np.intp]
    member: NDArray[np.intp]
    distance: NDArray[np.float64]

    def sum(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        """Sums of ``(m, ny, nx)`` over every block, ``(m, N)``."""
        use = self.member >= 0
        where = self.member[use]
        return np.stack([np.bincount(where, weights=v[use], minlength=self.rows.size) for v in values])


def make_blocks(
    outlined: NDArray[np.bool_],
    *,
    smallest: int = 2,
    largest: int = 16,
    ratio: float = 4.0,
    keep_whole: NDArray[np.bool_] | None = None,
) -> Blocks:
    """Blocks whose edge is at most their distance from the outlines divided by ``ratio``.

    Parameters
    ----------
    outlined
        ``(ny, nx)`` True where a cell is.
    smallest, largest
        Edge in grid cells, powers of two times ``smallest``.
    keep_whole
        ``(ny, nx)``: only blocks that are True throughout may be larger than ``smallest`` (so that a block's centre
        is the
        centre of its data).

    Examples
    --------
    >>> blocks = make_blocks(np.zeros((32, 32), bool))
    >>> blocks.rows.size, int(blocks.size[0])
    (4, 16)
    """
    ny, nx = outlined.shape
    distance = ndimage.distance_transform_edt(~outlined) if outlined.any() else np.full((ny, nx), np.inf)
    member = np.full((ny, nx), -1, np.intp)
    rows, columns, sizes, nearest = [], [], [], []
    count, size = 0, largest
    while size >= smallest:
        my, mx = ny // size, nx // size
        tiles = (slice(0, my * size), slice(0, mx * size))
        shape = (my, size, mx, size)
        free = (member[tiles] < 0).reshape(shape).all(axis=(1, 3))
        closest = distance[tiles].reshape(shape).min(axis=(1, 3))
        take = free if size == smallest else free & (closest >= ratio * size)
        if keep_whole is not None and size > smallest:
            take &= keep_whole[tiles].reshape(shape).all(axis=(1, 3))
        r, c = np.nonzero(take)
        number = np.full((my, mx), -1, np.intp)
        number[r, c] = count + np.arange(r.size)
        spread = np.repeat(np.repeat(number, size, axis=0), size, axis=1)
        view = member[tiles]
        view[spread >= 0] = spread[spread >= 0]
        rows.append(r * size + 0.5 * (size - 1))
        columns.append(c * size + 0.5 * (size - 1))
        sizes.append(np.full(r.size, size, np.intp))
        nearest.append(closest[r, c])
        count += r.size
        size //= 2
    return Blocks(
        np.concatenate(rows).astype(float),
        np.concatenate(columns).astype(float),
        np.concatenate(sizes),
        member,
        np.concatenate(nearest).astype(float),
    )

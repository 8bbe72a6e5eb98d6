"""Cells as neighbours and cells through time."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linear_sum_assignment
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

__all__ = ["LabelFollower", "cells_cut_by_edge", "follow_labels", "touching_groups"]

Labels = NDArray[np.int32]


def _border_pairs(labels: Labels) -> NDArray[np.int64]:
    """``(n, 2)`` pairs of different cells that are 8-neighbours somewhere."""
    found = []
    for first, second in (
        (labels[:, :-1], labels[:, 1:]),
        (labels[:-1, :], labels[1:, :]),
        (labels[:-1, :-1], labels[1:, 1:]),
        (labels[:-1, 1:], labels[1:, :-1]),
    ):
        border = (first != second) & (first > 0) & (second > 0)
        found.append(np.stack([first[border], second[border]], axis=1))
    return np.unique(np.concatenate(found).astype(np.int64), axis=0)


def touching_groups(labels: Labels) -> tuple[tuple[int, ...], ...]:
    """Cells that share a border, as groups; a cell on its own is a group of one.

    Two cells share a border when a pixel of one is among the eight neighbours of a pixel of the other. Force passes
    between touching cells, so only the group as a whole is in balance.

    Parameters
    ----------
    labels
        ``(ny, nx)`` int; 0 = no cell.

    Returns
    -------
    tuple of tuple of int
        Each cell in exactly one group, ascending inside the group; groups ordered by their first cell.

    Examples
    --------
    >>> touching_groups(np.array([[1, 1, 0, 3], [0, 0, 2, 0], [4, 0, 0, 0]], dtype=np.int32))
    ((1, 2, 3), (4,))
    """
    cells = np.unique(labels)
    cells = cells[cells > 0]
    if cells.size == 0:
        return ()
    pairs = np.searchsorted(cells, _border_pairs(labels))
    graph = coo_matrix((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(cells.size, cells.size))
    count, member = connected_components(graph, directed=False)
    groups = [tuple(int(cell) for cell in cells[member == number]) for number in range(count)]
    return tuple(sorted(groups))


def cells_cut_by_edge(labels: Labels) -> set[int]:
    """Cells with a pixel in the first or last row or column: a part of them may lie outside the image.

    Examples
    --------
    >>> cells_cut_by_edge(np.array([[0, 0, 0], [0, 2, 0], [0, 0, 5]], dtype=np.int32))
    {5}
    """
    rim = np.concatenate([labels[0], labels[-1], labels[:, 0], labels[:, -1]])
    return {int(cell) for cell in np.unique(rim) if cell > 0}


class LabelFollower:
    """Gives every cell of a time series one number, frame by frame; memory does not grow with the frames.

    Each new frame is matched with the last position of every cell seen so far, so that the summed intersection over
    union is largest (optimal assignment, :func:`scipy.optimize.linear_sum_assignment`). A cell that overlaps nothing
    seen before is new: it keeps its number where that is free, else it gets the next free one. No number is given
    twice.
    """

    def __init__(self) -> None:
        self._last: Labels | None = None
        self._used: set[int] = set()

    def step(self, labels: Labels) -> dict[int, int]:
        """Number in this frame -> number in the series, for every cell of the frame."""
        cells = [int(cell) for cell in np.unique(labels) if cell > 0]
        mapping: dict[int, int] = {}
        if self._last is not None:
            mapping = self._match(self._last, labels, cells)
        # Numbers asked for by cells of this frame stay free for them.
        for cell in cells:
            if cell not in mapping and cell not in self._used and cell not in mapping.values():
                mapping[cell] = cell
        free = max([0, *self._used, *mapping.values()]) + 1
        for cell in cells:
            if cell not in mapping:
                mapping[cell] = free
                free += 1
        self._used.update(mapping.values())
        renumbered = apply_mapping(labels, mapping)
        if self._last is None:
            self._last = renumbered
        else:
            # A cell that is absent now is remembered where it was, unless another one has moved there.
            gone = ~np.isin(self._last, list(mapping.values())) & (renumbered == 0)
            self._last = np.where(gone, self._last, renumbered)
        return mapping

    @staticmethod
    def _match(last: Labels, labels: Labels, cells: list[int]) -> dict[int, int]:
        both = (last > 0) & (labels > 0)
        before = [int(cell) for cell in np.unique(last[both])]
        if not before:
            return {}
        overlap = np.zeros((len(cells), len(before)))
        rows, columns = np.searchsorted(cells, labels[both]), np.searchsorted(before, last[both])
        np.add.at(overlap, (rows, columns), 1.0)
        size_now = np.array([np.count_nonzero(labels == cell) for cell in cells], dtype=float)
        size_before = np.array([np.count_nonzero(last == cell) for cell in before], dtype=float)
        score = overlap / (size_now[:, None] + size_before[None, :] - overlap)
        chosen = zip(*linear_sum_assignment(score, maximize=True), strict=True)
        return {cells[i]: before[j] for i, j in chosen if overlap[i, j] > 0}


def apply_mapping(labels: Labels, mapping: dict[int, int]) -> Labels:
    """The image with every number replaced by ``mapping``; numbers without an entry become 0."""
    present, inverse = np.unique(labels, return_inverse=True)
    table = np.array([mapping.get(int(cell), 0) for cell in present], dtype=np.int32)
    return table[inverse].reshape(labels.shape)


def follow_labels(stack: Iterable[Labels]) -> NDArray[np.int32]:
    """Label images renumbered so that a number means the same cell in all of them.

    Parameters
    ----------
    stack
        Label images ``(ny, nx)`` in order of time; the first keeps its numbers.

    Returns
    -------
    ``(n, ny, nx)`` int32

    Examples
    --------
    >>> first = np.array([[1, 1, 0, 2, 2]], dtype=np.int32)
    >>> swapped = np.array([[2, 2, 0, 0, 1]], dtype=np.int32)
    >>> follow_labels([first, swapped])[1]
    array([[1, 1, 0, 0, 2]], dtype=int32)
    """
    follower = LabelFollower()
    return np.stack([apply_mapping(labels, follower.step(labels)) for labels in stack])

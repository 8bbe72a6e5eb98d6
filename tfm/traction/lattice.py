"""The square lattice on which traction lives, and the smooth nodes that carry it inside the outlines."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage, sparse

from tfm.errors import MeasurementError

__all__ = ["Lattice", "NodeBasis", "cover_outlines", "image_lattice", "make_nodes", "touching_cells"]


@dataclass(frozen=True)
class Lattice:
    """Square cells of edge ``spacing`` whose first centre lies at (``x0``, ``y0``), all in m; ``shape`` is (ny, nx)."""

    x0: float
    y0: float
    spacing: float
    shape: tuple[int, int]

    @property
    def x(self) -> NDArray[np.float64]:
        """``(nx,)`` m, centres of the columns."""
        return np.asarray(self.x0 + self.spacing * np.arange(self.shape[1]), np.float64)

    @property
    def y(self) -> NDArray[np.float64]:
        """``(ny,)`` m, centres of the rows."""
        return np.asarray(self.y0 + self.spacing * np.arange(self.shape[0]), np.float64)


@dataclass(frozen=True)
class NodeBasis:
    """Nodes of all cells: traction on the covered lattice cells is ``weights @ coefficients``.

    Attributes
    ----------
    rows, columns, labels
        ``(n_cells,)`` lattice indices and cell label of every covered lattice cell.
    weights
        ``(n_cells, n)`` CSR matrix of bilinear hats, cut at the outline; rows sum to one.
    node_rows, node_columns, node_labels
        ``(n,)`` position of every node in lattice units, and its cell.
    node_depth
        ``(n,)`` distance of every node from the rim of its cell, in lattice units (about 0 outside).
    step
        Node spacing in lattice units.
    """

    rows: NDArray[np.intp]
    columns: NDArray[np.intp]
    labels: NDArray[np.int32]
    weights: sparse.csr_matrix
    node_rows: NDArray[np.float64]
    node_columns: NDArray[np.float64]
    node_labels: NDArray[np.int32]
    node_depth: NDArray[np.float64]
    step: int

    @property
    def size(self) -> int:
        """Number of nodes ``n``; the traction has ``2 n`` coefficients."""
        return int(self.weights.shape[1])


def image_lattice(shape: tuple[int, int], pixel_size: float, target: float = 0.8e-6) -> tuple[Lattice, int]:
    """Lattice of whole ``b x b`` pixel blocks of about ``target`` metres, and ``b``.

    ``b`` is between 2 and 16 pixels; blocks that stick out at the right and lower edge are left away.

    Examples
    --------
    >>> lattice, b = image_lattice((640, 640), 0.2e-6)
    >>> b, lattice.shape
    (4, (160, 160))
    """
    b = int(np.clip(round(target / pixel_size), 2, 16))
    ny, nx = shape[0] // b, shape[1] // b
    if min(ny, nx) < 8:
        raise MeasurementError(
            f"the image of {shape[1]} x {shape[0]} px is too small to infer traction",
            code="image-too-small",
            remedy="use a field of at least 64 x 64 px with ground around the cell",
        )
    offset = 0.5 * (b - 1) * pixel_size
    return Lattice(offset, offset, b * pixel_size, (ny, nx)), b


def cover_outlines(lattice: Lattice, labels: NDArray[np.int32], pixel_size: float) -> NDArray[np.int32]:
    """Label of every lattice cell, ``(ny, nx)``: the commonest label among its pixels, 0 where no pixel has one.

    A lattice cell counts as covered from a quarter of its pixels on, so that the covered area equals the outline's
    within the lattice's resolution and thin protrusions survive.
    """
    py, px = np.nonzero(labels)
    if py.size == 0:
        return np.zeros(lattice.shape, np.int32)
    rows = np.rint((py * pixel_size - lattice.y0) / lattice.spacing).astype(np.intp)
    columns = np.rint((px * pixel_size - lattice.x0) / lattice.spacing).astype(np.intp)
    inside = (rows >= 0) & (rows < lattice.shape[0]) & (columns >= 0) & (columns < lattice.shape[1])
    flat = rows[inside] * lattice.shape[1] + columns[inside]
    values = labels[py[inside], px[inside]]
    result = np.zeros(lattice.shape[0] * lattice.shape[1], np.int32)
    best = np.full(result.size, 0.25 * (lattice.spacing / pixel_size) ** 2)
    for label in np.unique(values):
        count = np.bincount(flat[values == label], minlength=result.size)
        wins = count >= best
        result[wins], best[wins] = label, count[wins] + 0.5
    return result.reshape(lattice.shape)


def touching_cells(covered: NDArray[np.int32]) -> tuple[tuple[int, ...], ...]:
    """Groups of labels that share a border on the lattice (eight neighbours); they balance together.

    Examples
    --------
    >>> touching_cells(np.array([[1, 2, 0, 3]], np.int32))
    ((1, 2), (3,))
    """
    present = [int(v) for v in np.unique(covered) if v > 0]
    index = {label: i for i, label in enumerate(present)}
    pairs: set[tuple[int, int]] = set()
    for dy, dx in ((0, 1), (1, 0), (1, 1), (1, -1)):
        a = covered[: covered.shape[0] - dy, max(0, -dx) : covered.shape[1] - max(0, dx)]
        b = covered[dy:, max(0, dx) : covered.shape[1] + min(0, dx)]
        meet = (a > 0) & (b > 0) & (a != b)
        pairs.update(zip(a[meet].tolist(), b[meet].tolist(), strict=True))
    links = sparse.coo_matrix(
        (np.ones(len(pairs)), ([index[a] for a, _ in pairs], [index[b] for _, b in pairs])),
        shape=(len(present), len(present)),
    )
    count, group = sparse.csgraph.connected_components(links, directed=False)
    return tuple(tuple(label for label in present if group[index[label]] == g) for g in range(count))


def make_nodes(covered: NDArray[np.int32], *, step: int) -> NodeBasis:
    """Bilinear hats every ``step`` lattice cells for each label, cut at its border.

    With ``step = 1`` a node is a lattice cell. Nodes belong to one label: traction of touching cells is not smoothed
    across their border.

    Parameters
    ----------
    covered
        ``(ny, nx)`` label of every lattice cell.
    step
        Node spacing in lattice units.
    """
    parts: list[sparse.csr_matrix] = []
    rows, columns, labels = [], [], []
    node_rows, node_columns, node_labels, depths = [], [], [], []
    for label in (int(v) for v in np.unique(covered) if v > 0):
        r, c = np.nonzero(covered == label)
        weights, nr, nc = _hats(r, c, step)
        parts.append(weights)
        rows.append(r)
        columns.append(c)
        labels.append(np.full(r.size, label, np.int32))
        node_rows.append(nr)
        node_columns.append(nc)
        node_labels.append(np.full(nr.size, label, np.int32))
        # Centres of the outermost lattice cells lie half a cell inside the rim.
        depth = ndimage.distance_transform_edt(covered == label) - 0.5
        depths.append(ndimage.map_coordinates(depth, np.stack([nr, nc]), order=1, mode="nearest"))
    if not parts:
        raise MeasurementError(
            "no outline lies inside the image", code="no-outline", remedy="check the outline's frame"
        )
    return NodeBasis(
        np.concatenate(rows),
        np.concatenate(columns),
        np.concatenate(labels),
        sparse.block_diag(parts, format="csr"),
        np.concatenate(node_rows),
        np.concatenate(node_columns),
        np.concatenate(node_labels),
        np.concatenate(depths),
        step,
    )


def _hats(
    r: NDArray[np.intp], c: NDArray[np.intp], step: int
) -> tuple[sparse.csr_matrix, NDArray[np.float64], NDArray[np.float64]]:
    if step == 1:
        return sparse.identity(r.size, format="csr"), r.astype(float), c.astype(float)
    # Centre the node grid on the cell so that its symmetry is not broken by the lattice's origin.
    r0, c0 = 0.5 * (r.min() + r.max()) % step, 0.5 * (c.min() + c.max()) % step
    fr, fc = (r - r0) / step, (c - c0) / step
    ir, ic = np.floor(fr).astype(np.intp), np.floor(fc).astype(np.intp)
    ir0, ic0 = ir.min(), ic.min()
    width = int(ic.max() - ic0 + 2)
    entries, nodes = [], []
    for dr in (0, 1):
        for dc in (0, 1):
            entries.append(np.abs(1 - dr - (fr - ir)) * np.abs(1 - dc - (fc - ic)))
            nodes.append((ir - ir0 + dr) * width + (ic - ic0 + dc))
    value, node = np.concatenate(entries), np.concatenate(nodes)
    support = np.bincount(node, weights=value)
    # A node with a sliver of support is ill-determined and adds nothing that its neighbours do not carry.
    kept = np.nonzero(support > 0.06 * step**2)[0]
    number = np.full(support.size, -1)
    number[kept] = np.arange(kept.size)
    cell = np.tile(np.arange(r.size), 4)
    use = (number[node] >= 0) & (value > 0)
    weights = sparse.csr_matrix((value[use], (cell[use], number[node[use]])), shape=(r.size, kept.size))
    total = np.asarray(weights.sum(axis=1)).ravel()
    bare = total < 1e-9  # a lone corner cell: give it to the nearest node
    if np.any(bare):
        nearest = np.argmin(
            np.hypot(fr[bare, None] - (kept // width + ir0)[None], fc[bare, None] - (kept % width + ic0)[None]), axis=1
        )
        weights = weights.tolil()
        weights[np.nonzero(bare)[0], nearest] = 1.0
        weights = weights.tocsr()
        total[bare] = 1.0
    weights = sparse.diags(1.0 / total) @ weights
    return weights.tocsr(), (kept // width + ir0) * step + r0, (kept % width + ic0) * step + c0

"""Local polynomials through pixel information: displacement and covariance of every patch, all patches at once.

Every pixel carries a 2x2 information matrix M and a vector h = M u (:mod:`tfm.displacement.information`). A patch fits
a polynomial of order 1 or 2 to them by weighted least squares; its value at the node is the displacement. Sums over
patches are separable, so they are products of small matrices and no loop over vectors exists. Weights fall as
(1 - x^2/R^2)(1 - y^2/R^2): for a given blur no other window leaves less noise (Epanechnikov, Theory Probab. Appl.
14:153, 1969), and patches two radii apart share no pixel.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

__all__ = ["PatchSums", "Patches", "effective_area"]

#: Nodes of one product; the window reaches over a few of them, and a block that is too wide multiplies zeros.
_BLOCK = 16


def effective_area(radius: float) -> float:
    """Area (px^2) whose plain average is as noisy as the window's: (int W)^2 / int W^2 = (5/3 R)^2.

    Examples
    --------
    >>> round(effective_area(19.2))
    1024
    """
    return (5 * radius / 3) ** 2


@dataclass(frozen=True)
class Patches:
    """Result of one patch size.

    Attributes
    ----------
    u
        ``(2, ny, nx)`` px; NaN where the patch cannot tell.
    covariance
        ``(3, ny, nx)`` px^2: xx, xy, yy.
    valid
        ``(ny, nx)`` bool.
    misfit
        ``(ny, nx)`` mean of squared residual over its expectation.
    area
        ``(ny, nx)`` px^2 of ground whose information equals that of the vector: precision over information per px^2.
    """

    u: NDArray[np.float64]
    covariance: NDArray[np.float64]
    valid: NDArray[np.bool_]
    misfit: NDArray[np.float64]
    area: NDArray[np.float64]


@dataclass
class PatchSums:
    """Sums over patches of one radius and order, gathered strip by strip of the image.

    Parameters
    ----------
    x, y
        ``(nx,)``, ``(ny,)`` px, nodes.
    shape
        Of the image.
    radius
        px, half the window's edge.
    order
        1 (affine) or 2 (quadratic).
    with_covariance
        Whether to gather what the covariance needs; an iteration that only moves the field does without.
    """

    x: NDArray[np.float64]
    y: NDArray[np.float64]
    shape: tuple[int, int]
    radius: float
    order: int
    with_covariance: bool = True
    _sums: dict[str, NDArray[np.float32]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self._columns = _windows(self.x, np.arange(self.shape[1]), self.radius, 2 * self.order)

    def add(
        self,
        first_row: int,
        information: NDArray[np.float32],
        pull: NDArray[np.float32],
        scatter: NDArray[np.float32],
        squares: NDArray[np.float32],
    ) -> None:
        """Take in one strip of the image.

        Parameters
        ----------
        first_row
            Row of the image where the strip starts.
        information, scatter
            ``(3, rows, columns)``: xx, xy, yy of M and of the variance of the pixel's score.
        pull
            ``(2, rows, columns)``: h.
        squares
            ``(2, rows, columns)``: squared residual, and its expectation.
        """
        rows = np.arange(first_row, first_row + information.shape[1])
        near = np.flatnonzero((self.y > rows[0] - self.radius) & (self.y < rows[-1] + self.radius))
        if not len(near):
            return
        window_y = _windows(self.y[near], rows, self.radius, 2 * self.order)
        self._gather("K", near, window_y[1], np.concatenate([information, pull, squares]))
        if self.with_covariance:
            self._gather("KK", near, window_y[2], scatter)

    def _gather(
        self,
        name: str,
        near: NDArray[np.intp],
        window_y: NDArray[np.float32],
        images: NDArray[np.float32],
    ) -> None:
        """Two large matrix products: rows to nodes for all images and powers at once, then columns, block by block."""
        powers, count, (kinds, rows, width) = len(window_y), len(near), images.shape
        across = np.ascontiguousarray(images.transpose(1, 0, 2)).reshape(rows, kinds * width)
        half = (window_y.reshape(powers * count, rows) @ across).reshape(powers * count * kinds, width)
        if name not in self._sums:
            self._sums[name] = np.zeros((powers, powers, kinds, len(self.y), len(self.x)), dtype=np.float32)
        total = self._sums[name]
        for block in range(0, len(self.x), _BLOCK):
            nodes = slice(block, min(block + _BLOCK, len(self.x)))
            left = max(0, int(np.floor(self.x[nodes.start] - self.radius)))
            right = min(width, int(np.ceil(self.x[nodes.stop - 1] + self.radius)) + 1)
            window_x = self._columns[2 if name == "KK" else 1][:, nodes, left:right]
            size = nodes.stop - nodes.start
            part = half[:, left:right] @ window_x.reshape(powers * size, right - left).T
            # (powers of y, nodes, images, powers of x, columns) -> (powers of y, powers of x, images, nodes, columns)
            part = part.reshape(powers, count, kinds, powers, size).transpose(0, 3, 2, 1, 4)
            total[:, :, :, near[0] : near[-1] + 1, nodes] += part

    def _sum(self, kind: str, component: int, i: int, j: int) -> NDArray[np.float32]:
        """Sum over the patch of window times x^i y^j times an image; ``kind`` M, h, r (window) or V (its square)."""
        name, first = {"M": ("K", 0), "h": ("K", 3), "r": ("K", 5), "V": ("KK", 0)}[kind]
        out: NDArray[np.float32] = self._sums[name][j, i, first + component]
        return out

    def solve(self, *, least_information: float = 4.0) -> Patches:
        """Displacement and covariance of every patch.

        A patch is valid when its weaker direction is known better than ``1 / sqrt(least_information)`` px.
        """
        terms = [(i, j) for degree in range(self.order + 1) for j in range(degree + 1) for i in [degree - j]]
        shape = (len(self.y), len(self.x))
        size, count = 2 * len(terms), shape[0] * shape[1]
        # Filled with the patches along the last axis, where writes are contiguous, and turned once.
        filled, right_side = np.empty((2, size, size, count)), np.empty((size, count))
        for a, (i, j) in enumerate(terms):
            for c in range(2):
                right_side[2 * a + c] = self._sum("h", c, i, j).ravel()
            for b, (k, m) in enumerate(terms):
                for c in range(2):
                    for d in range(2):
                        filled[0, 2 * a + c, 2 * b + d] = self._sum("M", c + d, i + k, j + m).ravel()
                        if self.with_covariance:
                            filled[1, 2 * a + c, 2 * b + d] = self._sum("V", c + d, i + k, j + m).ravel()
        normal, spread = (np.ascontiguousarray(part.transpose(2, 0, 1)) for part in filled)
        right = right_side.T
        del filled
        # Parameters are in px at the window's edge (coordinates are scaled by R). The weak prior (30 px) only keeps
        # empty patches from dividing by nothing.
        normal[:, np.arange(size), np.arange(size)] += 1e-3
        # Noise can leave the sums of an empty patch without a positive diagonal: such a patch knows nothing.
        ok = (normal[:, np.arange(size), np.arange(size)] > 2e-3).all(axis=1)
        normal[~ok] = np.eye(size)
        wanted = np.broadcast_to(np.eye(size, 2), (count, size, 2))
        first = np.swapaxes(np.linalg.solve(normal, wanted), 1, 2)
        u = np.squeeze(first @ right[..., None], -1).T.reshape(2, *shape)
        cov = first @ spread @ np.swapaxes(first, 1, 2) if self.with_covariance else first[:, :, :2]
        trace, det = cov[:, 0, 0] + cov[:, 1, 1], cov[:, 0, 0] * cov[:, 1, 1] - cov[:, 0, 1] ** 2
        worst = 0.5 * trace + np.sqrt(np.maximum(0.25 * trace**2 - det, 0))
        ok &= (det > 0) & (trace > 0) & (worst < 1 / least_information)
        valid = ok.reshape(shape) & self._surrounded()
        covariance = np.stack([cov[:, 0, 0], cov[:, 0, 1], cov[:, 1, 1]]).reshape(3, *shape)
        misfit = np.full(shape, np.nan)
        if self.with_covariance:
            got, due = self._sum("r", 0, 0, 0), self._sum("r", 1, 0, 0)
            misfit = np.divide(got, due, out=misfit, where=due > 0).astype(np.float64)
        area = np.full(shape, np.nan)
        if self.with_covariance:
            density = self._density()
            np.divide((trace / np.where(ok, det, 1)).reshape(shape), density, out=area, where=valid & (density > 0))
        return Patches(np.where(valid, u, np.nan), np.where(valid, covariance, np.nan), valid, misfit, area)

    def _surrounded(self) -> NDArray[np.bool_]:
        """Whether the information lies around the node, not to one side of it: a vector there would be extrapolated.

        The centroid of the information may lie 0.45 R off along an axis; at the image's edge, where half of the window
        is missing, it lies 0.375 R off.
        """
        total = self._sum("M", 0, 0, 0) + self._sum("M", 2, 0, 0)
        lean = [np.abs(self._sum("M", 0, i, j) + self._sum("M", 2, i, j)) for i, j in ((1, 0), (0, 1))]
        return np.asarray((total > 0) & (lean[0] < 0.45 * total) & (lean[1] < 0.45 * total))

    def _density(self) -> NDArray[np.float64]:
        """Information per px^2 around a node, summed over both directions: (mean M)^2 / mean V."""
        down = _windows(self.y, np.arange(self.shape[0]), self.radius, 0)
        mean = {
            name: (self._sum(name, 0, 0, 0) + self._sum(name, 2, 0, 0))
            / np.outer(down[power][0].sum(axis=1), self._columns[power][0].sum(axis=1))
            for name, power in (("M", 1), ("V", 2))
        }
        density = np.zeros(mean["M"].shape)
        return np.divide(mean["M"].astype(np.float64) ** 2, mean["V"], out=density, where=mean["V"] > 1e-12)


def _windows(
    nodes: NDArray[np.float64], places: NDArray[np.int_], radius: float, highest: int
) -> dict[int, NDArray[np.float32]]:
    """Window (1) and its square (2) times powers of the scaled coordinate, ``(powers, nodes, places)``."""
    t = ((places[None, :] - nodes[:, None]) / radius).astype(np.float32)
    window = np.clip(1 - t * t, 0, None)
    out = {power: np.empty((highest + 1, *t.shape), dtype=np.float32) for power in (1, 2)}
    out[1][0], out[2][0] = window, window * window
    for stack in out.values():
        for k in range(highest):
            np.multiply(stack[k], t, out=stack[k + 1])
    return out

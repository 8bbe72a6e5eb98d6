r"""Traction from the pixels themselves: integrated digital image correlation with the gel as kinematic basis.

Minimises :math:`\sum (I_s(x + o + G T) - I_r(x))^2 / v` plus the prior by Gauss-Newton (Hild & Roux, Strain 42:69,
2006;
Leclerc et al., LNCS 5496:161, 2009). Every step is the bounded problem of :mod:`tfm.traction.gaussian` with the blocks'
sensitivity as precision. There is no interrogation window, so a steep gradient under a cell is not blurred.
"""

from __future__ import annotations

import time
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from tfm.displacement.model import DisplacementField
from tfm.errors import ConvergenceError, MeasurementError
from tfm.gel import Gel, displacement, node_kernel
from tfm.images.model import Outlines
from tfm.traction.blocks import Blocks, make_blocks
from tfm.traction.bounded import choose_step, solve, vector_data, whole_groups
from tfm.traction.gaussian import (
    Component,
    LinearData,
    Solution,
    fixed_posterior,
    normal_equations,
    nuisance_columns,
    response_matrix,
)
from tfm.traction.lattice import Lattice, cover_outlines, image_lattice, make_nodes
from tfm.traction.model import TractionField
from tfm.traction.prior import SHAPES, CellPrior, first_moments
from tfm.traction.result import lattice_traction, make_result
from tfm.traction.warp import (
    FramePair,
    NoiseModel,
    PixelTerms,
    bead_width,
    fit_noise,
    pixel_terms,
    prepare_pair,
    resample_matrix,
    rigid_beads,
)

__all__ = ["infer_image"]

#: Coefficients while the images are being aligned; the last steps are taken on finer nodes.
COARSE = 700

#: Share of quiet ground that may move unexplained (lost beads make some) before the field becomes a caution.
MOST_STRAY = 0.04


@dataclass
class _Loop:
    """What stays the same through the Gauss-Newton steps."""

    pair: FramePair
    lattice: Lattice
    b: int
    pixel: float
    gel: Gel
    covered: NDArray[np.int32]
    blocks: Blocks
    data: LinearData
    kernel: NDArray[np.float64]
    response: NDArray[np.float64]
    motions: NDArray[np.float64]
    drift: NDArray[np.float64]
    quiet: NDArray[np.bool_]
    up_y: NDArray[np.float32]
    up_x: NDArray[np.float32]
    quiet_pixels: NDArray[np.bool_]
    priors: dict[tuple[str, float], tuple[CellPrior, ...]]

    def pixel_displacement(
        self, mean: NDArray[np.float64], motion: NDArray[np.float64], spread: float
    ) -> NDArray[np.float32]:
        """``(2, NY, NX)`` px: drift + motions of the frame + elastic displacement, at every pixel.

        ``spread`` (px^2) corrects for beads that move as a whole, see :func:`tfm.traction.warp.rigid_beads`.
        """
        u = displacement(self.gel, lattice_traction(self.data, mean), self.lattice.spacing, kernel=self.kernel)
        u = rigid_beads(u, spread / self.b**2)
        x = (np.arange(self.lattice.shape[1]) - 0.5 * (self.lattice.shape[1] - 1)) * self.lattice.spacing
        y = (np.arange(self.lattice.shape[0]) - 0.5 * (self.lattice.shape[0] - 1))[:, None] * self.lattice.spacing
        extra = list(motion[2:])
        for name in self.data.nuisance[1:]:
            value = extra.pop(0)
            u[0] += value * (-y if name == "rotation" else x)
            u[1] += value * (x if name == "rotation" else y)
        shift = (self.drift + motion[:2]) / self.pixel
        fine = [
            self.up_y @ (u[i] / self.pixel).astype(np.float32) @ self.up_x.T + np.float32(shift[i]) for i in range(2)
        ]
        return np.stack(fine)


@dataclass(frozen=True)
class _Step:
    data: LinearData
    terms: PixelTerms
    scale: float
    efficiency: float
    misfit: float
    ring_misfit: float
    ring_bound: float
    stray: float
    rejected: int


def _linearise(
    loop: _Loop, terms: PixelTerms, mean: NDArray[np.float64], motion: NDArray[np.float64], *, robust: bool
) -> _Step:
    """Blocks of pixels as data for the bounded problem, with the noise scaled to what quiet ground shows."""
    j, v, s = (loop.blocks.sum(a) for a in (terms.sensitivity, terms.variance, terms.score))
    det = np.maximum(v[0] * v[2] - v[1] ** 2, 0.0)
    filled = (v[0] > 0.02 * np.median(v[0][v[0] > 0])) & (det > 1e-6 * v[0] * v[2])
    chi = np.where(
        filled, (v[2] * s[0] ** 2 - 2 * v[1] * s[0] * s[1] + v[0] * s[1] ** 2) / np.where(filled, det, 1.0), 0.0
    )
    quiet = filled & loop.quiet
    if quiet.sum() < 30:
        quiet = filled
    # Median of chi-square with two degrees of freedom is 2 ln 2; robust against moving debris on the ground.
    scale = max(float(np.median(chi[quiet])) / (2.0 * np.log(2.0)), 1e-6)
    kept = filled.copy()
    if robust:
        # Blocks that no displacement explains (lost beads, dirt); a steep gradient raises all blocks near it, so the
        # bound
        # follows the neighbourhood of the cell.
        near = filled & ~loop.quiet
        bound = (
            18.0 * scale * max(1.0, float(np.median(chi[near])) / (2.0 * np.log(2.0) * scale) if near.any() else 1.0)
        )
        kept &= chi < bound
    # One number turns score and sensitivity into score and information of a likelihood: variance = sensitivity.
    efficiency = float((j[0] + j[2])[kept].sum() / (v[0] + v[2])[kept].sum()) / scale
    weight = efficiency * kept
    j = _positive_part(j)
    now = (loop.response @ mean + loop.motions @ motion).reshape(2, -1)
    weighted = s * weight / loop.pixel
    jdet = j[0] * j[2] - j[1] ** 2
    solid = kept & (jdet > 1e-3 * (j[0] + j[2]) ** 2) & (j[0] > 0)
    safe = np.where(solid, jdet, 1.0)
    shift = np.stack([j[2] * s[0] - j[1] * s[1], j[0] * s[1] - j[1] * s[0]]) / safe * solid
    precision = j * weight / loop.pixel**2
    # Precision times value is the score, also where the sensitivity of a block cannot be inverted.
    weighted = weighted + np.stack(
        [precision[0] * now[0] + precision[1] * now[1], precision[1] * now[0] + precision[2] * now[1]]
    )
    near = kept & (loop.blocks.distance <= 6e-6 / loop.lattice.spacing)
    used = near if near.sum() > 20 else kept
    misfit = float(chi[used].sum() / (2.0 * used.sum())) / scale
    # One block in a thousand exceeds 13.8 by chance (chi-square, two degrees of freedom).
    stray = float(np.mean(chi[quiet] > 13.8 * scale))
    ring = kept & (loop.blocks.distance > 0) & (loop.blocks.distance * loop.lattice.spacing < 4e-6)
    ring_misfit = float(chi[ring].mean() / 2.0) / scale if ring.sum() > 10 else 1.0
    # Half a chi-square of two degrees of freedom has standard deviation 1 per block.
    ring_bound = 1.0 + max(0.5, 5.0 / np.sqrt(max(int(ring.sum()), 1)))
    data = replace(loop.data, value=now + shift * loop.pixel, precision=precision, weighted=weighted)
    return _Step(data, terms, scale, efficiency, misfit, ring_misfit, ring_bound, stray, int(filled.sum() - kept.sum()))


def _positive_part(j: NDArray[np.float64]) -> NDArray[np.float64]:
    """Symmetric 2 x 2 matrices ``(3, N)`` with negative eigenvalues set to 0.

    Where the frames do not match (a block far from its place, no bead) the product of the two gradients scatters
    around zero.
    The score already says so; a negative information would let the traction run away.
    """
    mean, half = 0.5 * (j[0] + j[2]), np.hypot(0.5 * (j[0] - j[2]), j[1])
    high, low = np.maximum(mean + half, 0.0), np.maximum(mean - half, 0.0)
    safe = np.where(half > 0, half, 1.0)
    c = np.where(half > 0, 0.5 * (j[0] - j[2]) / safe, 1.0)
    k = np.where(half > 0, j[1] / safe, 0.0)
    middle, split = 0.5 * (high + low), 0.5 * (high - low)
    return np.stack([middle + split * c, split * k, middle - split * c])


def _dipole_rows(data: LinearData) -> NDArray[np.float64]:
    """``(3 n_cells, 2 n)``: xx, xy, yy of every cell's dipole as functionals of the coefficients (N m per Pa)."""
    basis = data.basis
    labels = np.unique(basis.labels)
    rows = np.zeros((3 * labels.size, 2 * basis.size))
    for i, label in enumerate(labels):
        _, _, x_tx, y_tx, x_ty, y_ty = first_moments(basis, data.lattice, int(label))
        own = np.tile(basis.node_labels == label, 2)
        rows[3 * i : 3 * i + 3, own] = np.stack([x_tx, 0.5 * (y_tx + x_ty), y_ty])
    return rows


def infer_image(
    relaxed: NDArray[np.float32],
    stressed: NDArray[np.float32],
    pixel_size: float,
    outlines: Outlines,
    gel: Gel,
    *,
    start: DisplacementField,
    previous: TractionField | None = None,
    nuisance: tuple[str, ...] = ("offset",),
    most_coefficients: int = 1600,
    most_steps: int = 20,
    tolerance: float = 0.02,
) -> TractionField:
    r"""Posterior of the traction inside the outlines, given the two bead images.

    Parameters
    ----------
    relaxed, stressed
        ``(NY, NX)`` grey levels of any linear scale.
    pixel_size
        m.
    outlines
        ``(NY, NX)`` labels in the relaxed image's frame.
    gel
        Elastic properties.
    start
        Displacement good to about a pixel, with the drift of the stressed frame.
    previous
        Result of the frame before in a series: begins there instead of at ``start``'s vectors.
    nuisance
        Motions of the stressed frame estimated together: ``offset``, on request ``rotation`` and ``scale``.
    most_steps, tolerance
        The steps end when no component of any dipole moves by more than ``tolerance`` of its standard deviation.

    Returns
    -------
    TractionField
        With ``misfit`` = chi-square of the blocks under and near the cells per degree of freedom, in units of what
        quiet
        ground shows.

    Raises
    ------
    MeasurementError
        Constant frames, no outline, too small an image.

    Examples
    --------
    See ``docs/api.md`` for a complete run from synthetic beads.
    """
    began = time.perf_counter()
    lattice, b = image_lattice(relaxed.shape, pixel_size)
    covered = cover_outlines(lattice, outlines.labels, pixel_size)
    groups, cut = whole_groups(covered)
    coarse = make_nodes(covered, step=choose_step(covered, most=min(most_coefficients, COARSE)))
    begin = vector_data(start, lattice, coarse, covered, groups=groups, nuisance=nuisance)
    loop = _make_loop(relaxed, stressed, pixel_size, gel, lattice, b, covered, begin, start.drift)
    state = _begin(loop, begin, previous)
    state = _settle(loop, state, tolerance=5.0 * tolerance, most_steps=most_steps, fine=False)
    step = choose_step(covered, most=most_coefficients)
    if step != coarse.step:
        basis = make_nodes(covered, step=step)
        data = replace(loop.data, basis=basis)
        loop = replace(loop, data=data, response=response_matrix(data, loop.kernel), priors={})
        state = _carry_over(loop, state)
    state = _settle(loop, state, tolerance=tolerance, most_steps=most_steps, fine=True)
    step_data, solution = state.step, state.solution
    if step_data is None:
        raise ConvergenceError("the pixel method took no step", code="no-step", remedy="allow at least one step")
    notes = (*start.notes, *_remarks(state, step_data))
    statistics = {
        "steps": len(state.moves),
        "converged": state.converged,
        "last_move_sd": state.moves[-1],
        "noise_gain": state.noise.gain,
        "noise_floor": state.noise.floor,
        "noise_scale": step_data.scale,
        "efficiency": step_data.efficiency,
        "blocks_rejected": step_data.rejected,
        "ring_misfit": step_data.ring_misfit,
        "stray_ground": step_data.stray,
        "bead_sigma_px": state.width,
        "block_px": b,
        "seconds": time.perf_counter() - began,
    }
    return make_result(
        step_data.data,
        gel,
        covered,
        solution,
        method="image",
        misfit=step_data.misfit,
        cut=cut,
        notes=notes,
        statistics=statistics,
    )


@dataclass(frozen=True)
class _State:
    """Where Gauss-Newton stands."""

    solution: Solution
    noise: NoiseModel
    width: float
    step: _Step | None
    moves: tuple[float, ...]
    converged: bool


def _remarks(state: _State, step: _Step) -> list[str]:
    """What a reader of the table has to know about the fit; every sentence makes the field a caution."""
    notes = []
    if not state.converged:
        notes.append(
            "the pixel method did not settle: the last step moved a dipole by "
            f"{state.moves[-1]:.2f} of its standard deviation"
        )
    if step.misfit > 2.0:
        notes.append(
            f"the images are not explained under the cell (misfit {step.misfit:.1f}, expected 1): "
            "check outline, focus and gel"
        )
    if step.ring_misfit > step.ring_bound and step.ring_misfit > step.misfit:
        notes.append(
            f"beads just outside the outline move unexplained (misfit {step.ring_misfit:.1f}, expected 1): "
            "adhesions may reach beyond the outline, or a neighbour pulls; draw it wider"
        )
    if step.stray > MOST_STRAY:
        notes.append(
            f"{100 * step.stray:.0f} % of the ground far from every outline moves as no outlined cell explains: "
            "a cell without an outline, debris or a fold; outline it or crop the field"
        )
    return notes


def _begin(loop: _Loop, begin: LinearData, previous: TractionField | None) -> _State:
    """Start from the frame before where it has the same nodes, else from the vectors."""
    size = 2 * begin.basis.size
    before = None if previous is None or not np.array_equal(previous.labels, loop.covered) else previous.solution
    if before is not None and before.mean.size == size:
        still = replace(before, nuisance=np.zeros_like(before.nuisance))
        return _State(still, NoiseModel(0.0, 1.0), 1.3, None, (), False)
    solution, normal = solve(begin, loop.gel, priors=loop.priors, tolerance=0.3, search=False)
    # Vectors 16 px apart leave room for any displacement between them: a start must not go further.
    seen = np.hypot(*(begin.value - np.median(begin.value, axis=1, keepdims=True))).max()
    for _ in range(12):
        u = displacement(loop.gel, lattice_traction(loop.data, solution.mean), loop.lattice.spacing, kernel=loop.kernel)
        if np.hypot(*u).max() < 1.5 * seen + 1.0 * loop.pixel:
            break
        solution = fixed_posterior(begin, normal, solution.components, amplitude_factor=0.5, priors=loop.priors)
    return _State(solution, NoiseModel(0.0, 1.0), 1.3, None, (), False)


def _carry_over(loop: _Loop, state: _State) -> _State:
    """The same traction on finer nodes: the prior's strength stays, the posterior is taken anew from the last
    images."""
    if state.step is None:
        return state
    data = replace(
        loop.data, value=state.step.data.value, precision=state.step.data.precision, weighted=state.step.data.weighted
    )
    normal = normal_equations(data, loop.gel, response=loop.response)
    solution = fixed_posterior(data, normal, _every_shape(state.solution.components), priors=loop.priors)
    return replace(state, solution=solution, moves=(*state.moves, np.inf))


def _every_shape(components: tuple[Component, ...]) -> tuple[Component, ...]:
    """One component per shape of the prior: while the images are being aligned, one shape alone is carried along."""
    if len(components) == len(SHAPES):
        return components
    return tuple(replace(components[-1], shape=shape, weight=1.0 / len(SHAPES)) for shape in SHAPES)


def _settle(loop: _Loop, state: _State, *, tolerance: float, most_steps: int, fine: bool) -> _State:
    """Gauss-Newton until no dipole moves by more than ``tolerance`` of its standard deviation."""
    functionals = _dipole_rows(loop.data)
    dipole = functionals @ state.solution.mean
    first = len(state.moves)
    while len(state.moves) < most_steps:
        number = len(state.moves) + 1
        spread = 0.0 if number <= 2 else 1.0 / (1.0 / state.width**2 + 1.0 / (state.width**2 + 1.0))
        u = loop.pixel_displacement(state.solution.mean, state.solution.nuisance, spread)
        # Wide gradients first: they pull a start that is a bead's width away; then about the bead's own width.
        terms = pixel_terms(
            loop.pair,
            u[0],
            u[1],
            b=loop.b,
            shape=loop.lattice.shape,
            smoothing=2.0 if number == 1 else 1.0,
            noise=state.noise,
            outlier_sigma=np.inf if number <= 2 else 6.0,
        )
        if number == 2:
            state = replace(state, width=bead_width(loop.pair, terms.carried, terms.weight))
        if number <= 4:
            state = replace(state, noise=fit_noise(terms, loop.quiet_pixels))
        step = _linearise(loop, terms, state.solution.mean, state.solution.nuisance, robust=number > 2)
        # The prior's strength follows roughly until the displacement has settled, then exactly, lengths included.
        near_end = not fine and len(state.moves) > first and state.moves[-1] < 5.0 * tolerance
        solution, _ = solve(
            step.data,
            loop.gel,
            start=_every_shape(state.solution.components) if near_end or fine else state.solution.components[-1:],
            response=loop.response,
            priors=loop.priors,
            tolerance=0.05 if near_end or fine else 0.5,
            search=near_end,
        )
        new = functionals @ solution.mean
        sd = np.sqrt(np.einsum("ij,jk,ik->i", functionals, solution.covariance, functionals))
        move = float(np.max(np.abs(new - dipole) / sd))
        dipole = new
        state = replace(state, solution=solution, step=step, moves=(*state.moves, move))
        if move < tolerance and (fine or near_end) and number > 2:
            return replace(state, converged=True)
    return replace(state, converged=False)


def _make_loop(
    relaxed: NDArray[np.float32],
    stressed: NDArray[np.float32],
    pixel: float,
    gel: Gel,
    lattice: Lattice,
    b: int,
    covered: NDArray[np.int32],
    begin: LinearData,
    drift: NDArray[np.float64],
) -> _Loop:
    blocks = make_blocks(covered > 0, smallest=2, largest=16, ratio=3.0)
    data = replace(
        begin,
        rows=blocks.rows,
        columns=blocks.columns,
        value=np.zeros((2, blocks.rows.size)),
        precision=np.zeros((3, blocks.rows.size)),
    )
    kernel = node_kernel(gel, lattice.shape, lattice.spacing, receiver="point")
    quiet = blocks.distance * lattice.spacing > 8e-6
    return _Loop(
        prepare_pair(np.asarray(relaxed, np.float32), np.asarray(stressed, np.float32)),
        lattice,
        b,
        pixel,
        gel,
        covered,
        blocks,
        data,
        kernel,
        response_matrix(data, kernel),
        nuisance_columns(data),
        drift,
        quiet,
        resample_matrix(relaxed.shape[0], lattice.shape[0], b),
        resample_matrix(relaxed.shape[1], lattice.shape[1], b),
        _quiet_pixels(covered, lattice, b, relaxed.shape),
        {},
    )


def _quiet_pixels(covered: NDArray[np.int32], lattice: Lattice, b: int, shape: tuple[int, int]) -> NDArray[np.bool_]:
    far = ndimage.distance_transform_edt(covered == 0) * lattice.spacing > 5e-6
    if far.sum() < 100:
        far = covered == 0
    if far.sum() < 20:
        raise MeasurementError(
            "the outlines leave no ground in the image to measure the noise on",
            code="no-ground",
            remedy="image a larger field or draw tighter outlines",
        )
    rows = np.minimum(np.arange(shape[0]) // b, lattice.shape[0] - 1)
    columns = np.minimum(np.arange(shape[1]) // b, lattice.shape[1] - 1)
    return np.asarray(far[np.ix_(rows, columns)])

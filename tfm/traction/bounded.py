"""Traction that lives only inside the outlines, from displacement vectors with known precision (physics of Hooke, not
of
pixels: the pixel method in :mod:`tfm.traction.pixels` shares everything but the data)."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from tfm.displacement.model import DisplacementField
from tfm.errors import MeasurementError
from tfm.gel import Gel
from tfm.images.model import Outlines
from tfm.traction.blocks import make_blocks
from tfm.traction.gaussian import Component, LinearData, NormalEquations, Solution, best_posterior, normal_equations
from tfm.traction.lattice import Lattice, NodeBasis, cover_outlines, make_nodes, touching_cells
from tfm.traction.model import TractionField
from tfm.traction.prior import SHAPES, CellPrior
from tfm.traction.result import make_result

__all__ = ["LENGTHS", "choose_step", "infer_bounded", "vector_data", "whole_groups"]

#: Correlation lengths that the evidence chooses from, m: from a small adhesion to a whole protrusion.
LENGTHS: tuple[float, ...] = (0.7e-6, 1.0e-6, 1.4e-6, 2.0e-6, 2.8e-6, 4.0e-6)


def choose_step(covered: NDArray[np.int32], *, most: int = 1100) -> int:
    """Node spacing in lattice cells: the finest whose ``2 n`` coefficients stay below ``most``."""
    step = 1
    while step < 64:
        if 2 * make_nodes(covered, step=step).size <= most:
            return step
        step += 1
    raise MeasurementError(
        "too many cells for one field", code="too-many-cells", remedy="crop the field or remove outlines at its border"
    )


def whole_groups(covered: NDArray[np.int32]) -> tuple[tuple[tuple[int, ...], ...], tuple[int, ...]]:
    """Touching groups that lie wholly inside the lattice, and the labels of those that its edge cuts.

    A group that continues outside the image is not balanced inside it, so no balance is imposed on it.
    """
    rim = np.zeros(covered.shape, bool)
    rim[:1] = rim[-1:] = rim[:, :1] = rim[:, -1:] = True
    cut = set(np.unique(covered[rim]).tolist()) - {0}
    groups = touching_cells(covered)
    whole = tuple(group for group in groups if not cut.intersection(group))
    return whole, tuple(label for group in groups if cut.intersection(group) for label in group)


def vector_data(
    field: DisplacementField,
    lattice: Lattice,
    basis: NodeBasis,
    covered: NDArray[np.int32],
    *,
    groups: tuple[tuple[int, ...], ...],
    nuisance: tuple[str, ...] = ("offset",),
) -> LinearData:
    """Vectors of a displacement field as data, averaged over blocks far from the cells.

    Overlapping windows are not independent: every precision is multiplied by grid area / independent area.
    """
    spacing = float(field.x[1] - field.x[0])
    share = min(1.0, spacing**2 / field.independent_area)
    rows = (field.y - lattice.y0) / lattice.spacing
    columns = (field.x - lattice.x0) / lattice.spacing
    nearest = covered[
        np.clip(np.rint(rows).astype(int), 0, covered.shape[0] - 1)[:, None],
        np.clip(np.rint(columns).astype(int), 0, covered.shape[1] - 1)[None],
    ]
    blocks = make_blocks(nearest > 0, smallest=1, largest=4, ratio=8.0, keep_whole=field.valid)
    p = field.precision * share * field.valid
    u = np.where(field.valid, field.u, 0.0)
    sums = blocks.sum(np.stack([p[0], p[1], p[2], p[0] * u[0] + p[1] * u[1], p[1] * u[0] + p[2] * u[1]]))
    used = sums[0] > 0
    sums = sums[:, used]
    det = sums[0] * sums[2] - sums[1] ** 2
    value = np.stack([sums[2] * sums[3] - sums[1] * sums[4], sums[0] * sums[4] - sums[1] * sums[3]]) / det
    step = spacing / lattice.spacing
    return LinearData(
        lattice,
        basis,
        np.round(rows[0] + step * blocks.rows[used], 4),
        np.round(columns[0] + step * blocks.columns[used], 4),
        value,
        sums[:3],
        groups,
        nuisance,
    )


def first_guess(data: LinearData, gel: Gel) -> tuple[Component, ...]:
    """Where the search for the prior's strength begins: traction of the order E |u| / 10 um."""
    labels = np.unique(data.basis.node_labels)
    size = np.hypot(*(data.value - np.median(data.value, axis=1, keepdims=True)))
    guess = max(gel.youngs_modulus * float(np.quantile(size, 0.95)) / 10e-6, 1e-3 * gel.youngs_modulus * 1e-3)
    none = np.zeros(0)
    return tuple(
        Component(1.0 / len(SHAPES), shape, 1.0e-6, np.full(labels.size, guess), none, none, 0.0) for shape in SHAPES
    )


def solve(
    data: LinearData,
    gel: Gel,
    *,
    start: Sequence[Component] | None = None,
    response: NDArray[np.float64] | None = None,
    priors: dict[tuple[str, float], tuple[CellPrior, ...]] | None = None,
    tolerance: float = 0.03,
    search: bool = True,
) -> tuple[Solution, NormalEquations]:
    """Normal equations and the posterior of highest evidence.

    Parameters
    ----------
    start
        Components to begin with; without, a rough guess.
    response, priors
        What may be reused while gel, data positions and outlines stay the same.
    search
        False keeps the correlation lengths of ``start`` and only follows the amplitude.
    """
    normal = normal_equations(data, gel, response=response)
    begin = first_guess(data, gel) if start is None else tuple(start)
    # A correlation length well below the node spacing cannot be represented.
    usable = [v for v in LENGTHS if v >= 0.45 * data.basis.step * data.lattice.spacing] or [LENGTHS[-1]]
    lengths = usable if search else sorted({c.length for c in begin})
    solution = best_posterior(data, normal, start=begin, lengths=lengths, tolerance=tolerance, priors=priors)
    return solution, normal


def infer_bounded(
    field: DisplacementField,
    pixel_size: float,
    outlines: Outlines,
    gel: Gel,
    *,
    nuisance: tuple[str, ...] = ("offset",),
    most_coefficients: int = 1100,
) -> TractionField:
    r"""Posterior of the traction inside the outlines, given displacement vectors.

    Minimises :math:`(d - GWc - Zo)^T P (d - GWc - Zo) + c^T \Lambda c` under balance of every free group of cells;
    prior
    strength and correlation length maximise the evidence (MacKay 1992). Valid for small strain and no normal traction.

    Parameters
    ----------
    field
        Displacement with precision; invalid vectors are left out.
    pixel_size
        m, of the label image.
    outlines
        ``(NY, NX)`` labels.
    gel
        Elastic properties.
    nuisance
        Motions of the stressed frame estimated together with the traction: ``offset`` and, on request, ``rotation`` and
        ``scale``.
    most_coefficients
        Size of the dense problem; the node spacing follows from it.

    Raises
    ------
    MeasurementError
        Without outlines inside the image or without enough valid vectors.

    Examples
    --------
    See ``docs/api.md`` for a complete run from synthetic beads.
    """
    ny, nx = outlines.labels.shape
    spacing = float(field.x[1] - field.x[0])
    per = max(1, int(np.ceil(spacing / 0.85e-6)))
    edge = spacing / per
    # The lattice passes through the vectors and covers the whole label image.
    x0 = field.x[0] - edge * np.floor(field.x[0] / edge + 0.5)
    y0 = field.y[0] - edge * np.floor(field.y[0] / edge + 0.5)
    shape = (
        int(np.ceil(((ny - 1) * pixel_size - y0) / edge)) + 1,
        int(np.ceil(((nx - 1) * pixel_size - x0) / edge)) + 1,
    )
    lattice = Lattice(float(x0), float(y0), edge, shape)
    covered = cover_outlines(lattice, outlines.labels, pixel_size)
    basis = make_nodes(covered, step=choose_step(covered, most=most_coefficients))
    groups, cut = whole_groups(covered)
    data = vector_data(field, lattice, basis, covered, groups=groups, nuisance=nuisance)
    if 2 * data.rows.size < 40:
        raise MeasurementError(
            f"only {data.rows.size} valid displacement vectors",
            code="too-few-vectors",
            remedy="use more or brighter beads",
        )
    solution, normal = solve(data, gel)
    # Windows that overlap share pixels: as many degrees of freedom as independent vectors, not as vectors.
    independent = normal.count * min(1.0, spacing**2 / field.independent_area)
    misfit = solution.chi_square / max(independent - (normal.count - solution.degrees), 1.0)
    return make_result(data, gel, covered, solution, method="bounded", misfit=misfit, cut=cut, notes=field.notes)

"""The layer against a three-dimensional finite-element solution by ``scikit-fem`` (a general-purpose library).

A square patch of uniform traction, 20 um wide, on a layer of 30 um bonded to its base. Nothing of the layer's formula
goes into the finite elements: they know Hooke's law, the load and the clamped base.
"""

from __future__ import annotations

import numpy as np
import pytest
import scipy.sparse as sparse
from scipy.interpolate import RegularGridInterpolator
from scipy.sparse.linalg import spsolve
from skfem import Basis, BilinearForm, ElementHex2, FacetBasis, LinearForm, MeshHex

from tfm.gel import Gel, displacement, node_kernel

THICKNESS, HALF_WIDTH = 30.0, 10.0
#: One quarter of the layer, graded: fine at the patch's edge and the surface, clamped 5 thicknesses away.
LATERAL = np.array([0.0, 4.0, 8.0, 10.0, 12.0, 15.0, 20.0, 28.0, 42.0, 65.0, 100.0, 150.0])
DEPTH = np.array([-30.0, -15.0, -7.0, -2.0, 0.0])


@pytest.fixture(scope="module")
def elements():
    mesh = MeshHex.init_tensor(LATERAL, LATERAL, DEPTH)
    basis = Basis(mesh, ElementHex2(), intorder=4)

    def product(i, j):
        return BilinearForm(lambda u, v, _: v.grad[i] * u.grad[j]).assemble(basis)

    blocks = {(i, j): product(i, j) for i in range(3) for j in range(i, 3)}
    blocks.update({(j, i): blocks[i, j].T for i in range(3) for j in range(i + 1, 3)})
    loaded = mesh.facets_satisfying(lambda x: (np.abs(x[2]) < 1e-9) & (np.maximum(x[0], x[1]) < HALF_WIDTH))
    facets = FacetBasis(mesh, ElementHex2(), facets=loaded, intorder=4)
    load = LinearForm(lambda v, _: v).assemble(facets)
    assert load.sum() == pytest.approx(HALF_WIDTH**2, rel=1e-12)
    pull = [LinearForm(lambda v, w, axis=axis: -w.x[axis] / HALF_WIDTH * v).assemble(facets) for axis in range(2)]
    return basis, blocks, {"sheared": (load, 0.0 * load), "contracting": tuple(pull)}


def solve(elements, poisson, kind):
    """Displacement (u_x, u_y, u_z) at the nodes for Young's modulus 1, and the load.

    ``sheared``: a traction of 1 along x. ``contracting``: a cell whose traction is -(x, y) / half width, balanced.
    """
    basis, blocks, loads = elements
    load_x, load_y = loads[kind]
    lame, shear = poisson / ((1 + poisson) * (1 - 2 * poisson)), 0.5 / (1 + poisson)
    laplace = blocks[0, 0] + blocks[1, 1] + blocks[2, 2]
    stiffness = sparse.bmat(
        [
            [lame * blocks[i, j] + shear * blocks[j, i] + (shear * laplace if i == j else 0.0) for j in range(3)]
            for i in range(3)
        ]
    ).tocsc()
    x, y, z = basis.doflocs
    far = (np.abs(z + THICKNESS) < 1e-9) | (x > LATERAL[-1] - 1e-9) | (y > LATERAL[-1] - 1e-9)
    if kind == "sheared":  # even in y, and u_y and u_z odd in x
        fixed = np.concatenate([far, far | (x < 1e-9) | (y < 1e-9), far | (x < 1e-9)])
    else:
        fixed = np.concatenate([far | (x < 1e-9), far | (y < 1e-9), far])
    force = np.concatenate([load_x, load_y, 0.0 * load_x])
    free = ~fixed
    out = np.zeros(force.size)
    out[free] = spsolve(stiffness[free][:, free], force[free])
    return out.reshape(3, -1), float(out @ force)


@pytest.mark.parametrize("poisson", [0.3, 0.45])
def test_traction_patch_on_a_layer_agrees_with_scikit_fem(elements, poisson):
    field, _ = solve(elements, poisson, "sheared")
    x, y, z = elements[0].doflocs

    nodes, margin = 21, 10  # nodes across the patch and beside it: their centres lie at 0, +-edge, ...
    edge = 2 * HALF_WIDTH / nodes
    side = nodes + 2 * margin
    traction = np.zeros((2, side, side))
    traction[0, margin:-margin, margin:-margin] = 1.0
    gel = Gel(1.0, poisson, THICKNESS)
    ours = displacement(gel, traction, edge, kernel=node_kernel(gel, (side, side), edge, receiver="point"))

    axis = (np.arange(side) - side // 2) * edge
    compared = 0
    for px, py in [(0, 0), (4, 0), (0, 4), (4, 4), (15, 0), (0, 15), (15, 15), (12, 4)]:
        (at,) = np.flatnonzero((x == px) & (y == py) & (z == 0.0))
        for component in range(2):
            here = RegularGridInterpolator((axis, axis), ours[component], method="cubic")((py, px))
            assert abs(here - field[component, at]) < 0.02 * np.hypot(*field[:2, at])
        compared += 1
    assert compared == 8


def test_the_comparison_can_tell_thickness_and_poisson_apart(elements):
    """The 2 % above means something: an infinitely thick gel or nu 0.1 lower would break it."""
    field, _ = solve(elements, 0.45, "sheared")
    x, y, z = elements[0].doflocs
    (centre,) = np.flatnonzero((x == 0) & (y == 0) & (z == 0.0))
    (beside,) = np.flatnonzero((x == 0) & (y == 15) & (z == 0.0))

    def ours(gel):
        traction = np.zeros((2, 61, 61))
        traction[0, 20:41, 20:41] = 1.0
        edge = 20.0 / 21.0
        u = displacement(gel, traction, edge)[0]
        return u[30, 30], np.interp(15.0, (np.arange(61) - 30) * edge, u[:, 30])

    good, thick, lower = ours(Gel(1.0, 0.45, 30.0)), ours(Gel(1.0, 0.45, None)), ours(Gel(1.0, 0.35, 30.0))
    assert good == pytest.approx((field[0, centre], field[0, beside]), rel=0.02)
    assert abs(thick[1] / field[0, beside] - 1) > 0.3
    assert abs(lower[1] / field[0, beside] - 1) > 0.06


@pytest.mark.parametrize("poisson", [0.3, 0.45])
def test_contracting_cell_on_a_layer_agrees_with_scikit_fem(elements, poisson):
    """A whole balanced cell: displacement in and around it, and the work of its traction (twice the strain energy)."""
    field, quarter_work = solve(elements, poisson, "contracting")
    x, y, z = elements[0].doflocs
    nodes, margin = 41, 20
    edge = 2 * HALF_WIDTH / nodes
    axis = (np.arange(nodes + 2 * margin) - nodes // 2 - margin) * edge
    inside = np.abs(axis) < HALF_WIDTH
    cell = inside[:, None] & inside
    traction = np.stack([-np.where(cell, axis, 0.0), -np.where(cell, axis[:, None], 0.0)]) / HALF_WIDTH
    gel = Gel(1.0, poisson, THICKNESS)
    ours = displacement(gel, traction, edge)
    assert (traction * ours).sum() * edge**2 == pytest.approx(4 * quarter_work, rel=0.02)
    largest = np.hypot(*ours).max()
    for px, py in [(4, 0), (8, 0), (8, 8), (15, 0), (15, 15), (4, 15)]:
        (at,) = np.flatnonzero((x == px) & (y == py) & (z == 0.0))
        for component in range(2):
            here = RegularGridInterpolator((axis, axis), ours[component], method="cubic")((py, px))
            assert abs(here - field[component, at]) < 0.02 * largest

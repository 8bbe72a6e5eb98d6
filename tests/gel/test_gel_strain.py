"""Strain under tractions: against differences of displacement, dipoles, and a uniformly sheared surface."""

from __future__ import annotations

import numpy as np
import pytest

from tfm.errors import InputError
from tfm.gel import (
    Gel,
    dipole_strain,
    displacement,
    displacement_at,
    full_strain,
    node_kernel,
    strain_at,
    surface_strain,
    surface_tensor,
)

GELS = [Gel(3.0, nu, h) for nu, h in ((0.0, None), (0.5, None), (0.4, 30.0), (0.3, 3.0), (0.45, 0.9), (0.5, 0.2))]


def loads(seed=2):
    return np.random.default_rng(seed).normal(size=(2, 5, 4))


@pytest.mark.parametrize("gel", GELS, ids=str)
def test_strain_beside_the_load_is_the_difference_of_its_displacement(gel):
    traction, spacing = loads(), 1.3
    points, weights = np.polynomial.legendre.leggauss(60 if gel.thickness == 0.2 else 24)

    def u(x, y):
        """Displacement by quadrature of the tensor over every loaded node."""
        column, row = np.meshgrid(np.arange(4), np.arange(5))
        tensor = surface_tensor(
            gel,
            x - (column[..., None, None] + 0.5 * points) * spacing,
            y - (row[..., None, None] + 0.5 * points[:, None]) * spacing,
        )
        xx, xy, yy = (tensor * weights * weights[:, None]).sum(axis=(-1, -2)) * spacing**2 / 4
        return np.array([(xx * traction[0] + xy * traction[1]).sum(), (xy * traction[0] + yy * traction[1]).sum()])

    # Near the load, but far enough for the quadrature: a thin layer is probed within its reach.
    for x, y in [(-1.6, 1.0), (4.9, 6.1), (2.2, -1.7)] if gel.thickness != 0.2 else [(-1.0, 1.1), (4.7, 2.2)]:
        step = 1e-3
        by_x = (u(x - 2 * step, y) - 8 * u(x - step, y) + 8 * u(x + step, y) - u(x + 2 * step, y)) / (12 * step)
        by_y = (u(x, y - 2 * step) - 8 * u(x, y - step) + 8 * u(x, y + step) - u(x, y + 2 * step)) / (12 * step)
        expected = [by_x[0], 0.5 * (by_x[1] + by_y[0]), by_y[1]]
        ours = strain_at(gel, traction, spacing, x, y)
        np.testing.assert_allclose(ours, expected, rtol=0, atol=2e-6 * np.abs(expected).max())
        moved = displacement_at(gel, traction, spacing, x, y)
        np.testing.assert_allclose(moved, u(x, y), rtol=0, atol=1e-8 * np.abs(moved).max())


@pytest.mark.parametrize("gel", GELS[:5], ids=str)
def test_displacement_at_node_centres_is_that_of_the_lattice(gel):
    traction, spacing = loads(), 1.3
    on_lattice = displacement(gel, traction, spacing, kernel=node_kernel(gel, (5, 4), spacing, receiver="point"))
    y, x = np.indices((5, 4)) * spacing + np.array([0.4, -2.0])[:, None, None]
    at_points = displacement_at(gel, traction, spacing, x, y, origin=(-2.0, 0.4))
    np.testing.assert_allclose(at_points, on_lattice, rtol=0, atol=1e-7 * np.abs(on_lattice).max())
    corner = displacement_at(gel, traction, spacing, 0.5 * spacing, 0.5 * spacing)  # finite where strain is not
    assert np.all(np.isfinite(corner))


@pytest.mark.parametrize("gel", [*GELS[:4], Gel(3.0, 0.45, 1.9)], ids=str)
def test_node_strain_is_the_average_over_the_node(gel):
    """Midpoints graded towards the node's edges, where the strain has a logarithm."""
    traction, spacing = loads(), 1.3
    u = (np.arange(40) + 0.5) / 40
    place = u**3 * (10 - 15 * u + 6 * u * u) - 0.5  # smooth and flat at the ends
    weight = 30 * u * u * (1 - u) ** 2 / 40
    x, y = (2 + place) * spacing, (1 + place[:, None]) * spacing
    inside = strain_at(gel, traction, spacing, x, y)
    average = (inside * weight * weight[:, None]).sum(axis=(1, 2))
    ours = surface_strain(gel, traction, spacing)
    np.testing.assert_allclose(ours[:, 1, 2], average, rtol=0, atol=4e-4 * np.abs(ours).max())


@pytest.mark.parametrize("gel", GELS[:4], ids=str)
def test_strain_of_a_smooth_field_is_the_slope_of_its_displacement(gel):
    n, spacing = 61, 0.5
    y, x = (np.indices((n, n)) - n // 2) * spacing
    bump = np.exp(-(x**2 + y**2) / 18)
    traction = np.stack([-x * bump, -0.5 * y * bump])
    u = displacement(gel, traction, spacing)
    strain = surface_strain(gel, traction, spacing)
    slope = np.array([(u[:, :, 2:] - u[:, :, :-2])[:, 1:-1], (u[:, 2:] - u[:, :-2])[:, :, 1:-1]]) / (2 * spacing)
    inner = strain[:, 1:-1, 1:-1]
    expected = np.stack([slope[0, 0], 0.5 * (slope[0, 1] + slope[1, 0]), slope[1, 1]])
    np.testing.assert_allclose(inner, expected, rtol=0, atol=0.02 * np.abs(inner).max())  # (spacing / width)^2
    assert np.abs(inner - expected).max() > 0  # a difference of displacements is not what is computed


@pytest.mark.parametrize("thickness", [None, 40.0])
def test_far_from_the_load_only_its_dipole_counts(thickness):
    gel = Gel(3.0, 0.35, thickness)
    traction = np.zeros((2, 9, 9))
    traction[0, 4, 2], traction[0, 4, 6] = 1.0, -1.0
    traction[1, 2, 4], traction[1, 6, 4] = 0.5, -0.5
    dipole = [-4.0, 0.0, -2.0]
    gaps = []
    for r in (20.0, 40.0):
        if thickness is not None:
            gel = Gel(3.0, 0.35, thickness * r / 20)
        x, y = 0.8 * r, 0.6 * r
        ours = strain_at(gel, traction, 1.0, x, y, origin=(-4.0, -4.0))
        point = dipole_strain(gel, dipole, x, y)
        gaps.append(np.abs(ours - point).max() / np.abs(point).max())
    assert gaps[0] < 0.1
    assert gaps[0] / gaps[1] == pytest.approx(4.0, rel=0.15)


def test_whole_tensor_at_the_surface():
    """Common practice: an incompressible solid keeps its volume; the shear under a traction T is T / G."""
    gel = Gel(3000.0, 0.5)
    strain = np.array([[0.02], [0.01], [-0.005]])
    tensor = full_strain(gel, strain, [[100.0], [-50.0]])
    np.testing.assert_allclose(np.trace(tensor[..., 0]), 0.0, rtol=0, atol=1e-17)
    np.testing.assert_allclose(2 * tensor[0, 2], 0.1, rtol=1e-15)
    np.testing.assert_allclose(tensor[..., 0], tensor[..., 0].T, rtol=0, atol=0)
    lateral = full_strain(Gel(3000.0, 0.0), strain, [[0.0], [0.0]])
    assert lateral[2, 2] == 0.0
    with pytest.raises(InputError, match=r"strain has shape \(3, 1\), traction \(2, 2\)"):
        full_strain(gel, strain, np.zeros((2, 2)))


def test_points_on_an_edge_of_the_load_are_refused():
    gel, traction = Gel(1.0, 0.3), np.zeros((2, 3, 3))
    traction[0, 1, 1] = 1.0
    assert np.all(np.isfinite(strain_at(gel, traction, 1.0, 2.5, 1.0)))  # an edge between nodes that carry nothing
    assert np.all(np.isfinite(strain_at(gel, traction, 1.0, 1.2, 0.9)))
    for x, y in ((0.5, 1.2), (1.5, 1.0), (1.0, 1.5), (0.5, 0.5)):
        with pytest.raises(InputError, match="point 0 lies on the edge of a loaded node"):
            strain_at(gel, traction, 1.0, x, y)
    with pytest.raises(InputError, match="not finite"):
        strain_at(gel, traction, 1.0, np.inf, 0.0)
    with pytest.raises(InputError, match=r"thinner than 1/32 of a node .*; use smaller nodes"):
        strain_at(Gel(1.0, 0.3, 0.01), traction, 1.0, 4.0, 0.0)
    np.testing.assert_array_equal(strain_at(gel, np.zeros((2, 3, 3)), 1.0, [0.5, 1.0], 0.0), 0.0)

"""Published contact solutions reproduced on the lattice, and the rate at which refinement approaches them."""

from __future__ import annotations

import numpy as np
import pytest

from tfm.gel import Gel, displacement, node_kernel


def disc_averages(nodes_per_radius, antiderivative):
    """Averages over square nodes of a function on the unit disc, by its antiderivative in y at many x in each node."""
    spacing = 1.0 / nodes_per_radius
    centres = np.arange(-nodes_per_radius - 1, nodes_per_radius + 2) * spacing
    inside = (np.arange(600) + 0.5) / 600 - 0.5
    half_chord = np.sqrt(np.maximum(0.0, 1.0 - (centres[:, None] + inside * spacing) ** 2))
    low = np.clip((centres - spacing / 2)[:, None, None], -half_chord, half_chord)
    high = np.clip((centres + spacing / 2)[:, None, None], -half_chord, half_chord)
    return (antiderivative(high, half_chord) - antiderivative(low, half_chord)).mean(-1) / spacing, spacing


def rates(sizes, errors):
    """Order of convergence from a straight-line fit of log error against log spacing."""
    return -np.polyfit(np.log(sizes), np.log(np.abs(errors)), 1)[0]


SIZES = (6, 9, 12, 18, 24, 36, 48)


@pytest.mark.parametrize("poisson", [0.0, 0.3, 0.5])
def test_uniform_tangential_traction_on_a_circle(poisson):
    """Centre: u = q a (2 - nu) / (2 G), from integral of dA / r = 2 pi a over the circle and G_xx averaged over the
    angle (Johnson, Contact Mechanics, 1985, ch. 3; derived). Mean over the circle: the normal problem's 16 (1 - nu) q a
    / (6 pi G) (Johnson eq. 3.29, from memory) times (1 - nu/2)/(1 - nu), because both average 1/r."""
    gel = Gel(2.0, poisson)
    centre, mean = [], []
    for size in SIZES:
        fraction, spacing = disc_averages(size, lambda y, _: y)
        traction = np.stack([fraction, 0.0 * fraction])
        at_points = displacement(
            gel, traction, spacing, kernel=node_kernel(gel, fraction.shape, spacing, receiver="point")
        )
        averaged = displacement(gel, traction, spacing)
        centre.append(at_points[0, size + 1, size + 1] / ((2 - poisson) / (2 * gel.shear_modulus)) - 1)
        mean.append(
            (traction * averaged).sum() * spacing**2 / np.pi / (4 * (2 - poisson) / (3 * np.pi * gel.shear_modulus)) - 1
        )
        assert abs(at_points[1, size + 1, size + 1]) < 1e-12
    assert abs(centre[-1]) < 5e-5
    assert abs(mean[-1]) < 4e-4
    assert rates(SIZES, centre) == pytest.approx(2.0, abs=0.1)  # area fractions at the rim: second order
    assert rates(SIZES, mean) == pytest.approx(
        1.8, abs=0.15
    )  # a jump in the H^-1/2 norm: second order but for a logarithm


@pytest.mark.parametrize("poisson", [0.0, 0.3, 0.5])
def test_mindlins_tangential_contact(poisson):
    """A rigid circular bond under a tangential load Q moves by Q (2 - nu) / (8 G a) (Mindlin, J Appl Mech 16:259, 1949;
    Johnson 1985, sec. 7.2) under the traction Q / (2 pi a sqrt(a^2 - r^2)): every point inside moves alike."""
    gel = Gel(2.0, poisson)
    expected = (2 - poisson) / (8 * gel.shear_modulus)

    def antiderivative(y, half_chord):
        safe = np.where(half_chord > 0, half_chord, 1.0)
        return np.where(half_chord > 0, np.arcsin(np.clip(y / safe, -1, 1)), 0.0) / (2 * np.pi)

    inside, work = [], []
    for size in SIZES:
        density, spacing = disc_averages(size, antiderivative)
        traction = np.stack([density, 0.0 * density])
        assert density.sum() * spacing**2 == pytest.approx(1.0, rel=1e-12)  # the load Q
        u = displacement(gel, traction, spacing, kernel=node_kernel(gel, density.shape, spacing, receiver="point"))
        y, x = np.indices(density.shape) * spacing - (size + 1) * spacing
        core = np.hypot(x, y) < 0.8
        inside.append(np.sqrt(np.mean((u[0][core] / expected - 1) ** 2 + (u[1][core] / expected) ** 2)))
        work.append((traction * displacement(gel, traction, spacing)).sum() * spacing**2 / expected - 1)
    assert inside[-1] < 1e-4
    assert abs(work[-1]) < 6e-3
    assert rates(SIZES, inside) == pytest.approx(2.0, abs=0.25)
    assert rates(SIZES, work) == pytest.approx(1.0, abs=0.1)  # an inverse square root at the rim: first order


def test_rigid_bond_solved_for_its_load():
    """The inverse of the same problem: prescribe the displacement of the disc, solve for the traction, read the
    load."""
    poisson, errors, sizes = 0.4, [], (5, 7, 10, 14)
    gel = Gel(2.0, poisson)
    for size in sizes:
        spacing = 1.0 / size
        y, x = np.indices((2 * size + 1, 2 * size + 1)) * spacing - 1.0
        rows, columns = np.nonzero(np.hypot(x, y) <= 1.0 - 0.25 * spacing)
        kernel = node_kernel(gel, x.shape, spacing)
        at = (slice(None), rows[:, None] - rows + x.shape[0] - 1, columns[:, None] - columns + x.shape[1] - 1)
        xx, xy, yy = kernel[at]
        load = np.linalg.solve(np.block([[xx, xy], [xy, yy]]), np.repeat([1.0, 0.0], rows.size))
        radius = np.sqrt(rows.size / np.pi) * spacing  # of the disc with the area of the nodes
        errors.append(load[: rows.size].sum() * spacing**2 * (2 - poisson) / (8 * gel.shear_modulus * radius) - 1)
    assert abs(errors[-1]) < 0.005
    assert rates(sizes, errors) == pytest.approx(
        1.2, abs=0.2
    )  # first order in the radius, less what its choice takes off

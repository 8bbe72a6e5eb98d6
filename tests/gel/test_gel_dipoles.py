"""Point dipoles against symbolic and multiprecision derivatives, finite cells, and symmetry."""

from __future__ import annotations

import itertools
from dataclasses import replace
from functools import cache

import mpmath
import numpy as np
import pytest
import sympy
from hypothesis import given
from hypothesis import strategies as st

from tfm.errors import InputError
from tfm.gel import (
    Gel,
    dipole_displacement,
    dipole_interaction,
    dipole_interaction_derivatives,
    dipole_strain,
    displacement,
)

A, B = np.array([-1.3, 0.4, -0.6]), np.array([-0.7, -0.5, 0.9])


@cache
def symbolic():
    """W, -dW/dr and -dW/d(angle of b) on a half-space from the published tensor, by sympy."""
    x, y, nu, modulus, angle = sympy.symbols("x y nu E t", real=True)
    a, b = (sympy.symbols(f"{name}xx {name}xy {name}yy", real=True) for name in "ab")
    r = sympy.sqrt(x**2 + y**2)
    position = (x, y)
    # Landau & Lifshitz, Theory of Elasticity, sec. 8; Johnson, Contact Mechanics, 1985, ch. 3.
    tensor = [
        [
            (1 + nu) / (sympy.pi * modulus * r) * ((1 - nu) * int(i == j) + nu * position[i] * position[j] / r**2)
            for j in range(2)
        ]
        for i in range(2)
    ]
    turn = sympy.Matrix([[sympy.cos(angle), -sympy.sin(angle)], [sympy.sin(angle), sympy.cos(angle)]])
    first = sympy.Matrix([[a[0], a[1]], [a[1], a[2]]])
    second = turn * sympy.Matrix([[b[0], b[1]], [b[1], b[2]]]) * turn.T
    energy = -sum(
        first[i, j] * second[k, m] * sympy.diff(tensor[j][m], position[i], position[k])
        for i in range(2)
        for j in range(2)
        for k in range(2)
        for m in range(2)
    )
    results = [energy, -sympy.diff(energy, x), -sympy.diff(energy, y), -sympy.diff(energy, angle)]
    results.append(-sum(second[k, m] * sympy.diff(tensor[0][m], position[k]) for k in range(2) for m in range(2)))
    arguments = (x, y, nu, modulus, *a, *b)
    return [sympy.lambdify(arguments, part.subs(angle, 0), "mpmath") for part in results]


@pytest.mark.parametrize("poisson", [0.0, 0.3, 0.5])
@pytest.mark.parametrize("place", [(1.2, 0.0), (0.0, -0.7), (0.8, 1.9), (-3.0, 0.4)])
def test_half_space_equals_sympy_derivatives(poisson, place):
    gel = Gel(2.5, poisson)
    with mpmath.workdps(40):
        expected = [float(part(*place, poisson, 2.5, *A, *B)) for part in symbolic()]
    pair = dipole_interaction(gel, A, B, *place)
    ours = [pair.energy, *pair.force_on_b, pair.torque_on_b]
    scale = np.abs(expected[1:3]).max()
    np.testing.assert_allclose(ours, expected[:4], rtol=1e-10, atol=1e-12 * scale)
    # u at a point is -P_kl d_k G_jl with r from the dipole to the point.
    assert float(dipole_displacement(gel, B, *place)[0]) == pytest.approx(expected[4], rel=1e-10)


def layer_tensor(x, y, poisson):
    """(G_xx, G_xy, G_yy) of a layer of thickness 1 and E = 2.5 by mpmath: half-space plus Hankel integrals of the rest.

    The formulas are those of docs/gel.md in hyperbolic functions, which the Fourier tests check against the layer's
    equations.
    """
    shear = mpmath.mpf(2.5) / (2 * (1 + poisson))
    r = mpmath.sqrt(x * x + y * y)

    def missing(s):
        c, m = 5 - 12 * poisson + 8 * poisson**2, 3 - 4 * poisson
        ratio = (m * mpmath.sinh(2 * s) + 2 * s) / (m * mpmath.cosh(2 * s) + 2 * s * s + c)
        return (1 - poisson) * (ratio - 1) / shear, (mpmath.tanh(s) - 1) / shear

    nodes = panels()
    zero = two = mpmath.mpf(0)
    for s, weight in nodes:
        longitudinal, transverse = missing(s)
        zero += weight * (longitudinal + transverse) * mpmath.besselj(0, s * r)
        two += weight * (longitudinal - transverse) * mpmath.besselj(2, s * r)
    zero, two = zero / (4 * mpmath.pi), two / (4 * mpmath.pi)
    half = 1 / (2 * mpmath.pi * shear * r)
    cosine, sine = (x * x - y * y) / r**2, 2 * x * y / r**2
    return (
        half * (1 - poisson / 2 + poisson / 2 * cosine) + zero - two * cosine,
        half * poisson / 2 * sine - two * sine,
        half * (1 - poisson / 2 - poisson / 2 * cosine) + zero + two * cosine,
    )


@cache
def panels():
    nodes, weights = np.polynomial.legendre.leggauss(14)
    edges = [0, 2, 4, 7, 11, 17]
    return [
        (mpmath.mpf((high + low + (high - low) * t) / 2), mpmath.mpf((high - low) * w / 2))
        for low, high in itertools.pairwise(edges)
        for t, w in zip(nodes, weights, strict=True)
    ]


@pytest.mark.parametrize(("poisson", "place"), [(0.45, (0.5, 0.4)), (0.2, (-1.1, 0.9)), (0.5, (2.1, 0.3))])
def test_layer_equals_mpmath_derivatives(poisson, place):
    """All second and third derivatives of the layer's tensor from one multiprecision Taylor patch around the point."""
    with mpmath.workdps(30):
        step = mpmath.mpf("1e-4")
        offsets = range(-2, 3)
        grid = {
            (i, j): layer_tensor(place[0] + i * step, place[1] + j * step, mpmath.mpf(poisson))
            for i in offsets
            for j in offsets
        }
        stencil = {0: {0: 1}, 1: {-1: -0.5, 1: 0.5}, 2: {-1: 1, 0: -2, 1: 1}, 3: {-2: -0.5, -1: 1, 1: -1, 2: 0.5}}

        def derivative(component, in_x, in_y):
            return float(
                sum(
                    wx * wy * grid[i, j][component]
                    for i, wx in stencil[in_x].items()
                    for j, wy in stencil[in_y].items()
                )
                / step ** (in_x + in_y)
            )

        def energy(a, b, extra=(0, 0)):
            p = [np.array([[q[0], q[1]], [q[1], q[2]]]) for q in (a, b)]
            return -sum(
                p[0][i, j]
                * p[1][k, m]
                * derivative(j + m, (i == 0) + (k == 0) + extra[0], (i == 1) + (k == 1) + extra[1])
                for i in range(2)
                for j in range(2)
                for k in range(2)
                for m in range(2)
            )

        def turned(b, t):
            c, s = np.cos(t), np.sin(t)
            q = np.array([[c, -s], [s, c]]) @ np.array([[b[0], b[1]], [b[1], b[2]]]) @ np.array([[c, s], [-s, c]])
            return q[0, 0], q[0, 1], q[1, 1]

        expected = [energy(A, B), -energy(A, B, (1, 0)), -energy(A, B, (0, 1))]
        torque = -(energy(A, turned(B, 1e-4)) - energy(A, turned(B, -1e-4))) / 2e-4
    pair = dipole_interaction(Gel(2.5, poisson, 1.0), A, B, *place)
    np.testing.assert_allclose([pair.energy, *pair.force_on_b], expected, rtol=1e-6)
    np.testing.assert_allclose(pair.torque_on_b, torque, rtol=1e-6)


def test_equal_parallel_dipoles_have_the_known_energies():
    """Common practice: in line W = -2 P^2 (1 + nu) / (pi E r^3); side by side -(3 nu - 1) P^2 (1 + nu) / (pi E r^3)."""
    strength, r, modulus = -1e-12, 40e-6, 5e3
    dipole = [strength, 0.0, 0.0]
    unit = strength**2 / (np.pi * modulus * r**3)
    for nu in (0.0, 0.2, 0.45, 0.5):
        gel = Gel(modulus, nu)
        assert dipole_interaction(gel, dipole, dipole, r, 0.0).energy == pytest.approx(-2 * (1 + nu) * unit, rel=1e-12)
        beside = dipole_interaction(gel, dipole, dipole, 0.0, r)
        assert beside.energy == pytest.approx(-(3 * nu - 1) * (1 + nu) * unit, rel=1e-12)
        # They come together exactly where nearness lowers the energy.
        assert np.sign(beside.force_on_b[1]) == np.sign(1 - 3 * nu)
    zero = dipole_interaction(Gel(modulus, 1 / 3), dipole, dipole, 0.0, r).energy
    assert abs(zero) < 1e-15 * unit
    below, above = (dipole_interaction(Gel(modulus, nu), dipole, dipole, 0.0, r).energy for nu in (0.333, 0.334))
    assert below > 0 > above


def test_a_contracting_cell_pulls_the_gel_in_and_energy_is_work():
    gel = Gel(5e3, 0.4, 50e-6)
    u = dipole_displacement(gel, [-1e-12, 0.0, -1e-12], [20e-6, 0.0], [0.0, 20e-6])
    assert u[0, 0] < 0 > u[1, 1]
    pair = dipole_interaction(gel, A * 1e-12, B * 1e-12, 25e-6, 10e-6)
    strain = dipole_strain(gel, B * 1e-12, -25e-6, -10e-6)  # that b sends to a
    assert pair.energy == pytest.approx((A * 1e-12) @ (strain * [1, 2, 1]), rel=1e-13)
    np.testing.assert_allclose(pair.energy_by_dipole_a @ A, pair.energy_by_dipole_b @ B, rtol=1e-12)
    assert pair.energy_by_dipole_b @ B * 1e-12 == pytest.approx(pair.energy, rel=1e-12)


@pytest.mark.parametrize("thickness", [None, 30.0, 6.0])
def test_finite_cells_tend_to_point_dipoles(thickness):
    """Two cells with real traction on the lattice: W = sum T_a . u_b dA. The gap closes as (cell / distance)^2."""
    gel, sizes, gaps = Gel(2.0, 0.4, thickness), (12.0, 17.0, 24.0), []
    for distance in sizes:
        n = 40
        a, b = np.zeros((2, n, n)), np.zeros((2, n, n))
        # Pairs of opposite forces two nodes apart; the gel's thickness grows with the distance, the cells do not.
        scale = distance / 24.0
        here = replace(gel, thickness=None if thickness is None else thickness * scale)
        i, j = 8, 8
        a[0, i, j - 1], a[0, i, j + 1] = 1.0, -1.0
        k, m = i + round(0.6 * distance), j + round(0.8 * distance)
        b[0, k, m - 1], b[0, k, m + 1] = 1.0, -1.0
        b[1, k - 1, m], b[1, k + 1, m] = 0.5, -0.5
        work = (a * displacement(here, b, 1.0)).sum()
        pair = dipole_interaction(here, [-2.0, 0.0, 0.0], [-2.0, 0.0, -1.0], m - j, k - i)
        gaps.append(work / pair.energy - 1)
    assert np.all(np.abs(gaps) < 0.2)
    order = -np.polyfit(np.log(sizes), np.log(np.abs(gaps)), 1)[0]
    assert order == pytest.approx(2.0, abs=0.5)


numbers = st.floats(-1, 1, allow_subnormal=False)
dipoles = st.tuples(numbers, numbers, numbers).map(np.array)
gels = st.builds(Gel, st.just(2.0), st.floats(0, 0.5), st.one_of(st.none(), st.floats(0.3, 30)))


@given(gels, dipoles, dipoles, st.floats(0.2, 6), st.floats(-np.pi, np.pi), st.floats(-np.pi, np.pi))
def test_reciprocity_rotation_and_balance(gel, a, b, r, angle, turn):
    x, y = r * np.cos(angle), r * np.sin(angle)
    pair = dipole_interaction(gel, a, b, x, y)
    swapped = dipole_interaction(gel, b, a, -x, -y)
    size = 1e-12 * 40 / (gel.shear_modulus * r**3)  # what a dipole of 1 could do there
    assert pair.energy == pytest.approx(swapped.energy, rel=1e-12, abs=size)
    np.testing.assert_allclose(pair.force_on_b, -swapped.force_on_b, rtol=0, atol=size / r)
    assert pair.torque_on_a == pytest.approx(swapped.torque_on_b, rel=1e-12, abs=size)
    moment = pair.torque_on_a + pair.torque_on_b + x * pair.force_on_b[1] - y * pair.force_on_b[0]
    assert abs(moment) < 10 * size  # turning the whole changes nothing

    c, s = np.cos(turn), np.sin(turn)
    rotation = np.array([[c, -s], [s, c]])

    def turned(p):
        q = rotation @ np.array([[p[0], p[1]], [p[1], p[2]]]) @ rotation.T
        return np.array([q[0, 0], q[0, 1], q[1, 1]])

    there = dipole_interaction(gel, turned(a), turned(b), *(rotation @ [x, y]))
    assert there.energy == pytest.approx(pair.energy, rel=1e-10, abs=10 * size)
    np.testing.assert_allclose(there.force_on_b, rotation @ pair.force_on_b, rtol=0, atol=10 * size / r)
    assert there.torque_on_b == pytest.approx(pair.torque_on_b, rel=1e-10, abs=10 * size)


@given(gels, dipoles, dipoles, st.floats(0.3, 4), st.floats(-np.pi, np.pi))
def test_force_and_torque_are_differences_of_the_energy(gel, a, b, r, angle):
    x, y, step = r * np.cos(angle), r * np.sin(angle), 1e-4 * r
    pair = dipole_interaction(gel, a, b, x, y)

    def energy(dx=0.0, dy=0.0, t=0.0):
        c, s = np.cos(t), np.sin(t)
        rotation = np.array([[c, -s], [s, c]])
        q = rotation @ np.array([[b[0], b[1]], [b[1], b[2]]]) @ rotation.T
        return dipole_interaction(gel, a, [q[0, 0], q[0, 1], q[1, 1]], x + dx, y + dy).energy

    size = 1e-6 * 100 / (gel.shear_modulus * r**3)
    assert -(energy(dx=step) - energy(dx=-step)) / (2 * step) == pytest.approx(pair.force_on_b[0], abs=size / r)
    assert -(energy(dy=step) - energy(dy=-step)) / (2 * step) == pytest.approx(pair.force_on_b[1], abs=size / r)
    assert -(energy(t=1e-4) - energy(t=-1e-4)) / 2e-4 == pytest.approx(pair.torque_on_b, abs=size)


@pytest.mark.parametrize("thickness", [None, 1.0, 0.3])
def test_derivatives_with_modulus_poisson_and_thickness_equal_differences(thickness):
    gel = Gel(2.0, 0.4, thickness)
    x, y = np.array([0.4, 0.9, 2.0]), np.array([0.3, -0.5, 0.1])
    ours = dipole_interaction_derivatives(gel, A, B, x, y)
    for index, name in enumerate(("youngs_modulus", "poisson", "thickness")):
        value = getattr(gel, name)
        if value is None:
            assert np.all(ours[index] == 0)
            continue
        step = 1e-3 * value
        f = [dipole_interaction(replace(gel, **{name: value + o * step}), A, B, x, y).energy for o in (-2, -1, 1, 2)]
        slope = (f[0] - 8 * f[1] + 8 * f[2] - f[3]) / (12 * step)
        np.testing.assert_allclose(ours[index], slope, rtol=1e-7, atol=1e-9 * np.abs(slope).max())


def test_shapes_broadcast_and_bad_input_is_refused():
    gel = Gel(2.0, 0.4)
    pair = dipole_interaction(gel, np.tile(A, (5, 1, 1)), B, np.ones(7), 2.0)
    assert pair.energy.shape == pair.torque_on_b.shape == (5, 7)
    assert pair.force_on_b.shape == (5, 7, 2)
    assert pair.energy_by_dipole_a.shape == (5, 7, 3)
    assert dipole_displacement(gel, A, np.ones(7), 2.0).shape == (2, 7)
    with pytest.raises(InputError, match=r"dipole_b has shape \(2,\); give \(P_xx, P_xy, P_yy\)"):
        dipole_interaction(gel, A, [1.0, 2.0], 1.0, 1.0)
    with pytest.raises(InputError, match="dipole_a holds values that are not finite"):
        dipole_interaction(gel, [np.nan, 0, 0], B, 1.0, 1.0)
    with pytest.raises(InputError, match="coincides with its source"):
        dipole_interaction(gel, A, B, 0.0, 0.0)
    with pytest.raises(InputError, match=r"dipole has shape \(\)"):
        dipole_strain(gel, 1.0, 1.0, 1.0)

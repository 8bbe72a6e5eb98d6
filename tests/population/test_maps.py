"""The energy map against derivatives taken by sympy and against what neighbours are known to do."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
import sympy

from tfm.errors import InputError
from tfm.gel import Gel, dipole_interaction
from tfm.population.maps import energy_map


def cerruti_energy():
    """W(x, y) of two symmetric dipoles on a half-space from sympy's derivatives of Cerruti's tensor (Johnson 1985)."""
    x, y, e, nu = sympy.symbols("x y e nu", real=True)
    a = sympy.Matrix(2, 2, sympy.symbols("a11 a12 a12 a22"))
    b = sympy.Matrix(2, 2, sympy.symbols("b11 b12 b12 b22"))
    r = sympy.sqrt(x**2 + y**2)
    place = (x, y)
    green = sympy.Matrix(
        2,
        2,
        lambda i, j: (
            (1 + nu) / (sympy.pi * e * r) * ((1 - nu) * (1 if i == j else 0) + nu * place[i] * place[j] / r**2)
        ),
    )
    total = 0
    for i in range(2):
        for j in range(2):
            for k in range(2):
                for m in range(2):
                    total -= a[i, j] * b[k, m] * sympy.diff(green[j, m], place[i], place[k])
    symbols = (x, y, e, nu, *sympy.symbols("a11 a12 a22 b11 b12 b22"))
    return sympy.lambdify(symbols, total, modules="mpmath", cse=True)


def test_energies_equal_sympy():
    reference = cerruti_energy()
    gel = Gel(4e3, 0.4)
    dipole = np.array([-1.2e-12, 0.3e-12, -0.2e-12])
    result = energy_map(gel, dipole, major=-0.9e-12, minor=-0.1e-12, reach=70e-6, nearest=30e-6, points=9, angles=6)
    rng = np.random.default_rng(0)
    for _ in range(12):
        i, j, k = rng.integers(0, 6), rng.integers(0, 9), rng.integers(0, 9)
        if np.isnan(result.energy[i, j, k]):
            continue
        c, s = np.cos(result.angle[i]), np.sin(result.angle[i])
        turn = np.array([[c, -s], [s, c]])
        second = turn @ np.diag([-0.9e-12, -0.1e-12]) @ turn.T
        values = (result.x[k], result.y[j], 4e3, 0.4, *dipole, second[0, 0], second[0, 1], second[1, 1])
        with mpmath.workdps(30):
            number = float(reference(*map(mpmath.mpf, map(float, values))))
        assert result.energy[i, j, k] == pytest.approx(number, rel=1e-6)


def test_the_lowest_angle_is_lower_than_every_angle_of_the_grid():
    result = energy_map(Gel(4e3, 0.3, 30e-6), [-1e-12, 0.4e-12, 0.2e-12], major=-1e-12, minor=0.2e-12, reach=60e-6,
                        nearest=20e-6, angles=181)  # fmt: skip
    grid = result.energy.min(axis=0)
    far = np.isfinite(grid)
    assert (result.lowest[far] <= grid[far] + 1e-24).all()
    assert np.allclose(result.lowest[far], grid[far], rtol=2e-3, atol=1e-20)
    best = result.angle[np.argmin(np.where(far, result.energy, np.inf), axis=0)]
    apart = np.angle(np.exp(2j * (best - result.lowest_angle)))[far] / 2
    assert np.abs(apart).max() < np.radians(1.0)
    assert (np.abs(result.lowest_angle[far]) <= np.pi / 2 + 1e-12).all()


def test_side_by_side_changes_sign_at_one_third():
    # Equal parallel dipoles side by side: W = -(3 nu - 1) P^2 (1 + nu) / (pi E r^3), common practice.
    for nu, sign in ((0.25, 1), (0.45, -1)):
        result = energy_map(Gel(5e3, nu), [-1e-12, 0, 0], major=-1e-12, minor=0.0, reach=40e-6, nearest=20e-6, points=5,
                            angles=2)  # fmt: skip
        side = result.energy[np.argmin(np.abs(result.angle)), 0, 2]
        assert np.sign(side) == sign
        assert side == pytest.approx(-(3 * nu - 1) * 1e-24 * (1 + nu) / (np.pi * 5e3 * (40e-6) ** 3), rel=1e-6)


def test_errors_equal_draws():
    rng = np.random.default_rng(1)
    dipole = np.array([-1.0e-12, 0.1e-12, -0.3e-12])
    root = rng.normal(size=(3, 3)) * 1e-13
    covariance = root @ root.T
    gel = Gel(5e3, 0.45)
    options = {"major": -1e-12, "minor": -0.2e-12, "reach": 50e-6, "nearest": 25e-6, "points": 3, "angles": 4}
    result = energy_map(gel, dipole, covariance=covariance, **options)
    draws = rng.multivariate_normal(dipole, covariance, 4000)
    angle = result.angle[1]
    c, s = np.cos(angle), np.sin(angle)
    turn = np.array([[c, -s], [s, c]])
    second = turn @ np.diag([-1e-12, -0.2e-12]) @ turn.T
    other = [second[0, 0], second[0, 1], second[1, 1]]
    w = dipole_interaction(gel, draws, other, np.full(4000, result.x[2]), np.full(4000, result.y[0])).energy
    assert result.energy_sd[1, 0, 2] == pytest.approx(w.std(), rel=0.05)


def test_near_places_are_empty_and_bad_reach_is_refused():
    result = energy_map(Gel(5e3, 0.45), [-1e-12, 0, 0], major=-1e-12, minor=0.0, reach=40e-6, nearest=20e-6)
    near = np.hypot(*np.meshgrid(result.x, result.y)) < 20e-6
    assert np.isnan(result.energy[:, near]).all()
    assert np.isfinite(result.energy[:, ~near]).all()
    with pytest.raises(InputError, match="nearest"):
        energy_map(Gel(5e3, 0.45), [-1e-12, 0, 0], major=-1e-12, minor=0.0, reach=20e-6, nearest=40e-6)

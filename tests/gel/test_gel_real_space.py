"""The response in real space: the transform of what tamaas and mpmath vouch for, limits, and symmetries.

The Fourier response is proved in test_gel_response.py. Here Parseval's theorem carries it over: for any smooth weight
w, integral of G_ij(r) w(r) d2r = (2 pi)^-2 integral of G_ij(k) w(k) d2k. A Gaussian tests the isotropic part, a
Gaussian times x^2 - y^2 the anisotropic one; several widths test every distance.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import jv, kvp

from tfm.errors import InputError
from tfm.gel import (
    Gel,
    fourier_response,
    surface_tensor,
    surface_tensor_derivatives,
    surface_tensor_gradient,
    surface_tensor_second_gradient,
)

GELS = [Gel(2.0, nu, h) for nu in (0.0, 0.3, 0.45, 0.5) for h in (None, 1.0)]


def panels(edges, count=40):
    """Gauss-Legendre nodes and weights on consecutive panels."""
    nodes, weights = np.polynomial.legendre.leggauss(count)
    half = 0.5 * np.diff(edges)[:, None]
    return (np.array(edges)[:-1, None] + half * (nodes + 1)).ravel(), (half * weights).ravel()


def weighted_real(gel, sigma):
    """Integrals of (G_xx + G_yy) w and (G_xx - G_yy) (x^2 - y^2) w with w = exp(-r^2 / 2 sigma^2)."""
    r, weight = panels(sigma * np.array([0.0, 0.01, 0.1, 0.5, 1.0, 2.0, 4.0, 6.0, 9.0, 12.0]))
    g = surface_tensor(gel, r, 0.0)
    gauss = weight * np.exp(-0.5 * (r / sigma) ** 2)
    # At angle t, G_xx - G_yy = D cos 2t and x^2 - y^2 = r^2 cos 2t.
    return [((g[0] + g[2]) * gauss * 2 * np.pi * r).sum(), ((g[0] - g[2]) * r**2 * gauss * np.pi * r).sum()]


def weighted_fourier(response, sigma):
    """The same through the transforms 2 pi sigma^2 exp(-k^2 sigma^2 / 2) and -(k_x^2 - k_y^2) sigma^4 times that."""
    k, weight = panels(np.array([0.0, 0.05, 0.2, 0.7, 2.0, 4.0, 9.0]) / sigma, 18)
    g_l, g_t = response(k)
    gauss = weight * 2 * np.pi * sigma**2 * np.exp(-0.5 * (k * sigma) ** 2) * k
    return [((g_l + g_t) * gauss).sum() / (2 * np.pi), -((g_l - g_t) * k**2 * sigma**4 * gauss).sum() / (4 * np.pi)]


@pytest.mark.parametrize("gel", GELS, ids=str)
@pytest.mark.parametrize("sigma", [0.05, 0.3, 1.0, 2.0])
def test_tensor_is_the_transform_of_the_fourier_response(gel, sigma):
    there = weighted_fourier(lambda k: fourier_response(gel, k), sigma)
    np.testing.assert_allclose(weighted_real(gel, sigma), there, rtol=2e-10, atol=2e-10 * abs(there[0]) * sigma**2)


def test_layer_tensor_is_the_transform_of_the_mpmath_solution(layer_response):
    gel = Gel(2.0, 0.45, 1.0)

    def response(k):
        return np.array([[float(v) for v in layer_response(one, 1.0, gel.shear_modulus, 0.45)] for one in k]).T

    np.testing.assert_allclose(weighted_real(gel, 0.6), weighted_fourier(response, 0.6), rtol=2e-10)


@pytest.mark.parametrize("poisson", [0.0, 0.3, 0.5])
@pytest.mark.parametrize("rho", [0.2, 0.99, 1.01, 2.5, 7.0])
def test_layer_equals_the_hankel_integral_by_quadrature(poisson, rho):
    """Straight quadrature of the Hankel integrals with the half-space taken off in closed form (Boussinesq-Cerruti;
    Johnson, Contact Mechanics, 1985, eq. 3.75), whatever the code does about series, poles and tables."""
    gel, half = Gel(2.0, poisson, 1.0), Gel(2.0, poisson)
    k = np.linspace(0, 40, 160001)[1:]
    missing = np.array(fourier_response(gel, k)) - np.array(fourier_response(half, k))
    limit = -np.array([1 - poisson, 1.0]) / half.shear_modulus  # k times the difference, at k = 0
    weighted = np.concatenate([limit[:, None], k * missing], axis=1)
    k = np.concatenate([[0.0], k])

    def simpson(values):
        return (values[0] + values[-1] + 4 * values[1:-1:2].sum() + 2 * values[2:-1:2].sum()) * (k[1] - k[0]) / 3

    zero = simpson((weighted[0] + weighted[1]) * jv(0, k * rho)) / (4 * np.pi)
    two = simpson((weighted[0] - weighted[1]) * jv(2, k * rho)) / (4 * np.pi)
    expected = surface_tensor(half, rho, 0.0) + np.array([zero - two, 0.0, zero + two])
    scale = surface_tensor(half, rho, 0.0)[0]
    np.testing.assert_allclose(surface_tensor(gel, rho, 0.0), expected, rtol=0, atol=1e-11 * scale)


def test_uniform_traction_moves_a_layer_by_h_over_g():
    """Common practice: a sheared slab gives u = T h / G, so the response integrates to h / G over the plane."""
    for poisson in (0.0, 0.4, 0.5):
        gel = Gel(3.0, poisson, 0.7)
        r, weight = panels(0.7 * np.array([0.0, 0.5, 1.0, 1.5, 2.0, 3.0, 5.0, 8.0, 15.0, 30.0, 55.0]))
        total = (weight * np.pi * r * surface_tensor(gel, r, 0.0)[[0, 2]]).sum()
        assert total == pytest.approx(0.7 / gel.shear_modulus, rel=1e-10)


@pytest.mark.parametrize("poisson", [0.0, 0.3, 0.5])
def test_thick_and_thin_limits(poisson):
    r = np.logspace(-3, 2, 60)
    half = surface_tensor(Gel(1.0, poisson), r, 0.0)
    thick = surface_tensor(Gel(1.0, poisson, 1e9), r, 0.0)
    np.testing.assert_allclose(thick[[0, 2]], half[[0, 2]], rtol=1e-6)
    thin = surface_tensor(Gel(1.0, poisson, 1e-6), r, 0.0)
    assert np.all(np.abs(thin) <= 1e-18 * half[0])
    assert np.all(np.isfinite(thin))
    steps = [np.abs(surface_tensor(Gel(1.0, poisson, h), 1.0, 0.0)[0] / half[0][0] - 0) for h in (2.0, 4.0, 8.0, 16.0)]
    assert np.all(np.diff(steps) > 0)  # the thicker, the softer


def test_layer_response_dies_at_the_rate_of_the_nearest_pole():
    """Leading pole at nu = 0.5: cosh s = i s, s = i t, that is cos t = t: t = 0.73908513 (Dottie's number, from
    memory)."""
    r = np.array([12.0, 20.0, 30.0])
    along = surface_tensor(Gel(1.0, 0.5, 1.0), r, 0.0)[0]
    mode = kvp(0, 0.7390851332151607 * r, 2)  # a longitudinal mode K_0(t r) displaces along x as its second derivative
    np.testing.assert_allclose(along / along[0], mode / mode[0], rtol=1e-4)


@pytest.mark.parametrize("gel", GELS, ids=str)
def test_gradients_equal_differences(gel):
    """Five-point central differences of the tensor, at distances on both sides of every seam of the layer's table."""
    for r in (0.3, 0.97, 1.04, 2.2, 4.1, 9.0):
        for angle in (0.2, 1.9, -2.6):
            x, y, step = r * np.cos(angle), r * np.sin(angle), 1e-3 * r

            def slope(function, axis, x=x, y=y, step=step):
                d = np.array([step, 0.0]) if axis == 0 else np.array([0.0, step])
                f = [function(gel, x + s * d[0], y + s * d[1]) for s in (-2, -1, 1, 2)]
                return (f[0] - 8 * f[1] + 8 * f[2] - f[3]) / (12 * step)

            first = surface_tensor_gradient(gel, x, y)
            size = np.abs(first).max()
            for axis in range(2):
                np.testing.assert_allclose(first[axis], slope(surface_tensor, axis), rtol=0, atol=1e-8 * size)
            second = surface_tensor_second_gradient(gel, x, y)
            size = np.abs(second).max()
            np.testing.assert_allclose(second[0], slope(surface_tensor_gradient, 0)[0], rtol=0, atol=1e-8 * size)
            np.testing.assert_allclose(second[1], slope(surface_tensor_gradient, 0)[1], rtol=0, atol=1e-8 * size)
            np.testing.assert_allclose(second[1], slope(surface_tensor_gradient, 1)[0], rtol=0, atol=1e-8 * size)
            np.testing.assert_allclose(second[2], slope(surface_tensor_gradient, 1)[1], rtol=0, atol=1e-8 * size)


@pytest.mark.parametrize("gel", GELS, ids=str)
def test_derivatives_with_modulus_poisson_and_thickness_equal_differences(gel):
    x, y = np.array([0.3, 0.8, 1.5, 3.0]), np.array([0.2, -0.7, 0.4, 2.0])
    ours = surface_tensor_derivatives(gel, x, y)
    for index, name in enumerate(("youngs_modulus", "poisson", "thickness")):
        value = getattr(gel, name)
        if value is None:
            assert np.all(ours[index] == 0.0)
            continue
        step = 1e-3
        if name == "poisson":  # one-sided at the ends of the range, where the other side is not a gel
            offsets = {0.0: tuple(range(7)), 0.5: tuple(range(0, -7, -1))}.get(value, tuple(range(-3, 4)))
        else:
            offsets, step = tuple(range(-3, 4)), 1e-3 * value
        vander = np.vander(np.array(offsets, float), increasing=True).T
        weights = np.linalg.solve(vander, np.eye(7)[1]) / step
        moved = [surface_tensor(replace(gel, **{name: value + o * step}), x, y) for o in offsets]
        slope = np.tensordot(weights, moved, axes=1)
        np.testing.assert_allclose(ours[index], slope, rtol=0, atol=1e-9 * np.abs(slope).max())


@given(
    st.sampled_from(GELS),
    st.floats(0.01, 8.0),
    st.floats(-np.pi, np.pi),
    st.floats(-np.pi, np.pi),
)
def test_rotation_and_reflection(gel, r, angle, turn):
    """Isotropy: turning the point turns the tensor; the response is even."""
    x, y = r * np.cos(angle), r * np.sin(angle)
    g = surface_tensor(gel, x, y)
    c, s = np.cos(turn), np.sin(turn)
    rotation = np.array([[c, -s], [s, c]])
    turned = rotation @ np.array([[g[0], g[1]], [g[1], g[2]]]) @ rotation.T
    there = surface_tensor(gel, *(rotation @ [x, y]))
    np.testing.assert_allclose([turned[0, 0], turned[0, 1], turned[1, 1]], there, rtol=0, atol=1e-12 * np.abs(g).max())
    np.testing.assert_array_equal(surface_tensor(gel, -x, -y), g)


def test_bad_positions_are_refused():
    gel = Gel(1.0, 0.3)
    for function in (
        surface_tensor,
        surface_tensor_gradient,
        surface_tensor_second_gradient,
        surface_tensor_derivatives,
    ):
        with pytest.raises(InputError, match="coincides with its source"):
            function(gel, [1.0, 0.0], [0.0, 0.0])
        with pytest.raises(InputError, match="not finite"):
            function(gel, np.nan, 0.0)

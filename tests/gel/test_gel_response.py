"""The response in Fourier space against tamaas, mpmath and limits."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
import tamaas

from tfm.errors import InputError
from tfm.gel import Gel, fourier_response, fourier_response_derivatives

POISSON = (0.0, 0.1, 0.3, 0.45, 0.49, 0.5)


@pytest.mark.parametrize("poisson", POISSON)
@pytest.mark.parametrize("mode", [(1, 0), (0, 1), (3, 2), (7, 5)])
def test_half_space_equals_tamaas(poisson, mode):
    """tamaas 2.x (Frerot et al., J Open Source Softw 5:2121, 2020): surface response of an elastic half-space."""
    length, shape = (1.5e-4, 1.1e-4), (24, 20)
    model = tamaas.ModelFactory.createModel(tamaas.model_type.surface_2d, list(length), list(shape))
    model.E, model.nu = 4e3, poisson
    k = 2 * np.pi * np.array(mode) / length
    phase = sum(
        2 * np.pi * m * i / n
        for m, i, n in zip(mode, np.meshgrid(*map(np.arange, shape), indexing="ij"), shape, strict=True)
    )
    traction = np.array([3.0, -1.7])
    model.traction[...] = 0.0
    model.traction[..., :2] = np.cos(phase)[..., None] * traction
    model.solveNeumann()
    theirs = np.tensordot(np.cos(phase), model.displacement[..., :2], axes=2) / (0.5 * phase.size)

    size = np.hypot(*k)
    g_l, g_t = fourier_response(Gel(4e3, poisson), size)
    along = k / size
    ours = g_l * along * (along @ traction) + g_t * (traction - along * (along @ traction))
    np.testing.assert_allclose(ours, theirs, rtol=1e-8, atol=1e-8 * np.abs(theirs).max())


@pytest.mark.parametrize("poisson", POISSON)
@pytest.mark.parametrize("s", [1e-6, 1e-3, 0.1, 0.7, 1.0, 2.0, 3.7, 8.0, 20.0, 45.0])
def test_layer_equals_mpmath_solution_of_the_layer_equations(layer_response, poisson, s):
    gel = Gel(5e3, poisson, 30e-6)
    k = s / 30e-6
    theirs = [float(v) for v in layer_response(k, gel.thickness, gel.shear_modulus, poisson)]
    np.testing.assert_allclose(fourier_response(gel, k), theirs, rtol=1e-13)


@pytest.mark.parametrize("poisson", POISSON)
def test_every_wave_number_is_finite_and_tends_to_its_limits(poisson):
    gel = Gel(5e3, poisson, 30e-6)
    s = np.logspace(-300, 300, 3001)
    with np.errstate(all="raise", under="ignore"):
        g_l, g_t = fourier_response(gel, s / gel.thickness)
    assert np.all(np.isfinite(g_l))
    assert np.all(g_l > 0)
    assert np.all(np.diff(g_l[s < 1e6]) <= 1e-15 * g_l[0])  # a stiffer answer to a shorter wave
    shallow = gel.thickness / gel.shear_modulus  # a sheared slab: u = T h / G
    for g in (g_l, g_t):
        np.testing.assert_allclose(g[s < 1e-9], shallow, rtol=1e-14)
    half_l, half_t = fourier_response(Gel(5e3, poisson), s / gel.thickness)
    np.testing.assert_allclose(g_l[s > 25], half_l[s > 25], rtol=1e-13)
    np.testing.assert_allclose(g_t[s > 25], half_t[s > 25], rtol=1e-13)
    np.testing.assert_allclose(fourier_response(gel, 0.0), [shallow, shallow], rtol=1e-15)


def test_zero_wave_number_of_a_half_space_is_infinite():
    assert np.all(np.isinf(fourier_response(Gel(1.0, 0.3), [0.0])))
    with pytest.raises(InputError, match="k = 0 has no response on an infinitely thick gel"):
        fourier_response_derivatives(Gel(1.0, 0.3), [0.0, 1.0])
    with pytest.raises(InputError, match="negative or not finite"):
        fourier_response(Gel(1.0, 0.3), [-1.0])


@pytest.mark.parametrize("poisson", [0.1, 0.3, 0.5])
@pytest.mark.parametrize("s", [1e-4, 0.3, 1.1, 4.0, 15.0])
def test_derivatives_equal_mpmath_differentiation_of_the_layer_equations(layer_response, poisson, s):
    gel = Gel(5e3, poisson, 30e-6)
    k = s / gel.thickness

    def response(component):
        def at(modulus, nu, thickness):
            return layer_response(k, thickness, modulus / (2 * (1 + nu)), nu)[component]

        return at

    for component, ours in enumerate(fourier_response_derivatives(gel, k)):
        for order in range(3):
            position = [0, 0, 0]
            position[order] = 1
            with mpmath.workdps(40):
                point = (mpmath.mpf(gel.youngs_modulus), mpmath.mpf(poisson), mpmath.mpf(gel.thickness))
                step = point[order] * mpmath.mpf("1e-12")
                moved = [tuple(p + sign * step * q for p, q in zip(point, position, strict=True)) for sign in (1, -1)]
                slope = (response(component)(*moved[0]) - response(component)(*moved[1])) / (2 * step)
            largest = float(abs(response(component)(*point)) / point[order])
            assert float(ours[order]) == pytest.approx(float(slope), rel=1e-9, abs=1e-13 * largest)


def test_derivatives_at_zero_wave_number():
    gel = Gel(3e3, 0.4, 20e-6)
    small, zero = fourier_response_derivatives(gel, 1e-3), fourier_response_derivatives(gel, 0.0)
    np.testing.assert_allclose(zero, small, rtol=1e-12)

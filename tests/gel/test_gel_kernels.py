"""Kernels on the lattice and their convolution: refinement, limits, symmetry, no wrap-around."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tfm.errors import InputError
from tfm.gel import (
    Gel,
    SurfaceOperator,
    displacement,
    fourier_response,
    node_kernel,
    node_kernel_derivatives,
    node_strain_kernel,
    surface_tensor,
)

#: Thickness in nodes: every branch of the assembly (infinite, filter, Gauss, graded panels, response itself).
THICKNESSES = (None, 200.0, 30.0, 13.0, 6.0, 3.0, 1.5, 0.3, 0.05, 0.021, 0.019, 0.004)


def lumped(kernel):
    """The kernel of nodes twice as wide, from that of the narrow ones: sources add, receivers average (2 x 2 each)."""
    n = (kernel.shape[-1] + 1) // 4  # offsets -(n - 1)..(n - 1) of wide nodes
    centre = (kernel.shape[-1] - 1) // 2
    out = np.zeros((*kernel.shape[:-2], 2 * n - 1, 2 * n - 1))
    triangle = {-1: 1.0, 0: 2.0, 1: 1.0}
    steps = 2 * np.arange(-(n - 1), n) + centre
    for dy, weight_y in triangle.items():
        for dx, weight_x in triangle.items():
            out += weight_y * weight_x / 4 * kernel[..., (steps + dy)[:, None], steps + dx]
    return out


@pytest.mark.parametrize("thickness", THICKNESSES)
@pytest.mark.parametrize("poisson", [0.0, 0.5])
def test_wide_nodes_are_lumps_of_narrow_ones(thickness, poisson):
    """Exact for averages of piecewise constant traction; near offsets of one lattice are far ones of the other."""
    gel = Gel(3.0, poisson, thickness)
    wide, narrow = node_kernel(gel, (30, 30), 1.0), node_kernel(gel, (60, 60), 0.5)
    np.testing.assert_allclose(lumped(narrow), wide, rtol=0, atol=2e-10 * wide.max())
    strain_wide, strain_narrow = node_strain_kernel(gel, (30, 30), 1.0), node_strain_kernel(gel, (60, 60), 0.5)
    np.testing.assert_allclose(lumped(strain_narrow), strain_wide, rtol=0, atol=2e-9 * strain_wide.max())


@pytest.mark.parametrize("thickness", [None, 200.0, 30.0, 6.0, 3.0, 1.5])
@pytest.mark.parametrize("receiver", ["average", "point"])
def test_far_offsets_equal_direct_quadrature_of_the_tensor(thickness, receiver):
    gel, spacing = Gel(3.0, 0.4, thickness), 1.3
    gel = replace(gel, thickness=None if thickness is None else thickness * spacing)
    kernel = node_kernel(gel, (260, 90), spacing, receiver=receiver)
    nodes, weights = np.polynomial.legendre.leggauss(16)
    source = 0.5 * nodes
    if receiver == "average":
        separation = (source[:, None] - source).ravel()
        weight = 0.25 * np.outer(weights, weights).ravel()
    else:
        separation, weight = source, 0.5 * weights
    for dy, dx in [(3, 2), (-2, 7), (11, -12), (13, 0), (-39, 5), (41, -3), (60, 70), (-250, 10)]:
        tensor = surface_tensor(gel, (dx + separation) * spacing, (dy + separation[:, None]) * spacing)
        direct = (tensor * weight * weight[:, None]).sum(axis=(1, 2)) * spacing**2
        ours = kernel[:, 259 + dy, 89 + dx]
        # Relative to the half-space at that distance: what a layer leaves of it may be nothing at all.
        scale = surface_tensor(Gel(3.0, 0.4), dx * spacing, dy * spacing)[[0, 2]].max() * spacing**2
        np.testing.assert_allclose(ours, direct, rtol=0, atol=1e-9 * scale)


def test_own_node_is_the_handbook_value():
    """Centre of a uniformly loaded square (Love 1929; Johnson 1985, eq. 3.25, from memory): the integral of 1/r over it
    is 4 a asinh(1), and x^2/r^2 averages to one half."""
    gel = Gel(2.0, 0.3)
    own = node_kernel(gel, (1, 1), 0.7, receiver="point")[:, 0, 0]
    expected = 4 * 0.7 * np.arcsinh(1.0) * (1 - 0.3 / 2) / (2 * np.pi * gel.shear_modulus)
    np.testing.assert_allclose(own, [expected, 0.0, expected], rtol=1e-13, atol=1e-16)


@pytest.mark.parametrize("thickness", [13.0, 6.0, 3.0, 1.5, 0.3, 0.03, 0.021, 0.019, 1e-3, 1e-6, 1e-9])
@pytest.mark.parametrize("receiver", ["average", "point"])
@pytest.mark.parametrize("poisson", [0.0, 0.5])
def test_uniform_traction_on_the_lattice_moves_a_layer_by_h_over_g(thickness, receiver, poisson):
    """The k = 0 response, h / G, is the sum of the kernel, however thick the layer."""
    gel = Gel(2.0, poisson, thickness)
    reach = int(np.ceil(45 * thickness)) + 3
    kernel = node_kernel(gel, (reach, reach), 1.0, receiver=receiver)
    expected = thickness / gel.shear_modulus
    np.testing.assert_allclose(kernel.sum(axis=(1, 2)), [expected, 0.0, expected], rtol=1e-9, atol=1e-12 * expected)


def test_thin_layer_is_local():
    gel = Gel(2.0, 0.45, 1e-4)
    kernel = node_kernel(gel, (6, 6), 1.0)
    own = kernel[:, 5, 5]
    np.testing.assert_allclose(own, np.array([1, 0, 1]) * 1e-4 / gel.shear_modulus, rtol=2e-4)
    assert np.abs(kernel[0]).sum() - own[0] < 2e-4 * own[0]


@pytest.mark.parametrize("poisson", [0.0, 0.3, 0.5])
def test_thick_layer_is_the_half_space(poisson):
    half = node_kernel(Gel(2.0, poisson), (40, 40), 1.0)
    gaps = [np.abs(node_kernel(Gel(2.0, poisson, h), (40, 40), 1.0) - half).max() for h in (1e3, 1e4, 1e6)]
    np.testing.assert_allclose(gaps, gaps[0] * np.array([1, 0.1, 1e-3]), rtol=0.02)  # falls as 1/h
    assert gaps[-1] < 1e-5 * half.max()


@pytest.mark.parametrize("thickness", THICKNESSES)
def test_symmetry_and_positive_energy(thickness):
    """Reciprocity makes the kernel even; the stored energy of any traction is positive."""
    gel = Gel(2.0, 0.5, thickness)
    kernel = node_kernel(gel, (9, 7), 1.0)
    np.testing.assert_array_equal(kernel, kernel[:, ::-1, ::-1])
    np.testing.assert_array_equal(kernel[[0, 2]], kernel[[0, 2], ::-1])
    np.testing.assert_array_equal(kernel[1], -kernel[1, :, ::-1])
    square = node_kernel(gel, (7, 7), 1.0)
    np.testing.assert_allclose(square[0], square[2].T, rtol=1e-12, atol=1e-13 * square.max())
    dense = np.zeros((2, 63, 2, 63))
    for row in range(63):
        one = np.zeros((2, 9, 7))
        for component in range(2):
            one[component].flat[row] = 1.0
            dense[:, :, component, row] = displacement(gel, one, 1.0).reshape(2, 63)
            one[component].flat[row] = 0.0
    matrix = dense.reshape(126, 126)
    np.testing.assert_allclose(matrix, matrix.T, rtol=0, atol=1e-14 * matrix.max())
    assert np.linalg.eigvalsh(matrix).min() > 0


@pytest.mark.parametrize("thickness", [None, 30e-6, 4e-6])
def test_convolution_is_the_direct_sum_and_nothing_wraps_around(thickness):
    """The sum over nodes in a loop, on a lattice whose sides are prime: wrap-around error is rounding."""
    gel, spacing = Gel(5e3, 0.45, thickness), 1.5e-6
    rng = np.random.default_rng(5)
    traction = rng.normal(0, 100, (2, 23, 17))
    kernel = node_kernel(gel, (23, 17), spacing)
    direct = np.zeros((2, 23, 17))
    for i in range(23):
        for j in range(17):
            part = kernel[:, 22 - i : 45 - i, 16 - j : 33 - j]
            direct[0] += part[0] * traction[0, i, j] + part[1] * traction[1, i, j]
            direct[1] += part[1] * traction[0, i, j] + part[2] * traction[1, i, j]
    for ours in (displacement(gel, traction, spacing), displacement(gel, traction, spacing, kernel=kernel)):
        np.testing.assert_allclose(ours, direct, rtol=0, atol=3e-15 * np.abs(direct).max())
    single = SurfaceOperator(gel, (23, 17), spacing, dtype=np.float32, workers=2).displacement(traction)
    assert single.dtype == np.float32
    np.testing.assert_allclose(single, direct, rtol=0, atol=3e-6 * np.abs(direct).max())


def test_a_periodic_transform_of_the_field_of_view_would_be_wrong_by_tens_of_percent():
    """Why the convolution is aperiodic: one balanced cell, a quarter of the field long, on an infinitely thick gel."""
    gel, n = Gel(5e3, 0.45), 64
    traction = np.zeros((2, n, n))
    traction[0, 28:36, 24:28], traction[0, 28:36, 36:40] = 100.0, -100.0
    ours = displacement(gel, traction, 1e-6)
    k = 2 * np.pi * np.fft.fftfreq(n, 1e-6)
    kx, ky = np.meshgrid(k, k)
    size = np.hypot(kx, ky)
    g_l, g_t = fourier_response(gel, np.where(size == 0, 1.0, size))
    spectrum = np.fft.fft2(traction)
    spectrum[:, 0, 0] = 0
    along = (kx * spectrum[0] + ky * spectrum[1]) / np.where(size == 0, 1.0, size) ** 2
    periodic = np.fft.ifft2(g_t * spectrum + (g_l - g_t) * along * np.stack([kx, ky])).real
    edge = np.s_[0, 32, 4]
    assert abs(periodic[edge] / ours[edge] - 1) > 0.5
    inside = np.s_[0, 32, 26]
    assert 0.005 < abs(periodic[inside] / ours[inside] - 1) < 0.5


@given(st.integers(0, 3), st.integers(0, 3), st.floats(-5, 5), st.floats(-5, 5), st.integers(0, 10**6))
@settings(max_examples=20)
def test_linearity_translation_and_reciprocity(di, dj, a, b, seed):
    gel = Gel(3.0, 0.3, 4.0)
    operator = SurfaceOperator(gel, (12, 10), 1.0)
    rng = np.random.default_rng(seed)
    s, t = np.zeros((2, 12, 10)), np.zeros((2, 12, 10))
    s[:, :6, :5], t[:, :6, :5] = rng.normal(size=(2, 2, 6, 5))
    u, v = operator.displacement(s), operator.displacement(t)
    size = np.abs(u).max() + np.abs(v).max()
    np.testing.assert_allclose(operator.displacement(a * s + b * t), a * u + b * v, rtol=0, atol=1e-13 * 10 * size)
    assert (s * v).sum() == pytest.approx((t * u).sum(), rel=1e-9, abs=1e-12 * size * np.abs(s).sum())
    moved = operator.displacement(np.roll(s, (di, dj), axis=(1, 2)))
    np.testing.assert_allclose(moved[:, di:, dj:], u[:, : 12 - di, : 10 - dj], rtol=0, atol=1e-14 * 10 * size)


@pytest.mark.parametrize("thickness", THICKNESSES)
@pytest.mark.parametrize("receiver", ["average", "point"])
def test_derivatives_equal_differences(thickness, receiver):
    gel = Gel(2.0, 0.4, thickness)
    ours = node_kernel_derivatives(gel, (20, 50), 1.0, receiver=receiver)
    for index, name in enumerate(("youngs_modulus", "poisson", "thickness")):
        value = getattr(gel, name)
        if value is None:
            assert np.all(ours[index] == 0)
            continue
        step = 2e-3 * value
        f = [
            node_kernel(replace(gel, **{name: value + o * step}), (20, 50), 1.0, receiver=receiver)
            for o in (-2, -1, 1, 2)
        ]
        slope = (f[0] - 8 * f[1] + 8 * f[2] - f[3]) / (12 * step)
        np.testing.assert_allclose(ours[index], slope, rtol=0, atol=1e-8 * np.abs(slope).max())


def test_what_cannot_be_is_refused():
    gel = Gel(1.0, 0.3)
    with pytest.raises(InputError, match=r"shape is \(0, 3\); give \(ny, nx\)"):
        node_kernel(gel, (0, 3), 1.0)
    with pytest.raises(InputError, match=r"spacing is -1\.0"):
        node_kernel(gel, (3, 3), -1.0)
    with pytest.raises(InputError, match="receiver is 'centre'; give 'average' or 'point'"):
        node_kernel(gel, (3, 3), 1.0, receiver="centre")  # type: ignore[arg-type]
    with pytest.raises(InputError, match=r"traction has shape \(3, 3\)"):
        displacement(gel, np.zeros((3, 3)), 1.0)
    with pytest.raises(InputError, match="traction holds values that are not finite"):
        displacement(gel, np.full((2, 3, 3), np.nan), 1.0)
    with pytest.raises(InputError, match="kernel has shape"):
        displacement(gel, np.zeros((2, 3, 3)), 1.0, kernel=np.zeros((3, 3, 3)))
    with pytest.raises(InputError, match="make the operator for the traction's lattice"):
        SurfaceOperator(gel, (3, 4), 1.0).displacement(np.zeros((2, 3, 3)))
    with pytest.raises(InputError, match="dtype is int64"):
        SurfaceOperator(gel, (3, 4), 1.0, dtype=np.int64)

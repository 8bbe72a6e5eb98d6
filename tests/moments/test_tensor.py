"""Principal axes, their errors and quadratic forms against general-purpose references."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from skimage.measure import label, regionprops

from tfm.moments import axis_deviation, outline_axis, principal_axes, quadratic_moments
from tfm.moments.tensor import wrap_axis

values = st.floats(-10, 10, allow_nan=False).filter(lambda v: abs(v) > 1e-3)


@given(values, values, values)
def test_principal_values_are_numpys_eigenvalues(xx, xy, yy):
    found = principal_axes(np.array([xx, xy, yy]))
    w, v = np.linalg.eigh(np.array([[xx, xy], [xy, yy]]))
    i = int(np.argmax(np.abs(w)))
    assert found.major == pytest.approx(w[i], rel=1e-9, abs=1e-9)
    assert found.minor == pytest.approx(w[1 - i], rel=1e-9, abs=1e-9)
    if found.axis is not None and abs(abs(w[0]) - abs(w[1])) > 1e-6:
        direction = np.array([np.cos(found.axis), np.sin(found.axis)])
        assert abs(direction @ v[:, i]) == pytest.approx(1.0, abs=1e-6)
        assert -np.pi / 2 < found.axis <= np.pi / 2


@given(st.floats(-20, 20))
def test_axes_are_wrapped_modulo_half_a_turn(angle):
    wrapped = wrap_axis(angle)
    assert -np.pi / 2 < wrapped <= np.pi / 2
    assert np.sin(2 * (wrapped - angle)) == pytest.approx(0.0, abs=1e-9)


def test_isotropic_tensor_has_no_axis():
    assert principal_axes(np.array([-3.0, 0.0, -3.0])).axis is None


@pytest.mark.parametrize(
    ("tensor", "scale"), [([-2.0, 0.4, -0.8], 0.02), ([-2.0, 0.4, -0.8], 0.3), ([-1.0, 0.0, -1.05], 0.2)]
)
def test_axis_error_equals_the_circular_scatter_of_draws(tensor, scale):
    """scipy.stats.circstd of the doubled angle (axial data, Fisher, Statistical Analysis of Circular Data, 1993), its
    own draws
    and numpy's eigenvectors; for wide scatter the two measures of spread differ, so the bound is the uniform's 52
    degrees."""
    rng = np.random.default_rng(3)
    covariance = scale**2 * np.array([[1.0, 0.1, -0.2], [0.1, 0.6, 0.0], [-0.2, 0.0, 0.9]])
    draws = rng.multivariate_normal(tensor, covariance, size=20000)
    matrices = np.stack([np.stack([draws[:, 0], draws[:, 1]], -1), np.stack([draws[:, 1], draws[:, 2]], -1)], -2)
    w, v = np.linalg.eigh(matrices)
    major = np.argmax(np.abs(w), axis=1)
    vectors = v[np.arange(len(w)), :, major]
    angle = np.arctan2(vectors[:, 1], vectors[:, 0])
    found = axis_deviation(np.array(tensor), covariance)
    spread = stats.circstd(2 * angle, high=np.pi, low=-np.pi) / 2
    if spread < 0.3:
        assert found == pytest.approx(spread, rel=0.06)
    else:
        assert 0.3 < found <= np.pi / np.sqrt(12) * 1.1


def test_quadratic_form_of_a_gaussian_is_a_weighted_chi_square():
    """scipy.stats.ncx2 for the identity, and 200,000 draws for a general form."""
    mean = np.array([1.0, -2.0, 0.5])
    value, sd = quadratic_moments(np.eye(3), mean, np.eye(3))
    noncentral = stats.ncx2(3, float(mean @ mean))
    assert value == pytest.approx(noncentral.mean(), rel=1e-12)
    assert sd == pytest.approx(noncentral.std(), rel=1e-12)
    q = np.array([[2.0, 0.3, 0.0], [0.3, 1.0, -0.4], [0.0, -0.4, 0.7]])
    cov = np.array([[0.5, 0.1, 0.0], [0.1, 0.3, 0.05], [0.0, 0.05, 0.8]])
    draws = np.random.default_rng(0).multivariate_normal(mean, cov, size=200_000)
    energies = np.einsum("ki,ij,kj->k", draws, q, draws)
    value, sd = quadratic_moments(q, mean, cov)
    assert value == pytest.approx(energies.mean(), rel=0.01)
    assert sd == pytest.approx(energies.std(), rel=0.01)


def test_outline_axis_equals_scikit_images_orientation():
    """skimage.measure.regionprops measures its orientation from the row axis; ours from +x towards +y."""
    rows, columns = np.indices((80, 80))
    for angle in (-1.2, -0.3, 0.4, 1.4):
        dx, dy = columns - 40, rows - 40
        along, across = dx * np.cos(angle) + dy * np.sin(angle), -dx * np.sin(angle) + dy * np.cos(angle)
        mask = (along / 28) ** 2 + (across / 11) ** 2 < 1
        (region,) = regionprops(label(mask))
        theirs = wrap_axis(np.pi / 2 - region.orientation)
        assert np.sin(outline_axis(mask) - theirs) == pytest.approx(0.0, abs=1e-6)
        assert outline_axis(mask) == pytest.approx(angle, abs=0.02)

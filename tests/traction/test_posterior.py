"""Posterior and evidence against general-purpose references."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import linalg, stats
from sklearn.gaussian_process import GaussianProcessRegressor
from sklearn.gaussian_process.kernels import DotProduct

from tfm.errors import ConvergenceError
from tfm.gel import node_kernel
from tfm.traction.gaussian import normal_equations, nuisance_columns, posterior, response_matrix
from tfm.traction.lattice import make_nodes, touching_cells
from tfm.traction.prior import CellPrior, first_moments, make_prior, matern


def proper_prior(n: int, positions: np.ndarray, length: float) -> tuple[CellPrior, np.ndarray]:
    """A Gaussian prior without flat directions, in the room's record, and its covariance."""
    distance = np.hypot(*(positions[:, None] - positions[None]).transpose(2, 0, 1))
    k = linalg.block_diag(*[matern(distance, length) + 1e-6 * np.eye(n)] * 2)
    return CellPrior(1, np.arange(2 * n), np.linalg.inv(k), 2 * n, -0.5 * float(np.linalg.slogdet(k)[1])), k


def dense(problem):
    """Response, motions and covariance of the data's noise, written out (2 N x 2 N)."""
    data = problem.data
    g = response_matrix(data, node_kernel(problem.gel, data.lattice.shape, data.lattice.spacing, receiver="point"))
    n = data.rows.size
    p = np.zeros((2 * n, 2 * n))
    i = np.arange(n)
    p[i, i], p[i + n, i + n], p[i, i + n], p[i + n, i] = data.precision[0], data.precision[2], *(data.precision[1],) * 2
    return g, nuisance_columns(data), np.linalg.inv(p)


def test_posterior_equals_a_gaussian_process(small_problem):
    """scikit-learn's GaussianProcessRegressor on the features of the linear map gives the same mean and covariance."""
    data = small_problem.data
    n = data.basis.size
    positions = np.stack([data.basis.node_rows, data.basis.node_columns], axis=1) * 1e-6
    prior, k = proper_prior(n, positions, 2e-6)
    amplitude = 400.0
    mean, covariance, _, _ = posterior(normal_equations(data, small_problem.gel), (prior,), np.array([amplitude]))

    g, z, noise = dense(small_problem)
    whiten = np.linalg.inv(np.linalg.cholesky(noise))  # independent unit noise, as the library wants it
    root = np.linalg.cholesky(k) * amplitude
    # The frame's offset, flat in ours, gets a prior a million times wider than its error.
    wide = 1e3 * small_problem.noise
    features = whiten @ np.hstack([g @ root, wide * z])
    gp = GaussianProcessRegressor(DotProduct(sigma_0=0.0, sigma_0_bounds="fixed"), alpha=1.0, optimizer=None)
    gp.fit(features, whiten @ data.value.reshape(-1))
    asked = np.hstack([root, np.zeros((2 * n, 2))])
    expected, expected_cov = gp.predict(asked, return_cov=True)
    np.testing.assert_allclose(mean, expected, rtol=1e-3, atol=1e-3 * np.abs(expected).max())
    np.testing.assert_allclose(covariance, expected_cov, rtol=1e-3, atol=1e-4 * np.abs(expected_cov).max())


def test_evidence_differences_equal_a_multivariate_normal(small_problem):
    """ln p(d) between amplitudes and between gels, by scipy.stats.multivariate_normal.logpdf."""
    from dataclasses import replace

    data = small_problem.data
    positions = np.stack([data.basis.node_rows, data.basis.node_columns], axis=1) * 1e-6
    prior, k = proper_prior(data.basis.size, positions, 2e-6)
    ours, theirs = [], []
    for amplitude, poisson in ((100.0, 0.45), (900.0, 0.45), (900.0, 0.1)):
        problem = replace(small_problem, gel=replace(small_problem.gel, poisson=poisson))
        ours.append(posterior(normal_equations(data, problem.gel), (prior,), np.array([amplitude]))[2])
        g, z, noise = dense(problem)
        cov = amplitude**2 * g @ k @ g.T + (1e3 * problem.noise) ** 2 * z @ z.T + noise
        scale = 1e-9  # the density in nm keeps the determinant inside floating point
        theirs.append(stats.multivariate_normal.logpdf(data.value.reshape(-1) / scale, cov=cov / scale**2))
    np.testing.assert_allclose(np.diff(ours), np.diff(theirs), rtol=1e-4, atol=1e-3)


def test_balance_is_conditioning(small_problem):
    """Imposed balance equals adding three noiseless data 'net force and torque are zero' to the regression."""
    from dataclasses import replace

    data = replace(small_problem.data, groups=((1,),))
    n = data.basis.size
    positions = np.stack([data.basis.node_rows, data.basis.node_columns], axis=1) * 1e-6
    prior, k = proper_prior(n, positions, 2e-6)
    normal = normal_equations(data, small_problem.gel)
    ours, theirs = [], []
    x, y = data.lattice.x[data.basis.columns], data.lattice.y[data.basis.rows]
    one, zero = np.ones(n), np.zeros(n)
    b = np.stack([np.r_[one, zero], np.r_[zero, one], np.r_[-(y - y.mean()), x - x.mean()]])
    b /= np.linalg.norm(b, axis=1, keepdims=True)
    for amplitude in (200.0, 600.0):
        mean, _, evidence, _ = posterior(normal, (prior,), np.array([amplitude]))
        ours.append(evidence)
        g, z, noise = dense(small_problem)
        prior_cov = amplitude**2 * k
        data_cov = g @ prior_cov @ g.T + (300 * small_problem.noise) ** 2 * z @ z.T + noise
        top = np.hstack([data_cov, g @ prior_cov @ b.T])
        both = np.vstack([top, np.hstack([top[:, data_cov.shape[0] :].T, b @ prior_cov @ b.T])])
        both[data_cov.shape[0] :, data_cov.shape[0] :] += 1e-9 * amplitude**2 * np.eye(3)
        seen = np.r_[data.value.reshape(-1), np.zeros(3)]
        cross = np.hstack([prior_cov @ g.T, prior_cov @ b.T])
        expected = cross @ np.linalg.solve(both, seen)
        np.testing.assert_allclose(mean, expected, rtol=2e-3, atol=2e-3 * np.abs(expected).max())
        scale = np.r_[np.full(data_cov.shape[0], 1e-9), np.full(3, 5.0)]
        joint = stats.multivariate_normal.logpdf(seen / scale, cov=both / np.outer(scale, scale))
        balance = both[data_cov.shape[0] :, data_cov.shape[0] :] / 25.0
        theirs.append(joint - stats.multivariate_normal.logpdf(np.zeros(3), cov=balance))
        assert np.abs(b @ mean).max() < 1e-9 * np.abs(mean).max()
    # p(d | balance) = p(d, balance) / p(balance); the record leaves p(balance) out, which for a proper prior is not
    # flat.
    balance_change = np.diff(
        [stats.multivariate_normal.logpdf(np.zeros(3), cov=a**2 * b @ k @ b.T / 25.0) for a in (200.0, 600.0)]
    )
    np.testing.assert_allclose(np.diff(ours), np.diff(theirs) + balance_change, rtol=1e-3, atol=2e-2)


@pytest.mark.parametrize("shape", ["even", "band"])
def test_prior_is_the_ratio_of_two_normal_densities(small_problem, shape):
    """p(T) = N(T; 0, K) / N(F T; 0, F K F^T), both by scipy.stats; the moments F T are then flat."""
    from tfm.traction.prior import shape_weight

    basis, lattice = small_problem.data.basis, small_problem.data.lattice
    (prior,) = make_prior(basis, lattice, length=2e-6, shape=shape)
    p = np.stack([basis.node_rows, basis.node_columns], axis=1) * 1e-6
    w = shape_weight(basis.node_depth * 1e-6, shape)
    single = matern(np.hypot(*(p[:, None] - p[None]).transpose(2, 0, 1)), 2e-6) * w[:, None] * w + 1e-8 * np.eye(
        basis.size
    )
    k = linalg.block_diag(single, single)
    f = first_moments(basis, lattice, 1)
    f /= np.linalg.norm(f, axis=1, keepdims=True)
    rng = np.random.default_rng(0)
    ours, theirs = [], []
    for _ in range(4):
        t = np.linalg.cholesky(k) @ rng.standard_normal(2 * basis.size)
        ours.append(-0.5 * t @ prior.precision @ t + prior.log_normaliser)
        theirs.append(
            stats.multivariate_normal.logpdf(t, cov=k) - stats.multivariate_normal.logpdf(f @ t, cov=f @ k @ f.T)
        )
    power_of_two_pi = -0.5 * prior.rank * np.log(2 * np.pi)
    np.testing.assert_allclose(np.array(ours) + power_of_two_pi, theirs, rtol=1e-6, atol=1e-4)
    assert prior.rank == np.linalg.matrix_rank(prior.precision, tol=1e-9 * np.linalg.norm(prior.precision, 2))


def test_no_data_near_the_outline_is_reported(small_problem):
    from dataclasses import replace

    empty = replace(small_problem.data, precision=np.zeros_like(small_problem.data.precision))
    empty.precision[[0, 2], :2] = 1e16
    prior = make_prior(empty.basis, empty.lattice, length=2e-6)
    with pytest.raises(ConvergenceError, match="do not determine"):
        posterior(normal_equations(empty, small_problem.gel), prior, np.array([1e30]))


def test_nodes_are_a_partition_of_unity_that_keeps_first_moments():
    covered = np.zeros((30, 40), np.int32)
    rows, columns = np.indices(covered.shape)
    covered[((rows - 14) / 9) ** 2 + ((columns - 20) / 15) ** 2 < 1] = 1
    basis = make_nodes(covered, step=3)
    np.testing.assert_allclose(np.asarray(basis.weights.sum(axis=1)).ravel(), 1.0, rtol=1e-12)
    # Hats reproduce linear functions away from the rim (finite elements: bilinear completeness).
    deep = basis.rows.size - 1
    inner = (covered[np.clip(basis.rows - 3, 0, None), basis.columns] > 0) & (
        covered[basis.rows + 3, basis.columns] > 0
    )
    inner &= (covered[basis.rows, basis.columns - 3] > 0) & (covered[basis.rows, basis.columns + 3] > 0)
    assert inner.sum() > 50
    assert deep > 100
    linear = basis.weights @ (2.0 * basis.node_rows - 0.7 * basis.node_columns)
    np.testing.assert_allclose(linear[inner], (2.0 * basis.rows - 0.7 * basis.columns)[inner], rtol=1e-9)


def test_touching_cells_are_one_group():
    covered = np.zeros((12, 12), np.int32)
    covered[2:6, 2:6], covered[6:9, 6:9], covered[1:3, 9:11] = 4, 7, 9  # 4 and 7 meet at a corner
    assert touching_cells(covered) == ((4, 7), (9,))

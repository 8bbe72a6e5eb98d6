"""Random effects against statsmodels, a dense restricted likelihood, and simulated populations."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import optimize, stats
from statsmodels.stats.meta_analysis import combine_effects

from tfm.errors import InputError
from tfm.population.random_effects import random_effects
from tfm.population.tensors import rotation_of_tensor, tensor_draws, tensor_population, to_cell_frame


def sample(seed, count=14, spread=0.4):
    rng = np.random.default_rng(seed)
    v = rng.uniform(0.05, 0.5, count) ** 2
    return 2.0 + spread * rng.normal(size=count) + np.sqrt(v) * rng.normal(size=count), v


@pytest.mark.parametrize("seed", range(4))
def test_moments_equal_statsmodels(seed):
    y, v = sample(seed)
    ours = random_effects(y, v, method="moments")
    theirs = combine_effects(y, v, method_re="chi2", use_t=True)
    assert ours.mean == pytest.approx(theirs.mean_effect_re, rel=1e-10)
    assert ours.spread**2 == pytest.approx(theirs.tau2, rel=1e-10)
    # statsmodels' Hartung-Knapp variance; ours is never below the plain one.
    sd = max(theirs.sd_eff_w_re_hksj, theirs.sd_eff_w_re)
    assert ours.mean_sd == pytest.approx(sd, rel=1e-10)


def test_the_interval_of_the_mean_is_student_t():
    y, v = sample(9)
    ours = random_effects(y, v, method="moments")
    assert ours.mean_high - ours.mean == pytest.approx(stats.t(len(y) - 1).interval(0.95)[1] * ours.mean_sd, rel=1e-10)


@pytest.mark.parametrize("seed", range(4))
def test_reml_maximises_the_likelihood_of_error_contrasts(seed):
    # Restricted likelihood by its definition: the density of K'y, K spanning the complement of the mean (Patterson &
    # Thompson 1971), evaluated by scipy's dense multivariate normal.
    y, v = sample(seed)
    k = np.linalg.svd(np.ones((1, len(y))))[2][1:].T

    def loss(log_tau2):
        return -stats.multivariate_normal(np.zeros(len(y) - 1), k.T @ np.diag(v + np.exp(log_tau2)) @ k).logpdf(k.T @ y)

    best = optimize.minimize_scalar(loss, bounds=(-12, 3), method="bounded", options={"xatol": 1e-10})
    assert random_effects(y, v).spread ** 2 == pytest.approx(np.exp(best.x), rel=1e-4)


def test_equal_variances_give_the_classical_answer():
    # With equal variances REML is s^2 - v (analysis of variance, textbook).
    y = np.array([1.0, 2.0, 3.5, 2.2, 1.7])
    result = random_effects(y, np.full(5, 0.04))
    assert result.spread**2 == pytest.approx(y.var(ddof=1) - 0.04, rel=1e-6)
    assert result.mean == pytest.approx(y.mean(), rel=1e-12)
    assert result.naive_spread == pytest.approx(y.std(ddof=1), rel=1e-12)


def test_the_spread_is_recovered_without_bias_and_the_naive_one_is_not():
    spread, naive, covered, mean_covered = [], [], 0, 0
    for seed in range(200):
        y, v = sample(seed, count=12, spread=0.3)
        result = random_effects(y, v)
        spread.append(result.spread**2)
        naive.append(result.naive_spread**2)
        covered += result.spread_low <= 0.3 <= (result.spread_high or np.inf)
        mean_covered += result.mean_low <= 2.0 <= result.mean_high
    error = np.std(spread) / np.sqrt(len(spread))
    assert abs(np.mean(spread) - 0.09) < 3 * error
    assert np.mean(naive) - 0.09 > 6 * error
    assert 0.90 <= covered / 200 <= 0.99
    assert 0.90 <= mean_covered / 200 <= 0.99


def test_identical_cells_have_no_spread_and_one_cell_has_none_at_all():
    rng = np.random.default_rng(0)
    v = np.full(30, 0.04)
    result = random_effects(1.0 + 0.15 * rng.normal(size=30), v)
    assert result.spread == 0.0
    assert result.spread_low == 0.0
    single = random_effects([1.5], [0.01])
    assert (single.mean, single.mean_sd, single.spread, single.mean_low) == (1.5, 0.1, None, None)


def test_bad_input_is_refused_in_words():
    with pytest.raises(InputError, match="variance is not positive"):
        random_effects([1.0, 2.0], [0.1, 0.0])
    with pytest.raises(InputError, match="shape"):
        random_effects([1.0, 2.0], [0.1])
    with pytest.raises(InputError, match="method 'bayes' is unknown"):
        random_effects([1.0, 2.0], [0.1, 0.1], method="bayes")


def test_turning_a_tensor_is_turning_a_matrix():
    rng = np.random.default_rng(2)
    for angle in rng.uniform(-3, 3, 5):
        p = rng.normal(size=3)
        r = np.array([[np.cos(angle), np.sin(angle)], [-np.sin(angle), np.cos(angle)]])
        whole = r @ np.array([[p[0], p[1]], [p[1], p[2]]]) @ r.T
        turned = rotation_of_tensor(angle) @ p
        assert np.allclose(turned, [whole[0, 0], whole[0, 1], whole[1, 1]], rtol=1e-12, atol=1e-14)


def simulated(rng, count, mean, sigma):
    y, s = [], []
    for _ in range(count):
        a = rng.normal(size=(3, 3)) * rng.uniform(0.05, 0.3)
        cov = a @ a.T + 1e-3 * np.eye(3)
        y.append(rng.multivariate_normal(mean, sigma + cov))
        s.append(cov)
    return np.array(y), np.array(s)


def test_the_spread_of_tensors_is_recovered_without_bias():
    mean = np.array([-2.0, 0.0, -0.6])
    sigma = np.array([[0.20, 0.02, 0.05], [0.02, 0.04, 0.0], [0.05, 0.0, 0.06]])
    rng = np.random.default_rng(1)
    fits = [tensor_population(*simulated(rng, 16, mean, sigma)) for _ in range(60)]
    assert {f.method for f in fits} == {"reml"}
    means = np.array([f.mean for f in fits])
    assert np.allclose(means.mean(axis=0), mean, atol=3.5 * means.std(axis=0).max() / np.sqrt(60), rtol=0)
    spreads = np.array([f.spread for f in fits])
    error = spreads.std(axis=0) / np.sqrt(60)
    assert (np.abs(spreads.mean(axis=0) - sigma) < 3.5 * error + 0.006).all()
    naive = np.array([f.naive_spread for f in fits]).mean(axis=0)
    assert np.trace(naive) > np.trace(sigma) + 6 * np.trace(error) / 3
    # The error bars of the mean are honest.
    z = np.array([(f.mean - mean) / np.sqrt(np.diag(f.mean_covariance)) for f in fits])
    assert 0.8 < np.sqrt((z**2).mean()) < 1.25


def test_few_tensors_are_corrected_by_moments_without_bias():
    sigma = np.diag([0.20, 0.04, 0.06])
    rng = np.random.default_rng(8)
    fits = [tensor_population(*simulated(rng, 5, np.array([-2.0, 0.0, -0.6]), sigma)) for _ in range(400)]
    assert {f.method for f in fits} == {"moments"}
    along = np.array([f.spread[0, 0] for f in fits])
    naive = np.array([f.naive_spread[0, 0] for f in fits])
    assert abs(along.mean() - 0.20) < 3 * along.std() / 20 + 0.005  # cutting negative eigenvalues adds a little
    assert naive.mean() - 0.20 > 3 * naive.std() / 20


def test_diagonal_tensors_equal_three_scalar_analyses():
    rng = np.random.default_rng(5)
    v = rng.uniform(0.02, 0.1, 40)
    y = np.stack([1 + 0.5 * rng.normal(size=40) + np.sqrt(v) * rng.normal(size=40), np.zeros(40), np.zeros(40)], axis=1)
    y[:, 1:] = 1e-3 * rng.normal(size=(40, 2))
    s = np.array([np.diag([a, 1e-6, 1e-6]) for a in v])
    scalar = random_effects(y[:, 0], v)
    assert np.sqrt(tensor_population(y, s).spread[0, 0]) == pytest.approx(scalar.spread, rel=0.03)


def test_the_cell_frame_does_not_depend_on_how_the_dish_lay():
    rng = np.random.default_rng(3)
    own = np.array([-2.0, 0.1, -0.5])
    cov = np.diag([0.04, 0.01, 0.02])
    angles = rng.uniform(-np.pi / 2, np.pi / 2, 20)
    back = rotation_of_tensor(-angles)
    image, image_cov = back @ own, back @ cov @ np.swapaxes(back, 1, 2)
    tensors, covariances = to_cell_frame(image, image_cov, angles)
    assert np.allclose(tensors, own, rtol=1e-12)
    assert np.allclose(covariances, cov, rtol=1e-10, atol=1e-15)


def test_draws_carry_the_spread_between_cells_and_nothing_else():
    rng = np.random.default_rng(4)
    mean, sigma = np.array([-2.0, 0.0, -0.6]), np.diag([0.2, 0.04, 0.06])
    fit = tensor_population(*simulated(rng, 200, mean, sigma))
    draws = tensor_draws(fit, 20000, rng)
    assert np.allclose(np.cov(draws, rowvar=False), fit.spread, atol=0.01, rtol=0)
    with pytest.raises(InputError, match="no spread"):
        tensor_draws(tensor_population([mean], [sigma]), 3, rng)

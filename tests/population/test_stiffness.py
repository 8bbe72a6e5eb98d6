"""The stiffness fit against scipy's least squares and orthogonal regression, and against simulated experiments."""

from __future__ import annotations

import warnings

import numpy as np
import pytest
from scipy import optimize, stats

from tfm.errors import InputError
from tfm.population.response import ResponseData
from tfm.population.stiffness import coupling_strength, fit_stiffness, saturating_moment

P, HALF = 2e-12, 5e3


def experiment(
    seed, *, per_gel=5, gels=(1e3, 3e3, 9e3, 27e3), spread=0.2, modulus_error=0.06, noise=0.08e-12, half=HALF
):
    """Cells whose moment was computed with the modulus typed in: a wrong modulus is a wrong moment."""
    rng = np.random.default_rng(seed)
    e = np.repeat(gels, per_gel)
    factor = np.repeat(1 + modulus_error * rng.normal(size=len(gels)), per_gel)
    true = P * e * factor / (e * factor + half) * (1 + spread * rng.normal(size=e.size))
    return e, true / factor + noise * rng.normal(size=e.size), np.full(e.size, noise**2), modulus_error * e


def test_without_spread_and_stiffness_error_it_is_weighted_least_squares():
    e, y, v, _ = experiment(3, spread=0.0, modulus_error=0.0)
    # curve_fit is scipy's own weighted least squares.
    best, _ = optimize.curve_fit(
        lambda x, p, h: p * x / (x + h), e / 1e3, y / 1e-12, p0=[2, 5], sigma=np.sqrt(v) / 1e-12
    )
    fit = fit_stiffness(e, y, v)
    # The fit may find a little spread in the noise; then weights differ slightly.
    assert fit.p_inf * 1e12 == pytest.approx(best[0], rel=0.02)
    assert fit.e_star / 1e3 == pytest.approx(best[1], rel=0.04)


def test_errors_in_both_agree_with_orthogonal_distance_regression():
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DeprecationWarning)  # scipy hands this part to a package of its own
        odr = pytest.importorskip("scipy.odr")
    rng = np.random.default_rng(1)
    # One cell per gel, errors of stiffness independent of the moment, no spread: the model of orthogonal regression.
    true = np.geomspace(0.8e3, 40e3, 24)
    sd_e, sd_y = 0.04 * true, 0.02e-12
    e = true + sd_e * rng.normal(size=true.size)
    y = P * true / (true + HALF) + sd_y * rng.normal(size=true.size)
    data = odr.RealData(e / 1e3, y / 1e-12, sx=sd_e / 1e3, sy=np.full(true.size, sd_y / 1e-12))
    out = odr.ODR(data, odr.Model(lambda b, x: b[0] * x / (x + b[1])), beta0=[1.5, 3.0]).run()
    fit = fit_stiffness(e, y, np.full(true.size, sd_y**2), stiffness_sd=sd_e, moment_follows_modulus=False)
    assert fit.p_inf * 1e12 == pytest.approx(out.beta[0], abs=0.5 * out.sd_beta[0])
    assert fit.e_star / 1e3 == pytest.approx(out.beta[1], abs=0.5 * out.sd_beta[1])
    width = (fit.e_star_high - fit.e_star_low) / 1e3 / (2 * 2.07)  # t(21), 97.5 %
    assert width == pytest.approx(out.sd_beta[1] / np.sqrt(out.res_var), rel=0.5)


def test_the_likelihood_is_that_of_moments_computed_with_a_wrong_modulus():
    # The generative story, differentiated numerically, in scipy's dense normal density.
    e = np.array([2e3, 2e3, 8e3, 8e3, 8e3])
    gel = np.array([0, 0, 1, 1, 1])
    v = np.full(5, 0.01)
    y = np.array([0.5, 0.7, 1.2, 1.0, 1.3])
    level, half, tau, sigma = 0.9, 6e3, 0.15, 0.1
    data = ResponseData(e, y, v, gel, np.full(5, sigma), True, 4e3)
    plateau = level * (4e3 + half) / 4e3

    def typed_in(delta):
        true = e * (1 + delta[gel])
        return plateau * true / (true + half) / (1 + delta[gel])

    mean = typed_in(np.zeros(2))
    step = 1e-5
    h = np.stack([(typed_in(step * unit) - typed_in(-step * unit)) / (2 * step) for unit in np.eye(2)], axis=1)
    covariance = np.diag(v + (tau * mean) ** 2) + sigma**2 * h @ h.T
    dense = stats.multivariate_normal(mean, covariance).logpdf(y)
    assert -data.loss(level, half, tau) - 2.5 * np.log(2 * np.pi) == pytest.approx(dense, rel=1e-7)


def test_intervals_cover():
    # Thirty experiments here; two hundred in tests/benchmarks/bench_population.py.
    e_star = p_inf = 0
    for seed in range(30):
        e, y, v, sd = experiment(seed)
        fit = fit_stiffness(e, y, v, stiffness_sd=sd)
        e_star += (fit.e_star_low or 0) <= HALF <= (fit.e_star_high or np.inf)
        p_inf += (fit.p_inf_low or 0) <= P <= (fit.p_inf_high or np.inf)
    assert e_star >= 25
    assert p_inf >= 25


def test_an_open_interval_is_reported_as_open():
    # All gels far stiffer than E*: the response is flat, E* has no lower bound.
    e, y, v, _ = experiment(2, gels=(60e3, 100e3, 160e3), modulus_error=0.0)
    flat = fit_stiffness(e, y, v)
    assert flat.e_star_low is None
    assert not flat.constrained
    assert any("lower bound" in note or "does not fix" in note for note in flat.notes)
    assert flat.preferred == "constant"
    # All gels far softer: the response is a straight line, neither E* nor P_inf has an upper bound.
    e, y, v, _ = experiment(2, gels=(100.0, 200.0, 400.0), modulus_error=0.0, noise=1e-15)
    steep = fit_stiffness(e, y, v)
    assert steep.e_star_high is None
    assert steep.p_inf_high is None
    assert steep.preferred == "linear"


def test_a_clear_response_is_preferred_and_its_optimum_is_e_star():
    e, y, v, sd = experiment(4, per_gel=10, spread=0.1)
    fit = fit_stiffness(e, y, v, stiffness_sd=sd)
    assert fit.preferred == "saturating"
    assert fit.constrained
    assert sum(law.weight for law in fit.laws) == pytest.approx(1)
    # The coupling of two cells is largest there: found by scipy, not by the formula.
    best = optimize.minimize_scalar(
        lambda u: -coupling_strength(np.exp(u), fit.p_inf, fit.e_star), bounds=(4, 14), method="bounded"
    )
    assert np.exp(best.x) == pytest.approx(fit.optimum, rel=1e-3)
    assert fit.spread == pytest.approx(0.1, abs=0.05)


def test_a_wrong_modulus_shared_by_a_gel_widens_the_interval():
    e, y, v, sd = experiment(5, per_gel=12, spread=0.05)
    exact = fit_stiffness(e, y, v)
    unsure = fit_stiffness(e, y, v, stiffness_sd=3 * sd)
    assert np.log(unsure.e_star_high / unsure.e_star_low) > 1.5 * np.log(exact.e_star_high / exact.e_star_low)


def test_units_do_not_matter():
    e, y, v, sd = experiment(6)
    one = fit_stiffness(e, y, v, stiffness_sd=sd)
    two = fit_stiffness(e * 1e3, y * 1e12, v * 1e24, stiffness_sd=sd * 1e3)
    assert two.e_star / 1e3 == pytest.approx(one.e_star, rel=1e-3)
    assert two.p_inf / 1e12 == pytest.approx(one.p_inf, rel=1e-3)


def test_half_of_the_plateau_is_reached_at_e_star():
    assert saturating_moment(HALF, P, HALF) == pytest.approx(P / 2, rel=1e-12)


def test_what_cannot_be_fitted_is_refused_in_words():
    with pytest.raises(InputError, match="one stiffness"):
        fit_stiffness([1e3] * 5, np.ones(5), np.ones(5))
    with pytest.raises(InputError, match="3 cells cannot"):
        fit_stiffness([1e3, 2e3, 3e3], np.ones(3), np.ones(3))
    with pytest.raises(InputError, match="stiffness is missing"):
        fit_stiffness([1e3, np.nan, 2e3, 3e3], np.ones(4), np.ones(4))

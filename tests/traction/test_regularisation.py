"""The four choices of lambda against dense solutions written with numpy and scipy."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import optimize, stats

from tfm.errors import InputError
from tfm.traction.regularisation import CHOICES, choose_lambda


@pytest.fixture
def dense():
    """A smoothing operator on 60 points, data with 2 % noise, and its singular value decomposition."""
    rng = np.random.default_rng(5)
    x = np.linspace(0, 1, 60)
    g = np.exp(-((x[:, None] - x[None]) ** 2) / (2 * 0.03**2))
    truth = np.sin(7 * x) * (x > 0.3)
    noise = 0.02 * np.abs(g @ truth).max()
    d = g @ truth + noise * rng.standard_normal(60)
    u, s, _ = np.linalg.svd(g)
    return g, d, noise, s, (u.T @ d) ** 2


def residual(g, d, lam):
    influence = g @ np.linalg.solve(g.T @ g + lam**2 * np.eye(60), g.T)
    return d - influence @ d, influence


def test_gcv(dense):
    """Minimum of |(1 - A) d|^2 / tr(1 - A)^2 with the dense influence matrix (Golub, Heath & Wahba 1979)."""
    g, d, _, s, power = dense

    def score(log_lam):
        r, a = residual(g, d, np.exp(log_lam))
        return np.log(r @ r) - 2 * np.log(np.trace(np.eye(60) - a))

    grid = np.linspace(-8, 3, 60)
    start = grid[np.argmin([score(v) for v in grid])]
    best = optimize.minimize_scalar(score, bounds=(start - 0.3, start + 0.3), method="bounded", options={"xatol": 1e-7})
    assert choose_lambda(s, power, choice="gcv") == pytest.approx(np.exp(best.x), rel=1e-3)


def test_discrepancy(dense):
    """Residual equals the noise (Morozov 1966)."""
    g, d, noise, s, power = dense
    r, _ = residual(g, d, choose_lambda(s, power, choice="discrepancy", noise=noise))
    assert np.sqrt(r @ r / 60) == pytest.approx(noise, rel=1e-6)


@pytest.mark.parametrize("known", [True, False])
def test_evidence(dense, known):
    """Maximum of scipy.stats.multivariate_normal.logpdf(d; 0, s^2 (1 + G G^T / lambda^2))."""
    g, d, noise, s, power = dense

    def minus(log_lam):
        shape = np.eye(60) + g @ g.T / np.exp(2 * log_lam)
        size = noise**2 if known else d @ np.linalg.solve(shape, d) / 60
        return -stats.multivariate_normal.logpdf(d, cov=size * shape)

    grid = np.linspace(-7, 2, 60)
    start = grid[np.argmin([minus(v) for v in grid])]
    best = optimize.minimize_scalar(minus, bounds=(start - 0.3, start + 0.3), method="bounded", options={"xatol": 1e-7})
    found = choose_lambda(s, power, choice="evidence", noise=noise if known else None)
    assert found == pytest.approx(np.exp(best.x), rel=2e-3)


def test_lcurve_corner(dense):
    """Largest curvature of the dense L-curve by finite differences of an interpolating spline (Hansen & O'Leary
    1993)."""
    from scipy.interpolate import CubicSpline

    g, d, _, s, power = dense
    logs = np.linspace(-7, 2, 300)
    points = []
    for v in logs:
        r, _ = residual(g, d, np.exp(v))
        t = np.linalg.solve(g.T @ g + np.exp(2 * v) * np.eye(60), g.T @ d)
        points.append((0.5 * np.log(r @ r), 0.5 * np.log(t @ t)))
    rho, eta = (CubicSpline(logs, p) for p in np.array(points).T)
    kappa = (rho(logs, 1) * eta(logs, 2) - rho(logs, 2) * eta(logs, 1)) / (rho(logs, 1) ** 2 + eta(logs, 1) ** 2) ** 1.5
    assert np.log(choose_lambda(s, power, choice="lcurve")) == pytest.approx(logs[np.argmax(kappa)], abs=0.15)


def test_refusals(dense):
    *_, s, power = dense
    with pytest.raises(InputError, match="needs a noise level; measure the noise"):
        choose_lambda(s, power, choice="discrepancy")
    with pytest.raises(InputError, match="gcv, lcurve, discrepancy, evidence"):
        choose_lambda(s, power, choice="guess")
    assert set(CHOICES) == {"gcv", "lcurve", "discrepancy", "evidence"}

r"""Likelihood of a stiffness response, with errors of moments and of stiffness, hierarchical over cells.

Cell *i* sits on a gel of true modulus :math:`E_g (1 + \delta_g)`; all cells of one gel share
:math:`\delta_g \sim N(0, \sigma_g^2)`. A moment is computed from the images *with* the modulus typed in, so it is wrong
by the same factor: :math:`y_i = [f(E_g(1 + \delta_g)) (1 + \tau b_i)] / (1 + \delta_g) + e_i`, with
:math:`b_i \sim N(0, 1)` between cells and :math:`e_i \sim N(0, v_i)` from the images. To first order in
:math:`\delta_g`, y is normal with mean f and covariance
:math:`\mathrm{diag}(v + \tau^2 f^2) + \sum_g \sigma_g^2 h_g h_g^T`, :math:`h = E f'(E) - f`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import optimize

__all__ = ["Best", "ResponseData", "best_at", "best_with_plateau"]

#: (loss, level, tau)
Best = tuple[float, float, float]


@dataclass(frozen=True)
class ResponseData:
    """Cells on gels, and the likelihood of a law."""

    e: NDArray[np.float64]
    y: NDArray[np.float64]
    v: NDArray[np.float64]
    gel: NDArray[np.intp]
    relative: NDArray[np.float64]
    follows: bool
    reference: float

    def shape(self, half: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """f / A and its derivative by ln E, where A = f at the reference; half = 0 and inf are limits."""
        if np.isinf(half):
            f = self.e / self.reference
            return f, f
        f = self.e / (self.e + half) * (self.reference + half) / self.reference
        return f, f * half / (self.e + half)

    def loss(self, level: float, half: float, tau: float) -> float:
        """Minus the log likelihood without its constant."""
        f, slope = self.shape(half)
        f, slope = level * f, level * slope
        sensitivity = (slope - f if self.follows else slope) * self.relative
        diagonal = self.v + (tau * f) ** 2
        rest = self.y - f
        # Woodbury for one rank-one term per gel: cells of a gel share the error of its modulus.
        total = float(np.log(diagonal).sum() + (rest**2 / diagonal).sum())
        hh = np.bincount(self.gel, sensitivity**2 / diagonal)
        hr = np.bincount(self.gel, sensitivity * rest / diagonal)
        return 0.5 * (total + float(np.log1p(hh).sum() - (hr**2 / (1 + hh)).sum()))


def _search(loss: object, start: NDArray[np.float64]) -> tuple[float, NDArray[np.float64]]:
    found = optimize.minimize(
        loss, start, method="Nelder-Mead", options={"xatol": 1e-5, "fatol": 1e-8, "maxiter": 1500}
    )
    return float(found.fun), np.asarray(found.x)


def best_at(data: ResponseData, half: float, start: Best | None = None) -> Best:
    """Least loss over level and spread at a given E* (0 and inf are the constant and the linear law)."""
    guess = float(np.average(data.y, weights=1 / (data.v + data.y.var() + 1e-300)))
    scale = abs(guess) or float(np.abs(data.y).max()) or 1.0

    def loss(p: NDArray[np.float64]) -> float:
        return data.loss(float(p[0]) * scale, half, float(abs(p[1])))

    starts = [(guess, 0.02), (guess, 0.3)] if start is None else [(start[1], max(start[2], 0.02))]
    found = [_search(loss, np.array([level / scale, tau])) for level, tau in starts]
    value, point = min(found, key=lambda item: item[0])
    return value, float(point[0]) * scale, float(abs(point[1]))


def best_with_plateau(data: ResponseData, plateau: float, half: float, tau: float) -> tuple[float, float, float]:
    """Least loss over E* and spread with P_inf held: (loss, E*, tau), searched from the given E* and tau."""

    def loss(p: NDArray[np.float64]) -> float:
        h = float(np.exp(p[0]))
        return data.loss(plateau * data.reference / (data.reference + h), h, float(abs(p[1])))

    value, point = _search(loss, np.array([np.log(half), max(tau, 0.02)]))
    return value, float(np.exp(point[0])), float(abs(point[1]))

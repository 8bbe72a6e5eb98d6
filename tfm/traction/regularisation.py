r"""How strongly to regularise: four published choices of lambda for a diagonalised linear problem.

The problem is :math:`\beta_i = g_i t_i + e_i`, the estimate :math:`t_i = g_i \beta_i/(g_i^2+\lambda^2)`. Lambda has
the unit of
*g* (m/Pa) everywhere and means: where the response *g* falls below lambda, the prior takes over.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import optimize

from tfm.errors import InputError

__all__ = ["CHOICES", "choose_lambda"]

CHOICES = ("gcv", "lcurve", "discrepancy", "evidence")


def _residual_share(g: NDArray[np.float64], lam: float) -> NDArray[np.float64]:
    return np.asarray(lam**2 / (g**2 + lam**2))


def gcv_score(g: NDArray[np.float64], power: NDArray[np.float64], log_lambda: float) -> float:
    """Generalised cross-validation (Golub, Heath & Wahba, Technometrics 21:215, 1979, eq. 1.4); to be minimised."""
    share = _residual_share(g, float(np.exp(log_lambda)))
    return float(np.log(np.sum(share**2 * power)) - 2.0 * np.log(np.sum(share)))


def evidence_score(g: NDArray[np.float64], power: NDArray[np.float64], log_lambda: float, noise: float | None) -> float:
    """Minus the log marginal likelihood (MacKay, Neural Computation 4:415, 1992); noise is profiled out when None."""
    share = _residual_share(g, float(np.exp(log_lambda)))
    weighted = float(np.sum(share * power))
    n = g.size
    if noise is None:
        return 0.5 * n * float(np.log(weighted / n)) - 0.5 * float(np.sum(np.log(share)))
    return 0.5 * weighted / noise**2 - 0.5 * float(np.sum(np.log(share)))


def lcurve_curvature(
    g: NDArray[np.float64], power: NDArray[np.float64], log_lambda: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Curvature of log |t| against log |residual| (Hansen & O'Leary, SIAM J Sci Comput 14:1487, 1993); corner =
    maximum."""
    lam = np.exp(log_lambda)[:, None]
    rho = 0.5 * np.log(np.sum((lam**2 / (g**2 + lam**2)) ** 2 * power, axis=1))
    eta = 0.5 * np.log(np.sum((g / (g**2 + lam**2)) ** 2 * power, axis=1))
    d = [np.gradient(v, log_lambda) for v in (rho, eta)]
    dd = [np.gradient(v, log_lambda) for v in d]
    return np.asarray((d[0] * dd[1] - dd[0] * d[1]) / (d[0] ** 2 + d[1] ** 2) ** 1.5)


def choose_lambda(
    g: NDArray[np.float64], power: NDArray[np.float64], *, choice: str, noise: float | None = None
) -> float:
    """Lambda by one of :data:`CHOICES`.

    Parameters
    ----------
    g
        ``(n,)`` singular values of the response, m/Pa.
    power
        ``(n,)`` squared data in the basis of the left singular vectors, m^2.
    choice
        ``gcv``, ``lcurve``, ``discrepancy`` (Morozov: residual = noise) or ``evidence``.
    noise
        m, standard deviation of one datum; needed by ``discrepancy``, used by ``evidence`` where given.

    Raises
    ------
    InputError
        For an unknown choice, or ``discrepancy`` without noise.

    Examples
    --------
    >>> g = np.array([1.0, 0.1, 0.01]); data = np.array([1.0, 0.11, 0.02])
    >>> 0.001 < choose_lambda(g, data**2, choice="discrepancy", noise=0.01) < 0.3
    True
    """
    if choice not in CHOICES:
        raise InputError(
            f"lambda choice is '{choice}'", code="unknown-choice", remedy=f"use one of {', '.join(CHOICES)}"
        )
    low, high = np.log(g.max() * 1e-6), np.log(g.max() * 10.0)
    if choice == "discrepancy":
        if noise is None or not noise > 0:
            raise InputError(
                "the discrepancy principle needs a noise level", code="no-noise", remedy="measure the noise"
            )

        def gap(log_lambda: float) -> float:
            return float(np.sum(_residual_share(g, float(np.exp(log_lambda))) ** 2 * power)) - g.size * noise**2

        if gap(high) <= 0:  # nothing above the noise: the strongest smoothing is the honest answer
            return float(np.exp(high))
        if gap(low) >= 0:
            return float(np.exp(low))
        return float(np.exp(optimize.brentq(gap, low, high, rtol=1e-10)))
    grid = np.linspace(low, high, 161)
    if choice == "lcurve":
        curvature = lcurve_curvature(g, power, grid)
        inner = slice(3, -3)
        return float(np.exp(grid[inner][np.argmax(curvature[inner])]))

    def score(v: float) -> float:
        return gcv_score(g, power, v) if choice == "gcv" else evidence_score(g, power, v, noise)

    values = np.array([score(v) for v in grid])
    i = int(np.clip(np.argmin(values), 1, grid.size - 2))
    fine = optimize.minimize_scalar(score, bounds=(grid[i - 1], grid[i + 1]), method="bounded", options={"xatol": 1e-6})
    return float(np.exp(fine.x))

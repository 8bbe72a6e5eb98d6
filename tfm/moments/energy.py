r"""Elastic energies as quadratic forms of the traction's coefficients.

:math:`U = \tfrac12 \int T \cdot u\,dA` (Landau & Lifshitz, Theory of Elasticity, sec. 2 and 8). For a Gaussian
posterior
:math:`c \sim N(m, \Sigma)` a quadratic form has :math:`E[c^T Q c] = m^T Q m + \mathrm{tr}(Q\Sigma)` and variance
:math:`4 m^T Q\Sigma Q m + 2\,\mathrm{tr}(Q\Sigma Q\Sigma)` (Mathai & Provost, Quadratic Forms in Random Variables,
1992, ch. 3).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from tfm.errors import InputError
from tfm.gel import displacement, node_kernel
from tfm.traction.gaussian import LinearData, Solution, response_matrix
from tfm.traction.model import TractionField

__all__ = ["energy_matrix", "field_strain_energy", "mixture_energy", "quadratic_moments"]


def energy_matrix(data: LinearData, traction: TractionField) -> NDArray[np.float64]:
    """``(2 n, 2 n)`` J/Pa^2: E with ``c^T E c`` = integral of T . u (twice the strain energy).

    Symmetric by reciprocity (Betti); source and receiver are averaged over the lattice cells, so it is exact for
    traction
    that is constant on each lattice cell.
    """
    kernel = node_kernel(traction.gel, data.lattice.shape, data.lattice.spacing, receiver="average")
    basis = data.basis
    here = replace(data, rows=basis.rows.astype(float), columns=basis.columns.astype(float))
    response = response_matrix(here, kernel)
    m = basis.rows.size
    area = data.lattice.spacing**2
    left = basis.weights.T.tocsr() * area
    e = np.concatenate([np.asarray(left @ response[:m]), np.asarray(left @ response[m:])])
    return np.asarray(0.5 * (e + e.T))


def quadratic_moments(
    q: NDArray[np.float64], mean: NDArray[np.float64], covariance: NDArray[np.float64]
) -> tuple[float, float]:
    """Expectation and standard deviation of ``c^T q c`` for ``c ~ N(mean, covariance)``, ``q`` symmetric.

    Examples
    --------
    >>> value, sd = quadratic_moments(np.eye(2), np.zeros(2), np.eye(2))  # chi-square with two degrees of freedom
    >>> value, round(sd, 12)
    (2.0, 2.0)
    """
    qs = q @ covariance
    qm = q @ mean
    value = float(mean @ qm) + float(np.trace(qs))
    variance = 4.0 * float(qm @ covariance @ qm) + 2.0 * float(np.sum(qs * qs.T))
    return value, float(np.sqrt(max(variance, 0.0)))


#: Relative uncertainty of the energy that only the prior speaks for (finer than the beads resolve).
UNSEEN = 0.5


def mixture_energy(q: NDArray[np.float64], solution: Solution) -> tuple[float, float]:
    """Expectation and standard deviation of ``c^T q c`` over the mixture of posteriors.

    The part ``trace(q covariance)`` is energy of structure that the beads do not resolve; the prior supplies its
    size, and how
    adhesions are really shaped changes it by half of itself or so. That uncertainty is added.
    """
    values = [
        (c.weight, *quadratic_moments(q, c.mean, c.covariance), float(np.sum(q * c.covariance)))
        for c in solution.components
    ]
    mean = sum(w * v for w, v, _, _ in values)
    variance = sum(w * (sd**2 + (UNSEEN * unseen) ** 2 + (v - mean) ** 2) for w, v, sd, unseen in values)
    return float(mean), float(np.sqrt(variance))


def field_strain_energy(traction: TractionField, *, route: str = "real space") -> float:
    """Strain energy (J) of the mean traction of the whole field.

    Parameters
    ----------
    route
        ``real space`` sums T . u of the record, ``fourier`` applies Parseval's theorem to the padded fields,
        ``coefficients`` evaluates 1/2 c^T E c. They agree to rounding; the three exist to check one another.

    Raises
    ------
    InputError
        For an unknown route, or ``coefficients`` without a posterior.
    """
    area = traction.spacing**2
    if route == "real space":
        return 0.5 * area * float(np.sum(traction.traction * traction.displacement))
    if route == "fourier":
        shape = tuple(2 * n for n in traction.traction.shape[1:])
        kernel = node_kernel(traction.gel, traction.traction.shape[1:], traction.spacing, receiver="average")
        u = displacement(traction.gel, traction.traction, traction.spacing, kernel=kernel)
        t_hat, u_hat = (np.fft.fft2(a, s=shape) for a in (traction.traction, u))
        return float(0.5 * area * np.sum((t_hat.conj() * u_hat).real) / (shape[0] * shape[1]))
    if route == "coefficients":
        if traction.data is None or traction.posterior is None:
            raise InputError("this traction has no coefficients", code="no-posterior", remedy="use another route")
        c = traction.posterior.mean
        return 0.5 * float(c @ energy_matrix(traction.data, traction) @ c)
    raise InputError(f"route is '{route}'", code="unknown-route", remedy="use real space, fourier or coefficients")

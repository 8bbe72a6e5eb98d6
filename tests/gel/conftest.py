"""References from outside: the equations of a layer, solved by mpmath without any closed form."""

from __future__ import annotations

import mpmath
import pytest


def _layer_response(k, thickness, shear, poisson):
    """g_L and g_T by the transfer matrix of Navier's equations through the depth (mpmath.expm), bonded at the base.

    Plane strain u_x = U(z) cos kx, u_z = V(z) sin kx, s_xz = S(z) cos kx, s_zz = N(z) sin kx; Hooke's law and
    equilibrium give y' = A y for y = (U, V, S, N). Surface z = 0: N = 0 and S = -1 (a traction of +1 along x acts on
    the gel, whose outward normal is -z); base z = thickness: U = V = 0. Across the wave vector: u_y = U(z) cos kx
    likewise.
    """
    s = float(k) * float(thickness)
    with mpmath.workdps(40 + int(2 * s)):
        k, h, mu, nu = (mpmath.mpf(v) for v in (k, thickness, shear, poisson))
        matrix = mpmath.matrix(
            [
                [0, -k, 1 / mu, 0],
                [nu / (1 - nu) * k, 0, 0, (1 - 2 * nu) / (2 * mu * (1 - nu))],
                [k * k * 2 * mu / (1 - nu), 0, 0, -k * nu / (1 - nu)],
                [0, 0, k, 0],
            ]
        )
        transfer = mpmath.expm(matrix * h)
        top = mpmath.lu_solve(transfer[:2, :2], transfer[:2, 2])
        across = mpmath.expm(mpmath.matrix([[0, 1 / mu], [mu * k * k, 0]]) * h)
        return +top[0], across[0, 1] / across[0, 0]


@pytest.fixture(scope="session")
def layer_response():
    """``(k, thickness, shear modulus, nu) -> (g_L, g_T)`` as mpmath numbers."""
    return _layer_response

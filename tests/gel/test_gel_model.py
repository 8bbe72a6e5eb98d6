"""The gel's numbers: what is refused, and how their uncertainty is carried."""

from __future__ import annotations

from dataclasses import FrozenInstanceError, replace

import numpy as np
import pytest

import tfm.gel
from tfm.errors import InputError
from tfm.gel import Gel


def test_public_names():
    assert tfm.gel.__all__ == [
        "DipoleInteraction",
        "Gel",
        "SurfaceOperator",
        "dipole_displacement",
        "dipole_interaction",
        "dipole_interaction_derivatives",
        "dipole_strain",
        "displacement",
        "displacement_at",
        "fourier_response",
        "fourier_response_derivatives",
        "full_strain",
        "node_kernel",
        "node_kernel_derivatives",
        "node_strain_kernel",
        "strain_at",
        "surface_strain",
        "surface_tensor",
        "surface_tensor_derivatives",
        "surface_tensor_gradient",
        "surface_tensor_second_gradient",
    ]


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"youngs_modulus": 0.0}, r"youngs_modulus is 0, which is not above 0; give Young's modulus in Pa"),
        ({"youngs_modulus": float("nan")}, r"youngs_modulus is nan, not a finite number"),
        ({"youngs_modulus": "5 kPa"}, r"youngs_modulus is '5 kPa', not a number"),
        ({"youngs_modulus": True}, r"youngs_modulus is True, not a number"),
        ({"poisson": 0.51}, r"poisson is 0.51, outside 0 to 0.5; give a Poisson ratio"),
        ({"poisson": -0.01}, r"poisson is -0.01, outside 0 to 0.5"),
        ({"thickness": -3e-5}, r"thickness is -3e-05, which is not above 0; .* or None for infinitely thick"),
        ({"thickness": float("inf")}, r"thickness is inf, not a finite number; .* or None for infinitely thick"),
        ({"youngs_modulus_sd": -1.0}, r"youngs_modulus_sd is -1, below 0"),
        ({"poisson_sd": float("inf")}, r"poisson_sd is inf, not a finite number"),
        ({"thickness": None, "thickness_sd": 1e-6}, r"thickness_sd is 1e-06 but there is no thickness"),
        ({"modulus_poisson_correlation": 1.5}, r"modulus_poisson_correlation is 1.5, outside -1 to 1"),
    ],
)
def test_what_makes_no_sense_is_refused_with_name_value_and_remedy(change, message):
    good = Gel(5e3, 0.45, 30e-6)
    with pytest.raises(InputError, match=message):
        replace(good, **change)


def test_from_shear_modulus_refuses_too():
    with pytest.raises(InputError, match=r"shear_modulus is -1, which"):
        Gel.from_shear_modulus(-1.0, 0.4)
    with pytest.raises(InputError, match=r"poisson is 0\.6"):
        Gel.from_shear_modulus(1.0, 0.6)
    with pytest.raises(InputError, match="shear_modulus_sd is -2"):
        Gel.from_shear_modulus(1.0, 0.4, shear_modulus_sd=-2.0)
    with pytest.raises(InputError, match="poisson is 'x', not a number"):
        Gel.from_shear_modulus(1.0, "x")  # type: ignore[arg-type]


def test_moduli_are_those_of_a_handbook():
    # Common practice: an incompressible solid has E = 3 G, one with nu = 0 has E = 2 G.
    assert Gel(3000.0, 0.5).shear_modulus == pytest.approx(1000.0, rel=1e-15)
    assert Gel.from_shear_modulus(1000.0, 0.0).youngs_modulus == 2000.0


def test_a_gel_is_frozen_hashable_and_compares_by_value():
    gel = Gel(np.float64(5e3), np.float32(0.5), np.float64(3e-5))
    assert gel == Gel(5000.0, 0.5, 3e-5)
    assert hash(gel) == hash(Gel(5000.0, 0.5, 3e-5))
    assert type(gel.youngs_modulus) is float
    assert type(gel.poisson) is float
    with pytest.raises(FrozenInstanceError):
        gel.poisson = 0.4  # type: ignore[misc]


def test_covariance_of_a_gel_from_its_shear_modulus_matches_sampling():
    gel = Gel.from_shear_modulus(2e3, 0.4, 30e-6, shear_modulus_sd=60.0, poisson_sd=0.02, thickness_sd=2e-6)
    rng = np.random.default_rng(3)
    shear, nu = rng.normal(2e3, 60.0, 400_000), rng.normal(0.4, 0.02, 400_000)
    sampled = np.cov(2 * shear * (1 + nu), nu)
    np.testing.assert_allclose(gel.covariance[:2, :2], sampled, rtol=0.02)
    assert gel.covariance[2, 2] == pytest.approx(4e-12, rel=1e-12)
    # Only G matters to the transverse response: its relative error is that of G, whatever nu does.
    by = np.array([-1 / gel.youngs_modulus, 1 / (1 + gel.poisson), 0.0])  # d ln(1/G)
    assert np.sqrt(by @ gel.covariance @ by) == pytest.approx(0.03, rel=1e-9)

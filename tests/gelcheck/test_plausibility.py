"""Every slip is recognised, and plausible cells raise none."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tfm.gel import Gel
from tfm.gelcheck import plausibility, plausible_gel
from tfm.moments import CellDipole

GEL = Gel(6e3, 0.45, 30e-6)
#: An invented fibroblast-like cell: 1 pN m, 4 fJ, 300 Pa, 0.8 um under 900 um2 (common practice).
CELL = CellDipole(
    cell=1, centroid=np.zeros(2), area=900e-12, outline_axis=0.0, dipole=np.array([-0.7e-12, 0.0, -0.3e-12]),
    covariance=None, total_covariance=None, major=-0.7e-12, minor=-0.3e-12, axis=0.0, axis_sd=None, anisotropy=0.4,
    contractile_moment=1e-12, contractile_moment_sd=0.02e-12, contractile_moment_total_sd=None, net_force=0.0,
    torque=0.0, force_total=60e-9, strain_energy=4e-15, strain_energy_sd=None, traction_peak=300.0, traction_rms=80.0,
    displacement_peak=0.8e-6, budget={},
)  # fmt: skip


def scaled(stress: float = 1.0, length: float = 1.0, sign: float = 1.0) -> CellDipole:
    """The cell as a table would show it after a slip: stress as typed, lengths as typed."""
    volume = stress * length**3
    return replace(
        CELL, area=CELL.area * length**2, contractile_moment=sign * CELL.contractile_moment * volume,
        contractile_moment_sd=0.02e-12 * volume, strain_energy=CELL.strain_energy * volume,
        traction_peak=CELL.traction_peak * stress, displacement_peak=CELL.displacement_peak * length,
    )  # fmt: skip


def names(found):
    return {slip.name for outlier in found for slip in outlier.slips}


def test_plausible_cell_raises_nothing():
    assert plausibility(GEL, [CELL]) == ()
    assert plausible_gel(GEL) == ()


def test_kpa_typed_as_pa_gives_back_the_true_moment():
    found = plausibility(replace(GEL, youngs_modulus=6.0), [scaled(stress=1e-3)])
    assert names(found) == {"kPa typed as Pa"}
    slip = found[0].slips[0]
    assert slip.entry == pytest.approx(6e3)
    assert slip.values["contractile moment"] == pytest.approx(1e-12)
    assert "It would be 6 kPa" in found[0].sentence


def test_pa_typed_as_kpa():
    found = plausibility(replace(GEL, youngs_modulus=6e6), [scaled(stress=1e3)])
    assert "Pa typed as kPa" in names(found)
    assert found[0].slips[0].entry == pytest.approx(6e3)


def test_shear_modulus_typed_as_youngs_modulus_is_named_where_it_explains():
    found = plausible_gel(Gel(30.0, 0.5))
    shear = [s for o in found for s in o.slips if s.name == "shear modulus typed as Young's modulus"]
    assert shear[0].entry == pytest.approx(90.0)  # E = 3 G of an incompressible gel


def test_pixel_size_in_nm_typed_as_um():
    found = plausibility(replace(GEL, thickness=None), [scaled(length=1e3)], pixel_size=0.2e-3)
    assert "pixel size in nm typed as um" in names(found)
    assert next(s.entry for o in found for s in o.slips if "nm" in s.name) == pytest.approx(0.2e-6)


def test_pixel_size_off_by_a_magnification():
    found = plausibility(GEL, [scaled(length=1.0 / 10.0)])
    area = next(o for o in found if o.quantity == "cell area")
    assert area.slips
    assert all("magnification" in s.name for s in area.slips)


def test_thickness_in_nm():
    found = plausible_gel(replace(GEL, thickness=30e-9))
    assert found[0].slips[0].name == "thickness in um typed as nm"
    assert found[0].slips[0].entry == pytest.approx(30e-6)


def test_swapped_images_push_outwards():
    found = plausibility(GEL, [scaled(sign=-1.0)])
    assert found[0].slips[0].name == "relaxed and stressed image swapped"
    assert found[0].slips[0].values["contractile moment"] == pytest.approx(1e-12)


def test_faint_cell_of_either_sign_is_noise_not_a_slip():
    faint = replace(CELL, contractile_moment=-0.03e-12, strain_energy=1e-20, contractile_moment_sd=0.02e-12)
    assert plausibility(GEL, [faint]) == ()

"""The start: OpenPIV behind its adapter, drift, what stays hidden from the user."""

from __future__ import annotations

import subprocess
import sys
import warnings

import numpy as np
import pytest
from scipy.ndimage import map_coordinates

from tfm.displacement import estimate_drift, fit_rigid_motion, measure_displacement, piv_start
from tfm.displacement.drift import RigidMotion
from tfm.displacement.piv import local_median_outliers
from tfm.displacement.prepare import prepare_frame
from tfm.errors import InputError, MeasurementError


def test_uniform_shift_has_the_sign_and_frame_of_the_contract(make_pair) -> None:
    pair = make_pair(lambda x, y: np.stack([0 * x + 3.37, 0 * x - 1.2]), size=256)
    field = piv_start(pair.relaxed.astype(np.float32), pair.stressed.astype(np.float32))
    assert abs(np.nanmean(field.u[0]) - 3.37) < 0.02
    assert abs(np.nanmean(field.u[1]) + 1.2) < 0.02


def test_large_and_steep_displacement_belongs_to_the_relaxed_frame(make_pair) -> None:
    """22 px and 0.27 of strain: a vector at the place where the bead *was*, not where it went or half way."""

    def motion(x, y):
        hill = 22 * np.exp(-((x - 256) ** 2 + (y - 256) ** 2) / (2 * 50.0**2))
        return np.stack([hill, -0.3 * hill])

    pair = make_pair(motion, size=512)
    field = piv_start(pair.relaxed.astype(np.float32) - 110, pair.stressed.astype(np.float32) - 110)
    x, y = np.meshgrid(field.x, field.y)
    truth = motion(x, y)
    # What a field on the middle frame would read: x_mid = x + u(x) / 2 has the displacement of the bead at x.
    half = truth.copy()
    for _ in range(20):
        half = motion(x - half[0] / 2, y - half[1] / 2)
    moved = np.hypot(*truth) > 3
    error, wrong = field.u - truth, field.u - half
    assert field.valid[moved].mean() > 0.97
    rms, rms_wrong = (np.sqrt(np.nanmean(e[:, moved] ** 2)) for e in (error, wrong))
    assert rms < 0.2
    assert rms_wrong > 3 * rms


def test_nothing_is_printed_no_filter_changed_and_plotting_not_imported(make_pair, capfd) -> None:
    pair = make_pair(size=160)
    before = list(warnings.filters)
    measure_displacement(pair.relaxed, pair.stressed, 1e-7, mode="start")
    assert warnings.filters == before
    out, err = capfd.readouterr()
    assert out == ""
    assert err == ""
    code = (
        "import sys, numpy as np; from scipy.ndimage import gaussian_filter as g\n"
        "from tfm.displacement import piv_start\n"
        "a = g(np.random.default_rng(0).random((96, 96)), 1.5).astype('f4'); piv_start(a, a)\n"
        "sys.exit('matplotlib.pyplot' in sys.modules)"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_settings_record_library_version_and_passes(make_pair) -> None:
    from importlib.metadata import version

    pair = make_pair(size=200)
    field = measure_displacement(pair.relaxed, pair.stressed, 1e-7, mode="start")
    assert field.settings["openpiv"] == version("OpenPIV")
    assert {p["window_px"] for p in field.settings["passes"]} == {128, 64, 32}


def test_empty_ground_stays_without_vectors(make_pair) -> None:
    pair = make_pair(keep=lambda p: p[:, 0] > 120)
    for mode in ("start", "full"):
        field = measure_displacement(pair.relaxed, pair.stressed, 1.0, mode=mode)
        bare, full = field.x < 90, field.x > 140
        assert not field.valid[:, bare].any()
        assert np.isnan(field.u[:, :, bare]).all()
        assert (field.precision[:, :, bare] == 0).all()
        assert field.valid[:, full].mean() > 0.97
        assert field.rejected == (~field.valid).sum()


def test_images_that_do_not_match_are_an_error_with_a_remedy(make_pair) -> None:
    first, second = make_pair(size=128, seed=1), make_pair(size=128, seed=2)
    with pytest.raises(MeasurementError, match="no-match"):
        measure_displacement(first.relaxed, second.relaxed, 1e-7)
    with pytest.raises(MeasurementError, match="blank-image"):
        measure_displacement(np.full((96, 96), 7.0), first.relaxed[:96, :96], 1e-7)
    with pytest.raises(InputError, match="shape-mismatch"):
        measure_displacement(first.relaxed, first.stressed[:100], 1e-7)
    with pytest.raises(InputError, match="bad-pixel-size"):
        measure_displacement(first.relaxed, first.stressed, 0.0)


def test_drift_from_quiet_ground_does_not_follow_the_cell(make_pair, quiet) -> None:
    def motion(x, y):  # a third of the picture pulled the same way
        return np.stack([3 * np.exp(-((x - 160) ** 2 + (y - 160) ** 2) / (2 * 45.0**2)), 0 * x])

    pair = make_pair(motion, drift=(2.4, -1.3))
    frames = (pair.relaxed.astype(np.float32), pair.stressed.astype(np.float32))
    far = np.hypot(*(np.indices((320, 320)) - 160)) > 130
    with_ground = np.array(estimate_drift(*frames, quiet=far).shift)
    assert np.abs(with_ground - [2.4, -1.3]).max() < 0.05
    # Untreated, the plain mean of all vectors is pulled along by the cell.
    start = piv_start(frames[0] - 110, frames[1] - 110)
    assert abs(np.nanmean(start.u[0]) - 2.4) > 0.2


def test_rigid_motion_fit_recovers_turn_and_scale_with_outliers() -> None:
    rng = np.random.default_rng(0)
    x, y = rng.uniform(0, 500, (2, 400))
    truth = RigidMotion((1.5, -0.5), rotation=0.01, magnification=1.002, centre=(250.0, 250.0))
    u = truth.at(x, y) + rng.normal(0, 0.02, (2, 400))
    u[:, :40] += 5
    found = fit_rigid_motion(x, y, u, np.ones(400), rotation=True, magnification=True)
    assert abs(found.rotation - 0.01) < 1e-4
    assert abs(found.magnification - 1.002) < 1e-4
    assert np.abs(found.at(x, y) - truth.at(x, y)).max() < 0.1


def test_drift_against_phase_correlation_of_scikit_image(make_pair) -> None:
    """Outside reference: skimage.registration.phase_cross_correlation on a rigid shift."""
    from skimage.registration import phase_cross_correlation

    pair = make_pair(lambda x, y: np.stack([0 * x + 5.43, 0 * x - 2.81]), size=256)
    field = measure_displacement(pair.relaxed, pair.stressed, 1.0)
    outside = -phase_cross_correlation(
        pair.relaxed.astype(float), pair.stressed.astype(float), upsample_factor=100, normalization=None
    )[0][::-1]
    assert np.abs(field.drift - outside).max() < 0.02
    assert np.abs(field.drift - [5.43, -2.81]).max() < 0.01


def test_median_test_finds_planted_vectors_and_keeps_a_steep_gradient() -> None:
    x, y = np.meshgrid(np.arange(20.0), np.arange(20.0))
    u = np.stack([1.6 * x, -0.8 * y]) + np.random.default_rng(0).normal(0, 0.03, (2, 20, 20))
    u[0, 5, 5] += 8
    u[1, 12, 3] -= 8
    found = local_median_outliers(u, np.ones((20, 20), bool))
    assert found[5, 5]
    assert found[12, 3]
    inner = found[1:-1, 1:-1]
    assert inner.sum() == 2


def test_composition_not_addition_at_steep_strain(make_pair) -> None:
    """The field that brings the stressed frame back must bring it back: check on the noise-free images themselves."""
    pair = make_pair(size=320, photons=20000.0)
    field = measure_displacement(pair.relaxed, pair.stressed, 1.0)
    at = [field.y[:, None] + field.u[1] + field.drift[1], field.x[None, :] + field.u[0] + field.drift[0]]
    back = map_coordinates(pair.stressed.astype(float), np.nan_to_num(np.stack(at)), order=3, mode="nearest")
    here = map_coordinates(pair.relaxed.astype(float), np.meshgrid(field.y, field.x, indexing="ij"), order=3)
    assert np.corrcoef(back[3:-3, 3:-3].ravel(), here[3:-3, 3:-3].ravel())[0, 1] > 0.99


def test_public_names() -> None:
    import tfm.displacement as room

    assert room.__all__ == sorted(room.__all__, key=lambda name: (not name.isupper(), not name[0].isupper(), name))
    assert {"measure_displacement", "DisplacementField", "estimate_drift", "piv_start"} <= set(room.__all__)
    assert all(hasattr(room, name) for name in room.__all__)


def test_windows_are_centred_where_the_grid_says(make_pair) -> None:
    """Half a pixel off, as OpenPIV's own single-pass coordinates are, reads 0.05 px wrong at a stretch of 0.1."""

    def motion(x, y):
        hill = np.exp(-((x - 160) ** 2 + (y - 160) ** 2) / (2 * 60.0**2))
        return np.stack([0.1 * (x - 160) * hill, 0.1 * (y - 160) * hill])

    pair = make_pair(motion, photons=3000.0, density=0.03)
    start = piv_start(prepare_frame(pair.relaxed).image, prepare_frame(pair.stressed).image, spacing_px=8)
    full = measure_displacement(pair.relaxed, pair.stressed, 1.0)
    for x, y, u in ((start.x, start.y, start.u), (full.x, full.y, full.u + full.drift[:, None, None])):
        error = u - motion(*np.meshgrid(x, y))
        middle = np.ix_([0, 1], np.abs(y - 160) < 45, np.abs(x - 160) < 45)
        assert np.abs(np.nanmean(error[middle], axis=(1, 2))).max() < 0.015

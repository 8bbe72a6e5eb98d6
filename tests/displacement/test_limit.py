"""Displacement at the limit: error against the Cramer-Rao bound and against OpenPIV, precision against error."""

from __future__ import annotations

import numpy as np
import pytest

from tfm.displacement import measure_displacement


def cramer_rao(pair, field, width: int = 32) -> np.ndarray:
    """Smallest possible rms error (px) of one component for a plain ``width`` px square around every node.

    Both frames carry noise and the scene is unknown, so the information of a pixel is g g^T / (var_a + var_b), with the
    exact gradient and the exact variances (Kay, Fundamentals of Statistical Signal Processing, 1993, ch. 3).
    """
    gx, gy = pair.gradients()
    bound = np.full((len(field.y), len(field.x)), np.nan)
    for i, y in enumerate(np.rint(field.y).astype(int)):
        for j, x in enumerate(np.rint(field.x).astype(int)):
            rows, cols = slice(y - width // 2, y + width // 2), slice(x - width // 2, x + width // 2)
            if rows.start < 0 or cols.start < 0 or rows.stop > pair.size or cols.stop > pair.size:
                continue
            a, b, v = gx[rows, cols], gy[rows, cols], pair.variance[rows, cols]
            h = np.array([[(a * a / v).sum(), (a * b / v).sum()], [(a * b / v).sum(), (b * b / v).sum()]])
            bound[i, j] = np.sqrt(np.trace(np.linalg.inv(h)) / 2)
    return bound


def test_quiet_ground_error_is_within_15_percent_of_the_bound(make_pair) -> None:
    ratios = []
    for seed in range(2):
        pair = make_pair(lambda x, y: np.stack([0 * x + 0.4, 0 * x - 0.3]), seed=seed)
        field = measure_displacement(pair.relaxed, pair.stressed, 1.0)
        error = field.u + field.drift[:, None, None] - np.array([0.4, -0.3])[:, None, None]
        # The window that the room chose, as the square whose average is as noisy.
        width = round(5 / 3 * field.settings["window_radius_px"][0])
        bound = cramer_rao(pair, field, width)
        inner = np.isfinite(bound)
        ratios.append(np.mean(error[:, inner] ** 2) / np.mean(bound[inner] ** 2))
    assert 0.9 < np.sqrt(np.mean(ratios)) < 1.15


def test_precision_is_true_on_quiet_ground_and_on_the_hill(make_pair, quiet) -> None:
    far, near = [], []
    for seed in range(3):
        pair = make_pair(seed=seed)
        field = measure_displacement(pair.relaxed, pair.stressed, 1.0, quiet=quiet)
        z, r = pair.surprise(field), pair.radius(field)
        far.append(z[field.valid & (r > 100)].mean())
        near.append(z[field.valid & (r < 50)].mean())
    assert 0.85 < np.mean(far) < 1.15
    assert 0.8 < np.mean(near) < 1.3


def test_noise_on_quiet_ground_is_reported(make_pair, quiet) -> None:
    pair = make_pair()
    field = measure_displacement(pair.relaxed, pair.stressed, 1.0, quiet=quiet)
    error = pair.error(field)[:, field.valid & (pair.radius(field) > 100)]
    assert field.noise == pytest.approx(np.sqrt(np.mean(error**2)), rel=0.25)


@pytest.mark.parametrize("shift", [0.0, 0.3, 0.5])
def test_no_peak_locking(make_pair, shift: float) -> None:
    pair = make_pair(lambda x, y: np.stack([0 * x + shift, 0 * x]), size=256, photons=4000.0, density=0.03)
    field = measure_displacement(pair.relaxed, pair.stressed, 1.0)
    mean = (field.u + field.drift[:, None, None])[:, field.valid].mean(axis=1)
    assert np.abs(mean - [shift, 0.0]).max() < 0.005


def test_under_the_cell_error_is_at_most_four_tenths_of_openpiv(make_pair, openpiv_windef) -> None:
    """Narrow, steep pulls as adhesions make them: peak 6 px over 14 px."""

    def motion(x, y):
        u = np.zeros((2, *np.shape(x)))
        for cx, cy, px, py in ((110, 150, 6, 1), (210, 170, -6, -1), (160, 100, 1, 5), (150, 220, -1, -5)):
            hill = np.exp(-((x - cx) ** 2 + (y - cy) ** 2) / (2 * 14.0**2))
            u += np.stack([px * hill, py * hill])
        return u

    pair = make_pair(motion)
    field = measure_displacement(pair.relaxed, pair.stressed, 1.0)
    x, y, u = openpiv_windef(pair.relaxed, pair.stressed)

    def rms(error, gx, gy):
        strained = np.hypot(*motion(gx, gy)) > 1
        return np.sqrt(np.nanmean(error[:, strained] ** 2))

    here = np.meshgrid(field.x, field.y)
    ours = rms(field.u + field.drift[:, None, None] - motion(*here), *here)
    theirs = rms(u - motion(*np.meshgrid(x, y)), *np.meshgrid(x, y))
    assert ours < 0.4 * theirs


def test_strained_bead_images_are_corrected(make_pair, bump, monkeypatch) -> None:
    """A bead's image is not strained with the gel; forgetting it costs precision that photons would give."""
    import tfm.displacement.refine as refine

    pair = make_pair(bump(320, 12.0, 40.0), photons=5000.0, density=0.03)

    def rms() -> float:
        field = measure_displacement(pair.relaxed, pair.stressed, 1.0)
        error, r = pair.error(field) + field.drift[:, None, None], pair.radius(field)
        return float(np.sqrt(np.nanmean(error[:, (r > 20) & (r < 65)] ** 2)))  # strain up to 0.18

    treated = rms()
    monkeypatch.setattr(refine, "_shared_width", lambda a, b: 0.0)
    assert rms() > 1.2 * treated


def test_camera_gain_and_offset_are_measured(make_pair) -> None:
    from tfm.synth import Camera

    pair = make_pair(size=384, camera=Camera(gain=2.5, offset=200.0, read_noise=2.0, background=20.0))
    field = measure_displacement(pair.relaxed, pair.stressed, 1.0)
    c0, c1 = field.settings["camera_noise"]
    assert c1 == pytest.approx(2.5, rel=0.08)
    # Dark ground at 200 + 2.5 * 20 counts: photon noise 2.5^2 * 20, read noise 2.5^2 * 4.
    assert c0 + c1 * 250 == pytest.approx(150.0, rel=0.08)


def test_independent_area_counts_what_windows_share(make_pair) -> None:
    pair = make_pair(size=256)
    fine, coarse = (measure_displacement(pair.relaxed, pair.stressed, 1.0, spacing_px=s) for s in (8, 16))
    # Twice as fine a grid holds four times as many vectors and no more information.
    assert fine.valid.sum() > 3.5 * coarse.valid.sum()
    assert fine.independent_area == pytest.approx(coarse.independent_area, rel=0.1)


def test_units_are_metres_and_scale_with_the_pixel(make_pair) -> None:
    pair = make_pair(size=200)
    one, two = (measure_displacement(pair.relaxed, pair.stressed, s) for s in (1e-7, 2e-7))
    both = one.valid & two.valid
    np.testing.assert_allclose(two.u[:, both], 2 * one.u[:, both], rtol=1e-9)
    np.testing.assert_allclose(two.precision[:, both], one.precision[:, both] / 4, rtol=1e-9)
    for name in ("noise", "drift", "x", "y"):
        np.testing.assert_allclose(getattr(two, name), 2 * np.asarray(getattr(one, name)), rtol=1e-9)
    assert two.independent_area == pytest.approx(4 * one.independent_area)


def test_exchanging_the_frames_turns_the_displacement_round(make_pair) -> None:
    pair = make_pair(lambda x, y: np.stack([0 * x + 0.62, 0 * x - 0.31]), size=256)
    there = measure_displacement(pair.relaxed, pair.stressed, 1.0)
    back = measure_displacement(pair.stressed, pair.relaxed, 1.0)
    np.testing.assert_allclose(there.drift, -back.drift, atol=0.003, rtol=0)

"""What real microscopes do: for each imperfection the untreated image gives a wrong answer and the treated one does
not."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.ndimage import gaussian_filter

import tfm.displacement.prepare as prepare
import tfm.displacement.refine as refine
from tfm.displacement import measure_displacement
from tfm.displacement.match import BrightnessSums
from tfm.displacement.prepare import bead_width, prepare_frame, sharpest_plane
from tfm.displacement.quality import QUALITY_LIMITS, judge_quality
from tfm.errors import MeasurementError, TfmError
from tfm.synth import Camera


def judged(pair, quiet, **options):
    """rms error (px) of valid vectors, their mean squared error over variance, share of vectors, the field."""
    field = measure_displacement(pair.relaxed, pair.stressed, 1.0, quiet=quiet, **options)
    error, z = pair.error(field)[:, field.valid], pair.surprise(field)[field.valid]
    return np.sqrt(np.mean(error**2)), z.mean(), field.valid.mean(), field


def test_uneven_illumination_and_background(make_pair, quiet, monkeypatch) -> None:
    """A lamp that falls to a fifth towards the corners, 400 photons of background, beads of 1000 photons, drift."""
    pair = make_pair(uneven=0.8, camera=Camera(background=400.0), drift=(6.4, -4.3), photons=1000.0)
    rms, z, share, field = judged(pair, quiet)
    assert rms < 0.12
    assert z < 1.3
    assert share > 0.98
    assert np.abs(field.drift - [6.4, -4.3]).max() < 0.03
    monkeypatch.setattr(prepare, "_smooth_background", lambda raw: np.zeros(raw.shape, np.float32))
    bad_rms, bad_z, bad_share, _ = judged(pair, quiet)
    assert bad_rms > 1.5 * rms
    assert bad_z > 1.3 * z
    assert bad_share < 0.97


@pytest.mark.parametrize("brightness", [0.5, 2.0])
def test_brightness_change(make_pair, quiet, monkeypatch, brightness: float) -> None:
    pair = make_pair(brightness=brightness)
    rms, z, share, field = judged(pair, quiet)
    assert rms < 0.08
    assert z < 1.25
    assert share > 0.98
    assert any("brightness changed" in note for note in field.notes)
    monkeypatch.setattr(BrightnessSums, "maps", lambda s: (np.ones(s.shape, np.float32), np.zeros(s.shape, np.float32)))
    monkeypatch.setattr(refine, "brightness_ratio", lambda a, b: np.float32(1))
    try:
        bad_rms, _, bad_share, _ = judged(pair, quiet)
    except MeasurementError:
        return
    assert bad_rms > 1.8 * rms or bad_share < 0.9


def test_hot_pixels_do_not_hold_the_displacement(make_pair, quiet, monkeypatch) -> None:
    pair = make_pair(hot_pixels=0.008, drift=(1.4, 0.7))
    rms, z, share, field = judged(pair, quiet)
    assert rms < 0.07
    assert z < 1.3
    assert share > 0.98
    assert field.settings["quality"]["hot_pixels"] > 400
    monkeypatch.setattr(prepare, "_hot_pixels", lambda raw: np.zeros(raw.shape, bool))
    bad_rms, _, bad_share, _ = judged(pair, quiet)
    assert bad_rms > 2.5 * rms
    assert bad_share < share


def test_saturated_beads_do_not_spoil_the_error_bar(make_pair, quiet) -> None:
    """A plateau has no noise: untreated, the camera looks as if photons made none, and the error bars go astray."""
    pair = make_pair(photons=2000.0, drift=(0.5, 0.3))
    for image in (pair.relaxed, pair.stressed):
        np.minimum(image, 160, out=image)
    rms, z, share, field = judged(pair, quiet)
    assert share > 0.98
    assert rms < 0.06
    assert 0.6 < z < 1.2
    assert any("saturated" in note for note in field.notes)
    assert 0.3 < field.settings["camera_noise"][1] < 1.5
    untreated = measure_displacement(pair.relaxed, pair.stressed, 1.0, quiet=quiet, saturation=1e9)
    assert untreated.settings["camera_noise"][1] < 0.1


def test_lost_and_new_beads(make_pair, quiet, monkeypatch) -> None:
    pair = make_pair(lost=0.08, new=0.08)
    rms, z, _, field = judged(pair, quiet)
    assert rms < 0.09
    assert z < 1.35
    assert any("only one of the images has" in note for note in field.notes)
    monkeypatch.setattr(refine, "_REJECT", np.inf)
    bad_rms, _, _, _ = judged(pair, quiet)
    assert bad_rms > 1.7 * rms


def test_rotation_and_magnification_on_request(make_pair, quiet) -> None:
    pair = make_pair(rotation=0.01)
    rms, z, _, field = judged(pair, quiet, rotation=True, magnification=True)
    assert rms < 0.07
    assert z < 1.4
    assert field.settings["rotation_rad"] == pytest.approx(0.01, abs=2e-4)
    assert field.settings["magnification"] == pytest.approx(1.0, abs=2e-4)
    untreated, _, _, _ = judged(pair, quiet)
    assert untreated > 0.5


def test_focus_change_is_seen_and_does_not_bias(make_pair, quiet) -> None:
    pair = make_pair(defocus=1.4)
    rms, z, _, field = judged(pair, quiet)
    assert rms < 0.13
    assert z < 1.35
    assert any("refocus" in note for note in field.notes)
    assert field.settings["quality"]["focus_change"] == pytest.approx(0.4, abs=0.06)
    sharp = judged(make_pair(), quiet)[3]
    assert not any("refocus" in note for note in sharp.notes)


def test_sharpest_plane_of_a_stack(make_pair, quiet) -> None:
    """The plane chosen, and that the choice matters: from the blurred plane the answer is several times worse."""
    from dataclasses import replace

    pair = make_pair()
    blurred = gaussian_filter(pair.stressed.astype(float), 4.0) + np.random.default_rng(0).normal(0, 3, (320, 320))
    stack = np.stack([blurred, pair.stressed.astype(float), gaussian_filter(pair.stressed.astype(float), 2.0)])
    assert sharpest_plane(stack) == 1
    treated = judged(replace(pair, stressed=stack[sharpest_plane(stack)]), quiet)[0]
    try:
        untreated = judged(replace(pair, stressed=stack[0]), quiet)[0]
    except MeasurementError:
        return
    assert untreated > 2 * treated


def test_masked_ground_holds_no_vectors(make_pair, quiet) -> None:
    pair = make_pair(drift=(2.0, 0.0))
    for image in (pair.relaxed, pair.stressed):
        image[:, :80] = 0
    rms, z, _, field = judged(pair, quiet)
    assert not field.valid[:, field.x < 60].any()
    assert field.valid[:, field.x > 100].mean() > 0.97
    assert rms < 0.12
    assert z < 1.3
    assert np.abs(field.drift - [2.0, 0.0]).max() < 0.05


def test_not_finite_pixels_take_no_part(make_pair, quiet) -> None:
    pair = make_pair()
    relaxed = pair.relaxed.astype(float)
    relaxed[100:104, 50:60] = np.nan
    field = measure_displacement(relaxed, pair.stressed, 1.0, quiet=quiet)
    assert np.sqrt(np.nanmean(pair.error(field) ** 2)) < 0.07


def test_image_edges_are_measured_and_honest(make_pair, quiet) -> None:
    """Beads leave by one edge and come in by the other; vectors at the rim have larger, true error bars."""
    z = []
    for seed in range(2):
        pair = make_pair(drift=(7.0, -5.0), seed=seed)
        field = measure_displacement(pair.relaxed, pair.stressed, 1.0, quiet=quiet)
        rim = np.ones(field.valid.shape, bool)
        rim[2:-2, 2:-2] = False
        z.append(pair.surprise(field)[rim & field.valid].mean())
        # The column of nodes that moved out of the picture cannot be known as well as the others.
        out, inside = field.precision[0][:, -1], field.precision[0][:, 20]
        assert np.median(out) < 0.5 * np.median(inside)
    assert np.mean(z) < 1.4


def test_bead_width_from_noisy_frames(make_pair) -> None:
    pair = make_pair(sigma=1.6, size=384)
    # A pixel adds 1/12 to the variance of what it integrates.
    assert bead_width(prepare_frame(pair.relaxed).image) == pytest.approx(np.sqrt(1.6**2 + 1 / 12), rel=0.05)


@pytest.mark.parametrize("name", ["signal_to_noise", "beads_per_window", "noise_px"])
def test_poor_images_get_a_sentence_that_says_what_to_do(make_pair, quiet, name: str) -> None:
    poor = {
        "signal_to_noise": {"photons": 60.0},
        "beads_per_window": {"density": 0.004},
        "noise_px": {"photons": 60.0},
    }[name]
    good = measure_displacement(*frames(make_pair()), 1.0, quiet=quiet)
    bad = measure_displacement(*frames(make_pair(**poor)), 1.0, quiet=quiet, mode="start")
    limit, side = QUALITY_LIMITS[name]
    value = bad.settings["quality"][name]
    assert (value > limit) if side == "above" else (value < limit)
    assert not good.notes
    assert bad.notes


def frames(pair):
    return pair.relaxed, pair.stressed


def test_every_limit_speaks(make_pair) -> None:
    frame = prepare_frame(make_pair(size=96).relaxed)
    fine = judge_quality(frame, frame, noise_px=0.02, rejected_share=0.0, drift_px=1.0, lost_share=0.0)
    assert not fine.caution
    assert fine.beads_per_window == pytest.approx(1024 * 0.02, rel=0.4)
    for name, value in {"noise_px": 0.3, "rejected_share": 0.4, "drift_px": 60.0, "lost_share": 0.2}.items():
        given = {"noise_px": 0.02, "rejected_share": 0.0, "drift_px": 1.0, "lost_share": 0.0, name: value}
        notes = judge_quality(frame, frame, **given).notes
        assert len(notes) == 1
        assert ":" in notes[0]


def test_too_small_or_not_an_image() -> None:
    with pytest.raises(TfmError, match="image-too-small"):
        prepare_frame(np.zeros((20, 20)))
    with pytest.raises(TfmError, match="bad-stack"):
        sharpest_plane(np.zeros((20, 20)))

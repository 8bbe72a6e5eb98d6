"""Planning against textbook bounds, scaling laws, and the scatter of repeated invented measurements."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tfm.errors import InputError
from tfm.gel import Gel
from tfm.population import plan
from tfm.population.plan import Setup, bead_information, expected_errors, improvements
from tfm.synth import Camera, expected_photons, make_bead_image

SETUP = Setup(
    gel=Gel(5e3, 0.45),
    pixel_size=0.4e-6,
    field_px=160,
    beads_per_area=0.12e12,
    photons=500,
    bead_sigma=0.5e-6,
    background=8,
    read_noise=1.5,
    cell_length=24e-6,
    cell_width=12e-6,
    contractile_moment=0.3e-12,
    distance=50e-6,
)
FAST = {"cells": 1, "most_coefficients": 100}


def test_information_is_the_scatter_of_a_maximum_likelihood_shift():
    # One bead, two noisy frames, shift by maximum likelihood on a grid: its variance is what the bound promises.
    rng = np.random.default_rng(0)
    sigma, photons, camera = 1.3, 800.0, Camera(read_noise=0.0, background=5.0, offset=0.0)
    place = np.array([[10.2, 9.9]])
    light = np.array([photons])
    grid = np.linspace(-0.4, 0.4, 161)
    models = np.array([expected_photons((21, 21), place + np.array([[s, 0.0]]), light, sigma) + 5.0 for s in grid])
    logs = np.log(models)

    def estimate():
        counts = make_bead_image(models[80], camera, rng)[0].astype(float)
        score = (counts * logs - models).sum(axis=(1, 2))
        k = int(np.clip(score.argmax(), 1, 159))
        a, b, c = score[k - 1 : k + 2]
        return grid[k] + 0.5 * (a - c) / (a - 2 * b + c) * (grid[1] - grid[0])

    shifts = np.array([estimate() - estimate() for _ in range(600)])
    promised = bead_information(1e-9, photons, sigma, 5.0, 0.0, brightness_spread=0.0) / 1e-9
    assert shifts.var() == pytest.approx(1 / promised, rel=0.15)


def test_four_times_the_light_halves_the_error():
    dark = replace(SETUP, read_noise=0.0)
    base = expected_errors(dark, **FAST)
    # Without read noise Poisson light is all there is: four times the exposure is four times the information.
    longer = expected_errors(replace(dark, photons=4 * dark.photons, background=4 * dark.background), **FAST)
    assert base.displacement_noise / longer.displacement_noise == pytest.approx(2.0, rel=1e-9)
    assert base.moment_sd / longer.moment_sd == pytest.approx(2.0, rel=0.15)
    # The same forces move a gel of half the stiffness twice as far.
    softer = expected_errors(replace(dark, gel=Gel(2.5e3, 0.45)), **FAST)
    assert base.moment_sd / softer.moment_sd == pytest.approx(2.0, rel=0.15)
    # More beads help less than their number, because they begin to overlap.
    crowded = expected_errors(replace(dark, beads_per_area=4 * dark.beads_per_area), **FAST)
    assert 1.2 < base.moment_sd / crowded.moment_sd < 2.0


def test_the_scatter_of_repeats_is_what_was_promised():
    # The same invented cell measured again and again with new noise: spread of the estimates against the expected one.
    cell = plan._invented_cells(SETUP, 1, 1)[0]
    per_px2 = SETUP.beads_per_area * SETUP.pixel_size**2
    information = bead_information(per_px2, 500, 1.25, 8, 1.5) / SETUP.pixel_size**4
    trace = np.array([-1.0, 0.0, -1.0])
    rng = np.random.default_rng(3)
    found = [plan._measure(SETUP, cell, information, 100, rng) for _ in range(24)]
    z = np.array([(trace @ m.estimate - 0.3e-12) / np.sqrt(trace @ m.covariance @ trace) for m in found])
    scatter = np.std([trace @ m.estimate for m in found])
    promised = np.median([np.sqrt(trace @ m.covariance @ trace) for m in found])
    assert scatter == pytest.approx(promised, rel=0.45)
    assert abs(z.mean()) < 1.5


def test_the_smallest_moment_is_three_of_its_errors():
    base = expected_errors(SETUP, **FAST)
    assert base.smallest_moment < SETUP.contractile_moment
    at_limit = expected_errors(replace(SETUP, contractile_moment=base.smallest_moment), **FAST)
    assert 3 * at_limit.moment_sd == pytest.approx(base.smallest_moment, rel=0.3)


def test_the_pair_energy_is_that_of_point_dipoles_and_its_error_scales():
    near = expected_errors(SETUP, **FAST)
    far = expected_errors(replace(SETUP, distance=100e-6), **FAST)
    # On a half-space the energy of point dipoles falls as 1/r^3.
    assert near.pair_energy / far.pair_energy == pytest.approx(8, rel=1e-6)
    assert near.pair_energy_sd / far.pair_energy_sd == pytest.approx(8, rel=1e-2)
    assert near.pair_energy < 0
    assert expected_errors(replace(SETUP, distance=None), **FAST).pair_energy is None


def test_every_improvement_changes_one_thing_and_keeps_the_cell():
    changed = improvements(SETUP)
    assert changed["as asked"] == SETUP
    assert changed["half the pixel"].field_px * changed["half the pixel"].pixel_size == pytest.approx(64e-6)
    for setup in changed.values():
        assert (setup.cell_length, setup.contractile_moment) == (SETUP.cell_length, SETUP.contractile_moment)


def test_what_makes_no_sense_is_refused():
    with pytest.raises(InputError, match="photons is 0"):
        expected_errors(replace(SETUP, photons=0), **FAST)
    with pytest.raises(InputError, match="read_noise is -1"):
        expected_errors(replace(SETUP, read_noise=-1), **FAST)
    with pytest.raises(InputError, match="does not fit a field"):
        expected_errors(replace(SETUP, cell_length=60e-6), **FAST)

"""Beats of known traces: invented waves whose period, amplitude and slopes are known by construction."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import signal

from tfm.errors import InputError
from tfm.population.beats import beat_pair, measure_beat

SD = 2e-14


def wave(t, period=1.4, sharp=2.0):
    """Fast rise, slow relaxation: exp(sharp * cos) skewed; returns values between 0 and 1."""
    phase = 2 * np.pi * t / period
    return np.exp(sharp * (np.cos(phase + 0.5 * np.sin(phase)) - 1))


def trace(seed, period=1.4, amplitude=0.5e-12, seconds=24.0, step=0.06, sd=SD):
    rng = np.random.default_rng(seed)
    t = np.arange(0, seconds, step)
    w = wave(t, period)
    y = 1e-12 + amplitude * (w - w.min()) / np.ptp(wave(np.linspace(0, period, 5000), period)) + 1e-14 * t
    return t, y + sd * rng.normal(size=t.size), np.full(t.size, sd)


def test_period_amplitude_and_rates_are_covered_by_their_errors():
    fine = np.linspace(0, 1.4, 20001)
    w = wave(fine) / np.ptp(wave(fine)) * 0.5e-12
    rate = np.gradient(w, fine)
    truth = {"period": 1.4, "amplitude": 0.5e-12, "rise_rate": rate.max(), "relaxation_rate": -rate.min()}
    z = {name: [] for name in truth}
    for seed in range(25):
        beat = measure_beat(*trace(seed))
        assert beat.beating
        for name, value in truth.items():
            z[name].append((getattr(beat, name) - value) / getattr(beat, name + "_sd"))
        assert beat.misfit == pytest.approx(1.0, abs=0.35)
    assert np.std(z["period"]) == pytest.approx(1.0, abs=0.35)
    for name in ("amplitude", "rise_rate", "relaxation_rate"):
        # Harmonics below the noise are left out, which costs a little of the peak.
        assert np.sqrt(np.mean(np.square(z[name]))) < 1.7, name


def test_noise_is_hardly_ever_called_a_beat():
    rng = np.random.default_rng(3)
    t = np.arange(120) * 0.5
    found = sum(measure_beat(t, 1e-12 + SD * rng.normal(size=120), np.full(120, SD)).beating for _ in range(100))
    assert found <= 5
    silent = measure_beat(t, 1e-12 + SD * rng.normal(size=120), np.full(120, SD))
    assert (silent.period, silent.amplitude) == (None, None)
    assert silent.notes


def test_a_faint_beat_is_found_at_the_frequency_of_the_periodogram():
    t, y, sd = trace(1, amplitude=3e-14)
    beat = measure_beat(t, y, sd)
    frequency, power = signal.periodogram(signal.detrend(y), 1 / (t[1] - t[0]))
    assert beat.beating
    assert 1 / beat.period == pytest.approx(frequency[power.argmax()], abs=1 / t[-1])
    assert abs(beat.period - 1.4) < 4 * beat.period_sd


def test_a_beat_with_a_strong_second_harmonic_is_not_read_twice_too_fast():
    t = np.arange(0, 30, 0.08)
    y = 1e-12 + 1e-13 * np.cos(2 * np.pi * t / 2.0) + 3e-13 * np.cos(4 * np.pi * t / 2.0 + 0.4)
    rng = np.random.default_rng(0)
    beat = measure_beat(t, y + SD * rng.normal(size=t.size), np.full(t.size, SD))
    assert beat.period == pytest.approx(2.0, rel=1e-2)


def test_missing_frames_do_no_harm():
    t, y, sd = trace(2)
    keep = np.random.default_rng(1).uniform(size=t.size) > 0.3
    beat = measure_beat(t[keep], y[keep], sd[keep])
    assert abs(beat.period - 1.4) < 4 * beat.period_sd


def test_irregular_beats_show_in_the_intervals():
    rng = np.random.default_rng(5)
    t = np.arange(0, 40, 0.05)
    times = np.cumsum(1.5 + 0.12 * rng.normal(size=30))
    y = 1e-12 + 5e-13 * np.exp(-((t[:, None] - times[None]) ** 2) / (2 * 0.15**2)).sum(axis=1)
    beat = measure_beat(t, y + 5e-15 * rng.normal(size=t.size), np.full(t.size, 5e-15))
    true = np.diff(times[times < 40]).std(ddof=1)
    assert beat.interval_sd == pytest.approx(true, rel=0.3)
    assert any("differ" in note for note in beat.notes)


def test_the_lag_of_a_follower_is_positive_and_covered():
    z = []
    for seed in range(40):
        rng = np.random.default_rng(seed)
        t = np.arange(0, 60, 0.1)
        one, two = wave(t, 1.5), wave(t - 0.25, 1.5)
        pair = beat_pair(t, one + 0.3 * rng.normal(size=t.size), two + 0.3 * rng.normal(size=t.size), 1 / 1.5)
        assert pair.coherence_significant
        z.append((pair.lag - 0.25) / pair.lag_sd)
    assert np.sqrt(np.mean(np.square(z))) < 1.6
    assert abs(np.mean(z)) < 1.0
    back = beat_pair(t, two, one, 1 / 1.5)
    assert back.lag < 0


def test_unrelated_cells_are_seldom_called_coherent():
    rng = np.random.default_rng(9)
    t = np.arange(0, 120, 0.2)
    found = 0
    for _ in range(100):
        found += beat_pair(t, rng.normal(size=t.size), rng.normal(size=t.size), 0.5).coherence_significant
    assert 1 <= found <= 13


def test_what_cannot_be_a_trace_is_refused():
    with pytest.raises(InputError, match="differ in length"):
        measure_beat([0, 1, 2], [1, 2], [1, 1])
    with pytest.raises(InputError, match="do not increase"):
        measure_beat([0, 2, 1], [1, 2, 3], [1, 1, 1])
    with pytest.raises(InputError, match="not finite"):
        measure_beat([0, 1, 2], [1, np.nan, 3], [1, 1, 1])
    with pytest.raises(InputError, match="evenly"):
        beat_pair([0, 1, 2.5, 3.5], [1, 2, 3, 4], [1, 2, 3, 4], 0.5)
    short = measure_beat(np.arange(5.0), np.ones(5), np.ones(5))
    assert not short.beating
    assert "too few" in short.notes[0]

r"""Beating cells: period, amplitude, rates of rise and relaxation, and for two cells lag and coherence.

A trace of contractile moments is described as drift + a periodic wave with harmonics, by weighted least squares with
the period free (harmonic regression; Quinn & Hannan, The Estimation and Tracking of Frequency, 2001). All numbers are
functions of the fitted coefficients, their errors follow from the fit's covariance. Beats that come at unequal
intervals show as ``interval_sd`` and as a misfit, which widens the errors.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import optimize, signal, stats

from tfm.errors import InputError

__all__ = ["Beat", "BeatPair", "beat_pair", "measure_beat"]

#: Chance of calling noise a beat.
_FALSE_ALARM = 0.01
_FEWEST_FRAMES = 12
_MOST_HARMONICS = 6


@dataclass(frozen=True)
class Beat:
    """What one cell's trace shows. SI (N m, s); ``None`` = not measured.

    Attributes
    ----------
    beating
        Whether a period was found (false-alarm probability below 1 %).
    period, period_sd
        s.
    amplitude, amplitude_sd
        N m, highest minus lowest value of the wave.
    rise_rate, rise_rate_sd
        N m/s, steepest increase of the contractile moment.
    relaxation_rate, relaxation_rate_sd
        N m/s, steepest decrease, as a positive number.
    mean
        N m, mean level.
    beats
        Periods that the trace covers.
    interval_sd
        s, standard deviation of the intervals between single beats; None with fewer than three beats.
    phase
        rad, of the fundamental ``cos(2 pi t / period + phase)`` at the first frame's time.
    harmonics
        Number of harmonics that the data support.
    misfit
        Chi-square per degree of freedom with the errors given; above 1 where beats differ from each other.
    notes
        Sentences for the table.
    """

    beating: bool
    period: float | None
    period_sd: float | None
    amplitude: float | None
    amplitude_sd: float | None
    rise_rate: float | None
    rise_rate_sd: float | None
    relaxation_rate: float | None
    relaxation_rate_sd: float | None
    mean: float
    beats: float
    interval_sd: float | None
    phase: float | None
    harmonics: int
    misfit: float | None
    notes: tuple[str, ...]


@dataclass(frozen=True)
class BeatPair:
    """Two cells' pulls against each other.

    Attributes
    ----------
    frequency
        1/s at which they were compared: that of the stronger beat.
    coherence
        0..1, magnitude-squared coherence at that frequency (Welch segments).
    coherence_significant
        Whether it lies above what independent traces reach in 1 of 20 cases.
    lag, lag_sd
        s, positive when the second cell follows the first; None when the coherence is not significant.
    segments
        Effective number of independent segments.
    """

    frequency: float
    coherence: float
    coherence_significant: bool
    lag: float | None
    lag_sd: float | None
    segments: float


def _checked(time: ArrayLike, *traces: ArrayLike) -> tuple[NDArray[np.float64], ...]:
    arrays = [np.asarray(a, dtype=np.float64) for a in (time, *traces)]
    if any(a.ndim != 1 or a.shape != arrays[0].shape for a in arrays):
        raise InputError("times and traces differ in length", code="bad-trace", remedy="give one value per frame")
    if not all(np.isfinite(a).all() for a in arrays):
        raise InputError("a trace holds values that are not finite", code="bad-trace", remedy="leave failed frames out")
    if (np.diff(arrays[0]) <= 0).any():
        raise InputError("times do not increase", code="bad-trace", remedy="sort the frames by time")
    return tuple(arrays)


def _design(t: NDArray[np.float64], frequency: float, harmonics: int) -> NDArray[np.float64]:
    """Columns 1, t, then cos and sin of every harmonic; t is scaled to -1..1."""
    span = t[-1] - t[0]
    columns = [np.ones_like(t), 2 * (t - t[0]) / span - 1]
    for m in range(1, harmonics + 1):
        columns += [np.cos(2 * np.pi * m * frequency * t), np.sin(2 * np.pi * m * frequency * t)]
    return np.stack(columns, axis=1)


def _chi2(t: NDArray[np.float64], y: NDArray[np.float64], sd: NDArray[np.float64], f: float, m: int) -> float:
    a = _design(t, f, m) / sd[:, None]
    coefficients, *_ = np.linalg.lstsq(a, y / sd, rcond=None)
    return float(((y / sd - a @ coefficients) ** 2).sum())


def _gains(
    t: NDArray[np.float64], y: NDArray[np.float64], sd: NDArray[np.float64], frequencies: NDArray[np.float64]
) -> NDArray[np.float64]:
    """How much one wave of each frequency lowers chi-square beyond a straight line (weighted periodogram)."""
    line, _ = np.linalg.qr(_design(t, 0.0, 0) / sd[:, None])
    rest = y / sd - line @ (line.T @ (y / sd))
    angle = 2 * np.pi * np.outer(frequencies, t)
    c, s = np.cos(angle) / sd, np.sin(angle) / sd
    c -= (c @ line) @ line.T
    s -= (s @ line) @ line.T
    cc, ss, cs = (c * c).sum(axis=1), (s * s).sum(axis=1), (c * s).sum(axis=1)
    cy, sy = c @ rest, s @ rest
    gains: NDArray[np.float64] = (ss * cy**2 - 2 * cs * cy * sy + cc * sy**2) / (cc * ss - cs**2)
    return gains


def _best_frequency(
    t: NDArray[np.float64], y: NDArray[np.float64], sd: NDArray[np.float64], m: int, start: float
) -> float:
    """Least-squares frequency near ``start`` within half a resolution cell."""
    width = 0.5 / (t[-1] - t[0])
    found = optimize.minimize_scalar(
        lambda f: _chi2(t, y, sd, float(f), m),
        bounds=(max(start - width, 1e-3 * width), start + width),
        method="bounded",
        options={"xatol": 1e-6 * start},
    )
    return float(found.x)


def measure_beat(time: ArrayLike, moment: ArrayLike, moment_sd: ArrayLike) -> Beat:
    """Period, amplitude and rates of one trace.

    Parameters
    ----------
    time
        ``(n,)`` s, increasing; gaps are allowed.
    moment, moment_sd
        ``(n,)`` N m, contractile moment and its standard deviation from the images.

    Returns
    -------
    Beat
        ``beating`` False, and no numbers, where noise alone explains the trace, where it covers fewer than two periods
        or has fewer than 12 frames.

    Raises
    ------
    InputError
        For arrays that do not match, are not finite, or times that do not increase.

    Examples
    --------
    >>> t = np.arange(0, 20, 0.1)
    >>> y = 1e-12 * (1 + 0.3 * np.cos(2 * np.pi * t / 1.6))
    >>> beat = measure_beat(t, y + 1e-14 * np.random.default_rng(0).normal(size=t.size), np.full(t.size, 1e-14))
    >>> beat.beating, round(beat.period, 2), round(beat.amplitude * 1e12, 2)
    (True, 1.6, 0.6)
    """
    t, y, sd = _checked(time, moment, moment_sd)
    if (sd <= 0).any():
        raise InputError("a standard deviation is not positive", code="bad-trace", remedy="leave such frames out")
    mean = float(np.average(y, weights=1 / sd**2))
    if t.size < _FEWEST_FRAMES:
        return _silent(mean, f"{t.size} frames are too few to look for a beat; at least {_FEWEST_FRAMES} are needed")
    t = t - t[0]
    span, step = float(t[-1]), float(np.median(np.diff(t)))
    # From two periods in the trace to half the frame rate, ten points per resolution cell.
    frequencies = np.arange(2 / span, 0.5 / step, 0.1 / span)
    if frequencies.size < 3:
        return _silent(mean, "the trace is too short for two beats")
    base = _chi2(t, y, sd, 0.0, 0)
    gains = _gains(t, y, sd, frequencies)
    best = int(np.argmax(gains))
    # F test of two more coefficients, for as many independent frequencies as resolution cells.
    rest = base - gains[best]
    ratio = (gains[best] / 2) / (rest / (t.size - 4))
    chance = 1 - (1 - stats.f.sf(ratio, 2, t.size - 4)) ** (span * (0.5 / step))
    if not chance < _FALSE_ALARM:
        return _silent(mean, "no beat stands out of the noise")
    return _fitted(t, y, sd, float(frequencies[best]), mean)


def _silent(mean: float, note: str) -> Beat:
    return Beat(False, None, None, None, None, None, None, None, None, mean, 0.0, None, None, 0, None, (note,))


def _fitted(t: NDArray[np.float64], y: NDArray[np.float64], sd: NDArray[np.float64], start: float, mean: float) -> Beat:
    step = float(np.median(np.diff(t)))
    most = max(1, min(_MOST_HARMONICS, int(0.5 / step / start), (t.size - 5) // 2))
    # A wave with strong harmonics may be found at twice its frequency: the half is taken when it explains much more.
    candidates = [start] + ([0.5 * start] if 0.5 * start * t[-1] >= 2 else [])
    scores = []
    for f0 in candidates:
        for m in range(1, min(most, int(0.5 / step / f0)) + 1):
            f = _best_frequency(t, y, sd, m, f0)
            k = 3 + 2 * m
            # Bayesian information criterion with the noise scale free.
            scores.append((t.size * np.log(_chi2(t, y, sd, f, m) / t.size) + k * np.log(t.size), m, f))
            if m > 2 and scores[-1][0] > scores[-2][0] > scores[-3][0]:
                break  # two more harmonics in a row that are not worth their coefficients
    _, m, f = min(scores)
    chi2 = _chi2(t, y, sd, f, m)
    freedom = t.size - 3 - 2 * m
    misfit = chi2 / freedom
    a = _design(t, f, m)
    weighted = a / sd[:, None]
    coefficients, *_ = np.linalg.lstsq(weighted, y / sd, rcond=None)
    # Derivative by the frequency as one more column gives the joint covariance.
    slope = np.zeros_like(t)
    for k in range(1, m + 1):
        c, s = coefficients[2 * k], coefficients[2 * k + 1]
        angle = 2 * np.pi * k * f * t
        slope += 2 * np.pi * k * t * (-c * np.sin(angle) + s * np.cos(angle))
    jacobian = np.column_stack([weighted, slope / sd])
    scale = 1 / np.linalg.norm(jacobian, axis=0)
    covariance = np.linalg.inv((jacobian * scale).T @ (jacobian * scale)) * np.outer(scale, scale) * max(1.0, misfit)
    rng = np.random.default_rng(0)
    centre = np.append(coefficients, f)
    draws = (
        centre
        + rng.standard_normal((400, centre.size)) @ np.linalg.cholesky(covariance + 1e-300 * np.eye(centre.size)).T
    )
    best = _shape(centre, m)
    spread = np.std([_shape(d, m) for d in draws], axis=0)
    notes = []
    if misfit > 2:
        notes.append(f"beats differ from one another (misfit {misfit:.1f}, expected 1)")
    if start * step > 0.2:
        notes.append(f"only {1 / (f * step):.1f} frames per beat: rates are lower bounds")
    return Beat(
        beating=True,
        period=1 / f,
        period_sd=float(np.sqrt(covariance[-1, -1])) / f**2,
        amplitude=float(best[0]),
        amplitude_sd=float(spread[0]),
        rise_rate=float(best[1]),
        rise_rate_sd=float(spread[1]),
        relaxation_rate=float(best[2]),
        relaxation_rate_sd=float(spread[2]),
        mean=mean,
        beats=float(t[-1] * f),
        interval_sd=_interval_sd(t, y, a[:, :2] @ coefficients[:2], f),
        phase=float(np.arctan2(-coefficients[3], coefficients[2])),
        harmonics=m,
        misfit=misfit,
        notes=tuple(notes),
    )


def _shape(parameters: NDArray[np.float64], m: int) -> tuple[float, float, float]:
    """Amplitude, steepest rise and steepest fall of one period of the fitted wave."""
    f = parameters[-1]
    phase = np.linspace(0, 2 * np.pi, 180, endpoint=False)
    wave, rate = np.zeros_like(phase), np.zeros_like(phase)
    for k in range(1, m + 1):
        c, s = parameters[2 * k], parameters[2 * k + 1]
        wave += c * np.cos(k * phase) + s * np.sin(k * phase)
        rate += 2 * np.pi * k * f * (-c * np.sin(k * phase) + s * np.cos(k * phase))
    return float(np.ptp(wave)), float(rate.max()), float(-rate.min())


def _interval_sd(t: NDArray[np.float64], y: NDArray[np.float64], drift: NDArray[np.float64], f: float) -> float | None:
    """Scatter of the intervals between peaks, each peak placed by a parabola through three frames."""
    rest = y - drift
    step = float(np.median(np.diff(t)))
    peaks, _ = signal.find_peaks(rest, distance=max(1, int(0.6 / (f * step))), prominence=0.5 * np.ptp(rest) / 2)
    if peaks.size < 3:
        return None
    left, middle, right = rest[peaks - 1], rest[peaks], rest[peaks + 1]
    bend = left - 2 * middle + right
    places = t[peaks] + np.where(bend < 0, 0.5 * (left - right) / np.where(bend < 0, bend, -1.0), 0.0) * step
    return float(np.diff(places).std(ddof=1))


def beat_pair(time: ArrayLike, first: ArrayLike, second: ArrayLike, frequency: float) -> BeatPair:
    """Coherence and lag of two cells' traces at a frequency.

    Welch's cross-spectrum (scipy.signal). With K independent segments, unrelated traces exceed a coherence of
    ``1 - 0.05^(1/(K-1))`` in 1 of 20 cases, and the phase has variance ``(1 - C) / (2 K C)`` (Bendat & Piersol, Random
    Data, 2010, ch. 9).

    Parameters
    ----------
    time
        ``(n,)`` s, evenly spaced to 5 %.
    first, second
        ``(n,)`` N m.
    frequency
        1/s.

    Raises
    ------
    InputError
        For uneven times or a frequency that the trace cannot show.

    Examples
    --------
    >>> t = np.arange(0, 60, 0.1)
    >>> rng = np.random.default_rng(1)
    >>> one = np.cos(2 * np.pi * t / 2) + 0.1 * rng.normal(size=t.size)
    >>> two = np.cos(2 * np.pi * (t - 0.3) / 2) + 0.1 * rng.normal(size=t.size)
    >>> pair = beat_pair(t, one, two, 0.5)
    >>> pair.coherence_significant, round(pair.lag, 2)
    (True, 0.3)
    """
    t, a, b = _checked(time, first, second)
    steps = np.diff(t)
    step = float(np.median(steps))
    if np.abs(steps - step).max() > 0.05 * step:
        raise InputError("times are not evenly spaced", code="uneven-times", remedy="compare a stretch without gaps")
    span = float(t[-1] - t[0]) + step
    if not 2 / span <= frequency <= 0.5 / step:
        raise InputError(
            f"a frequency of {frequency:g} 1/s does not fit the trace",
            code="bad-frequency",
            remedy="record longer or faster",
        )
    # Segments of four periods where the trace allows at least five of them with half overlap, never below two periods.
    periods = float(np.clip(span * frequency / 3, 2.0, 4.0))
    size = min(t.size, round(periods / (frequency * step)))
    options = {"fs": 1 / step, "nperseg": size, "noverlap": size // 2, "detrend": "linear"}
    frequencies, coherence = signal.coherence(a, b, **options)
    _, cross = signal.csd(a, b, **options)
    k = int(np.argmin(np.abs(frequencies - frequency)))
    whole = max(1, (t.size - size // 2) // (size - size // 2))
    # Half-overlapped Hann segments are worth about 0.65 independent ones each (Welch 1967), after the first.
    segments = 1 + 0.65 * (whole - 1)
    c = float(min(coherence[k], 1.0))
    limit = 1 - 0.05 ** (1 / (segments - 1)) if segments > 1 else 1.0
    significant = c > limit
    lag = lag_sd = None
    if significant:
        # csd is conj(first) * second: a follower has a negative phase.
        lag = float(-np.angle(cross[k]) / (2 * np.pi * frequencies[k]))
        lag_sd = float(np.sqrt((1 - c) / (2 * segments * c)) / (2 * np.pi * frequencies[k]))
    return BeatPair(float(frequencies[k]), c, significant, lag, lag_sd, float(segments))

"""Invented time courses: background, heart, eyes, and what recorders pick up besides.

Shapes and sizes of the heart and eye signals are made up to look usual (common practice, no
source).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]


def _shaped_noise(
    gain: FloatArray, n_courses: int, n_samples: int, rng: np.random.Generator
) -> FloatArray:
    """Return Gaussian courses of unit RMS whose spectrum has the given gain."""
    courses = np.zeros((n_courses, n_samples))
    for row in courses:
        row[:] = np.fft.irfft(np.fft.rfft(rng.normal(size=n_samples)) * gain, n=n_samples)
    return courses / np.sqrt((courses**2).mean(1, keepdims=True))


def one_over_f(
    n_courses: int,
    n_samples: int,
    sampling_hz: float,
    rng: np.random.Generator,
    *,
    exponent: float = 1.0,
    corner_hz: float = 0.5,
    low_cut_hz: float = 0.1,
) -> FloatArray:
    """Draw courses whose power falls as one over frequency to the ``exponent``.

    Parameters
    ----------
    n_courses, n_samples : int
    sampling_hz : float
    rng : numpy.random.Generator
    exponent : float
        Of the power spectrum; 1 to 2 in the resting EEG (common practice, no source).
    corner_hz : float
        The spectrum is flat below.
    low_cut_hz : float
        Nothing below: the recorder's high-pass.

    Returns
    -------
    (n_courses, n_samples) ndarray
        Unit RMS each.
    """
    frequency = np.fft.rfftfreq(n_samples, 1 / sampling_hz)
    gain = np.maximum(frequency, corner_hz) ** (-exponent / 2)
    gain[frequency < low_cut_hz] = 0.0
    return _shaped_noise(gain, n_courses, n_samples, rng)


def alpha(
    n_courses: int,
    n_samples: int,
    sampling_hz: float,
    rng: np.random.Generator,
    *,
    center_hz: float = 10.0,
    width_hz: float = 1.0,
) -> FloatArray:
    """Draw waxing and waning courses round 10 Hz, of unit RMS each.

    Parameters
    ----------
    n_courses, n_samples : int
    sampling_hz : float
    rng : numpy.random.Generator
    center_hz, width_hz : float
        Middle and standard deviation of the peak in the amplitude spectrum.

    Returns
    -------
    (n_courses, n_samples) ndarray
    """
    frequency = np.fft.rfftfreq(n_samples, 1 / sampling_hz)
    gain = np.exp(-0.5 * ((frequency - center_hz) / width_hz) ** 2)
    return _shaped_noise(gain, n_courses, n_samples, rng)


def bump(times_s: ArrayLike, latency_s: float, width_s: float) -> FloatArray:
    """Return a Gaussian of height 1 with its full width at half maximum ``width_s``.

    Examples
    --------
    >>> bump([0.10, 0.13], latency_s=0.10, width_s=0.06).round(3)
    array([1. , 0.5])
    """
    sd = width_s / (2 * np.sqrt(2 * np.log(2)))
    return np.exp(-0.5 * ((np.asarray(times_s, float) - latency_s) / sd) ** 2)


def heart(
    n_samples: int, sampling_hz: float, rng: np.random.Generator, *, rate_hz: float = 1.1
) -> tuple[FloatArray, NDArray[np.int64]]:
    """Draw an electrocardiogram with its R waves 1 high.

    Returns
    -------
    course : (n_samples,) ndarray
    r_samples : (B,) ndarray of int64
        Where the R waves are.
    """
    duration = n_samples / sampling_hz
    intervals = 1 / rate_hz * (1 + 0.05 * rng.normal(size=int(2 * duration * rate_hz) + 4))
    beats = np.cumsum(np.maximum(intervals, 0.4)) - 0.5
    beats = beats[(beats > 0) & (beats < duration)]
    # P, Q, R, S, T: offset to R (s), width (s), height.
    waves = (
        (-0.18, 0.06, 0.12),
        (-0.035, 0.02, -0.12),
        (0.0, 0.025, 1.0),
        (0.04, 0.025, -0.25),
        (0.28, 0.12, 0.3),
    )
    course = np.zeros(n_samples)
    times = np.arange(n_samples) / sampling_hz
    for beat in beats:
        first = max(int((beat - 0.4) * sampling_hz), 0)
        near = slice(first, min(int((beat + 0.6) * sampling_hz), n_samples))
        for offset, width, height in waves:
            course[near] += height * bump(times[near], beat + offset, width)
    return course, np.round(beats * sampling_hz).astype(np.int64)


def blinks(
    n_samples: int, sampling_hz: float, rng: np.random.Generator, *, per_minute: float
) -> tuple[FloatArray, NDArray[np.int64]]:
    """Draw blinks 1 high, about 0.2 s wide, at random times.

    Returns
    -------
    course : (n_samples,) ndarray
    blink_samples : (B,) ndarray of int64
    """
    count = round(per_minute * n_samples / sampling_hz / 60)
    peaks = np.sort(rng.integers(0, n_samples, size=count))
    course = np.zeros(n_samples)
    times = np.arange(n_samples) / sampling_hz
    for peak in peaks:
        near = slice(max(int(peak - sampling_hz), 0), int(peak + sampling_hz))
        height = 1 + 0.15 * rng.normal()
        course[near] += height * bump(times[near], peak / sampling_hz, rng.uniform(0.15, 0.25))
    return course, peaks


def gradient_artefact(
    n_samples: int,
    sampling_hz: float,
    rng: np.random.Generator,
    *,
    repetition_s: float = 2.0,
    n_slices: int = 36,
    n_patterns: int = 3,
) -> FloatArray:
    """Draw what switched scanner gradients induce: the same burst at every slice.

    The band of the artefact reaches far beyond half the sampling rate, so it is drawn at 16 times
    the rate and then simply sampled: aliased, as in a recording that was not made for correction.

    Parameters
    ----------
    n_samples : int
    sampling_hz : float
    rng : numpy.random.Generator
    repetition_s : float
        Time of one volume.
    n_slices : int
        Slices per volume, evenly spread.
    n_patterns : int
        Courses, one per gradient axis.

    Returns
    -------
    (n_patterns, n_samples) ndarray
        RMS 1 over all.
    """
    slice_s = repetition_s / n_slices
    times = np.arange(n_samples) / sampling_hz
    phase = np.mod(times, slice_s) / slice_s
    fine = 4096
    courses = np.zeros((n_patterns, n_samples))
    for row in courses:
        train = np.zeros(fine)
        for _ in range(12):  # ramps and read-out trains
            start, length = rng.integers(0, fine), int(rng.integers(fine // 40, fine // 6))
            inside = np.arange(start, min(start + length, fine))
            cycles = rng.integers(1, 60)
            train[inside] += rng.normal() * np.sin(
                2 * np.pi * cycles * (inside - start) / max(length, 1)
            )
        row[:] = np.interp(phase * fine, np.arange(fine), train, period=fine)
    # The volume's own excitation differs from the slices': a weak modulation once per volume.
    courses *= 1 + 0.2 * (np.mod(times, repetition_s) < slice_s)
    return courses / np.sqrt((courses**2).mean())


def locked_ramp(
    n_samples: int, sampling_hz: float, onsets_s: ArrayLike, cycle_s: float
) -> FloatArray:
    """Return a slow ramp that starts anew with every trial.

    It rises from -0.5 to 0.5 over four fifths of the cycle and falls back smoothly, as a display,
    a pump or breathing in step with the trials does.

    Parameters
    ----------
    n_samples : int
    sampling_hz : float
    onsets_s : (N,) array_like
        Where the cycles begin; before the first and after the last they go on evenly.
    cycle_s : float
        Length of an even cycle.

    Returns
    -------
    (n_samples,) ndarray
    """
    onsets = np.sort(np.asarray(onsets_s, float))
    duration = n_samples / sampling_hz
    before = onsets[0] - cycle_s * np.arange(int(onsets[0] / cycle_s) + 2, 0, -1)
    n_after = int(max(duration - onsets[-1], 0) / cycle_s) + 2
    after = onsets[-1] + cycle_s * np.arange(1, n_after + 1)
    starts = np.concatenate([before, onsets, after])
    times = np.arange(n_samples) / sampling_hz
    k = np.searchsorted(starts, times, side="right") - 1
    phase = (times - starts[k]) / (starts[k + 1] - starts[k])
    up = phase / 0.8 - 0.5
    down = 0.5 * np.cos(np.pi * (phase - 0.8) / 0.2)
    return np.where(phase < 0.8, up, down)

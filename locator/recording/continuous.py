"""The scalp electrodes of a recording, band-passed, still in one piece."""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import signal

from locator.errors import RecordingError, SettingError
from locator.recording.channels import find_channels
from locator.recording.data import EpochOptions, Recording
from locator.results import Finding, Frozen, Progress

WORKING_HZ = 1000.0
"""Recordings above twice this rate are first brought down by a whole number, to at least this."""
SHORTEST_BASELINE_S = 0.02


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Continuous(Frozen):
    """The scalp electrodes, band-passed, still in one piece and with the reference of the file.

    Attributes
    ----------
    data_uv : (E, T) ndarray of float32
    electrode_names : tuple of str
    sampling_hz : float
    down : int
        Samples of the recording per sample here.
    step : int
        Samples here per sample of an epoch.
    break_samples : (B,) ndarray of int64
        In samples of this data.
    bad_spans : (K, 2) ndarray of int64
        In samples of this data.
    marked_bad : tuple of str
        Electrodes marked bad in the file.
    other_channels, processing : tuple of str
    findings : tuple of Finding
    """

    data_uv: NDArray[np.float32]
    electrode_names: tuple[str, ...]
    sampling_hz: float
    down: int
    step: int
    break_samples: NDArray[np.int64]
    bad_spans: NDArray[np.int64]
    marked_bad: tuple[str, ...]
    other_channels: tuple[str, ...]
    processing: tuple[str, ...]
    findings: tuple[Finding, ...] = ()


def check_times(
    epoch_s: Sequence[float], window_s: Sequence[float] | None = None
) -> tuple[float, float]:
    """Check epoch and window, and give the window that is tested.

    Parameters
    ----------
    epoch_s : (2,) sequence of float
        Start and end around the event, s.
    window_s : (2,) sequence of float, optional
        Start and end of the tested part, s; default: the epoch after 0.

    Returns
    -------
    (2,) tuple of float
        The window.

    Raises
    ------
    SettingError
        If one runs backwards, the epoch has no baseline before 0 or nothing after it, or the
        window leaves the epoch.

    Examples
    --------
    >>> check_times((-0.2, 0.5))
    (0.0, 0.5)
    """
    start, end = (float(value) for value in epoch_s)
    if not (np.isfinite(start) and np.isfinite(end)) or end <= start:
        msg = f"The epoch runs from {start:g} s to {end:g} s (--epoch). Its end must be later."
        raise SettingError(msg)
    if not (-10 <= start <= -SHORTEST_BASELINE_S and 0 < end <= 30):
        msg = (
            f"The epoch from {start:g} s to {end:g} s (--epoch) needs a baseline of at least"
            f" {SHORTEST_BASELINE_S:g} s before the event, at most 10 s, and an end after the"
            " event, at most 30 s. Times are seconds around the event, such as -0.2 0.5."
        )
        raise SettingError(msg)
    if window_s is None:
        return (0.0, end)
    first, last = (float(value) for value in window_s)
    if not (np.isfinite(first) and np.isfinite(last)) or last <= first:
        msg = (
            f"The window runs from {first:g} s to {last:g} s (--window)."
            " Give its start first and an end that is later."
        )
        raise SettingError(msg)
    slack = 1e-9
    if first < start - slack or last > end + slack:
        msg = (
            f"The window from {first:g} s to {last:g} s (--window) leaves the epoch from"
            f" {start:g} s to {end:g} s (--epoch). Widen the epoch or narrow the window."
        )
        raise SettingError(msg)
    return (first, last)


def _zero_phase(
    data_uv: NDArray[np.float32], rate: float, low_hz: float, high_hz: float, breaks: ArrayLike
) -> NDArray[np.float32]:
    """Butterworth forwards and backwards, each uninterrupted stretch by itself.

    High-pass of order 2 and low-pass of order 4 in each direction; the edges are moved so that
    both directions together give -3 dB at the edges asked for.
    """
    both = np.sqrt(2.0) - 1.0

    def edge_hz(wanted_hz: float, factor: float) -> float:
        # The bilinear transform bends the frequencies by a tangent.
        return float(np.arctan(np.tan(np.pi * wanted_hz / rate) * factor) * rate / np.pi)

    parts = [signal.butter(4, edge_hz(high_hz, both ** (-1 / 8)), "low", fs=rate, output="sos")]
    if low_hz > 0:
        low_edge = edge_hz(low_hz, both ** (1 / 4))
        parts.append(signal.butter(2, low_edge, "high", fs=rate, output="sos"))
    sections = np.vstack(parts)
    edge = int(rate / low_hz) if low_hz > 0 else int(rate / high_hz) * 3
    bounds = [0, *np.asarray(breaks, dtype=int).tolist(), data_uv.shape[1]]
    filtered = np.zeros_like(data_uv)
    for first, last in itertools.pairwise(bounds):
        if last - first < 2:
            continue
        for channel in range(len(data_uv)):
            piece = data_uv[channel, first:last].astype(np.float64)
            piece -= np.median(piece)
            filtered[channel, first:last] = signal.sosfiltfilt(
                sections, piece, padlen=min(edge, len(piece) - 1)
            )
    return filtered


def prepare_recording(
    recording: Recording,
    *,
    names: Sequence[str] | None = None,
    options: EpochOptions | None = None,
    where: str = "recording",
    progress: Progress | None = None,
) -> Continuous:
    """Pick the scalp electrodes and band-pass them, with no shift in time.

    Parameters
    ----------
    recording : Recording
    names : sequence of str, optional
        Electrodes asked for; default: every channel that is a scalp electrode.
    options : EpochOptions, optional
    where : str
        Named in the messages.
    progress : callable, optional

    Returns
    -------
    Continuous

    Raises
    ------
    RecordingError
        If the electrodes have no channels, or amplitudes are not those of an EEG.
    """
    options = options or EpochOptions()
    channels = find_channels(recording, names, where=where)
    rate = float(recording.sampling_hz)
    if not rate >= 50:
        msg = (
            f"The recording has {rate:g} samples a second ({where}); at least 50 are needed."
            " Give the recording as it was made, not a reduced one."
        )
        raise RecordingError(msg)
    down = max(1, int(rate // WORKING_HZ)) if rate > 2 * WORKING_HZ else 1
    processing = [f"{len(channels.index)} scalp electrodes, {rate:g} samples a second as recorded"]
    kept = []
    for count, channel in enumerate(channels.index):
        row = np.nan_to_num(recording.data_uv[channel], nan=0.0, posinf=0.0, neginf=0.0)
        kept.append(signal.resample_poly(row, 1, down).astype(np.float32) if down > 1 else row)
        if progress is not None and count % 8 == 0:
            progress(0.5 * count / len(channels.index), "reading the channels")
    data = np.asarray(kept, dtype=np.float32)
    rate /= down
    if down > 1:
        processing.append(
            f"low-passed without phase shift and brought down {down} times to {rate:g} Hz"
        )
    low, high = options.pass_hz
    used_high = min(high, 0.4 * rate)
    breaks = np.unique(recording.break_samples // down)
    breaks = breaks[(breaks > 0) & (breaks < data.shape[1])]
    data = _zero_phase(data, rate, low, used_high, breaks)
    edge = f"{low:g}" if low > 0 else "0"
    processing.append(
        f"band-pass {edge} to {used_high:g} Hz (-3 dB), Butterworth forwards and backwards: zero"
        " phase"
    )
    step = max(1, int(rate // max(options.most_hz, 5 * used_high)))
    if step > 1:
        processing.append(
            f"every {step}th sample of an epoch kept, counted from the event: {rate / step:g} Hz"
        )
    marked = {name.strip().casefold() for name in recording.marked_bad}
    bad_names = tuple(
        name
        for name, channel in zip(channels.electrode_names, channels.index, strict=True)
        if recording.channel_names[channel].strip().casefold() in marked
        or not np.isfinite(recording.data_uv[channel]).all()
    )
    if progress is not None:
        progress(1.0, "filtered")
    return Continuous(
        data_uv=data,
        electrode_names=channels.electrode_names,
        sampling_hz=rate,
        down=down,
        step=step,
        break_samples=breaks.astype(np.int64),
        bad_spans=(recording.bad_spans // down).astype(np.int64),
        marked_bad=bad_names,
        other_channels=channels.others,
        processing=tuple(processing),
        findings=channels.findings,
    )

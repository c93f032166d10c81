"""Recognise a recording from inside the scanner that was not corrected, and refuse it."""

from __future__ import annotations

import logging
import re
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import signal

from locator.errors import RecordingError
from locator.recording.data import Recording
from locator.results import Frozen

LOG = logging.getLogger(__name__)
FloatArray = NDArray[np.float64]

STRETCH_S = 30.0
"""Length of the stretches looked at, s."""
LOWEST_HZ = 5.0
"""Only what is faster counts: blinks, sweat and movement are slower, slices are not."""
SHORTEST_LAG_S, LONGEST_LAG_S = 1.5, 12.0
"""Lags at which the signal must come back: longer than alpha stays coherent, as long as a TR."""
LEAST_REPEAT = 0.5
"""Correlation of the signal with itself at the best lag. EEG repeats itself by under 0.2 at these
lags (measured on invented background activity), the artefact of the gradients by over 0.9."""
LEAST_RMS_UV = 100.0
"""Root-mean-square of the repeating part. EEG has 5 to 20 uV here; the uncorrected artefact is of
mV order, up to 10 mV (value from memory), and several hundred uV after a low-pass at 70 Hz."""
LEAST_PEAK_UV = 500.0
"""Or its peak (99.5th percentile of the absolute value), for short pulses."""
LEAST_SHARE = 1 / 3
"""Share of the channels that must show it."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class ScannerEvidence(Frozen):
    """What speaks for the artefact of the gradients.

    Attributes
    ----------
    present : bool
    share_of_channels : float
        In the worst stretch.
    rms_uv : float
        Median over channels of the repeating part, worst stretch.
    repeat : float
        Median correlation with itself one period later, worst stretch.
    period_s : float
        Lag of the strongest repetition in the worst stretch.
    line_hz : float
        Spacing of the spectral lines: strongest of them between 5 Hz and half the sampling rate.
    stretches : int
        Looked at.
    affected : int
        Of them.
    """

    present: bool
    share_of_channels: float
    rms_uv: float
    repeat: float
    period_s: float
    line_hz: float
    stretches: int
    affected: int


def _without_mains(power: FloatArray, frequency: FloatArray) -> FloatArray:
    """Spectrum without what is slow and without mains hum and its harmonics (50 and 60 Hz)."""
    kept = power.copy()
    kept[..., frequency < LOWEST_HZ] = 0.0
    for mains in (50.0, 60.0):
        nearest = np.round(frequency / mains) * mains
        kept[..., (nearest > 0) & (np.abs(frequency - nearest) <= 1.0)] = 0.0
    return kept


def _judge(stretch: NDArray[np.float32], rate: float) -> tuple[float, float, float, float, float]:
    """Share of channels, rms, repetition, period and strongest line of one stretch."""
    data = stretch.astype(np.float64)
    data -= data.mean(axis=1, keepdims=True)
    length = data.shape[1]
    size = int(2 ** np.ceil(np.log2(2 * length)))
    frequency = np.asarray(np.fft.rfftfreq(size, 1 / rate), dtype=np.float64)
    spectrum = np.fft.rfft(data * signal.windows.tukey(length, 0.05), size, axis=1)
    mask = _without_mains(np.ones_like(frequency), frequency)
    spectrum *= mask
    power = np.abs(spectrum) ** 2
    correlation = np.fft.irfft(power, size, axis=1)
    total = np.maximum(correlation[:, :1], 1e-12)
    first = int(SHORTEST_LAG_S * rate)
    last = min(int(LONGEST_LAG_S * rate), length // 2)
    lags = np.arange(first, last)
    unbiased = correlation[:, first:last] / total * (length / (length - lags))
    # One lag for all channels: the scanner has one clock.
    best = int(np.argmax(np.median(unbiased, axis=0)))
    repeat = unbiased[:, max(best - 1, 0) : best + 2].max(axis=1)
    filtered = np.fft.irfft(spectrum, size, axis=1)[:, :length]
    rms = np.sqrt(np.mean(filtered**2, axis=1) * np.clip(repeat, 0, 1))
    peak = np.percentile(np.abs(filtered), 99.5, axis=1)
    hit = (repeat >= LEAST_REPEAT) & ((rms >= LEAST_RMS_UV) | (peak >= LEAST_PEAK_UV))
    line = float(frequency[np.argmax(np.median(power, axis=0))])
    return (
        float(hit.mean()),
        float(np.median(rms)),
        float(np.median(repeat)),
        (first + best) / rate,
        line,
    )


def scanner_evidence(recording: Recording) -> ScannerEvidence:
    """Measure what speaks for an uncorrected artefact of the scanner's gradients.

    The gradients switch in the same way in every slice and volume: their artefact is large,
    fast, present in all channels and repeats itself exactly. Everything else that is large in a
    recording lacks one of these: blinks and movement are slow or happen once, alpha loses its
    phase within a second, mains hum is left out by its frequency.

    Parameters
    ----------
    recording : Recording

    Returns
    -------
    ScannerEvidence
    """
    data, rate = recording.data_uv, float(recording.sampling_hz)
    spread = np.array([np.ptp(channel[:: max(1, len(channel) // 20000)]) for channel in data])
    scalp = np.array([kind.lower() in ("eeg", "misc", "seeg") for kind in recording.channel_kinds])
    usable = np.flatnonzero((spread > 0.5) & scalp)
    nothing = ScannerEvidence(
        present=False, share_of_channels=0.0, rms_uv=0.0, repeat=0.0, period_s=0.0, line_hz=0.0,
        stretches=0, affected=0,
    )  # fmt: skip
    if len(usable) == 0 or data.shape[1] < 4 * SHORTEST_LAG_S * rate:
        return nothing
    if len(usable) > 16:
        usable = usable[np.linspace(0, len(usable) - 1, 16).round().astype(int)]
    length = min(int(STRETCH_S * rate), data.shape[1])
    count = min(20, data.shape[1] // length)
    starts = np.linspace(0, data.shape[1] - length, count).round().astype(int)
    down = max(1, int(rate // 500))
    judged = []
    for start in starts:
        stretch = data[usable, start : start + length]
        if down > 1:
            stretch = signal.resample_poly(stretch, 1, down, axis=1)
        judged.append(_judge(stretch, rate / down))
    worst = max(judged, key=lambda row: (row[0], row[1]))
    affected = sum(row[0] >= LEAST_SHARE for row in judged)
    LOG.info(
        "Scanner artefact: %s of %s stretches; worst %.0f %% of channels, %.0f uV, repeat %.2f",
        affected, count, 100 * worst[0], worst[1], worst[2],
    )  # fmt: skip
    return ScannerEvidence(
        present=affected > 0,
        share_of_channels=worst[0],
        rms_uv=worst[1],
        repeat=worst[2],
        period_s=worst[3],
        line_hz=worst[4],
        stretches=count,
        affected=affected,
    )


def refuse_scanner_artefact(recording: Recording, *, where: str = "recording") -> None:
    """Refuse a recording whose scanner artefacts were not corrected.

    Parameters
    ----------
    recording : Recording
    where : str
        Named in the message.

    Raises
    ------
    RecordingError
        If the artefact is there; the message gives the evidence.
    """
    if recording.averaged_from is not None:
        return
    found = scanner_evidence(recording)
    if not found.present:
        return
    markers = [
        name
        for name in recording.event_names
        if re.search(r"^(r128|v1|tr|volume|scan|slice|mri)\b", name.casefold())
    ]
    seen = f" It holds {len(markers)} scanner markers ('{markers[0]}')." if markers else ""
    msg = (
        "The recording holds uncorrected scanner artefacts: in"
        f" {100 * found.share_of_channels:.0f} % of the channels {found.rms_uv:.0f} uV (root mean"
        f" square above {LOWEST_HZ:g} Hz, mains left out; EEG has 5 to 20 uV) repeat themselves"
        f" every {found.period_s:.2f} s with correlation {found.repeat:.2f}, strongest line at"
        f" {found.line_hz:.1f} Hz, in {found.affected} of {found.stretches} stretches looked at"
        f" ({where}).{seen} Remove the artefacts of the gradients and of the pulse first, or cut"
        " out the part recorded while the scanner ran, then give that file."
    )
    raise RecordingError(msg)

"""What a recording and its epochs consist of, and the settings of their making."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from locator.errors import SettingError
from locator.results import Finding, Frozen

FloatArray = NDArray[np.float64]


def _no_samples() -> NDArray[np.int64]:
    return np.zeros(0, dtype=np.int64)


def _no_spans() -> NDArray[np.int64]:
    return np.zeros((0, 2), dtype=np.int64)


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Recording(Frozen):
    """A recording as read from its file.

    Attributes
    ----------
    data_uv : (C, T) ndarray of float32
        Microvolt.
    channel_names : tuple of str
        As written in the file.
    channel_kinds : tuple of str
        What the file says of each channel (`eeg`, `eog`, `ecg`, `misc`, ...).
    sampling_hz : float
    event_names : tuple of str
        One per event, in time order.
    event_samples : (N,) ndarray of int64
    averaged_from : int or None
        Number of trials when the file holds an average and no trials (`data_uv` is then one epoch
        that begins at `first_time_s`).
    first_time_s : float
    break_samples : (B,) ndarray of int64
        First sample of every stretch after a pause of the recording; filters and epochs never
        reach across one.
    bad_spans : (K, 2) ndarray of int64
        Stretches marked bad in the file, first sample and one past the last.
    marked_bad : tuple of str
        Channels marked bad in the file, as written there.
    """

    data_uv: NDArray[np.float32]
    channel_names: tuple[str, ...]
    channel_kinds: tuple[str, ...]
    sampling_hz: float
    event_names: tuple[str, ...]
    event_samples: NDArray[np.int64]
    averaged_from: int | None = None
    first_time_s: float = 0.0
    break_samples: NDArray[np.int64] = field(default_factory=_no_samples)
    bad_spans: NDArray[np.int64] = field(default_factory=_no_spans)
    marked_bad: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Epochs(Frozen):
    """Clean, average-referenced, baseline-corrected epochs of the scalp electrodes.

    Attributes
    ----------
    data_uv : (N, E, T) ndarray
        Good trials by good electrodes by samples, microvolt.
    electrode_names : tuple of str
        Good electrodes by their electrode names.
    times_s : (T,) ndarray
    sampling_hz : float
    event : str
    n_trials_read : int
        Before rejection.
    dropped_trials : tuple of str
        One sentence each.
    bad_channels : tuple of str
        Electrode name and reason, one sentence each.
    other_channels : tuple of str
        Channels that are not scalp electrodes, with what they were taken for.
    testable : bool
        False for an average without trials.
    findings : tuple of Finding
    event_samples : (N,) ndarray of int64
        Of the good trials, in samples of the recording as read.
    processing : tuple of str
        What was done to the data, one sentence a step, in order.
    n_average : int
        Trials behind the average: `N`, or what the file says of its average.
    """

    data_uv: FloatArray
    electrode_names: tuple[str, ...]
    times_s: FloatArray
    sampling_hz: float
    event: str
    n_trials_read: int
    dropped_trials: tuple[str, ...]
    bad_channels: tuple[str, ...]
    other_channels: tuple[str, ...]
    testable: bool
    findings: tuple[Finding, ...] = ()
    event_samples: NDArray[np.int64] = field(default_factory=_no_samples)
    processing: tuple[str, ...] = ()
    n_average: int = 0


@dataclass(frozen=True, kw_only=True, slots=True)
class EpochOptions:
    """Settings of filtering, epochs and rejection.

    Attributes
    ----------
    event : str or None
        Name of the event; default: the only kind there is.
    epoch_s : (2,) tuple of float
        Start and end around the event, s; start from -10 to -0.02 (the part before 0 is the
        baseline), end up to 30. Default -0.2 0.5 (the contract of the command line).
    pass_hz : (2,) tuple of float
        Edges of the band-pass, Hz, both passes together -3 dB; low edge 0 (none) to 5, high edge
        from 5 up to 0.4 of the sampling rate. Default 0.3 40: common practice for evoked
        responses; higher low edges distort slow components (Tanner, Morgan-Short & Luck 2015,
        Psychophysiology 52:997).
    most_hz : float
        Sampling rate of the epochs at most, Hz, from 50; default 250. Only used when it is over
        five times the high edge of the band-pass, so that nothing folds back.
    flat_uv : float
        A channel whose robust amplitude (1.4826 times the median absolute deviation) is below it
        is flat, uV, from 0; default 0.1, below the noise of any amplifier in use (common
        practice, no source).
    channel_z : float
        Robust z of a channel's log amplitude (and of its correlation with the others) from which
        it is bad, from 3; default 5 (common practice, no source).
    trial_z : float
        Robust z of log peak-to-peak amplitude from which a trial is bad in one channel, from 3;
        default 5 (common practice, no source).
    channel_share : float
        A channel that alone is bad in more than this share of the trials is itself bad, 0.02 to
        0.5; default 0.1 (common practice, no source).
    largest_uv : float
        Peak-to-peak amplitude of a trial that no brain makes, uV, from 50; default 400.
    at_least : int
        Fewest good electrodes, from 4; default 8 (fewer cannot place a source; no source).
    """

    event: str | None = None
    epoch_s: tuple[float, float] = (-0.2, 0.5)
    pass_hz: tuple[float, float] = (0.3, 40.0)
    most_hz: float = 250.0
    flat_uv: float = 0.1
    channel_z: float = 5.0
    trial_z: float = 5.0
    channel_share: float = 0.1
    largest_uv: float = 400.0
    at_least: int = 8

    def __post_init__(self) -> None:
        """Refuse values outside their range, by name."""
        low, high = self.pass_hz
        if not (0 <= low <= 5 and 5 <= high and np.isfinite(high)):
            msg = (
                f"pass_hz is {low:g} {high:g}: the low edge must lie in 0 to 5 Hz and the high edge"
                " from 5 Hz upward (options of the epochs). Give both in Hz."
            )
            raise SettingError(msg)
        ranges = {
            "most_hz": (self.most_hz, 50.0, 1e5),
            "flat_uv": (self.flat_uv, 0.0, 10.0),
            "channel_z": (self.channel_z, 3.0, 100.0),
            "trial_z": (self.trial_z, 3.0, 100.0),
            "channel_share": (self.channel_share, 0.02, 0.5),
            "largest_uv": (self.largest_uv, 50.0, 1e6),
            "at_least": (self.at_least, 4, 1000),
        }
        for name, (value, least, most) in ranges.items():
            if not least <= value <= most:
                msg = (
                    f"{name} is {value:g}, allowed are {least:g} to {most:g}"
                    " (options of the epochs). Choose a value in that range."
                )
                raise SettingError(msg)

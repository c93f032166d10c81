"""The recording: channels, filtering, events, epochs, and what must not be used."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from locator.results import Finding, Frozen

FloatArray = NDArray[np.float64]


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
    """

    data_uv: NDArray[np.float32]
    channel_names: tuple[str, ...]
    channel_kinds: tuple[str, ...]
    sampling_hz: float
    event_names: tuple[str, ...]
    event_samples: NDArray[np.int64]
    averaged_from: int | None = None
    first_time_s: float = 0.0


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

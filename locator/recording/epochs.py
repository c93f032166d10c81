"""From a recording to clean epochs: filter, cut, reject, re-reference, subtract the baseline."""

from __future__ import annotations

import logging
from collections.abc import Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray

from locator.errors import RecordingError
from locator.recording.channels import find_channels
from locator.recording.continuous import Continuous, check_times, prepare_recording
from locator.recording.data import EpochOptions, Epochs, Recording
from locator.recording.events import choose_event
from locator.recording.quality import judge_channels, judge_trials
from locator.results import Finding, Progress

LOG = logging.getLogger(__name__)
FloatArray = NDArray[np.float64]


def _offsets(continuous: Continuous, epoch_s: tuple[float, float]) -> NDArray[np.int64]:
    """Samples of an epoch relative to its event; 0 is always one of them."""
    per_second = continuous.sampling_hz / continuous.step
    first = int(np.ceil(epoch_s[0] * per_second - 1e-6))
    last = int(np.floor(epoch_s[1] * per_second + 1e-6))
    return np.arange(first, last + 1, dtype=np.int64) * continuous.step


def cut_epochs(
    continuous: Continuous,
    samples: ArrayLike,
    *,
    event: str,
    options: EpochOptions | None = None,
    good_electrodes: Sequence[str] | None = None,
    where: str = "recording",
) -> Epochs:
    """Cut epochs, leave out bad channels and trials, average reference, subtract the baseline.

    Parameters
    ----------
    continuous : Continuous
    samples : (N,) array_like of int
        Events, in samples of the recording as read.
    event : str
        Name of the event.
    options : EpochOptions, optional
    good_electrodes : sequence of str, optional
        Use just these and do not look for bad ones (for pseudo-events).
    where : str
        Named in the messages.

    Returns
    -------
    Epochs

    Raises
    ------
    RecordingError
        If under two good trials or too few good electrodes remain.
    SettingError
        If the epoch has no baseline or runs backwards.
    """
    options = options or EpochOptions()
    check_times(options.epoch_s)
    centres = np.asarray(samples, dtype=np.int64) // continuous.down
    offsets = _offsets(continuous, options.epoch_s)
    rate = continuous.sampling_hz
    dropped: list[str] = []
    inside: list[int] = []
    for number, centre in enumerate(centres):
        reason = _outside(continuous, int(centre), offsets)
        if reason:
            dropped.append(f"trial {number + 1} (at {centre / rate:.2f} s): {reason}")
        else:
            inside.append(number)
    if len(inside) < 2:
        msg = (
            f"Only {len(inside)} of {len(centres)} trials of '{event}' lie whole within the"
            f" recording and outside its bad stretches ({where}); at least 2 are needed."
            " Shorten --epoch or choose another --event."
        )
        raise RecordingError(msg)
    times = offsets / rate
    data = continuous.data_uv[:, centres[inside][:, None] + offsets].astype(np.float64)
    data = data.transpose(1, 0, 2)
    names = continuous.electrode_names

    bad: dict[str, str] = {}
    if good_electrodes is None:
        bad = judge_channels(data, names, continuous.marked_bad, options, where)
        good = [row for row, name in enumerate(names) if name not in bad]
        _check_enough(good, bad, options, event, where)
        keep, reasons, late = judge_trials(data[:, good], [names[row] for row in good], options)
        for name, reason in late.items():
            bad[name] = reason
        good = [row for row, name in enumerate(names) if name not in bad]
        _check_enough(good, bad, options, event, where)
    else:
        row_of = {name: row for row, name in enumerate(names)}
        good = [row_of[name] for name in good_electrodes]
        chosen = [names[row] for row in good]
        keep, reasons, _ = judge_trials(data[:, good], chosen, options, spare_channels=True)
    for place in np.flatnonzero(~keep):
        number = inside[place]
        dropped.append(
            f"trial {number + 1} (at {centres[number] / rate:.2f} s): {reasons[int(place)]}"
        )
    if keep.sum() < 2:
        msg = (
            f"Only {int(keep.sum())} of {len(centres)} trials of '{event}' are good ({where}); at"
            f" least 2 are needed. The first reason: {dropped[0]}."
        )
        raise RecordingError(msg)
    data = data[keep][:, good]
    data -= data.mean(axis=1, keepdims=True)
    data -= data[:, :, times <= 0].mean(axis=2, keepdims=True)
    kept = np.asarray(inside)[keep]
    processing = (
        *continuous.processing,
        f"average reference over the {len(good)} good electrodes",
        f"mean of {times[0]:g} to 0 s of each epoch subtracted (baseline)",
    )
    return Epochs(
        data_uv=data,
        electrode_names=tuple(names[row] for row in good),
        times_s=times,
        sampling_hz=rate / continuous.step,
        event=event,
        n_trials_read=len(centres),
        dropped_trials=tuple(dropped),
        bad_channels=tuple(f"{name}: {reason}" for name, reason in bad.items()),
        other_channels=continuous.other_channels,
        testable=True,
        findings=(
            *continuous.findings,
            *_epoch_findings(len(kept), len(centres), bad, len(names), event),
        ),
        event_samples=np.asarray(samples, dtype=np.int64)[kept],
        processing=processing,
        n_average=len(kept),
    )


def _outside(continuous: Continuous, centre: int, offsets: NDArray[np.int64]) -> str:
    first, last = centre + int(offsets[0]), centre + int(offsets[-1])
    if first < 0 or last >= continuous.data_uv.shape[1]:
        return "reaches beyond the recording"
    if ((continuous.break_samples > first) & (continuous.break_samples <= last)).any():
        return "reaches across a pause of the recording"
    spans = continuous.bad_spans
    if len(spans) and ((spans[:, 0] <= last) & (spans[:, 1] > first)).any():
        return "lies in a stretch marked bad in the file"
    return ""


def _check_enough(
    good: list[int], bad: dict[str, str], options: EpochOptions, event: str, where: str
) -> None:
    if len(good) >= options.at_least:
        return
    first = "; ".join(f"{name}: {reason}" for name, reason in list(bad.items())[:4])
    msg = (
        f"Only {len(good)} good electrodes remain for '{event}', at least {options.at_least} are"
        f" needed ({where})."
        + (f" Left out: {first}." if first else "")
        + " Record with more electrodes or check cap and amplifier."
    )
    raise RecordingError(msg)


def _epoch_findings(
    n_good: int, n_read: int, bad: dict[str, str], n_names: int, event: str
) -> list[Finding]:
    findings = []
    if n_good < 0.7 * n_read:
        findings.append(
            Finding(
                level="look",
                stage="recording",
                problem=f"{n_read - n_good} of {n_read} trials of '{event}' were left out",
                suggestion="Look at the reasons; clean the recording of blinks and movement first.",
                doubt=1 - n_good / n_read,
            )
        )
    if n_good < 20:
        findings.append(
            Finding(
                level="look",
                stage="recording",
                problem=f"The average rests on {n_good} trials only",
                suggestion="Under 20 trials a place is rarely reliable; record more.",
                doubt=0.7,
            )
        )
    if len(bad) > 0.15 * n_names:
        findings.append(
            Finding(
                level="look",
                stage="recording",
                problem=f"{len(bad)} of {n_names} electrodes were left out as bad",
                suggestion="Check the contact of the electrodes and the reasons given.",
                doubt=min(1.0, 2 * len(bad) / n_names),
            )
        )
    findings.extend(
        Finding(level="note", stage="recording", problem=f"{name} left out: {reason}", subject=name)
        for name, reason in bad.items()
    )
    return findings


def _from_average(
    recording: Recording, names: Sequence[str] | None, options: EpochOptions, where: str
) -> Epochs:
    """The one epoch of a finished average, average-referenced and baseline-corrected."""
    channels = find_channels(recording, names, where=where)
    rate = float(recording.sampling_hz)
    times = recording.first_time_s + np.arange(recording.data_uv.shape[1]) / rate
    slack = 0.5 / rate
    inside = (times >= options.epoch_s[0] - slack) & (times <= options.epoch_s[1] + slack)
    if not (times[inside] > 0).any():
        msg = (
            f"The average runs from {times[0]:g} to {times[-1]:g} s, the epoch from"
            f" {options.epoch_s[0]:g} to {options.epoch_s[1]:g} s: nothing after the event is left"
            f" ({where}). Set --epoch to lie within the average."
        )
        raise RecordingError(msg)
    data = recording.data_uv[channels.index][:, inside].astype(np.float64)
    times = times[inside]
    marked = {name.strip().casefold() for name in recording.marked_bad}
    told = tuple(
        name
        for name, channel in zip(channels.electrode_names, channels.index, strict=True)
        if recording.channel_names[channel].strip().casefold() in marked
        or not np.isfinite(recording.data_uv[channel]).all()
    )
    bad = {name: "marked bad in the file, or not finite" for name in told}
    for name, row in zip(channels.electrode_names, data, strict=True):
        if name not in bad and not np.ptp(row) > 1e-6:
            bad[name] = "flat: the reference, or not connected"
    good = [row for row, name in enumerate(channels.electrode_names) if name not in bad]
    event = recording.event_names[0] if recording.event_names else "average"
    _check_enough(good, bad, options, event, where)
    data = data[good]
    data -= data.mean(axis=0)
    processing = [
        f"finished average as given, {rate:g} Hz, not filtered",
        f"average reference over the {len(good)} good electrodes",
    ]
    findings = [
        Finding(
            level="look",
            stage="recording",
            problem="The file holds a finished average and no trials, so nothing could be tested",
            suggestion="Give the recording with its trials to get corrected significance.",
            doubt=0.9,
        )
    ]
    before = times <= 0
    if before.sum() >= 2:
        data -= data[:, before].mean(axis=1, keepdims=True)
        processing.append(f"mean of {times[0]:g} to 0 s subtracted (baseline)")
    else:
        findings.append(
            Finding(
                level="look",
                stage="recording",
                problem="The average has no part before the event: no baseline was subtracted",
                suggestion="Export the average with at least 0.1 s before the event.",
                doubt=0.7,
            )
        )
    read = int(recording.averaged_from or 0)
    return Epochs(
        data_uv=data[None],
        electrode_names=tuple(channels.electrode_names[row] for row in good),
        times_s=times,
        sampling_hz=rate,
        event=event,
        n_trials_read=read,
        dropped_trials=(),
        bad_channels=tuple(f"{name}: {reason}" for name, reason in bad.items()),
        other_channels=channels.others,
        testable=False,
        findings=tuple(findings),
        processing=tuple(processing),
        n_average=max(read, 1),
    )


def make_epochs(
    recording: Recording,
    *,
    names: Sequence[str] | None = None,
    options: EpochOptions | None = None,
    where: str = "recording",
    progress: Progress | None = None,
) -> Epochs:
    """Give the clean epochs of one event.

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
    Epochs
        With one "trial" and ``testable`` False for a finished average.

    Raises
    ------
    RecordingError
        If the event or the electrodes are not there, the scanner's artefacts are, or too little
        that is good remains.
    SettingError
        If the epoch runs backwards or has no baseline.
    """
    options = options or EpochOptions()
    check_times(options.epoch_s)
    if recording.averaged_from is not None:
        return _from_average(recording, names, options, where)
    event = choose_event(recording, options.event, where=where)
    continuous = prepare_recording(
        recording, names=names, options=options, where=where, progress=progress
    )
    wanted = np.array([name == event for name in recording.event_names])
    epochs = cut_epochs(
        continuous, recording.event_samples[wanted], event=event, options=options, where=where
    )
    LOG.info(
        "Epochs of '%s': %s of %s trials, %s electrodes, %s left out",
        event, len(epochs.data_uv), epochs.n_trials_read, len(epochs.electrode_names),
        len(epochs.bad_channels),
    )  # fmt: skip
    return epochs

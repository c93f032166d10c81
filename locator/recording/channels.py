"""Which channels are scalp electrodes, by their electrode names, and what the others are."""

from __future__ import annotations

import difflib
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from locator.errors import RecordingError
from locator.layout import channel_kind, normalise_name
from locator.recording.data import Recording
from locator.results import Finding, Frozen

_EAR_LOBES = frozenset({"A1", "A2"})
_OTHER_IN_FILE = frozenset({"eog", "ecg", "emg", "stim", "resp", "gsr", "bio", "temperature"})


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Channels(Frozen):
    """The scalp electrodes of a recording.

    Attributes
    ----------
    electrode_names : tuple of str
        In the order of the recording, or as asked for.
    index : (E,) ndarray of int64
        Channel of each.
    others : tuple of str
        The remaining channels, one sentence each with what they were taken for.
    without_channel : tuple of str
        Names that wear a capsule but have no channel (reference, ground).
    findings : tuple of Finding
    """

    electrode_names: tuple[str, ...]
    index: NDArray[np.int64]
    others: tuple[str, ...] = ()
    without_channel: tuple[str, ...] = ()
    findings: tuple[Finding, ...] = ()


def _kind(recording: Recording, channel: int) -> str:
    """What a channel is: by its name; by what the file says where the name says nothing."""
    name, told = recording.channel_names[channel], recording.channel_kinds[channel].lower()
    kind = channel_kind(name)
    if kind == "other" and told in _OTHER_IN_FILE:
        return "trigger" if told == "stim" else told
    return kind


def scalp_electrodes(recording: Recording) -> tuple[str, ...]:
    """Electrode names of the channels that are scalp electrodes, in the order of the recording.

    Parameters
    ----------
    recording : Recording

    Returns
    -------
    tuple of str
        Canonical names.

    Raises
    ------
    RecordingError
        If no channel is a scalp electrode, or two are the same one.
    """
    return find_channels(recording).electrode_names


def find_channels(
    recording: Recording,
    names: Sequence[str] | None = None,
    also: Sequence[str] = (),
    *,
    where: str = "recording",
) -> Channels:
    """Bring electrode names and channels together.

    Parameters
    ----------
    recording : Recording
    names : sequence of str, optional
        Electrodes asked for; default: every channel that is a scalp electrode by its name.
    also : sequence of str
        Names that wear a capsule but have no channel. One that does have a channel is used.
    where : str
        Named in the messages.

    Returns
    -------
    Channels

    Raises
    ------
    RecordingError
        If a name asked for has no channel, two channels are one electrode, or none is.
    """
    by_name: dict[str, list[int]] = {}
    by_text: dict[str, list[int]] = {}
    kinds = [_kind(recording, channel) for channel in range(len(recording.channel_names))]
    for channel, text in enumerate(recording.channel_names):
        by_text.setdefault(text.strip().casefold(), []).append(channel)
        canonical = normalise_name(text)
        if canonical is not None and kinds[channel] in ("electrode", "reference"):
            by_name.setdefault(canonical, []).append(channel)

    if names is None:
        chosen = [
            (canonical, channels)
            for canonical, channels in by_name.items()
            if canonical not in _EAR_LOBES
            and any(kinds[channel] == "electrode" for channel in channels)
        ]
        if not chosen:
            first = ", ".join(recording.channel_names[:8])
            msg = (
                f"None of the {len(recording.channel_names)} channels is a scalp electrode by its"
                f" name ({where}; the first are: {first}). Name the electrodes with --names, and"
                " for a cap outside 10-20 / 10-10 / 10-05 give its positions with --layout."
            )
            raise RecordingError(msg)
    else:
        chosen = [(normalise_name(name) or name.strip(), []) for name in names]
        absent = []
        for place, (name, asked) in enumerate(
            zip([pair[0] for pair in chosen], names, strict=True)
        ):
            channels = by_name.get(name) or by_text.get(str(asked).strip().casefold(), [])
            if not channels:
                absent.append(str(asked).strip())
            chosen[place] = (name, channels)
        if absent:
            _refuse_absent(absent, recording, where)

    for name, channels in chosen:
        if len(channels) > 1:
            written = " and ".join(f"'{recording.channel_names[c]}'" for c in channels)
            msg = (
                f"Channels {written} are both electrode {name} ({where})."
                " Rename or remove one of them in the recording, or leave it out of --names."
            )
            raise RecordingError(msg)
    taken = {channels[0]: name for name, channels in chosen}
    if len(taken) < len(chosen):
        every = [name for name, _ in chosen]
        doubled = [name for name in every if every.count(name) > 1]
        msg = f"Electrode {doubled[0]} is named twice ({where}). Name every electrode once."
        raise RecordingError(msg)

    others = []
    for channel, text in enumerate(recording.channel_names):
        if channel not in taken:
            kind = kinds[channel]
            if normalise_name(text) in _EAR_LOBES:
                others.append(f"{text}: taken for an ear lobe, which is not on the scalp")
            elif kind == "electrode":
                others.append(f"{text}: a scalp electrode that was not asked for")
            else:
                others.append(f"{text}: taken for {kind}")
    without = tuple(
        name
        for name in (normalise_name(text) or text.strip() for text in also)
        if name not in taken.values()
    )
    return Channels(
        electrode_names=tuple(name for name, _ in chosen),
        index=np.array([channels[0] for _, channels in chosen], dtype=np.int64),
        others=tuple(others),
        without_channel=without,
    )


def _refuse_absent(absent: list[str], recording: Recording, where: str) -> None:
    folded = {name.strip().casefold(): name for name in recording.channel_names}
    parts = []
    for name in absent[:10]:
        near = difflib.get_close_matches(name.casefold(), list(folded), n=1, cutoff=0.5)
        parts.append(f"{name} (nearest channel: {folded[near[0]]})" if near else name)
    more = f" and {len(absent) - 10} more" if len(absent) > 10 else ""
    msg = (
        f"{len(absent)} of the electrodes asked for have no channel in the recording ({where}):"
        f" {', '.join(parts)}{more}. Correct the spelling in --names; a capsule without a channel,"
        " such as the reference or the ground, belongs in --also."
    )
    raise RecordingError(msg)

"""An invented EEG recording on an invented head, and its BrainVision files."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pybv
from numpy.typing import ArrayLike, NDArray

from synthetic_heads import signals
from synthetic_heads.currents import (
    Dipole,
    background_places,
    choose_dipole,
    choose_patch,
    scalp_potentials,
)
from synthetic_heads.heads import EYE, SyntheticHead

__all__ = [
    "Dipole",
    "SyntheticRecording",
    "choose_dipole",
    "choose_patch",
    "make_recording",
    "write_recording",
]

FloatArray = NDArray[np.float64]
_ALPHA_SHARE = 0.3
_N_BACKGROUND, _N_ALPHA = 500, 60
_BAD_KINDS = ("flat", "noisy", "loose")
# The reach of a blink over the forehead (made up to look usual; common practice, no source).
_BLINK_REACH_MM = 45.0
_BLINK_UV = 180.0
_HEART_UV = 1000.0


@dataclass(frozen=True, eq=False, kw_only=True)
class SyntheticRecording:
    """A recording whose sources are known.

    Attributes
    ----------
    data_uv : (C, T) ndarray of float32
        Microvolt against the reference.
    channel_names : tuple of str
    channel_kinds : tuple of str
        ``eeg``, ``ecg``, ``eog`` or ``misc``, one per channel.
    sampling_hz : float
    event_names : tuple of str
        One per event, in time order.
    event_samples : (N,) ndarray of int64
    reference : str
        Name of the reference electrode (no channel of its own); empty: average of all electrodes.
    truth : dict
        Everything the recording was made from, in plain JSON types.
    """

    data_uv: NDArray[np.float32]
    channel_names: tuple[str, ...]
    channel_kinds: tuple[str, ...]
    sampling_hz: float
    event_names: tuple[str, ...]
    event_samples: NDArray[np.int64]
    reference: str
    truth: dict[str, Any]

    def __post_init__(self) -> None:
        """Lock the arrays."""
        for name, kind in (("data_uv", np.float32), ("event_samples", np.int64)):
            value = np.array(getattr(self, name), kind)
            value.flags.writeable = False
            object.__setattr__(self, name, value)


def _kind(name: str) -> str:
    upper = name.upper()
    for text, kind in (("ECG", "ecg"), ("EKG", "ecg"), ("EOG", "eog"), ("TRIG", "misc")):
        if text in upper:
            return kind
    msg = f"Extra channel {name!r}: its name must contain ECG, EKG, EOG or TRIG."
    raise ValueError(msg)


def _schedule(
    counts: Mapping[str, int],
    iti_s: float,
    iti_jitter_s: float,
    start_s: float,
    sampling_hz: float,
    rng: np.random.Generator,
) -> tuple[list[str], NDArray[np.int64]]:
    names = [name for name, count in counts.items() for _ in range(count)]
    names = [names[i] for i in rng.permutation(len(names))]
    steps = iti_s + iti_jitter_s * rng.uniform(-1, 1, size=len(names))
    onsets = start_s + np.concatenate([[0.0], np.cumsum(steps[:-1])])
    return names, np.round(onsets * sampling_hz).astype(np.int64)


def _response(
    dipole: Dipole,
    samples: NDArray[np.int64],
    n_samples: int,
    sampling_hz: float,
    rng: np.random.Generator,
) -> FloatArray:
    """Return the course of a dipole over the whole recording, 1 at the peaks."""
    course = np.zeros(n_samples)
    latencies = dipole.latency_s + dipole.latency_jitter_s * rng.normal(size=len(samples))
    heights = 1 + dipole.amplitude_jitter * rng.normal(size=len(samples))
    reach = round(4 * dipole.width_s * sampling_hz)
    for sample, latency, height in zip(samples, latencies, heights, strict=True):
        middle = round(latency * sampling_hz)
        offset = np.arange(max(middle - reach, -int(sample)), middle + reach)
        offset = offset[sample + offset < n_samples]
        course[sample + offset] += height * signals.bump(
            offset / sampling_hz, latency, dipole.width_s
        )
    return course


def _blink_pattern(head: SyntheticHead, electrodes_mm: FloatArray) -> FloatArray:
    eyes = np.argwhere(head.labels == EYE)
    if len(eyes):
        places = eyes @ head.scanner_from_voxel[:3, :3].T + head.scanner_from_voxel[:3, 3]
        middle = places[:, 0].mean()
        left = places[:, 0] < middle
        sides = np.stack([places[left].mean(0), places[~left].mean(0)])
    else:
        sides = head.landmarks_mm["NAS"] + np.array([[-32.0, -10.0, -5.0], [32.0, -10.0, -5.0]])
    distance = np.linalg.norm(electrodes_mm[:, None] - sides[None], axis=2)
    return np.exp(-((distance - 25.0) / _BLINK_REACH_MM)).sum(1) / 2


def _linear_pattern(electrodes_mm: FloatArray, rng: np.random.Generator) -> FloatArray:
    """Return a pattern that grows evenly across the head, RMS 1 over the electrodes."""
    direction = rng.normal(size=3)
    pattern = (electrodes_mm - electrodes_mm.mean(0)) @ direction
    return pattern / np.sqrt((pattern**2).mean())


def make_recording(
    head: SyntheticHead,
    electrode_names: Sequence[str],
    electrode_positions_mm: ArrayLike,
    *,
    seed: int,
    dipoles: Sequence[Dipole] = (),
    n_trials: int | Mapping[str, int] = 120,
    sampling_hz: float = 250.0,
    background_uv: float = 8.0,
    sensor_noise_uv: float = 0.5,
    iti_s: float = 1.5,
    iti_jitter_s: float = 0.25,
    event_free_s: float = 150.0,
    event_free_at: str = "start",
    reference: str | None = None,
    extra_channels: Sequence[str] = ("ECG", "VEOG", "TRIGGER"),
    bad_channels: Mapping[str, str] | None = None,
    n_bad_trials: int = 0,
    blinks_per_minute: float = 0.0,
    heart_on_scalp_uv: float = 0.0,
    line_noise_uv: float = 0.0,
    wander_uv: float = 0.0,
    locked_drift_uv: float = 0.0,
    gradient_artefact_uv: float = 0.0,
    voxel_mm: float = 2.0,
    background_voxel_mm: float = 3.0,
    conductivity_s_per_m: Sequence[float] | Mapping[int, float] | None = None,
) -> SyntheticRecording:
    """Make a recording in which known dipoles answer to events.

    Parameters
    ----------
    head : SyntheticHead
    electrode_names : sequence of str
        In the order of the channels.
    electrode_positions_mm : (E, 3) array_like
        Contact points on the skin, scanner mm.
    seed : int
        The same seed and settings give the same recording.
    dipoles : sequence of Dipole
        What follows the events; empty: the events do nothing.
    n_trials : int or mapping of str to int
        Trials of each kind of event, or per name. Kinds: those of the dipoles, else ``S  1``.
    sampling_hz : float
    background_uv : float
        RMS over time and electrodes of the brain's background, average reference, all
        frequencies above 0.1 Hz: many random dipoles in the grey matter with 1/f courses, and
        posterior ones with alpha (three tenths of the variance), through the same forward
        solution.
    sensor_noise_uv : float
        RMS of white noise, each channel its own.
    iti_s, iti_jitter_s : float
        From event to event; uniform jitter of plus or minus.
    event_free_s : float
        Recording without any event ...
    event_free_at : {"start", "end"}
        ... and where it lies.
    reference : str, optional
        One of the electrodes; it then has no channel. Default: against the average.
    extra_channels : sequence of str
        Channels that are no scalp electrodes: names with ECG, EOG or TRIG in them.
    bad_channels : mapping of str to {"flat", "noisy", "loose"}, optional
        Electrodes whose contact is bad.
    n_bad_trials : int
        Trials with a burst of 150 uV muscle activity.
    blinks_per_minute : float
    heart_on_scalp_uv : float
        R wave on the scalp, growing evenly across the head.
    line_noise_uv : float
        RMS at 50 Hz.
    wander_uv : float
        RMS of a random slow drift (below 0.1 Hz) of each electrode on its own.
    locked_drift_uv : float
        Height of a ramp that starts anew with every trial and goes on evenly through the
        event-free stretch, on a pattern that grows evenly across the head: no brain activity,
        but in step with the trials.
    gradient_artefact_uv : float
        RMS of uncorrected scanner gradient artefact (up to about 10 mV in reality), and volume
        markers ``T  1``, every 2 s.
    voxel_mm : float
        Shaped heads: finite volumes for the dipoles ...
    background_voxel_mm : float
        ... and, coarser and faster, for the background, where nothing hangs on a per cent.
    conductivity_s_per_m : sequence or mapping, optional
        See `synthetic_heads.currents.scalp_potentials`.

    Returns
    -------
    SyntheticRecording

    Raises
    ------
    ValueError
        If names and positions do not match or are doubled, a named electrode or kind is unknown,
        or a number is out of range.
    """
    names = [str(name) for name in electrode_names]
    positions = np.asarray(electrode_positions_mm, float)
    bad_channels = dict(bad_channels or {})
    _check(names, positions, reference, bad_channels)
    if event_free_at not in ("start", "end"):
        msg = f"event_free_at is {event_free_at!r}: choose 'start' or 'end'."
        raise ValueError(msg)
    if sampling_hz < 100 or iti_s <= iti_jitter_s:
        msg = (
            f"sampling_hz is {sampling_hz:g} (at least 100) and iti_s {iti_s:g} with a jitter of"
            f" {iti_jitter_s:g} (less than iti_s)."
        )
        raise ValueError(msg)
    kinds = [_kind(name) for name in extra_channels]
    doubled = [name for name in extra_channels if name in names]
    if doubled:
        msg = f"Extra channel {doubled[0]!r} has the name of an electrode."
        raise ValueError(msg)

    streams = [np.random.default_rng([seed, 7, i]) for i in range(12)]
    if isinstance(n_trials, Mapping):
        counts = {str(name): int(count) for name, count in n_trials.items()}
    else:
        counts = dict.fromkeys([d.event for d in dipoles] or ["S  1"], int(n_trials))
    unknown = [d.event for d in dipoles if d.event not in counts]
    if unknown:
        msg = f"A dipole follows event {unknown[0]!r}; n_trials names only {list(counts)}."
        raise ValueError(msg)
    lead_in = 2.0 + (event_free_s if event_free_at == "start" else 0.0)
    event_names, event_samples = _schedule(
        counts, iti_s, iti_jitter_s, lead_in, sampling_hz, streams[0]
    )
    last = int(event_samples[-1]) if len(event_samples) else round(lead_in * sampling_hz)
    tail = 2.0 + iti_s + (event_free_s if event_free_at == "end" else 0.0)
    n_samples = last + round(tail * sampling_hz)

    scalp = _background(
        head,
        positions,
        n_samples,
        sampling_hz,
        streams[1],
        background_uv,
        background_voxel_mm,
        conductivity_s_per_m,
    )
    peaks = np.zeros((len(names), 0))
    if dipoles:
        peaks = scalp_potentials(
            head,
            positions,
            [d.position_mm for d in dipoles],
            [d.moment_nam for d in dipoles],
            voxel_mm=voxel_mm,
            conductivity_s_per_m=conductivity_s_per_m,
        )
        kinds_of_event = np.array(event_names)
        for dipole, pattern in zip(dipoles, peaks.T, strict=True):
            own = event_samples[kinds_of_event == dipole.event]
            course = _response(dipole, own, n_samples, sampling_hz, streams[2])
            scalp += pattern[:, None] * course

    times = np.arange(n_samples) / sampling_hz
    heart, r_samples = signals.heart(n_samples, sampling_hz, streams[3])
    blink, blink_samples = signals.blinks(
        n_samples, sampling_hz, streams[4], per_minute=blinks_per_minute
    )
    scalp += _BLINK_UV * _blink_pattern(head, positions)[:, None] * blink
    if heart_on_scalp_uv:
        scalp += heart_on_scalp_uv * _linear_pattern(positions, streams[3])[:, None] * heart
    if locked_drift_uv and len(event_samples):
        ramp = signals.locked_ramp(n_samples, sampling_hz, event_samples / sampling_hz, iti_s)
        scalp += locked_drift_uv * _linear_pattern(positions, streams[5])[:, None] * ramp
    if gradient_artefact_uv:
        for course in signals.gradient_artefact(n_samples, sampling_hz, streams[6]):
            scalp += gradient_artefact_uv * _linear_pattern(positions, streams[6])[:, None] * course
    if line_noise_uv:
        hum = np.sqrt(2) * np.sin(2 * np.pi * 50.0 * times + streams[7].uniform(0, 6))
        scalp += line_noise_uv * (1 + 0.3 * streams[7].normal(size=len(names)))[:, None] * hum
    if wander_uv:
        scalp += wander_uv * signals.one_over_f(
            len(names), n_samples, sampling_hz, streams[8], exponent=4, corner_hz=0.02, low_cut_hz=0
        )
    bad_trials = np.sort(streams[9].permutation(len(event_samples))[:n_bad_trials])
    for trial in bad_trials:
        first = int(event_samples[trial] + round(0.05 * sampling_hz))
        burst = streams[9].normal(size=(len(names), round(0.3 * sampling_hz)))
        weight = streams[9].uniform(0, 1, size=(len(names), 1))
        scalp[:, first : first + burst.shape[1]] += 150.0 * weight * burst
    scalp += sensor_noise_uv * streams[10].normal(size=scalp.shape)
    _spoil(scalp, names, bad_channels, sampling_hz, streams[11])

    kept = [i for i, name in enumerate(names) if name != reference]
    against = scalp[names.index(reference)] if reference is not None else scalp.mean(0)
    scalp = scalp[kept] - against
    for row, name in enumerate(names[i] for i in kept):
        if bad_channels.get(name) == "flat":
            scalp[row] = 0.0

    extra = np.zeros((len(kinds), n_samples))
    for row, kind in zip(extra, kinds, strict=True):
        if kind == "ecg":
            row += _HEART_UV * heart + 5 * streams[3].normal(size=n_samples)
        elif kind == "eog":
            row += (
                1.5 * _BLINK_UV * blink
                + 5 * signals.one_over_f(1, n_samples, sampling_hz, streams[4])[0]
            )
        else:
            for sample in event_samples:
                row[sample : sample + max(round(0.01 * sampling_hz), 1)] = 100.0

    markers = list(zip(event_samples.tolist(), event_names, strict=True))
    if gradient_artefact_uv:
        volumes = np.arange(0, times[-1], 2.0)
        markers += [(round(time * sampling_hz), "T  1") for time in volumes]
    markers.sort()

    truth = {
        "invented": True,
        "seed": seed,
        "sampling_hz": sampling_hz,
        "forward": "series" if head.kind == "sphere" else f"finite volumes, {voxel_mm:g} mm",
        "electrodes": {name: positions[i].tolist() for i, name in enumerate(names)},
        "reference": reference or "average",
        "n_trials": counts,
        "event_free_s": event_free_s,
        "event_free_at": event_free_at,
        "background_uv": background_uv,
        "sensor_noise_uv": sensor_noise_uv,
        "locked_drift_uv": locked_drift_uv,
        "gradient_artefact_uv": gradient_artefact_uv,
        "bad_channels": bad_channels,
        "bad_trials": bad_trials.tolist(),
        "blink_samples": blink_samples.tolist(),
        "heart_samples": r_samples.tolist() if "ecg" in kinds else [],
        "dipoles": [
            {
                "position_mm": d.position_mm.tolist(),
                "moment_nam": d.moment_nam.tolist(),
                "event": d.event,
                "latency_s": d.latency_s,
                "width_s": d.width_s,
                "peak_uv": peaks[:, i].tolist(),
            }
            for i, d in enumerate(dipoles)
        ],
    }
    return SyntheticRecording(
        data_uv=np.concatenate([scalp, extra]),
        channel_names=(*(names[i] for i in kept), *extra_channels),
        channel_kinds=("eeg",) * len(kept) + tuple(kinds),
        sampling_hz=float(sampling_hz),
        event_names=tuple(name for _, name in markers),
        event_samples=np.array([sample for sample, _ in markers], np.int64),
        reference=reference or "",
        truth=truth,
    )


def _check(
    names: list[str],
    positions: FloatArray,
    reference: str | None,
    bad_channels: Mapping[str, str],
) -> None:
    if positions.shape != (len(names), 3) or len(names) < 2:
        msg = f"Got {len(names)} electrode names and positions of shape {positions.shape}."
        raise ValueError(msg)
    if len(set(names)) != len(names):
        msg = f"Electrode names are doubled: {sorted({n for n in names if names.count(n) > 1})}."
        raise ValueError(msg)
    for name in [*bad_channels, *([] if reference is None else [reference])]:
        if name not in names:
            msg = f"{name!r} is not one of the electrodes {names}."
            raise ValueError(msg)
    for name, kind in bad_channels.items():
        if kind not in _BAD_KINDS:
            msg = f"Bad channel {name!r} is {kind!r}: choose one of {_BAD_KINDS}."
            raise ValueError(msg)


def _background(
    head: SyntheticHead,
    positions: FloatArray,
    n_samples: int,
    sampling_hz: float,
    rng: np.random.Generator,
    background_uv: float,
    voxel_mm: float,
    conductivity: Sequence[float] | Mapping[int, float] | None,
) -> FloatArray:
    """Return the brain's background, average reference.

    Independent Gaussian courses of the same spectrum through a lead field L have on the scalp the
    covariance L L'. As many courses as L has singular values give the same distribution, so only
    those are drawn.
    """
    total = np.zeros((len(positions), n_samples))
    if background_uv == 0:
        return total
    broad = background_places(head, _N_BACKGROUND, rng)
    behind = background_places(head, _N_ALPHA, rng, posterior=True)
    potentials = scalp_potentials(
        head,
        positions,
        np.concatenate([broad[0], behind[0]]),
        np.concatenate([broad[1], behind[1]]),
        voxel_mm=voxel_mm,
        conductivity_s_per_m=conductivity,
    )
    parts = (
        (potentials[:, :_N_BACKGROUND], 1 - _ALPHA_SHARE, signals.one_over_f),
        (potentials[:, _N_BACKGROUND:], _ALPHA_SHARE, signals.alpha),
    )
    for lead, share, draw in parts:
        left, singular, _ = np.linalg.svd(lead, full_matrices=False)
        left *= np.sign(left[np.abs(left).argmax(0), np.arange(left.shape[1])])
        rank = int((singular > 1e-9 * singular[0]).sum())
        part = (left[:, :rank] * singular[:rank]) @ draw(rank, n_samples, sampling_hz, rng)
        total += np.sqrt(share / (part**2).mean()) * part
    return total * background_uv / np.sqrt((total**2).mean())


def _spoil(
    scalp: FloatArray,
    names: list[str],
    bad_channels: Mapping[str, str],
    sampling_hz: float,
    rng: np.random.Generator,
) -> None:
    for name, kind in bad_channels.items():
        row = scalp[names.index(name)]
        if kind == "noisy":
            row += 60.0 * rng.normal(size=len(row))
        elif kind == "loose":
            row += 80.0 * signals.one_over_f(1, len(row), sampling_hz, rng, exponent=2)[0]
            for _ in range(max(len(row) // round(10 * sampling_hz), 1)):
                first = int(rng.integers(len(row)))
                row[first : first + round(0.5 * sampling_hz)] += rng.normal() * 300.0


def _marker(sample: int, name: str) -> dict[str, Any]:
    numbered = re.fullmatch(r"([SR])\s*(\d+)", name)
    if numbered:
        kind = "Stimulus" if numbered[1] == "S" else "Response"
        return {"onset": sample, "description": int(numbered[2]), "type": kind}
    return {"onset": sample, "description": name, "type": "Comment"}


def write_recording(path: str | Path, recording: SyntheticRecording) -> Path:
    """Write a recording as BrainVision files, and its truth as JSON beside them.

    No date is written: the same recording gives the same bytes.

    Parameters
    ----------
    path : path
        The header, ``name.vhdr``; ``name.vmrk``, ``name.eeg`` and ``name.truth.json`` go beside it
        and existing ones are replaced.
    recording : SyntheticRecording
        Events named ``S  1`` or ``R  1`` become stimulus and response markers, others comments.

    Returns
    -------
    Path
        The header.

    Raises
    ------
    ValueError
        If the path does not end in ``.vhdr``.
    """
    header = Path(path)
    if header.suffix != ".vhdr":
        msg = f"{header} must end in .vhdr, the header of a BrainVision recording."
        raise ValueError(msg)
    # 0.1 uV is the usual step of a 16-bit recorder; a wider range needs a coarser one.
    largest = float(np.abs(recording.data_uv).max(initial=0.0))
    resolution = 0.1 if largest < 3200 else 0.1 * np.ceil(largest / 3200)
    # Whole steps, a hair further from zero, since the writer cuts off what is behind the point.
    steps = np.rint(recording.data_uv.astype(np.float64) / resolution)
    pybv.write_brainvision(
        data=(steps + 0.01 * np.sign(steps)) * resolution * 1e-6,
        sfreq=recording.sampling_hz,
        ch_names=list(recording.channel_names),
        ref_ch_names=recording.reference or None,
        fname_base=header.stem,
        folder_out=str(header.parent),
        overwrite=True,
        events=[
            _marker(int(sample), name)
            for sample, name in zip(recording.event_samples, recording.event_names, strict=True)
        ],
        resolution=float(resolution),
        unit="µV",
        fmt="binary_int16",
    )
    truth = header.with_suffix(".truth.json")
    truth.write_text(json.dumps(recording.truth, indent=1, sort_keys=True) + "\n", encoding="utf-8")
    return header

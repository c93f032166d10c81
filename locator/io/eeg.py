"""Read a recording: BrainVision, EDF, BDF, FIF and EEGLAB files, through mne.

What the reader library would let pass in silence is checked here: a data file that is shorter
than its header says, markers beyond its end, several averages in one file.
"""

from __future__ import annotations

import logging
import re
import warnings
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from locator.errors import FileError
from locator.recording import Recording

LOG = logging.getLogger(__name__)

READABLE = ".vhdr (BrainVision), .edf, .bdf, .fif, .set (EEGLAB)"
CHUNK_SAMPLES = 200_000
_BREAK = re.compile(r"^(new segment|edge)\b|\bboundary$", re.IGNORECASE)
_TECHNICAL = re.compile(r"^(sync status|syncstatus|sync on|sync off|bad acq skip)", re.IGNORECASE)


def read_recording(path: str | Path) -> Recording:
    """Read a recording or a finished average.

    Parameters
    ----------
    path : str or Path
        BrainVision header (``.vhdr``), ``.edf``, ``.bdf``, ``.fif`` (recording or average),
        ``.set``.

    Returns
    -------
    Recording
        Microvolt; events from markers, annotations or, where there are none, the trigger channel.

    Raises
    ------
    FileError
        If the file is absent, of another kind, broken or cut short, or holds epochs or several
        averages.
    """
    path = Path(path)
    _check_file(path)
    suffix = ".fif" if path.name.lower().endswith(".fif.gz") else path.suffix.lower()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            import mne

            with mne.utils.use_log_level("CRITICAL"):
                return _read(path, suffix)
        except FileError:
            raise
        except MemoryError as error:
            msg = (
                f"The recording does not fit into memory ({path})."
                " Cut it or bring its sampling rate down, then give the smaller file."
            )
            raise FileError(msg) from error
        except Exception as error:
            detail = " ".join(str(error).split())[:200] or type(error).__name__
            msg = (
                f"The recording cannot be read: {detail} ({path})."
                " It is broken, cut short or not what its ending says. Copy or export it again."
            )
            raise FileError(msg) from error


def _check_file(path: Path) -> None:
    if not path.exists():
        near = ""
        if path.parent.is_dir():
            same = sorted(p.name for p in path.parent.iterdir() if p.stem == path.stem)
            near = f" Beside it there is: {', '.join(same[:5])}." if same else ""
        msg = f"There is no such recording: {path}.{near} Check the path."
        raise FileError(msg)
    if path.is_dir():
        msg = f"{path} is a folder, not a recording. Give the file itself: {READABLE}."
        raise FileError(msg)
    if path.stat().st_size == 0:
        msg = f"The recording is an empty file: {path}. Copy or export it again."
        raise FileError(msg)
    suffix = path.suffix.lower()
    if suffix in (".eeg", ".vmrk", ".dat", ".avg") and path.with_suffix(".vhdr").exists():
        msg = (
            f"{path} is one part of a recording. Give its header instead:"
            f" {path.with_suffix('.vhdr')}."
        )
        raise FileError(msg)
    if suffix not in (".vhdr", ".edf", ".bdf", ".fif", ".set") and not path.name.lower().endswith(
        ".fif.gz"
    ):
        msg = (
            f"Recordings with the ending '{suffix}' cannot be read ({path})."
            f" Readable are {READABLE}: export the recording as one of them."
        )
        raise FileError(msg)


def _read(path: Path, suffix: str) -> Recording:
    import mne

    if suffix == ".vhdr":
        header = _brainvision_header(path)
        raw = mne.io.read_raw_brainvision(path, preload=False)
        return _brainvision(path, header, raw)
    if suffix in (".edf", ".bdf"):
        _check_european(path, suffix)
        reader = mne.io.read_raw_edf if suffix == ".edf" else mne.io.read_raw_bdf
        return _from_raw(path, reader(path, preload=False))
    if suffix == ".set":
        try:
            return _from_raw(path, mne.io.read_raw_eeglab(path, preload=False))
        except (TypeError, ValueError) as error:
            if "trials" in str(error) or "epochs" in str(error).lower():
                msg = (
                    f"The file holds epochs, not a continuous recording ({path})."
                    " Export the continuous recording with its events."
                )
                raise FileError(msg) from error
            raise
    return _read_fif(path)


def _check_european(path: Path, suffix: str) -> None:
    """Compare the size of an EDF or BDF file with what its header says."""
    with path.open("rb") as stream:
        head = stream.read(256)
        try:
            if len(head) < 256:
                raise ValueError("shorter than a header")
            start, version = head[:8], head[:8].strip()
            if suffix == ".edf" and version != b"0":
                msg = f"begins with {start!r} instead of '0'"
                raise ValueError(msg)
            if suffix == ".bdf" and start != b"\xffBIOSEMI":
                msg = f"begins with {start!r}, which is not the mark of a BDF file"
                raise ValueError(msg)
            header_bytes, records = int(head[184:192]), int(head[236:244])
            channels = int(head[252:256])
            if channels < 1 or header_bytes != 256 * (channels + 1):
                msg = f"header of {header_bytes} bytes for {channels} channels"
                raise ValueError(msg)
            body = stream.read(256 * channels)
            if len(body) < 256 * channels:
                raise ValueError("cut short within the header")
            per_record = sum(
                int(body[216 * channels + 8 * c : 216 * channels + 8 * c + 8])
                for c in range(channels)
            )
        except ValueError as error:
            msg = (
                f"This is not a readable {suffix[1:].upper()} file: {error} ({path})."
                " Copy or export it again."
            )
            raise FileError(msg) from error
    width = 2 if suffix == ".edf" else 3
    expected = header_bytes + records * per_record * width
    size = path.stat().st_size
    if records >= 0 and size < expected:
        msg = (
            f"The file holds {size} bytes, its header says {expected} ({path}): it was cut short."
            " Copy it again."
        )
        raise FileError(msg)


def _read_fif(path: Path) -> Recording:
    import mne

    name = path.name.lower()
    if not re.search(r"(ave|evoked)\.fif(\.gz)?$", name):
        try:
            raw = mne.io.read_raw_fif(path, preload=False, on_split_missing="raise")
        except ValueError as error:
            if "No raw data" not in str(error):
                raise
        else:
            return _from_raw(path, raw)
    try:
        averages = mne.read_evokeds(path)
    except ValueError as error:
        msg = (
            f"The file holds neither a continuous recording nor an average ({path})."
            " Give the continuous recording with its events, or an average."
        )
        raise FileError(msg) from error
    if len(averages) != 1:
        comments = ", ".join(repr(a.comment) for a in averages[:10])
        msg = (
            f"The file holds {len(averages)} averages ({path}): {comments}."
            " Save the one that is meant in a file of its own."
        )
        raise FileError(msg)
    average = averages[0]
    names, kinds = tuple(average.ch_names), tuple(average.get_channel_types())
    return Recording(
        data_uv=(average.data * 1e6).astype(np.float32),
        channel_names=names,
        channel_kinds=kinds,
        sampling_hz=float(average.info["sfreq"]),
        event_names=(average.comment or "average",),
        event_samples=np.array([round(-average.times[0] * average.info["sfreq"])]),
        averaged_from=max(int(average.nave), 1),
        first_time_s=float(average.times[0]),
        marked_bad=tuple(average.info["bads"]),
    )


def _person_name(description: str) -> str:
    """Name of an event as people know it.

    >>> _person_name("Stimulus/S  1"), _person_name("Comment/eyes open"), _person_name("12")
    ('S1', 'eyes open', '12')
    """
    text = description.strip()
    head, slash, tail = text.partition("/")
    if slash and head.casefold() in ("stimulus", "response", "comment", "event", "marker"):
        text = tail.strip() or head
    short = re.fullmatch(r"([A-Za-z])\s*(\d+)", text)
    return f"{short.group(1)}{short.group(2)}" if short else " ".join(text.split())


def _from_raw(path: Path, raw: Any) -> Recording:
    rate = float(raw.info["sfreq"])
    count = int(raw.n_times)
    if count < 2 or len(raw.ch_names) == 0:
        msg = f"The recording holds no data ({path}). Copy or export it again."
        raise FileError(msg)
    kinds = tuple(raw.get_channel_types())
    data = np.zeros((len(kinds), count), dtype=np.float32)
    stim = [row for row, kind in enumerate(kinds) if kind == "stim"]
    scale = np.where(np.array(kinds) == "stim", 1.0, 1e6)[:, None]
    for first in range(0, count, CHUNK_SAMPLES):
        last = min(first + CHUNK_SAMPLES, count)
        data[:, first:last] = raw.get_data(start=first, stop=last) * scale
    first_time = float(raw.first_time) if raw.annotations.orig_time is not None else 0.0
    names: list[str] = []
    samples: list[int] = []
    breaks: list[int] = []
    spans: list[tuple[int, int]] = []
    for onset, duration, description in zip(
        raw.annotations.onset, raw.annotations.duration, raw.annotations.description, strict=True
    ):
        sample = round((float(onset) - first_time) * rate)
        last = sample + max(round(float(duration) * rate), 0)
        text = _person_name(str(description))
        if _BREAK.search(text):
            breaks.append(sample)
        elif re.match(r"bad([\s_]|$)", text, re.IGNORECASE):
            spans.append((sample, max(last, sample + 1)))
        elif not _TECHNICAL.match(text):
            names.append(text)
            samples.append(sample)
    if not names and stim:
        names, samples = _from_trigger(raw, data, stim, path.suffix.lower() == ".bdf")
    late = [sample for sample in samples if sample >= count]
    if late:
        msg = (
            f"{len(late)} of {len(samples)} event markers lie beyond the end of the data, the last"
            f" at {max(late) / rate:.1f} s of {count / rate:.1f} s ({path}): the data were cut"
            " short or belong to another recording. Copy the files again."
        )
        raise FileError(msg)
    order = np.argsort(np.array(samples, dtype=np.int64), kind="stable")
    LOG.info("Read %s: %s channels, %.1f s at %g Hz, %s events", path.name, len(kinds),
             count / rate, rate, len(names))  # fmt: skip
    return Recording(
        data_uv=data,
        channel_names=tuple(raw.ch_names),
        channel_kinds=kinds,
        sampling_hz=rate,
        event_names=tuple(names[place] for place in order),
        event_samples=np.array([samples[place] for place in order], dtype=np.int64),
        break_samples=np.unique([sample for sample in breaks if 0 < sample < count]).astype(
            np.int64
        ),
        bad_spans=np.array(spans, dtype=np.int64).reshape(-1, 2),
        marked_bad=tuple(raw.info["bads"]),
    )


def _from_trigger(
    raw: Any, data: NDArray[np.float32], stim: list[int], is_bdf: bool
) -> tuple[list[str], list[int]]:
    """Onsets in the trigger channels: the value it changes to, unless that is its resting value."""
    names: list[str] = []
    samples: list[int] = []
    for row in stim[:1]:
        values = np.round(raw.get_data(picks=[row])[0]).astype(np.int64)
        if is_bdf:
            values &= 0xFFFF
        data[row] = values
        resting = int(np.bincount(np.abs(values)).argmax()) if values.size else 0
        for sample in np.flatnonzero(np.diff(values)) + 1:
            value = int(values[sample])
            if value not in (0, resting):
                names.append(str(value))
                samples.append(int(sample))
    return names, samples


def _brainvision_header(path: Path) -> dict[str, str]:
    """Entries of the header that matter here, with the files beside it checked."""
    text = path.read_bytes().decode("utf-8", errors="replace")
    if not re.match(r"\W*(brain ?vision|vision).*header", text.split("\n", 1)[0], re.IGNORECASE):
        msg = (
            f"This is not a BrainVision header: its first line is"
            f" '{text.splitlines()[0][:60] if text.splitlines() else ''}' ({path})."
            " Give the .vhdr file that the amplifier software wrote."
        )
        raise FileError(msg)
    body = text.split("[Comment]")[0]
    entries = {
        key.strip().casefold(): value.strip()
        for key, value in re.findall(r"^([A-Za-z]+)\s*=(.*)$", body, re.MULTILINE)
    }
    stem = path.stem
    for key, what in (("datafile", "data file"), ("markerfile", "marker file")):
        name = entries.get(key, "").replace("$b", stem)
        if key == "datafile" and not name:
            msg = f"The header names no data file ({path}). Export the recording again."
            raise FileError(msg)
        if name and not (path.parent / name).is_file():
            msg = (
                f"The {what} '{name}' that the header names is not there ({path})."
                f" Put it beside the header, in {path.parent}, under that name."
            )
            raise FileError(msg)
        entries[key] = name
    if not any(re.match(r"ch\d+$", key) for key in _keys(body)):
        msg = f"The header lists no channels ({path}): it is cut short. Copy it again."
        raise FileError(msg)
    return entries


def _keys(body: str) -> list[str]:
    return [key.casefold() for key in re.findall(r"^(\w+)\s*=", body, re.MULTILINE)]


def _brainvision(path: Path, header: dict[str, str], raw: Any) -> Recording:
    data_file = path.parent / header["datafile"]
    size = data_file.stat().st_size
    widths = {"INT_16": 2, "UINT_16": 2, "INT_32": 4, "IEEE_FLOAT_32": 4, "IEEE_FLOAT_64": 8}
    width = widths.get(header.get("binaryformat", "").upper())
    channels = int(header.get("numberofchannels", "0") or 0)
    if width and channels and header.get("dataformat", "BINARY").upper() == "BINARY":
        points = int(header.get("datapoints", "0") or 0)
        frame = width * channels
        if size % frame or (points and size < points * frame) or size == 0:
            expected = f"{points * frame} bytes" if points else f"whole samples of {frame} bytes"
            msg = (
                f"The data file holds {size} bytes, its header says {expected} ({data_file}):"
                " it was cut short or belongs to another header. Copy the files again."
            )
            raise FileError(msg)
    recording = _from_raw(path, raw)
    if header.get("averaged", "NO").upper() != "YES":
        return recording
    count = int(recording.data_uv.shape[1])
    points = int(header.get("segmentdatapoints", "0") or 0) or count
    if points < count:
        msg = (
            f"The file holds {count // points} averages of {points} samples ({path})."
            " Export the one that is meant into a file of its own."
        )
        raise FileError(msg)
    zero = [
        int(sample)
        for name, sample in zip(recording.event_names, recording.event_samples, strict=True)
        if name.casefold().startswith("time 0")
    ]
    others = [
        (name, int(sample))
        for name, sample in zip(recording.event_names, recording.event_samples, strict=True)
        if not name.casefold().startswith("time 0")
    ]
    if not zero and not others:
        msg = (
            f"The average has no marker for its event ({path}), so the time 0 is unknown."
            " Export it with its markers."
        )
        raise FileError(msg)
    moment = zero[0] if zero else others[0][1]
    name = others[0][0] if others else "average"
    trials = int(header.get("averagedsegments", "0") or 0)
    return Recording(
        data_uv=recording.data_uv,
        channel_names=recording.channel_names,
        channel_kinds=recording.channel_kinds,
        sampling_hz=recording.sampling_hz,
        event_names=(name,),
        event_samples=np.array([moment], dtype=np.int64),
        averaged_from=max(trials, 1),
        first_time_s=-moment / recording.sampling_hz,
        marked_bad=recording.marked_bad,
    )

"""Write a commented session file from what the files tell."""

from __future__ import annotations

import json
import os
from pathlib import Path

from locator.errors import FileError
from locator.io.eeg import read_recording
from locator.io.files import write_text
from locator.io.nifti import read_volume
from locator.recording import Recording, count_events, find_channels
from locator.session.options import METHODS, SOURCE_SPACES, SessionOptions
from locator.volume import Volume


def write_session_file(t1: Path, eeg: Path | None, target: Path) -> list[str]:
    """Look at T1 and recording, and write a session file for them.

    Parameters
    ----------
    t1 : Path
    eeg : Path or None
    target : Path
        Must not exist.

    Returns
    -------
    list of str
        What was found, a sentence each.

    Raises
    ------
    FileError
        If the target exists, or a file cannot be used.
    LocatorError
        If T1 or recording cannot be used.
    """
    if target.exists():
        msg = f"{target} exists already and is not written over. Choose another --out."
        raise FileError(msg)
    volume = read_volume(t1)
    recording = None if eeg is None else read_recording(eeg)
    said = _said_of_volume(t1, volume)
    if recording is not None:
        assert eeg is not None
        said += _said_of_recording(eeg, recording)
    write_text(target, session_text(t1, eeg, target, volume, recording))
    return said


def _said_of_volume(t1: Path, volume: Volume) -> list[str]:
    shape = " x ".join(str(n) for n in volume.intensity.shape)
    sizes = " x ".join(f"{v:.2f}" for v in volume.voxel_mm)
    said = [f"T1 {t1}: {shape} voxels of {sizes} mm; sides rest on {volume.orientation_basis}."]
    return said + [f"  Note: {finding.problem}" for finding in volume.findings]


def _said_of_recording(eeg: Path, recording: Recording) -> list[str]:
    seconds = recording.data_uv.shape[1] / recording.sampling_hz
    channels = find_channels(recording, where=str(eeg))
    events = count_events(recording.event_names)
    said = [
        f"Recording {eeg}: {len(recording.channel_names)} channels at {recording.sampling_hz:g} Hz,"
        f" {seconds:.0f} s; {len(channels.electrode_names)} scalp electrodes."
    ]
    if recording.averaged_from is not None:
        return [*said, "  It is a finished average: it can be projected, but not tested."]
    listed = ", ".join(f"'{name}' ({count})" for name, count in events.items())
    return [*said, f"  Events: {listed or 'none'}."]


def _relative(path: Path, target: Path) -> str:
    """Return a path as seen from the session file, where that is possible."""
    try:
        return Path(os.path.relpath(path.absolute(), target.absolute().parent)).as_posix()
    except ValueError:  # another drive
        return str(path.absolute())


def _quoted(text: str) -> str:
    """Return text as a TOML string."""
    return json.dumps(text, ensure_ascii=False)


def session_text(
    t1: Path, eeg: Path | None, target: Path, volume: Volume, recording: Recording | None
) -> str:
    """Return the text of a session file; what is not known stands there as a remark."""
    default = SessionOptions()
    lines = [
        "# Session file. Paths are relative to this file. What begins with # is a remark:",
        "# take the # away in front of a key to set it. Flags on the command line win.",
        "",
        *(f"# {line}" for line in _said_of_volume(t1, volume)),
        f"t1 = {_quoted(_relative(t1, target))}",
    ]
    events: dict[str, int] = {}
    if recording is None or eeg is None:
        lines += ['# eeg = "recording.vhdr"   # needed for: locator run']
    else:
        events = count_events(recording.event_names)
        lines += [f"# {line}" for line in _said_of_recording(eeg, recording)]
        lines += [f"eeg = {_quoted(_relative(eeg, target))}"]
    lines += [
        'out = "locator-out"',
        '# subject = "a name for the report"',
        "",
        "# Electrodes: a list of names, a text file with one name a line, or the channels of the",
        "# recording that are scalp electrodes.",
    ]
    if recording is None:
        lines += ['# names = "names.txt"']
    else:
        channels = find_channels(recording, where=str(eeg))
        names = ", ".join(channels.electrode_names)
        lines += ['names = "eeg"', f"# that is: {names}"]
        lines += [f"# not used: {other}" for other in channels.others]
    lines += [
        '# also = ["FCz"]           # wear a capsule but have no channel (reference, ground)',
        "# capsule_mm = 8.0         # capsule diameter; estimated when not given",
        "# holder_mm = 2.0          # skin to underside of the capsule; measured when not given",
        '# side_marker = "right"    # an extra capsule was worn on that side (right or left)',
        '# layout = "cap_electrodes.tsv"    # template positions of a cap outside 10-05',
        '# landmarks = "landmarks.json"     # NAS, LPA, RPA in scanner mm; else estimated',
        '# electrodes = "electrodes.tsv"    # positions from elsewhere; no capsules needed',
        "",
        "# Response.",
    ]
    if len(events) == 1:
        lines += [f"event = {_quoted(next(iter(events)))}"]
    elif events:
        listed = ", ".join(f"{_quoted(name)} ({count})" for name, count in events.items())
        lines += [f"# Choose one of: {listed}", f"# event = {_quoted(next(iter(events)))}"]
    else:
        lines += ['# event = "stimulus"']
    start, end = default.epoch
    scalp, skull, brain = default.conductivity
    lines += [
        f"# epoch = [{start}, {end}]     # s around the event; baseline up to 0",
        f"# window = [0.0, {end}]     # s; the part that is tested; default: the epoch after 0",
        "",
        "# Estimate and test.",
        f'# method = "{METHODS[0]}"      # {", ".join(METHODS)}',
        f'# source_space = "{default.source_space}"   # {" or ".join(SOURCE_SPACES)}',
        '# surfaces = "surfaces"    # folder with own scalp, outer_skull, inner_skull (.surf.gii)',
        f"# conductivity = [{scalp}, {skull}, {brain}]   # S/m: scalp, skull, brain",
        f"# permutations = {default.permutations}",
        f"# seed = {default.seed}",
        "",
    ]
    return "\n".join(lines)

"""What goes into a session: files read and checked, names understood, everything hashed."""

from __future__ import annotations

import logging
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from locator.errors import CommandLineError, FileError, LabelError
from locator.head import ROLES
from locator.io import bids, reviews
from locator.io.eeg import read_recording
from locator.io.files import existing_file, read_text, sha256_of
from locator.io.gifti import read_surface
from locator.io.nifti import Grid, read_grid, read_volume, sidecar_path
from locator.layout import (
    Layout,
    channel_kind,
    custom_layout,
    normalise_name,
    standard_layout,
)
from locator.pipeline import InputFile
from locator.recording import Recording, find_channels, scalp_electrodes
from locator.results import Finding
from locator.reviews import Review
from locator.session.options import SessionOptions
from locator.volume import Volume

logger = logging.getLogger(__name__)

NOT_ELECTRODES = ("ecg", "eog", "emg", "trigger", "reference", "meg")


@dataclass(kw_only=True)
class Inputs:
    """Everything that was read for one command.

    Attributes
    ----------
    volume, grid
        The T1 and its header's transforms.
    t1_name : str
    t1_uri : str or None
    recording : Recording or None
    layout : Layout or None
        Of all names asked for, those without a channel last; None for `head`.
    channel_names : tuple of str
        The electrodes among them that have a channel.
    given : tuple or None
        Names, positions and standard deviations from ``--electrodes``.
    landmarks : (3, 3) ndarray or None
    surfaces : dict of str to tuple of ndarray
        Vertices (scanner mm) and faces of surfaces from ``--surfaces``, by role.
    reviews : tuple of Review
    files : list of InputFile
    sizes : dict of str to int
        Bytes of each file, by its path.
    findings : list of Finding
    """

    volume: Volume
    grid: Grid
    t1_name: str
    t1_uri: str | None = None
    recording: Recording | None = None
    layout: Layout | None = None
    channel_names: tuple[str, ...] = ()
    given: tuple[tuple[str, ...], NDArray[np.float64], NDArray[np.float64]] | None = None
    landmarks: NDArray[np.float64] | None = None
    surfaces: dict[str, tuple[NDArray[np.float64], NDArray[np.int32]]] = field(default_factory=dict)
    reviews: tuple[Review, ...] = ()
    files: list[InputFile] = field(default_factory=list)
    sizes: dict[str, int] = field(default_factory=dict)
    findings: list[Finding] = field(default_factory=list)


def read_inputs(options: SessionOptions, *, names: bool, recording: bool, out: Path) -> Inputs:
    """Read and check everything that a command needs, before anything is computed.

    Parameters
    ----------
    options : SessionOptions
    names : bool
        Whether electrode names are wanted (`find`, `run`).
    recording : bool
        Whether the recording is wanted (`run`).
    out : Path
        Output folder; its ``review.jsonl`` is an input.

    Returns
    -------
    Inputs

    Raises
    ------
    CommandLineError
        If a file that is needed was not named.
    LocatorError
        If an input cannot be used.
    """
    if options.t1 is None:
        raise CommandLineError("No T1 scan was named. Give --t1 FILE, or t1 in the session file.")
    existing_file(options.t1, "T1")
    if recording and options.eeg is None:
        msg = "No recording was named. Give --eeg FILE, or eeg in the session file."
        raise CommandLineError(msg)
    volume = read_volume(options.t1)
    inputs = Inputs(
        volume=volume,
        grid=read_grid(options.t1),
        t1_name=options.t1.name,
        t1_uri=bids.bids_uri(options.t1),
    )
    _note(inputs, "t1", options.t1)
    if sidecar_path(options.t1).is_file():
        _note(inputs, "t1 sidecar", sidecar_path(options.t1))
    if options.landmarks is not None:
        inputs.landmarks = bids.read_landmarks(options.landmarks)
        _note(inputs, "landmarks", options.landmarks)
    if options.surfaces is not None:
        _read_surfaces(inputs, options.surfaces, out)
    wants_channels = names and options.names in (None, "eeg")
    if recording or (wants_channels and options.eeg is not None):
        assert options.eeg is not None
        inputs.recording = read_recording(options.eeg)
        for path in recording_files(options.eeg):
            _note(inputs, "eeg", path)
    if names:
        _read_names(inputs, options)
        path = out / reviews.NAME
        inputs.reviews, findings = reviews.read_reviews(path)
        inputs.findings += findings
        if path.is_file():
            _note(inputs, "review", path)
    return inputs


def _note(inputs: Inputs, role: str, path: Path) -> None:
    whole = str(path.absolute())
    size = path.stat().st_size
    inputs.files.append(InputFile(role=role, path=whole, sha256=sha256_of(path, size)))
    inputs.sizes[whole] = size


def recording_files(path: Path) -> list[Path]:
    """Return all files that a recording consists of, the named one first.

    A BrainVision header names its data and marker files; a ``.set`` may have a ``.fdt``.

    Parameters
    ----------
    path : Path
    """
    files = [path]
    if path.suffix.lower() == ".vhdr":
        for line in path.read_text(encoding="latin-1").splitlines():
            key, _, value = line.partition("=")
            if key.strip().lower() in ("datafile", "markerfile") and value.strip():
                name = value.strip().replace("$b", path.stem)
                files.append(path.parent / name)
    elif path.suffix.lower() == ".set":
        files.append(path.with_suffix(".fdt"))
    return [files[0], *(extra for extra in files[1:] if extra.is_file())]


def _read_surfaces(inputs: Inputs, folder: Path, out: Path) -> None:
    """Read the surfaces of a folder by their names; tell what is there but not used."""
    wanted = ", ".join(f"{role}.surf.gii" for role in reversed(ROLES))
    if not folder.is_dir():
        msg = (
            f"There is no folder {folder} (wanted as surfaces). Give a folder with one or more of"
            f" {wanted}."
        )
        raise FileError(msg)
    if folder.resolve() == (out / "head").resolve():
        msg = (
            f"The folder of surfaces {folder} is where this command writes its own. Copy the"
            " surfaces to another folder, or choose another --out."
        )
        raise CommandLineError(msg)
    present = sorted(path for path in folder.iterdir() if path.name.lower().endswith(".gii"))
    used = []
    for role in ROLES:
        found = [
            path for path in present if path.name.lower() in (f"{role}.surf.gii", f"{role}.gii")
        ]
        if len(found) > 1:
            msg = (
                f"{folder} holds {' and '.join(path.name for path in found)}: it is not clear which"
                f" is the {role.replace('_', ' ')}. Take one of them away."
            )
            raise FileError(msg)
        if found:
            surface = read_surface(found[0])
            inputs.surfaces[role] = (surface.vertices_scanner_mm, surface.faces)
            _note(inputs, f"{role.replace('_', ' ')} surface", found[0])
            used.append(found[0])
    if not used:
        listed = ", ".join(path.name for path in present[:6]) or "no .gii file"
        msg = f"{folder} (wanted as surfaces) holds {listed}, but none of {wanted}. Rename them so."
        raise FileError(msg)
    others = [path.name for path in present if path not in used]
    if others:
        inputs.findings.append(
            Finding(
                level="look",
                stage="surfaces",
                problem=f"{', '.join(others)} in {folder} {'is' if len(others) == 1 else 'are'} not"
                " used.",
                suggestion=f"Surfaces are known by their names: {wanted}.",
                subject="surfaces",
                doubt=0.3,
            )
        )


@dataclass(frozen=True)
class OwnPlaces:
    """Names and places of a table that a person gave."""

    names: tuple[str, ...]
    positions_mm: NDArray[np.float64]
    source: str


# ── names ────────────────────────────────────────────────────────────────────────────────


def _read_names(inputs: Inputs, options: SessionOptions) -> None:
    """Understand which electrodes are asked for, and lay them out."""
    own: OwnPlaces | None = None
    if options.layout is not None:
        own = OwnPlaces(*bids.read_positions(options.layout, "layout")[:2], str(options.layout))
        _note(inputs, "layout", options.layout)
    if options.electrodes is not None:
        _read_given(inputs, options.electrodes)
        assert inputs.given is not None
        own = OwnPlaces(*inputs.given[:2], str(options.electrodes))
    asked = _asked_names(inputs, options, own)
    also = _canonical(options.also, own)
    if inputs.recording is not None:
        written = {normalise_name(t) or t.strip() for t in inputs.recording.channel_names}
        with_channel = tuple(name for name in asked if name not in also or name in written)
        channels = find_channels(inputs.recording, with_channel, also, where=str(options.eeg))
        inputs.channel_names = channels.electrode_names
    known = {name.casefold() for name in asked}
    everyone = (*asked, *(name for name in also if name.casefold() not in known))
    if inputs.given is not None:
        names, places, spread = inputs.given
        rows = [names.index(name) for name in everyone]
        inputs.given = (everyone, places[rows], spread[rows])
        return
    if own is None:
        inputs.layout = standard_layout(everyone)
    else:
        inputs.layout = custom_layout(
            own.names,
            own.positions_mm,
            _layout_landmarks(Path(own.source)),
            own.source,
            wanted=everyone,
        )


def _layout_landmarks(path: Path) -> NDArray[np.float64] | None:
    """Landmarks in the frame of a template, from the coordinate file beside it."""
    for candidate in (
        path.with_name("coordsystem.json"),
        path.with_name(path.name.replace("_electrodes.tsv", "_coordsystem.json")),
    ):
        if candidate != path and candidate.is_file():
            try:
                return bids.read_landmarks(candidate)
            except FileError:
                return None
    return None


def _asked_names(inputs: Inputs, options: SessionOptions, own: OwnPlaces | None) -> tuple[str, ...]:
    """Names with a channel or a capsule, in the order asked."""
    given = options.names
    if given is None or given == "eeg":
        if inputs.recording is None:
            msg = "The names are to come from the recording, but none was named. Give --eeg FILE."
            raise CommandLineError(msg)
        if own is not None:
            return _channels_of_table(inputs, inputs.recording, own)
        return scalp_electrodes(inputs.recording)
    if isinstance(given, tuple):
        texts = given
    elif Path(given).is_file():
        texts = _names_in_file(Path(given))
        _note(inputs, "names", Path(given))
    elif _looks_like_path(given):
        existing_file(Path(given), "electrode names")
        texts = ()
    else:
        texts = tuple(part.strip() for part in given.split(","))
    electrodes = []
    for text in texts:
        kind = "electrode" if own is not None else channel_kind(text)
        if kind in NOT_ELECTRODES:
            inputs.findings.append(
                Finding(
                    level="note",
                    stage="names",
                    problem=f"'{text}' was taken for a channel of kind {kind}, not for a scalp"
                    " electrode, and has no row.",
                    suggestion="If it wears a capsule, give its place (such as FCz) with --also.",
                    subject=text,
                )
            )
        else:
            electrodes.append(text)
    return _canonical(electrodes, own)


def _canonical(texts: Sequence[str], own: OwnPlaces | None) -> tuple[str, ...]:
    """Return the layout's spelling of names, refusing empty, unknown and doubled ones."""
    if not texts:
        return ()
    if own is None:
        return standard_layout(texts).names
    return custom_layout(own.names, own.positions_mm, None, own.source, wanted=texts).names


def _names_in_file(path: Path) -> tuple[str, ...]:
    """One name a line; what follows a # is a remark."""
    lines = [line.split("#", 1)[0].strip() for line in read_text(path, "names").splitlines()]
    names = tuple(line for line in lines if line)
    if not names:
        msg = f"{path} (wanted as electrode names) holds no name. Write one a line."
        raise FileError(msg)
    if len(names) == 1 and "," in names[0]:
        return tuple(part.strip() for part in names[0].split(","))
    return names


def _looks_like_path(text: str) -> bool:
    if "," in text:
        return False
    return (
        "/" in text or "\\" in text or Path(text).suffix.lower() in (".txt", ".tsv", ".csv", ".lst")
    )


def _channels_of_table(inputs: Inputs, recording: Recording, own: OwnPlaces) -> tuple[str, ...]:
    """Names of a table of one's own that have a channel, in the order of the recording."""
    by_text = {name.casefold(): name for name in own.names}
    found: list[str] = []
    for text in recording.channel_names:
        usual = normalise_name(text)
        name = by_text.get(text.strip().casefold()) or by_text.get((usual or "").casefold())
        if name is not None and name not in found:
            found.append(name)
        elif name is None and usual is not None:
            inputs.findings.append(
                Finding(
                    level="look",
                    stage="names",
                    problem=f"Channel '{text}' is a scalp electrode without a place in {own.source} and"
                    " is not used.",
                    suggestion="Add its place to the table if it should be.",
                    subject=usual,
                    doubt=0.7,
                )
            )
    if not found:
        msg = (
            f"No channel of the recording has a name in {own.source} (its names begin"
            f" {', '.join(own.names[:6])}; the channels {', '.join(recording.channel_names[:6])})."
            " Use the same names in both."
        )
        raise LabelError(msg)
    return tuple(found)


def _read_given(inputs: Inputs, path: Path) -> None:
    """Positions from elsewhere, under canonical names; another name keeps its own spelling."""
    names, places, spread = bids.read_positions(path, "electrodes")
    _note(inputs, "electrodes", path)
    usual = tuple(normalise_name(name) or name for name in names)
    if len(set(usual)) < len(usual):
        doubled = sorted({name for name in usual if usual.count(name) > 1})
        msg = f"{path} holds {', '.join(doubled)} twice under different spellings."
        raise LabelError(msg + " Remove one of each.")
    inputs.given = (usual, places, spread)

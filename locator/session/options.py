"""What a person asks for: from the command line, from a session file, or both."""

from __future__ import annotations

import difflib
import math
import tomllib
from collections.abc import Callable, Mapping
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any

from locator.errors import CommandLineError, FileError, LocatorError, SettingError

METHODS = ("eloreta", "sloreta", "dspm", "mne")
SOURCE_SPACES = ("grey", "brain", "cortex")
SIDES = ("right", "left")


@dataclass(frozen=True, kw_only=True, slots=True)
class SessionOptions:
    """Everything that can be asked for, by its session key.

    Attributes
    ----------
    t1, eeg : Path or None
        T1 scan (NIfTI) and recording.
    out : Path or None
        Output folder; default ``locator-out`` beside the T1.
    subject : str
        Name for the report; default none.
    names : str or tuple of str or None
        Electrode names, a text file of them, or ``"eeg"``: those of the recording. Default for
        a run: ``"eeg"``.
    also : tuple of str
        Names that wear a capsule but have no channel.
    capsule_mm : float or None
        capsule diameter, mm, 3 to 15; default: estimated from the image.
    holder_mm : float or None
        Skin to underside of the capsule, mm, 0 to 30; default: measured from the image.
    side_marker : {"right", "left"} or None
        An extra capsule was worn on that side.
    layout, landmarks, electrodes : Path or None
        Template places, landmarks, and positions from elsewhere.
    event : str or None
        Event name; default: the only kind there is.
    epoch : (2,) tuple of float
        Start and end round the event, s; default -0.2 0.5, baseline up to 0.
    window : (2,) tuple of float or None
        The part that is tested, s; default: the epoch after 0.
    method : str or None
        ``eloreta``, ``sloreta``, ``dspm`` or ``mne``; default: the one of the inverse stage.
    source_space : str
        ``grey``, ``brain`` or ``cortex``.
    surfaces : Path or None
        Folder with surfaces in place of ours: ``scalp``, ``outer_skull``, ``inner_skull``
        (``.surf.gii`` or ``.gii``, scanner mm), any of the three.
    conductivity : (3,) tuple of float
        Scalp, skull, brain, S/m, each over 0 and up to 10; default 0.33 0.0132 0.33 (ratio 25:
        Lai et al. 2005, Clin Neurophysiol).
    permutations : int
        Sign flips of the test, from 20 (fewer cannot reach p = 0.05); default 5000.
    seed : int
        Default 0.
    """

    t1: Path | None = None
    eeg: Path | None = None
    out: Path | None = None
    subject: str = ""
    names: str | tuple[str, ...] | None = None
    also: tuple[str, ...] = ()
    capsule_mm: float | None = None
    holder_mm: float | None = None
    side_marker: str | None = None
    layout: Path | None = None
    landmarks: Path | None = None
    electrodes: Path | None = None
    event: str | None = None
    epoch: tuple[float, float] = (-0.2, 0.5)
    window: tuple[float, float] | None = None
    method: str | None = None
    source_space: str = "grey"
    surfaces: Path | None = None
    conductivity: tuple[float, float, float] = (0.33, 0.0132, 0.33)
    permutations: int = 5000
    seed: int = 0

    def as_settings(self) -> dict[str, Any]:
        """Return the options as plain JSON values, paths made absolute."""
        values: dict[str, Any] = {}
        for field in fields(self):
            value = getattr(self, field.name)
            names_file = field.name == "names" and isinstance(value, str) and Path(value).is_file()
            if isinstance(value, Path) or names_file:
                value = str(Path(value).absolute())
            values[field.name] = list(value) if isinstance(value, tuple) else value
        return values


PATHS = ("t1", "eeg", "out", "layout", "landmarks", "electrodes", "surfaces")
KEYS = tuple(field.name for field in fields(SessionOptions))


# ── one check per kind of value ──────────────────────────────────────────────────────────


def _text(value: Any) -> str:
    if not isinstance(value, str) or not value.strip():
        raise ValueError("text is needed (in a session file: in quotes)")
    return value.strip()


def _path(value: Any) -> Path:
    if isinstance(value, Path):
        return value
    return Path(_text(value)).expanduser()


def _words(value: Any) -> str | tuple[str, ...]:
    if isinstance(value, str):
        return _text(value)
    if not isinstance(value, list | tuple) or not all(isinstance(item, str) for item in value):
        raise ValueError('a list of names such as ["Fp1", "Fp2"] is needed')
    if not value:
        raise ValueError("the list of names is empty")
    return tuple(value)


def _list_of_words(value: Any) -> tuple[str, ...]:
    if isinstance(value, str):
        value = [part.strip() for part in value.split(",")] if value.strip() else []
    if not isinstance(value, list | tuple) or not all(isinstance(item, str) for item in value):
        raise ValueError('a list of names such as ["FCz", "AFz"] is needed')
    return tuple(value)


def _number(value: Any) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
        raise ValueError("a number is needed")
    return float(value)


def _numbers(count: int) -> Callable[[Any], tuple[float, ...]]:
    def check(value: Any) -> tuple[float, ...]:
        if not isinstance(value, list | tuple) or len(value) != count:
            msg = f"{count} numbers are needed"
            raise ValueError(msg)
        return tuple(_number(item) for item in value)

    return check


def _between(low: float, high: float, unit: str) -> Callable[[Any], float]:
    def check(value: Any) -> float:
        number = _number(value)
        if not low <= number <= high:
            msg = f"allowed are {low:g} to {high:g} {unit}"
            raise ValueError(msg)
        return number

    return check


def _whole(low: int, high: int) -> Callable[[Any], int]:
    def check(value: Any) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not low <= value <= high:
            msg = f"a whole number from {low} to {high} is needed"
            raise ValueError(msg)
        return value

    return check


def _one_of(*choices: str) -> Callable[[Any], str]:
    def check(value: Any) -> str:
        if value not in choices:
            msg = f"allowed are {', '.join(choices)}"
            raise ValueError(msg)
        return str(value)

    return check


def _span(value: Any) -> tuple[float, float]:
    start, end = _numbers(2)(value)
    if not start < end:
        raise ValueError("the start must lie before the end (both in s)")
    if max(abs(start), abs(end)) > 30:
        raise ValueError("times are in seconds, 30 at most")
    return start, end


def _epoch(value: Any) -> tuple[float, float]:
    start, end = _span(value)
    if start > -0.02 or end <= 0:
        raise ValueError(
            "the epoch must begin at -0.02 s or earlier (the part before 0 is the baseline)"
            " and end after 0"
        )
    return start, end


def _conductivity(value: Any) -> tuple[float, float, float]:
    scalp, skull, brain = _numbers(3)(value)
    if not all(0 < item <= 10 for item in (scalp, skull, brain)):
        raise ValueError("each must be over 0 and up to 10 S/m")
    return scalp, skull, brain


CHECKS: Mapping[str, Callable[[Any], Any]] = {
    **dict.fromkeys(PATHS, _path),
    "subject": _text,
    "names": _words,
    "also": _list_of_words,
    "capsule_mm": _between(3, 15, "mm"),
    "holder_mm": _between(0, 30, "mm"),
    "side_marker": _one_of(*SIDES),
    "event": _text,
    "epoch": _epoch,
    "window": _span,
    "method": _one_of(*METHODS),
    "source_space": _one_of(*SOURCE_SPACES),
    "conductivity": _conductivity,
    "permutations": _whole(20, 10_000_000),
    "seed": _whole(0, 2**63 - 1),
}


# ── the session file, the command line, and both together ────────────────────────────────


def read_session_file(path: Path) -> dict[str, Any]:
    """Read and check a session file.

    Parameters
    ----------
    path : Path
        TOML; the keys are those of `SessionOptions`.

    Returns
    -------
    dict
        Checked values by key; paths are made relative to the file.

    Raises
    ------
    FileError
        If the file is absent or no text.
    SettingError
        If it is no TOML, holds an unknown key, or a value cannot be used.
    """
    try:
        text = path.read_text(encoding="utf-8-sig")
    except FileNotFoundError as error:
        msg = f"There is no session file {path}. Check the path, or write one with: locator begin"
        raise FileError(msg) from error
    except (OSError, UnicodeDecodeError) as error:
        msg = f"The session file {path} cannot be read ({error}). It must be plain UTF-8 text."
        raise FileError(msg) from error
    try:
        given = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        msg = f"The session file {path} is not valid TOML: {error}. Mend that place."
        raise SettingError(msg) from error
    values = {}
    for key, value in given.items():
        if key not in CHECKS:
            raise SettingError(unknown_key(key, path))
        checked = checked_value(key, value, f"in {path}", SettingError)
        if isinstance(checked, Path):
            checked = path.parent / checked
        values[key] = checked
    if isinstance(values.get("names"), str):
        beside = path.parent / values["names"]
        if beside.is_file():
            values["names"] = str(beside)
    return values


def unknown_key(key: str, path: Path) -> str:
    """Return the message for a key that does not exist."""
    near = difflib.get_close_matches(key, KEYS, n=1, cutoff=0.0)
    return (
        f"The session file {path} has a key '{key}', which does not exist; the nearest known key"
        f" is '{near[0]}'. Known are: {', '.join(KEYS)}."
    )


def checked_value(key: str, value: Any, where: str, error_class: type[LocatorError]) -> Any:
    """Return a value in the form that `SessionOptions` holds.

    Raises
    ------
    LocatorError
        Of the class given, naming key, place and value.
    """
    try:
        return CHECKS[key](value)
    except ValueError as error:
        shown = " ".join(str(v) for v in value) if isinstance(value, tuple | list) else value
        msg = f"The value of {key} {where} is {shown!r}: {error}."
        raise error_class(msg) from error


def gather_options(flags: Mapping[str, Any], session_file: Path | None = None) -> SessionOptions:
    """Join session file and command line; the command line wins.

    Parameters
    ----------
    flags : mapping
        Session key to value; what is None was not given.
    session_file : Path, optional

    Returns
    -------
    SessionOptions

    Raises
    ------
    CommandLineError
        If a value on the command line cannot be used.
    SettingError, FileError
        If the session file or a value in it cannot be used.
    """
    given = {} if session_file is None else read_session_file(session_file)
    typed = {key for key, value in flags.items() if value is not None}
    for key in sorted(typed):
        option = "--" + key.replace("_", "-")
        given[key] = checked_value(key, flags[key], f"({option})", CommandLineError)
    options = SessionOptions(**given)
    if options.window is not None:
        start, end = options.window
        if start < options.epoch[0] or end > options.epoch[1]:
            wrong = CommandLineError if typed & {"window", "epoch"} else SettingError
            msg = (
                f"The window {start:g} to {end:g} s reaches outside the epoch"
                f" {options.epoch[0]:g} to {options.epoch[1]:g} s. Change window or epoch."
            )
            raise wrong(msg)
    return options

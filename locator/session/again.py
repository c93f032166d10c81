"""Make the same results anew from what an earlier run wrote down."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from locator.errors import FileError, SettingError
from locator.io import reviews
from locator.io.files import HIDDEN, read_json, sha256_of, write_bytes
from locator.session.options import KEYS, PATHS, SessionOptions, checked_value
from locator.session.outputs import SCHEMA


def prepare_again(provenance: Path, out: Path) -> SessionOptions:
    """Check that all inputs are what they were, and give the settings for a new folder.

    Decisions of people are inputs too: those that were there then are put into the new folder.

    Parameters
    ----------
    provenance : Path
        ``provenance.json`` of an earlier run.
    out : Path
        New folder, which must not hold results.

    Returns
    -------
    SessionOptions

    Raises
    ------
    FileError
        If the file is no provenance, an input is gone or has changed, or the folder is in use.
    """
    record = read_json(provenance, "provenance")
    if record.get("schema_version") != SCHEMA or record.get("command") != "run":
        msg = (
            f"{provenance} is not what a run of this version wrote (schema_version"
            f" {record.get('schema_version')!r}, command {record.get('command')!r};"
            f" {SCHEMA} and 'run' are needed). Give the provenance.json of a run."
        )
        raise FileError(msg)
    if out.is_dir() and any(entry.name != HIDDEN for entry in out.iterdir()):
        msg = f"{out} is not empty. Choose a new folder for --again, so that nothing is mixed."
        raise FileError(msg)
    kept: bytes | None = None
    for entry in record.get("inputs", []):
        kept = _unchanged(entry, provenance) or kept
    session = record.get("session", {})
    values: dict[str, Any] = {}
    for key, value in session.items():
        if key not in KEYS:
            msg_0 = f"{provenance} holds a setting '{key}' that this version has not."
            raise FileError(msg_0)
        if value is None or value in ("", []):
            continue
        values[key] = checked_value(key, value, f"in {provenance}", SettingError)
    for key in PATHS:
        if key in values:
            values[key] = Path(values[key])
    values["out"] = out
    if kept is not None:
        write_bytes(out / reviews.NAME, kept)
    return SessionOptions(**values)


def _unchanged(entry: dict[str, Any], provenance: Path) -> bytes | None:
    """Refuse an input that is not what it was; return the decisions of people as they were."""
    try:
        role, path = entry["role"], Path(entry["path"])
        digest, size = entry["sha256"], entry["bytes"]
    except (KeyError, TypeError) as error:
        msg = f"{provenance} has an incomplete entry under inputs ({entry!r})."
        raise FileError(msg) from error
    if not path.is_file():
        msg = f"The input {path} ({role}) of {provenance} is not there any more. Put it back."
        raise FileError(msg)
    # Decisions are only ever added at the end: the beginning must be what it was.
    only = size if role == "review" else None
    if sha256_of(path, only) != digest:
        msg = (
            f"The input {path} ({role}) has changed since {provenance} was written, so the same"
            " numbers cannot be expected. Put the old file back, or start a new run."
        )
        raise FileError(msg)
    return path.read_bytes()[:size] if role == "review" else None

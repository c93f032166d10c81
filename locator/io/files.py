"""Whole files or none: temporary names, checks, renames, hashes, and the lock on a folder."""

from __future__ import annotations

import gzip
import hashlib
import json
import os
import secrets
import sys
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import IO, Any

from locator.errors import BusyError, FileError

PART = ".part-"
"""Beginning of every temporary name; what carries it is left over from a stopped run."""

HIDDEN = ".locator"
"""Folder inside an output folder that holds the lock, the stage cache and records."""


def write_whole(
    path: Path, writer: Callable[[Path], None], *, check: Callable[[Path], None] | None = None
) -> None:
    """Write a file so that it is complete or not there.

    Parameters
    ----------
    path : Path
        Final name; its folder is made when needed.
    writer : callable
        Gets a temporary path in the same folder (same ending) and writes it.
    check : callable, optional
        Gets the temporary path; reads it back and raises when it is not right.

    Raises
    ------
    FileError
        If the system refuses to write, naming the file and the reason.
    """
    part = path.with_name(f"{PART}{os.getpid()}-{secrets.token_hex(4)}-{path.name}")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        writer(part)
        if check is not None:
            check(part)
        with part.open("rb+") as written:
            os.fsync(written.fileno())
        part.replace(path)
        _sync_folder(path.parent)
    except OSError as error:
        msg = (
            f"{path} cannot be written: {error.strerror or error}."
            " Choose another --out, or make room and check who may write there."
        )
        raise FileError(msg) from error
    finally:
        with suppress(OSError):
            part.unlink(missing_ok=True)


def _sync_folder(folder: Path) -> None:
    """Make a rename survive a power cut, where the system can."""
    if os.name != "posix":
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def write_bytes(path: Path, content: bytes) -> None:
    """Write bytes whole; a file that holds them already is left as it is."""
    if path.is_file() and path.stat().st_size == len(content) and path.read_bytes() == content:
        return
    write_whole(path, lambda part: _put(part, content))


def _put(path: Path, content: bytes) -> None:
    path.write_bytes(content)


def write_text(path: Path, text: str) -> None:
    """Write UTF-8 text with plain newlines, whole."""
    write_bytes(path, text.encode("utf-8"))


def write_json(path: Path, value: Mapping[str, Any]) -> None:
    """Write JSON with sorted keys, whole."""
    text = json.dumps(value, indent=2, sort_keys=True, ensure_ascii=False, allow_nan=False)
    write_text(path, text + "\n")


def gzip_bytes(content: bytes) -> bytes:
    """Compress with no time and no name inside, so that the same content gives the same bytes."""
    return gzip.compress(content, compresslevel=6, mtime=0)


def existing_file(path: Path, role: str) -> Path:
    """Return a path after making sure that a file with something in it is there.

    Parameters
    ----------
    path : Path
    role : str
        What it is wanted as, such as ``"T1"``, for the message.

    Raises
    ------
    FileError
        If there is no such file, it is a folder, cannot be read, or is empty.
    """
    if not path.exists():
        near = _nearest_name(path)
        msg = f"There is no file {path} (wanted as {role})."
        raise FileError(msg + (f" Did you mean {near}?" if near else " Check the path."))
    if path.is_dir():
        msg_0 = f"{path} (wanted as {role}) is a folder. Give the file in it."
        raise FileError(msg_0)
    try:
        with path.open("rb") as handle:
            first = handle.read(1)
    except OSError as error:
        msg = f"{path} (wanted as {role}) cannot be read: {error.strerror}. Check who may read it."
        raise FileError(msg) from error
    if not first:
        msg_0 = f"{path} (wanted as {role}) is empty (0 bytes). Copy it again."
        raise FileError(msg_0)
    return path


def _nearest_name(path: Path) -> str:
    import difflib

    try:
        names = [entry.name for entry in path.parent.iterdir() if entry.is_file()]
    except OSError:
        return ""
    near = difflib.get_close_matches(path.name, names, n=1, cutoff=0.8)
    return str(path.parent / near[0]) if near else ""


def read_text(path: Path, role: str) -> str:
    """Read a UTF-8 text file.

    Raises
    ------
    FileError
        If the file is absent, empty, or no text.
    """
    existing_file(path, role)
    try:
        return path.read_text(encoding="utf-8-sig")
    except UnicodeDecodeError as error:
        msg = f"{path} (wanted as {role}) is not text in UTF-8 (byte {error.start})."
        raise FileError(msg + " Save it as plain UTF-8 text.") from error


def read_json(path: Path, role: str) -> dict[str, Any]:
    """Read a JSON object.

    Raises
    ------
    FileError
        If the file is absent, no JSON, or JSON but not an object.
    """
    text = read_text(path, role)
    try:
        value = json.loads(text)
    except json.JSONDecodeError as error:
        msg = f"{path} (wanted as {role}) is not valid JSON: {error.msg}, line {error.lineno}."
        raise FileError(msg + " Mend that line.") from error
    if not isinstance(value, dict):
        msg = f"{path} (wanted as {role}) holds a JSON {type(value).__name__}, not an object."
        raise FileError(msg + ' It must begin with "{".')
    return value


def sha256_of(path: Path, n_bytes: int | None = None) -> str:
    """SHA-256 of a file, or of its first bytes.

    Parameters
    ----------
    path : Path
    n_bytes : int, optional
        How many bytes from the beginning; default: all.
    """
    digest = hashlib.sha256()
    left = n_bytes
    with path.open("rb") as handle:
        while left is None or left > 0:
            block = handle.read(1 << 20 if left is None else min(1 << 20, left))
            if not block:
                break
            digest.update(block)
            left = None if left is None else left - len(block)
    return digest.hexdigest()


def clean_parts(out: Path) -> int:
    """Remove what stopped runs left under temporary names; return how many files that were.

    Only to be called by the holder of the folder's lock.
    """
    leftovers = [path for path in out.rglob(f"{PART}*") if path.is_file()]
    for path in leftovers:
        path.unlink(missing_ok=True)
    return len(leftovers)


@contextmanager
def folder_lock(out: Path) -> Iterator[None]:
    """Hold an output folder for one command.

    The lock is the system's own on the file ``.locator/lock``, so it ends with the process
    however that ends; the number in the file only serves the message of whoever is refused.

    Parameters
    ----------
    out : Path
        Output folder; made when needed, and removed again if nothing was written in it.

    Raises
    ------
    BusyError
        If another command is at work in the folder.
    FileError
        If the folder cannot be made or written.
    """
    made = [folder for folder in (out, *out.parents) if not folder.exists()]
    hidden = out / HIDDEN
    try:
        hidden.mkdir(parents=True, exist_ok=True)
        handle = (hidden / "lock").open("a+")
    except OSError as error:
        msg = f"The output folder {out} cannot be written: {error.strerror or error}."
        raise FileError(msg + " Choose another --out.") from error
    try:
        if not _take(handle):
            handle.seek(0)
            holder = handle.read().strip() or "unknown"
            msg = (
                f"Another command (process {holder}) is at work in {out}."
                " Wait until it has ended, or choose another --out."
            )
            raise BusyError(msg)
        handle.seek(0)
        handle.truncate()
        handle.write(f"{os.getpid()}\n")
        handle.flush()
        yield
    finally:
        handle.close()
        _remove_empty(out, made)


def _take(handle: IO[str]) -> bool:
    """Try to take the system's lock on an open file."""
    try:
        if sys.platform == "win32":
            import msvcrt

            handle.seek(0)
            msvcrt.locking(handle.fileno(), msvcrt.LK_NBLCK, 1)
        else:
            import fcntl

            fcntl.flock(handle.fileno(), fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        return False
    return True


def _remove_empty(out: Path, made: list[Path]) -> None:
    """Take back the folders that this command made when it wrote nothing in them."""
    if not made:
        return
    if any(path.is_file() and path.name != "lock" for path in out.rglob("*")):
        return
    for folder in sorted((p for p in out.rglob("*") if p.is_dir()), reverse=True):
        (folder / "lock").unlink(missing_ok=True)
        folder.rmdir()
    for folder in made:
        try:
            folder.rmdir()
        except OSError:
            return

"""What a command leaves for the next one: which stored stages make up its results."""

from __future__ import annotations

from dataclasses import fields
from pathlib import Path

from locator.errors import FileError
from locator.io.cache import StageCache, load, store
from locator.io.files import HIDDEN, existing_file, sha256_of
from locator.io.nifti import read_volume
from locator.pipeline import RunResults

SCHEMA = 1


def record_path(out: Path, command: str) -> Path:
    """File that tells what a command left in a folder."""
    return out / HIDDEN / f"{command}.zip"


def save_record(out: Path, results: RunResults, cache: StageCache) -> None:
    """Write down which stored stages the results consist of.

    Parameters
    ----------
    out : Path
    results : RunResults
        The volume is named by its file, a stage's result by its entry in the cache.
    cache : StageCache

    Raises
    ------
    FileError
        If the record cannot be written.
    """
    stored, plain = {}, {}
    for field in fields(results):  # type: ignore[arg-type]
        value = getattr(results, field.name)
        name = cache.file_of(value)
        if name is not None:
            stored[field.name] = name
        elif field.name != "volume":
            plain[field.name] = value
    t1 = next(file for file in results.inputs if file.role == "t1")
    store(
        record_path(out, results.command),
        {
            "schema": SCHEMA,
            "stored": stored,
            "plain": plain,
            "t1": {"path": t1.path, "sha256": t1.sha256},
        },
    )


def files_in_use(out: Path) -> set[str]:
    """Names of the cache entries that any record in the folder refers to."""
    names: set[str] = set()
    for path in (out / HIDDEN).glob("*.zip"):
        try:
            names |= set(load(path)["stored"].values())
        except (ValueError, KeyError, TypeError):
            continue
    return names


def load_results(out: Path) -> RunResults:
    """Bring back the results of the newest `find` or `run` in a folder.

    Parameters
    ----------
    out : Path

    Returns
    -------
    RunResults

    Raises
    ------
    FileError
        If there are none, they are incomplete, or the T1 is no longer the one they rest on.
    """
    if not out.is_dir():
        msg = f"There is no folder {out}. Give the output folder of find or run."
        raise FileError(msg)
    records = [record_path(out, command) for command in ("find", "run")]
    records = [path for path in records if path.is_file()]
    if not records:
        msg = f"{out} holds no results of find or run. Start one of them with --out {out} first."
        raise FileError(msg)
    newest = max(records, key=lambda path: path.stat().st_mtime_ns)
    try:
        record = load(newest)
        if record["schema"] != SCHEMA:
            msg = f"schema {record['schema']}"
            raise ValueError(msg)
        values = dict(record["plain"])
        for field, name in record["stored"].items():
            values[field] = load(out / HIDDEN / "stages" / name)
        t1, sha256 = Path(record["t1"]["path"]), record["t1"]["sha256"]
    except (ValueError, KeyError, TypeError) as error:
        msg = f"The results in {out} cannot be read back ({error}). Start find or run again."
        raise FileError(msg) from error
    existing_file(t1, "T1 of these results")
    if sha256_of(t1) != sha256:
        msg = f"{t1} has changed since {out} was made from it. Start find or run again."
        raise FileError(msg)
    return RunResults(volume=read_volume(t1), **values)

"""An invented session, and the whole job on it."""

from __future__ import annotations

import hashlib
import importlib.util
import json
import logging
import shutil
import subprocess
import sys
import time
from pathlib import Path

from locator.errors import LocatorError
from locator.io.files import HIDDEN, PART, folder_lock, write_text
from locator.session.options import gather_options
from locator.session.run import Outcome, run_all
from locator.session.stages import Told, silent

logger = logging.getLogger(__name__)

SETTINGS = ("--seed", "0", "--amplitude-nam", "80")
"""Of the invented session: a strong response, so that there is something to see."""

PROGRAM = "synthetic_heads"
"""A program of its own, started as one: it shares no code with this package."""

FOLDER = "invented-session"


class DemoError(LocatorError):
    """The invented session could not be made."""

    exit_code = 1


def run_demo(out: Path, *, permutations: int | None = None, told: Told = silent) -> Outcome:
    """Make an invented session (fixed seed) and do the whole job on it.

    Parameters
    ----------
    out : Path
        Output folder; the session is made in ``invented-session`` inside it, once.
    permutations : int, optional
        Sign flips of the test.
    told : callable
        Hears of the progress.

    Returns
    -------
    Outcome

    Raises
    ------
    DemoError
        If the session cannot be made.
    LocatorError
        If the job cannot be done.
    """
    # A wrong number of permutations is refused before anything is made.
    gather_options({"permutations": permutations})
    session = out / FOLDER
    if not _made_already(session):
        with folder_lock(out):
            _make(session, told)
    flags = {
        "t1": str(session / "T1.nii.gz"),
        "eeg": str(session / "eeg.vhdr"),
        "out": str(out),
        "subject": "invented session, no person",
        "permutations": permutations,
    }
    return run_all(gather_options(flags), told=told)


def _fingerprint() -> str:
    """SHA-256 of the source of the program that makes the session, and of its settings."""
    found = importlib.util.find_spec(PROGRAM)
    if found is None or found.origin is None:
        msg = f"The package {PROGRAM}, which makes the invented session, is not installed."
        raise DemoError(msg)
    digest = hashlib.sha256(" ".join(SETTINGS).encode())
    for path in sorted(Path(found.origin).parent.glob("*.py")):
        digest.update(path.name.encode() + path.read_bytes())
    return digest.hexdigest()


def _record(session: Path) -> Path:
    return session / HIDDEN / "made.json"


def _made_already(session: Path) -> bool:
    try:
        made = json.loads(_record(session).read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return False
    return bool(made == {"fingerprint": _fingerprint()})


def _make(session: Path, told: Told) -> None:
    """Make the session under a temporary name, then give it its own."""
    stage = "invented session"
    began = time.perf_counter()
    told(stage, 0.0, "")
    part = session.with_name(f"{PART}{session.name}")
    shutil.rmtree(part, ignore_errors=True)
    command = [sys.executable, "-m", PROGRAM, "--out", str(part), *SETTINGS]
    logger.info("starting %s", " ".join(command))
    last: list[str] = []
    with subprocess.Popen(
        command, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True, errors="replace"
    ) as process:
        try:
            assert process.stdout is not None
            for number, line in enumerate(process.stdout, start=1):
                last = [*last[-5:], line.rstrip()]
                told(stage, 1 - 0.8**number, line.partition("]")[2].strip() or line.strip())
        except BaseException:
            process.kill()
            process.wait()
            shutil.rmtree(part, ignore_errors=True)
            raise
    if process.returncode != 0:
        shutil.rmtree(part, ignore_errors=True)
        msg = (
            f"The invented session could not be made ({PROGRAM} ended with code"
            f" {process.returncode}): {' | '.join(last)}"
        )
        raise DemoError(msg)
    write_text(_record(part), json.dumps({"fingerprint": _fingerprint()}) + "\n")
    shutil.rmtree(session, ignore_errors=True)
    part.rename(session)
    told(stage, 1.0, f"{time.perf_counter() - began:.1f} s")

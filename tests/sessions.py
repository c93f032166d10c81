"""Small invented sessions on disk, made once for all tests that need a whole one."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Sequence
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory

from synthetic_heads.session import SessionSettings, make_session, write_session
from synthetic_heads.tape import NAMES_31

__all__ = [
    "NAMES_31",
    "PERMUTATIONS",
    "results_in",
    "run_arguments",
    "small_run_folder",
    "small_session",
    "start",
]

_KEPT: list[TemporaryDirectory] = []


@cache
def small_session() -> Path:
    """Folder with ``T1.nii.gz``, ``eeg.vhdr`` and ``truth.json``: a layered sphere at 2 mm.

    31 names, clean cap, one dipole of 60 nAm, 60 trials.
    """
    folder = TemporaryDirectory(prefix="small-session-")
    _KEPT.append(folder)
    settings = SessionSettings(
        seed=5,
        kind="sphere",
        names=NAMES_31,
        cap={"jitter_mm": 1.0, "n_off": 1, "n_extra": 1, "slide_mm": 1.0, "turn_deg": 1.0},
        scan={"voxel_mm": (2.0, 2.0, 2.0)},
        bandwidth_hz_per_voxel=None,
        amplitude_nam=60.0,
        recording={"n_trials": 60, "event_free_s": 60.0, "sampling_hz": 200.0},
    )
    write_session(folder.name, make_session(settings))
    return Path(folder.name)


PERMUTATIONS = 200


def run_arguments(session: Path, out: Path) -> list[str]:
    """Arguments of a whole run on the small session."""
    files = ["--t1", str(session / "T1.nii.gz"), "--eeg", str(session / "eeg.vhdr")]
    return ["run", *files, "--out", str(out), "--permutations", str(PERMUTATIONS)]


@cache
def small_run_folder() -> Path:
    """Output folder of one undisturbed run on the small session, by a process of its own."""
    folder = TemporaryDirectory(prefix="small-run-")
    _KEPT.append(folder)
    out = Path(folder.name) / "out"
    done = start(run_arguments(small_session(), out))
    assert done.returncode == 0, done.stderr
    return out


def start(arguments: Sequence[str], timeout_s: float = 600.0) -> subprocess.CompletedProcess[str]:
    """Run the command line in a process of its own."""
    return subprocess.run(
        [sys.executable, "-m", "locator", *map(str, arguments)],
        capture_output=True,
        text=True,
        timeout=timeout_s,
    )


def results_in(out: Path) -> dict[str, bytes]:
    """Bytes of every file that carries no time, by its name in the folder."""
    return {
        path.relative_to(out).as_posix(): path.read_bytes()
        for path in sorted(out.rglob("*"))
        if path.is_file()
        and ".locator" not in path.parts
        and path.name not in ("report.html", "provenance.json")
    }

"""One whole run on a real head: wall time and peak memory of each stage.

The head is real (``tests/real_heads.py``), its 61 capsules are painted, and the recording is
invented on a layered sphere: only times and memory mean anything here, not where the peak is.

    python tests/benchmarks/whole_run.py [HEAD]
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

HEAD = "s1"


def make_files(folder: Path, head: str) -> tuple[Path, Path]:
    """Write the painted scan and a recording with the same names."""
    from synthetic_heads.cap import make_cap
    from synthetic_heads.currents import choose_dipole
    from synthetic_heads.heads import make_head
    from synthetic_heads.recording import make_recording, write_recording
    from synthetic_heads.session import write_nifti
    from tests.painted import CLEAN, NAMES_61, painted_head

    intensity, scanner_from_voxel, _ = painted_head(head, NAMES_61, 0, **CLEAN)
    scaled = np.clip(np.rint(intensity * (20000 / intensity.max())), 0, 32767).astype(np.int16)
    write_nifti(folder / "T1.nii.gz", scaled, scanner_from_voxel)
    sphere = make_head(0, "sphere")
    vertices, faces = sphere.surfaces["scalp"]
    cap = make_cap(vertices, faces, sphere.landmarks_mm, NAMES_61, 0)
    recording = make_recording(
        sphere, NAMES_61, cap.contacts_mm, seed=0, dipoles=(choose_dipole(sphere, 0),)
    )
    write_recording(folder / "eeg.vhdr", recording)
    return folder / "T1.nii.gz", folder / "eeg.vhdr"


def main(head: str = HEAD) -> None:
    """Print the table."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        t1, eeg = make_files(folder, head)
        out = folder / "out"
        began = time.perf_counter()
        subprocess.run(
            [sys.executable, "-m", "locator", "run", "--t1", t1, "--eeg", eeg, "--out", out],
            check=True,
        )
        wall = time.perf_counter() - began
        record = json.loads((out / "provenance.json").read_text())
        again = time.perf_counter()
        subprocess.run(
            [
                sys.executable,
                "-m",
                "locator",
                "run",
                "--t1",
                t1,
                "--eeg",
                eeg,
                "--out",
                out,
                "--quiet",
            ],
            check=True,
        )
        again = time.perf_counter() - again
    print(f"\nWhole run, head {head}, 61 painted capsules, {os.cpu_count()} processors")
    print(f"{'stage':32s} {'seconds':>8s} {'peak MB so far':>15s}")
    for timing in record["timings"]:
        print(f"{timing['stage']:32s} {timing['seconds']:8.1f} {timing['peak_mb'] or 0:15.0f}")
    print(f"{'everything, with start-up':32s} {wall:8.1f}")
    print(f"{'the same again, all kept':32s} {again:8.1f}")


if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).parents[2]))
    main(*sys.argv[1:])

"""A run that is killed at any moment leaves no partial file, and the next one goes on."""

from __future__ import annotations

import os
import random
import signal
import subprocess
import sys
import time
import zipfile

import pytest

from tests.sessions import results_in, run_arguments, small_run_folder, small_session, start

pytestmark = [pytest.mark.slow, pytest.mark.timeout(900)]

MOMENTS = 10

FILES = {
    "electrodes.tsv",
    "electrodes.json",
    "coordsystem.json",
    "markers.tsv",
    "head/scalp.surf.gii",
    "head/outer_skull.surf.gii",
    "head/inner_skull.surf.gii",
    "head/tissues.nii.gz",
    "head/tissues.tsv",
    "sources/statistic.nii.gz",
    "sources/corrected_p.nii.gz",
    "sources/significant.nii.gz",
    "sources/amplitude.nii.gz",
    "sources/peaks.tsv",
    "sources/peak_region.nii.gz",
    "sources/inverse.fif",
}


def _kill_after(arguments, line, delay_s):
    """Start a run, kill it a while after its n-th line of progress; True when it was killed."""
    process = subprocess.Popen(
        [sys.executable, "-m", "locator", *arguments],
        stdout=subprocess.DEVNULL,
        stderr=subprocess.PIPE,
        text=True,
    )
    try:
        for number, _ in enumerate(process.stderr, start=1):
            if number == line:
                break
        time.sleep(delay_s)
        if process.poll() is not None:
            return False
        process.send_signal(signal.SIGKILL)
        process.wait(timeout=30)
        return True
    finally:
        process.kill()
        process.wait()
        process.stderr.close()


def test_ten_killed_runs_leave_nothing_partial_and_the_next_one_completes(tmp_path):
    undisturbed = results_in(small_run_folder())
    assert set(undisturbed) == FILES
    arguments = run_arguments(small_session(), tmp_path / "out")
    draw = random.Random(20)
    # Lines of progress: two for each of about twenty stages. In rising order, since each run
    # goes on where the last one was killed.
    lines = sorted(draw.sample(range(1, 36), MOMENTS))
    killed = 0
    for line in lines:
        killed += _kill_after(arguments, line, draw.uniform(0, 0.8))
        for name, content in results_in(tmp_path / "out").items():
            if os.path.basename(name).startswith(".part-"):
                continue
            # Whole files only: each has the very bytes of the undisturbed run.
            assert content == undisturbed[name], f"{name} after line {line}"
        for entry in (tmp_path / "out").glob(".locator/stages/[!.]*.zip"):
            with zipfile.ZipFile(entry) as packed:
                assert packed.testzip() is None
    assert killed >= MOMENTS - 2, "the runs ended before they could be killed"
    done = start(arguments)
    assert done.returncode == 0, done.stderr
    assert "unchanged, taken from before" in done.stderr
    assert results_in(tmp_path / "out") == undisturbed
    assert not list((tmp_path / "out").rglob(".part-*"))
    assert (tmp_path / "out" / "report.html").stat().st_size > 10_000


def test_a_polite_end_takes_its_temporary_files_along(tmp_path):
    arguments = run_arguments(small_session(), tmp_path / "out")
    process = subprocess.Popen(
        [sys.executable, "-m", "locator", *arguments],
        stdout=subprocess.DEVNULL,
        stderr=subprocess.PIPE,
        text=True,
    )
    for line in process.stderr:
        if line.startswith("markers ..."):
            break
    process.send_signal(signal.SIGTERM)
    rest = process.communicate(timeout=60)[1]
    assert process.returncode == 130
    assert rest.strip().splitlines()[-1] == "locator: stopped; start it again to go on."
    assert "Traceback" not in rest
    assert not list((tmp_path / "out").rglob(".part-*"))

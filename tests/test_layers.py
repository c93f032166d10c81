"""The direction of imports, and what starting the tool costs."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]

HEAVY = (
    "numpy scipy numba nibabel skimage mne pyamg matplotlib jinja2 pyvista vtk PIL trimesh pandas"
).split()


def _loaded(code: str) -> set[str]:
    """Names of heavy libraries that are loaded after running some code in a fresh interpreter."""
    tail = f"\nimport sys; print([m for m in {HEAVY!r} if m in sys.modules])"
    done = subprocess.run(
        [sys.executable, "-c", code + tail], capture_output=True, text=True, check=True, timeout=60
    )
    return set(eval(done.stdout.splitlines()[-1]))  # a list of names that this test printed


def test_imports_point_only_downward():
    linter = Path(sys.executable).with_name("lint-imports")
    if not linter.exists():
        pytest.skip("import-linter is not installed beside this Python")
    done = subprocess.run(
        [str(linter), "--no-cache"], cwd=ROOT, capture_output=True, text=True, timeout=120
    )
    assert done.returncode == 0, done.stdout + done.stderr
    assert "0 broken" in done.stdout


def test_importing_the_package_loads_no_heavy_library():
    assert _loaded("import locator") == set()


@pytest.mark.parametrize(
    "command", [[], ["find"], ["head"], ["run"], ["demo"], ["begin"], ["inspect"]]
)
def test_help_loads_no_heavy_library(command):
    code = (
        "import locator.cli, contextlib, io\n"
        "with contextlib.redirect_stdout(io.StringIO()):\n"
        f"    code = locator.cli.main({[*command, '--help']!r})\n"
        "assert code == 0, code"
    )
    assert _loaded(code) == set()


def test_a_wrong_command_line_is_refused_before_anything_heavy_is_loaded():
    code = (
        "import locator.cli, contextlib, io\n"
        "with contextlib.redirect_stderr(io.StringIO()):\n"
        "    code = locator.cli.main(['run', '--band', '8', '12'])\n"
        "assert code == 2, code"
    )
    assert _loaded(code) == set()


def test_the_heavy_libraries_would_be_seen():
    # The check above can only fail if its way of looking finds what is there.
    assert "numpy" in _loaded("import locator.volume")

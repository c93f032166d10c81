"""Our tables inside a small dataset, judged by the official validator.

Source of the judgement: the BIDS validator (package ``bids-validator-deno``, of the BIDS
maintainers), which carries the schema of the specification that it checks against.
"""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from pybv import write_brainvision

from locator.io import bids
from tests.test_files import sample_electrodes

pytestmark = pytest.mark.slow


def _validator() -> str:
    beside = Path(sys.executable).with_name("bids-validator-deno")
    found = str(beside) if beside.exists() else shutil.which("bids-validator-deno")
    if found is None:
        pytest.skip("bids-validator-deno is not installed")
    return found


def _errors(dataset: Path) -> list[dict]:
    done = subprocess.run(
        [_validator(), str(dataset), "--json"], capture_output=True, text=True, timeout=300
    )
    assert done.stdout.strip(), done.stderr
    issues = json.loads(done.stdout)["issues"]["issues"]
    return [issue for issue in issues if issue.get("severity") == "error"]


@pytest.fixture
def dataset(tmp_path):
    """A dataset of one invented subject with a T1, a recording and our electrode files."""
    root = tmp_path / "dataset"
    eeg, anat = root / "sub-01" / "eeg", root / "sub-01" / "anat"
    eeg.mkdir(parents=True)
    anat.mkdir()
    (root / "dataset_description.json").write_text(
        json.dumps({"Name": "invented", "BIDSVersion": "1.10.0", "DatasetType": "raw"})
    )
    (root / "README").write_text("An invented dataset: it holds the data of no person. " * 5)
    t1 = nib.Nifti1Image(np.zeros((4, 4, 4), np.int16), np.eye(4))
    t1.header.set_xyzt_units("mm", "sec")
    nib.save(t1, anat / "sub-01_T1w.nii.gz")
    electrodes = sample_electrodes()
    write_brainvision(
        data=np.random.default_rng(0).normal(size=(3, 1000)) * 1e-6,
        sfreq=250,
        ch_names=list(electrodes.names),
        fname_base="sub-01_task-look_eeg",
        folder_out=str(eeg),
    )
    (eeg / "sub-01_task-look_eeg.json").write_text(
        json.dumps(
            {
                "TaskName": "look",
                "EEGReference": "FCz",
                "SamplingFrequency": 250,
                "PowerLineFrequency": 50,
                "SoftwareFilters": "n/a",
            }
        )
    )
    channels = "name\ttype\tunits\n" + "".join(f"{n}\tEEG\tuV\n" for n in electrodes.names)
    (eeg / "sub-01_task-look_channels.tsv").write_text(channels)
    out = tmp_path / "out"
    bids.write_electrodes(
        out,
        electrodes,
        t1_name="sub-01_T1w.nii.gz",
        t1_uri=bids.bids_uri(anat / "sub-01_T1w.nii.gz"),
    )
    for name in ("electrodes.tsv", "electrodes.json", "coordsystem.json"):
        shutil.copy(out / name, eeg / f"sub-01_{name}")
    return root


def test_the_official_validator_accepts_our_electrodes(dataset):
    assert (dataset / "sub-01" / "eeg" / "sub-01_electrodes.tsv").exists()
    assert _errors(dataset) == []


def test_the_official_validator_would_see_a_missing_unit(dataset):
    # The check above can only fail if the validator looks into these very files.
    path = dataset / "sub-01" / "eeg" / "sub-01_coordsystem.json"
    system = json.loads(path.read_text())
    del system["EEGCoordinateUnits"]
    path.write_text(json.dumps(system))
    assert any("coordsystem" in json.dumps(issue) for issue in _errors(dataset))


def test_the_uri_of_the_scan_is_relative_to_its_dataset(dataset):
    scan = dataset / "sub-01" / "anat" / "sub-01_T1w.nii.gz"
    assert bids.bids_uri(scan) == "bids::sub-01/anat/sub-01_T1w.nii.gz"

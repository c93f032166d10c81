"""The whole job on a small invented session: files, promises, exit codes."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
import sys

import nibabel as nib
import numpy as np
import pytest

from locator.io.files import sha256_of
from locator.io.reviews import append_review
from locator.reviews import Review
from locator.session.inputs import read_inputs
from locator.session.options import gather_options
from tests.sessions import (
    NAMES_31,
    PERMUTATIONS,
    results_in,
    run_arguments,
    small_run_folder,
    small_session,
    start,
)
from tests.test_killed_run import FILES

pytestmark = [pytest.mark.slow, pytest.mark.timeout(900)]


@pytest.fixture
def folder(tmp_path):
    """A copy of the finished run, stored stages and all."""
    return shutil.copytree(small_run_folder(), tmp_path / "out")


def table(path):
    header, *rows = [line.split("\t") for line in path.read_text().splitlines()]
    return [dict(zip(header, row, strict=True)) for row in rows]


def truth():
    return json.loads((small_session() / "truth.json").read_text())


def kept_and_computed(stderr):
    """Stages that were taken from before, and stages that were computed."""
    ends = re.findall(r"^(.+): (unchanged|[\d.]+ s)", stderr, flags=re.MULTILINE)
    kept = {stage for stage, words in ends if words == "unchanged"}
    return kept, {stage for stage, words in ends if words != "unchanged"}


NOT_STAGES = {"first files", "report"}


def test_every_file_of_the_contract_is_there_and_none_else():
    out = small_run_folder()
    assert set(results_in(out)) == FILES
    beside = {path.name for path in out.iterdir()} - {name.split("/")[0] for name in FILES}
    assert beside == {".locator", "report.html", "provenance.json"}


def test_electrodes_are_where_they_were_put():
    rows = table(small_run_folder() / "electrodes.tsv")
    assert [row["name"] for row in rows] == list(NAMES_31)
    true = {e["name"]: e for e in truth()["electrodes"]}
    right = 0
    for row in rows:
        gap = np.linalg.norm(
            np.array([float(row[axis]) for axis in "xyz"]) - true[row["name"]]["contact_mm"]
        )
        right += row["status"] == "seen" and gap < 4
    present = sum(bool(e.get("capsule_mm")) for e in true.values())
    assert right >= present - 1


def test_the_peak_is_near_the_dipole_and_its_region_holds_it():
    out = small_run_folder()
    first = table(out / "sources" / "peaks.tsv")[0]
    peak = np.array([float(first[axis]) for axis in "xyz"])
    dipole = np.array(truth()["dipoles"][0]["position_mm"])
    # 31 electrodes, 60 trials: three quarters of the spacing of a 31-electrode cap (about 35 mm).
    assert np.linalg.norm(peak - dipole) < 25
    region = nib.load(out / "sources" / "peak_region.nii.gz")
    density = np.asarray(region.dataobj, dtype=np.float64)
    assert density.sum() == pytest.approx(1, abs=1e-3)
    places = nib.affines.apply_affine(region.affine, np.argwhere(density > 0))
    inside = np.linalg.norm(places - peak, axis=1) <= float(first["region_mm"]) + 0.01
    # region_mm is the radius of the ball that holds 95 % of this map.
    assert density[density > 0][inside].sum() == pytest.approx(0.95, abs=0.02)


def test_maps_agree_with_each_other_and_stand_on_the_scan():
    folder = small_run_folder() / "sources"
    scan = nib.load(small_session() / "T1.nii.gz")
    maps = {}
    for name in ("statistic", "corrected_p", "significant", "amplitude", "peak_region"):
        image = nib.load(folder / f"{name}.nii.gz")
        assert image.shape == scan.shape
        assert np.abs(image.affine - scan.affine).max() < 0.01
        maps[name] = np.asarray(image.dataobj)
    significant = maps["corrected_p"] < 0.05
    assert significant.any()
    assert np.array_equal(maps["significant"] > 0, significant & (maps["statistic"] > 0))
    assert np.array_equal(maps["significant"][significant], maps["statistic"][significant])
    outside = maps["statistic"] == 0
    assert (maps["corrected_p"][outside] == 1).all()
    assert maps["corrected_p"].min() >= 1 / PERMUTATIONS - 1e-9


def test_provenance_makes_the_same_numbers_again(folder, tmp_path):
    record = json.loads((folder / "provenance.json").read_text())
    assert record["schema_version"] == 1
    assert {entry["role"] for entry in record["inputs"]} == {"t1", "t1 sidecar", "eeg"}
    for entry in record["inputs"]:
        assert sha256_of(small_session() / entry["path"].rsplit("/", 1)[-1]) == entry["sha256"]
    assert record["session"]["permutations"] == PERMUTATIONS
    assert {"locator", "numpy", "scipy", "mne", "python"} <= set(record["versions"])
    assert record["settings"]["inverse"]["method"]
    assert {"skin", "markers", "labels", "head", "test"} <= {t["stage"] for t in record["timings"]}
    # With the stored stages at hand every one is found again by its key, which holds inputs,
    # settings, seeds, code and versions; that a stage computed twice gives the same bytes is
    # shown by the killed runs.
    new = with_stages(folder, tmp_path / "new")
    done = start(["run", "--again", str(folder / "provenance.json"), "--out", str(new)])
    assert done.returncode == 0, done.stderr
    kept, computed = kept_and_computed(done.stderr)
    assert computed == NOT_STAGES
    assert {"epochs", "skin", "markers", "labels", "head", "lead field", "test"} <= kept
    assert results_in(new) == results_in(folder)


def test_again_refuses_an_input_that_has_changed(folder, tmp_path):
    path = folder / "provenance.json"
    record = json.loads(path.read_text())
    record["inputs"][0]["sha256"] = "0" * 64
    path.write_text(json.dumps(record))
    done = start(["run", "--again", str(path), "--out", str(tmp_path / "new")])
    assert done.returncode == 3
    assert "T1.nii.gz" in done.stderr
    assert not (tmp_path / "new").exists()
    done = start(["run", "--again", str(path), "--out", str(folder)])
    assert done.returncode == 3
    assert "not empty" in done.stderr


def decide_twice_on_cz(folder):
    """Two people accept the capsule of Cz, a little apart."""
    rows = {row["name"]: row for row in table(folder / "electrodes.tsv")}
    place = np.array([float(rows["Cz"][f"capsule_{axis}"]) for axis in "xyz"])
    for minute, (who, where) in enumerate((("A", place), ("B", np.add(place, [0, 0, 2.5])))):
        review = Review(
            who=who,
            when=f"2026-01-31T12:0{minute}:00Z",
            electrode="Cz",
            kind="capsule",
            place_scanner_mm=where,
        )
        append_review(folder / "review.jsonl", review, before=None)


def test_decisions_and_settings_change_what_rests_on_them_and_a_second_command_waits(folder):
    decide_twice_on_cz(folder)
    reviews_before = (folder / "review.jsonl").read_bytes()
    changed = [*run_arguments(small_session(), folder), "--window", "0.05", "0.3", "--strict"]
    first = subprocess.Popen(
        [sys.executable, "-m", "locator", *changed],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    lines = []
    for line in first.stderr:
        lines.append(line)
        if line.startswith("epochs"):
            break
    second = start(run_arguments(small_session(), folder))
    out, err = first.communicate(timeout=600)
    assert second.returncode == 3
    assert str(first.pid) in second.stderr
    assert first.returncode == 4, err
    assert "decided differently on Cz" in out
    kept, computed = kept_and_computed("".join([*lines, err]))
    assert {"epochs", "skin", "markers", "labels", "head", "sources", "lead field"} <= kept
    assert {"reviews", "test", "null control"} <= computed
    after = {row["name"]: row for row in table(folder / "electrodes.tsv")}
    assert after["Cz"]["status"] == "corrected"
    assert after["Cz"]["confidence"] == "n/a"
    assert (folder / "review.jsonl").read_bytes() == reviews_before
    record = json.loads((folder / "provenance.json").read_text())
    reviews = [entry for entry in record["inputs"] if entry["role"] == "review"]
    assert [entry["sha256"] for entry in reviews] == [sha256_of(folder / "review.jsonl")]


def test_inputs_are_never_changed_and_nothing_is_written_beside_them(tmp_path):
    small_run_folder()
    names = sorted(path.name for path in small_session().iterdir())
    expected = "T1.json T1.nii.gz eeg.eeg eeg.truth.json eeg.vhdr eeg.vmrk truth.json".split()
    assert names == sorted(expected)


def with_stages(folder, out):
    """A new output folder that has the stored stages of a finished run, to save time."""
    shutil.copytree(folder / ".locator" / "stages", out / ".locator" / "stages")
    return out


def test_find_alone_writes_its_files_and_inspect_makes_a_picture(tmp_path):
    out = with_stages(small_run_folder(), tmp_path / "out")
    scan = small_session() / "T1.nii.gz"
    done = start(["find", scan, "--names", ",".join(NAMES_31), "--out", out])
    assert done.returncode == 0, done.stderr
    assert set(results_in(out)) == {
        "electrodes.tsv",
        "electrodes.json",
        "coordsystem.json",
        "markers.tsv",
    }
    assert not (out / "report.html").exists()
    same = ["electrodes.tsv", "markers.tsv", "coordsystem.json", "electrodes.json"]
    for name in same:
        assert (out / name).read_bytes() == (small_run_folder() / name).read_bytes()
    done = start(["inspect", out, "--picture", tmp_path / "scene.png"])
    assert done.returncode == 0, done.stderr
    assert (tmp_path / "scene.png").read_bytes()[:8] == b"\x89PNG\r\n\x1a\n"
    done = start(["inspect", tmp_path, "--picture", tmp_path / "other.png"])
    assert done.returncode == 3
    assert not (tmp_path / "other.png").exists()


def test_head_alone_writes_its_files(tmp_path):
    out = with_stages(small_run_folder(), tmp_path / "out")
    done = start(["head", small_session() / "T1.nii.gz", "--out", out])
    assert done.returncode == 0, done.stderr
    assert set(results_in(out)) == {n for n in FILES if n.startswith("head/")}


def test_begin_writes_a_session_file_that_run_understands(tmp_path):
    session = shutil.copytree(small_session(), tmp_path / "study" / "session")
    target = tmp_path / "study" / "session.toml"
    done = start(
        ["begin", "--t1", session / "T1.nii.gz", "--eeg", session / "eeg.vhdr", "--out", target]
    )
    assert done.returncode == 0, done.stderr
    text = target.read_text()
    assert 't1 = "session/T1.nii.gz"' in text
    assert "event = " in text
    assert "# not used: ECG" in text
    options = gather_options({}, target)
    inputs = read_inputs(options, names=True, recording=True, out=tmp_path / "out")
    assert list(inputs.channel_names) == list(NAMES_31)
    assert options.event is not None


def test_given_positions_need_no_capsules(folder, tmp_path):
    places = [(e["name"], *e["contact_mm"]) for e in truth()["electrodes"]]
    text = "name\tx\ty\tz\n" + "".join("\t".join(map(str, row)) + "\n" for row in places)
    (tmp_path / "given.tsv").write_text(text)
    arguments = run_arguments(small_session(), folder)
    done = start([*arguments, "--electrodes", tmp_path / "given.tsv"])
    assert done.returncode == 0, done.stderr
    rows = table(folder / "electrodes.tsv")
    assert {row["status"] for row in rows} == {"given"}
    assert len(table(folder / "sources" / "peaks.tsv")) >= 1


def test_an_average_without_trials_is_accepted_and_not_tested(folder, tmp_path):
    import mne

    with mne.utils.use_log_level("ERROR"):
        raw = mne.io.read_raw_brainvision(small_session() / "eeg.vhdr", preload=True)
        raw.pick([name for name in raw.ch_names if name in NAMES_31])
        events, kinds = mne.events_from_annotations(raw)
        kind = {name: code for name, code in kinds.items() if "Stimulus" in name}
        epochs = mne.Epochs(raw, events, kind, tmin=-0.2, tmax=0.5, preload=True)
        mne.write_evokeds(tmp_path / "mean-ave.fif", [epochs.average()])
    arguments = run_arguments(small_session(), folder)
    arguments[arguments.index("--eeg") + 1] = str(tmp_path / "mean-ave.fif")
    done = start(arguments)
    assert done.returncode == 0, done.stderr
    assert "nothing could be tested" in done.stdout
    assert "nothing could be tested" in (folder / "report.html").read_text()
    p = np.asarray(nib.load(folder / "sources" / "corrected_p.nii.gz").dataobj)
    assert (p == 1).all()
    assert table(folder / "sources" / "peaks.tsv") == []
    statistic = np.asarray(nib.load(folder / "sources" / "statistic.nii.gz").dataobj)
    assert statistic.max() > 0

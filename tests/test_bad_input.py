"""Input that cannot be used is refused with one message that names the culprit, and its sound
neighbours pass."""

from __future__ import annotations

import json
import logging
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from pybv import write_brainvision

from locator import cli
from locator.recording import make_epochs
from locator.session.inputs import read_inputs
from locator.session.options import gather_options

NAMES = (
    "Fp1 Fp2 F7 F3 Fz F4 F8 FC5 FC1 FC2 FC6 T7 C3 Cz C4 T8 CP5 CP1 CP2 CP6 P7 P3 Pz P4 P8 O1 Oz O2"
).split()
LIST = ",".join(NAMES)


@pytest.fixture(autouse=True)
def _plain_logging():
    root = logging.getLogger()
    before, level = list(root.handlers), root.level
    yield
    root.handlers[:] = before
    root.setLevel(level)
    logging.captureWarnings(False)


# ── things to write ──────────────────────────────────────────────────────────────────────


def affine(voxel_mm=2.0, sign=1.0):
    matrix = np.diag([sign * voxel_mm, voxel_mm, voxel_mm, 1.0])
    matrix[:3, 3] = [-sign * 96, -96, -96]
    return matrix


def ball(shape=(96, 96, 96)):
    """A bright ball: an image that is sound as a file; no stage after reading sees it here."""
    index = np.indices(shape) - np.array(shape).reshape(3, 1, 1, 1) / 2
    return (np.sqrt((index**2).sum(0)) < 42).astype(np.float32) * 100


def save(path, values, *, sform=None, qform=None, sform_code=1, qform_code=1):
    image = nib.Nifti1Image(values, None)
    image.header.set_xyzt_units("mm")
    # Into the header itself: what is set on the image would be made to agree on saving.
    image.header.set_qform(qform, qform_code if qform is not None else 0)
    image.header.set_sform(sform, sform_code if sform is not None else 0)
    nib.save(image, path)
    return path


def t1(folder, values=None, **forms):
    forms = forms or {"sform": affine(), "qform": affine()}
    return save(folder / "t1.nii.gz", ball() if values is None else values, **forms)


def recording(folder, *, events=("S  1",), n_events=40, names=NAMES, seconds=90.0, data_uv=None):
    rate, rng = 250, np.random.default_rng(0)
    count = int(seconds * rate)
    data = rng.normal(size=(len(names), count)) * 8 if data_uv is None else data_uv
    onsets = np.linspace(2 * rate, count - 2 * rate, n_events).astype(int)
    marks = [
        {
            "onset": int(onset),
            "type": "Stimulus",
            "description": int(events[i % len(events)].split()[-1]),
        }
        for i, onset in enumerate(onsets)
        if events
    ]
    write_brainvision(
        data=data * 1e-6,
        sfreq=rate,
        ch_names=list(names),
        fname_base="rec",
        folder_out=str(folder),
        events=marks or None,
        overwrite=True,
    )
    return folder / "rec.vhdr"


def with_scanner_artefact():
    """Broad-band switching that repeats every 2 s, several hundred microvolt: no brain does that."""
    rng = np.random.default_rng(1)
    rate, seconds = 250, 90
    volume = rng.normal(size=2 * rate) * 600
    train = np.tile(volume, seconds // 2)
    gain = rng.uniform(0.5, 1.5, size=(len(NAMES), 1))
    return gain * train + rng.normal(size=(len(NAMES), len(train))) * 8


def cut(path, share):
    path.write_bytes(path.read_bytes()[: int(path.stat().st_size * share)])
    return path


def nan_in(values):
    values = values.copy()
    values[3, 4, 5] = np.nan
    return values


def turned_affine():
    """The axes swapped: x and y exchanged, handedness kept."""
    matrix = affine()
    swapped = matrix.copy()
    swapped[:, 0], swapped[:, 1] = matrix[:, 1], -matrix[:, 0]
    return swapped


def find(folder, *extra, names=LIST):
    return ["find", folder / "t1.nii.gz", "--names", names, "--out", folder / "o", *extra]


def run(folder, *extra):
    files = ["--t1", folder / "t1.nii.gz", "--eeg", folder / "rec.vhdr"]
    return ["run", *files, "--out", folder / "o", *extra]


def text(path, words):
    path.write_text(words)
    return path


def both(folder, **settings):
    t1(folder)
    recording(folder, **settings)


# ── the table ────────────────────────────────────────────────────────────────────────────


@dataclass
class Bad:
    """One case: what is written, what is called, what must be said."""

    name: str
    write: Callable[[Path], object]
    call: Callable[[Path], list]
    words: tuple[str, ...]
    code: int = 3


TEMPLATE = [
    Bad("no such T1", lambda f: None, find, ("t1.nii.gz", "no file")),
    Bad("a folder for a T1", lambda f: (f / "t1.nii.gz").mkdir(), find, ("t1.nii.gz", "folder")),
    Bad("an empty T1", lambda f: (f / "t1.nii.gz").touch(), find, ("t1.nii.gz", "empty")),
    Bad("a truncated T1", lambda f: cut(t1(f), 0.5), find, ("t1.nii.gz", "Copy")),
    Bad(
        "a truncated T1 without compression",
        lambda f: cut(save(f / "t1.nii", ball(), sform=affine()), 0.7),
        lambda f: ["find", f / "t1.nii", "--names", LIST, "--out", f / "o"],
        ("t1.nii", "Copy"),
    ),
    Bad("text for a T1", lambda f: text(f / "t1.nii.gz", "hello " * 99), find, ("t1.nii.gz",)),
    Bad("a T1 of zeros", lambda f: t1(f, ball() * 0), find, ("t1.nii.gz", "all zero")),
    Bad("a constant T1", lambda f: t1(f, ball() * 0 + 7), find, ("t1.nii.gz", "constant (7)")),
    Bad("a T1 with NaN", lambda f: t1(f, nan_in(ball())), find, ("t1.nii.gz", "1 voxels")),
    Bad("a slice", lambda f: t1(f, ball()[:, :, 48]), find, ("t1.nii.gz", "(96, 96)")),
    Bad(
        "a series",
        lambda f: t1(f, np.stack([ball()] * 3, axis=-1)),
        find,
        ("t1.nii.gz", "(96, 96, 96, 3)"),
    ),
    Bad(
        "a singular affine",
        lambda f: t1(f, sform=np.diag([2.0, 2, 0, 1])),
        find,
        ("t1.nii.gz", "singular"),
    ),
    Bad("no orientation", lambda f: t1(f, sform=affine(), sform_code=0), find, ("t1.nii.gz", "0")),
    Bad(
        "opposite handedness",
        lambda f: t1(f, sform=affine(), qform=affine(sign=-1.0)),
        find,
        ("t1.nii.gz", "opposite handedness"),
    ),
    Bad(
        "swapped axes",
        lambda f: t1(f, sform=affine(), qform=turned_affine()),
        find,
        ("t1.nii.gz", "swapped"),
    ),
    Bad(
        "coarse voxels",
        lambda f: t1(f, ball(), sform=affine(3.5)),
        find,
        ("t1.nii.gz", "3.50", "3 mm"),
    ),
    Bad(
        "less than a head",
        lambda f: t1(f, ball()[:20], sform=affine()),
        find,
        ("t1.nii.gz", "40 x 192 x 192"),
    ),
    Bad(
        "complex values",
        lambda f: t1(f, (ball() + 1j).astype(np.complex64)),
        find,
        ("t1.nii.gz", "complex64"),
    ),
    Bad(
        "pure noise",
        lambda f: t1(f, np.abs(np.random.default_rng(0).normal(size=(96,) * 3)).astype("f4")),
        find,
        (),
    ),
    Bad("an unknown name", t1, lambda f: find(f, names="Fp1,Xq7,Oz"), ("Xq7",)),
    Bad("a doubled name", t1, lambda f: find(f, names="Fp1,Oz,FP1"), ("FP1", "twice")),
    Bad("one place under two names", t1, lambda f: find(f, names="T3,Oz,T7"), ("T7", "T3")),
    Bad("an empty name", t1, lambda f: find(f, names="Fp1,,Oz"), ("name 2 of 3", "empty")),
    Bad("no names", t1, lambda f: find(f, names=""), ("names",), code=2),
    Bad("no such file of names", t1, lambda f: find(f, names=str(f / "n.txt")), ("n.txt",)),
    Bad(
        "a file of no names",
        lambda f: (t1(f), text(f / "n.txt", "# nothing\n\n")),
        lambda f: find(f, names=str(f / "n.txt")),
        ("n.txt", "no name"),
    ),
    Bad(
        "a doubled name in a file",
        lambda f: (t1(f), text(f / "n.txt", "Fp1\nCz\nFp1\n")),
        lambda f: find(f, names=str(f / "n.txt")),
        ("Fp1", "twice"),
    ),
    Bad("an unknown reference", t1, lambda f: find(f, "--also", "REFX"), ("REFX",)),
    Bad("names of no recording", t1, lambda f: find(f, names="eeg"), ("--eeg",), code=2),
    Bad("a negative capsule", t1, lambda f: find(f, "--capsule-mm", "-8"), ("-8",), code=2),
    Bad(
        "landmarks that are none",
        lambda f: (t1(f), text(f / "l.json", '{"NAS": [0, 85, -30]}')),
        lambda f: find(f, "--landmarks", str(f / "l.json")),
        ("l.json", "LPA"),
    ),
    Bad(
        "a layout without places",
        lambda f: (t1(f), text(f / "cap.tsv", "name\tx\ty\nA\t1\t2\n")),
        lambda f: find(f, "--layout", str(f / "cap.tsv")),
        ("cap.tsv", "column z"),
    ),
    Bad("no T1 named", lambda f: None, lambda f: ["run", "--out", f / "o"], ("--t1",), code=2),
    Bad("no recording named", t1, lambda f: ["run", "--t1", f / "t1.nii.gz"], ("--eeg",), code=2),
    Bad("no such recording", t1, run, ("rec.vhdr",)),
    Bad(
        "a broken recording",
        lambda f: (both(f), text(f / "rec.vhdr", "no header")),
        run,
        ("rec.vhdr",),
    ),
    Bad("a truncated recording", lambda f: (both(f), cut(f / "rec.eeg", 0.6001)), run, ("rec.",)),
    Bad("a lost data file", lambda f: (both(f), (f / "rec.eeg").unlink()), run, ("rec.eeg",)),
    Bad(
        "scanner artefacts",
        lambda f: both(f, data_uv=with_scanner_artefact()),
        run,
        ("rec.vhdr", "scanner"),
    ),
    Bad("no scalp electrode", lambda f: both(f, names=["A", "B", "ECG"]), run, ("ECG",)),
    Bad("no events", lambda f: both(f, events=()), run, ("rec.vhdr", "no events")),
    Bad("an absent event", both, lambda f: run(f, "--event", "S  9"), ("S  9", "S1")),
    Bad(
        "several events and none chosen",
        lambda f: both(f, events=("S  1", "S  2")),
        run,
        ("S1", "S2", "--event"),
    ),
    Bad("a backwards window", both, lambda f: run(f, "--window", "0.3", "0.1"), ("0.3",), code=2),
    Bad(
        "a window outside the epoch",
        both,
        lambda f: run(f, "--window", "0.1", "0.9"),
        ("0.9", "epoch"),
        code=2,
    ),
    Bad(
        "an electrode without a channel",
        both,
        lambda f: run(f, "--names", "Fp1,Oz,AF3"),
        ("AF3", "--also"),
    ),
    Bad(
        "positions in metres",
        lambda f: (
            both(f),
            text(
                f / "e.tsv",
                "name\tx\ty\tz\n" + "".join(f"{n}\t0.0{i}\t0\t0.1\n" for i, n in enumerate(NAMES)),
            ),
        ),
        lambda f: run(f, "--electrodes", str(f / "e.tsv")),
        ("e.tsv", "mm"),
    ),
    Bad(
        "a broken session file",
        lambda f: text(f / "s.toml", "t1 = = 1"),
        lambda f: ["run", f / "s.toml"],
        ("s.toml", "line 1"),
    ),
    Bad("no session file", lambda f: None, lambda f: ["run", f / "s.toml"], ("s.toml",)),
    Bad(
        "a misspelt key",
        lambda f: text(f / "s.toml", 't1 = "t1.nii.gz"\neveent = "S1"\n'),
        lambda f: ["run", f / "s.toml"],
        ("s.toml", "'eveent'", "'event'"),
    ),
    Bad(
        "a negative capsule in the file",
        lambda f: text(f / "s.toml", "capsule_mm = -8\n"),
        lambda f: ["run", f / "s.toml"],
        ("s.toml", "capsule_mm", "-8"),
    ),
    Bad(
        "a backwards window in the file",
        lambda f: text(f / "s.toml", "window = [0.3, 0.1]\n"),
        lambda f: ["run", f / "s.toml"],
        ("s.toml", "window", "0.3 0.1"),
    ),
    Bad(
        "a session file that names no such T1",
        lambda f: (recording(f), text(f / "s.toml", 't1 = "gone.nii"\neeg = "rec.vhdr"\n')),
        lambda f: ["run", f / "s.toml", "--out", f / "o"],
        ("gone.nii",),
    ),
    Bad(
        "a decision that is none",
        lambda f: (
            t1(f),
            (f / "o").mkdir(),
            text(f / "o" / "review.jsonl", '{"who": "A"}\n{"who": "B"}\n'),
        ),
        find,
        ("Line 1", "review.jsonl"),
    ),
    Bad(
        "no results to inspect",
        lambda f: (f / "o").mkdir(),
        lambda f: ["inspect", f / "o", "--picture", f / "p.png"],
        ("o", "find"),
    ),
    Bad(
        "a provenance that is none",
        lambda f: text(f / "p.json", '{"a": 1}'),
        lambda f: ["run", "--again", f / "p.json", "--out", f / "o"],
        ("p.json", "schema_version"),
    ),
    Bad(
        "a session file that exists",
        lambda f: (t1(f), text(f / "s.toml", "")),
        lambda f: ["begin", "--t1", f / "t1.nii.gz", "--out", f / "s.toml"],
        ("s.toml", "exists"),
    ),
]


@pytest.mark.parametrize("case", TEMPLATE, ids=lambda case: case.name)
def test_bad_input_is_refused(case, tmp_path, capsys):
    case.write(tmp_path)
    before = {path: path.read_bytes() for path in tmp_path.rglob("*") if path.is_file()}
    capsys.readouterr()
    code = cli.main([*(str(argument) for argument in case.call(tmp_path)), "--quiet"])
    out, err = capsys.readouterr()
    assert code == case.code, err
    assert out == ""
    assert "Traceback" not in err
    assert err.count("locator: ") == 1
    assert len(err.strip().splitlines()) == 1, err
    for word in case.words:
        assert word in err, err
    after = {path: path.read_bytes() for path in tmp_path.rglob("*") if path.is_file()}
    new = {path for path in set(after) - set(before) if ".locator" not in path.parts}
    assert new == set(), "something was written"
    assert not [path for path in after if path.name.startswith(".part-")]
    assert {path: after.get(path) for path in before} == before, "an input was changed"


# ── sound neighbours ─────────────────────────────────────────────────────────────────────


def four_d(values):
    return values[..., None]


SOUND_T1 = {
    "both transforms": lambda f: t1(f),
    "sform alone": lambda f: t1(f, sform=affine(), sform_code=2),
    "qform alone": lambda f: t1(f, qform=affine()),
    "left-handed voxels": lambda f: t1(f, sform=affine(sign=-1.0), qform=affine(sign=-1.0)),
    "a last axis of one": lambda f: t1(f, four_d(ball())),
    "whole numbers": lambda f: t1(f, ball().astype(np.int16)),
    "negative values": lambda f: t1(f, ball() - 20),
    "voxels just fine enough": lambda f: t1(f, ball(), sform=affine(2.99)),
    "a small shift between the transforms": lambda f: t1(
        f, sform=affine(), qform=affine() + np.eye(4, k=3) * 0.5
    ),
}


@pytest.mark.parametrize("write", SOUND_T1.values(), ids=SOUND_T1)
def test_sound_scans_beside_them_pass(write, tmp_path):
    path = write(tmp_path)
    options = gather_options({"t1": str(path), "names": LIST})
    inputs = read_inputs(options, names=True, recording=False, out=tmp_path / "o")
    assert inputs.volume.intensity.shape == (96, 96, 96)
    assert inputs.files[0].role == "t1"
    assert not (tmp_path / "o").exists()


SOUND_NAMES = {
    "as in 10-20": (LIST, NAMES),
    "usual spellings": ("EEG Fp1-REF,FPZ,T3,cz", ["Fp1", "Fpz", "T7", "Cz"]),
    "with channels that are none": ("Fp1,ECG,Oz,HEOG,STI 014", ["Fp1", "Oz"]),
    "spaces round them": (" Fp1 , Oz", ["Fp1", "Oz"]),
    "one": ("Cz", ["Cz"]),
}


@pytest.mark.parametrize(("names", "expected"), SOUND_NAMES.values(), ids=SOUND_NAMES)
def test_sound_names_beside_them_pass(names, expected, tmp_path):
    options = gather_options({"t1": str(t1(tmp_path)), "names": names})
    inputs = read_inputs(options, names=True, recording=False, out=tmp_path / "o")
    assert list(inputs.layout.names) == list(expected)
    others = len(names.split(",")) - len(expected)
    assert len([f for f in inputs.findings if f.stage == "names"]) == others


def test_a_file_of_names_is_read_and_is_an_input(tmp_path):
    path = text(tmp_path / "n.txt", "# a cap\nFp1\n\nOz   # behind\n")
    options = gather_options({"t1": str(t1(tmp_path)), "names": str(path), "also": "FCz"})
    inputs = read_inputs(options, names=True, recording=False, out=tmp_path / "o")
    assert inputs.layout.names == ("Fp1", "Oz", "FCz")
    assert [f.role for f in inputs.files] == ["t1", "names"]


def test_a_layout_of_ones_own_gives_its_names(tmp_path):
    rows = [("E1", -40, 80, 40), ("E2", 40, 80, 40), ("E3", 0, -90, 40), ("E4", 0, 0, 110)]
    body = "name\tx\ty\tz\n" + "".join("\t".join(map(str, row)) + "\n" for row in rows)
    layout = text(tmp_path / "cap.tsv", body)
    flags = {"t1": str(t1(tmp_path)), "names": "E4,e1", "layout": str(layout)}
    inputs = read_inputs(gather_options(flags), names=True, recording=False, out=tmp_path / "o")
    assert inputs.layout.names == ("E4", "E1")
    assert inputs.layout.positions_mm[0].tolist() == [0, 0, 110]


SOUND_RECORDINGS = {
    "one kind of event": ({}, {}),
    "several kinds and one chosen": ({"events": ("S  1", "S  2")}, {"event": "S  2"}),
    "an event as people write it": ({}, {"event": "s1"}),
    "a forward window": ({}, {"window": [0.05, 0.3]}),
}


@pytest.mark.parametrize(("settings", "flags"), SOUND_RECORDINGS.values(), ids=SOUND_RECORDINGS)
def test_sound_recordings_beside_them_pass(settings, flags, tmp_path):
    both(tmp_path, **settings)
    files = {"t1": str(tmp_path / "t1.nii.gz"), "eeg": str(tmp_path / "rec.vhdr")}
    options = gather_options({**files, **flags})
    inputs = read_inputs(options, names=True, recording=True, out=tmp_path / "o")
    assert list(inputs.channel_names) == NAMES
    assert [f.role for f in inputs.files] == ["t1", "eeg", "eeg", "eeg"]
    from locator.recording import EpochOptions

    epochs = make_epochs(
        inputs.recording,
        names=inputs.channel_names,
        options=EpochOptions(event=options.event, epoch_s=options.epoch),
    )
    assert len(epochs.data_uv) >= 15


def test_given_positions_choose_the_channels_that_have_one(tmp_path):
    both(tmp_path)
    places = np.random.default_rng(0).normal(size=(27, 3))
    places = 90 * places / np.linalg.norm(places, axis=1, keepdims=True)
    body = "name\tx\ty\tz\n" + "".join(
        f"{name}\t{x:.2f}\t{y:.2f}\t{z:.2f}\n"
        for name, (x, y, z) in zip(reversed(NAMES[1:]), places, strict=True)
    )
    table = text(tmp_path / "e.tsv", body)
    flags = {
        "t1": str(tmp_path / "t1.nii.gz"),
        "eeg": str(tmp_path / "rec.vhdr"),
        "electrodes": str(table),
    }
    inputs = read_inputs(gather_options(flags), names=True, recording=True, out=tmp_path / "o")
    assert list(inputs.given[0]) == NAMES[1:]
    assert np.allclose(inputs.given[1][0], places[-1], atol=0.01)
    assert [f.subject for f in inputs.findings] == ["Fp1"]


def test_a_session_file_beside_the_broken_ones_passes(tmp_path):
    both(tmp_path)
    path = text(
        tmp_path / "s.toml", 't1 = "t1.nii.gz"\neeg = "rec.vhdr"\ncapsule_mm = 8\nevent = "S1"\n'
    )
    options = gather_options({}, path)
    inputs = read_inputs(options, names=True, recording=True, out=tmp_path / "o")
    assert inputs.volume.intensity.shape == (96, 96, 96)


def test_decisions_beside_the_broken_ones_pass(tmp_path):
    t1(tmp_path)
    (tmp_path / "o").mkdir()
    line = {"who": "A", "when": "2026-01-31T14:05:00Z", "electrode": "Cz", "before": None}
    lines = [
        json.dumps({**line, "after": {"capsule": [0, 0, 110]}}),
        json.dumps({**line, "after": None}),
        '{"who": "B", "when": "2026-01-3',
    ]
    text(tmp_path / "o" / "review.jsonl", "\n".join(lines))
    options = gather_options({"t1": str(tmp_path / "t1.nii.gz"), "names": LIST})
    inputs = read_inputs(options, names=True, recording=False, out=tmp_path / "o")
    assert [review.kind for review in inputs.reviews] == ["capsule", "withdrawn"]
    assert any("cut off" in finding.problem for finding in inputs.findings)
    assert "review" in [file.role for file in inputs.files]

"""Recordings as files: what is read, and how broken ones are refused."""

from __future__ import annotations

import shutil
import warnings
from pathlib import Path

import mne
import numpy as np
import pybv
import pytest

from locator.errors import FileError
from locator.io.eeg import read_recording

NAMES = ["Fp1", "Fp2", "Cz", "O1", "O2", "ECG"]
RATE = 250.0


def _data(seed: int = 0, seconds: float = 4.0) -> np.ndarray:
    rng = np.random.default_rng(seed)
    return 20.0 * rng.standard_normal((len(NAMES), int(seconds * RATE)))


def _brainvision(folder: Path, events: list[dict] | None = None, **settings) -> Path:
    if events is None:
        events = [
            {"onset": 100, "duration": 1, "description": 1, "type": "Stimulus"},
            {"onset": 300, "duration": 1, "description": 12, "type": "Stimulus"},
            {"onset": 500, "duration": 1, "description": 1, "type": "Response"},
            {"onset": 700, "duration": 1, "description": "eyes open", "type": "Comment"},
        ]
    pybv.write_brainvision(
        data=_data() * 1e-6,
        sfreq=RATE,
        ch_names=NAMES,
        fname_base="rec",
        folder_out=str(folder),
        events=events,
        unit="µV",
        **settings,
    )
    return folder / "rec.vhdr"


def _raw(seconds: float = 4.0) -> mne.io.RawArray:
    info = mne.create_info([*NAMES, "STI"], RATE, [*["eeg"] * 5, "ecg", "stim"])
    trigger = np.zeros((1, int(seconds * RATE)))
    trigger[0, 100:105] = 1
    trigger[0, 300:305] = 2
    trigger[0, 500:505] = 1
    return mne.io.RawArray(
        np.vstack([_data(seconds=seconds) * 1e-6, trigger]), info, verbose="ERROR"
    )


def test_brainvision_gives_microvolt_and_events_as_people_know_them(tmp_path):
    recording = read_recording(_brainvision(tmp_path))
    assert recording.channel_names == tuple(NAMES)
    assert recording.sampling_hz == RATE
    # 0.1 µV is the resolution that the file is written with.
    np.testing.assert_allclose(recording.data_uv, _data(), atol=0.1)
    assert recording.event_names == ("S1", "S12", "R1", "eyes open")
    assert recording.event_samples.tolist() == [100, 300, 500, 700]
    assert recording.averaged_from is None


def test_pauses_and_bad_stretches_are_kept_apart_from_events(tmp_path):
    raw = _raw()
    raw.drop_channels(["STI"])
    raw.set_annotations(
        mne.Annotations(
            [0.4, 1.0, 2.0, 3.0], [0, 0.5, 0, 0], ["go", "BAD_move", "BAD boundary", "stop"]
        )
    )
    raw.info["bads"] = ["O1"]
    raw.save(tmp_path / "x_raw.fif", verbose="ERROR")
    recording = read_recording(tmp_path / "x_raw.fif")
    assert recording.event_names == ("go", "stop")
    assert recording.break_samples.tolist() == [500]
    assert recording.bad_spans.tolist() == [[250, 375]]
    assert recording.marked_bad == ("O1",)


def test_fif_takes_events_from_the_trigger_channel(tmp_path):
    _raw().save(tmp_path / "x_raw.fif", verbose="ERROR")
    recording = read_recording(tmp_path / "x_raw.fif")
    assert recording.event_names == ("1", "2", "1")
    assert recording.event_samples.tolist() == [100, 300, 500]
    np.testing.assert_allclose(recording.data_uv[:6], _data(), rtol=1e-4, atol=1e-3)


def test_a_cropped_fif_keeps_its_events_in_place(tmp_path):
    raw = _raw()
    raw.drop_channels(["STI"])
    raw.set_meas_date(0)
    raw.set_annotations(mne.Annotations([2.0], [0.0], ["go"], orig_time=raw.info["meas_date"]))
    raw.crop(1.0, 3.0).save(tmp_path / "x_raw.fif", verbose="ERROR")
    recording = read_recording(tmp_path / "x_raw.fif")
    assert recording.event_samples.tolist() == [250]


def _write_edf(path: Path, annotations: bool = True) -> None:
    """A small EDF+ file, byte by byte, after Kemp & Olivan 2003, Clin Neurophysiol 114:1755."""
    data = np.clip(np.round(_data() / 0.1), -32768, 32767).astype("<i2")
    labels = [*[f"EEG {name}-REF" for name in NAMES[:5]], "ECG"]
    per_record, records = int(RATE), 4
    if annotations:
        labels.append("EDF Annotations")
    count = len(labels)

    def cells(values, width):
        return b"".join(str(value).encode().ljust(width) for value in values)

    signals = count - int(annotations)
    head = b"0".ljust(8) + b"X".ljust(80) + b"X".ljust(80) + b"01.01.2000.00.00"
    head = head[:168] + b"01.01.00" + b"00.00.00"
    head += str(256 * (count + 1)).encode().ljust(8) + b"EDF+C".ljust(44)
    head += str(records).encode().ljust(8) + b"1".ljust(8) + str(count).encode().ljust(4)
    extra = [-1] if annotations else []
    head += cells(labels, 16) + cells([""] * count, 80)
    head += cells(["uV"] * signals + [""] * len(extra), 8)
    head += cells([-3276.8] * signals + extra, 8) + cells([3276.7] * signals + [1] * len(extra), 8)
    head += cells([-32768] * count, 8) + cells([32767] * count, 8)
    head += cells([""] * count, 80)
    head += cells([per_record] * signals + [30] * len(extra), 8) + cells([""] * count, 32)
    notes = {0: b"+0.4\x14go\x14\x00", 2: b"+2.0\x14stop\x14\x00"}
    with path.open("wb") as stream:
        stream.write(head)
        for record in range(records):
            part = data[:, record * per_record : (record + 1) * per_record]
            stream.write(part.tobytes())
            if annotations:
                text = f"+{record}\x14\x14\x00".encode() + notes.get(record, b"")
                stream.write(text.ljust(60, b"\x00"))


def test_edf_is_read_with_its_annotations(tmp_path):
    _write_edf(tmp_path / "x.edf")
    recording = read_recording(tmp_path / "x.edf")
    assert recording.channel_names[:2] == ("EEG Fp1-REF", "EEG Fp2-REF")
    np.testing.assert_allclose(recording.data_uv[:6], _data(), atol=0.06)
    assert recording.event_names == ("go", "stop")
    assert recording.event_samples.tolist() == [100, 500]


def test_an_average_in_fif_comes_without_trials(tmp_path):
    info = mne.create_info(NAMES[:5], RATE, "eeg")
    average = mne.EvokedArray(_data()[:5, :175] * 1e-6, info, tmin=-0.2, nave=80, comment="tone")
    average.save(tmp_path / "x-ave.fif", verbose="ERROR")
    recording = read_recording(tmp_path / "x-ave.fif")
    assert recording.averaged_from == 80
    assert recording.event_names == ("tone",)
    assert recording.first_time_s == pytest.approx(-0.2)
    np.testing.assert_allclose(recording.data_uv, _data()[:5, :175], rtol=1e-4)
    # Whatever the file is called.
    shutil.copy(tmp_path / "x-ave.fif", tmp_path / "mean.fif")
    assert read_recording(tmp_path / "mean.fif").averaged_from == 80


def test_several_averages_in_one_file_are_refused(tmp_path):
    info = mne.create_info(NAMES[:5], RATE, "eeg")
    pair = [
        mne.EvokedArray(_data()[:5, :175] * 1e-6, info, tmin=-0.2, comment=name, verbose="ERROR")
        for name in ("left", "right")
    ]
    mne.write_evokeds(tmp_path / "x-ave.fif", pair, verbose="ERROR")
    with pytest.raises(FileError, match=r"2 averages.*'left', 'right'"):
        read_recording(tmp_path / "x-ave.fif")


def test_an_average_in_brainvision_comes_without_trials(tmp_path):
    header = _brainvision(
        tmp_path, [{"onset": 50, "duration": 1, "description": 3, "type": "Stimulus"}]
    )
    text = header.read_text(encoding="utf-8")
    text = text.replace(
        "[Common Infos]",
        "[Common Infos]\nAveraged=YES\nAveragedSegments=64\nSegmentDataPoints=1000",
    )
    header.write_text(text, encoding="utf-8")
    recording = read_recording(header)
    assert recording.averaged_from == 64
    assert recording.first_time_s == pytest.approx(-0.2)
    header.write_text(text.replace("Points=1000", "Points=500"), encoding="utf-8")
    with pytest.raises(FileError, match="2 averages of 500 samples"):
        read_recording(header)


def test_the_input_is_left_as_it_was(tmp_path):
    header = _brainvision(tmp_path)
    before = {path.name: path.read_bytes() for path in tmp_path.iterdir()}
    read_recording(header)
    assert {path.name: path.read_bytes() for path in tmp_path.iterdir()} == before


def _absent(folder):
    return folder / "nothing.vhdr"


def _folder(folder):
    return folder


def _empty(folder):
    (folder / "x.vhdr").touch()
    return folder / "x.vhdr"


def _other_kind(folder):
    (folder / "x.xlsx").write_bytes(b"PK\x03\x04")
    return folder / "x.xlsx"


def _part(folder):
    return _brainvision(folder).with_suffix(".vmrk")


def _text_as_vhdr(folder):
    (folder / "x.vhdr").write_text("hello\n")
    return folder / "x.vhdr"


def _no_data_file(folder):
    header = _brainvision(folder)
    header.with_suffix(".eeg").unlink()
    return header


def _no_marker_file(folder):
    header = _brainvision(folder)
    header.with_suffix(".vmrk").unlink()
    return header


def _data_cut(folder):
    header = _brainvision(folder)
    whole = header.with_suffix(".eeg").read_bytes()
    header.with_suffix(".eeg").write_bytes(whole[: len(whole) * 2 // 3 + 1])
    return header


def _data_cut_at_a_sample(folder):
    """Nothing but the last marker tells that these data are too short."""
    header = _brainvision(folder)
    whole = header.with_suffix(".eeg").read_bytes()
    header.with_suffix(".eeg").write_bytes(whole[: len(whole) // 2])
    text = header.read_text(encoding="utf-8")
    lines = [line for line in text.split("\n") if not line.startswith("DataPoints")]
    header.write_text("\n".join(lines), encoding="utf-8")
    return header


def _header_cut(folder):
    header = _brainvision(folder)
    text = header.read_text(encoding="utf-8")
    header.write_text(text[: text.index("[Channel Infos]")], encoding="utf-8")
    return header


def _edf_cut(folder):
    _write_edf(folder / "x.edf")
    whole = (folder / "x.edf").read_bytes()
    (folder / "x.edf").write_bytes(whole[:-3000])
    return folder / "x.edf"


def _edf_noise(folder):
    (folder / "x.edf").write_bytes(np.random.default_rng(0).bytes(5000))
    return folder / "x.edf"


def _bdf_is_edf(folder):
    _write_edf(folder / "x.bdf")
    return folder / "x.bdf"


def _fif_cut(folder):
    _raw().save(folder / "x_raw.fif", verbose="ERROR")
    whole = (folder / "x_raw.fif").read_bytes()
    (folder / "x_raw.fif").write_bytes(whole[: len(whole) // 2])
    return folder / "x_raw.fif"


def _fif_noise(folder):
    (folder / "x_raw.fif").write_bytes(np.random.default_rng(0).bytes(5000))
    return folder / "x_raw.fif"


def _set_noise(folder):
    (folder / "x.set").write_bytes(np.random.default_rng(0).bytes(5000))
    return folder / "x.set"


@pytest.mark.parametrize(
    ("make", "culprit"),
    [
        (_absent, "no such recording"),
        (_folder, "is a folder"),
        (_empty, "empty file"),
        (_other_kind, r"'\.xlsx' cannot be read"),
        (_part, "Give its header instead"),
        (_text_as_vhdr, "not a BrainVision header"),
        (_no_data_file, r"rec\.eeg' that the header names is not there"),
        (_no_marker_file, r"rec\.vmrk' that the header names is not there"),
        (_data_cut, "cut short"),
        (_data_cut_at_a_sample, "markers lie beyond the end"),
        (_header_cut, "lists no channels"),
        (_edf_cut, "cut short"),
        (_edf_noise, "not a readable EDF file"),
        (_bdf_is_edf, "not the mark of a BDF file"),
        (_fif_cut, "cut short"),
        (_fif_noise, r"x_raw\.fif"),
        (_set_noise, r"x\.set"),
    ],
)
def test_broken_files_are_refused_by_name_without_noise(tmp_path, capfd, make, culprit):
    path = make(tmp_path)
    capfd.readouterr()
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        with pytest.raises(FileError, match=culprit) as caught:
            read_recording(path)
    assert str(path.with_suffix("")) in str(caught.value)
    assert "\n" not in str(caught.value)
    out, err = capfd.readouterr()
    assert out == ""
    assert err == ""

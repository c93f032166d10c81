"""Commands, options, session files and exit codes, as people and scripts rely on them."""

from __future__ import annotations

import io
import logging
import re
from pathlib import Path

import pytest

from locator import cli
from locator.errors import CommandLineError, FileError, SettingError
from locator.session.options import KEYS, SessionOptions, gather_options, read_session_file

COMMANDS = ("demo", "begin", "find", "head", "run", "inspect")

OPTIONS = {
    "demo": "--out --permutations --strict",
    "begin": "--t1 --eeg --out",
    "find": "--names --also --capsule-mm --holder-mm --right-marker --left-marker --layout"
    " --landmarks --eeg --out --strict",
    "head": "--out --capsule-mm --surfaces --strict",
    "run": "--t1 --eeg --out --subject --names --also --capsule-mm --holder-mm --right-marker"
    " --left-marker --layout --landmarks --electrodes --event --epoch --window --method"
    " --source-space --surfaces --conductivity --permutations --seed --again --strict",
    "inspect": "--picture",
}


def called(capsys, *arguments):
    """Exit code, stdout and stderr of one command."""
    code = cli.main([str(argument) for argument in arguments])
    out, err = capsys.readouterr()
    return code, out, err


# ── the command line ─────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize("command", COMMANDS)
def test_help_names_exactly_the_options_that_work(capsys, command):
    code, out, _ = called(capsys, command, "--help")
    assert code == 0
    named = set(re.findall(r"(?<![\w-])--[a-z][a-z0-9-]*", out))
    assert named == set(OPTIONS[command].split()) | {"--help", "--quiet", "--verbose"}


def test_help_without_a_command_names_the_commands_and_no_other(capsys):
    code, out, _ = called(capsys, "--help")
    assert code == 0
    listed = re.findall(r"^    ([a-z]+) ", out, flags=re.MULTILINE)
    assert tuple(listed) == COMMANDS
    assert not re.search(r"batch|bold|lesion|dicom", out, flags=re.IGNORECASE)


@pytest.mark.parametrize(
    "arguments",
    [
        [],
        ["frobnicate"],
        ["find"],
        ["find", "t1.nii.gz"],
        ["head"],
        ["run", "--band", "8", "12"],
        ["run", "--against", "other"],
        ["run", "--share"],
        ["run", "--source-space", "skull"],
        ["run", "--method", "magic"],
        ["run", "--epoch", "0.5"],
        ["run", "--seed", "one"],
        ["run", "--perm", "100"],
        ["find", "t1.nii.gz", "--names", "Cz", "--right-marker", "--left-marker"],
        ["begin", "--t1", "t1.nii.gz"],
        ["batch", "sessions.toml"],
        ["inspect"],
    ],
    ids=" ".join,
)
def test_a_wrong_command_line_is_exit_2(capsys, arguments):
    code, out, err = called(capsys, *arguments)
    assert code == 2
    assert out == ""
    assert "usage: locator" in err
    assert "Traceback" not in err


def test_the_version_is_told(capsys):
    code, out, _ = called(capsys, "--version")
    assert (code, out.split()[0]) == (0, "locator")


@pytest.mark.parametrize(
    ("flags", "culprit"),
    [
        ({"capsule_mm": -5.0}, "capsule_mm.*-5"),
        ({"capsule_mm": float("nan")}, "capsule_mm"),
        ({"holder_mm": 400.0}, "holder_mm"),
        ({"window": [0.3, 0.1]}, r"window.*0\.3 0\.1"),
        ({"window": [0.1, 0.9]}, r"0\.1 to 0\.9 s reaches outside the epoch -0\.2 to 0\.5"),
        ({"epoch": [0.5, -0.2]}, "epoch"),
        ({"epoch": [0.0, 0.5]}, "epoch.*baseline"),
        ({"epoch": [-200.0, 500.0]}, "seconds"),
        ({"conductivity": [0.33, 0.0, 0.33]}, "conductivity"),
        ({"permutations": 3}, "permutations.*3"),
        ({"seed": -1}, "seed.*-1"),
    ],
)
def test_a_value_that_cannot_be_is_the_command_line_s_fault(flags, culprit):
    with pytest.raises(CommandLineError, match=culprit):
        gather_options(flags)
    assert CommandLineError.exit_code == 2


def test_sound_values_beside_them_pass():
    options = gather_options(
        {"capsule_mm": 5.0, "holder_mm": 0.0, "window": [0.1, 0.3], "epoch": [-0.3, 0.8]}
    )
    assert (options.capsule_mm, options.window, options.epoch) == (5.0, (0.1, 0.3), (-0.3, 0.8))


# ── the session file ─────────────────────────────────────────────────────────────────────


def write(path, text):
    path.write_text(text, encoding="utf-8")
    return path


def test_a_full_session_file_is_understood_and_paths_are_relative_to_it(tmp_path):
    folder = tmp_path / "study"
    folder.mkdir()
    (folder / "names.txt").write_text("Cz\n")
    path = write(
        folder / "session.toml",
        't1 = "../scans/t1.nii.gz"\neeg = "rec.vhdr"\nout = "results"\nsubject = "invented"\n'
        'names = "names.txt"\nalso = ["FCz"]\ncapsule_mm = 8\nholder_mm = 2.5\n'
        'side_marker = "right"\nlayout = "cap.tsv"\nlandmarks = "l.json"\n'
        'electrodes = "e.tsv"\nevent = "S  1"\nepoch = [-0.1, 0.4]\nwindow = [0, 0.3]\n'
        'method = "dspm"\nsource_space = "brain"\nsurfaces = "own"\nconductivity = [0.4, 0.01, 0.4]\n'
        "permutations = 500\nseed = 3\n",
    )
    options = gather_options({}, path)
    assert options.t1 == folder / "../scans/t1.nii.gz"
    assert options.eeg == folder / "rec.vhdr"
    assert options.names == str(folder / "names.txt")
    assert options.surfaces == folder / "own"
    assert options.window == (0.0, 0.3)
    assert (options.side_marker, options.method, options.seed) == ("right", "dspm", 3)
    assert set(read_session_file(path)) == set(KEYS)


def test_what_is_written_down_does_not_depend_on_the_folder_one_stands_in(tmp_path, monkeypatch):
    write(tmp_path / "names.txt", "Cz\n")
    monkeypatch.chdir(tmp_path)
    settings = gather_options({"t1": "t1.nii", "names": "names.txt"}).as_settings()
    assert settings["t1"] == str(tmp_path / "t1.nii")
    assert settings["names"] == str(tmp_path / "names.txt")
    assert gather_options({"names": "Cz,Oz"}).as_settings()["names"] == "Cz,Oz"


def test_flags_win_over_the_file(tmp_path):
    path = write(tmp_path / "s.toml", 't1 = "a.nii"\nseed = 3\ncapsule_mm = 8.0\n')
    options = gather_options({"seed": 4, "t1": "b.nii", "event": None}, path)
    assert (options.seed, options.t1, options.capsule_mm) == (4, Path("b.nii"), 8.0)


@pytest.mark.parametrize(
    ("text", "error", "words"),
    [
        ('t1 = "a.nii"\ncapsul_mm = 8\n', SettingError, "'capsul_mm'.*nearest.*'capsule_mm'"),
        ('T1 = "a.nii"\n', SettingError, "'T1'.*'t1'"),
        ("band = [8, 12]\n", SettingError, "'band'"),
        ('against = "other"\n', SettingError, "'against'"),
        ("surfaces = 5\n", SettingError, "surfaces.*5"),
        ("[stage]\nx = 1\n", SettingError, "'stage'"),
        ("t1 = \n", SettingError, "not valid TOML.*line 1"),
        ('t1 = "a"\nt1 = "b"\n', SettingError, "not valid TOML"),
        ("t1 = 5\n", SettingError, "t1.*5"),
        ("names = [1, 2]\n", SettingError, "names"),
        ("names = []\n", SettingError, "names.*empty"),
        ("event = 1\n", SettingError, "event.*1.*quotes"),
        ('capsule_mm = "8"\n', SettingError, "capsule_mm.*'8'"),
        ("capsule_mm = -8\n", SettingError, "capsule_mm.*-8"),
        ("capsule_mm = true\n", SettingError, "capsule_mm"),
        ("window = [0.3, 0.1]\n", SettingError, "window"),
        ("window = [0.3, 0.9]\n", SettingError, "window"),
        ("epoch = [-0.2]\n", SettingError, "epoch.*2 numbers"),
        ('side_marker = "up"\n', SettingError, "side_marker.*up.*right, left"),
        ('source_space = "skull"\n', SettingError, "source_space.*skull"),
        ("seed = 1.5\n", SettingError, "seed"),
    ],
)
def test_a_session_file_that_cannot_be_used_is_exit_3(tmp_path, text, error, words):
    path = write(tmp_path / "s.toml", text)
    with pytest.raises(error, match=words) as caught:
        gather_options({}, path)
    assert caught.value.exit_code == 3


def test_every_message_about_a_session_file_names_it(tmp_path):
    path = write(tmp_path / "odd.toml", "capsule_mm = -8\n")
    with pytest.raises(SettingError, match=r"odd\.toml"):
        gather_options({}, path)
    with pytest.raises(FileError, match=r"absent\.toml"):
        gather_options({}, tmp_path / "absent.toml")
    (tmp_path / "bytes.toml").write_bytes(b"t1 = '\xff\xfe'")
    with pytest.raises(FileError, match=r"bytes\.toml"):
        gather_options({}, tmp_path / "bytes.toml")


def test_defaults_are_those_of_the_stages():
    from locator.forward import ForwardOptions
    from locator.inverse import InverseOptions
    from locator.recording import EpochOptions

    options = SessionOptions()
    assert options.epoch == EpochOptions().epoch_s
    assert options.conductivity == tuple(ForwardOptions().conductivity_s_per_m)
    # The help of --method calls its first choice the default.
    assert InverseOptions().method == cli.METHODS[0]


# ── what it tells ────────────────────────────────────────────────────────────────────────


class Terminal(io.StringIO):
    def isatty(self):
        return True


def tell(stream):
    teller = cli.Teller(stream)
    for stage in ("skin", "markers"):
        teller(stage, 0.0, "")
        for share in (0.2, 0.4, 0.6):
            teller(stage, share, "working")
        teller(stage, 1.0, "3.2 s")
    teller.end()
    return stream.getvalue()


def test_progress_is_one_refreshed_line_on_a_terminal(monkeypatch):
    monkeypatch.setenv("TERM", "xterm")
    text = tell(Terminal())
    assert "\n" not in text
    assert text.endswith("\r\x1b[K")
    assert "markers: 3.2 s" in text


def test_progress_is_plain_lines_elsewhere():
    text = tell(io.StringIO())
    assert text.splitlines() == ["skin ...", "skin: 3.2 s", "markers ...", "markers: 3.2 s"]


def test_a_fault_of_ours_is_exit_1_with_a_place_for_the_details(capsys, tmp_path, monkeypatch):
    def breaks(*_arguments, **_settings):
        raise ZeroDivisionError("a fault on purpose")

    monkeypatch.setattr("locator.session.run.run_head", breaks)
    code, out, err = called(capsys, "head", tmp_path / "t1.nii.gz", "--out", tmp_path / "o")
    assert (code, out) == (1, "")
    assert "Traceback" not in err
    assert str(tmp_path / "o" / "locator-error.log") in err
    details = (tmp_path / "o" / "locator-error.log").read_text()
    assert "Traceback" in details
    assert "a fault on purpose" in details


def test_an_interrupt_is_told_in_one_line(capsys, tmp_path, monkeypatch):
    def stopped(*_arguments, **_settings):
        raise KeyboardInterrupt

    monkeypatch.setattr("locator.session.run.run_head", stopped)
    code, _, err = called(capsys, "head", tmp_path / "t1.nii.gz", "--quiet")
    assert code == 130
    assert err.strip() == "locator: stopped; start it again to go on."


def test_inspect_without_a_picture_says_what_there_is(capsys, tmp_path):
    code, _, err = called(capsys, "inspect", tmp_path)
    assert code == 2
    assert "--picture" in err


@pytest.fixture(autouse=True)
def _plain_logging():
    """Leave the root logger as it was found: each command sets it up."""
    root = logging.getLogger()
    before, level = list(root.handlers), root.level
    yield
    root.handlers[:] = before
    root.setLevel(level)
    logging.captureWarnings(False)

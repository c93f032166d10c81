"""Arguments in, exit code out; what a command needs is loaded only when it runs."""

from __future__ import annotations

import argparse
import logging
import os
import shutil
import signal
import sys
import time
import traceback
from collections.abc import Callable, Sequence
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Any, TextIO

from locator import __version__
from locator.errors import CommandLineError, LocatorError
from locator.session.options import METHODS, SOURCE_SPACES, SessionOptions, gather_options

if TYPE_CHECKING:
    from locator.session.run import Outcome

OUR_FAULT = 1
WRONG_COMMAND_LINE = 2
NEEDS_AN_EYE = 4
STOPPED = 130
"""Common practice of shells for a command that was interrupted (128 + 2)."""

LOG_NAME = "locator-error.log"

PLAIN_LINE_S = 15.0
"""Where there is no terminal, a long stage is heard of this often."""

MOST_LISTED = 12
"""Findings shown after a command; the rest is counted."""


# ── arguments ────────────────────────────────────────────────────────────────────────────


def make_parser() -> argparse.ArgumentParser:
    """Return the parser of all commands."""
    parser = argparse.ArgumentParser(
        prog="locator",
        description="Find EEG electrode capsules in a T1 scan, label them, and project the EEG"
        " into the space of the scan. Research software, not a medical device.",
        epilog="Exit codes: 0 done; 2 the command line is wrong; 3 an input cannot be used;"
        " 4 (only with --strict) done, but something needs a person's eye; 1 a fault of ours.",
    )
    parser.add_argument("--version", action="version", version=f"locator {__version__}")
    commands = parser.add_subparsers(dest="command", metavar="COMMAND", required=True)
    _add_demo(commands)
    _add_begin(commands)
    _add_find(commands)
    _add_head(commands)
    _add_run(commands)
    _add_inspect(commands)
    for command in commands.choices.values():
        group = command.add_argument_group("what it tells")
        group.add_argument("--quiet", action="store_true", help="no progress, only the outcome")
        group.add_argument("--verbose", action="store_true", help="log every stage to stderr")
    return parser


def _add(commands: Any, name: str, words: str, work: Callable[..., int]) -> Any:
    parser = commands.add_parser(name, help=words, description=words, allow_abbrev=False)
    parser.set_defaults(work=work)
    return parser


def _add_out(parser: Any, words: str) -> None:
    parser.add_argument("--out", metavar="DIR", help=words)


def _add_strict(parser: Any) -> None:
    parser.add_argument(
        "--strict", action="store_true", help="exit code 4 when something needs a person's eye"
    )


def _add_demo(commands: Any) -> None:
    parser = _add(
        commands, "demo", "Run the whole job on an invented session (no real person).", demo
    )
    _add_out(parser, "output folder (default: ./locator-demo)")
    parser.add_argument(
        "--permutations", type=int, metavar="N", help="sign flips of the test (default 5000)"
    )
    _add_strict(parser)


def _add_begin(commands: Any) -> None:
    parser = _add(commands, "begin", "Look at the files and write a commented session file.", begin)
    parser.add_argument("--t1", metavar="FILE", required=True, help="T1 scan (.nii, .nii.gz)")
    parser.add_argument("--eeg", metavar="FILE", help="recording")
    parser.add_argument(
        "--out", metavar="SESSION.toml", required=True, help="session file to be written"
    )


def _add_find(commands: Any) -> None:
    parser = _add(
        commands, "find", "Find the capsules and label the electrodes; nothing else.", find
    )
    parser.add_argument("t1", metavar="T1", help="T1 scan (.nii, .nii.gz)")
    parser.add_argument("--eeg", metavar="FILE", help="recording, for --names eeg")
    _add_out(parser, "output folder (default: locator-out beside the T1)")
    _add_electrodes(parser, names_required=True)
    _add_strict(parser)


def _add_head(commands: Any) -> None:
    parser = _add(
        commands, "head", "Build tissues and the three closed surfaces, capsules or not.", head
    )
    parser.add_argument("t1", metavar="T1", help="T1 scan (.nii, .nii.gz)")
    _add_out(parser, "output folder (default: locator-out beside the T1)")
    parser.add_argument(
        "--capsule-mm", type=float, metavar="MM", help="capsule diameter (default: estimated)"
    )
    _add_surfaces(parser)
    _add_strict(parser)


def _add_run(commands: Any) -> None:
    parser = _add(commands, "run", "Do the whole job; flags override the session file.", run)
    parser.add_argument("session", nargs="?", metavar="SESSION.toml", help="session file")
    parser.add_argument("--t1", metavar="FILE", help="T1 scan (.nii, .nii.gz)")
    parser.add_argument("--eeg", metavar="FILE", help="recording (BrainVision, EDF, FIF, EEGLAB)")
    _add_out(parser, "output folder (default: locator-out beside the T1)")
    parser.add_argument("--subject", metavar="NAME", help="name for the report")
    parser.add_argument(
        "--again",
        metavar="provenance.json",
        help="make the same results anew from what an earlier run wrote down; needs --out",
    )
    _add_electrodes(parser, names_required=False)
    group = parser.add_argument_group("response and estimate")
    group.add_argument(
        "--electrodes",
        metavar="FILE",
        help="positions from elsewhere (BIDS electrodes table, scanner mm); no capsules needed",
    )
    group.add_argument("--event", metavar="NAME", help="event (default: the only kind there is)")
    group.add_argument(
        "--epoch",
        type=float,
        nargs=2,
        metavar=("START", "END"),
        help="s around the event (default -0.2 0.5, baseline up to 0)",
    )
    group.add_argument(
        "--window",
        type=float,
        nargs=2,
        metavar=("START", "END"),
        help="s; the part that is tested (default: the epoch after 0)",
    )
    group.add_argument("--method", choices=METHODS, help=f"inverse method (default {METHODS[0]})")
    group.add_argument(
        "--source-space", choices=SOURCE_SPACES, help="where sources may be (default grey)"
    )
    group.add_argument(
        "--conductivity",
        type=float,
        nargs=3,
        metavar=("SCALP", "SKULL", "BRAIN"),
        help="S/m (default 0.33 0.0132 0.33)",
    )
    _add_surfaces(group)
    group.add_argument(
        "--permutations", type=int, metavar="N", help="sign flips of the test (default 5000)"
    )
    group.add_argument("--seed", type=int, metavar="N", help="default 0")
    _add_strict(parser)


def _add_surfaces(parser: Any) -> None:
    parser.add_argument(
        "--surfaces",
        metavar="DIR",
        help="folder with own surfaces in place of ours: scalp, outer_skull, inner_skull"
        " (.surf.gii or .gii, scanner mm), any of the three",
    )


def _add_electrodes(parser: Any, *, names_required: bool) -> None:
    group = parser.add_argument_group("electrodes")
    group.add_argument(
        "--names",
        metavar="NAMES",
        required=names_required,
        help="comma-separated, a text file with one name a line, or 'eeg': the channels of the"
        " recording that are scalp electrodes" + ("" if names_required else " (default)"),
    )
    group.add_argument(
        "--also",
        metavar="NAMES",
        help="comma-separated: names that wear a capsule but have no channel (reference, ground)",
    )
    group.add_argument(
        "--capsule-mm", type=float, metavar="MM", help="capsule diameter (default: estimated)"
    )
    group.add_argument(
        "--holder-mm",
        type=float,
        metavar="MM",
        help="skin to underside of the capsule (default: measured from the image)",
    )
    sides = group.add_mutually_exclusive_group()
    for side in ("right", "left"):
        sides.add_argument(
            f"--{side}-marker",
            dest="side_marker",
            action="store_const",
            const=side,
            help=f"an extra capsule was worn on the {side} side",
        )
    group.add_argument(
        "--layout",
        metavar="FILE",
        help="template positions (BIDS electrodes table) for caps outside 10-20 / 10-10 / 10-05",
    )
    group.add_argument(
        "--landmarks",
        metavar="FILE",
        help="JSON with NAS, LPA, RPA in scanner mm (default: estimated)",
    )


def _add_inspect(commands: Any) -> None:
    parser = _add(
        commands, "inspect", "Show the electrodes that find or run left in a folder.", inspect
    )
    parser.add_argument("dir", metavar="DIR", help="output folder of find or run")
    parser.add_argument(
        "--picture", metavar="FILE.png", help="write the scene to a picture, without a display"
    )


# ── progress ─────────────────────────────────────────────────────────────────────────────


class Teller:
    """Tells the progress: one refreshed line on a terminal, plain lines elsewhere.

    Parameters
    ----------
    stream : text stream
    """

    def __init__(self, stream: TextIO) -> None:
        self.stream = stream
        self.terminal = stream.isatty() and os.environ.get("TERM") != "dumb"
        self._last = 0.0

    def __call__(self, stage: str, fraction: float, words: str) -> None:
        """Tell that a stage has come so far."""
        now = time.monotonic()
        if not self.terminal:
            if fraction == 0.0:
                self._put(f"{stage} ...\n")
            elif fraction >= 1.0:
                self._put(f"{stage}: {words}\n")
            elif now - self._last < PLAIN_LINE_S:
                return
            else:
                self._put(f"{stage} {fraction:.0%} {words}\n")
            self._last = now
            return
        if 0.0 < fraction < 1.0 and now - self._last < 0.1:
            return
        self._last = now
        line = f"{stage}: {words}" if fraction >= 1.0 else f"{stage} {fraction:4.0%} {words}"
        width = shutil.get_terminal_size().columns - 1
        self._put("\r\x1b[K" + " ".join(line.split())[:width])

    def end(self) -> None:
        """Clear the refreshed line."""
        if self.terminal:
            self._put("\r\x1b[K")

    def _put(self, text: str) -> None:
        try:
            self.stream.write(text)
            self.stream.flush()
        except (OSError, ValueError):
            self.terminal = False


def _silent(_stage: str, _fraction: float, _words: str) -> None:
    """Tell nobody."""


# ── commands ─────────────────────────────────────────────────────────────────────────────

FLAGS = (
    "t1 eeg out subject names also capsule_mm holder_mm side_marker layout landmarks electrodes"
    " event epoch window method source_space surfaces conductivity permutations seed"
).split()


def _options(arguments: argparse.Namespace, session: str | None = None) -> SessionOptions:
    flags = {key: getattr(arguments, key, None) for key in FLAGS}
    return gather_options(flags, None if session is None else Path(session))


def find(arguments: argparse.Namespace, told: Callable[[str, float, str], None]) -> int:
    """Carry out ``locator find``."""
    from locator.session.run import run_find

    options = _options(arguments)
    outcome = run_find(options, told=told)
    electrodes = outcome.results.electrodes
    assert electrodes is not None
    counts = [(s, electrodes.status.count(s)) for s in ("seen", "inferred", "corrected")]
    said = ", ".join(f"{count} {status}" for status, count in counts if count)
    print(f"{len(electrodes.names)} electrodes: {said}.")
    return _close(outcome, arguments, outcome.out / "electrodes.tsv")


def head(arguments: argparse.Namespace, told: Callable[[str, float, str], None]) -> int:
    """Carry out ``locator head``."""
    from locator.session.run import run_head

    outcome = run_head(_options(arguments), told=told)
    return _close(outcome, arguments, outcome.out / "head")


def run(arguments: argparse.Namespace, told: Callable[[str, float, str], None]) -> int:
    """Carry out ``locator run``."""
    if arguments.again is not None:
        return _run_again(arguments, told)
    from locator.session.run import run_all

    outcome = run_all(_options(arguments, arguments.session), told=told)
    return _say_run(outcome, arguments)


def _run_again(arguments: argparse.Namespace, told: Callable[[str, float, str], None]) -> int:
    from locator.session.again import prepare_again
    from locator.session.run import run_all

    others = [k for k in FLAGS if k != "out" and getattr(arguments, k, None) is not None]
    if arguments.session is not None or others:
        msg = (
            "--again takes all settings from the file"
            f" (given too: {', '.join(others) or arguments.session}). Leave them out."
        )
        raise CommandLineError(msg)
    if arguments.out is None:
        raise CommandLineError("--again needs --out DIR, a new folder.")
    options = prepare_again(Path(arguments.again), Path(arguments.out))
    return _say_run(run_all(options, told=told), arguments)


def _say_run(outcome: Outcome, arguments: argparse.Namespace) -> int:
    from locator.session.run import headline

    print(headline(outcome.results))
    return _close(outcome, arguments, outcome.out / "report.html")


def demo(arguments: argparse.Namespace, told: Callable[[str, float, str], None]) -> int:
    """Carry out ``locator demo``."""
    from locator.session.demo import run_demo

    out = Path(arguments.out or "locator-demo")
    outcome = run_demo(out, permutations=arguments.permutations, told=told)
    print("An invented session: no person's data.")
    return _say_run(outcome, arguments)


def begin(arguments: argparse.Namespace, told: Callable[[str, float, str], None]) -> int:
    """Carry out ``locator begin``."""
    from locator.session.begin import write_session_file

    eeg = None if arguments.eeg is None else Path(arguments.eeg)
    target = Path(arguments.out)
    told("looking at the files", 0.0, "")
    said = write_session_file(Path(arguments.t1), eeg, target)
    told("looking at the files", 1.0, "done")
    for line in said:
        print(line)
    print(f"Session file: {target}\nNext: read it, then: locator run {target}")
    return 0


def inspect(arguments: argparse.Namespace, told: Callable[[str, float, str], None]) -> int:
    """Carry out ``locator inspect --picture``."""
    if arguments.picture is None:
        msg = (
            "The live window is not part of this version. Give --picture FILE.png to get its"
            " scene as a picture."
        )
        raise CommandLineError(msg)
    target = Path(arguments.picture)
    if target.suffix.lower() != ".png":
        msg_0 = f"--picture {target}: the name must end in .png."
        raise CommandLineError(msg_0)
    from locator.io.files import write_bytes
    from locator.session.records import load_results
    from locator.window.scene import picture

    told("picture", 0.0, "")
    write_bytes(target, picture(load_results(Path(arguments.dir))))
    told("picture", 1.0, "done")
    print(f"Picture: {target}")
    return 0


def _close(outcome: Outcome, arguments: argparse.Namespace, result: Path) -> int:
    """Print what needs an eye and where the result is; give the exit code."""
    look = [f for f in outcome.results.findings if f.level == "look"]
    if look:
        print(f"\n{len(look)} thing{'s' if len(look) > 1 else ''} to look at:")
        for finding in look[:MOST_LISTED]:
            print(f"  - {finding.problem} {finding.suggestion}".rstrip())
        if len(look) > MOST_LISTED:
            print(f"  - and {len(look) - MOST_LISTED} more")
        print()
    print(f"Result: {result}")
    return NEEDS_AN_EYE if look and arguments.strict else 0


# ── main ─────────────────────────────────────────────────────────────────────────────────


def _on_terminate(_number: int, _frame: FrameType | None) -> None:
    """Let a polite request to end take the same way out as an interrupt."""
    raise KeyboardInterrupt


def _set_up_logging(verbose: bool) -> None:
    logging.basicConfig(
        stream=sys.stderr,
        level=logging.INFO if verbose else logging.WARNING,
        format="%(levelname)s %(name)s: %(message)s",
    )
    logging.captureWarnings(True)
    logging.getLogger("py.warnings").setLevel(logging.WARNING if verbose else logging.ERROR)
    os.environ.setdefault("MNE_LOGGING_LEVEL", "ERROR")


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command.

    Parameters
    ----------
    argv : sequence of str, optional
        Arguments without the program's name; default: those of the process.

    Returns
    -------
    int
        Exit code.
    """
    try:
        arguments = make_parser().parse_args(argv)
    except SystemExit as asked:
        return int(asked.code or 0)
    _set_up_logging(arguments.verbose)
    teller = Teller(sys.stderr)
    told = _silent if arguments.quiet else teller
    before = None
    try:
        before = signal.signal(signal.SIGTERM, _on_terminate)
    except ValueError:  # not the main thread
        pass
    try:
        code = int(arguments.work(arguments, told))
        sys.stdout.flush()
        return code
    except LocatorError as error:
        teller.end()
        print(f"locator: {error}", file=sys.stderr)
        return error.exit_code
    except KeyboardInterrupt:
        teller.end()
        print("locator: stopped; start it again to go on.", file=sys.stderr)
        return STOPPED
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except Exception as error:
        teller.end()
        print(f"locator: {_our_fault(error, arguments)}", file=sys.stderr)
        return OUR_FAULT
    finally:
        teller.end()
        if before is not None:
            signal.signal(signal.SIGTERM, before)


def _our_fault(error: Exception, arguments: argparse.Namespace) -> str:
    """Write the details of an unforeseen error down and say where."""
    words = " ".join(str(error).split())[:200]
    text = (
        f"locator {__version__}, python {sys.version.split()[0]}: {type(error).__name__}: {words}"
    )
    if isinstance(error, MemoryError):
        text = "there was not enough memory (a whole run on a 256^3 T1 takes about 3 GB)"
    details = "".join(traceback.format_exception(error))
    target = _log_folder(arguments) / LOG_NAME
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        target.write_text(details, encoding="utf-8")
    except OSError:
        return f"a fault of ours ({text}). The details:\n{details}"
    return f"a fault of ours ({text}). The details are in {target}; please send them to us."


def _log_folder(arguments: argparse.Namespace) -> Path:
    """Return the folder that this command may write in."""
    out = getattr(arguments, "out", None)
    if out is not None:
        folder = Path(out)
        return folder.parent if arguments.command == "begin" else folder
    if arguments.command == "demo":
        return Path("locator-demo")
    if arguments.command == "inspect":
        return Path(arguments.picture or ".").parent
    t1 = getattr(arguments, "t1", None)
    session = getattr(arguments, "session", None)
    beside = Path(t1 or session or ".").parent
    return beside / "locator-out"

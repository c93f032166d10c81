"""Make an invented EEG-MRI session: ``python -m synthetic_heads --out DIR --seed 0``."""

from __future__ import annotations

import argparse
import sys
import time
from pathlib import Path

from synthetic_heads.session import SessionSettings, make_session, write_session
from synthetic_heads.tape import CAPS


def _names(text: str) -> tuple[str, ...]:
    """A number of electrodes, or names with commas."""
    if text.isdigit():
        if int(text) not in CAPS:
            msg = f"no cap with {text} names; there are {', '.join(str(n) for n in CAPS)}"
            raise argparse.ArgumentTypeError(msg)
        return CAPS[int(text)]
    return tuple(part.strip() for part in text.split(",") if part.strip())


def _three(text: str) -> tuple[float, float, float]:
    parts = [float(part) for part in text.split(",")]
    if len(parts) == 1:
        parts *= 3
    if len(parts) != 3:
        msg = f"one or three numbers with commas, not {text!r}"
        raise argparse.ArgumentTypeError(msg)
    return parts[0], parts[1], parts[2]


def _pair(text: str) -> tuple[float, float]:
    parts = [float(part) for part in text.split(",")]
    if len(parts) == 1:
        parts *= 2
    if len(parts) != 2:
        msg = f"one or two numbers with a comma, not {text!r}"
        raise argparse.ArgumentTypeError(msg)
    return parts[0], parts[1]


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="python -m synthetic_heads",
        description="Make an invented EEG-MRI session with known answers (truth.json).",
        formatter_class=argparse.ArgumentDefaultsHelpFormatter,
    )
    add = parser.add_argument
    add("--out", type=Path, required=True, help="folder to write to")
    add("--seed", type=int, default=0, help="same seed, same bytes")
    add("--kind", choices=("shaped", "sphere"), default="shaped")
    add("--names", type=_names, default="61", help=f"{', '.join(map(str, CAPS))}, or names")
    add("--also", type=_names, default="", help="places with a capsule and no channel, e.g. FCz")
    add("--no-recording", action="store_true", help="head, cap and scan only")
    add("--surfaces", action="store_true", help="also write tissue labels and true surfaces")
    cap = parser.add_argument_group("cap")
    add = cap.add_argument
    add("--slide-mm", type=float, default=3.0, help="SD of the cap's slide in two directions")
    add("--turn-deg", type=float, default=2.0, help="SD of the cap's turn about three axes")
    add("--stretch", type=float, default=0.0, help="SD of the cap's stretch, two directions")
    add("--jitter-mm", type=float, default=2.0, help="SD per tangential axis, each electrode")
    add("--off", type=int, default=1, dest="n_off", help="capsules that came off")
    add("--extra", type=int, default=2, dest="n_extra", help="blobs that are no electrode")
    add("--extra-where", choices=("anywhere", "inside", "outside"), default="anywhere")
    add("--side-marker", choices=("right", "left"), help="an extra capsule worn on that side")
    add("--capsule-mm", type=_pair, default=(8.0, 6.0), help="diameter 4 to 12, height 3 to 12")
    add("--gap-mm", type=float, default=2.0, help="skin to underside of the capsule")
    add("--capsule-shape", choices=("ellipsoid", "disc"), default="ellipsoid", dest="shape")
    scan = parser.add_argument_group("scan")
    add = scan.add_argument
    add("--voxel-mm", type=_three, default=(1.0, 1.0, 1.0), help="one or three sizes")
    add("--axes", default="LIA", help="directions of the stored axes")
    add("--oblique-deg", type=_three, default=(0.0, 0.0, 0.0), help="turn about x, y, z")
    add("--bias", type=float, default=0.15, help="receive field, relative")
    add("--noise", type=float, default=0.03, help="Rician, fraction of white matter")
    add("--brightness", type=float, default=1.1, help="capsule over scalp fat")
    add("--bandwidth", type=float, default=240.0, help="Hz per voxel; 0: no chemical shift")
    add("--read-axis", type=int, choices=(0, 1, 2), default=1, help="stored axis of the shift")
    eeg = parser.add_argument_group("recording")
    add = eeg.add_argument
    add("--dipoles", type=int, default=1, help="sources that follow the events")
    add("--amplitude-nam", type=float, default=40.0)
    add("--orientation", choices=("tangential", "radial", "cortex"), default="tangential")
    add("--trials", type=int, default=120)
    add("--background-uv", type=float, default=8.0, help="brain background, RMS")
    return parser


def main(arguments: list[str] | None = None) -> int:
    """Make and write a session; 0 when done, 2 when the settings describe none."""
    parser = _parser()
    given = parser.parse_args(arguments)
    started = time.monotonic()

    def say(text: str) -> None:
        print(f"[{time.monotonic() - started:5.1f} s] {text}", flush=True)

    cap_keys = (
        "slide_mm turn_deg stretch jitter_mm n_off n_extra extra_where side_marker capsule_mm "
        "gap_mm shape"
    )
    scan_keys = "voxel_mm axes oblique_deg bias noise brightness read_axis"
    settings = SessionSettings(
        seed=given.seed,
        kind=given.kind,
        names=given.names,
        also=given.also,
        cap={key: getattr(given, key) for key in cap_keys.split()},
        scan={key: getattr(given, key) for key in scan_keys.split()},
        bandwidth_hz_per_voxel=given.bandwidth or None,
        n_dipoles=given.dipoles,
        amplitude_nam=given.amplitude_nam,
        orientation=given.orientation,
        recording={"n_trials": given.trials, "background_uv": given.background_uv},
    )
    try:
        session = make_session(settings, progress=say)
    except ValueError as error:
        parser.exit(2, f"python -m synthetic_heads: {error}\n")
    write_session(
        given.out,
        session,
        recording=not given.no_recording,
        surfaces=given.surfaces,
        progress=say,
    )
    return 0


if __name__ == "__main__":
    sys.exit(main())

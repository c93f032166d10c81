"""Skin and markers by condition: found, false, centre error, covariance, time.

Run ``python tests/benchmarks/markers.py`` (``--seeds N``, ``--heads s1 ch2``, ``--invented N``).
All capsules are painted ones, on real scalps or on invented heads.
"""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linear_sum_assignment
from scipy.stats import chi2

if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from locator.errors import LocatorError
from locator.markers import find_markers
from locator.skin import find_skin, height_mm
from locator.volume import check_volume
from tests.painted import CLEAN, HARD, NAMES_19, NAMES_61, NAMES_128, painted_head

Array = NDArray[np.float64]

SMALL = {**CLEAN, "capsule_mm": (5.0, 4.0), "gap_mm": 0.5}

REAL: dict[str, tuple[tuple[str, ...], dict[str, Any]]] = {
    "clean": (NAMES_61, CLEAN),
    "hard": (NAMES_61, {**HARD, "gap_mm": 1.0}),
    "small": (NAMES_61, SMALL),
    "128 names": (NAMES_128, {**CLEAN, "n_off": 8, "n_extra": 8, "capsule_mm": (6.0, 5.0)}),
    "19 names": (NAMES_19, {**CLEAN, "n_off": 3, "n_extra": 10}),
    "disc 9 x 5": (NAMES_61, {**CLEAN, "shape": "disc", "capsule_mm": (9.0, 5.0)}),
    "12 mm, 8 mm off": (NAMES_61, {**CLEAN, "capsule_mm": (12.0, 10.0), "gap_mm": 8.0}),
    "oil shifted 2.2 mm": (NAMES_61, {**CLEAN, "shift_mm": (0.0, 2.2, 0.0)}),
}

INVENTED: dict[str, tuple[dict[str, Any], dict[str, Any]]] = {
    "clean": (CLEAN, {}),
    "hard": (
        {"n_off": 6, "n_extra": 8, "jitter_mm": 4.0, "turn_deg": 5.7, "gap_mm": 1.0},
        {"noise": 0.06, "brightness": 0.7},
    ),
    "small": (SMALL, {}),
    "oblique, stored P-I-L": (CLEAN, {"axes": "PIL", "oblique_deg": (12.0, 0.0, 0.0)}),
    "1 x 1 x 2.5 mm": (CLEAN, {"voxel_mm": (1.0, 1.0, 2.5)}),
    "2 mm": (CLEAN, {"voxel_mm": (2.0, 2.0, 2.0)}),
    "all fat shifted 2.2": (CLEAN, {"chemical_shift_voxels": 2.2, "read_axis": 1}),
    "all fat shifted -3": (CLEAN, {"chemical_shift_voxels": -3.0, "read_axis": 0}),
    "bias 40 %": (CLEAN, {"bias": 0.4}),
}


@dataclass
class Row:
    """Sums over the volumes of one condition."""

    worn: int = 0
    found: int = 0
    false: int = 0
    candidates: int = 0
    refused: int = 0
    errors: list[float] = field(default_factory=list)
    squares: list[float] = field(default_factory=list)
    skin: list[float] = field(default_factory=list)
    seconds: list[float] = field(default_factory=list)


def measure(row: Row, intensity: Any, affine: Array, worn: Array, contacts: Array) -> None:
    """Find the markers of one volume and add them up."""
    volume = check_volume(intensity, affine)
    start = time.process_time()
    try:
        skin = find_skin(volume)
        markers = find_markers(volume, skin)
    except LocatorError:
        row.refused += 1
        return
    row.seconds.append(time.process_time() - start)
    away = np.linalg.norm(markers.centers_scanner_mm[:, None] - worn[None], axis=2)
    rows, columns = linear_sum_assignment(np.minimum(away, 6.0))
    near = away[rows, columns] < 5.0
    rows, columns = rows[near], columns[near]
    likely = markers.score > 0.5
    row.worn += len(worn)
    row.found += int(likely[rows].sum())
    true = np.zeros(len(likely), bool)
    true[rows] = True
    row.false += int((likely & ~true).sum())
    row.candidates += len(likely)
    offset = markers.centers_scanner_mm[rows] - worn[columns]
    row.errors += list(np.linalg.norm(offset, axis=1))
    inverse = np.linalg.inv(markers.covariance_mm2[rows])
    row.squares += list(np.einsum("ni,nij,nj->n", offset, inverse, offset))
    row.skin += list(height_mm(skin, contacts))


def on_real(heads: list[str], seeds: int) -> Iterator[tuple[str, Row]]:
    """Capsules painted on real heads."""
    for name, (names, settings) in REAL.items():
        for head in heads:
            row = Row()
            for seed in range(seeds):
                image, affine, truth = painted_head(head, names, 1000 + seed, **settings)
                measure(row, image, affine, truth["cap"].worn.centers_mm, truth["contacts_mm"])
            yield f"{name} ({head})", row


def on_invented(count: int) -> Iterator[tuple[str, Row]]:
    """Capsules on invented heads, with all fat of the scan."""
    from synthetic_heads.cap import make_cap
    from synthetic_heads.heads import make_head
    from synthetic_heads.scan import make_scan

    heads = [make_head(2000 + seed) for seed in range(count)]
    for name, (cap_settings, scan_settings) in INVENTED.items():
        row = Row()
        for head in heads:
            vertices, faces = head.surfaces["scalp"]
            cap = make_cap(vertices, faces, head.landmarks_mm, NAMES_61, head.seed, **cap_settings)
            image, affine = make_scan(head, cap, seed=head.seed, **scan_settings)
            measure(row, image, affine, cap.worn.centers_mm, cap.contacts_mm)
        yield f"{name} (invented)", row


def line(name: str, row: Row) -> str:
    """One line of the table."""
    if not row.errors:
        return f"| {name} | refused {row.refused} | | | | | | | |"
    errors, skin = np.array(row.errors), np.array(row.skin)
    inside = np.mean(np.array(row.squares) < chi2.ppf(0.95, 3))
    return (
        f"| {name} | {row.found} / {row.worn} | {row.false} | {row.candidates} |"
        f" {errors.mean():.3f} | {np.percentile(errors, 95):.3f} | {100 * inside:.0f} % |"
        f" {skin.mean():+.2f} +/- {skin.std():.2f} | {np.mean(row.seconds):.1f} |"
    )


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--seeds", type=int, default=2)
    parser.add_argument("--heads", nargs="*", default=["s1", "ch2"])
    parser.add_argument("--invented", type=int, default=3)
    chosen = parser.parse_args()
    print("Painted capsules. Found: with score > 0.5; skin: height of the true contacts, mm.\n")
    print(
        "| condition | found | false, score > 0.5 | candidates | centre error, mean mm | 95 % |"
        " in the 95 % ellipsoid | skin | CPU s |"
    )
    print("|---|---|---|---|---|---|---|---|---|")
    if chosen.heads:
        for name, row in on_real(chosen.heads, chosen.seeds):
            print(line(name, row), flush=True)
    if chosen.invented:
        for name, row in on_invented(chosen.invented):
            print(line(name, row), flush=True)


if __name__ == "__main__":
    main()

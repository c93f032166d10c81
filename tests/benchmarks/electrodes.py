"""Electrodes by condition: found, labelled, and how sure. All figures rest on painted capsules.

    python -m tests.benchmarks.electrodes                      # real heads, three seeds each
    python -m tests.benchmarks.electrodes --heads synthetic --seeds 20
    python -m tests.benchmarks.electrodes --heads points --seeds 100   # labels alone, no image
    python -m tests.benchmarks.electrodes --refusals           # scans that must be refused
    python -m tests.benchmarks.electrodes --quick              # a few minutes, for every change

A label is right when the electrode stands within 4 mm of the true contact point of its name (6 mm
at 2 mm voxels). The ceiling is an observer of the same blobs who knows the true template (the cap
as it was worn, before each electrode was displaced), the size of the displacements, and how many
capsules are off and how many blobs are extra, and assigns optimally.
"""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from multiprocessing import Pool
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from scipy.optimize import linear_sum_assignment
from scipy.spatial.transform import Rotation

from locator.errors import LocatorError
from locator.labels import Electrodes, label_markers
from locator.layout import Layout, standard_layout
from locator.markers import Markers, find_markers
from locator.skin import find_skin
from locator.volume import check_volume
from synthetic_heads.cap import Cap, make_cap
from synthetic_heads.heads import make_head
from synthetic_heads.scan import make_scan
from synthetic_heads.tape import CAPS
from tests.painted import painted_head
from tests.point_caps import make_point_cap, make_point_head

Array = NDArray[np.float64]
Case = tuple[NDArray[np.float32], Array, Cap, Array]


@dataclass(frozen=True, kw_only=True)
class Condition:
    """One row of the table: the cap, the paint, the grid, and what is asked of it."""

    title: str
    count: int
    cap: dict[str, Any]
    brightness: float = 1.05
    noise: float = 0.0
    shift_voxels: float = 0.0
    tilt_deg: float = 0.0
    axes: str = "RAS"
    voxel_mm: tuple[float, float, float] = (1.0, 1.0, 1.0)
    right_mm: float = 4.0
    asked: tuple[float, float, float] = (98.5, 0.2, 0.35)


CONDITIONS = {
    "clean": Condition(
        title="clean",
        count=61,
        cap={"n_off": 2, "n_extra": 3, "jitter_mm": 2.5, "turn_deg": 2.5},
        asked=(99.8, 0.1, 0.25),
    ),
    "hard": Condition(
        title="hard",
        count=61,
        cap={"n_off": 6, "n_extra": 8, "jitter_mm": 4.0, "turn_deg": 5.7, "gap_mm": 1.0},
        brightness=0.7,
        noise=0.03,
    ),
    "sparse": Condition(
        title="sparse and tilted",
        count=31,
        cap={"n_off": 4, "n_extra": 6, "jitter_mm": 3.0, "turn_deg": 4.0},
        tilt_deg=12.0,
        axes="PIL",
    ),
    "small": Condition(
        title="small capsules",
        count=61,
        cap={"n_off": 2, "n_extra": 3, "jitter_mm": 2.5, "turn_deg": 2.5}
        | {"capsule_mm": (5.0, 3.6), "gap_mm": 0.5},
        asked=(98.0, 0.2, 0.4),
    ),
    "128": Condition(
        title="128 names",
        count=128,
        cap={"n_off": 8, "n_extra": 8, "jitter_mm": 2.5, "turn_deg": 2.5},
        asked=(97.0, 0.3, 0.35),
    ),
    "19": Condition(
        title="19 names",
        count=19,
        cap={"n_off": 3, "n_extra": 10, "jitter_mm": 3.0, "turn_deg": 4.0},
        asked=(99.0, 0.2, 0.35),
    ),
    "thick": Condition(
        title="1 x 1 x 2.5 mm",
        count=61,
        cap={"n_off": 2, "n_extra": 3, "jitter_mm": 2.5, "turn_deg": 2.5},
        voxel_mm=(1.0, 1.0, 2.5),
        asked=(97.0, 0.3, 0.7),
    ),
    "2mm": Condition(
        title="2 mm voxels",
        count=61,
        cap={"n_off": 2, "n_extra": 3, "jitter_mm": 2.5, "turn_deg": 2.5},
        voxel_mm=(2.0, 2.0, 2.0),
        right_mm=6.0,
        asked=(97.0, 0.3, 0.7),
    ),
    "shift": Condition(
        title="chemical shift 2.2 voxels, not told",
        count=61,
        cap={"n_off": 2, "n_extra": 3, "jitter_mm": 2.5, "turn_deg": 2.5},
        shift_voxels=2.2,
        asked=(98.5, 0.2, 0.5),
    ),
    "far": Condition(
        title="cap far off (15 deg, 15 mm, 6 %)",
        count=61,
        cap={"n_off": 4, "n_extra": 6, "jitter_mm": 3.0, "turn_deg": 8.7}
        | {"exact": True, "slide_mm": 15.0, "stretch": 0.06},
    ),
    "hopeless": Condition(
        title="hopeless (for calibration)",
        count=61,
        cap={"n_off": 12, "n_extra": 20, "jitter_mm": 8.0, "turn_deg": 8.0, "slide_mm": 8.0},
        asked=(0.0, 100.0, 9.0),
    ),
}


@dataclass
class Tally:
    """Counts over the caps of one condition."""

    present: int = 0
    right: int = 0
    wrong: int = 0
    wrong_sure: int = 0
    right_sure: int = 0
    off: int = 0
    off_inferred: int = 0
    ceiling: int = 0
    caps: int = 0
    refused: int = 0
    seconds: float = 0.0
    center_mm: list[float] = field(default_factory=list)
    in_ellipsoid: list[bool] = field(default_factory=list)
    inferred_ratio: list[float] = field(default_factory=list)
    labels: list[tuple[int, float, bool]] = field(default_factory=list)

    def add(
        self,
        electrodes: Electrodes,
        markers: Markers,
        cap: Cap,
        template: Array,
        condition: Condition,
    ) -> None:
        """Count one cap."""
        limit_mm = condition.right_mm
        seen = electrodes.marker >= 0
        gap = np.linalg.norm(electrodes.positions_scanner_mm - cap.contacts_mm, axis=1)
        right = seen & (gap < limit_mm) & cap.present
        wrong = seen & ~right
        sure = electrodes.confidence >= 0.9
        self.present += int(cap.present.sum())
        self.right += int(right.sum())
        self.wrong += int(wrong.sum())
        self.wrong_sure += int((wrong & sure).sum())
        self.right_sure += int((right & sure).sum())
        self.off += int((~cap.present).sum())
        self.off_inferred += int((~cap.present & ~seen).sum())
        error = electrodes.capsule_scanner_mm - cap.capsules.centers_mm
        self.center_mm.extend(np.linalg.norm(error, axis=1)[right].tolist())
        for index in np.flatnonzero(right):
            spread = markers.covariance_mm2[electrodes.marker[index]]
            # 95 % quantile of chi squared with three degrees of freedom.
            distance = error[index] @ np.linalg.solve(spread, error[index])
            self.in_ellipsoid.append(bool(distance < 7.815))
        inferred = ~seen & ~cap.present
        self.inferred_ratio.extend(
            (gap[inferred] / (np.sqrt(3) * electrodes.sd_mm[inferred])).tolist()
        )
        self.labels.extend(
            (self.caps, float(electrodes.confidence[k]), bool(right[k]))
            for k in np.flatnonzero(seen)
        )
        self.ceiling += ceiling(markers, cap, template, condition)
        self.caps += 1


def worn_template(
    vertices: Array, faces: Array, landmarks: Mapping[str, Array], condition: Condition, seed: int
) -> Array:
    """Places of the cap as it was worn, before each electrode was displaced along the skin.

    The same seed draws the same slide, turn and stretch; only the displacements are left out.
    """
    still = make_cap(
        vertices,
        faces,
        landmarks,
        CAPS[condition.count],
        seed,
        **(condition.cap | {"jitter_mm": 0.0, "n_off": 0, "n_extra": 0}),
    )
    return still.contacts_mm


def ceiling(markers: Markers, cap: Cap, template: Array, condition: Condition) -> int:
    """Right labels of the observer who knows template, jitter and counts."""
    jitter_mm, n_extra = float(condition.cap["jitter_mm"]), int(condition.cap["n_extra"])
    points = markers.centers_scanner_mm[markers.score >= 0.3]
    # Down to the skin along the normal of the nearest true contact or extra: the observer knows
    # the size of the capsules and how high they stand.
    feet = np.concatenate([cap.contacts_mm, cap.extras.centers_mm])
    tops = np.concatenate([cap.capsules.centers_mm, cap.extras.centers_mm])
    drop = tops - feet
    nearest = np.linalg.norm(points[:, None] - tops[None], axis=2).argmin(axis=1)
    points = points - drop[nearest]
    n_names = len(template)
    area = 60000.0
    absent = max(float((~cap.present).sum()), 0.5) / n_names
    gap2 = ((points[None] - template[:, None]) ** 2).sum(axis=2)
    weight = (
        -0.5 * gap2 / jitter_mm**2
        - np.log(2 * np.pi * jitter_mm**2)
        + np.log((1 - absent) / absent)
        - np.log(max(n_extra, 0.5) / area)
    )
    table = np.concatenate([weight, np.full((n_names, n_names), -1e6)], axis=1)
    table[np.arange(n_names), len(points) + np.arange(n_names)] = 0.0
    rows, columns = linear_sum_assignment(table, maximize=True)
    right = 0
    for row, column in zip(rows, columns, strict=True):
        if column < len(points) and cap.present[row]:
            right += int(np.linalg.norm(points[column] - cap.contacts_mm[row]) < condition.right_mm)
    return right


def regrid(
    image: NDArray[np.float32], affine: Array, condition: Condition
) -> tuple[NDArray[np.float32], Array]:
    """The volume on another grid: larger voxels (averaged), tilted, stored in another order."""
    voxel = np.array(condition.voxel_mm)
    if np.allclose(voxel, 1.0) and condition.tilt_deg == 0 and condition.axes == "RAS":
        return image, affine
    order = {"R": (0, 1), "L": (0, -1), "A": (1, 1), "P": (1, -1), "S": (2, 1), "I": (2, -1)}
    axes = np.zeros((3, 3))
    for column, letter in enumerate(condition.axes):
        axis, sign = order[letter]
        axes[axis, column] = sign
    tilt = Rotation.from_rotvec(np.radians(condition.tilt_deg) * np.array([1, 1, 1]) / np.sqrt(3))
    ways = tilt.as_matrix() @ axes
    along = np.array([np.argmax(np.abs(axes[:, column])) for column in range(3)])
    step = voxel[along]
    corners = np.array([[a, b, c] for a in (0, 1) for b in (0, 1) for c in (0, 1)]) * (
        np.array(image.shape) - 1
    )
    world = corners @ affine[:3, :3].T + affine[:3, 3]
    local = world @ ways
    low, high = local.min(axis=0), local.max(axis=0)
    counts = np.ceil((high - low) / step).astype(int) + 1
    target = np.eye(4)
    target[:3, :3] = ways * step
    target[:3, 3] = ways @ low
    # Averaging over the larger voxel, in the source grid.
    source = np.abs(np.linalg.inv(affine[:3, :3]) @ ways) @ step
    blur = np.where(source > 1.3, source / np.sqrt(12.0), 0.0)
    smooth = ndimage.gaussian_filter(image, blur) if blur.any() else image
    back = np.linalg.inv(affine) @ target
    out = ndimage.affine_transform(
        smooth, back[:3, :3], back[:3, 3], output_shape=tuple(counts), order=3, mode="constant"
    )
    return np.maximum(out, 0).astype(np.float32), target


@dataclass(frozen=True, kw_only=True)
class Task:
    """One cap on one head under one condition; what a worker process takes."""

    condition: str
    head: str  # "s1", "ch2", "low2mm", "synthetic" or "points"
    seed: int


def real_case(condition: Condition, which: str, seed: int) -> Case:
    """Capsules painted on a real head."""
    image, affine, truth = painted_head(
        which,
        CAPS[condition.count],
        seed,
        brightness=condition.brightness,
        extra_noise=condition.noise,
        shift_mm=(0.0, condition.shift_voxels, 0.0),
        **condition.cap,
    )
    if which != "low2mm":
        image, affine = regrid(image, affine, condition)
    template = worn_template(
        truth["vertices_mm"], truth["faces"], truth["landmarks_mm"], condition, seed
    )
    return image, affine, truth["cap"], template


def synthetic_case(condition: Condition, seed: int) -> Case:
    """An invented head, one for each seed."""
    head = make_head(1000 + seed)
    vertices, faces = head.surfaces["scalp"]
    cap = make_cap(vertices, faces, head.landmarks_mm, CAPS[condition.count], seed, **condition.cap)
    image, affine = make_scan(
        head,
        cap,
        seed=seed,
        voxel_mm=condition.voxel_mm,
        axes=condition.axes,
        oblique_deg=(condition.tilt_deg / np.sqrt(3),) * 3,
        noise=0.03 + condition.noise,
        chemical_shift_voxels=condition.shift_voxels,
        read_axis=1,
        brightness=condition.brightness,
    )
    template = worn_template(vertices, faces, head.landmarks_mm, condition, seed)
    return image, affine, cap, template


def run_task(task: Task) -> Tally:
    """Skin, capsules and labels of one cap (labels alone where there is no image)."""
    tally = Tally()
    condition = CONDITIONS[task.condition]
    names = CAPS[condition.count]
    try:
        if task.head == "points":
            head = make_point_head(5000 + task.seed)
            drawn = make_point_cap(head, names, task.seed, **condition.cap)
            begin = time.process_time()
            markers, cap = drawn.markers, drawn.cap
            electrodes = label_markers(markers, head.skin, standard_layout(names))
            template = worn_template(
                head.vertices_mm, head.faces, head.landmarks_mm, condition, task.seed
            )
        else:
            image, affine, cap, template = (
                synthetic_case(condition, task.seed)
                if task.head == "synthetic"
                else real_case(condition, task.head, task.seed)
            )
            begin = time.process_time()
            volume = check_volume(image, affine)
            skin = find_skin(volume)
            markers = find_markers(volume, skin)
            electrodes = label_markers(markers, skin, standard_layout(names))
    except LocatorError as error:
        tally.refused = 1
        print(f"    {task.condition}, {task.head} {task.seed}: refused: {error}", flush=True)
        return tally
    tally.seconds = time.process_time() - begin
    tally.add(electrodes, markers, cap, template, condition)
    return tally


def gather(tallies: Iterable[Tally]) -> Tally:
    """All caps of one row together."""
    whole = Tally()
    for one in tallies:
        whole.labels.extend((whole.caps, confidence, right) for _, confidence, right in one.labels)
        for name in COUNTED:
            setattr(whole, name, getattr(whole, name) + getattr(one, name))
        for name in LISTED:
            getattr(whole, name).extend(getattr(one, name))
    return whole


COUNTED = (
    "present",
    "right",
    "wrong",
    "wrong_sure",
    "right_sure",
    "off",
    "off_inferred",
    "ceiling",
    "caps",
    "refused",
    "seconds",
)
LISTED = ("center_mm", "in_ellipsoid", "inferred_ratio")


def refusals(heads: tuple[str, ...], seeds: range) -> list[str]:
    """Scans that must be refused: bare heads, and capsules without a head."""
    lines = []
    layout = standard_layout(CAPS[61])
    for which in (*heads, *(["synthetic"] * len(seeds) if not heads else [])):
        seed = seeds.start + len(lines)
        bare = Condition(title="bare", count=61, cap={"n_off": 61})
        case = synthetic_case if which == "synthetic" else None
        image, affine, *_ = case(bare, seed) if case is not None else real_case(bare, which, seed)
        lines.append(f"no capsules, {which} {seed}: {_refused(image, affine, layout)}")
    rng = np.random.default_rng(seeds.start)
    grid = np.stack(np.meshgrid(*(np.arange(160.0),) * 3, indexing="ij"), axis=-1)
    alone = np.abs(rng.normal(0, 4, grid.shape[:3])).astype(np.float32)
    way = rng.normal(size=(61, 3))
    way[:, 2] = np.abs(way[:, 2])
    for center in 80 + 75 * way / np.linalg.norm(way, axis=1, keepdims=True):
        low = np.floor(center).astype(int) - 6
        part = tuple(slice(max(start, 0), start + 13) for start in low)
        away = ((grid[part] - center) ** 2).sum(axis=-1)
        alone[part] += (200 * np.clip(4.5 - np.sqrt(away), 0, 1)).astype(np.float32)
    lines.append(f"capsules without a head: {_refused(alone, np.eye(4), layout)}")
    return lines


def _refused(image: NDArray[np.float32], affine: Array, layout: Layout) -> str:
    """The reason in the tool's own words, or that it went through."""
    try:
        volume = check_volume(image, affine)
        skin = find_skin(volume)
        label_markers(find_markers(volume, skin), skin, layout)
    except LocatorError as error:
        return f"refused: {error}"
    return "WENT THROUGH"


HEADER = (
    f"{'condition':36s} {'caps':>4s} {'right %':>8s} {'(asked)':>8s} {'ceiling':>8s}"
    f" {'wrong>=.9 %':>11s} {'(asked)':>8s} {'right>=.9 %':>11s} {'off inferred':>13s}"
    f" {'centre mm':>9s} {'in 95 %':>8s} {'cpu s':>6s}"
)


def row(condition: Condition, tally: Tally) -> str:
    """One line of the table."""
    present = max(tally.present, 1)
    center = np.mean(tally.center_mm) if tally.center_mm else np.nan
    inside = 100 * np.mean(tally.in_ellipsoid) if tally.in_ellipsoid else np.nan
    asked = condition.asked
    refused = f"  refused {tally.refused}" if tally.refused else ""
    return (
        f"{condition.title:36s} {tally.caps:4d} {100 * tally.right / present:8.2f}"
        f" {asked[0]:8.1f} {100 * tally.ceiling / present:8.2f}"
        f" {100 * tally.wrong_sure / present:11.2f} {asked[1]:8.1f}"
        f" {100 * tally.right_sure / max(tally.right, 1):11.1f}"
        f" {tally.off_inferred:6d}/{tally.off:<6d} {center:9.3f} {inside:8.1f}"
        f" {tally.seconds / max(tally.caps, 1):6.1f}{refused}"
    )


def reliability(tallies: list[Tally], rng: np.random.Generator) -> str:
    """Reliability table of the confidences, intervals by resampling whole caps."""
    rows = []
    start = 0
    for tally in tallies:
        rows.extend((start + cap, confidence, right) for cap, confidence, right in tally.labels)
        start += tally.caps
    caps = np.array([one[0] for one in rows])
    confidence = np.clip(np.array([one[1] for one in rows]), 1e-4, 1 - 1e-4)
    right = np.array([one[2] for one in rows], dtype=float)
    edges = np.array([0.0, 0.2, 0.4, 0.6, 0.7, 0.8, 0.9, 0.95, 0.98, 0.99, 1.0])
    lines = [
        f"confidence of {len(rows)} labels ({100 * (1 - right.mean()):.1f} % wrong), painted"
        " capsules",
        f"{'bin':>12s} {'labels':>7s} {'stated':>7s} {'right':>7s} {'95 % interval':>16s}",
    ]
    bins = np.clip(np.digitize(confidence, edges) - 1, 0, len(edges) - 2)
    for index in range(len(edges) - 1):
        here = bins == index
        if not here.any():
            continue
        total = np.bincount(caps[here], minlength=start).astype(float)
        good = np.bincount(caps[here], weights=right[here], minlength=start)
        draws = rng.integers(0, start, (500, start))
        counted = total[draws].sum(axis=1)
        share = good[draws].sum(axis=1)[counted > 0] / counted[counted > 0]
        low, high = np.quantile(share, [0.025, 0.975])
        lines.append(
            f"{edges[index]:5.2f}-{edges[index + 1]:5.2f} {int(here.sum()):8d}"
            f" {confidence[here].mean():7.3f} {right[here].mean():7.3f}    {low:.3f}-{high:.3f}"
        )
    loss = -np.mean(right * np.log(confidence) + (1 - right) * np.log(1 - confidence))
    mean = np.clip(right.mean(), 1e-6, 1 - 1e-6)
    constant = -(mean * np.log(mean) + (1 - mean) * np.log(1 - mean))
    lines.append(f"log-loss {loss:.4f}, of a constant {constant:.4f}")
    return "\n".join(lines)


def tasks_of(name: str, heads: str, seeds: range, real: tuple[str, ...]) -> list[Task]:
    """The caps of one row."""
    if heads != "real":
        return [Task(condition=name, head=heads, seed=seed) for seed in seeds]
    which = (*real, "low2mm") if name == "2mm" else real
    return [Task(condition=name, head=one, seed=seed) for one in which for seed in seeds]


def main(arguments: list[str] | None = None) -> int:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--seeds", type=int, default=3, help="caps for each head and condition")
    parser.add_argument("--first-seed", type=int, default=0)
    parser.add_argument(
        "--heads", choices=("real", "synthetic", "points"), default="real", help="default: real"
    )
    parser.add_argument("--conditions", nargs="*", choices=tuple(CONDITIONS), default=None)
    parser.add_argument("--quick", action="store_true", help="one seed, clean and hard, one head")
    parser.add_argument("--jobs", type=int, default=1, help="processes at once (default 1)")
    parser.add_argument("--refusals", action="store_true", help="only the scans to be refused")
    chosen = parser.parse_args(arguments)
    names = chosen.conditions or [name for name in CONDITIONS if name != "hopeless"]
    seeds = range(chosen.first_seed, chosen.first_seed + chosen.seeds)
    real: tuple[str, ...] = ("s1", "ch2")
    if chosen.quick:
        names, seeds, real = ["clean", "hard"], range(seeds.start, seeds.start + 1), ("s1",)
    if chosen.heads == "points" and chosen.conditions is None and not chosen.quick:
        names = ["clean", "hard", "sparse", "128", "19", "far", "hopeless"]
    if chosen.refusals:
        print("\n".join(refusals(real if chosen.heads == "real" else (), seeds)))
        return 0
    print(f"Electrodes, painted capsules ({chosen.heads} heads)")
    print(HEADER, flush=True)
    tallies = []
    with Pool(chosen.jobs) as pool:
        for name in names:
            tasks = tasks_of(name, chosen.heads, seeds, real)
            tally = gather(pool.imap(run_task, tasks))
            tallies.append(tally)
            print(row(CONDITIONS[name], tally), flush=True)
    ratio = np.array([one for tally in tallies for one in tally.inferred_ratio])
    if len(ratio):
        print(
            f"inferred places: {len(ratio)}, root mean square of error over stated deviation"
            f" {np.sqrt((ratio**2).mean()):.2f}"
        )
    if any(tally.labels for tally in tallies):
        print(reliability(tallies, np.random.default_rng(0)))
    return 0


if __name__ == "__main__":
    raise SystemExit(main())

"""Skin and markers by condition: found, false, centre error, covariance, size, shift, contact.

Run ``python -m tests.benchmarks.markers`` with ``--conditions NAME ...`` (parts of names will do),
``--seeds N``, ``--heads s1 ch2 invented``, ``--list``; or with ``--time`` for the time and memory of
``locator find`` beside one call of ``skimage.feature.blob_log`` on the same volume.
All capsules are painted ones, on real scalps or on invented heads.
"""

from __future__ import annotations

import argparse
import functools
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from scipy.optimize import linear_sum_assignment
from scipy.spatial import cKDTree
from scipy.spatial.transform import Rotation
from scipy.stats import chi2

if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from locator.errors import LocatorError
from locator.markers import find_markers
from locator.skin import find_skin, height_mm
from locator.volume import check_volume
from tests.painted import CLEAN, HARD, NAMES_61, painted_head, real_head

Array = NDArray[np.float64]

INVENTED_FAT = 1260.0
"""Scalp fat of an invented scan: 210 at the scale of 6."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Scene:
    """One volume and what is known of it; lengths in mm, scanner space.

    ``tested`` names the capsules that count (all others are neither missed nor extra).
    """

    image: NDArray[np.float32]
    affine: Array
    centers: Array
    contacts: Array
    diameters: Array
    shift: tuple[float, float, float] = (0.0, 0.0, 0.0)
    tested: NDArray[np.bool_] | None = None
    told: dict[str, Any] = field(default_factory=dict)


# --- making scenes -----------------------------------------------------------------------------


@functools.lru_cache(maxsize=4)
def invented_head(seed: int) -> Any:
    """An invented head, kept for the next condition."""
    from synthetic_heads.heads import make_head

    return make_head(3000 + seed)


def ball_of(capsules: Any, shape: str) -> Array:
    """Diameter of the ball with the volume of each capsule."""
    size = capsules.diameters_mm**2 * capsules.heights_mm * (1.5 if shape == "disc" else 1.0)
    diameter: Array = size ** (1 / 3)
    return diameter


def scene_of(
    image: NDArray[np.float32], affine: Array, cap: Any, shift: Any = (0.0, 0.0, 0.0)
) -> Scene:
    """The scene of a painted cap."""
    worn = cap.worn
    half = (worn.gaps_mm + worn.heights_mm / 2)[:, None]
    return Scene(
        image=image,
        affine=affine,
        centers=worn.centers_mm,
        contacts=worn.centers_mm - worn.axes * half,
        diameters=ball_of(worn, cap.shape),
        shift=tuple(float(s) for s in shift),
    )


def cap_on(head: str, seed: int, **settings: Any) -> Scene:
    """A cap painted on a real head, or on an invented one where all fat is drawn by the scan."""
    scan = {k: settings.pop(k) for k in list(settings) if k in SCAN_KEYS}
    names = settings.pop("names", NAMES_61)
    told = settings.pop("told", {})
    if head != "invented":
        image, affine, truth = painted_head(head, names, 1000 + seed, **settings)
        return scene_of(image, affine, truth["cap"], settings.get("shift_mm", (0.0, 0.0, 0.0)))
    from synthetic_heads.cap import make_cap
    from synthetic_heads.scan import make_scan

    scan.update(
        {k: settings.pop(k) for k in ("brightness", "darken", "housing_mm") if k in settings}
    )
    if "extra_noise" in settings:
        scan["noise"] = 0.03 + 2 * settings.pop("extra_noise")
    body = invented_head(seed)
    vertices, faces = body.surfaces["scalp"]
    cap = make_cap(vertices, faces, body.landmarks_mm, names, 1000 + seed, **settings)
    image, affine = make_scan(body, cap, seed=seed, **scan)
    shift = affine[:3, scan.get("read_axis", 0)] * scan.get("chemical_shift_voxels", 0.0)
    scene = scene_of(image, affine, cap, shift)
    return Scene(**{**fields_of(scene), "told": told})


SCAN_KEYS = (
    "voxel_mm", "axes", "oblique_deg", "crop_mm", "bias", "noise", "chemical_shift_voxels",
    "read_axis", "texture", "fat_suppression",
)  # fmt: skip


def fields_of(scene: Scene) -> dict[str, Any]:
    """The scene as keyword arguments."""
    return {name: getattr(scene, name) for name in Scene.__dataclass_fields__}


def bare(head: str, seed: int, **scan: Any) -> tuple[NDArray[np.float32], Array, Any, float]:
    """A head without a cap: image, affine, its cap that was not painted, and its fat."""
    from synthetic_heads.cap import make_cap
    from synthetic_heads.scan import make_scan

    cap_settings = {k: scan.pop(k) for k in list(scan) if k not in SCAN_KEYS}
    names = cap_settings.pop("names", NAMES_61)
    if head == "invented":
        body = invented_head(seed)
        vertices, faces = body.surfaces["scalp"]
        image, affine = make_scan(body, None, seed=seed, **scan)
        marks, fat = body.landmarks_mm, INVENTED_FAT
    else:
        real = real_head(head)
        vertices, faces, marks = real.vertices_mm, real.faces, real.landmarks_mm
        image, affine, fat = real.intensity, real.scanner_from_voxel, real.fat_intensity
    cap = make_cap(vertices, faces, marks, names, 1000 + seed, **{**CLEAN, **cap_settings})
    return image, affine, cap, fat


def paint_ellipsoids(
    image: NDArray[np.float32],
    affine: Array,
    centers: Array,
    turns: Array,
    semi_axes: Array,
    *,
    brightness: float,
    housing_mm: float = 1.0,
    shade: float = 0.3,
    feet: Array | None = None,
    noise_sd: float = 0.0,
    seed: int = 0,
) -> NDArray[np.float32]:
    """Paint ellipsoids of three different axes, by sub-voxels.

    Parameters
    ----------
    image, affine
        Volume, not changed.
    centers : (N, 3) ndarray
        Scanner mm.
    turns : (N, 3, 3) ndarray
        Rows: directions of the three axes.
    semi_axes : (N, 3) ndarray
        Half lengths, mm.
    brightness : float
        Image units.
    housing_mm, shade, feet
        Dark plastic around, and signal lost round the feet (N, 3) on the skin.
    noise_sd, seed
        Rician noise where it was painted.
    """
    painted = np.array(image, dtype=np.float32)
    inverse = np.linalg.inv(affine)
    voxel = np.sqrt((affine[:3, :3] ** 2).sum(axis=0))
    counts = np.maximum(3, np.ceil(4 * voxel)).astype(int)
    parts = [(np.arange(n) + 0.5) / n - 0.5 for n in counts]
    fine = np.stack(np.meshgrid(*parts, indexing="ij"), -1).reshape(-1, 3) @ affine[:3, :3].T
    rng = np.random.default_rng([seed, 0xE11])
    for index, (center, turn, semi) in enumerate(zip(centers, turns, semi_axes, strict=True)):
        reach = (semi.max() + housing_mm + (8.0 if shade and feet is not None else 1.0)) / voxel
        middle = inverse[:3, :3] @ center + inverse[:3, 3]
        low = np.maximum(np.floor(middle - reach).astype(int), 0)
        high = np.minimum(np.ceil(middle + reach).astype(int) + 1, painted.shape)
        if (high <= low).any():
            continue
        box = tuple(slice(a, b) for a, b in zip(low, high, strict=True))
        grid = np.indices(high - low).reshape(3, -1).T + low
        points = grid @ affine[:3, :3].T + affine[:3, 3]
        values = painted[box].reshape(-1).astype(np.float64)
        if feet is not None and shade:
            away = ((points - feet[index]) ** 2).sum(axis=1)
            values *= 1 - shade * np.exp(-away / 18.0)
        near = np.flatnonzero(np.linalg.norm(points - center, axis=1) < semi.max() + housing_mm + 2)
        offset = (points[near, None] + fine - center) @ turn.T
        plastic = (((offset / (semi + housing_mm)) ** 2).sum(axis=2) < 1).mean(axis=1)
        oil = (((offset / semi) ** 2).sum(axis=2) < 1).mean(axis=1)
        values[near] = values[near] * (1 - plastic) + oil * brightness
        touched = near[plastic > 0]
        if noise_sd:
            real = values[touched] + rng.normal(0, noise_sd, len(touched))
            values[touched] = np.hypot(real, rng.normal(0, noise_sd, len(touched)))
        painted[box] = values.reshape(high - low)
    return painted


def squashed(head: str, seed: int, *, tilt_deg: float = 0.0, **scan: Any) -> Scene:
    """Oblong capsules of three different axes, pressed flat on the skin side, some tilted."""
    image, affine, cap, fat = bare(head, seed, **scan)
    worn, rng = cap.worn, np.random.default_rng([seed, 0x50A])
    count = len(worn)
    semi = np.array([5.0, 3.6, 2.4]) * (1 + rng.normal(0, 0.08, (count, 3)))
    first = np.cross(worn.axes, rng.normal(size=(count, 3)))
    first /= np.linalg.norm(first, axis=1, keepdims=True)
    turns = np.stack([first, np.cross(worn.axes, first), worn.axes], axis=1)
    gap = 1.0
    feet = worn.centers_mm - worn.axes * (worn.gaps_mm + worn.heights_mm / 2)[:, None]
    tilts = Rotation.from_rotvec(np.radians(tilt_deg) * first * rng.choice([-1, 1], (count, 1)))
    turns = np.einsum("nij,nkj->nki", tilts.as_matrix(), turns)
    # Height of the centre so that the lowest point of the tilted ellipsoid keeps the gap.
    half = np.linalg.norm(semi * np.einsum("nij,nj->ni", turns, worn.axes), axis=1)
    centers = feet + worn.axes * (gap + half)[:, None]
    image = paint_ellipsoids(
        image, affine, centers, turns, semi, brightness=1.05 * fat, feet=feet,
        noise_sd=0.015 * fat, seed=seed,
    )  # fmt: skip
    return Scene(
        image=image,
        affine=affine,
        centers=centers,
        contacts=feet,
        diameters=2 * semi.prod(axis=1) ** (1 / 3),
    )


def at_ears(head: str, seed: int) -> Scene:
    """Six more capsules on the skin within a few millimetres of the rims of the ears."""
    from synthetic_heads.meshes import Skin as Mesh

    image, affine, cap, fat = bare(head, seed)
    if head == "invented":
        body = invented_head(seed)
        (vertices, faces), marks = body.surfaces["scalp"], body.landmarks_mm
    else:
        real = real_head(head)
        vertices, faces, marks = real.vertices_mm, real.faces, real.landmarks_mm
    ears = np.array([marks["LPA"], marks["RPA"]])
    smooth = Mesh(vertices, faces).without_thin_parts(ears)
    kept = np.zeros(len(vertices), bool)
    kept[smooth.faces] = True
    rng = np.random.default_rng([seed, 0xEA5])
    places = []
    for ear in ears:
        near = np.linalg.norm(vertices - ear, axis=1) < 45
        rim = cKDTree(vertices[~kept & near]) if (~kept & near).any() else cKDTree(ear[None])
        away, _ = rim.query(vertices)
        fit = kept & near & (away > 4) & (away < 9) & (vertices[:, 2] > ear[2] - 10)
        # On the skin beside the ear, not on the root of the ear itself.
        even = np.einsum("ij,ij->i", smooth.normal(vertices, 12.0), smooth.normals) > 0.93
        fit &= even
        pool = rng.permutation(np.flatnonzero(fit))
        chosen: list[Array] = []
        for index in pool:
            if all(np.linalg.norm(vertices[index] - other) > 14 for other in chosen):
                chosen.append(vertices[index])
            if len(chosen) == 3:
                break
        places += chosen
    feet = np.concatenate([cap.worn.centers_mm, np.array(places).reshape(-1, 3)])
    feet = smooth.closest(feet)
    normals = smooth.normal(feet)
    # A place near a capsule of the cap takes its place.
    extra = len(cap.worn)
    gone = cKDTree(feet[extra:]).query(feet[:extra])[0] < 14
    keep = np.concatenate([~gone, np.ones(len(feet) - extra, bool)])
    tested = np.concatenate([np.zeros(extra, bool), np.ones(len(feet) - extra, bool)])[keep]
    feet, normals = feet[keep], normals[keep]
    semi = np.tile([4.0, 4.0, 3.0], (len(feet), 1))
    first = np.cross(normals, [0.3, 0.5, 0.8])
    first /= np.linalg.norm(first, axis=1, keepdims=True)
    turns = np.stack([first, np.cross(normals, first), normals], axis=1)
    centers = feet + normals * 5.0
    image = paint_ellipsoids(
        image, affine, centers, turns, semi, brightness=1.05 * fat, feet=feet,
        noise_sd=0.015 * fat, seed=seed,
    )  # fmt: skip
    return Scene(
        image=image,
        affine=affine,
        centers=centers,
        contacts=feet,
        diameters=2 * semi.prod(axis=1) ** (1 / 3),
        tested=tested,
    )


def cut_field(head: str, seed: int, *, which: str = "cut") -> Scene:
    """The field of view ends so that capsules are cut off or touch its edge, on three sides.

    ``which``: count the capsules that the edge cuts (their centres still in the field), or the
    others.
    """
    scene = cap_on(head, seed, **CLEAN)
    affine = scene.affine
    index = (scene.centers - affine[:3, 3]) @ np.linalg.inv(affine[:3, :3]).T
    rng = np.random.default_rng([seed, 0xF0F])
    low, high = np.zeros(3, int), np.array(scene.image.shape)
    for axis in range(3):
        # The side of the axis that is up, left or front; never the neck.
        world = affine[:3, axis] / np.linalg.norm(affine[:3, axis])
        up = world[2] > -0.7 if abs(world[2]) > 0.7 else rng.random() < 0.5
        # So that the outermost capsules stick out by 0 to 3.5 voxels.
        outermost = np.sort(index[:, axis])[-2:] if up else np.sort(index[:, axis])[:2]
        stop = float(np.mean(outermost)) + (1 if up else -1) * rng.uniform(0.0, 3.5)
        if up:
            high[axis] = min(high[axis], int(np.floor(stop)) + 1)
        else:
            low[axis] = max(low[axis], int(np.ceil(stop)))
    box = tuple(slice(a, b) for a, b in zip(low, high, strict=True))
    moved = affine.copy()
    moved[:3, 3] = affine[:3, :3] @ low + affine[:3, 3]
    inside = ((index > low - 0.5) & (index < high - 0.5)).all(axis=1)
    room = np.minimum(index - low + 0.5, high - 0.5 - index).min(axis=1)
    cut = inside & (room < 4.5)
    # A rest of a capsule whose centre lies beyond the edge is neither missed nor extra.
    tested = cut if which == "cut" else inside & ~cut
    return Scene(
        image=np.ascontiguousarray(scene.image[box]),
        affine=moved,
        centers=scene.centers,
        contacts=scene.contacts,
        diameters=scene.diameters,
        tested=tested,
    )


def water_markers(head: str, seed: int, *, told: bool = False) -> Scene:
    """Capsules of water, where they are, on a scan whose fat is drawn 2.2 voxels off."""
    from synthetic_heads.scan import paint_capsules

    image, affine, cap, fat = bare("invented", seed, chemical_shift_voxels=2.2, read_axis=1)
    image = paint_capsules(
        image, affine, cap, brightness=0.9, fat_intensity=fat, noise_sd=0.015 * fat, seed=seed
    )
    scene = scene_of(image, affine, cap)
    sidecar = {"read_axis": 1, "pixel_bandwidth_hz": 197.0, "field_tesla": 3.0}
    return Scene(**{**fields_of(scene), "told": sidecar if told else {}})


def dark_fat(head: str, seed: int, *, brightness: float = 1.0) -> Scene:
    """The scalp's fat darkened to a fifth, capsules still bright."""
    from synthetic_heads.scan import paint_capsules

    if head == "invented":
        image, affine, cap, fat = bare(head, seed, fat_suppression=0.8)
    else:
        image, affine, cap, fat = bare(head, seed)
        bright = np.argwhere(image > 0.25 * fat)
        points = bright @ affine[:3, :3].T + affine[:3, 3]
        shallow = cKDTree(real_head(head).vertices_mm).query(points, distance_upper_bound=9.0)[0]
        scalp = np.zeros(image.shape, np.float32)
        scalp[tuple(bright[np.isfinite(shallow)].T)] = 1.0
        scalp = ndimage.gaussian_filter(scalp, 0.7)
        # What is over a fifth of fat keeps a tenth of the rest.
        level = np.minimum(image, 0.2 * fat) + 0.1 * np.maximum(image - 0.2 * fat, 0)
        image = (image * (1 - scalp) + level * scalp).astype(np.float32)
    image = paint_capsules(
        image, affine, cap, brightness=brightness, fat_intensity=fat, noise_sd=0.015 * fat,
        seed=seed,
    )  # fmt: skip
    return scene_of(image, affine, cap)


def nobody(head: str, seed: int, *, suppressed: bool = False) -> Scene:
    """A head without capsules."""
    scan = {"fat_suppression": 0.85} if suppressed else {}
    image, affine, _, _ = bare(head, seed, **scan)
    none = np.zeros((0, 3))
    return Scene(image=image, affine=affine, centers=none, contacts=none, diameters=np.zeros(0))


def no_head(head: str, seed: int) -> Scene:
    """Capsules in noise."""
    from synthetic_heads.scan import paint_capsules

    image, affine, cap, fat = bare(head, seed)
    rng = np.random.default_rng(seed)
    air = np.abs(rng.normal(0, 0.015 * fat, image.shape)).astype(np.float32)
    image = paint_capsules(air, affine, cap, fat_intensity=fat, seed=seed)
    none = np.zeros((0, 3))
    return Scene(image=image, affine=affine, centers=none, contacts=none, diameters=np.zeros(0))


Maker = Callable[[str, int], Scene]

EVERYWHERE, MADE = ("s1", "ch2", "invented"), ("invented",)


def _cap(**settings: Any) -> Maker:
    return lambda head, seed: cap_on(head, seed, **{**CLEAN, **settings})


CONDITIONS: dict[str, tuple[tuple[str, ...], Maker]] = {
    "clean 8 x 6": (EVERYWHERE, _cap()),
    "hard": (EVERYWHERE, lambda h, s: cap_on(h, s, **{**HARD, "gap_mm": 1.0})),
    "4 x 4": (EVERYWHERE, _cap(capsule_mm=(4.0, 4.0), gap_mm=1.0)),
    "5 x 3.6": (EVERYWHERE, _cap(capsule_mm=(5.0, 3.6), gap_mm=0.5)),
    "12 x 10": (EVERYWHERE, _cap(capsule_mm=(12.0, 10.0))),
    "12 x 10, 8 off": (EVERYWHERE, _cap(capsule_mm=(12.0, 10.0), gap_mm=8.0)),
    "disc 9 x 5": (EVERYWHERE, _cap(shape="disc", capsule_mm=(9.0, 5.0))),
    "flat 10 x 3.5": (EVERYWHERE, _cap(capsule_mm=(10.0, 3.5), gap_mm=1.0)),
    "gap 0": (EVERYWHERE, _cap(gap_mm=0.0, gap_sd_mm=0.0, housing_mm=0.0)),
    "8 off": (EVERYWHERE, _cap(gap_mm=8.0)),
    "0.7 x fat": (EVERYWHERE, _cap(brightness=0.7)),
    "1.5 x fat": (EVERYWHERE, _cap(brightness=1.5)),
    "shade 0.6": (EVERYWHERE, _cap(darken=0.6, gap_mm=1.0)),
    "squashed 10 x 7 x 5": (EVERYWHERE, squashed),
    "squashed, tilted 25": (EVERYWHERE, lambda h, s: squashed(h, s, tilt_deg=25.0)),
    "ear rim": (EVERYWHERE, at_ears),
    "cut by the field": (EVERYWHERE, cut_field),
    "cut by the field, others": (EVERYWHERE, lambda h, s: cut_field(h, s, which="others")),
    "0.6 mm": (MADE, _cap(voxel_mm=(0.6, 0.6, 0.6))),
    "1 x 1 x 2.5 mm": (MADE, _cap(voxel_mm=(1.0, 1.0, 2.5))),
    "2 mm": (MADE, _cap(voxel_mm=(2.0, 2.0, 2.0))),
    "oblique, P-I-L": (MADE, _cap(axes="PIL", oblique_deg=(12.0, 0.0, 0.0))),
    "bias 40 %": (MADE, _cap(bias=0.4)),
    "fat shifted 2.2, untold": (MADE, _cap(chemical_shift_voxels=2.2, read_axis=1)),
    "fat shifted -3, untold": (MADE, _cap(chemical_shift_voxels=-3.0, read_axis=0)),
    "fat shifted 1.2, untold": (MADE, _cap(chemical_shift_voxels=1.2, read_axis=2)),
    "fat shifted 2.2, told": (
        MADE,
        _cap(
            chemical_shift_voxels=2.2,
            read_axis=1,
            told={"read_axis": 1, "pixel_bandwidth_hz": 197.0, "field_tesla": 3.0},
        ),
    ),
    "oil shifted 2.2, untold": (("s1", "ch2"), _cap(shift_mm=(0.0, 2.2, 0.0))),
    "water markers, untold": (MADE, water_markers),
    "water markers, told": (MADE, lambda h, s: water_markers(h, s, told=True)),
    "fat at 0.2": (EVERYWHERE, dark_fat),
    "fat at 0.2, markers 0.5": (EVERYWHERE, lambda h, s: dark_fat(h, s, brightness=0.5)),
    "no capsules": (EVERYWHERE, nobody),
    "no capsules, fat suppressed": (MADE, lambda h, s: nobody(h, s, suppressed=True)),
    "capsules without a head": (EVERYWHERE, no_head),
}


# --- measuring ---------------------------------------------------------------------------------


@dataclass
class Row:
    """Sums over the volumes of one condition."""

    worn: int = 0
    found: int = 0
    extra: int = 0
    errors: list[float] = field(default_factory=list)
    squares: list[float] = field(default_factory=list)
    sizes: list[float] = field(default_factory=list)
    shifts: list[float] = field(default_factory=list)
    skin: list[float] = field(default_factory=list)
    seconds: list[float] = field(default_factory=list)
    refusals: list[str] = field(default_factory=list)


def measure(row: Row, scene: Scene) -> None:
    """Find the markers of one volume and add them up."""
    start = time.process_time()
    try:
        volume = check_volume(scene.image, scene.affine, **scene.told)
        skin = find_skin(volume)
        markers = find_markers(volume, skin)
    except LocatorError as error:
        row.refusals.append(str(error))
        row.worn += len(scene.centers) if scene.tested is None else int(scene.tested.sum())
        return
    row.seconds.append(time.process_time() - start)
    worn = scene.centers
    away = np.linalg.norm(markers.centers_scanner_mm[:, None] - worn[None], axis=2)
    rows, columns = linear_sum_assignment(np.minimum(away, 6.0))
    near = away[rows, columns] < 5.0
    rows, columns = rows[near], columns[near]
    likely = markers.score > 0.5
    true = np.zeros(len(likely), bool)
    true[rows] = True
    row.extra += int((likely & ~true).sum())
    if scene.tested is not None:
        counts = scene.tested[columns]
        rows, columns = rows[counts], columns[counts]
    row.worn += len(worn) if scene.tested is None else int(scene.tested.sum())
    row.found += int(likely[rows].sum())
    offset = markers.centers_scanner_mm[rows] - worn[columns]
    row.errors += list(np.linalg.norm(offset, axis=1))
    inverse = np.linalg.inv(markers.covariance_mm2[rows])
    row.squares += list(np.einsum("ni,nij,nj->n", offset, inverse, offset))
    row.sizes += list(markers.diameter_mm[rows] / scene.diameters[columns])
    row.shifts.append(float(np.linalg.norm(markers.shift_mm - scene.shift)))
    contacts = scene.contacts if scene.tested is None else scene.contacts[scene.tested]
    row.skin += list(-height_mm(skin, contacts))


HEADER = (
    "| condition | found | extra | centre error, mean | max | in the 95 % ellipsoid | size / true |"
    " shift error, mm | skin over the contact, mm | CPU s |\n"
    "|---|---|---|---|---|---|---|---|---|---|"
)


def line(name: str, row: Row) -> str:
    """One line of the table."""
    if not row.errors:
        return f"| {name} | refused {len(row.refusals)} | {row.extra} | | | | | | | |"
    errors, skin = np.array(row.errors), np.array(row.skin)
    inside = np.mean(np.array(row.squares) < chi2.ppf(0.95, 3))
    refused = f", refused {len(row.refusals)}" if row.refusals else ""
    return (
        f"| {name} | {row.found} / {row.worn}{refused} | {row.extra} | {errors.mean():.3f} |"
        f" {errors.max():.2f} | {100 * inside:.0f} % | {np.median(row.sizes):.2f} |"
        f" {max(row.shifts):.2f} | {skin.mean():+.2f} +/- {skin.std():.2f} |"
        f" {np.mean(row.seconds):.1f} |"
    )


def table(
    conditions: list[str], heads: list[str], seeds: list[int], *, apart: bool
) -> Iterator[str]:
    """Lines of the table."""
    for name, (where, maker) in CONDITIONS.items():
        if conditions and not any(part == name or part in name for part in conditions):
            continue
        groups = {"real": [h for h in where if h in heads and h != "invented"]}
        groups["invented"] = [h for h in where if h in heads and h == "invented"]
        if apart:
            groups = {h: [h] for h in where if h in heads}
        for group, members in groups.items():
            row = Row()
            for head in members:
                for seed in seeds:
                    measure(row, maker(head, seed))
            if members:
                yield line(f"{name} ({group})", row)
                for reason in sorted(set(row.refusals))[:3]:
                    yield f"    refused: {reason}"


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--conditions", nargs="*", default=[])
    parser.add_argument("--seeds", type=int, default=2, help="how many seeds")
    parser.add_argument("--first-seed", type=int, default=0)
    parser.add_argument("--heads", nargs="*", default=list(EVERYWHERE))
    parser.add_argument("--apart", action="store_true", help="one line for each head")
    parser.add_argument("--list", action="store_true", help="name the conditions")
    parser.add_argument("--time", action="store_true", help="time and memory of locator find")
    chosen = parser.parse_args()
    if chosen.list:
        print("\n".join(CONDITIONS))
        return
    if chosen.time:
        timing()
        return
    print("Painted capsules. Found, extra: with score > 0.5.\n")
    print(HEADER, flush=True)
    seeds = list(range(chosen.first_seed, chosen.first_seed + chosen.seeds))
    for text in table(chosen.conditions, chosen.heads, seeds, apart=chosen.apart):
        print(text, flush=True)


# --- time and memory ---------------------------------------------------------------------------

BLOB_LOG = """
import sys, numpy as np, nibabel as nib
from skimage.feature import blob_log
image = nib.load(sys.argv[1]).get_fdata(dtype=np.float32)
image /= image.max()
import time
start = time.perf_counter()
found = blob_log(image, min_sigma=1.5, max_sigma=4, num_sigma=5)
print(time.perf_counter() - start, len(found))
"""


def _child(command: list[str]) -> tuple[float, float, str]:
    """Wall seconds, peak memory (MB) and output of one process."""
    # A parent of its own: the largest memory of children is kept for all of them together.
    code = (
        "import resource, subprocess, sys, time\n"
        "start = time.perf_counter()\n"
        "done = subprocess.run(sys.argv[1:], capture_output=True, text=True)\n"
        "wall = time.perf_counter() - start\n"
        "peak = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 1024\n"
        "print(wall, peak, done.returncode)\n"
        "print(done.stdout + (done.stderr if done.returncode else ''))\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, *command], capture_output=True, text=True, check=True
    )
    first, _, rest = done.stdout.partition("\n")
    wall, peak, status = first.split()
    if int(status):
        msg = f"{command[:4]} ended with {status}: {rest.strip()}"
        raise RuntimeError(msg)
    return float(wall), float(peak), rest.strip()


def timing() -> None:
    """Print time and memory of ``locator find`` and of ``blob_log`` on one 256^3 volume."""
    import nibabel as nib

    from synthetic_heads.tape import NAMES_128

    names = NAMES_61 + tuple(n for n in NAMES_128 if n not in NAMES_61)[: 64 - len(NAMES_61)]
    image, affine, _ = painted_head("s1", names, 5, **CLEAN)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "t1.nii.gz"
        nib.save(nib.Nifti1Image(image, affine), path)
        blob = Path(folder) / "blob.py"
        blob.write_text(BLOB_LOG)
        command = [sys.executable, "-m", "locator", "find", str(path), "--names", ",".join(names)]
        print(f"{'x'.join(str(n) for n in image.shape)}, {len(names)} names")
        for turn in range(2):
            out = str(Path(folder) / f"out{turn}")
            wall, peak, _ = _child([*command, "--out", out])
            print(f"locator find: {wall:.1f} s, peak {peak:.0f} MB", flush=True)
            _, peak, told = _child([sys.executable, str(blob), str(path)])
            print(f"blob_log call: {float(told.split()[0]):.1f} s, peak {peak:.0f} MB", flush=True)


if __name__ == "__main__":
    main()

"""Invented heads with known tissue, surfaces and landmarks."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import asdict, dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage as ndi
from scipy.spatial.transform import Rotation

from synthetic_heads import anatomy
from synthetic_heads.folding import fold
from synthetic_heads.meshes import icosphere, largest_part, level_surface, unit
from synthetic_heads.shapes import Field, Grid, band_noise, finer

Array = NDArray[np.float64]
Mesh = tuple[Array, NDArray[np.int32]]

AIR = 0
SKIN = 1
FAT = 2
BONE = 3
MARROW = 4
CSF = 5
GREY = 6
WHITE = 7
BRAINSTEM = 8
CEREBELLUM = 9
MUSCLE = 10
EYE = 11

TISSUE_NAMES = {
    AIR: "air",
    SKIN: "skin",
    FAT: "fat",
    BONE: "compact bone",
    MARROW: "bone marrow",
    CSF: "cerebrospinal fluid",
    GREY: "grey matter",
    WHITE: "white matter",
    BRAINSTEM: "brain stem and cord",
    CEREBELLUM: "cerebellum",
    MUSCLE: "muscle",
    EYE: "eye",
}


@dataclass(frozen=True, eq=False, kw_only=True)
class Layer:
    """One painted layer: where ``level_mm`` is negative, the tissue replaces what was there.

    Attributes
    ----------
    tissue : int
        One of the tissue codes of this module.
    level_mm : (A, B, C) ndarray of float32
        About the signed distance to the layer's surface, mm, negative inside.
    first_voxel : (3,) tuple of int
        Voxel of the label grid where ``level_mm[0, 0, 0]`` stands.
    step_voxels : int
        Step of ``level_mm`` in voxels of the label grid (1 or 2).
    """

    tissue: int
    level_mm: NDArray[np.float32]
    first_voxel: tuple[int, int, int]
    step_voxels: int


@dataclass(frozen=True, eq=False, kw_only=True)
class SyntheticHead:
    """An invented head: tissue labels, exact surfaces, landmarks.

    Attributes
    ----------
    labels : (I, J, K) ndarray of int8
        Tissue code of each voxel centre (``AIR`` 0, ``SKIN`` 1, ... see this module).
    scanner_from_voxel : (4, 4) ndarray
        Affine of the label grid, voxel indices to scanner RAS+ mm; axis aligned, RAS order.
    surfaces : dict of str to (vertices_mm, faces)
        ``scalp``, ``outer_skull``, ``inner_skull``, ``pial``: closed, faces outward, scanner mm.
    landmarks_mm : dict of str to (3,) ndarray
        ``NAS``, ``LPA``, ``RPA``, ``INI`` on the skin, scanner mm.
    kind : str
        ``shaped`` or ``sphere``.
    radii_mm : dict of str to float
        Sphere only: radius of each surface; empty for shaped heads.
    center_mm : (3,) ndarray
        Centre of the sphere; for shaped heads a point in the middle of the brain.
    seed : int
        What the head was drawn from.
    layers : tuple of Layer
        The painted layers, outside first: tissue at any finer place.
    settings : dict of str to float
        The drawn sizes, mm.
    """

    labels: NDArray[np.int8]
    scanner_from_voxel: Array
    surfaces: dict[str, Mesh]
    landmarks_mm: dict[str, Array]
    kind: str
    radii_mm: dict[str, float]
    center_mm: Array
    seed: int
    layers: tuple[Layer, ...] = ()
    settings: dict[str, float] = field(default_factory=dict)

    def fine_levels(self) -> Iterator[tuple[int, tuple[slice, slice, slice], Field]]:
        """The layers on the label grid, outside first: tissue, its box of voxels, level mm."""
        for layer in self.layers:
            level = finer(layer.level_mm) if layer.step_voxels == 2 else layer.level_mm
            box = tuple(
                slice(first, first + size)
                for first, size in zip(layer.first_voxel, level.shape, strict=True)
            )
            yield layer.tissue, box, level


SPHERE_RADII_MM = {"pial": 78.0, "inner_skull": 80.0, "outer_skull": 86.0, "scalp": 92.0}
"""The layered sphere: radius of each surface, mm."""


def make_head(
    seed: int,
    kind: str = "shaped",
    *,
    voxel_mm: float = 1.0,
    below_tragion_mm: float = 88.0,
    pose_sd: tuple[float, float] = (5.0, 6.0),
) -> SyntheticHead:
    """Draw a head.

    Parameters
    ----------
    seed : int
        All draws come from it; same seed, same head.
    kind : str
        ``shaped``: face, ears, neck, layered skull, folded cortex. ``sphere``: concentric layers
        (80, 86 and 92 mm) round a folded cortex, for which the exact series holds.
    voxel_mm : float
        Step of the label grid, mm.
    below_tragion_mm : float
        Shaped heads: how far the grid reaches below the ears, mm.
    pose_sd : (float, float)
        SD of the turn of the head in the scanner (degrees about each axis, nodding 1.3 times
        that) and of its offset (mm along each axis).

    Returns
    -------
    SyntheticHead
        Labels, surfaces, landmarks.

    Raises
    ------
    ValueError
        If the kind is not known.
    """
    if kind == "sphere":
        return _sphere(seed, voxel_mm, pose_sd[1])
    if kind != "shaped":
        msg = f"A head is 'shaped' or a 'sphere', not {kind!r}."
        raise ValueError(msg)
    rng = np.random.default_rng([int(seed), 0x5EAD])
    sizes = anatomy.draw_sizes(rng)
    turn = rng.normal(0, pose_sd[0], 3) * [1.3, 0.5, 0.5]
    turn = np.clip(turn, -2.2 * pose_sd[0], 2.2 * pose_sd[0])
    scanner_from_head = np.eye(4)
    scanner_from_head[:3, :3] = Rotation.from_euler("xyz", turn, degrees=True).as_matrix()
    scanner_from_head[:3, 3] = rng.normal(0, pose_sd[1], 3)

    step = 2 * voxel_mm
    low = np.array([-sizes.breadth / 2 - 24, -sizes.length / 2 - 18, -36.0 - below_tragion_mm])
    high = np.array([sizes.breadth / 2 + 24, sizes.length / 2 + 34, sizes.top + 14])
    first, counts = _box(low, high, scanner_from_head, step, keep_low=True)
    grid = _head_frame(first, counts, step, scanner_from_head, rng)
    outside = anatomy.build_outside(grid, sizes, rng, step)
    stem = anatomy.brain_stem(grid)

    near = np.argwhere(outside.cavity < 6.0)
    start = np.maximum(near.min(axis=0) - 1, 0)
    stop = np.minimum(near.max(axis=0) + 2, counts)
    box = tuple(slice(a, b) for a, b in zip(start, stop, strict=True))
    inner = Grid(grid.x[box], grid.y[box], grid.z[box])
    brain = anatomy.build_brain(inner, outside.cavity[box], stem[box], sizes, rng, step)

    s = outside.shapes
    fluid = np.minimum(outside.cavity, s["canal"])
    coarse = [
        (SKIN, outside.scalp), (FAT, s["fat"]), (MUSCLE, s["muscle"]), (FAT, s["pads"]),
        (BONE, outside.outer_skull), (BONE, s["face_bone"]), (BONE, s["neck_bone"]),
        (MARROW, s["marrow"]), (AIR, s["air"]), (AIR, s["ear_canal"]), (FAT, s["orbit"]),
        (MUSCLE, s["eye_muscle"]), (EYE, s["eye"]), (CSF, fluid),
    ]  # fmt: skip
    layers = [_layer(tissue, level, (0, 0, 0), 2) for tissue, level in coarse]
    corner = tuple(int(2 * n) for n in start)
    for tissue, level in (
        (GREY, brain.pial), (WHITE, brain.white), (GREY, brain.nuclei),
        (CSF, brain.ventricles), (CEREBELLUM, brain.cerebellum), (WHITE, brain.cerebellar_white),
    ):  # fmt: skip
        layers.append(_layer(tissue, level, corner, 1))
    layers.append(_layer(BRAINSTEM, np.maximum(stem, fluid + 1.0), (0, 0, 0), 2))

    scanner_from_voxel = np.diag([voxel_mm, voxel_mm, voxel_mm, 1.0])
    scanner_from_voxel[:3, 3] = first
    labels = _paint(tuple(int(2 * n - 1) for n in counts), layers)
    fine_first = first + voxel_mm * np.array(corner)
    surfaces = {
        "scalp": largest_part(*level_surface(outside.scalp, step, first)),
        "outer_skull": largest_part(*level_surface(outside.outer_skull, step, first)),
        "inner_skull": largest_part(*level_surface(outside.cavity, step, first)),
        "pial": largest_part(*level_surface(brain.pial, voxel_mm, fine_first)),
    }
    landmarks = _landmarks(outside.scalp, first, step, scanner_from_head, sizes)
    drawn = {k: v for k, v in asdict(sizes).items() if isinstance(v, float)}
    drawn.update({f"skull_{k}": v for k, v in sizes.skull.items()})
    drawn.update({f"scalp_{k}": v for k, v in sizes.scalp.items()})
    drawn.update(man=float(sizes.man), pitch_deg=float(turn[0]))
    center = scanner_from_head[:3, :3] @ [0, -5, 15] + scanner_from_head[:3, 3]
    return SyntheticHead(
        labels=labels,
        scanner_from_voxel=scanner_from_voxel,
        surfaces=surfaces,
        landmarks_mm=landmarks,
        kind="shaped",
        radii_mm={},
        center_mm=center,
        seed=int(seed),
        layers=tuple(layers),
        settings=drawn,
    )


def _box(
    low: Array, high: Array, scanner_from_head: Array, step: float, *, keep_low: bool
) -> tuple[Array, NDArray[np.int_]]:
    """First grid point and counts of the scanner-aligned box round a box of the head frame."""
    corners = np.array(
        [[x, y, z] for x in (low[0], high[0]) for y in (low[1], high[1]) for z in (low[2], high[2])]
    )
    placed = corners @ scanner_from_head[:3, :3].T + scanner_from_head[:3, 3]
    # the turned corners of the box hold nothing: shrink by a share of the growth
    first, last = placed.min(axis=0), placed.max(axis=0)
    plain = corners + scanner_from_head[:3, 3]
    first = 0.6 * plain.min(axis=0) + 0.4 * first
    last = 0.6 * plain.max(axis=0) + 0.4 * last
    if keep_low:
        first[2] = plain.min(axis=0)[2]
    counts = np.ceil((last - first) / step).astype(int) + 1
    return np.round(first, 3), counts


def _head_frame(
    first: Array,
    counts: NDArray[np.int_],
    step: float,
    scanner_from_head: Array,
    rng: np.random.Generator,
) -> Grid:
    """Head-frame coordinates of the grid, gently warped so that left and right differ."""
    axes = [np.float32(first[k]) + np.float32(step) * np.arange(counts[k], dtype=np.float32)
            for k in range(3)]  # fmt: skip
    x, y, z = np.meshgrid(*axes, indexing="ij")
    x, y, z = (axis - np.float32(o) for axis, o in zip((x, y, z), scanner_from_head[:3, 3],
                                                       strict=True))  # fmt: skip
    back = scanner_from_head[:3, :3].T.astype(np.float32)
    turned = [back[k, 0] * x + back[k, 1] * y + back[k, 2] * z for k in range(3)]
    size = (1.0, 0.8, 0.6)
    warped = []
    for k in range(3):
        bend = band_noise(rng, (12, 12, 12), 24.0, 150.0, 0.35)
        index = [(t / np.float32(24.0) + np.float32(5.5)) for t in turned]
        field_ = ndi.map_coordinates(bend, index, order=1, mode="nearest", output=np.float32)
        warped.append(turned[k] + np.float32(size[k]) * ndi.gaussian_filter(field_, 4.0))
    return Grid(*warped)


def _layer(tissue: int, level: Field, corner: tuple[int, ...], step: int) -> Layer:
    """Keep the part of a level that matters: the box where it is near or below zero."""
    near = level < 2.5
    if not near.any():
        return Layer(tissue=tissue, level_mm=level[:1, :1, :1], first_voxel=(0, 0, 0),
                     step_voxels=step)  # fmt: skip
    start, stop = [], []
    for axis in range(3):
        others = tuple(k for k in range(3) if k != axis)
        there = np.flatnonzero(near.any(axis=others))
        start.append(int(there[0]))
        stop.append(int(there[-1]) + 1)
    box = tuple(slice(a, b) for a, b in zip(start, stop, strict=True))
    first = tuple(int(c + step * a) for c, a in zip(corner, start, strict=True))
    return Layer(
        tissue=tissue,
        level_mm=np.ascontiguousarray(level[box], dtype=np.float32),
        first_voxel=(first[0], first[1], first[2]),
        step_voxels=step,
    )


def _paint(shape: tuple[int, ...], layers: list[Layer]) -> NDArray[np.int8]:
    """Tissue of each voxel centre: the layers painted one over the other."""
    labels = np.zeros(shape, dtype=np.int8)
    for layer in layers:
        level = finer(layer.level_mm) if layer.step_voxels == 2 else layer.level_mm
        box = tuple(slice(a, a + n) for a, n in zip(layer.first_voxel, level.shape, strict=True))
        labels[box][level < 0] = layer.tissue
    return labels


def _outermost(level: Field, first: Array, step: float, starts: Array, ways: Array) -> Array:
    """First point of the skin met from outside: rays from ``starts`` along ``ways``, mm."""
    along = np.arange(0.0, 160.0, 0.5)
    points = starts[:, None] + along[None, :, None] * ways[:, None]
    index = np.moveaxis((points - first) / step, -1, 0)
    values = ndi.map_coordinates(level, index, order=1, mode="constant", cval=30.0)
    hit = (values < 0).argmax(axis=1)
    rows = np.arange(len(starts))
    before, after = values[rows, hit - 1], values[rows, hit]
    run = along[hit - 1] + 0.5 * before / np.maximum(before - after, 1e-6)
    found: Array = starts + run[:, None] * ways
    return found


def _landmarks(
    level: Field, first: Array, step: float, scanner_from_head: Array, sizes: anatomy.Sizes
) -> dict[str, Array]:
    """Nasion (deepest point of the nasal root), inion, preauricular points, on the skin."""
    turn, move = scanner_from_head[:3, :3], scanner_from_head[:3, 3]

    def cast(points: list[list[float]], way: list[float]) -> Array:
        starts = np.array(points, dtype=np.float64) @ turn.T + move
        return _outermost(level, first, step, starts, np.tile(turn @ way, (len(points), 1)))

    _, nose_y, nose_z = sizes.nasion
    heights = np.arange(nose_z - 14, nose_z + 15, 0.5)
    profile = cast([[0.0, nose_y + 40, float(h)] for h in heights], [0, -1, 0])
    forward = profile @ turn[:, 1]
    # the deepest point between brow and bridge: the inner minimum of the profile
    inner = [
        k for k in range(1, len(heights) - 1)
        if forward[k] <= forward[k - 1] and forward[k] <= forward[k + 1]
    ]  # fmt: skip
    deepest = min(inner, key=lambda k: abs(heights[k] - nose_z)) if inner else len(heights) // 2
    back = cast([[0.0, -sizes.length / 2 - 40, -34.0]], [0, 1, 0])[0]
    side = sizes.breadth / 2 + 40
    left = cast([[-side, -1.0, -36.0]], [1, 0, 0])[0]
    right = cast([[side, -1.0, -36.0]], [-1, 0, 0])[0]
    return {"NAS": profile[deepest], "LPA": left, "RPA": right, "INI": back}


def _sphere(seed: int, voxel_mm: float, offset_sd: float) -> SyntheticHead:
    """Concentric spheres with skin, fat, two bone tables, marrow and a folded cortex."""
    rng = np.random.default_rng([int(seed), 0x0B])
    center = np.round(rng.normal(0, offset_sd, 3), 3)
    step = 2 * voxel_mm
    radii = dict(SPHERE_RADII_MM)
    reach = radii["scalp"] + 14.0
    counts = np.full(3, int(np.ceil(2 * reach / step)) + 1)
    first = np.round(center - reach, 3)
    axes = [first[k] + step * np.arange(counts[k]) - center[k] for k in range(3)]
    x, y, z = np.meshgrid(*[a.astype(np.float32) for a in axes], indexing="ij")
    radius = np.sqrt(x * x + y * y + z * z)
    # sulci deep enough that grey matter is found at 0.8 of the inner radius
    hull = (radius - np.float32(radii["pial"])).astype(np.float32)
    pial = np.maximum(fold(hull, step, rng, depth_mm=(14.0, 24.0)), finer(hull))
    zero = (0, 0, 0)
    layers = [
        _layer(SKIN, radius - radii["scalp"], zero, 2),
        _layer(FAT, radius - (radii["scalp"] - 2.0), zero, 2),
        _layer(BONE, radius - radii["outer_skull"], zero, 2),
        _layer(MARROW, np.abs(radius - 83.0) - 1.2, zero, 2),
        _layer(CSF, radius - radii["inner_skull"], zero, 2),
        _layer(GREY, pial, zero, 1),
        _layer(WHITE, pial + np.float32(2.6), zero, 1),
    ]
    scanner_from_voxel = np.diag([voxel_mm, voxel_mm, voxel_mm, 1.0])
    scanner_from_voxel[:3, 3] = first
    directions, faces = icosphere(5)
    surfaces = {
        name: (center + radii[name] * directions, faces.copy())
        for name in ("scalp", "outer_skull", "inner_skull", "pial")
    }
    aim = {
        "NAS": (0.0, np.cos(np.radians(18)), -np.sin(np.radians(18))),
        "INI": (0.0, -np.cos(np.radians(18)), -np.sin(np.radians(18))),
        "LPA": (-np.cos(np.radians(22)), 0.0, -np.sin(np.radians(22))),
        "RPA": (np.cos(np.radians(22)), 0.0, -np.sin(np.radians(22))),
    }
    return SyntheticHead(
        labels=_paint(tuple(int(2 * n - 1) for n in counts), layers),
        scanner_from_voxel=scanner_from_voxel,
        surfaces=surfaces,
        landmarks_mm={k: center + radii["scalp"] * unit(v) for k, v in aim.items()},
        kind="sphere",
        radii_mm=radii,
        center_mm=center,
        seed=int(seed),
        layers=tuple(layers),
        settings={},
    )

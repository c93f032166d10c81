"""The shapes of an invented head, in its own frame (right, front, up; origin amid the cranium).

Sizes follow published norms where there are some: head length, breadth and height over the
tragion from the open data of the US Army survey of 2012 (Gordon CC et al. 2014, report
NATICK/TR-15/007; mean and SD computed from the public tables), skull thickness by region from
Li H et al. 2007 (Int J Vehicle Safety; frontal, parietal, occipital) and a CT series of 100 adults
(temporal 4.7 mm), scalp thickness 6.9 +- 3.6 mm (Strangman G et al. 2014, NeuroImage 85:136). The
rest is drawn by eye from the usual anatomy, no source.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from synthetic_heads.folding import fold
from synthetic_heads.shapes import Field, Grid, as_distance, band_noise, cut, finer, join, overlap

# mean, SD, least, greatest (5th and 95th percentile, a little wider): mm, men and women
_NORMS = {
    "breadth": ((154.3, 5.5, 144.0, 165.0), (147.8, 5.2, 138.0, 158.0)),
    "length": ((199.5, 7.0, 186.0, 213.0), (189.8, 7.4, 176.0, 204.0)),
    "tragion_height": ((131.1, 6.2, 119.0, 143.0), (126.5, 6.5, 114.0, 139.0)),
    "pupils": ((64.0, 3.4, 57.0, 71.0), (61.7, 3.6, 55.0, 69.0)),
}


@dataclass(frozen=True, kw_only=True)
class Sizes:
    """Drawn sizes of one shaped head, mm."""

    man: bool
    breadth: float
    length: float
    tragion_height: float
    pupils: float
    skull: dict[str, float]
    scalp: dict[str, float]
    csf: float
    cortex: float
    fat: float

    @property
    def top(self) -> float:
        """Height of the vertex over the origin."""
        return self.tragion_height - 36.0

    @property
    def nasion(self) -> tuple[float, float, float]:
        """About where the root of the nose is."""
        return (0.0, self.length / 2 - 5.0, -31.0)


def draw_sizes(rng: np.random.Generator) -> Sizes:
    """Draw the sizes of a head from the norms."""
    man = bool(rng.random() < 0.5)
    drawn = {}
    common = rng.normal()  # heads are large or small as a whole (length-breadth r = .18)
    for name, sexes in _NORMS.items():
        mean, sd, least, most = sexes[0 if man else 1]
        value = mean + sd * (0.42 * common + np.sqrt(1 - 0.42**2) * rng.normal())
        drawn[name] = float(np.clip(value, least, most))
    skull_means = {
        "frontal": 6.6 if man else 7.5,
        "parietal": 5.6,
        "occipital": 7.6 if man else 8.0,
        "temporal": 4.4,
        "base": 6.0,
    }
    scale = np.clip(rng.normal(1.0, 0.12), 0.75, 1.3)
    skull = {
        name: float(max(2.6, mean * scale * np.clip(rng.normal(1, 0.08), 0.8, 1.2)))
        for name, mean in skull_means.items()
    }
    scalp_means = {
        "frontal": 5.5, "parietal": 6.5, "occipital": 7.5, "temporal": 10.0, "base": 9.0
    }  # fmt: skip
    scale = np.clip(rng.normal(1.0, 0.12), 0.75, 1.3)
    scalp = {
        name: float(max(4.2, mean * scale * np.clip(rng.normal(1, 0.06), 0.85, 1.15)))
        for name, mean in scalp_means.items()
    }
    return Sizes(
        man=man,
        **drawn,
        skull=skull,
        scalp=scalp,
        csf=float(np.clip(rng.normal(2.4, 0.4), 1.6, 3.6)),
        cortex=float(np.clip(rng.normal(2.6, 0.12), 2.3, 2.9)),
        fat=float(np.clip(rng.normal(4.5, 1.0), 2.8, 7.0)),
    )


def _regions(grid: Grid) -> dict[str, Field]:
    """Soft shares of the regions of the vault by direction; they add up to one."""
    size = np.sqrt(grid.x**2 + grid.y**2 + grid.z**2) + np.float32(1e-3)
    x, y, z = np.abs(grid.x) / size, grid.y / size, grid.z / size
    raw = {
        "frontal": np.exp(6.0 * (0.85 * y + 0.35 * z)),
        "occipital": np.exp(6.0 * (-0.95 * y + 0.05 * z)),
        "parietal": np.exp(6.0 * (0.85 * z + 0.25 * x)),
        "temporal": np.exp(6.0 * (1.0 * x - 0.15 * z)),
        "base": np.exp(6.0 * (-1.05 * z)),
    }
    total = np.float32(1e-9) + sum(raw.values())
    return {name: (value / total).astype(np.float32) for name, value in raw.items()}


def _by_region(regions: dict[str, Field], values: dict[str, float]) -> Field:
    blended: Field = sum(
        (regions[name] * np.float32(value) for name, value in values.items()),
        start=np.zeros(1, np.float32),
    )
    return blended


def cavity(grid: Grid, sizes: Sizes, step_mm: float) -> Field:
    """The space inside the skull, closed: cerebral vault, temporal and cerebellar fossae."""
    half_x = sizes.breadth / 2 - sizes.scalp["temporal"] + 1.5 - sizes.skull["temporal"]
    half_y = sizes.length / 2 - (
        sizes.scalp["frontal"] + sizes.skull["frontal"]
        + sizes.scalp["occipital"] + sizes.skull["occipital"]
    ) / 2  # fmt: skip
    half_z = sizes.top - sizes.scalp["parietal"] - sizes.skull["parietal"]
    # egg shaped from above: widest behind the middle, narrower in front
    behind = (grid.y + 22.0) / 100.0
    narrowing = 1.0 - 0.10 * behind - 0.09 * behind**2
    x = np.abs(grid.x) / (np.float32(half_x) * narrowing)
    y = np.abs(grid.y) / np.float32(half_y)
    z = np.abs(grid.z) / np.float32(half_z)
    power = np.float32(2.25)
    vault = (x**power + y**power + z**power) ** (1 / power) - 1
    vault *= np.float32(half_x)
    floor = -(grid.z + 21.0 + 0.10 * np.clip(-grid.y, 0, 60))
    upper = overlap(vault.astype(np.float32), floor.astype(np.float32), 18.0)
    temporal = grid.pair((0.57 * half_x, 8.0, -23.0), (0.43 * half_x, 41.0, 25.0))
    fossa = grid.ellipsoid((0, -47.0, -28.0), (0.80 * half_x, 0.42 * half_y + 4, 36.0))
    level = join(join(upper, temporal, 9.0), fossa, 16.0)
    return as_distance(level, step_mm)


@dataclass(frozen=True, kw_only=True, eq=False)
class Outside:
    """Everything outside the brain, as levels on the coarse grid."""

    cavity: Field
    outer_skull: Field
    scalp: Field
    skull_thickness: Field
    regions: dict[str, Field]
    shapes: dict[str, Field]


def build_outside(grid: Grid, sizes: Sizes, rng: np.random.Generator, step_mm: float) -> Outside:
    """Skull, scalp, face, ears, neck."""
    inside = cavity(grid, sizes, step_mm)
    regions = _regions(grid)
    uneven = band_noise(rng, inside.shape, step_mm, 70.0, 0.3)
    thick = _by_region(regions, sizes.skull) * (1 + 0.07 * uneven)
    inion_z = -34.0
    back = -sizes.length / 2
    bump = np.exp(
        -((grid.x / 9) ** 2) - ((grid.z - inion_z) / 9) ** 2 - ((grid.y - back - 9) / 25) ** 2
    )
    brow = np.exp(
        -((grid.x / 22) ** 2)
        - ((grid.z - sizes.nasion[2] - 13) / 10) ** 2
        - ((grid.y - sizes.nasion[1] + 6) / 22) ** 2
    )
    thick = np.maximum(thick + 3.5 * bump + 4.0 * brow, 2.4).astype(np.float32)
    outer = inside - thick
    skin_depth = _by_region(regions, sizes.scalp) * (1 + 0.05 * band_noise(
        rng, inside.shape, step_mm, 80.0, 0.3
    ))  # fmt: skip
    vault = outer - np.maximum(skin_depth, 3.8)
    scalp, shapes = _skin_of_face(grid, sizes, as_distance(vault, step_mm))
    scalp = as_distance(scalp, step_mm, 30.0)
    shapes.update(_bones(grid, sizes, inside, outer, thick, scalp))
    shapes.update(_soft(grid, sizes, outer, scalp, uneven))
    return Outside(
        cavity=inside,
        outer_skull=outer.astype(np.float32),
        scalp=scalp,
        skull_thickness=thick,
        regions=regions,
        shapes=shapes,
    )


def _skin_of_face(grid: Grid, sizes: Sizes, vault: Field) -> tuple[Field, dict[str, Field]]:
    """Join face, nose, chin, neck and ears to the vault."""
    _, nose_y, nose_z = sizes.nasion
    wide = sizes.breadth / 154.0
    eye_x = sizes.pupils / 2
    face = grid.ellipsoid((0, nose_y - 62, nose_z - 22), (70 * wide, 56, 60))
    jaw = grid.ellipsoid((0, nose_y - 52, nose_z - 74), (55 * wide, 46, 46))
    chin = grid.ellipsoid((0, nose_y - 20, nose_z - 106), (21, 17, 17))
    cheek = grid.pair((43 * wide, nose_y - 33, nose_z - 32), (21, 19, 18))
    head = join(vault, join(face, jaw, 22.0), 20.0)
    head = join(join(head, chin, 18.0), cheek, 16.0)
    neck = grid.rod((0, -18, -62), (0, -34, -240), 58.0 * wide, 54.0 * wide)
    head = join(head, neck, 30.0)
    forehead = grid.ellipsoid((0, nose_y - 36, nose_z + 2), (56 * wide, 35, 30))
    head = join(head, forehead, 16.0)
    # eyes: a shallow hollow under the brow with the closed lid in it
    hollow = grid.pair((eye_x, nose_y - 4, nose_z - 5), (16, 10, 10))
    head = cut(head, hollow, 10.0)
    lid = grid.pair((eye_x, nose_y - 22.5, nose_z - 6), (14.0, 13.6, 13.0))
    head = join(head, lid, 6.0)
    bridge = grid.rod((0, nose_y - 5, nose_z - 4), (0, nose_y + 15, nose_z - 46), 7.0, 10.0)
    wings = grid.pair((11, nose_y + 3, nose_z - 49), (7.5, 10, 7))
    head = join(join(head, bridge, 7.0), wings, 5.0)
    root = grid.ellipsoid((0, nose_y + 8.5, nose_z + 1), (18, 7, 8))
    head = cut(head, root, 6.0)
    lips = grid.ellipsoid((0, nose_y - 8, nose_z - 72), (22, 8, 8))
    head = join(head, lips, 6.0)
    nostril = grid.pair((6, nose_y + 5, nose_z - 55), (3.2, 5.0, 6.0))
    head = cut(head, nostril, 1.5)
    ear, canal = _ears(grid, sizes)
    head = join(head, ear, 3.0)
    return head, {"ear_canal": canal}


def _ears(grid: Grid, sizes: Sizes) -> tuple[Field, Field]:
    """The two pinnae and their canals."""
    ear_y, ear_z = -8.0, -36.0  # tragion
    base_x = sizes.breadth / 2 - 4.0
    # frame of the right pinna: along (backwards and out), up, across
    lean = np.radians(28.0)
    x = np.abs(grid.x) - np.float32(base_x)
    y = grid.y - np.float32(ear_y)
    z = grid.z - np.float32(ear_z)
    along = -y * np.cos(lean) + x * np.sin(lean)
    across = x * np.cos(lean) + y * np.sin(lean)
    up = z + 0.18 * along
    plate = Grid(along, up, across)
    pinna = plate.ellipsoid((13.0, -2.0, 4.0), (18.0, 31.0, 3.4))
    ring = np.sqrt(((along - 13) / 16.5) ** 2 + ((up + 1) / 29.0) ** 2)
    helix = np.sqrt(((ring - 1) * 20.0) ** 2 + (across - 6.0) ** 2) - 2.6
    helix = np.where(along > 1.0, helix, helix + (1.0 - along)).astype(np.float32)
    pinna = join(pinna, helix, 2.0)
    concha = plate.ellipsoid((9.0, -8.0, 8.0), (8.0, 11.0, 6.0))
    pinna = cut(pinna, concha, 2.0)
    lobe = plate.ellipsoid((9.0, -30.0, 4.0), (8.0, 9.0, 3.4))
    tragus = plate.ellipsoid((0.5, -8.0, 5.5), (3.0, 6.0, 3.0))
    pinna = join(join(pinna, lobe, 4.0), tragus, 2.0)
    canal = grid.rod(
        (base_x + 2, ear_y - 7, ear_z - 8), (base_x - 26, ear_y - 2, ear_z - 6), 3.2, mirror=True
    )
    return pinna, canal


def _canal(grid: Grid, radius: float, start_z: float = -50.0) -> Field:
    """The spinal canal from the great foramen downwards."""
    return grid.chain(
        [(0, -24, start_z), (0, -28, -72), (0, -36, -120), (0, -34, -250)],
        [radius + 1.5, radius, radius, radius],
    )


def _bones(
    grid: Grid, sizes: Sizes, inside: Field, outer: Field, thick: Field, scalp: Field
) -> dict[str, Field]:
    """Bones of face and neck, marrow, air-filled spaces."""
    _, ny, nz = sizes.nasion
    wide = sizes.breadth / 154.0
    deep = scalp + 4.0  # bones of the face stay under the skin
    mandible_points = [
        (6, ny - 12, nz - 104), (30 * wide, ny - 34, nz - 92), (47 * wide, ny - 72, nz - 74),
        (50 * wide, ny - 84, nz - 30),
    ]  # fmt: skip
    mandible = grid.chain(mandible_points, [8.5, 8.5, 7.0, 4.5], mirror=True)
    mandible = np.maximum(mandible, np.abs(np.abs(grid.x) - 30) - 40)
    arch_points = [
        (40 * wide, ny - 26, nz - 28), (59 * wide, ny - 44, nz - 22), (65 * wide, ny - 74, nz - 18),
        (63 * wide, ny - 92, nz - 14),
    ]  # fmt: skip
    arch = grid.chain(arch_points, [8.0, 4.5, 3.2, 5.0], mirror=True)
    maxilla = grid.ellipsoid((0, ny - 30, nz - 48), (33 * wide, 24, 24))
    orbit_rim = grid.chain(
        [(6, ny - 6, nz - 4), (17, ny - 7, nz - 22), (36, ny - 13, nz - 24),
         (47 * wide, ny - 24, nz - 6)], [3.5, 3.5, 4.0, 4.5], mirror=True,
    )  # fmt: skip
    nasal = grid.rod((0, ny - 6, nz + 4), (0, ny + 4, nz - 22), 4.5, 3.0)
    sphenoid = grid.ellipsoid((0, 18, -38), (24, 22, 14))
    mastoid = grid.pair((0.37 * sizes.breadth, -24, -52), (11, 14, 19))
    petrous = grid.rod((0.40 * sizes.breadth, -14, -46), (14, 4, -50), 9.0, 6.0, mirror=True)
    face = join(join(maxilla, orbit_rim, 4.0), join(nasal, sphenoid, 3.0), 4.0)
    face = join(face, join(mastoid, petrous, 4.0), 3.0)
    face = np.minimum(np.maximum(face, deep), np.maximum(np.minimum(mandible, arch), deep))
    # vertebrae: a body in front of the canal, cut by discs, and an arch round it
    canal = _canal(grid, 8.0)
    line_y = np.interp(grid.z, [-250, -120, -72], [-34, -36, -28]).astype(np.float32)
    body = np.sqrt(grid.x**2 + ((grid.y - line_y - 18) * 1.15) ** 2) - 10.0
    disc = np.abs(np.mod(grid.z + 84.0, 19.0) - 9.5) - 6.8
    body = np.maximum(np.maximum(body, disc), grid.z + 74.0).astype(np.float32)
    ring = np.maximum(np.maximum(canal - 5.0, disc), grid.z + 68.0).astype(np.float32)
    spine = grid.rod((0, -48, -90), (0, -66, -98), 4.0)
    for low in (109.0, 128.0, 147.0):
        spine = np.minimum(spine, grid.rod((0, -50, -low), (0, -66, -low - 8), 3.5))
    neck = np.maximum(np.minimum(np.minimum(body, ring), spine), scalp + 6.0)
    table = np.clip(0.28 * thick, 1.3, 2.4)
    diploe = np.abs(inside - 0.5 * thick) - (0.5 * thick - table)
    base_only = np.minimum(inside, outer + 1.5)
    marrow = np.maximum(diploe, -(grid.z + 30.0 - 0.25 * grid.y) / 1.1)
    marrow = np.minimum(marrow, mandible + 3.2)
    marrow = np.minimum(marrow, body + 1.6)
    marrow = np.minimum(marrow, grid.ellipsoid((0, 6, -48), (8, 7, 13)))  # clivus
    marrow = np.minimum(marrow, np.maximum(arch + 2.8, deep + 2.0))
    # air
    slot = np.abs(np.abs(grid.x) - 6.5) - 4.6
    conchae = 1.6 * np.sin((grid.z - nz) * (2 * np.pi / 13.0))
    nose = np.maximum(slot + conchae, grid.ellipsoid((0, ny - 34, nz - 34), (15, 36, 22)))
    sinus = grid.pair((25 * wide, ny - 32, nz - 38), (10.5, 14, 13))
    frontal = np.maximum(
        np.abs(inside - 0.5 * thick) - (0.5 * thick - 2.6),
        grid.ellipsoid((0, ny - 4, nz + 16), (19, 16, 13)),
    )
    sphenoid_air = np.maximum(grid.pair((8, 20, -37), (6.5, 11, 8.5)), -np.abs(grid.x) + 0.8)
    throat = grid.chain(
        [(0, ny - 66, nz - 42), (0, ny - 82, nz - 62), (0, ny - 84, nz - 110), (0, ny - 78, -250)],
        [9.0, 8.0, 7.0, 8.5],
    )
    mouth = grid.ellipsoid((0, ny - 36, nz - 70), (20, 30, 1.6))
    cells = np.maximum(
        mastoid + 3.0,
        np.sin(grid.x * 1.3) + np.sin(grid.y * 1.1) + np.sin(grid.z * 1.2) - 0.2,
    )
    air = np.minimum(np.minimum(nose, sinus), np.minimum(sphenoid_air, throat))
    air = np.minimum(np.minimum(air, mouth), np.minimum(frontal, cells))
    air = np.maximum(air, -outer + 1.5)  # never in the brain case
    air = np.minimum(air, frontal)
    return {
        "face_bone": np.maximum(face, -base_only).astype(np.float32),
        "neck_bone": neck.astype(np.float32),
        "marrow": np.maximum(marrow, scalp + 5.0).astype(np.float32),
        "air": np.maximum(air, scalp + 2.5).astype(np.float32),
        "canal": canal,
    }


def _soft(grid: Grid, sizes: Sizes, outer: Field, scalp: Field, uneven: Field) -> dict[str, Field]:
    """Fat under the skin, muscles, orbits, eyes."""
    _, ny, nz = sizes.nasion
    wide = sizes.breadth / 154.0
    eye_x = sizes.pupils / 2
    skin = 2.0 + 0.25 * np.clip(uneven, -2, 2)
    fat = scalp + skin
    below = grid.z + 34.0 + 0.35 * np.clip(-grid.y - 10, -40, 70)  # under the vault
    fat_depth = sizes.fat + 1.2 * uneven
    deep = np.maximum(scalp + skin + np.maximum(fat_depth, 1.5), below)
    temple = grid.pair((0.43 * sizes.breadth, 18, -16), (19, 40, 46))
    temple = np.maximum(np.maximum(temple, scalp + skin + 2.2), -outer - 0.5)
    galea = np.maximum(outer - 1.2, scalp + skin + 1.5)
    muscle = np.minimum(np.minimum(deep, temple), galea)
    # fat between muscles: cheek, behind the jaw, nape; and the orbits
    pad = grid.pair((40 * wide, ny - 44, nz - 52), (11, 17, 20))
    nape = np.abs(np.sqrt(grid.x**2 + (grid.y + 30) ** 2) - 44.0) - 1.3
    nape = np.maximum(nape, grid.z + 62.0)
    side = grid.rod((34, 12, -78), (30, 6, -250), 6.0, mirror=True)
    pads = np.maximum(np.minimum(np.minimum(pad, nape), side), scalp + skin + 1.0)
    orbit = grid.pair((eye_x - 3, ny - 34, nz - 6), (16.5, 25, 15.5))
    orbit = np.maximum(np.maximum(orbit, scalp + 2.0), -outer + 1.0)
    eye = grid.pair((eye_x, ny - 22.5, nz - 6), (11.8, 11.8, 11.8))
    nerve = grid.rod((eye_x, ny - 28, nz - 6), (9, ny - 66, nz - 2), 2.0, mirror=True)
    for shift in ((9, 0), (-9, 0), (0, 9), (0, -9)):
        nerve = np.minimum(
            nerve,
            grid.rod(
                (eye_x + shift[0], ny - 22, nz - 6 + shift[1]), (13, ny - 60, nz - 3), 1.7,
                mirror=True,
            ),
        )  # fmt: skip
    nerve = np.maximum(nerve, orbit)
    return {
        "fat": fat.astype(np.float32),
        "muscle": muscle.astype(np.float32),
        "pads": pads.astype(np.float32),
        "orbit": orbit.astype(np.float32),
        "eye": eye,
        "eye_muscle": nerve.astype(np.float32),
    }


@dataclass(frozen=True, kw_only=True, eq=False)
class Brain:
    """Levels of the brain's parts on the fine grid of the brain's box."""

    pial: NDArray[np.float32]
    white: NDArray[np.float32]
    nuclei: NDArray[np.float32]
    ventricles: NDArray[np.float32]
    cerebellum: NDArray[np.float32]
    cerebellar_white: NDArray[np.float32]
    brain_hull: NDArray[np.float32]


def build_brain(
    grid: Grid,
    inside: Field,
    stem: Field,
    sizes: Sizes,
    rng: np.random.Generator,
    step_mm: float,
) -> Brain:
    """Folded cerebrum, ventricles, nuclei, cerebellum, brain stem (coarse in, fine out)."""
    uneven = band_noise(rng, inside.shape, step_mm, 60.0, 0.3)
    gap = sizes.csf * (1 + 0.15 * uneven) + 0.7 * np.clip(grid.z / 60.0, 0, 1.3)
    hull = (inside + np.maximum(gap, 1.2)).astype(np.float32)
    # the tent between cerebrum and cerebellum
    ridge = np.sqrt(((grid.y + 30.0) / 52.0) ** 2 + (grid.x / 58.0) ** 2)
    tent = (grid.z - (1.0 - 27.0 * ridge)).astype(np.float32)  # above: positive
    behind = grid.y + 20.0 + 0.10 * np.abs(grid.x)
    below_tent = np.maximum(tent, behind)
    cistern = grid.ellipsoid((0, -6, -20), (17, 24, 15))
    cerebrum = cut(hull, below_tent - 1.2, 1.0)
    cerebrum = cut(cerebrum, cistern, 4.0)
    # the fissure between the hemispheres, bounded below by the callosum
    wander = np.sin(grid.y / 40.0 + rng.uniform(0, 6)) * np.clip((grid.z + 20) / 90, 0, 1)
    body = Grid(np.zeros(1, np.float32), grid.y, grid.z).ellipsoid((0, -6, 4), (1e6, 40, 23))
    split = np.sqrt((grid.x - wander) ** 2 + np.minimum(body, 0) ** 2) - 0.7
    walls = as_distance(np.maximum(cerebrum, -split).astype(np.float32), step_mm, 45.0)
    # the fissure over the temporal lobe
    slant = grid.z - (-13.0 + 0.30 * (34.0 - grid.y))
    beyond = np.maximum(np.maximum(grid.y - 36.0, -46.0 - grid.y), 30.0 - np.abs(grid.x))
    # thin sheets have to be worked out on the fine grid
    fine_split = np.sqrt(finer(grid.x - wander) ** 2 + np.minimum(finer(body), 0) ** 2) - 0.7
    fine_sylvian = np.sqrt((0.95 * finer(slant)) ** 2 + np.maximum(finer(beyond), 0) ** 2) - 0.9
    cerebrum = as_distance(cerebrum, step_mm, 45.0)
    pial = fold(walls, step_mm, rng, right=grid.x > wander)
    pial = np.maximum(np.maximum(pial, finer(cerebrum)), -np.minimum(fine_split, fine_sylvian))
    white = pial + np.float32(sizes.cortex)

    big = float(np.clip(rng.normal(1.0, 0.15), 0.75, 1.35))  # ventricles vary
    horns = grid.chain(
        [(7, 27, 7), (9, 8, 17), (13, -18, 18), (21, -38, 8), (20, -54, 6)],
        [4.2 * big, 5.0 * big, 5.6 * big, 6.6 * big, 3.0 * big],
        mirror=True,
    )
    horns = np.minimum(
        horns,
        grid.chain(
            [(21, -38, 8), (31, -22, -12), (32, 0, -19)],
            [4.4 * big, 2.6 * big, 2.2 * big],
            mirror=True,
        ),
    )
    third = grid.ellipsoid((0, -6, 0), (1.9 * big, 13, 9))
    ventricles = np.minimum(horns, third)
    thalamus = grid.pair((10.5, -14, 6), (7.8, 14, 8.5))
    putamen = grid.pair((26, 3, 2), (5.5, 17, 11))
    caudate = grid.pair((13.5, 18, 8), (4.8, 10, 8))
    nuclei = np.minimum(np.minimum(thalamus, putamen), caudate)

    fourth = grid.ellipsoid((0, -30, -34), (6, 5, 10))
    small = np.maximum(np.maximum(hull, tent + 1.4), grid.y + 24.0 + 0.12 * np.abs(grid.x))
    vermis = grid.ellipsoid((0, -46, -36), (12, 20, 22))
    notch = np.maximum(np.abs(grid.x) - 2.0, -(grid.y + 66.0) - 8.0)
    small = np.maximum(small, -np.maximum(notch, -vermis))
    small = np.maximum(small, -(stem - 1.0))
    small = np.maximum(small, -(fourth - 0.5)).astype(np.float32)
    small = as_distance(small, step_mm, 30.0)
    leaves = np.sqrt((grid.y + 26.0) ** 2 * 0.5 + (grid.z + 22.0) ** 2 + (0.25 * grid.x) ** 2)
    fine_small = finer(small)
    leaf = np.abs(np.sin(finer(leaves.astype(np.float32)) * np.float32(np.pi / 4.6))) * 1.46
    leaf = np.sqrt(leaf**2 + np.maximum(-fine_small - 7.0, 0) ** 2) - 0.28
    cerebellum = np.maximum(fine_small, -leaf).astype(np.float32)
    core = grid.pair((19, -46, -34), (16, 13, 8))
    core = np.minimum(core, grid.rod((19, -44, -34), (8, -24, -28), 6.0, mirror=True))
    core = np.maximum(core, small + 3.0)
    return Brain(
        pial=pial.astype(np.float32),
        white=white.astype(np.float32),
        nuclei=finer(nuclei),
        ventricles=finer(np.minimum(ventricles, fourth)),
        cerebellum=cerebellum,
        cerebellar_white=finer(core.astype(np.float32)),
        brain_hull=finer(cerebrum),
    )


def brain_stem(grid: Grid) -> Field:
    """Midbrain, pons, medulla, and the cord down through the base of the skull."""
    stem = grid.chain(
        [(0, -13, -3), (0, -15, -15), (0, -12, -28), (0, -21, -46), (0, -27, -72), (0, -36, -120),
         (0, -34, -250)],
        [11.0, 12.0, 13.0, 7.5, 5.6, 5.2, 5.2],
    )  # fmt: skip
    return join(stem, grid.ellipsoid((0, -9, -29), (17, 10, 13)), 5.0)

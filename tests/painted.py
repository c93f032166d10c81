"""Capsules painted on real heads: the nearest thing to a real cap that is to be had.

Every figure that rests on these volumes says "painted capsules" beside it. The scalp is found
here by test code alone (threshold and marching cubes), not by the tool, and the landmarks were
read off the images by eye.

Example::

    intensity, scanner_from_voxel, truth = painted_head("s1", NAMES_61, 0, **CLEAN)
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import nibabel as nib
import numpy as np
from numpy.typing import NDArray
from scipy import ndimage as ndi

from synthetic_heads.cap import make_cap
from synthetic_heads.meshes import Skin, largest_part, level_surface
from synthetic_heads.scan import paint_capsules
from synthetic_heads.tape import CAPS, NAMES_8, NAMES_19, NAMES_31, NAMES_61, NAMES_128
from tests import real_heads

__all__ = [
    "CAPS",
    "CLEAN",
    "HARD",
    "LANDMARKS_SCANNER_MM",
    "NAMES_8",
    "NAMES_19",
    "NAMES_31",
    "NAMES_61",
    "NAMES_128",
    "RealHead",
    "painted_head",
    "real_head",
]

Array = NDArray[np.float64]

# Read off the images by eye (sagittal and axial slices at 5 mm grid lines, and the rendered
# scalp): NAS the deepest point of the nasal root, LPA and RPA the skin just in front of the
# tragus at its upper edge, INI the skin behind the kink of the occipital bone. Good to a few mm.
# Scanner mm, i.e. world mm of the file's own affine.
LANDMARKS_SCANNER_MM: dict[str, dict[str, tuple[float, float, float]]] = {
    "s1": {
        "NAS": (3.0, 120.0, -21.0),
        "LPA": (-74.5, 26.0, -48.0),
        "RPA": (76.0, 24.0, -48.0),
        "INI": (2.0, -68.5, -45.0),
    },
    "ch2": {
        "NAS": (1.0, 85.0, -36.0),
        "LPA": (-85.5, -25.0, -46.0),
        "RPA": (85.5, -26.0, -46.0),
        "INI": (1.0, -118.5, -24.0),
    },
    "low2mm": {
        "NAS": (0.0, 83.0, -42.0),
        "LPA": (-77.5, -20.0, -48.0),
        "RPA": (79.0, -22.0, -48.0),
        "INI": (0.0, -116.0, -30.0),
    },
}

CLEAN: dict[str, Any] = {"n_off": 2, "n_extra": 3, "jitter_mm": 2.5}
"""The clean cap: 2 capsules off, 3 extra blobs, 2.5 mm jitter (SD per tangential axis)."""

HARD: dict[str, Any] = {
    "turn_deg": 6.0,
    "exact": True,
    "slide_mm": 5.0,
    "stretch": 0.03,
    "jitter_mm": 4.0,
    "n_off": 6,
    "n_extra": 8,
    "brightness": 0.7,
    "extra_noise": 0.03,
}
"""The hard cap: turned 6 degrees about each axis, slid, 4 mm jitter, 6 off, 8 extra, dim, noisy."""


@dataclass(frozen=True, eq=False, kw_only=True)
class RealHead:
    """A real T1 volume with its scalp and landmarks, found by test code."""

    intensity: NDArray[np.float32]
    scanner_from_voxel: Array
    vertices_mm: Array
    faces: NDArray[np.int32]
    landmarks_mm: dict[str, Array]
    fat_intensity: float
    noise_sd: float


def _scalp(image: NDArray[np.float32], affine: Array) -> tuple[Array, NDArray[np.int32]]:
    """Outer surface of a head: threshold, largest part, holes filled, marching cubes."""
    voxel = float(abs(np.linalg.det(affine[:3, :3])) ** (1 / 3))
    smooth = ndi.gaussian_filter(image, 0.6 / voxel)
    bright = np.percentile(smooth[smooth > np.percentile(smooth, 60)], 80)
    threshold = 0.3 * bright
    smooth = np.pad(smooth, 1, mode="constant")  # closes the head at the edges of the volume
    head = smooth > threshold
    parts, _ = ndi.label(head)
    head = parts == np.bincount(parts.ravel())[1:].argmax() + 1
    # holes are filled slice by slice on the half grid, it only has to reach the inside
    coarse = head[::2, ::2, ::2]
    filled = coarse.copy()
    for axis in range(3):
        for index in range(coarse.shape[axis]):
            cut = [slice(None)] * 3
            cut[axis] = index
            filled[tuple(cut)] |= ndi.binary_fill_holes(coarse[tuple(cut)])
    deep = ndi.binary_erosion(filled & ~coarse | coarse, iterations=2)
    for axis in range(3):
        deep = np.repeat(deep, 2, axis=axis)
    head |= deep[tuple(slice(n) for n in head.shape)]
    inside = ndi.binary_erosion(head)
    level = np.clip(1 - smooth / threshold, -1, 1).astype(np.float32)
    level[~ndi.binary_dilation(head)] = 1
    level[inside] = -1
    level[head & (level > -0.05)] = -0.05
    vertices, faces = level_surface(level, 1.0, -np.ones(3))
    vertices, faces = largest_part(vertices, faces)
    placed = vertices @ affine[:3, :3].T + affine[:3, 3]
    if np.linalg.det(affine[:3, :3]) < 0:
        faces = np.ascontiguousarray(faces[:, ::-1])
    return placed, faces


@lru_cache(maxsize=3)
def real_head(which: str = "s1", *, pad_mm: float = 16.0) -> RealHead:
    """A real head, its scalp and its landmarks.

    The volume is padded with background on all sides but the bottom where the head comes nearer
    than ``pad_mm`` to the edge of the volume, so that capsules have room.
    """
    path = {"s1": real_heads.s1, "ch2": real_heads.ch2, "low2mm": real_heads.low2mm}[which]()
    stored = nib.load(path)
    image = np.asarray(stored.dataobj, dtype=np.float32)
    affine = np.asarray(stored.affine, dtype=np.float64)
    sizes = np.sqrt((affine[:3, :3] ** 2).sum(axis=0))
    bottom = {("S", 2): 0, ("I", 2): 1}
    codes = nib.aff2axcodes(affine)
    background = image[image <= np.percentile(image, 20)]
    noise = float(max(background.std(), 0.0))
    if which != "s1":  # S1 has room on all sides
        room = np.ceil(pad_mm / sizes).astype(int)
        width = [[n, n] for n in room]
        for axis, code in enumerate(codes):
            if code in "SI":
                width[axis][bottom[(code, 2)]] = 0
        level = float(np.median(background))
        mask = np.pad(np.ones(image.shape, bool), width)
        rng = np.random.default_rng(20)
        padded = np.abs(rng.normal(level, noise, mask.shape)).astype(np.float32)
        padded[mask] = image.ravel()
        image = padded
        affine = affine.copy()
        affine[:3, 3] -= affine[:3, :3] @ np.array([side[0] for side in width], dtype=np.float64)
    vertices, faces = _scalp(image, affine)
    skin = Skin(vertices, faces)
    marks = {
        name: skin.closest(np.array([point]))[0]
        for name, point in LANDMARKS_SCANNER_MM[which].items()
    }
    # scalp fat: the brightest value under the skin of the upper head
    upper = vertices[:, 2] > max(point[2] for point in marks.values()) + 40.0
    chosen = np.flatnonzero(upper)[::20]
    depth = np.arange(1.0, 9.5, 0.5)
    along = vertices[chosen, None] - depth[:, None] * skin.normals[chosen, None]
    voxels = (along - affine[:3, 3]) @ np.linalg.inv(affine[:3, :3]).T
    values = ndi.map_coordinates(image, np.moveaxis(voxels, -1, 0), order=1, mode="nearest")
    return RealHead(
        intensity=image,
        scanner_from_voxel=affine,
        vertices_mm=vertices,
        faces=faces,
        landmarks_mm=marks,
        fat_intensity=float(np.median(values.max(axis=1))),
        noise_sd=noise,
    )


def painted_head(
    which: str = "s1",
    names: Sequence[str] = NAMES_61,
    seed: int = 0,
    *,
    brightness: float = 1.05,
    extra_noise: float = 0.0,
    shift_mm: Sequence[float] = (0.0, 0.0, 0.0),
    housing_mm: float = 1.0,
    darken: float = 0.3,
    **cap_settings: Any,
) -> tuple[NDArray[np.float32], Array, dict[str, Any]]:
    """A real head with a painted cap.

    Parameters
    ----------
    which : str
        ``s1``, ``ch2`` (1 mm) or ``low2mm``.
    names : sequence of str
        Electrodes with a channel.
    seed : int
        Seed of the cap and of the noise.
    brightness : float
        Oil over scalp fat of this head.
    extra_noise : float
        Rician noise added to the whole volume, as a fraction of the fat's intensity.
    shift_mm : (3,) sequence of float
        Chemical shift of the painted oil, scanner mm (the head's own fat is what it is).
    housing_mm, darken : float
        See ``synthetic_heads.scan.paint_capsules``.
    **cap_settings
        Passed on to ``synthetic_heads.cap.make_cap`` (``slide_mm``, ``turn_deg``, ``stretch``,
        ``exact``, ``jitter_mm``, ``n_off``, ``off``, ``n_extra``, ``extra_where``, ``also``,
        ``side_marker``, ``capsule_mm``, ``gap_mm``, ``shape`` ...).

    Returns
    -------
    intensity : (I, J, K) ndarray of float32
        The volume in its stored axis order (padded where the head has no room).
    scanner_from_voxel : (4, 4) ndarray
        Its affine, world mm of the file.
    truth : dict
        ``names`` (all with capsules, channels first), ``also``, ``contacts_mm`` (E, 3),
        ``normals`` (E, 3), ``present`` (E,), ``capsules_mm`` (E, 3; NaN where off), ``extras_mm``
        (M, 3), ``side_mm`` (0 or 1, 3), ``landmarks_mm`` (dict), ``vertices_mm``, ``faces``
        (the scalp), ``fat_intensity``, ``cap`` (the ``Cap``).
    """
    head = real_head(which)
    cap = make_cap(head.vertices_mm, head.faces, head.landmarks_mm, names, seed, **cap_settings)
    image = paint_capsules(
        head.intensity,
        head.scanner_from_voxel,
        cap,
        brightness=brightness,
        fat_intensity=head.fat_intensity,
        housing_mm=housing_mm,
        darken=darken,
        shift_mm=shift_mm,
        noise_sd=max(head.noise_sd, 0.015 * head.fat_intensity),
        seed=seed,
    )
    if extra_noise > 0:
        rng = np.random.default_rng([seed, 0x701])
        size = extra_noise * head.fat_intensity
        real = image + rng.normal(0, size, image.shape)
        image = np.hypot(real, rng.normal(0, size, image.shape)).astype(np.float32)
    centers = np.where(cap.present[:, None], cap.capsules.centers_mm, np.nan)
    truth: dict[str, Any] = {
        "names": cap.names,
        "also": cap.also,
        "contacts_mm": cap.contacts_mm,
        "normals": cap.normals,
        "present": cap.present,
        "capsules_mm": centers,
        "extras_mm": cap.extras.centers_mm,
        "side_mm": cap.side_capsule.centers_mm,
        "landmarks_mm": head.landmarks_mm,
        "vertices_mm": head.vertices_mm,
        "faces": head.faces,
        "fat_intensity": head.fat_intensity,
        "cap": cap,
    }
    return image, head.scanner_from_voxel, truth

"""A layered sphere with capsules on it as a T1 volume: the exact answers are known.

Every voxel takes the brightness of the exact shapes, blurred by the voxel along their normals,
so that sub-voxel places are right without supersampling.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation
from scipy.special import ndtr

from locator.volume import Volume, check_volume

Array = NDArray[np.float64]

RADIUS_MM = 78.0
CENTER_MM = np.array([3.2, -4.7, 6.1])

# Depth of each boundary under the skin (mm) and the brightness inside it, fat = 1; the ratios
# are those of an inversion-recovery T1 (skin and muscle a quarter of fat, white matter half).
LAYERS = ((0.0, 0.25), (2.0, 1.0), (6.0, 0.06), (12.0, 0.35), (16.0, 0.5))


@dataclass(frozen=True)
class Scene:
    """What is in the scan."""

    centers_mm: Array
    radii_mm: tuple[float, float] = (4.0, 3.0)
    brightness: float = 1.1
    shift_mm: tuple[float, float, float] = (0.0, 0.0, 0.0)
    shift_scalp: bool = True
    layers: tuple[tuple[float, float], ...] = LAYERS
    radius_mm: float = RADIUS_MM
    shade: float = 0.0


def directions(count: int, lowest: float = -0.15) -> Array:
    """Unit vectors spread evenly over the upper part of the sphere (golden spiral)."""
    height = 1 - (np.arange(count) + 0.5) / count * (1 - lowest)
    angle = np.arange(count) * np.pi * (3 - 5**0.5)
    around = np.sqrt(1 - height**2)
    return np.stack([around * np.cos(angle), around * np.sin(angle), height], axis=1)


def on_the_skin(count: int = 24, gap_mm: float = 1.5, half_mm: float = 3.0) -> Array:
    """Capsule centres over the sphere."""
    return CENTER_MM + directions(count) * (RADIUS_MM + gap_mm + half_mm)


def affine(
    voxel_mm: Sequence[float] = (1.5, 1.5, 1.5),
    turn_deg: Sequence[float] = (0.0, 0.0, 0.0),
    axes: str = "RAS",
) -> tuple[Array, tuple[int, int, int]]:
    """A grid round the sphere and its shape."""
    columns = {"R": (0, 1), "L": (0, -1), "A": (1, 1), "P": (1, -1), "S": (2, 1), "I": (2, -1)}
    turn = Rotation.from_euler("xyz", turn_deg, degrees=True).as_matrix()
    matrix = np.eye(4)
    for axis, letter in enumerate(axes):
        world, sign = columns[letter]
        matrix[:3, axis] = turn[:, world] * sign * voxel_mm[axis]
    shape = tuple(int(np.ceil(196 / size)) for size in voxel_mm)
    matrix[:3, 3] = CENTER_MM - matrix[:3, :3] @ ((np.array(shape) - 1) / 2 + 0.21)
    return matrix, (shape[0], shape[1], shape[2])


def scan(
    scene: Scene,
    scanner_from_voxel: Array,
    shape: tuple[int, int, int],
    *,
    noise: float = 0.0,
    seed: int = 0,
    scale: float = 500.0,
) -> NDArray[np.float32]:
    """The scene on a grid."""
    index = np.indices(shape, dtype=np.float32).reshape(3, -1)
    points = (scanner_from_voxel[:3, :3] @ index).T + scanner_from_voxel[:3, 3]
    points = points.astype(np.float64)
    offset = points - CENTER_MM
    shift = np.array(scene.shift_mm)
    image = _layers(offset, scanner_from_voxel, scene, fat=False)
    moved = offset - shift if scene.shift_scalp else offset
    image += _layers(moved, scanner_from_voxel, scene, fat=True)
    for center in scene.centers_mm:
        _capsule(image, points - shift, center, scanner_from_voxel, scene)
    if noise:
        rng = np.random.default_rng(seed)
        image = np.hypot(
            image + rng.normal(0, noise, image.shape), rng.normal(0, noise, image.shape)
        )
    return (scale * image).reshape(shape).astype(np.float32)


def volume(scene: Scene, noise: float = 0.0, seed: int = 0, **grid: object) -> Volume:
    """The scene as a checked volume."""
    matrix, shape = affine(**grid)  # type: ignore[arg-type]
    return check_volume(scan(scene, matrix, shape, noise=noise, seed=seed), matrix)


def _near(points: Array, center: Array, reach: float) -> NDArray[np.int64]:
    """Indices of the points in a box round a centre."""
    near = np.flatnonzero(np.abs(points[:, 0] - center[0]) < reach)
    for axis in (1, 2):
        near = near[np.abs(points[near, axis] - center[axis]) < reach]
    return near


def _blur(direction: Array, scanner_from_voxel: Array) -> Array:
    box = scanner_from_voxel[:3, :3].T / np.sqrt(12)
    return np.sqrt(((direction @ box.T) ** 2).sum(axis=1))


def _layers(offset: Array, scanner_from_voxel: Array, scene: Scene, *, fat: bool) -> Array:
    """Shells of one kind: bright ones are fat, the others water."""
    distance = np.sqrt(np.einsum("ij,ij->i", offset, offset))
    image = np.zeros(len(offset))
    before = 0.0
    for depth, value in scene.layers:
        own = value if (value > 0.9) is fat else 0.0
        if own != before:
            under = scene.radius_mm - depth - distance
            # Only near the boundary is the blur of a voxel to be seen.
            near = np.flatnonzero(np.abs(under) < 4)
            share = (under > 0).astype(np.float64)
            blur = _blur(offset[near] / distance[near, None], scanner_from_voxel)
            share[near] = ndtr(under[near] / blur)
            image += (own - before) * share
        before = own
    return image


def _capsule(
    image: Array, points: Array, center: Array, scanner_from_voxel: Array, scene: Scene
) -> None:
    """An ellipsoid of revolution along the normal of the sphere, in a dark housing."""
    across, along = scene.radii_mm
    normal = (center - CENTER_MM) / np.linalg.norm(center - CENTER_MM)
    # Voxels near the capsule, found through the grid: the points are in its order.
    reach = max(across, along) + 8
    near = _near(points, center, reach)
    offset = points[near] - center
    height = offset @ normal
    side = offset - height[:, None] * normal
    gradient = side / across**2 + height[:, None] * normal / along**2
    rho = np.sqrt((side**2).sum(axis=1) / across**2 + height**2 / along**2)
    steep = np.linalg.norm(gradient, axis=1) / np.maximum(rho, 1e-6)
    outward = gradient / np.maximum(np.linalg.norm(gradient, axis=1), 1e-9)[:, None]
    share = ndtr((1 - rho) / np.maximum(steep, 1e-6) / _blur(outward, scanner_from_voxel))
    if scene.shade:
        foot = center - normal * (np.linalg.norm(center - CENTER_MM) - scene.radius_mm)
        spot = np.exp(-((points[near] - foot) ** 2).sum(axis=1) / 18.0)
        image[near] *= 1 - scene.shade * spot
    image[near] = image[near] * (1 - share) + scene.brightness * share

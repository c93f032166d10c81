"""Invented heads and caps as bare points: what the labelling sees, without an image.

A head is a smooth superellipsoid with a brow, a nose and low bumps, its size drawn from published
norms; the cap on it comes from `synthetic_heads`, whose tape-measure rules share no code with the
tool's. The capsules are handed on with centre noise and measured sizes, as the finder would.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from locator.geometry import icosphere
from locator.layout.tape import star_surface
from locator.markers import Markers
from locator.skin import Skin, height_mm
from synthetic_heads.cap import Cap, make_cap

Array = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True, eq=False)
class PointHead:
    """An invented head: skin, mesh and true landmarks, scanner mm."""

    skin: Skin
    vertices_mm: Array
    faces: NDArray[np.int32]
    landmarks_mm: dict[str, Array]


def make_point_head(
    seed: int, *, grid_mm: float = 2.5, pitch_deg: float | None = None
) -> PointHead:
    """A head with sizes of ANSUR II (2012): breadth, length, height over the ears, both sexes."""
    rng = np.random.default_rng([seed, 0x4EAD])
    woman = rng.random() < 0.5
    half = 0.5 * np.array(
        [rng.normal(147.8, 5.2), rng.normal(189.8, 7.4), 0.0]
        if woman
        else [rng.normal(154.3, 5.5), rng.normal(199.5, 7.0), 0.0]
    )
    half[2] = rng.normal(126.5, 6.5) if woman else rng.normal(131.1, 6.2)
    exponent = rng.uniform(2.05, 2.4)
    egg = rng.uniform(0.05, 0.18)
    ear_y = rng.normal(3.0, 4.0)
    nose_z = rng.normal(13.0, 5.0)
    ways = rng.normal(size=(14, 3))
    ways /= np.linalg.norm(ways, axis=1, keepdims=True)
    heights = rng.normal(0, 1.2, 14)

    def radius(out: Array) -> Array:
        reach = np.full(len(out), 90.0)
        for _ in range(16):
            place = out * reach[:, None] / half
            place[:, 0] /= 1 - egg * np.clip(place[:, 1], -1.2, 1.2)
            size = (np.abs(place) ** exponent).sum(axis=1) ** (1 / exponent)
            reach = reach * (0.25 + 0.75 / size)
        reach = reach + (np.exp((out @ ways.T - 1) / 0.12) * heights).sum(axis=1)
        # The root of the nose (a notch) and the nose under it.
        front = out[:, 1] > 0
        level = np.degrees(np.arctan2(out[:, 2], out[:, 1])) - np.degrees(
            np.arctan2(nose_z, half[1])
        )
        across = np.degrees(np.arctan2(out[:, 0], np.abs(out[:, 1])))
        middle = np.exp(-0.5 * (across / 9.0) ** 2) * front
        reach = reach - 4.0 * middle * np.exp(-0.5 * (level / 6.0) ** 2)
        return reach + 16.0 * middle * np.exp(-0.5 * ((level + 22.0) / 7.0) ** 2)

    ball, faces = icosphere(4)
    center = np.array([0.0, 0.0, 20.0])

    def from_center(out: Array) -> Array:
        """Distance from the inner centre along unit directions: a few steps from the origin's."""
        reach = np.full(len(out), 100.0)
        for _ in range(9):
            point = center + reach[:, None] * out
            length = np.linalg.norm(point, axis=1)
            reach = reach + 0.7 * (radius(point / length[:, None]) - length)
        return reach

    vertices = center + from_center(ball)[:, None] * ball
    marks = {
        "NAS": np.array([0.0, half[1], nose_z]),
        "LPA": np.array([-half[0], ear_y, 0.0]),
        "RPA": np.array([half[0], ear_y + rng.normal(0, 1.5), rng.normal(0, 1.5)]),
        "INI": np.array([rng.normal(0, 1.5), -half[1], rng.normal(10.0, 6.0)]),
    }
    pitch = np.radians(rng.normal(0, 6.0) if pitch_deg is None else pitch_deg)
    yaw, roll = np.radians(rng.normal(0, 3.0, 2))
    turn = _turn(0, pitch) @ _turn(1, roll) @ _turn(2, yaw)
    shift = rng.normal(0, 8.0, 3)
    vertices = vertices @ turn.T + shift
    tree = cKDTree(vertices)
    # Between three mesh vertices, as a landmark that a person has marked would be.
    landmarks = {
        name: vertices[tree.query(turn @ point + shift, k=3)[1]].mean(axis=0)
        for name, point in marks.items()
    }
    low = vertices.min(axis=0) - 25.0
    shape = np.ceil((vertices.max(axis=0) + 25.0 - low) / grid_mm).astype(int) + 1
    grid = np.stack(np.meshgrid(*(np.arange(count) for count in shape), indexing="ij"), axis=-1)
    away = ((grid * grid_mm + low) - shift).reshape(-1, 3) @ turn - center
    length = np.linalg.norm(away, axis=1)
    table = star_surface(from_center, center, n_polar=91, n_azimuth=120)
    surface = table.radius(away / np.maximum(length, 1e-6)[:, None])
    height = (length - surface).reshape(shape).astype(np.float32)
    affine = np.diag([grid_mm, grid_mm, grid_mm, 1.0])
    affine[:3, 3] = low
    skin = Skin(
        height_map_mm=height,
        scanner_from_grid=affine,
        vertices_scanner_mm=vertices,
        faces=faces,
        sd_mm=0.3,
        noise_sd=1.0,
        fat_intensity=100.0,
    )
    return PointHead(skin=skin, vertices_mm=vertices, faces=faces, landmarks_mm=landmarks)


def _turn(axis: int, angle: float) -> Array:
    first, second = [other for other in range(3) if other != axis]
    out = np.eye(3)
    out[first, first] = out[second, second] = np.cos(angle)
    out[first, second], out[second, first] = -np.sin(angle), np.sin(angle)
    return out


@dataclass(frozen=True, kw_only=True, eq=False)
class PointCap:
    """A cap's capsules as the finder would hand them on, and the truth.

    Attributes
    ----------
    markers : Markers
    owner : (M,) ndarray of int
        Name of each blob by number, -1 for an extra, -2 for junk, -3 for the side marker.
    cap : Cap
    """

    markers: Markers
    owner: NDArray[np.int64]
    cap: Cap


def make_point_cap(
    head: PointHead,
    names: tuple[str, ...],
    seed: int,
    *,
    center_sd_mm: float = 0.25,
    size_sd_mm: float = 0.4,
    n_junk: int = 12,
    **settings: Any,
) -> PointCap:
    """Put a cap on a head and list its blobs, with junk of poor looks among them."""
    cap = make_cap(head.vertices_mm, head.faces, head.landmarks_mm, names, seed, **settings)
    rng = np.random.default_rng([seed, 0xB10B])
    own = np.flatnonzero(cap.present)
    junk = head.vertices_mm[rng.choice(len(head.vertices_mm), n_junk, replace=False)]
    junk = junk + rng.normal(0, 1.5, junk.shape)
    centers = np.concatenate(
        [cap.capsules.centers_mm[own], cap.extras.centers_mm, junk, cap.side_capsule.centers_mm]
    )
    n_extra, n_side = len(cap.extras), len(cap.side_capsule)
    owner = np.concatenate(
        [own, np.full(n_extra, -1), np.full(n_junk, -2), np.full(n_side, -3)]
    ).astype(np.int64)
    count = len(centers)
    real = owner != -2
    size = np.concatenate(
        [
            cap.capsules.diameters_mm[own],
            cap.extras.diameters_mm,
            rng.uniform(2.0, 10.0, n_junk),
            cap.side_capsule.diameters_mm,
        ]
    )
    centers = centers + rng.normal(0, center_sd_mm, centers.shape)
    score = np.where(real, rng.uniform(0.85, 0.99, count), rng.uniform(0.0, 0.4, count))
    order = np.argsort(-score)
    markers = Markers(
        centers_scanner_mm=centers[order],
        covariance_mm2=np.tile(center_sd_mm**2 * np.eye(3), (count, 1, 1)),
        diameter_mm=(size + rng.normal(0, size_sd_mm, count))[order],
        contrast=np.where(real, 1.0, 0.5)[order],
        roundness=np.where(real, 0.9, 0.5)[order],
        skin_mm=height_mm(head.skin, centers[order]),
        score=score[order],
        capsule_mm=float(np.median(size[real])),
        shift_mm=np.zeros(3),
    )
    return PointCap(markers=markers, owner=owner[order], cap=cap)

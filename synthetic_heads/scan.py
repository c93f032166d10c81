"""Scans of invented heads, and capsules painted on scans of any head."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from synthetic_heads.cap import Cap, Capsules

Array = NDArray[np.float64]
Image = NDArray[np.float32]


def _share_inside(
    offset: Array, fine: Array, axis: Array, radius: float, half: float, form: str
) -> Array:
    """Share of the sub-voxels ``fine`` (S, 3) round each offset (N, 3) that lie in a capsule."""
    along = offset @ axis
    square = (offset**2).sum(axis=1)
    fine_along = fine @ axis
    # |o + f|^2 and (o + f).axis for all pairs without forming the sums
    total = square[:, None] + 2 * (offset @ fine.T) + (fine**2).sum(axis=1)
    along_both = along[:, None] + fine_along
    across = total - along_both**2
    if form == "disc":
        inside = (across <= radius**2) & (np.abs(along_both) <= half)
    else:
        inside = across / radius**2 + along_both**2 / half**2 <= 1.0
    share: Array = inside.mean(axis=1)
    return share


def capsule_fractions(
    shape: tuple[int, ...],
    scanner_from_voxel: ArrayLike,
    capsules: Capsules,
    form: str,
    *,
    grow_mm: float = 0.0,
    supersample: int = 5,
    weighted: bool = False,
) -> Image:
    """Share of each voxel that capsules fill, by supersampling.

    Parameters
    ----------
    shape : (3,) tuple of int
        Grid.
    scanner_from_voxel : (4, 4) array_like
        Affine of the grid.
    capsules : Capsules
        What to paint.
    form : str
        ``ellipsoid`` or ``disc``.
    grow_mm : float
        Grow the capsules on all sides (the housing), mm.
    supersample : int
        Sub-voxels along each axis at 1 mm; thicker voxels get more.
    weighted : bool
        Multiply by the capsules' relative brightness.

    Returns
    -------
    (I, J, K) ndarray of float32
        Shares, 0 to 1 (times brightness).
    """
    affine = np.asarray(scanner_from_voxel, dtype=np.float64)
    inverse = np.linalg.inv(affine)
    sizes = np.sqrt((affine[:3, :3] ** 2).sum(axis=0))
    counts = np.maximum(2, np.ceil(supersample * sizes)).astype(int)
    steps = [(np.arange(n) + 0.5) / n - 0.5 for n in counts]
    fine = np.stack(np.meshgrid(*steps, indexing="ij"), axis=-1).reshape(-1, 3) @ affine[:3, :3].T
    found = np.zeros(shape, dtype=np.float32)
    for index in range(len(capsules)):
        reach = (
            0.5 * np.hypot(capsules.diameters_mm[index], capsules.heights_mm[index])
            + np.sqrt(2.0) * grow_mm
        )
        middle = inverse[:3, :3] @ capsules.centers_mm[index] + inverse[:3, 3]
        span = reach * np.sqrt((inverse[:3, :3] ** 2).sum(axis=1)) + 1.0
        low = np.maximum(np.floor(middle - span).astype(int), 0)
        high = np.minimum(np.ceil(middle + span).astype(int) + 1, shape)
        if np.any(high <= low):
            continue
        grid = np.stack(
            np.meshgrid(*[np.arange(a, b) for a, b in zip(low, high, strict=True)], indexing="ij"),
            axis=-1,
        )
        offset = grid @ affine[:3, :3].T + affine[:3, 3] - capsules.centers_mm[index]
        radius = capsules.diameters_mm[index] / 2 + grow_mm
        half = capsules.heights_mm[index] / 2 + grow_mm
        flat = offset.reshape(-1, 3)
        distance = np.linalg.norm(flat, axis=1)
        corner = 0.5 * float(np.linalg.norm(sizes))
        share = (distance < min(radius, half) - corner).astype(np.float64)
        edge = (share == 0) & (distance < reach + corner)
        share[edge] = _share_inside(flat[edge], fine, capsules.axes[index], radius, half, form)
        share = share.reshape(offset.shape[:3])
        if weighted:
            share *= capsules.brightness[index]
        box = tuple(slice(a, b) for a, b in zip(low, high, strict=True))
        found[box] = np.maximum(found[box], share)
    return found


def paint_capsules(
    image: ArrayLike,
    scanner_from_voxel: ArrayLike,
    cap: Cap,
    *,
    brightness: float = 1.1,
    fat_intensity: float,
    housing_mm: float = 1.0,
    darken: float = 0.3,
    shift_mm: ArrayLike = (0.0, 0.0, 0.0),
    noise_sd: float = 0.0,
    seed: int = 0,
    supersample: int = 5,
) -> Image:
    """Paint a cap's capsules on a T1 volume, real or invented.

    Oil is added with its share of each voxel; the plastic housing round and under the capsule
    gives no signal; the skin right below an electrode is darkened a little (magnetic
    susceptibility of pad and plastic).

    Parameters
    ----------
    image : (I, J, K) array_like
        Volume; not changed.
    scanner_from_voxel : (4, 4) array_like
        Its affine, scanner mm.
    cap : Cap
        The cap.
    brightness : float
        Oil over scalp fat; 1.0 to 1.15 on usual T1 sequences (computed from T1 values of
        fat and oil, Hu HH & Nayak KS 2010, J Magn Reson Imaging).
    fat_intensity : float
        Intensity of scalp fat in this image.
    housing_mm : float
        Thickness of the dark plastic round the oil, mm.
    darken : float
        Signal lost in the skin right below an electrode, 0 to 1.
    shift_mm : (3,) array_like
        Chemical shift of the oil, scanner mm (the housing does not shift).
    noise_sd : float
        Rician noise added where the capsules were painted (real volumes have their own
        elsewhere), in image units.
    seed : int
        Seed of that noise.
    supersample : int
        Sub-voxels along each axis at 1 mm.

    Returns
    -------
    (I, J, K) ndarray of float32
        The painted volume.
    """
    painted = np.array(image, dtype=np.float32)
    affine = np.asarray(scanner_from_voxel, dtype=np.float64)
    worn = cap.worn
    plastic = capsule_fractions(
        painted.shape, affine, worn, cap.shape, grow_mm=housing_mm, supersample=supersample
    )
    painted *= 1.0 - plastic
    if darken > 0:
        painted *= 1.0 - darken * _skin_shadow(painted.shape, affine, worn)
    moved = affine.copy()
    moved[:3, 3] -= np.asarray(shift_mm, dtype=np.float64)
    oil = capsule_fractions(
        painted.shape, moved, worn, cap.shape, supersample=supersample, weighted=True
    )
    painted += oil * np.float32(brightness * fat_intensity)
    if noise_sd > 0:
        rng = np.random.default_rng([int(seed), 0xA01])
        near = np.maximum(plastic, oil) > 0
        clean = painted[near]
        real = clean + rng.normal(0, noise_sd, clean.shape)
        painted[near] = np.hypot(real, rng.normal(0, noise_sd, clean.shape))
    return painted


def _skin_shadow(shape: tuple[int, ...], affine: Array, capsules: Capsules) -> Image:
    """How much the skin below each electrode is shaded, 0 to 1: a soft spot 3 mm deep."""
    inverse = np.linalg.inv(affine)
    shadow = np.zeros(shape, dtype=np.float32)
    reach = 3 * np.sqrt((inverse[:3, :3] ** 2).sum(axis=1)) * 3.0
    feet = (
        capsules.centers_mm - capsules.axes * (capsules.gaps_mm + capsules.heights_mm / 2)[:, None]
    )
    for foot in feet:
        middle = inverse[:3, :3] @ foot + inverse[:3, 3]
        low = np.maximum(np.floor(middle - reach).astype(int), 0)
        high = np.minimum(np.ceil(middle + reach).astype(int) + 1, shape)
        if np.any(high <= low):
            continue
        grid = np.stack(
            np.meshgrid(*[np.arange(a, b) for a, b in zip(low, high, strict=True)], indexing="ij"),
            axis=-1,
        )
        offset = grid @ affine[:3, :3].T + affine[:3, 3] - foot
        spot = np.exp(-0.5 * (offset**2).sum(axis=-1) / 3.0**2)
        box = tuple(slice(a, b) for a, b in zip(low, high, strict=True))
        shadow[box] = np.maximum(shadow[box], spot)
    return shadow

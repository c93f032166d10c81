"""Scans of invented heads, and capsules painted on scans of any head."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import ndimage as ndi
from scipy.spatial.transform import Rotation

from synthetic_heads import heads
from synthetic_heads.cap import Cap, Capsules
from synthetic_heads.heads import SyntheticHead
from synthetic_heads.shapes import band_noise, finer

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


def _scattered(count: int) -> Array:
    """Points (S, 3) spread evenly over the unit cube round 0, in no planes.

    The additive recurrence with the powers of 1 / x, x^4 = x + 1: the golden ratio's rule
    carried to three dimensions (common practice, no source).
    """
    root = 1.2207440846057596  # x**4 = x + 1
    steps = root ** -np.arange(1.0, 4.0)
    points: Array = np.mod(0.5 + np.arange(count)[:, None] * steps, 1.0) - 0.5
    return points - points.mean(axis=0)


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
        Third root of the number of sub-voxels of a 1 mm voxel; larger ones get more.
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
    fine = _scattered(int(counts.prod())) @ affine[:3, :3].T
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
        Third root of the number of sub-voxels of a 1 mm voxel.

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


# Signal of water and of fat in each tissue, white matter = 100. Ratios of fat, white matter,
# muscle and fluid as computed for an inversion-recovery sequence (TI 900, TR 2300 ms) from T1
# values (fat .82, white .39, muscle and skin .20, fluid .03; oil .90); grey matter raised to the
# usual contrast of real scans (common practice, no source).
WHITE_SIGNAL = 100.0
FAT_SIGNAL = 210.0
_SIGNALS: dict[int, tuple[float, float]] = {
    heads.AIR: (0.0, 0.0),
    heads.SKIN: (52.0, 6.0),
    heads.FAT: (14.0, 0.93 * FAT_SIGNAL),
    heads.BONE: (4.0, 2.0),
    heads.MARROW: (16.0, 0.60 * FAT_SIGNAL),
    heads.CSF: (11.0, 0.0),
    heads.GREY: (60.0, 0.0),
    heads.WHITE: (WHITE_SIGNAL, 0.0),
    heads.BRAINSTEM: (92.0, 0.0),
    heads.CEREBELLUM: (64.0, 0.0),
    heads.MUSCLE: (50.0, 4.0),
    heads.EYE: (13.0, 0.0),
}


def water_and_fat(head: SyntheticHead, seed: int, *, texture: float = 0.05) -> tuple[Image, Image]:
    """Signal of water and of fat on the label grid, surfaces with partial volume.

    Parameters
    ----------
    head : SyntheticHead
        The head.
    seed : int
        Seed of the tissue's unevenness.
    texture : float
        Relative SD of smooth unevenness within tissue (two scales); muscle and marrow get three
        times as much.

    Returns
    -------
    water, fat : (I, J, K) ndarray of float32
        White matter = 100.
    """
    rng = np.random.default_rng([int(seed), 0x7E2])
    step = float(head.scanner_from_voxel[0, 0])
    water = np.zeros(head.labels.shape, dtype=np.float32)
    fat = np.zeros(head.labels.shape, dtype=np.float32)
    for tissue, box, level in head.fine_levels():
        share = np.clip(0.5 - level / np.float32(step), 0, 1)
        wet, oily = _SIGNALS[tissue]
        water[box] += share * (np.float32(wet) - water[box])
        fat[box] += share * (np.float32(oily) - fat[box])
    if texture > 0:
        coarse = np.ceil(np.array(head.labels.shape) / 4).astype(int) + 2
        uneven = band_noise(rng, coarse, 4.0 * step, 16.0 * step, 0.5)
        for _ in range(2):
            uneven = finer(uneven)
        uneven = uneven[tuple(slice(n) for n in head.labels.shape)] * np.float32(texture)
        rough = np.isin(head.labels, (heads.MUSCLE, heads.MARROW))
        factor = np.clip(1 + np.where(rough, 3 * uneven, uneven), 0.3, 2.0)
        water *= factor
        fat *= factor
    return water, fat


def scan_grid(
    head: SyntheticHead,
    *,
    voxel_mm: Sequence[float] = (1.0, 1.0, 1.0),
    axes: str = "RAS",
    oblique_deg: Sequence[float] = (0.0, 0.0, 0.0),
    crop_mm: Mapping[str, float] | None = None,
) -> tuple[tuple[int, int, int], Array]:
    """Shape and affine of a scan of a head.

    Parameters
    ----------
    head : SyntheticHead
        The head.
    voxel_mm : (3,) sequence of float
        Voxel size along the stored axes, mm.
    axes : str
        Direction of the stored axes, three letters of R/L, A/P, S/I, e.g. ``LIA``.
    oblique_deg : (3,) sequence of float
        Turn of the grid about x, y, z, degrees.
    crop_mm : mapping, optional
        Cut the field of view: mm off the side named by its letter (R, L, A, P, S, I).

    Returns
    -------
    shape : (3,) tuple of int
    scanner_from_voxel : (4, 4) ndarray

    Raises
    ------
    ValueError
        If the axes are no three different directions or a voxel size is not positive.
    """
    letters = {"R": (0, 1), "L": (0, -1), "A": (1, 1), "P": (1, -1), "S": (2, 1), "I": (2, -1)}
    if len(axes) != 3 or sorted(letters.get(a, (9, 0))[0] for a in axes) != [0, 1, 2]:
        msg = f"Axes are three letters, one each of R/L, A/P, S/I, not {axes!r}."
        raise ValueError(msg)
    sizes = np.asarray(voxel_mm, dtype=np.float64)
    if sizes.shape != (3,) or not np.all(sizes > 0):
        msg = f"Three positive voxel sizes are needed, not {voxel_mm!r}."
        raise ValueError(msg)
    turn = Rotation.from_euler("xyz", oblique_deg, degrees=True).as_matrix()
    shape_mm = np.array(head.labels.shape) * head.scanner_from_voxel[0, 0]
    low = head.scanner_from_voxel[:3, 3] - head.scanner_from_voxel[0, 0] / 2
    middle, half = low + shape_mm / 2, shape_mm / 2
    first, last = -half.copy(), half.copy()
    for side, size in (crop_mm or {}).items():
        axis, sign = letters[side]
        if sign > 0:
            last[axis] -= size
        else:
            first[axis] += size
    columns, counts, corner = [], [], np.zeros(3)
    for letter, size in zip(axes, sizes, strict=True):
        axis, sign = letters[letter]
        count = int(np.ceil((last[axis] - first[axis]) / size - 1e-6))
        spare = count * size - (last[axis] - first[axis])
        column = np.zeros(3)
        column[axis] = sign * size
        columns.append(column)
        counts.append(count)
        start = first[axis] - spare / 2 + size / 2
        end = last[axis] + spare / 2 - size / 2
        corner[axis] = start if sign > 0 else end
    affine = np.eye(4)
    affine[:3, :3] = turn @ np.stack(columns, axis=1)
    affine[:3, 3] = turn @ corner + middle
    return (counts[0], counts[1], counts[2]), affine


def make_scan(
    head: SyntheticHead,
    cap: Cap | None,
    *,
    seed: int = 0,
    voxel_mm: Sequence[float] = (1.0, 1.0, 1.0),
    axes: str = "RAS",
    oblique_deg: Sequence[float] = (0.0, 0.0, 0.0),
    crop_mm: Mapping[str, float] | None = None,
    bias: float = 0.15,
    noise: float = 0.03,
    chemical_shift_voxels: float = 0.0,
    read_axis: int = 0,
    brightness: float = 1.1,
    housing_mm: float = 1.0,
    darken: float = 0.3,
    texture: float = 0.05,
    scale: float = 6.0,
    fat_suppression: float = 0.0,
) -> tuple[Image, Array]:
    """T1-weighted scan of an invented head with its cap on.

    Parameters
    ----------
    head : SyntheticHead
        The head.
    cap : Cap or None
        The cap; None: bare head.
    seed : int
        Seed of noise, bias field and texture.
    voxel_mm, axes, oblique_deg, crop_mm
        The grid, see ``scan_grid``.
    bias : float
        Receive field: largest relative change over the head (0.2: 20 % up or down).
    noise : float
        Rician noise, SD of each channel as a fraction of white matter.
    chemical_shift_voxels : float
        All fat (capsules, scalp, marrow, orbits) is drawn this many voxels further along the
        stored axis ``read_axis``; negative: the other way.
    read_axis : int
        Stored axis (0, 1, 2) of frequency encoding.
    brightness : float
        Capsule oil over scalp fat.
    housing_mm, darken : float
        Housing round the oil and the shade below it, see ``paint_capsules``.
    texture : float
        Unevenness within tissue.
    scale : float
        Image units per percent of white matter.
    fat_suppression : float
        Share of the fat's signal that is suppressed, 0 to 1.

    Returns
    -------
    intensity : (I, J, K) ndarray of float32
        The volume.
    scanner_from_voxel : (4, 4) ndarray
        Its affine.
    """
    shape, affine = scan_grid(
        head, voxel_mm=voxel_mm, axes=axes, oblique_deg=oblique_deg, crop_mm=crop_mm
    )
    shift_mm = affine[:3, read_axis] * chemical_shift_voxels
    water, fat = water_and_fat(head, seed, texture=texture)
    water = _resample(water, head.scanner_from_voxel, shape, affine)
    moved = affine.copy()
    moved[:3, 3] -= shift_mm
    fat = _resample(fat, head.scanner_from_voxel, shape, moved)
    if cap is not None:
        worn = cap.worn
        plastic = capsule_fractions(shape, affine, worn, cap.shape, grow_mm=housing_mm)
        lit = 1 - np.float32(darken) * _skin_shadow(shape, affine, worn)
        water *= (1 - plastic) * lit
        lit_moved = 1 - np.float32(darken) * _skin_shadow(shape, moved, worn)
        fat *= lit_moved
        oil = capsule_fractions(shape, moved, worn, cap.shape, weighted=True)
        covered = capsule_fractions(shape, moved, worn, cap.shape, grow_mm=housing_mm)
        fat *= 1 - covered
        fat += oil * np.float32(brightness * FAT_SIGNAL)
    image = water + np.float32(1 - fat_suppression) * fat
    rng = np.random.default_rng([int(seed), 0x5CA])
    if bias > 0:
        image *= _receive_field(shape, rng, bias)
    if noise > 0:
        sd = np.float32(noise * WHITE_SIGNAL)
        image += sd * rng.standard_normal(shape, dtype=np.float32)
        image = np.hypot(image, sd * rng.standard_normal(shape, dtype=np.float32))
    image *= np.float32(scale)
    return image.astype(np.float32), affine


def _resample(
    image: Image, scanner_from_voxel: Array, shape: tuple[int, int, int], affine: Array
) -> Image:
    """Box average of an image over the voxels of another grid (linear in between)."""
    inverse = np.linalg.inv(scanner_from_voxel)
    sizes = np.sqrt((affine[:3, :3] ** 2).sum(axis=0))
    step = float(scanner_from_voxel[0, 0])
    counts = np.maximum(1, np.ceil(sizes / step - 1e-6)).astype(int)
    total = np.zeros(shape, dtype=np.float32)
    matrix = inverse[:3, :3] @ affine[:3, :3]
    for sub in np.ndindex(*counts):
        shift = (np.array(sub) + 0.5) / counts - 0.5
        origin = inverse[:3, :3] @ (affine[:3, :3] @ shift + affine[:3, 3]) + inverse[:3, 3]
        total += ndi.affine_transform(
            image, matrix, origin, output_shape=shape, order=1, output=np.float32
        )
    total /= np.float32(counts.prod())
    return total


def _receive_field(shape: tuple[int, ...], rng: np.random.Generator, size: float) -> Image:
    """Smooth receive field, between about 1 - size and 1 + size."""
    axes = [np.linspace(-1, 1, n, dtype=np.float32) for n in shape]
    x, y, z = np.meshgrid(*axes, indexing="ij", sparse=True)
    a = rng.normal(size=9).astype(np.float32)
    field = a[0] * x + a[1] * y + a[2] * z
    field = field + a[3] * x * y + a[4] * y * z + a[5] * x * z
    field = field + a[6] * (x * x - 0.4) + a[7] * (y * y - 0.4) + a[8] * (z * z - 0.4)
    inner = field[tuple(slice(n // 6, n - n // 6) for n in shape)]
    field /= np.float32(max(float(np.abs(inner).max()), 1e-6))
    whole: Image = np.exp(np.float32(np.log1p(size)) * np.clip(field, -1.3, 1.3))
    return whole

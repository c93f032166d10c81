"""The skin surface without the capsules on it, as a signed distance and as a dense mesh."""

from __future__ import annotations

import logging
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import ndimage
from skimage.measure import marching_cubes

from locator.errors import SettingError, SkinError
from locator.geometry import apply_affine, voxel_sizes_mm
from locator.results import Finding, Frozen, Progress
from locator.volume import Volume, canonical

FloatArray = NDArray[np.float64]
Grid = NDArray[np.float32]

logger = logging.getLogger(__name__)

RAY_INSIDE_MM, RAY_OUTSIDE_MM, RAY_STEP_MM = 7.0, 7.0, 0.5
"""How far, and how finely, the image is read along each surface normal."""

STANDS_OUT_MM = 1.5
"""An edge this much farther out than the skin around it belongs to something on the skin."""

FACE_PART_ML = 1.5
"""Volume over which a part that is thicker than any capsule belongs to the face; a capsule of
12 mm has 0.9 mL."""

BAND_MM = 24.0
"""Beyond this distance from the skin the height map is not refined."""

HEAD_LITRES = (1.2, 12.0)
"""Volume of what can be a head, with as much neck and shoulder as a field of view can hold.
Head breadth, length and height of adults (ANSUR II, Gordon et al. 2014, NATICK/TR-15/007) give
about 4 L for the head alone; children and cut fields of view need the wide range."""


@dataclass(frozen=True, kw_only=True, slots=True)
class SkinOptions:
    """Settings of `find_skin`.

    Attributes
    ----------
    threshold : float
        Least brightness of tissue, as a share of the bright tissue of the head (0.02 to 0.5).
        0.10 from a feasibility study on four volumes; a noisy background raises it by itself.
    opening_mm : float
        Radius of the ball that rolls inside the head, mm (4 to 20): what it cannot reach
        (capsules, ears) is not skin. Twice the radius of the widest capsule, 12 mm: a ball no
        wider than the capsule rises into it.
    closing_mm : float
        Radius of the ball that rolls outside, mm (0 to 20): the holes it cannot enter (ear
        canals, shadows of electrode housings) count as inside.
    smooth_mm : float
        Smoothing of the first surface, mm (2 to 8). The rays then find the details.
    detail_mm : float
        Smoothing of what the rays found, along the skin, mm (1 to 6).
    """

    threshold: float = 0.10
    opening_mm: float = 12.0
    closing_mm: float = 10.0
    smooth_mm: float = 4.0
    detail_mm: float = 2.0

    def __post_init__(self) -> None:
        """Check the ranges."""
        ranges = {
            "threshold": (0.02, 0.5),
            "opening_mm": (4.0, 20.0),
            "closing_mm": (0.0, 20.0),
            "smooth_mm": (2.0, 8.0),
            "detail_mm": (1.0, 6.0),
        }
        for name, (low, high) in ranges.items():
            value = getattr(self, name)
            if not low <= value <= high:
                msg = f"SkinOptions.{name} is {value:g}; it must lie between {low:g} and {high:g}."
                raise SettingError(msg)


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Skin(Frozen):
    """The skin of one head.

    Attributes
    ----------
    height_map_mm : (I, J, K) ndarray of float32
        Signed distance to the skin on a working grid, mm: positive outside, negative inside.
    scanner_from_grid : (4, 4) ndarray
        Affine of the working grid (about 1 mm, axes near R, A, S), to scanner mm.
    vertices_scanner_mm : (V, 3) ndarray
        Dense skin mesh, scanner mm.
    faces : (F, 3) ndarray of int32
        Outward triangles.
    sd_mm : float
        How well the skin is known along its normal, mm.
    noise_sd, fat_intensity : float
        Background noise and bright-fat level of the volume, its own units.
    findings : tuple of Finding
    """

    height_map_mm: NDArray[np.float32]
    scanner_from_grid: FloatArray
    vertices_scanner_mm: FloatArray
    faces: NDArray[np.int32]
    sd_mm: float
    noise_sd: float
    fat_intensity: float
    findings: tuple[Finding, ...] = ()


def find_skin(
    volume: Volume, *, options: SkinOptions | None = None, progress: Progress | None = None
) -> Skin:
    """Find the skin of the head, with capsules and ears left off.

    The head is the largest bright body; a ball rolled inside it leaves off what is narrower
    than the ball. Rays across that first surface then find the edge to a fraction of a voxel,
    at half of the local outer maximum; where something stands on the skin, the surface is
    carried over from around it.

    Parameters
    ----------
    volume : Volume
        Checked T1 volume, any axis order, voxels up to 3 mm.
    options : SkinOptions, optional
        Default ``SkinOptions()``.
    progress : callable, optional
        Called with a fraction and a few words.

    Returns
    -------
    Skin
        Height map on a grid of about 1 mm around the head, mesh, and levels of the image.

    Raises
    ------
    SkinError
        If nothing bright stands out, or what does is not a head: too small, too large, or
        without a dark shell of bone under its surface.
    """
    options = SkinOptions() if options is None else options
    tell = progress if progress is not None else _silent
    tell(0.0, "preparing the volume")
    image, scanner_from_grid = _working_grid(canonical(volume))
    coarse = _halve(image)
    tell(0.2, "separating head and background")
    threshold, floor = _tissue_threshold(coarse, options.threshold)
    body = _largest_body(coarse > threshold, 2 * voxel_sizes_mm(scanner_from_grid))
    tell(0.4, "leaving off capsules and ears")
    first, face, box = _first_surface(body, 2 * voxel_sizes_mm(scanner_from_grid), options)
    # From here on everything is cropped to the head: `box` in coarse voxels, twice in fine ones.
    fine_box = tuple(slice(2 * s.start, 2 * s.stop) for s in box)
    image = np.ascontiguousarray(image[fine_box])
    scanner_from_grid = scanner_from_grid.copy()
    scanner_from_grid[:3, 3] = apply_affine(scanner_from_grid, [float(s.start) for s in fine_box])
    tell(0.6, "finding the edge")
    rays = _Rays.cast(image, first, scanner_from_grid, threshold, floor)
    offset, sd_mm = _offset_map(rays, first, face, voxel_sizes_mm(scanner_from_grid) * 2, options)
    height = _refined(first, offset, 2 * voxel_sizes_mm(scanner_from_grid))
    tell(0.8, "meshing")
    vertices, faces = _mesh(height, scanner_from_grid)
    findings = _check_head(height, rays, image, scanner_from_grid, floor)
    noise_sd = _noise_sd(image, height, floor)
    skin = Skin(
        height_map_mm=_double(height, image.shape),
        scanner_from_grid=scanner_from_grid,
        vertices_scanner_mm=vertices,
        faces=faces,
        sd_mm=sd_mm,
        noise_sd=noise_sd,
        fat_intensity=rays.fat_intensity(),
        findings=findings,
    )
    logger.info(
        "Skin: %d vertices, known to %.2f mm, fat %.4g, noise %.3g, %.0f %% of rays clear",
        len(vertices),
        sd_mm,
        skin.fat_intensity,
        noise_sd,
        100 * rays.clear.mean(),
    )
    tell(1.0, "skin found")
    return skin


def height_mm(skin: Skin, points_scanner_mm: ArrayLike) -> FloatArray:
    """Signed distance of points to the skin.

    Parameters
    ----------
    skin : Skin
        From `find_skin`.
    points_scanner_mm : (N, 3) array_like
        Points, scanner mm.

    Returns
    -------
    (N,) ndarray
        Height over the skin, mm, negative inside. Beyond the working grid the distance to the
        grid is added.
    """
    points = np.atleast_2d(np.asarray(points_scanner_mm, dtype=np.float64))
    index = apply_affine(np.linalg.inv(skin.scanner_from_grid), points)
    inside = np.clip(index, 0, np.array(skin.height_map_mm.shape) - 1.0)
    beyond = np.linalg.norm((index - inside) * voxel_sizes_mm(skin.scanner_from_grid), axis=1)
    height: FloatArray = (
        ndimage.map_coordinates(skin.height_map_mm, inside.T, order=1, output=np.float64) + beyond
    )
    return height


def skin_normals(skin: Skin, points_scanner_mm: ArrayLike) -> FloatArray:
    """Outward direction of the skin nearest to each point.

    Parameters
    ----------
    skin : Skin
        From `find_skin`.
    points_scanner_mm : (N, 3) array_like
        Points near the skin, scanner mm.

    Returns
    -------
    (N, 3) ndarray
        Unit vectors: the gradient of the height over the nearest 5 mm.
    """
    points = np.atleast_2d(np.asarray(points_scanner_mm, dtype=np.float64))
    # Central differences over 2.5 mm on either side: finer than any curvature of a scalp that
    # carries electrodes, coarser than the steps of the height map.
    reach = 2.5
    gradient = np.stack(
        [
            height_mm(skin, points + reach * axis) - height_mm(skin, points - reach * axis)
            for axis in np.eye(3)
        ],
        axis=1,
    )
    length = np.linalg.norm(gradient, axis=1, keepdims=True)
    normals: FloatArray = np.where(length > 1e-9, gradient / np.where(length > 0, length, 1), 0.0)
    normals[length[:, 0] <= 1e-9, 2] = 1.0
    return normals


def project_to_skin(skin: Skin, points_scanner_mm: ArrayLike) -> FloatArray:
    """Foot points on the skin.

    Parameters
    ----------
    skin : Skin
        From `find_skin`.
    points_scanner_mm : (N, 3) array_like
        Points up to about 20 mm from the skin, scanner mm.

    Returns
    -------
    (N, 3) ndarray
        Where the height map is zero (to 0.01 mm), following its gradient from each point.
    """
    feet = np.array(np.atleast_2d(np.asarray(points_scanner_mm, dtype=np.float64)))
    for _ in range(12):
        height = height_mm(skin, feet)
        moving = np.abs(height) > 0.005
        if not moving.any():
            break
        feet[moving] -= height[moving, None] * skin_normals(skin, feet[moving])
    return feet


def image_on_grid(volume: Volume, skin: Skin) -> NDArray[np.float32]:
    """Intensities on the working grid of the skin.

    Parameters
    ----------
    volume : Volume
        The volume that the skin was found in.
    skin : Skin
        From `find_skin` on this volume.

    Returns
    -------
    (I, J, K) ndarray of float32
        Same shape as ``skin.height_map_mm``; voxels of about 1 mm are taken as they are.
    """
    image, affine = _working_grid(canonical(volume))
    corner = apply_affine(np.linalg.inv(affine), skin.scanner_from_grid[:3, 3])
    box = tuple(
        slice(round(float(c)), round(float(c)) + n)
        for c, n in zip(corner, skin.height_map_mm.shape, strict=True)
    )
    return np.ascontiguousarray(image[box])


def _silent(_fraction: float, _words: str) -> None:
    return


def _working_grid(volume: Volume) -> tuple[Grid, FloatArray]:
    """Image on a grid of about 1 mm along the voxel axes, even counts, and its affine."""
    image = np.asarray(volume.intensity)
    affine = np.array(volume.scanner_from_voxel)
    for axis, size in enumerate(voxel_sizes_mm(affine)):
        count = image.shape[axis]
        if 0.75 <= size <= 1.35:
            image = image if count % 2 == 0 else image.take(range(count - 1), axis)
            continue
        step = 1.0 / float(size)
        places = np.arange(0, count - 1 + 1e-9, step)
        places = places[: len(places) - len(places) % 2]
        image = _resample_axis(image, axis, places, max(step, 1.0))
        affine[:3, axis] *= step
    return np.ascontiguousarray(image, dtype=np.float32), affine


def _resample_axis(image: Grid, axis: int, places: FloatArray, width: float) -> Grid:
    """Image at fractional places along one axis: cubic between samples, a tent when coarser."""
    count = image.shape[axis]
    distance = np.abs(places[:, None] - np.arange(count)) / width
    if width > 1:
        weight = np.clip(1 - distance, 0, None)
    else:
        # Cubic convolution, Keys (1981), IEEE Trans. Acoust. Speech Signal Process. 29:1153.
        near = 1.5 * distance**3 - 2.5 * distance**2 + 1
        far = -0.5 * distance**3 + 2.5 * distance**2 - 4 * distance + 2
        weight = np.where(distance < 1, near, np.where(distance < 2, far, 0.0))
    weight /= weight.sum(axis=1, keepdims=True)
    moved = np.moveaxis(image, axis, 0)
    flat = weight.astype(np.float32) @ moved.reshape(count, -1)
    return np.moveaxis(flat.reshape(len(places), *moved.shape[1:]), 0, axis)


def _halve(image: Grid) -> Grid:
    """Mean over blocks of 2 x 2 x 2; the counts are even."""
    half = image[0::2] + image[1::2]
    half = half[:, 0::2] + half[:, 1::2]
    half = half[:, :, 0::2] + half[:, :, 1::2]
    half *= np.float32(1 / 8)
    return half


def _double(coarse: Grid, shape: tuple[int, ...]) -> Grid:
    """Back to the fine grid, whose voxel centres lie a quarter of a coarse voxel beside."""
    fine = coarse
    for axis in range(3):
        places = np.arange(shape[axis]) / 2 - 0.25
        fine = _resample_edges(fine, axis, places)
    return np.ascontiguousarray(fine, dtype=np.float32)


def _resample_edges(image: Grid, axis: int, places: FloatArray) -> Grid:
    low = np.clip(np.floor(places).astype(int), 0, image.shape[axis] - 2)
    share = (places - low).astype(np.float32)
    shape = [1, 1, 1]
    shape[axis] = len(places)
    share = share.reshape(shape)
    # Linear, and linear beyond the ends, where a distance goes on growing.
    return image.take(low, axis) * (1 - share) + image.take(low + 1, axis) * share


def _tissue_threshold(coarse: Grid, share: float) -> tuple[float, float]:
    """Least brightness of tissue and level of the background."""
    values = coarse[::2, ::2, ::2].ravel()
    top = float(np.percentile(values, 99.5))
    low = values[values < 0.4 * top]
    if top <= 0 or low.size == 0:
        msg = "No tissue stands out in the volume (stage skin): no bright body. Check the file."
        raise SkinError(msg)
    # Mode of the darker voxels; a background set to one value has no spread.
    counts, edges = np.histogram(low, bins=200, range=(float(low.min()), 0.4 * top))
    smooth = ndimage.gaussian_filter1d(counts.astype(float), 1.5)
    mode = int(np.argmax(smooth))
    level = float((edges[mode] + edges[mode + 1]) / 2)
    below = low[low <= level + (edges[1] - edges[0])]
    spread = float(np.sqrt(np.mean((below - level) ** 2))) if below.size else 0.0
    noise = level + 6 * spread
    bright = values[values > max(noise, 0.03 * top)]
    if bright.size < 200:
        msg = "No tissue stands out from the background (stage skin). Check the file."
        raise SkinError(msg)
    reference = float(np.percentile(bright, 90))
    threshold = level + max(6 * spread, share * (reference - level))
    if threshold > 0.5 * reference:
        msg = (
            f"The volume is too noisy for a skin surface (stage skin): background reaches"
            f" {threshold:.3g}, bright tissue is at {reference:.3g}. Use a scan with a better"
            " signal, or check that this is a T1 of a head."
        )
        raise SkinError(msg)
    return threshold, level


def _largest_body(mask: NDArray[np.bool_], voxel_mm: FloatArray) -> NDArray[np.bool_]:
    """Largest connected body, its holes filled slice by slice on three axes."""
    # Filled before the choice: bone can part the brain from the scalp all round.
    mask = mask.copy()
    for axis in range(3):
        for slice_ in np.moveaxis(mask, axis, 0):
            slice_[...] = ndimage.binary_fill_holes(slice_)
    # Thin bridges to ghosts and wrapped parts are cut.
    solid = ndimage.binary_erosion(mask)
    labels, count = ndimage.label(solid)
    if count == 0:
        msg = "No solid bright body in the volume (stage skin). Check that it shows a head."
        raise SkinError(msg)
    sizes = np.bincount(labels.ravel())
    sizes[0] = 0
    body: NDArray[np.bool_] = ndimage.binary_dilation(labels == sizes.argmax(), iterations=2) & mask
    litres = float(body.sum() * np.prod(voxel_mm)) / 1e6
    if not HEAD_LITRES[0] <= litres <= HEAD_LITRES[1]:
        msg = (
            f"The largest bright body holds {litres:.2f} L; a head holds {HEAD_LITRES[0]:g} to"
            f" {HEAD_LITRES[1]:g} L (stage skin). Check that the volume shows a whole head."
        )
        raise SkinError(msg)
    return body


def _first_surface(
    body: NDArray[np.bool_], voxel_mm: FloatArray, options: SkinOptions
) -> tuple[Grid, NDArray[np.bool_], tuple[slice, ...]]:
    """Smoothed signed distance of the opened body, parts of the face, and the crop (coarse)."""
    # Only the head and a border round it.
    filled = [np.flatnonzero(body.any(axis=tuple({0, 1, 2} - {axis}))) for axis in range(3)]
    border = np.ceil(BAND_MM / voxel_mm).astype(int)
    box = tuple(
        slice(max(int(f[0]) - b, 0), min(int(f[-1]) + b + 1, n))
        for f, b, n in zip(filled, border, body.shape, strict=True)
    )
    body = body[box]
    # Where the head runs out of the volume it goes on: the rolling balls must not see an edge.
    margin = np.ceil((options.opening_mm + 4) / voxel_mm).astype(int)
    wide = np.pad(body, [(m, m) for m in margin], mode="edge")
    depth = _near_distance(wide, voxel_mm, options.opening_mm)
    core = depth > options.opening_mm
    labels, count = ndimage.label(core)
    if count == 0:
        msg = (
            f"No part of the bright body is {2 * options.opening_mm:g} mm thick (stage skin), so"
            " it is no head. Check the file."
        )
        raise SkinError(msg)
    sizes = np.bincount(labels.ravel())
    sizes[0] = 0
    core = labels == sizes.argmax()
    opened = _near_distance(~core, voxel_mm, options.opening_mm) <= options.opening_mm
    face = _face_parts(depth, opened, voxel_mm, options)
    # Closing: out by the closing radius, and back. The ways out and back are distances to the
    # closed surface too.
    away = ndimage.distance_transform_edt(~(opened | face), sampling=voxel_mm)
    back = ndimage.distance_transform_edt(away <= options.closing_mm, sampling=voxel_mm)
    # The transforms measure to voxel centres, half a voxel from the boundary between them; on
    # the way back that half is in both terms.
    half = float(np.mean(voxel_mm)) / 2
    signed = np.where(back > 0, options.closing_mm - back, away - half)
    signed = ndimage.gaussian_filter(signed.astype(np.float32), options.smooth_mm / voxel_mm)
    inner = tuple(slice(m, m + n) for m, n in zip(margin, body.shape, strict=True))
    return np.ascontiguousarray(signed[inner]), face[inner], box


def _near_distance(mask: NDArray[np.bool_], voxel_mm: FloatArray, reach_mm: float) -> Grid:
    """Distance of each voxel of the mask to the nearest one outside it, exact up to a reach.

    Beyond the reach any larger number stands. Least squares along one axis after the other, as
    in exact transforms (Felzenszwalb & Huttenlocher 2012, Theory Comput 8:415), but by shifting
    the whole grid: over a few voxels that is several times quicker.
    """
    square = np.full(mask.shape, (reach_mm + 1) ** 2, np.float32)
    square[~mask] = 0
    for axis, size in enumerate(voxel_mm):
        best = square.copy()
        here, there = np.moveaxis(square, axis, 0), np.moveaxis(best, axis, 0)
        moved = np.empty_like(here)
        for step in range(1, int(reach_mm / size + 1e-6) + 1):
            np.add(here, np.float32((step * size) ** 2), out=moved)
            np.minimum(there[step:], moved[:-step], out=there[step:])
            np.minimum(there[:-step], moved[step:], out=there[:-step])
        square = best
    return np.sqrt(square, out=square)


def _face_parts(
    depth: Grid, opened: NDArray[np.bool_], voxel_mm: FloatArray, options: SkinOptions
) -> NDArray[np.bool_]:
    """What a smaller ball still reaches and is too big for a capsule: nose and chin."""
    smaller = options.opening_mm * 2 / 3
    reached = _near_distance(depth <= smaller, voxel_mm, smaller) <= smaller
    labels, _ = ndimage.label(reached & ~opened)
    sizes = np.bincount(labels.ravel()) * float(np.prod(voxel_mm)) / 1e3
    sizes[0] = 0
    face: NDArray[np.bool_] = (sizes > FACE_PART_ML)[labels]
    return face


@dataclass(frozen=True, eq=False, slots=True)
class _Rays:
    """Intensity along the normals of the first surface."""

    feet: FloatArray
    """(V, 3) coarse voxel positions."""
    offset_mm: FloatArray
    """(V,) outward way from the first surface to the edge; 0 where none was found."""
    clear: NDArray[np.bool_]
    """(V,) the edge was found and air lies over it."""
    fat: FloatArray
    """(V,) brightest value under the surface."""

    def fat_intensity(self) -> float:
        """Bright-fat level: what most of the clear scalp reaches within 7 mm."""
        values = self.fat[self.clear] if self.clear.sum() > 100 else self.fat
        return float(np.percentile(values, 75))

    @classmethod
    def cast(
        cls, image: Grid, first: Grid, scanner_from_grid: FloatArray, threshold: float, floor: float
    ) -> _Rays:
        voxel_mm = voxel_sizes_mm(scanner_from_grid)
        feet, _ = _level_zero(first)
        shape = np.array(first.shape)
        gradient = [np.asarray(g) for g in np.gradient(first, *(2 * voxel_mm))]
        normal = np.stack(
            [ndimage.map_coordinates(g, feet.T, order=1, mode="nearest") for g in gradient], axis=1
        )
        normal /= np.maximum(np.linalg.norm(normal, axis=1, keepdims=True), 1e-6)
        way = np.arange(-RAY_INSIDE_MM, RAY_OUTSIDE_MM + 1e-9, RAY_STEP_MM)
        # Coarse voxel i covers the fine voxels 2 i and 2 i + 1.
        start = 2 * feet + 0.5
        places = start[:, None] + way[:, None] * (normal / voxel_mm)[:, None]
        profile = ndimage.map_coordinates(
            image, places.reshape(-1, 3).T, order=1, mode="nearest"
        ).reshape(len(feet), -1)
        edge, clear = _edges(profile, way, threshold, floor)
        limit = 3.0 / voxel_mm
        inside = ((start > limit) & (start < 2 * shape - 1 - limit)).all(axis=1)
        fat = profile[:, way <= 0].max(axis=1)
        return cls(feet, edge, clear & inside, fat)


def _edges(
    profile: Grid, way: FloatArray, threshold: float, floor: float
) -> tuple[FloatArray, NDArray[np.bool_]]:
    """Place of the tissue edge along each profile, and whether air lies over it."""
    count = len(way)
    above = profile > threshold
    falls = above[:, :-1] & ~above[:, 1:]
    middle = (way[:-1] + way[1:]) / 2
    # The fall that lies nearest to the first surface.
    cost = np.where(falls, np.abs(middle), np.inf)
    at = cost.argmin(axis=1)
    found = np.isfinite(cost.min(axis=1))
    # Local outer maximum: within 1 mm under the fall. Deeper, bright fat would take the place
    # of the skin, which is 2 mm thick and four times darker.
    steps = np.arange(count)
    reach = round(1.0 / RAY_STEP_MM)
    under = (steps <= at[:, None]) & (steps >= at[:, None] - reach)
    peak = np.where(under, profile, -np.inf).max(axis=1)
    level = np.maximum(floor + 0.5 * (peak - floor), threshold)
    # Walk inward from the fall to where the profile reaches the level.
    reached = (profile >= level[:, None]) & (steps <= at[:, None])
    last = np.where(reached, steps, -1).max(axis=1)
    found &= last >= 0
    last = np.clip(last, 0, count - 2)
    rows = np.arange(len(profile))
    upper, lower = profile[rows, last], profile[rows, last + 1]
    share = np.clip((upper - level) / np.maximum(upper - lower, 1e-9), 0, 1)
    edge = way[last] + RAY_STEP_MM * share
    over = (steps > last[:, None] + 1.0 / RAY_STEP_MM) & (
        steps <= last[:, None] + 1 + 4.0 / RAY_STEP_MM
    )
    air = np.where(over, profile, -np.inf).max(axis=1) <= np.maximum(threshold, 0.35 * level)
    room = way[-1] - edge >= 2.0
    return np.where(found, edge, 0.0), found & air & room


def _offset_map(
    rays: _Rays,
    first: Grid,
    face: NDArray[np.bool_],
    voxel_mm: FloatArray,
    options: SkinOptions,
) -> tuple[Grid, float]:
    """Smooth map of the edge's offset near the surface (coarse grid), and its scatter, mm."""
    if rays.clear.mean() < 0.1:
        msg = (
            f"Only {100 * rays.clear.mean():.0f} % of the head's outline is an edge against air"
            " (stage skin): the head fills the field of view, or this is no head. Use a whole-head"
            " T1."
        )
        raise SkinError(msg)
    weight = rays.clear.astype(np.float64)
    offset = np.zeros(first.shape, np.float32)
    near_face = ndimage.binary_dilation(face, iterations=3)
    # Where the head runs out of the grid the closed surface lies half a voxel beyond it.
    corner = np.clip(np.rint(rays.feet).astype(int), 0, np.array(first.shape) - 1)
    on_face = near_face[tuple(corner.T)]
    for _ in range(2):
        # What stands out from 12 mm around is no skin, clear though its edge may be.
        offset = _spread(rays, weight, first.shape, voxel_mm, (6 * options.detail_mm,))
        wide = ndimage.map_coordinates(offset, rays.feet.T, order=1, mode="nearest")
        weight = rays.clear * ((rays.offset_mm - wide < STANDS_OUT_MM) | on_face)
    wide_weight = weight
    scales = (options.detail_mm, 2.5 * options.detail_mm, 6 * options.detail_mm)
    for _ in range(2):
        offset = _spread(rays, weight, first.shape, voxel_mm, scales)
        smooth = ndimage.map_coordinates(offset, rays.feet.T, order=1, mode="nearest")
        residual = rays.offset_mm - smooth
        clear = residual[wide_weight > 0]
        sd = max(1.4826 * float(np.median(np.abs(clear - np.median(clear)))), 0.05)
        # Tukey's biweight: edges that stand out from their neighbours do not count.
        share = np.clip(1 - (residual / (4 * max(sd, 0.15))) ** 2, 0, None) ** 2
        weight = wide_weight * share
    return offset, float(np.hypot(sd, 0.1))


def _spread(
    rays: _Rays,
    weight: FloatArray,
    shape: tuple[int, ...],
    voxel_mm: FloatArray,
    scales_mm: tuple[float, ...],
) -> Grid:
    """Weighted means of the offsets over neighbours; wider where clear rays are far."""
    summed_up, total_up = np.zeros(shape, np.float32), np.zeros(shape, np.float32)
    # Each wider mean counts a hundredth of the one before: it decides only in gaps. The wide
    # ones are made on a grid of half the resolution.
    for power, sigma in enumerate(scales_mm):
        step = 1 if sigma < 2 * voxel_mm.mean() else 2
        small = tuple(-(-n // step) for n in shape)
        corner = np.clip(np.rint(rays.feet / step).astype(int), 0, np.array(small) - 1)
        flat = np.ravel_multi_index(tuple(corner.T), small)
        for values, into in ((weight, total_up), (weight * rays.offset_mm, summed_up)):
            counted = np.bincount(flat, values, int(np.prod(small))).reshape(small)
            factor = np.float32((sigma / step) ** 2 / step * 100.0**-power)
            dense: Grid = counted.astype(np.float32) * factor
            ndimage.gaussian_filter(dense, sigma / (step * voxel_mm), output=dense, truncate=3)
            if step > 1:
                for axis, count in enumerate(shape):
                    dense = _resample_edges(dense, axis, np.arange(count) / step)
            into += dense
    mean: Grid = (summed_up / np.maximum(total_up, 1e-12)).astype(np.float32)
    return mean


def _refined(first: Grid, offset: Grid, voxel_mm: FloatArray) -> Grid:
    """Height over the refined skin: each point takes the offset of its own foot point."""
    gradient = np.stack([np.asarray(g) for g in np.gradient(first, *voxel_mm)])
    gradient /= np.maximum(np.linalg.norm(gradient, axis=0), 1e-6)
    near = np.abs(first) < BAND_MM
    points = np.argwhere(near).T.astype(np.float32)
    feet = points - (first[near] * gradient[:, near]) / voxel_mm[:, None]
    height = first.copy()
    height[near] -= ndimage.map_coordinates(offset, feet, order=1, mode="nearest")
    # Distances to a body of voxels fall short of those to a smooth one, the farther the more (its
    # corners are always nearer). What is missing at a point is what its foot still stands over.
    feet = points - (height[near] * gradient[:, near]) / voxel_mm[:, None]
    missing = ndimage.map_coordinates(height, feet, order=1, mode="nearest")
    height[near] += np.clip(missing, -2, 2)
    return height


def _level_zero(height: Grid) -> tuple[FloatArray, NDArray[np.int32]]:
    """Zero surface in voxel positions, closed at the ends of the grid, faces outward."""
    closed = np.pad(height, 1, mode="constant", constant_values=float(BAND_MM))
    vertices, faces, _, _ = marching_cubes(closed, 0.0, gradient_direction="ascent")
    return vertices.astype(np.float64) - 1.0, faces.astype(np.int32)


def _mesh(height: Grid, scanner_from_grid: FloatArray) -> tuple[FloatArray, NDArray[np.int32]]:
    if not (height < 0).any() or not (height > 0).any():
        raise SkinError("The skin does not cross the volume (stage skin). Use a whole-head T1.")
    vertices, faces = _level_zero(height)
    points = apply_affine(scanner_from_grid, 2 * vertices + 0.5)
    a, b, c = (points[faces[:, corner]] for corner in range(3))
    if np.einsum("ij,ij->i", a, np.cross(b, c)).sum() < 0:
        faces = faces[:, ::-1]
    return points, np.ascontiguousarray(faces)


def _noise_sd(image: Grid, height: Grid, floor: float) -> float:
    """Noise of one voxel on the working grid: from the air, else from flat parts of the head."""
    far = np.argwhere(height[::2, ::2, ::2] > 8) * 4
    if len(far) > 500:
        air = image[tuple(far.T)].astype(np.float64)
        # Magnitude noise in air is Rayleigh: mean square 2 sd^2 (Gudbjartsson & Patz 1995,
        # Magn Reson Med 34:910). The median is kept from ghosts: sd = median / 1.1774.
        if floor > 0 and np.mean(air <= 0) < 0.2:
            return float(np.median(air)) / 1.1774
    inside = np.argwhere(height[::2, ::2, ::2] < -4) * 4
    inside = inside[(inside < np.array(image.shape) - 1).all(axis=1) & (inside > 0).all(axis=1)]
    i, j, k = inside.T
    centre = image[i, j, k]
    around = (
        image[i - 1, j, k]
        + image[i + 1, j, k]
        + image[i, j - 1, k]
        + image[i, j + 1, k]
        + image[i, j, k - 1]
        + image[i, j, k + 1]
    ) / 6
    # Structure only adds to the differences: the quietest third of them is nearest to noise.
    difference = np.abs(centre - around) / np.sqrt(1 + 1 / 6)
    return float(np.percentile(difference, 20)) / 0.2533


def _check_head(
    height: Grid, rays: _Rays, image: Grid, scanner_from_grid: FloatArray, floor: float
) -> tuple[Finding, ...]:
    """Refuse what is no head: no dark bone anywhere under the surface."""
    voxel_mm = voxel_sizes_mm(scanner_from_grid)
    chosen = np.flatnonzero(rays.clear)
    chosen = chosen[:: max(1, len(chosen) // 3000)]
    gradient = np.gradient(height, *(2 * voxel_mm))
    normal = np.stack(
        [ndimage.map_coordinates(g, rays.feet[chosen].T, order=1) for g in gradient], axis=1
    )
    normal /= np.maximum(np.linalg.norm(normal, axis=1, keepdims=True), 1e-6)
    way = np.arange(0.0, 30.0, 1.0)
    places = (2 * rays.feet[chosen] + 0.5)[:, None] - way[:, None] * (normal / voxel_mm)[:, None]
    profile = ndimage.map_coordinates(
        image, places.reshape(-1, 3).T, order=1, mode="nearest"
    ).reshape(len(chosen), -1)
    profile = profile - floor
    # A dip: somewhere brighter both nearer to the skin and deeper, by half again and more.
    outer = np.maximum.accumulate(profile, axis=1)
    inner = np.maximum.accumulate(profile[:, ::-1], axis=1)[:, ::-1]
    dip = (profile < 0.6 * np.minimum(outer, inner))[:, 2:22].any(axis=1)
    share = float(dip.mean()) if len(dip) else 0.0
    if share < 0.3:
        msg = (
            f"Under only {100 * share:.0f} % of the surface lies a dark layer such as bone (stage"
            " skin): this is not a head with its scalp (a phantom, or a brain already extracted)."
            " Use the T1 as the scanner delivered it."
        )
        raise SkinError(msg)
    clear = float(rays.clear.mean())
    if clear < 0.5:
        return (
            Finding(
                level="look",
                stage="skin",
                problem=f"Only {100 * clear:.0f} % of the head's outline is a clear edge against"
                " air; the rest of the skin is carried over from its surroundings.",
                suggestion="Look at the skin line in the slices, above all where the head"
                " touches the edge of the field of view.",
                doubt=0.6,
            ),
        )
    return ()

"""Inner and outer table of the skull along rays from the brain's centre."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray
from scipy import ndimage

from locator.head.grid import WorkGrid
from locator.head.model import HeadOptions
from locator.head.shape import smooth_on_sphere

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int32]

STEP_MM = 0.5
"""Spacing of the samples along a ray, and of the candidate places of the tables."""

TABLE_MM = 1.5
"""Least thickness of the dark inner table (value from memory)."""

THINNEST_MM = 2.0
"""Thinnest bone that is looked for (temporal squama; value from memory)."""


SOFT_LEVEL = 0.8
"""Muscle and galea on a T1 image, in units of grey matter (0.5 to 0.7 of white matter in figures of
relaxation times; common practice, no source)."""


@dataclass(frozen=True, kw_only=True, slots=True)
class SkullRadii:
    """Radii along the rays, mm, and how well each is known."""

    inner: FloatArray
    outer: FloatArray
    scalp: FloatArray
    inner_sd: FloatArray
    outer_sd: FloatArray
    vault: NDArray[np.bool_]


def scalp_radii(
    grid: WorkGrid, center: FloatArray, rays: FloatArray, start: FloatArray
) -> FloatArray:
    """First way out through the skin beyond `start` along each ray, mm, (V,)."""
    longest = float(np.linalg.norm(grid.image.shape))
    steps = np.arange(0.0, longest, 1.0)
    radii = start[:, None] + steps
    points = center + radii[..., None] * rays[:, None, :]
    height = ndimage.map_coordinates(
        grid.height_mm, points.reshape(-1, 3).T, order=1, mode="nearest"
    ).reshape(radii.shape)
    # The model ends in a plane below, and wherever the volume ends.
    height = np.maximum(height, grid.bottom_k - points[..., 2])
    for axis in range(3):
        height = np.maximum(height, points[..., axis] - (grid.image.shape[axis] - 1))
        height = np.maximum(height, -points[..., axis])
    outside = height > 0
    outside[:, -1] = True
    first = np.maximum(outside.argmax(axis=1), 1)
    row = np.arange(len(rays))
    before, after = height[row, first - 1], height[row, first]
    part = np.where(after > before, -before / np.where(after > before, after - before, 1.0), 0.5)
    result: FloatArray = radii[row, first - 1] + np.clip(part, 0, 1) * 1.0
    return result


def mask_radii(
    distance: NDArray[np.float32], center: FloatArray, rays: FloatArray, longest: float
) -> FloatArray:
    """Outermost zero crossing of a signed distance (negative inside) along each ray, (V,)."""
    radii = np.arange(0.0, longest, 0.5)
    points = center + radii[:, None] * rays[:, None, :]
    values = ndimage.map_coordinates(distance, points.reshape(-1, 3).T, order=1, cval=50.0)
    values = values.reshape(len(rays), -1)
    inside = values < 0
    last = values.shape[1] - 1 - inside[:, ::-1].argmax(axis=1)
    last = np.clip(last, 0, values.shape[1] - 2)
    row = np.arange(len(rays))
    before, after = values[row, last], values[row, last + 1]
    part = np.where(after > before, -before / np.where(after > before, after - before, 1.0), 0.5)
    result: FloatArray = radii[last] + 0.5 * np.clip(part, 0, 1)
    return result


@njit(cache=True)
def _belief(cost, ring, weight, most, n_rounds):  # type: ignore[no-untyped-def]
    """Min-sum belief propagation on the icosphere graph; cut-off quadratic differences."""
    n_nodes, n_labels = cost.shape
    messages = np.zeros((n_nodes, 6, n_labels))
    back = np.zeros((n_nodes, 6), dtype=np.int64)
    for v in range(n_nodes):
        for e in range(6):
            other = ring[v, e]
            for o in range(6):
                if ring[other, o] == v:
                    back[v, e] = o
                    break
    valence = np.full(n_nodes, 6)
    for v in range(n_nodes):
        if ring[v, 5] == ring[v, 0]:
            valence[v] = 5
    total = cost.copy()
    sent = np.empty(n_labels)
    for _ in range(n_rounds):
        for v in range(n_nodes):
            for e in range(valence[v]):
                other = ring[v, e]
                o = back[v, e]
                low = 1e30
                for a in range(n_labels):
                    sent[a] = total[v, a] - messages[v, e, a]
                    if sent[a] < low:
                        low = sent[a]
                for b in range(n_labels):
                    best = low + weight * most
                    reach = int(np.sqrt(most)) + 1
                    for a in range(max(0, b - reach), min(n_labels, b + reach + 1)):
                        value = sent[a] + weight * (a - b) * (a - b)
                        if value < best:
                            best = value
                    new = best - low
                    mixed = 0.5 * (new + messages[other, o, b])
                    total[other, b] += mixed - messages[other, o, b]
                    messages[other, o, b] = mixed
    return total


def _choose(
    cost: FloatArray, ring: IntArray, *, weight: float, most_mm: float
) -> tuple[FloatArray, FloatArray]:
    """Labels (fractional) of least total cost, and their spread, in units of `STEP_MM`."""
    most = (most_mm / STEP_MM) ** 2
    total = _belief(np.ascontiguousarray(cost), ring, weight * STEP_MM**2, most, 25)
    pick = total.argmin(axis=1)
    row = np.arange(len(cost))
    middle = np.clip(pick, 1, cost.shape[1] - 2)
    left, here, right = (total[row, middle + d] for d in (-1, 0, 1))
    curve = left - 2 * here + right
    part = np.where(
        (pick == middle) & (curve > 1e-9), 0.5 * (left - right) / np.maximum(curve, 1e-9), 0
    )
    chance = np.exp(-np.clip(total - total.min(axis=1, keepdims=True), 0, 50))
    chance /= chance.sum(axis=1, keepdims=True)
    labels = np.arange(cost.shape[1])
    mean = chance @ labels
    spread = np.sqrt(np.maximum(chance @ labels**2 - mean**2, 0.25))
    return pick + np.clip(part, -0.5, 0.5), spread


def _inner_cost(
    profile: FloatArray,
    origin: int,
    depth: FloatArray,
    outer: FloatArray,
    csf_level: float,
    vault: NDArray[np.bool_],
) -> FloatArray:
    """How badly "CSF up to here, then a dark table" fits each ray, (V, labels).

    CSF may be brighter than its level (vessels, dura, a gyrus beyond the hull) but hardly darker;
    the first `TABLE_MM` of bone are dark; what follows up to the outer table may be marrow. The
    tolerance grows as CSF and bone come closer in brightness, so that the priors decide where the
    image cannot.
    """
    n_rays, n_samples = profile.shape
    samples = np.arange(n_samples) - origin
    inside = (samples[None, :] >= 0) & (samples[None, :] * STEP_MM <= outer[:, None])
    known = profile[vault][inside[vault]]
    bone_level = float(np.percentile(known, 10)) if len(known) else 0.0
    bone_level = min(bone_level, 0.8 * csf_level)
    spread = max((csf_level - bone_level) / 2.5, 0.08)
    off = (profile - csf_level) / spread
    as_csf = np.where(off < 0, np.minimum(0.5 * off**2, 3.0), np.minimum(0.05 * off**2, 0.8))
    off = np.maximum(profile - bone_level, 0.0) / spread
    as_bone = np.minimum(0.5 * off**2, 4.0)
    as_rest = np.minimum(as_bone, 0.4)
    sums = []
    for values in (as_csf, as_bone, as_rest):
        values = np.where(inside, values, 0.0)
        sums.append(np.concatenate([np.zeros((n_rays, 1)), np.cumsum(values, axis=1)], axis=1))
    here = origin + np.rint(depth / STEP_MM).astype(int)
    table = np.minimum(here + round(TABLE_MM / STEP_MM), n_samples)
    cost = (
        sums[0][:, here]
        + (sums[1][:, table] - sums[1][:, here])
        + (sums[2][:, [-1]] - sums[2][:, table])
    )
    result: FloatArray = 0.7 * cost
    return result


def _half_way(profile: FloatArray, before: float, outer: FloatArray, ring: IntArray) -> FloatArray:
    """The outer table's edge half-way between dark and the first layer outside it, mm.

    That layer is the galea or a muscle, about `SOFT_LEVEL` of grey matter and often thinner than a
    voxel, before the bright fat: half-way up to the fat lies 0.6 mm too far out. Where dark and
    bright cannot be told apart the place is kept; single rays follow the median of their
    neighbours.
    """
    row = np.arange(len(profile))
    fine = np.arange(-3.0, 3.01, 0.1)
    at = (outer[:, None] + fine + before) / STEP_MM
    low = np.clip(np.floor(at).astype(int), 0, profile.shape[1] - 2)
    part = np.clip(at - low, 0.0, 1.0)
    values = profile[row[:, None], low] * (1 - part) + profile[row[:, None], low + 1] * part
    # The table itself, not the inner one beyond thin marrow.
    inside, outside = np.flatnonzero((fine >= -2.0) & (fine <= 0.8)), fine >= 0.0
    darkest = inside[-1] - values[:, inside[::-1]].argmin(axis=1)
    dark = values[row, darkest]
    bright = values[:, outside].max(axis=1)
    half = 0.5 * (dark + np.minimum(bright, SOFT_LEVEL))
    above = (values > half[:, None]) & (np.arange(len(fine))[None, :] > darkest[:, None])
    edge = fine[above.argmax(axis=1)]
    clear = above.any(axis=1) & (bright - dark > 0.4)
    moved = np.where(clear, edge, 0.0)
    around = np.median(np.concatenate([moved[:, None], moved[ring]], axis=1), axis=1)
    # Of the two the more careful: a lone jump is an artefact of the ray.
    moved = np.where(np.abs(moved - around) > 0.7, around, moved)
    result: FloatArray = outer + moved
    return result


def table_beyond(profile: FloatArray, first: NDArray[np.intp], last: FloatArray) -> FloatArray:
    """How clearly a dark table lies between two bright layers beyond each candidate place.

    Marrow is as bright as scalp fat, so its inner edge looks like the outside of the skull; what
    gives it away is the outer table beyond it, a dark line that a millimetre's voxel only half
    resolves.

    Parameters
    ----------
    profile : (V, N) ndarray
        Intensity along the rays, in units of grey matter.
    first : (P,) ndarray of int
        First sample beyond each candidate place.
    last : (V,) ndarray
        Sample of each ray at which the scalp ends.

    Returns
    -------
    (V, P) ndarray
        From 0 (nothing) to 1 (a clear table).
    """
    n_samples = profile.shape[1]
    within = np.arange(n_samples)[None, :] <= last[:, None]
    scalp = np.where(within, profile, 0.0)
    after = np.maximum.accumulate(scalp[:, ::-1], axis=1)[:, ::-1]
    # Bone is far darker than muscle even where fat bleeds into it.
    dark = np.clip((SOFT_LEVEL - scalp) / 0.4, 0.0, 1.0) * within
    clear = np.zeros((len(profile), len(first)))
    for column, start in enumerate(first):
        if start >= n_samples:
            continue
        so_far = np.maximum.accumulate(scalp[:, start:], axis=1)
        walls = np.minimum(so_far, after[:, start:])
        valley = np.clip(walls - scalp[:, start:] - 0.5, 0.0, 1.0) * dark[:, start:]
        clear[:, column] = valley.max(axis=1)
    return clear


def find_skull(
    grid: WorkGrid,
    profile_image: NDArray[np.float32],
    center: FloatArray,
    rays: FloatArray,
    ring: IntArray,
    brain: FloatArray,
    csf_level: float,
    options: HeadOptions,
) -> SkullRadii:
    """Find both tables along every ray.

    The outer table is the outermost edge from dark (inside) to bright (outside) below the skin;
    the inner table lies where the profile turns dark outside the brain's hull, with priors on the
    gap and on the thickness. Both are chosen for all rays together: neighbours should agree.

    Parameters
    ----------
    grid : WorkGrid
    profile_image : (I, J, K) ndarray
        Intensity in units of grey matter, shading removed.
    center : (3,) ndarray
        Grid indices.
    rays : (V, 3) ndarray
    ring : (V, 6) ndarray
        Neighbours.
    brain : (V,) ndarray
        Radii of the brain's hull, mm.
    csf_level : float
        Mean of CSF in units of grey matter.
    options : HeadOptions

    Returns
    -------
    SkullRadii
    """
    scalp = scalp_radii(grid, center, rays, brain + 2.0)
    gap = scalp - brain
    before = 4.0
    reach = 34.0
    at = np.arange(-before, reach + 4.0, STEP_MM)
    points = center + (brain[:, None] + at)[..., None] * rays[:, None, :]
    profile = ndimage.map_coordinates(
        profile_image, points.reshape(-1, 3).T, order=1, mode="nearest"
    ).reshape(len(rays), -1)
    profile = np.minimum(profile, 2.0)
    beyond = at[None, :] > (gap[:, None] + 0.5)
    profile[beyond] = 0.0
    total = np.concatenate([np.zeros((len(rays), 1)), np.cumsum(profile, axis=1)], axis=1)

    def mean_between(low: FloatArray, high: FloatArray) -> FloatArray:
        first = np.clip(np.rint((low + before) / STEP_MM).astype(int), 0, profile.shape[1])
        last = np.clip(np.rint((high + before) / STEP_MM).astype(int), 0, profile.shape[1])
        last = np.maximum(last, first + 1)
        last = np.minimum(last, profile.shape[1])
        first = np.minimum(first, last - 1)
        return (total[:, last] - total[:, first]) / (last - first)

    vault = gap < 32.0
    # Outer table.
    place = np.arange(2.5, 28.0, STEP_MM)
    inside = mean_between(place - 2.0, place)
    outside = mean_between(place + 0.5, place + 2.5)
    edge = np.clip(outside - inside, -1.0, 0.8)
    dark = np.clip(inside - 0.4, 0.0, 1.0)
    # Bone-dark length between the candidate and the skin: beyond marrow there is a table still.
    bone_like = np.clip(1.0 - profile / (0.7 * csf_level + 0.1), 0.0, 1.0)
    bone_like[at[None, :] > gap[:, None] - 1.5] = 0.0
    bone_sum = np.concatenate([np.zeros((len(rays), 1)), np.cumsum(bone_like, axis=1)], axis=1)
    first = np.clip(np.rint((place + 0.5 + before) / STEP_MM).astype(int), 0, profile.shape[1])
    left_over = (bone_sum[:, [-1]] - bone_sum[:, first]) * STEP_MM
    farther = table_beyond(profile, first, np.clip(gap - 2.0 + before, 0.0, None) / STEP_MM)
    cost = -6.0 * edge + 3.0 * dark + 2.0 * np.minimum(left_over, 4.0) + 6.0 * farther
    expected = options.csf_mm + options.skull_mm
    cost = cost + 0.5 * ((place - expected) / 5.0) ** 2
    cost[~vault] = 0.5 * ((place - expected) / 2.0) ** 2
    room = gap[:, None] - place[None, :]
    cost = cost + np.where(room < 2.0, 20.0 * (2.0 - room), 0.0)
    label, outer_sd = _choose(cost, ring, weight=0.25, most_mm=4.0)
    outer = np.interp(label, np.arange(len(place)), place)
    outer = np.where(vault, _half_way(profile, before, outer, ring), outer)
    # Inner table.
    depth = np.arange(0.5, 14.0, STEP_MM)
    thickness = outer[:, None] - depth[None, :]
    cost = _inner_cost(profile, round(before / STEP_MM), depth, outer, csf_level, vault)
    cost = (
        cost
        + 0.5 * ((depth - options.csf_mm) / options.csf_sd_mm) ** 2
        + 0.5 * ((thickness - options.skull_mm) / (1.5 * options.skull_sd_mm)) ** 2
    )
    cost[~vault] = 0.5 * ((np.broadcast_to(depth, cost.shape)[~vault] - 1.5) / 1.0) ** 2
    cost = cost + np.where(thickness < THINNEST_MM, 20.0 * (THINNEST_MM - thickness), 0.0)
    label, inner_sd = _choose(cost, ring, weight=0.25, most_mm=3.0)
    inner = np.interp(label, np.arange(len(depth)), depth)
    inner_mm = brain + inner
    outer_mm = brain + outer
    base = np.where(vault, 0.0, 1.0)
    return SkullRadii(
        inner=inner_mm,
        outer=outer_mm,
        scalp=scalp,
        inner_sd=np.sqrt((inner_sd * STEP_MM) ** 2 + 0.5**2 + (2.0 * base) ** 2),
        outer_sd=np.sqrt((outer_sd * STEP_MM) ** 2 + 0.5**2 + (4.0 * base) ** 2),
        vault=smooth_on_sphere(base, ring, 1) < 0.3,
    )

"""Folded cortex: sulci as thin sheets that follow a band-limited random field over the brain."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage as ndi
from scipy.spatial import cKDTree

from synthetic_heads.shapes import band_noise, finer

Field = NDArray[np.float32]


def fold(
    hull_level: Field,
    step_mm: float,
    rng: np.random.Generator,
    *,
    right: NDArray[np.bool_] | None = None,
    wave_mm: float = 24.0,
    depth_mm: tuple[float, float] = (10.0, 22.0),
    open_mm: float = 0.55,
) -> Field:
    """Fold the surface of a smooth brain.

    The zero lines of a random field of one wavelength wind over the hull as sulci do; each is
    carried inwards along the hull's normal as a sheet of cerebrospinal fluid to a depth that
    varies smoothly from place to place.

    Parameters
    ----------
    hull_level : (A, B, C) ndarray of float32
        Signed distance to the hull, mm, negative inside, step ``step_mm``.
    step_mm : float
        Grid step, mm; the result has half of it.
    rng : numpy.random.Generator
        Source of the folds.
    right : (A, B, C) ndarray of bool, optional
        Where the right half is: it gets folds of its own.
    wave_mm : float
        Wavelength of the field; sulci stand about half of it apart.
    depth_mm : (float, float)
        Least and greatest usual depth of a sulcus.
    open_mm : float
        Half the width of a sulcus.

    Returns
    -------
    (2 A - 1, 2 B - 1, 2 C - 1) ndarray of float32
        Level of the pial surface, negative in tissue, mm; the hull itself is not cut out.
    """
    slope = np.stack(np.gradient(ndi.gaussian_filter(hull_level, 0.8), np.float32(step_mm)))
    length = np.sqrt((slope**2).sum(axis=0)) + np.float32(1e-3)
    slope /= length
    depth = np.clip(-hull_level, -6.0, 40.0)
    place = np.indices(hull_level.shape, dtype=np.float32)
    place += slope * (depth / np.float32(step_mm))  # the foot point on the hull
    winding = band_noise(rng, hull_level.shape, step_mm, wave_mm, 0.16)
    carried = ndi.map_coordinates(winding, place, order=1, mode="nearest")
    if right is not None:
        other = band_noise(rng, hull_level.shape, step_mm, wave_mm, 0.16)
        mirrored = ndi.map_coordinates(other, place, order=1, mode="nearest")
        carried = np.where(right, mirrored, carried)
    deep = band_noise(rng, hull_level.shape, step_mm, 2.2 * wave_mm, 0.4)
    bottom = np.interp(
        ndi.map_coordinates(deep, place, order=1, mode="nearest"), [-1.5, 1.5], depth_mm
    ).astype(np.float32)

    sheet = _distance_to_zero(carried, step_mm, -hull_level, depth_mm[1] + 6.0)
    fine_depth = finer(-hull_level)
    sheet = np.abs(finer(sheet))
    below = np.maximum(fine_depth - finer(bottom), 0.0)
    sheet = np.sqrt(sheet * sheet + below * below)
    # a sulcus opens a little towards the hull
    width = np.float32(open_mm) * (1 + 1.2 * np.exp(-np.maximum(fine_depth, 0) / 3.0))
    pial: Field = (width - sheet).astype(np.float32)
    return pial


def _distance_to_zero(field: Field, step_mm: float, depth: Field, deepest: float) -> Field:
    """Signed distance (mm, cut at 9) to the zero surface of a field, near the hull."""
    near = (depth > -4.0) & (depth < deepest)
    crossings = []
    for axis in range(3):
        head = [slice(None)] * 3
        tail = [slice(None)] * 3
        head[axis], tail[axis] = slice(None, -1), slice(1, None)
        first, second = field[tuple(head)], field[tuple(tail)]
        # a jump (where the foot point changes sides) is no sulcus
        found = (first * second < 0) & (np.abs(first - second) < 0.35 * step_mm)
        found &= near[tuple(head)]
        index = np.argwhere(found).astype(np.float64)
        index[:, axis] += (first[found] / (first[found] - second[found])).astype(np.float64)
        crossings.append(index)
    places = np.concatenate(crossings)
    result = np.full(field.shape, 9.0, dtype=np.float32)
    if len(places):
        tree = cKDTree(places)
        distance, _ = tree.query(
            np.argwhere(near), distance_upper_bound=9.0 / step_mm, eps=0.02, workers=1
        )
        result[near] = np.minimum(distance * step_mm, 9.0)
    signed: Field = np.where(field < 0, -result, result)
    return signed

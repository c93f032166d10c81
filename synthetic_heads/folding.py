"""Folded cortex: sulci as thin sheets that follow a band-limited random field over the brain."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage as ndi

from synthetic_heads.shapes import band_noise, finer

Field = NDArray[np.float32]


def fold(
    hull_level: Field,
    step_mm: float,
    rng: np.random.Generator,
    *,
    wave_mm: float = 25.0,
    depth_mm: tuple[float, float] = (9.0, 19.0),
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
    wave_mm : float
        Wavelength of the field; sulci stand about half of it apart.
    depth_mm : (float, float)
        Least and greatest usual depth of a sulcus.
    open_mm : float
        Half the width of a sulcus.

    Returns
    -------
    (2 A - 1, 2 B - 1, 2 C - 1) ndarray of float32
        Level of the pial surface, negative in tissue, mm.
    """
    slope = np.stack(np.gradient(ndi.gaussian_filter(hull_level, 0.8), np.float32(step_mm)))
    length = np.sqrt((slope**2).sum(axis=0)) + np.float32(1e-3)
    slope /= length
    depth = np.clip(-hull_level, -6.0, 40.0)
    place = np.indices(hull_level.shape, dtype=np.float32)
    place += slope * (depth / np.float32(step_mm))  # the foot point on the hull
    winding = band_noise(rng, hull_level.shape, step_mm, wave_mm, 0.16)
    deep = band_noise(rng, hull_level.shape, step_mm, 2.2 * wave_mm, 0.4)
    carried = ndi.map_coordinates(winding, place, order=1, mode="nearest")
    carried = ndi.gaussian_filter(carried, 0.6)
    grade = np.sqrt(sum(part**2 for part in np.gradient(carried, np.float32(step_mm))))
    grade = np.maximum(ndi.gaussian_filter(grade, 1.0), 0.06)
    bottom = np.interp(
        ndi.map_coordinates(deep, place, order=1, mode="nearest"), [-1.5, 1.5], depth_mm
    ).astype(np.float32)

    fine_depth = finer(-hull_level)
    sheet = np.abs(finer(carried)) / finer(grade)
    below = np.maximum(fine_depth - finer(bottom), 0.0)
    sheet = np.sqrt(sheet * sheet + below * below)
    # a sulcus opens a little towards the hull
    width = np.float32(open_mm) * (1 + 0.8 * np.exp(-np.maximum(fine_depth, 0) / 3.0))
    pial: Field = -np.minimum(fine_depth, sheet - width)
    return pial.astype(np.float32)

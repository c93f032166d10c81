"""The skin surface without the capsules on it, as a signed distance and as a dense mesh."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from locator.results import Finding, Frozen

FloatArray = NDArray[np.float64]


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

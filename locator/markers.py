"""Capsule candidates in the shell around the skin, with sub-voxel centres and evidence."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from locator.results import Finding, Frozen

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Markers(Frozen):
    """Every candidate blob, strongest first.

    Attributes
    ----------
    centers_scanner_mm : (M, 3) ndarray
        Centres, scanner mm, corrected by `shift_mm`.
    covariance_mm2 : (M, 3, 3) ndarray
        Covariance of each centre, mm^2.
    diameter_mm, contrast, roundness, skin_mm, score : (M,) ndarray
        Size; brightness over surroundings in units of fat; 1 for a ball, towards 0 for a sheet or
        rod; height of the centre over the skin (mm); probability in [0, 1] that the blob is a
        capsule by its looks alone. Sorted by falling score.
    capsule_mm : float
        Diameter that was given or estimated.
    shift_mm : (3,) ndarray
        Chemical shift that was removed from every centre, scanner mm; zeros when none is known.
    findings : tuple of Finding
    """

    centers_scanner_mm: FloatArray
    covariance_mm2: FloatArray
    diameter_mm: FloatArray
    contrast: FloatArray
    roundness: FloatArray
    skin_mm: FloatArray
    score: FloatArray
    capsule_mm: float
    shift_mm: FloatArray
    findings: tuple[Finding, ...] = ()

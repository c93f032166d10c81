"""Where activity may be: a grid of sources in the grey matter or the whole brain."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from locator.results import Finding, Frozen

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Sources(Frozen):
    """A source space.

    Attributes
    ----------
    positions_scanner_mm : (S, 3) ndarray
    normals : (S, 3) ndarray
        Unit vectors out of the cortex; NaN where there is none.
    kind : str
        `grey` or `brain`.
    spacing_mm : float
    nearest_source : (I, J, K) ndarray of int32
        For each voxel of the T1 grid the index of its nearest source, -1 outside the source space.
    scanner_from_voxel : (4, 4) ndarray
        Affine of the T1 grid.
    findings : tuple of Finding
    """

    positions_scanner_mm: FloatArray
    normals: FloatArray
    kind: str
    spacing_mm: float
    nearest_source: NDArray[np.int32]
    scanner_from_voxel: FloatArray
    findings: tuple[Finding, ...] = ()

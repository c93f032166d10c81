"""The lead field for the whole scalp by a symmetric boundary-element method."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from locator.results import Finding, Frozen

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class LeadField(Frozen):
    """Potentials on the scalp for every source.

    Attributes
    ----------
    scalp_vertices_scanner_mm : (V, 3) ndarray
        Read-out mesh.
    scalp_faces : (F, 3) ndarray of int32
    potentials_uv_per_nam : (V, S, 3) ndarray of float32
        Microvolt for 1 nAm along scanner x, y, z at each source.
    sources_scanner_mm : (S, 3) ndarray
    conductivity_s_per_m : (3,) ndarray
        Scalp, skull, brain.
    findings : tuple of Finding
    """

    scalp_vertices_scanner_mm: FloatArray
    scalp_faces: NDArray[np.int32]
    potentials_uv_per_nam: NDArray[np.float32]
    sources_scanner_mm: FloatArray
    conductivity_s_per_m: FloatArray
    findings: tuple[Finding, ...] = ()

"""Scalp, outer skull, inner skull and tissues from the one T1 volume."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from locator.results import Finding, Frozen

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Surface(Frozen):
    """A closed, outward-wound triangle mesh.

    Attributes
    ----------
    vertices_scanner_mm : (V, 3) ndarray
    faces : (F, 3) ndarray of int32
    sd_mm : (V,) ndarray
        How well each vertex is known along its normal, mm.
    """

    vertices_scanner_mm: FloatArray
    faces: NDArray[np.int32]
    sd_mm: FloatArray


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Head(Frozen):
    """The three surfaces of the field model, and the tissues.

    Attributes
    ----------
    scalp, outer_skull, inner_skull : Surface
        Nested, never touching; vertex i of each lies on the same ray.
    tissues : (I, J, K) ndarray of int32
        On the T1's own grid, BIDS common tissue labels: 0 background, 1 grey matter, 2 white
        matter, 3 CSF, 4 bone, 5 soft tissue, 6 other, 10 brain stem, 11 cerebellum.
    scanner_from_voxel : (4, 4) ndarray
        Affine of the T1 grid.
    findings : tuple of Finding
    """

    scalp: Surface
    outer_skull: Surface
    inner_skull: Surface
    tissues: NDArray[np.int32]
    scanner_from_voxel: FloatArray
    findings: tuple[Finding, ...] = ()

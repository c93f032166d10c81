"""Electrode names and their template places: 10-20, 10-10, 10-05, or a layout of one's own."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from locator.results import Finding, Frozen

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Layout(Frozen):
    """Template places for a set of names.

    Attributes
    ----------
    names : tuple of str
        In the order asked.
    positions_mm : (E, 3) ndarray
        Template places on the skin in the layout's own frame (x right, y anterior, z superior), mm.
    landmarks_mm : (4, 3) ndarray
        NAS, LPA, RPA, inion in the same frame; NaN where the layout has none.
    source : str
        Where the places come from.
    """

    names: tuple[str, ...]
    positions_mm: FloatArray
    landmarks_mm: FloatArray
    source: str

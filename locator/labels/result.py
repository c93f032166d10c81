"""Bring names and capsules together, with the probability that each label is right."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from locator.results import Finding, Frozen

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Electrodes(Frozen):
    """One row per asked-for name, in the order asked.

    Attributes
    ----------
    names : tuple of str
    positions_scanner_mm : (E, 3) ndarray
        Contact points on the skin, scanner mm.
    covariance_mm2 : (E, 3, 3) ndarray
        Of the contact points.
    status : tuple of str
        `seen`, `inferred`, `corrected` or `given`.
    confidence : (E,) ndarray
        `seen`: probability that the label is right; `inferred`: that there is no capsule to be
        found; else NaN.
    residual_mm : (E,) ndarray
        Distance from the fitted layout, mm.
    sd_mm : (E,) ndarray
        Root of the mean of the three axes' variances, mm.
    capsule_scanner_mm : (E, 3) ndarray
        Capsule centres, NaN where there is none.
    marker : (E,) ndarray of int32
        Row of `Markers`, -1 where there is none.
    alternatives : tuple of str
        For each electrode, in words, what else it could be; empty when there is nothing.
    fitted_scanner_mm : (E, 3) ndarray
        Where the fitted layout expects each contact point, scanner mm.
    landmarks_scanner_mm : (4, 3) ndarray
        NAS, LPA, RPA, inion, given or estimated; NaN where unknown.
    landmarks_sd_mm : (4,) ndarray
    landmarks_given : bool
    holder_mm : float
        Skin to underside of the capsules, mm.
    side_basis : str
        What left and right rest on, in words.
    why_not : tuple of str
        One entry per row of `Markers`: why it is no electrode; empty where it is one.
    findings : tuple of Finding
    """

    names: tuple[str, ...]
    positions_scanner_mm: FloatArray
    covariance_mm2: FloatArray
    status: tuple[str, ...]
    confidence: FloatArray
    residual_mm: FloatArray
    sd_mm: FloatArray
    capsule_scanner_mm: FloatArray
    marker: NDArray[np.int32]
    alternatives: tuple[str, ...]
    fitted_scanner_mm: FloatArray
    landmarks_scanner_mm: FloatArray
    landmarks_sd_mm: FloatArray
    landmarks_given: bool
    holder_mm: float
    side_basis: str
    why_not: tuple[str, ...]
    findings: tuple[Finding, ...] = ()

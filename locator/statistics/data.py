"""The results of the statistics: what survives, where its peak is, and the null control."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from locator.results import Finding, Frozen

FloatArray = NDArray[np.float64]


def _nothing() -> FloatArray:
    return np.zeros(0)


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class SourceTest(Frozen):
    """Sign-flip test with the maximum over sources and samples.

    Attributes
    ----------
    statistic : (S,) ndarray
        Standardised power of the average, maximum over the window.
    statistic_time_s : (S,) ndarray
        When that maximum is reached.
    corrected_p : (S,) ndarray
        Family-wise p; NaN everywhere when nothing could be tested.
    amplitude_nam : (S,) ndarray
        Minimum-norm current amplitude at the sample of the largest statistic; not a test.
    null_maxima : (P,) ndarray
        Maximum of each permutation, the identity first.
    threshold : float
        Of the statistic at p = 0.05.
    n_permutations : int
    exact : bool
        Whether every sign pattern was used.
    window_s : (2,) ndarray
    findings : tuple of Finding
    """

    statistic: FloatArray
    statistic_time_s: FloatArray
    corrected_p: FloatArray
    amplitude_nam: FloatArray
    null_maxima: FloatArray
    threshold: float
    n_permutations: int
    exact: bool
    window_s: FloatArray
    findings: tuple[Finding, ...] = ()


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Peaks(Frozen):
    """Surviving peaks, strongest first; empty arrays when nothing survives.

    Attributes
    ----------
    positions_scanner_mm : (K, 3) ndarray
    source : (K,) ndarray of int32
    statistic, corrected_p, time_s : (K,) ndarray
    region_mm : (K,) ndarray
        Radius of the ball round the peak that holds 95 % of its region.
    region_probability : (S,) ndarray
        Over the sources, for the place of the first peak; zeros when there is none.
    region_causes_mm : mapping of str to float
        Radius due to each cause alone.
    findings : tuple of Finding
    point_spread_mm : (K,) ndarray
        Spatial deviation of the estimate of one noise-free source at the peak: the root of the
        mean squared distance from it, weighted by the power of the estimate.
    """

    positions_scanner_mm: FloatArray
    source: NDArray[np.int32]
    statistic: FloatArray
    corrected_p: FloatArray
    time_s: FloatArray
    region_mm: FloatArray
    region_probability: FloatArray
    region_causes_mm: Mapping[str, float]
    findings: tuple[Finding, ...] = ()
    point_spread_mm: FloatArray = field(default_factory=_nothing)


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class NullControl(Frozen):
    """How often anything survives on pseudo-events in event-free stretches.

    Attributes
    ----------
    rate, low, high : float
        Rate and its 95 % interval; NaN when it could not be checked.
    n_checks : int
    sentence : str
        What a person should read, including "could not be checked" and why.
    findings : tuple of Finding
    """

    rate: float
    low: float
    high: float
    n_checks: int
    sentence: str
    findings: tuple[Finding, ...] = ()

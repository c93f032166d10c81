"""Noise covariance and the minimum-norm family of source estimates."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from locator.results import Finding, Frozen

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Inverse(Frozen):
    """A linear source estimate and its standardisation.

    Attributes
    ----------
    kernel_nam_per_uv : (S, 3, E) ndarray
        Current estimate (nAm) from average-referenced potentials (microvolt).
    standardise : (S, 3, 3) ndarray
        Per source a matrix W such that the statistic is the squared length of W @ (kernel @ data).
    electrode_names : tuple of str
    noise_covariance_uv2 : (E, E) ndarray
        Of one trial, average reference.
    noise_rank : int
    method : str
    lambda2 : float
    snr : float
        Amplitude signal-to-noise of the average that gave `lambda2`.
    n_average : int
        Trials in the average that the operator was made for.
    findings : tuple of Finding
    """

    kernel_nam_per_uv: FloatArray
    standardise: FloatArray
    electrode_names: tuple[str, ...]
    noise_covariance_uv2: FloatArray
    noise_rank: int
    method: str
    lambda2: float
    snr: float
    n_average: int
    findings: tuple[Finding, ...] = ()

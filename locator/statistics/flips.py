"""Sign flips over trials with the maximum over sources and samples.

The statistic is the standardised power of the *average*: the squared length of
``standardise @ kernel @ average`` at each source and sample, with one fixed denominator. A t value
over trials at each source would cancel the scaling that gives the method its zero localisation
error.

Under the hypothesis that noise alone is there, every trial may have its sign turned. For each
pattern of signs the trials are summed *in sensor space*, written in the few directions that the
data span, and only then multiplied with the kernel.
"""

from __future__ import annotations

import logging
import os
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor

import numpy as np
from numpy.typing import NDArray

from locator.errors import StatisticsError
from locator.inverse import Inverse
from locator.recording import Epochs, check_times
from locator.results import Finding, Progress
from locator.statistics.bounds import FilterGroups, group_filters, largest
from locator.statistics.data import SourceTest

LOG = logging.getLogger(__name__)
FloatArray = NDArray[np.float64]

ALPHA = 0.05
TIE = 1e-5
"""Relative difference that counts as a tie: permutations are computed in single precision."""
COLUMNS = 4096
"""Sums (permutations times samples) at a time."""
MOST_EXACT = 20
"""Trials up to which all sign patterns can be asked for (2^20 of them)."""


def filters(inverse: Inverse) -> FloatArray:
    """The standardised kernel, (S, 3, E): its squared length is the statistic."""
    product: FloatArray = inverse.standardise @ inverse.kernel_nam_per_uv
    return product


def power(weights: FloatArray, data_uv: FloatArray) -> FloatArray:
    """Statistic (S, T) of potentials (E, T) under filters (S, 3, E)."""
    n_sources, _, n_electrodes = weights.shape
    estimate = weights.reshape(-1, n_electrodes) @ data_uv
    statistic: FloatArray = (estimate.reshape(n_sources, 3, -1) ** 2).sum(axis=1)
    return statistic


def window_samples(epochs: Epochs, window_s: Sequence[float] | None) -> NDArray[np.intp]:
    """Samples of the epochs that are tested; by default those after 0.

    Raises
    ------
    SettingError
        If the window runs backwards or leaves the epoch.
    StatisticsError
        If it holds no sample.
    """
    times = epochs.times_s
    half = 0.5 / epochs.sampling_hz
    if window_s is None:
        inside = np.flatnonzero(times > 1e-9)
        first, last = 0.0, float(times[-1])
    else:
        first, last = check_times((min(times[0], -0.02), times[-1] + half), window_s)
        inside = np.flatnonzero((times >= first - 1e-9) & (times <= last + 1e-9))
    if len(inside) == 0:
        msg = (
            f"The window from {first:g} s to {last:g} s holds no sample: the epochs have one every"
            f" {1 / epochs.sampling_hz:.4g} s (stage statistics). Widen --window."
        )
        raise StatisticsError(msg)
    return inside


def _signs(
    n_trials: int, n_permutations: int, rng: np.random.Generator
) -> tuple[NDArray[np.float32], bool]:
    """Sign patterns (P, N), the identity first; half of all of them when there are few.

    A pattern and its opposite give the same power, so an exact test fixes the first sign.
    """
    if n_trials <= MOST_EXACT and 2**n_trials <= n_permutations:
        codes = np.arange(2 ** (n_trials - 1))
        bits = (codes[:, None] >> np.arange(n_trials - 1)) & 1
        signs = np.ones((len(codes), n_trials), dtype=np.float32)
        signs[:, 1:] -= 2 * bits
        return signs, True
    signs = np.where(rng.random((n_permutations, n_trials)) < 0.5, -1, 1).astype(np.float32)
    signs[0] = 1
    return signs, False


def _in_threads(work: Callable[[int], None], n: int, progress: Progress | None) -> None:
    with ThreadPoolExecutor(max(1, min(os.cpu_count() or 1, 4))) as pool:
        for done, _ in enumerate(pool.map(work, range(n))):
            if progress is not None:
                progress((done + 1) / n, "sign flips")


def flip_maxima(
    groups: FilterGroups,
    trials_uv: FloatArray,
    signs: NDArray[np.float32],
    *,
    progress: Progress | None = None,
) -> FloatArray:
    """Maximum of the statistic over sources and samples for each pattern of signs.

    Parameters
    ----------
    groups : FilterGroups
        The standardised filters.
    trials_uv : (N, E, T) ndarray
        The window of each trial.
    signs : (P, N) ndarray of float32
    progress : callable, optional

    Returns
    -------
    (P,) ndarray
    """
    n_trials, _, n_samples = trials_uv.shape
    scores = np.einsum("re,net->nrt", groups.whiten, trials_uv, optimize=True)
    rank = scores.shape[1]
    flat = np.ascontiguousarray(scores.reshape(n_trials, -1) / n_trials, dtype=np.float32)
    per_chunk = max(1, COLUMNS // n_samples)
    maxima = np.zeros(len(signs))

    def work(chunk: int) -> None:
        part = signs[chunk * per_chunk : (chunk + 1) * per_chunk]
        sums = (part @ flat).reshape(len(part), rank, n_samples)
        maxima[chunk * per_chunk : chunk * per_chunk + len(part)] = largest(groups, sums)

    _in_threads(work, -(-len(signs) // per_chunk), progress)
    return maxima


def shares(null_maxima: FloatArray, statistic: FloatArray) -> FloatArray:
    """Share of the null maxima that reach each statistic, ties counted."""
    ordered = np.sort(null_maxima)
    below = np.searchsorted(ordered, statistic * (1 - TIE), side="left")
    share: FloatArray = (len(ordered) - below) / len(ordered)
    return share


def threshold_at(null_maxima: FloatArray, alpha: float = ALPHA) -> float:
    """Statistic above which the corrected p is under `alpha`; infinite when none can be."""
    count = int(np.ceil(alpha * len(null_maxima) - 1e-9))
    if count < 1:
        return float("inf")
    return float(np.sort(null_maxima)[len(null_maxima) - count])


def sign_flip_test(
    epochs: Epochs,
    inverse: Inverse,
    *,
    window_s: Sequence[float] | None = None,
    n_permutations: int = 5000,
    groups: FilterGroups | None = None,
    rng: np.random.Generator,
    progress: Progress | None = None,
) -> SourceTest:
    """Test at every source whether the average holds a field that noise does not explain.

    Parameters
    ----------
    epochs : Epochs
        N trials.
    inverse : Inverse
        For the same electrodes in the same order.
    window_s : (2,) sequence of float, optional
        Tested part, s; default: the epoch after 0.
    n_permutations : int
        Sign patterns, the identity among them; all 2^N when those are not more.
    groups : FilterGroups, optional
        Of this inverse, when several tests share it.
    rng : numpy.random.Generator
    progress : callable, optional

    Returns
    -------
    SourceTest
        With NaN p values when there are no trials to flip.

    Raises
    ------
    StatisticsError
        If electrodes of epochs and inverse differ, or permutations are too few.
    SettingError
        If the window runs backwards or leaves the epoch.

    Notes
    -----
    The corrected p of a source is the share of sign patterns whose maximum over all sources and
    samples reaches the statistic of that source; the identity counts, so the smallest p is one
    over the number of patterns (two when exact: a pattern and its opposite are one).

    References
    ----------
    .. [1] Nichols TE, Holmes AP (2002). Nonparametric permutation tests for functional
       neuroimaging. Hum Brain Mapp 15:1-25.
    .. [2] Phipson B, Smyth GK (2010). Permutation p-values should never be zero. Stat Appl Genet
       Mol Biol 9:39.
    """
    if tuple(epochs.electrode_names) != tuple(inverse.electrode_names):
        msg = (
            f"The epochs have {len(epochs.electrode_names)} electrodes, the source estimate"
            f" {len(inverse.electrode_names)}, not the same ones in the same order (stage"
            " statistics). Make the source estimate for the electrodes of the epochs."
        )
        raise StatisticsError(msg)
    if n_permutations < 20:
        msg = (
            f"{n_permutations} permutations were asked for (--permutations); under 20 no p can be"
            " below 0.05. Ask for at least 1000."
        )
        raise StatisticsError(msg)
    samples = window_samples(epochs, window_s)
    window = np.array([epochs.times_s[samples[0]], epochs.times_s[samples[-1]]])
    weights = filters(inverse)
    average = epochs.data_uv.mean(axis=0)[:, samples]
    observed = power(weights, average)
    at = np.argmax(observed, axis=1)
    statistic = observed[np.arange(len(observed)), at]
    estimate = np.einsum("sce,es->sc", inverse.kernel_nam_per_uv, average[:, at], optimize=True)
    amplitude = np.linalg.norm(estimate, axis=1)
    findings: list[Finding] = []
    if not epochs.testable:
        findings.append(
            Finding(
                level="look",
                stage="statistics",
                problem="Nothing could be tested: there are no trials, only their average",
                suggestion="The map shows where the estimate is largest, not what is significant.",
                doubt=0.9,
            )
        )
        null_maxima = np.zeros(0)
        corrected = np.full(len(statistic), np.nan)
        threshold, exact, count = float("nan"), False, 0
    else:
        signs, exact = _signs(len(epochs.data_uv), n_permutations, rng)
        trials = epochs.data_uv[:, :, samples]
        if groups is None:
            groups = group_filters(weights, inverse.noise_covariance_uv2)
        null_maxima = flip_maxima(groups, trials, signs, progress=progress)
        null_maxima[0] = statistic.max()
        if exact:
            null_maxima = np.concatenate([null_maxima, null_maxima])
        corrected = shares(null_maxima, statistic)
        threshold, count = threshold_at(null_maxima), len(null_maxima)
        least = (2 if exact else 1) / count
        if least >= ALPHA:
            findings.append(
                Finding(
                    level="look",
                    stage="statistics",
                    problem=f"With {len(trials)} trials the smallest possible p is {least:.2g}",
                    suggestion="At least 6 trials are needed before anything can be significant.",
                    doubt=0.9,
                )
            )
    LOG.info(
        "Sign flips: %s patterns (%s), %s sources, %s samples, smallest p %.4f",
        count, "all" if exact else "drawn", len(statistic), len(samples),
        float(corrected.min()) if epochs.testable else float("nan"),
    )  # fmt: skip
    return SourceTest(
        statistic=statistic,
        statistic_time_s=epochs.times_s[samples][at],
        corrected_p=corrected,
        amplitude_nam=amplitude,
        null_maxima=null_maxima,
        threshold=threshold,
        n_permutations=count,
        exact=exact,
        window_s=window,
        findings=tuple(findings),
    )

"""Surviving peaks: the first, and further ones that its point spread does not explain.

A source-space map of one source has hills far from it, because the fields of many sources look
alike to the electrodes. So a second hill in the map says nothing by itself. What the neighbourhood
of the first peak can produce at the electrodes is therefore taken out of the average (generalised
least squares with the noise covariance; the neighbourhood, and not the peak alone, because the
peak is somewhat off), and a second peak is reported only where what is *left* still exceeds the
same corrected threshold. The noise in what is left is never larger than it was, so the
threshold errs on the safe side.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from locator.errors import SettingError
from locator.inverse import Inverse
from locator.recording import Epochs
from locator.results import Finding
from locator.statistics.data import Peaks, SourceTest
from locator.statistics.flips import ALPHA, filters, power, shares, window_samples

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True, slots=True)
class PeakOptions:
    """Settings of the search for peaks.

    Attributes
    ----------
    neighbourhood_mm : float
        Sources this near a peak are taken to be able to explain what it explains, mm, 5 to 50;
        default 15 (above the 90th percentile, 12 mm, of the peak errors of single sources on
        spheres; ``tests/benchmarks/projection.py`` prints it).
    energy : float
        Share of the neighbourhood's field energy that is taken out, 0.5 to 1; default 0.98.
    most_patterns : int
        Field patterns taken out for one peak at most, 3 to 20; default 9.
    least_share : float
        What is left must reach this share of the first peak's statistic, 0 to 1; default 0.05:
        the square of the relative field error (about 0.2) of a three-layer model with ordinary
        electrode positions; no single source, the square is measured nowhere, value chosen.
    most : int
        Peaks at most, 1 to 20; default 5.
    """

    neighbourhood_mm: float = 15.0
    energy: float = 0.98
    most_patterns: int = 9
    least_share: float = 0.05
    most: int = 5

    def __post_init__(self) -> None:
        """Refuse values outside their range, by name."""
        ranges = {
            "neighbourhood_mm": (self.neighbourhood_mm, 5.0, 50.0),
            "energy": (self.energy, 0.5, 1.0),
            "most_patterns": (self.most_patterns, 3, 20),
            "least_share": (self.least_share, 0.0, 1.0),
            "most": (self.most, 1, 20),
        }
        for name, (value, least, most) in ranges.items():
            if not least <= value <= most:
                msg = (
                    f"{name} is {value:g}, allowed are {least:g} to {most:g} (options of the"
                    " peaks). Choose a value in that range."
                )
                raise SettingError(msg)


def whitener(inverse: Inverse) -> FloatArray:
    """Matrix (r, E) that gives the noise of a trial unit variance in r directions."""
    values, vectors = np.linalg.eigh(inverse.noise_covariance_uv2)
    rank = min(max(int(inverse.noise_rank), 1), int((values > 1e-10 * values[-1]).sum()))
    kept = slice(len(values) - rank, len(values))
    matrix: FloatArray = (vectors[:, kept] / np.sqrt(values[kept])).T
    return matrix


def average_reference(rows: ArrayLike) -> FloatArray:
    """Lead-field rows (E, ...) against the mean of the electrodes."""
    values = np.asarray(rows, dtype=np.float64)
    centred: FloatArray = values - values.mean(axis=0)
    return centred


def point_spread_mm(
    weights: FloatArray, rows: FloatArray, sources_scanner_mm: FloatArray, source: int
) -> float:
    """Spatial deviation of the estimate of one noise-free source, mean over its orientations.

    References
    ----------
    .. [1] Molins A et al. (2008). NeuroImage 42:1069.
    .. [2] Hauk O, Stenroos M, Treder MS (2022). NeuroImage 255:119177.
    """
    spread = power(weights, rows[:, source])
    distance = np.linalg.norm(sources_scanner_mm - sources_scanner_mm[source], axis=1)
    total = spread.sum(axis=1)
    return float(np.sqrt((distance**2 * total).sum() / max(total.sum(), 1e-300)))


def _patterns(
    rows: FloatArray, sources: FloatArray, source: int, white: FloatArray, options: PeakOptions
) -> FloatArray:
    """Orthonormal whitened field patterns (r, q) of the neighbourhood of a source."""
    near = np.linalg.norm(sources - sources[source], axis=1) <= options.neighbourhood_mm
    fields = white @ rows[:, near].reshape(rows.shape[0], -1)
    left, singular, _ = np.linalg.svd(fields, full_matrices=False)
    share = np.cumsum(singular**2) / max((singular**2).sum(), 1e-300)
    count = int(np.searchsorted(share, options.energy) + 1)
    count = min(max(count, 3), options.most_patterns, left.shape[1])
    kept: FloatArray = left[:, :count]
    return kept


def find_peaks(
    test: SourceTest,
    epochs: Epochs,
    inverse: Inverse,
    rows_uv_per_nam: ArrayLike,
    sources_scanner_mm: ArrayLike,
    *,
    options: PeakOptions | None = None,
) -> Peaks:
    """Find the surviving peaks, strongest first.

    Parameters
    ----------
    test : SourceTest
    epochs : Epochs
        Those that were tested.
    inverse : Inverse
    rows_uv_per_nam : (E, S, 3) array_like
        Lead field at the electrodes of the epochs, any reference.
    sources_scanner_mm : (S, 3) array_like
    options : PeakOptions, optional

    Returns
    -------
    Peaks
        Regions are not known yet: ``region_mm`` is NaN until :func:`peak_region`. For the second
        and later peaks ``statistic`` and ``corrected_p`` are those of what the earlier ones leave
        unexplained.
    """
    options = options or PeakOptions()
    sources = np.asarray(sources_scanner_mm, dtype=np.float64)
    found: list[tuple[int, float, float, float, float]] = []
    surviving = test.corrected_p < ALPHA
    findings: list[Finding] = []
    if surviving.any():
        rows = average_reference(rows_uv_per_nam)
        samples = window_samples(epochs, tuple(test.window_s))
        average = epochs.data_uv.mean(axis=0)[:, samples]
        weights = filters(inverse)
        white = whitener(inverse)
        colour = np.linalg.pinv(white)
        known = np.zeros((white.shape[0], 0))
        left = average
        statistic = test.statistic
        times = test.statistic_time_s
        allowed = surviving.copy()
        first = 0.0
        while len(found) < options.most and allowed.any():
            source = int(np.argmax(np.where(allowed, statistic, -np.inf)))
            value = float(statistic[source])
            p = float(shares(test.null_maxima, np.array([value]))[0])
            if p >= ALPHA or value < options.least_share * first:
                break
            spread = point_spread_mm(weights, rows, sources, source)
            found.append((source, value, p, float(times[source]), spread))
            first = first or value
            distance = np.linalg.norm(sources - sources[source], axis=1)
            allowed &= distance > options.neighbourhood_mm
            # Take out what this neighbourhood and the earlier ones can produce together.
            known, _ = np.linalg.qr(
                np.column_stack([known, _patterns(rows, sources, source, white, options)])
            )
            if known.shape[1] >= white.shape[0] - 3:
                break
            seen = white @ average
            left = colour @ (seen - known @ (known.T @ seen))
            rest = power(weights, left)
            at = np.argmax(rest, axis=1)
            statistic = rest[np.arange(len(rest)), at]
            times = epochs.times_s[samples][at]
        share = float(surviving.mean())
        if share > 0.1:
            findings.append(
                Finding(
                    level="note",
                    stage="statistics",
                    problem=f"{100 * share:.0f} % of the source space passes the test",
                    suggestion=(
                        "Many filters see the field of one source: the place is the region of the"
                        " peak, not everywhere that is coloured."
                    ),
                    doubt=0.2,
                )
            )
    source_index = np.array([row[0] for row in found], dtype=np.int32)
    return Peaks(
        positions_scanner_mm=sources[source_index].reshape(-1, 3),
        source=source_index,
        statistic=np.array([row[1] for row in found]),
        corrected_p=np.array([row[2] for row in found]),
        time_s=np.array([row[3] for row in found]),
        region_mm=np.full(len(found), np.nan),
        region_probability=np.zeros(len(sources)),
        region_causes_mm={},
        findings=tuple(findings),
        point_spread_mm=np.array([row[4] for row in found]),
    )

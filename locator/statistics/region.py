"""Where the peak is, really: the probability of each place, given what could have moved the peak.

For every place near the peak the question is turned round: *were the source here, where would the
peak have come out?* A source at the place, with the moment that fits the measured field best, is
sent through a head drawn from what is doubtful (electrode positions from their covariances, a
conductivity from the alternatives given), noise drawn from the trials by turning the signs of
their deviations from the mean is added, and the same filter as for the map is applied. The
probability of the place is the share of draws whose peak lands where the measured one does. It is
the posterior of approximate Bayesian computation (Beaumont 2002) with the peak's place as the
summary, every source being equally likely beforehand; so a bias of the filter or of the
conductivity shifts the region, and does not only widen it. Other regularisations have a measured
peak of their own and are compared with that one.

What no draw contains (three layers and isotropic tissue in place of a real head) is added as a
Gaussian blur, `RegionOptions.head_model_mm`.

Calibration: nothing is inflated. ``tests/benchmarks/projection.py`` prints how often the ball holds
the true place; on spheres, with the blur off, it held 13 of 14 (too few to tell 0.95 from 0.85).
"""

from __future__ import annotations

import logging
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numba
import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.spatial import cKDTree

from locator.errors import SettingError, StatisticsError
from locator.forward import LeadField, electrode_rows
from locator.inverse import Inverse
from locator.recording import Epochs
from locator.results import Finding, Progress
from locator.statistics.data import Peaks
from locator.statistics.flips import filters
from locator.statistics.peaks import average_reference

LOG = logging.getLogger(__name__)
FloatArray = NDArray[np.float64]

HELD = 0.95
FARTHEST_OFF_SKIN_MM = 12.0
"""A drawn electrode farther than this from every vertex of the skin is put on the nearest one
(vertices lie 5 to 12 mm apart)."""
MEDIAN_OF_MAXWELL = 1.5382
"""Median length of a three-dimensional Gaussian displacement with unit deviation per axis."""


@dataclass(frozen=True, kw_only=True, slots=True)
class RegionOptions:
    """Settings of the region of a peak.

    Attributes
    ----------
    n_draws : int
        Draws of head and noise, 8 to 1000; default 60.
    reach_mm : float
        Places this near the peak are considered at most, mm, 20 to 150; default 60.
    head_model_mm : float
        Median displacement through what the three-layer model leaves out, mm, 0 to 30; default
        5: three-layer estimate against five-layer truth, about 5 +/- 2 mm (Nuñez Ponasso et al.
        2024). 0 where the model is exact.
    electrode_sd_mm : float
        Standard deviation per axis of electrode positions without a covariance, mm, 0 to 20;
        default 2 (value chosen: the order of published localisation errors, Györfi et al. 2022).
    """

    n_draws: int = 60
    reach_mm: float = 60.0
    head_model_mm: float = 5.0
    electrode_sd_mm: float = 2.0

    def __post_init__(self) -> None:
        """Refuse values outside their range, by name."""
        ranges = {
            "n_draws": (self.n_draws, 8, 1000),
            "reach_mm": (self.reach_mm, 20.0, 150.0),
            "head_model_mm": (self.head_model_mm, 0.0, 30.0),
            "electrode_sd_mm": (self.electrode_sd_mm, 0.0, 20.0),
        }
        for name, (value, least, most) in ranges.items():
            if not least <= value <= most:
                msg = (
                    f"{name} is {value:g}, allowed are {least:g} to {most:g} (options of the"
                    " region). Choose a value in that range."
                )
                raise SettingError(msg)


@numba.njit(nogil=True, cache=True, fastmath=True)
def _keep_places(tile, first, best, place):  # type: ignore[no-untyped-def]
    """Raise `best` to the power of each source in each column, and remember which source."""
    rows, columns = tile.shape
    for row in range(0, rows, 3):
        source = first + row // 3
        for column in range(columns):
            power = tile[row, column] ** 2 + tile[row + 1, column] ** 2 + tile[row + 2, column] ** 2
            if power > best[column]:
                best[column] = power
                place[column] = source


def _peak_of(weights: NDArray[np.float32], fields: FloatArray) -> NDArray[np.int64]:
    """Source with the largest statistic for each field (E, C) under filters (3 S, E)."""
    columns = np.ascontiguousarray(fields, dtype=np.float32)
    best = np.full(columns.shape[1], -1.0, dtype=np.float32)
    place = np.zeros(columns.shape[1], dtype=np.int64)
    for first in range(0, len(weights), 768):
        _keep_places(weights[first : first + 768] @ columns, first // 3, best, place)
    return place


def _restricted(lead_field: LeadField, sources: NDArray[np.intp]) -> LeadField:
    return replace(
        lead_field,
        potentials_uv_per_nam=np.ascontiguousarray(lead_field.potentials_uv_per_nam[:, sources]),
        sources_scanner_mm=lead_field.sources_scanner_mm[sources],
    )


def _fitted(fields: FloatArray, observed: FloatArray) -> FloatArray:
    """Field (E, C) of each source with the moment that fits best; `fields` is (E, C, 3)."""
    stack = fields.transpose(1, 0, 2)
    gram = stack.transpose(0, 2, 1) @ stack
    scale = np.trace(gram, axis1=1, axis2=2)[:, None, None]
    gram = gram + 1e-6 * scale * np.eye(3)
    moment = np.linalg.solve(gram, (stack.transpose(0, 2, 1) @ observed)[:, :, None])
    fitted: FloatArray = (stack @ moment)[:, :, 0].T
    return fitted


def _radius(distance: FloatArray, probability: FloatArray, cell_mm: float) -> float:
    """Radius of the ball that holds 95 %, with half the width of a source's cell."""
    order = np.argsort(distance, kind="stable")
    held = np.cumsum(probability[order])
    last = min(int(np.searchsorted(held, HELD * held[-1] * (1 - 1e-12))), len(order) - 1)
    return float(np.hypot(distance[order][last], cell_mm / 2))


@dataclass(frozen=True, kw_only=True, slots=True)
class _Doubts:
    """What is drawn."""

    heads: tuple[LeadField, ...]
    positions: FloatArray
    roots: FloatArray
    skin: cKDTree
    deviations: FloatArray
    """(N, E): trials minus their mean at the sample of the peak, over N."""

    def rows(self, head: LeadField, rng: np.random.Generator | None) -> FloatArray:
        places = self.positions
        if rng is not None:
            places = places + np.einsum("eij,ej->ei", self.roots, rng.standard_normal(places.shape))
            # An electrode stays on the skin however doubtful its place along it is.
            off, vertex = self.skin.query(places)
            lost = off > FARTHEST_OFF_SKIN_MM
            places[lost] = self.skin.data[vertex[lost]]
        return average_reference(electrode_rows(head, places))

    def noise(self, rng: np.random.Generator, count: int) -> FloatArray:
        signs = rng.choice((-1.0, 1.0), (count, len(self.deviations)))
        drawn: FloatArray = (signs @ self.deviations).T
        return drawn


def peak_region(
    peaks: Peaks,
    epochs: Epochs,
    inverse: Inverse,
    lead_field: LeadField,
    positions_scanner_mm: ArrayLike,
    *,
    covariance_mm2: ArrayLike | None = None,
    other_conductivities: Sequence[LeadField] = (),
    other_inverses: Sequence[Inverse] = (),
    options: RegionOptions | None = None,
    rng: np.random.Generator,
    progress: Progress | None = None,
) -> Peaks:
    """Give each peak the region that its place is known to.

    Parameters
    ----------
    peaks : Peaks
        From :func:`~locator.statistics.find_peaks`.
    epochs : Epochs
    inverse : Inverse
        That of the map.
    lead_field : LeadField
    positions_scanner_mm : (E, 3) array_like
        Contact points of the electrodes of the epochs, in their order.
    covariance_mm2 : (E, 3, 3) array_like, optional
        Of the positions; NaN rows take `RegionOptions.electrode_sd_mm`.
    other_conductivities : sequence of LeadField
        Same sources, other conductivities; each counts as much as the first.
    other_inverses : sequence of Inverse
        Same electrodes, other regularisation; each counts as much as the first.
    options : RegionOptions, optional
    rng : numpy.random.Generator
    progress : callable, optional

    Returns
    -------
    Peaks
        With regions, the contribution of each cause, and findings.

    Raises
    ------
    StatisticsError
        If positions, inverses or lead fields do not fit the epochs.

    References
    ----------
    .. [1] Beaumont MA, Zhang W, Balding DJ (2002). Approximate Bayesian computation in population
       genetics. Genetics 162:2025-2035.
    .. [2] Nuñez Ponasso G et al. (2024), as cited in the options.
    """
    options = options or RegionOptions()
    if len(peaks.source) == 0:
        return peaks
    positions = np.asarray(positions_scanner_mm, dtype=np.float64)
    n_electrodes = len(epochs.electrode_names)
    if positions.shape != (n_electrodes, 3):
        msg = (
            f"{n_electrodes} electrodes need positions of shape ({n_electrodes}, 3), got"
            f" {positions.shape} (stage statistics). Give one position per electrode of the epochs."
        )
        raise StatisticsError(msg)
    for other in other_conductivities:
        if other.sources_scanner_mm.shape != lead_field.sources_scanner_mm.shape:
            msg = (
                "A lead field of other conductivity has other sources (stage statistics)."
                " Compute it for the same sources."
            )
            raise StatisticsError(msg)
    for alternative in other_inverses:
        if alternative.electrode_names != inverse.electrode_names:
            msg = (
                "A source estimate of other regularisation has other electrodes (stage statistics)."
                " Make it for the same electrodes."
            )
            raise StatisticsError(msg)
    roots = _roots(covariance_mm2, n_electrodes, options)
    sources = np.asarray(lead_field.sources_scanner_mm)
    inverses = (inverse, *other_inverses)
    weights = [
        np.ascontiguousarray(filters(each).reshape(-1, n_electrodes), dtype=np.float32)
        for each in inverses
    ]
    nearest = cKDTree(sources).query(sources[:: max(1, len(sources) // 500)], k=2)[0][:, 1]
    cell = float(np.median(nearest))
    regions = np.full(len(peaks.source), np.nan)
    probability = np.zeros(len(sources))
    causes: dict[str, float] = {}
    average = epochs.data_uv.mean(axis=0)
    skin = cKDTree(np.asarray(lead_field.scalp_vertices_scanner_mm))
    for number, source in enumerate(peaks.source):
        sample = int(np.argmin(np.abs(epochs.times_s - peaks.time_s[number])))
        spread = epochs.data_uv[:, :, sample] - average[:, sample]
        doubts = _Doubts(
            heads=(lead_field, *other_conductivities),
            positions=positions,
            roots=roots,
            skin=skin,
            deviations=spread / max(len(spread), 1),
        )
        part, alone = _one_region(
            int(source), average[:, sample], doubts, weights, sources, cell, options, rng,
            progress if number == 0 else None, with_causes=number == 0,
        )  # fmt: skip
        distance = np.linalg.norm(sources - sources[source], axis=1)
        regions[number] = _radius(distance, part, cell)
        if number == 0:
            probability, causes = part, alone
    findings = list(peaks.findings)
    if regions[0] > 30:
        findings.append(
            Finding(
                level="look",
                stage="statistics",
                problem=f"The place of the first peak is known to {regions[0]:.0f} mm only",
                suggestion="More trials, checked electrode positions, or a deep source.",
                doubt=min(1.0, regions[0] / 60),
            )
        )
    LOG.info("Region of the first peak: %.1f mm; alone: %s", regions[0], causes)
    return replace(
        peaks,
        region_mm=regions,
        region_probability=probability,
        region_causes_mm=causes,
        findings=tuple(findings),
    )


def _roots(
    covariance_mm2: ArrayLike | None, n_electrodes: int, options: RegionOptions
) -> FloatArray:
    """A square root (E, 3, 3) of each electrode's covariance."""
    roots = np.tile(options.electrode_sd_mm * np.eye(3), (n_electrodes, 1, 1))
    if covariance_mm2 is None:
        return roots
    covariance = np.asarray(covariance_mm2, dtype=np.float64)
    if covariance.shape != (n_electrodes, 3, 3):
        msg = (
            f"Covariances of shape {covariance.shape} for {n_electrodes} electrodes (stage"
            f" statistics). Give ({n_electrodes}, 3, 3), mm²."
        )
        raise StatisticsError(msg)
    known = np.isfinite(covariance).all(axis=(1, 2))
    values, vectors = np.linalg.eigh(covariance[known])
    roots[known] = vectors * np.sqrt(np.maximum(values, 0.0))[:, None, :]
    return roots


def _one_region(
    source: int,
    observed: FloatArray,
    doubts: _Doubts,
    weights: list[NDArray[np.float32]],
    sources: FloatArray,
    cell: float,
    options: RegionOptions,
    rng: np.random.Generator,
    progress: Progress | None,
    *,
    with_causes: bool,
) -> tuple[FloatArray, dict[str, float]]:
    """Probability over the sources, and the radius that each cause makes alone."""
    distance = np.linalg.norm(sources - sources[source], axis=1)
    measured = [int(_peak_of(each, observed[:, None])[0]) for each in weights]
    near = np.flatnonzero(
        distance <= _reach(source, observed, doubts, weights[0], sources, cell, options, rng)
    )
    heads = [_restricted(head, near) for head in doubts.heads]
    shares = np.zeros(len(near))
    width = max(cell, 3.0) / 2
    for draw in range(options.n_draws):
        head = heads[int(rng.integers(len(heads)))]
        which = draw % len(weights)
        fields = _fitted(doubts.rows(head, rng), observed)
        fields = fields + doubts.noise(rng, len(near))
        landed = sources[_peak_of(weights[which], fields)]
        off = np.linalg.norm(landed - sources[measured[which]], axis=1)
        shares += np.exp(-0.5 * (off / width) ** 2)
        if progress is not None:
            progress((draw + 1) / options.n_draws, "region of the peak")
    if shares.sum() < 1e-6:
        shares[:] = np.exp(-0.5 * (distance[near] / max(options.reach_mm / 3, cell)) ** 2)
    part = shares / shares.sum()
    blur = options.head_model_mm / MEDIAN_OF_MAXWELL
    if blur > 0:
        gaps = np.linalg.norm(sources[near][:, None] - sources[near][None], axis=2)
        kernel = np.exp(-0.5 * (gaps / blur) ** 2)
        part = part @ (kernel / kernel.sum(axis=1, keepdims=True))
    probability = np.zeros(len(sources))
    probability[near] = part
    if not with_causes:
        return probability, {}
    return probability, _alone(source, observed, doubts, weights, sources, measured, options, rng)


def _reach(
    source: int,
    observed: FloatArray,
    doubts: _Doubts,
    weights: NDArray[np.float32],
    sources: FloatArray,
    cell: float,
    options: RegionOptions,
    rng: np.random.Generator,
) -> float:
    """How far places need to be considered: well beyond what moves a source at the peak."""
    here = np.array([source])
    heads = [_restricted(head, here) for head in doubts.heads]
    fields = [
        _fitted(doubts.rows(heads[draw % len(heads)], rng), observed)
        for draw in range(max(8, options.n_draws // 4))
    ]
    stacked = np.repeat(np.hstack(fields), 8, axis=1)
    landed = sources[_peak_of(weights, stacked + doubts.noise(rng, stacked.shape[1]))]
    moved = float(np.percentile(np.linalg.norm(landed - sources[source], axis=1), 97.5))
    return min(options.reach_mm, 20.0 + 2 * cell + 2 * moved)


def _alone(
    source: int,
    observed: FloatArray,
    doubts: _Doubts,
    weights: list[NDArray[np.float32]],
    sources: FloatArray,
    measured: list[int],
    options: RegionOptions,
    rng: np.random.Generator,
) -> dict[str, float]:
    """Displacement of the peak of a source at the peak, 95th percentile, one cause at a time."""
    here = np.array([source])
    own = [_restricted(head, here) for head in doubts.heads]
    clean = _fitted(doubts.rows(own[0], None), observed)

    def reach(fields: FloatArray) -> float:
        landed = sources[_peak_of(weights[0], fields)]
        return float(np.percentile(np.linalg.norm(landed - sources[source], axis=1), 100 * HELD))

    moved = [_fitted(doubts.rows(own[0], rng), observed) for _ in range(options.n_draws)]
    causes = {
        "trials": reach(clean + doubts.noise(rng, 4 * options.n_draws)),
        "electrode positions": reach(np.hstack(moved)),
    }
    if len(own) > 1:
        other = [_fitted(doubts.rows(head, None), observed) for head in own[1:]]
        causes["skull conductivity"] = reach(np.hstack(other))
    if len(weights) > 1:
        shifts = [np.linalg.norm(sources[place] - sources[measured[0]]) for place in measured[1:]]
        causes["regularisation"] = float(max(shifts))
    # 95th percentile of a three-dimensional Gaussian displacement: 2.7955 deviations per axis.
    causes["head model"] = float(options.head_model_mm / MEDIAN_OF_MAXWELL * 2.7955)
    return causes

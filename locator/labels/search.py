"""All the ways in which a cap may fit, weighed against each other."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linear_sum_assignment
from scipy.spatial import cKDTree

from locator.labels.cap import CapModel
from locator.labels.matching import (
    HOLDER_REACH_MM,
    Evidence,
    Fit,
    fit_cap,
    match_sum,
    pair_log_weights,
)

FloatArray = NDArray[np.float64]


@dataclass(kw_only=True)
class Search:
    """What the search found: the fits with their weights, and the labels under all of them."""

    fits: list[Fit]
    weights: FloatArray
    share: FloatArray  # (E, M) posterior probability of each pair
    absent: FloatArray  # (E,) posterior probability of no capsule
    chosen: NDArray[np.int32]  # (E,) capsule of each name, -1 for none
    evidence: Evidence
    mirror_log_odds: float | None = None  # of the cap exchanged left for right; None: cannot tell


def coarse_starts(model: CapModel, evidence: Evidence, *, n_best: int) -> list[FloatArray]:
    """Turns of the cap that explain the capsules best at a coarse scale."""
    prior = model.prior.turn_deg
    starts = []
    scores = []
    for pitch in (-24.0, -12.0, 0.0, 12.0, 24.0):
        for roll in (-18.0, 0.0, 18.0):
            for yaw in (-24.0, -12.0, 0.0, 12.0, 24.0):
                parameters = np.zeros(model.n_parameters)
                parameters[:3] = np.array([pitch, roll, yaw]) / prior
                weights = pair_log_weights(model.places(parameters), None, 10.0, evidence)
                _, log_sum = match_sum(weights, n_turns=8, tolerance=1e-2)
                starts.append(parameters)
                scores.append(log_sum - 0.5 * float(parameters @ parameters))
    order = np.argsort(scores)[::-1]
    return [starts[index] for index in order[:n_best]]


def _same(first: Fit, second: Fit) -> bool:
    """True when two fits stand for the same labels."""
    if first.model is not second.model:
        return False
    gap = np.linalg.norm(first.places - second.places, axis=1)
    return bool(np.median(gap) < 2.0 and np.quantile(gap, 0.95) < 6.0)


def add_fit(fits: list[Fit], new: Fit) -> None:
    """Add a fit unless it is already there; keep the better of two alike."""
    for index, old in enumerate(fits):
        if _same(old, new):
            if new.log_evidence > old.log_evidence:
                fits[index] = new
            return
    fits.append(new)


def shift_starts(fit: Fit, spacing_mm: float) -> list[tuple[str, FloatArray]]:
    """Starts a row or a column away from a fit."""
    angle = spacing_mm / 95.0 / np.radians(fit.model.prior.turn_deg)
    starts = []
    for axis, words in ((0, ("back", "front")), (1, ("right", "left")), (2, ("left", "right"))):
        for sign in (-1, 1):
            moved = np.zeros_like(fit.parameters)
            moved[:6] = fit.parameters[:6]
            moved[axis] += sign * angle
            side = words[0] if sign < 0 else words[1]
            kind = "row" if axis == 0 else "column"
            starts.append((f"shifted by one {kind} ({side})", moved))
    return starts


def name_spacing_mm(places: FloatArray) -> float:
    """Median distance from a name to its nearest neighbour, mm."""
    gaps = np.linalg.norm(places[:, None] - places[None], axis=2)
    gaps[np.diag_indices(len(gaps))] = np.inf
    return float(np.median(gaps.min(axis=1)))


LOOSE_JITTER_MM = 5.5
_EVEN_ODDS = float(np.log(0.5))


def choose(share: FloatArray, absent: FloatArray) -> NDArray[np.int32]:
    """The labelling with the most expected right decisions, each name with one capsule or none."""
    n_names, n_points = share.shape
    gain = np.concatenate([share, np.full((n_names, n_names), -1.0)], axis=1)
    gain[np.arange(n_names), n_points + np.arange(n_names)] = absent
    rows, columns = linear_sum_assignment(gain, maximize=True)
    chosen = np.full(n_names, -1, dtype=np.int32)
    chosen[rows] = np.where(columns < n_points, columns, -1)
    return chosen


def mirror_log_odds(best: Fit, evidence: Evidence) -> float | None:
    """Log of how much better the capsules fit the cap with left and right exchanged.

    Returns
    -------
    float or None
        None when the layout is its own mirror image, so that the capsules say nothing of sides.
    """
    model = best.model
    mirrored = model.mirrored()
    gap = np.linalg.norm(mirrored.base[:, None] - model.base[None], axis=2)
    if max(gap.min(axis=0).max(), gap.min(axis=1).max()) < 0.5 * name_spacing_mm(model.base):
        return None
    start = np.zeros_like(best.parameters)
    start[:6] = best.parameters[:6] * np.array([1.0, -1.0, -1.0, -1.0, 1.0, 1.0])
    widths = (11.0, 8.0, 6.0, 4.0)
    others = [fit_cap(mirrored, evidence, one, widths_mm=widths) for one in (start, 0.0 * start)]
    return max(fit.log_evidence for fit in others) - best.log_evidence


def search_cap(
    model: CapModel,
    evidence: Evidence,
    *,
    other_models: tuple[tuple[str, CapModel, float], ...] = (),
    look_again: Callable[[FloatArray], FloatArray] | None = None,
    n_best: int = 5,
) -> Search:
    """Fit the cap from many starts and weigh the fits by their evidence.

    Parameters
    ----------
    model : CapModel
    evidence : Evidence
        Its density of strays and share of absent capsules are first guesses.
    other_models : tuple of (str, CapModel, float)
        The cap worn in other ways (back to front), each with the log of its prior odds.
    look_again : callable, optional
        Takes the shares (M,) of the capsules in the best first fit and returns their log
        likelihood ratios (M,) by looks, now that it is known what this cap's capsules look like.
    n_best : int
        Coarse starts that are followed.
    """
    fits: list[Fit] = []
    for start in coarse_starts(model, evidence, n_best=n_best):
        add_fit(fits, fit_cap(model, evidence, start))
    best = max(fits, key=lambda fit: fit.log_evidence)
    if best.jitter_mm > LOOSE_JITTER_MM:
        # A loose cap can be put on in many ways: follow many more starts.
        for start in coarse_starts(model, evidence, n_best=40)[n_best:]:
            add_fit(fits, fit_cap(model, evidence, start))
        best = max(fits, key=lambda fit: fit.log_evidence)
    if look_again is not None:
        evidence = replace(evidence, log_ratio=look_again(best.share.sum(axis=0)))
    evidence = refine(best, evidence)
    spacing = name_spacing_mm(best.places)
    for words, start in shift_starts(best, spacing):
        add_fit(fits, fit_cap(model, evidence, start, widths_mm=(0.2 * spacing, 5.0), origin=words))
    # All fits under the same densities, so that their evidences can be compared.
    fits.sort(key=lambda fit: -fit.log_evidence)
    evidence = refine(fits[0], evidence)
    again: list[Fit] = []
    most = 8 if fits[0].jitter_mm < LOOSE_JITTER_MM else 30
    for fit in fits[:most]:
        add_fit(
            again,
            fit_cap(
                fit.model,
                evidence,
                fit.parameters,
                widths_mm=(max(fit.jitter_mm, 1.0),),
                origin=fit.origin,
            ),
        )
    # A stiff cap is as likely as a soft one: the capsules tell which (nothing if they cannot).
    stiff = model.stiffened()
    penalty = {id(model): _EVEN_ODDS, id(stiff): _EVEN_ODDS}
    top = max(fit.log_evidence for fit in again)
    for fit in [one for one in again if one.log_evidence > top - 6.0]:
        start = fit.parameters.copy()
        start[-model.n_bends :] = 0.0
        widths = (max(fit.jitter_mm, 1.0),)
        add_fit(again, fit_cap(stiff, evidence, start, widths_mm=widths, origin=fit.origin))
    for words, other, log_odds in other_models:
        penalty[id(other)] = log_odds
        start = coarse_starts(other, evidence, n_best=1)[0]
        add_fit(again, fit_cap(other, evidence, start, origin=words))
    score = np.array([fit.log_evidence + penalty[id(fit.model)] for fit in again])
    order = np.argsort(score)[::-1]
    fits = [again[index] for index in order]
    weights = np.exp(score[order] - score.max())
    weights /= weights.sum()
    share = sum(
        (weight * fit.share for weight, fit in zip(weights, fits, strict=True)),
        start=np.zeros_like(fits[0].share),
    )
    absent = np.clip(1.0 - share.sum(axis=1), 0.0, 1.0)
    return Search(
        fits=fits,
        weights=weights,
        share=share,
        absent=absent,
        chosen=choose(share, absent),
        evidence=evidence,
        mirror_log_odds=mirror_log_odds(fits[0], evidence),
    )


def refine(fit: Fit, evidence: Evidence, *, reach_mm: float = 16.0) -> Evidence:
    """Density of strays and share of absent capsules, from a fit."""
    taken_names = fit.share.sum(axis=1)
    taken_points = fit.share.sum(axis=0)
    gap = np.linalg.norm(evidence.points[:, None] - fit.places[None], axis=2).min(axis=1)
    near = gap < reach_mm
    occupied = np.concatenate([fit.places[taken_names < 0.5], evidence.points[taken_points >= 0.5]])
    area = cap_area_mm2(fit.places, reach_mm, occupied)
    # Blobs that look unlike capsules count by how alike they look: only what could pass for a
    # capsule competes with one.
    alike = np.exp(np.minimum(evidence.log_ratio[near], 0.0))
    strays = float(((1 - taken_points[near]).clip(0, 1) * alike).sum())
    absent = (float((1 - taken_names).sum()) + 1.0) / (len(fit.places) + 12.0)
    return replace(
        evidence,
        stray_per_mm2=(strays + 1.0) / area,
        absent=float(np.clip(absent, 0.01, 0.5)),
    )


def cap_area_mm2(places: FloatArray, reach_mm: float, occupied: FloatArray) -> float:
    """Area of skin within `reach_mm` of a place that is left free by the electrodes, mm^2.

    Counted on a spiral of 4000 points on the sphere through the places. At least a fifth of the
    whole is taken as free, so that dense caps keep a finite density of strays.
    """
    number = 4000
    index = np.arange(number) + 0.5
    height = 1 - 2 * index / number
    azimuth = np.pi * (1 + 5**0.5) * index
    flat = np.sqrt(1 - height**2)
    # Centre and radius of the least-squares sphere.
    design = np.c_[2 * places, np.ones(len(places))]
    solution, *_ = np.linalg.lstsq(design, (places**2).sum(axis=1), rcond=None)
    center = solution[:3]
    radius = float(np.sqrt(max(solution[3] + center @ center, 1.0)))
    if len(places) < 5 or not 50.0 < radius < 150.0:
        center, radius = places.mean(axis=0), 90.0
    out = np.c_[flat * np.cos(azimuth), flat * np.sin(azimuth), height]

    def nearest(points: FloatArray) -> FloatArray:
        away = points - center
        away = center + away * (radius / np.linalg.norm(away, axis=1, keepdims=True))
        found, _ = cKDTree(away).query(center + radius * out)
        return np.asarray(found, dtype=np.float64)

    within = nearest(places) < reach_mm
    free = within & (nearest(occupied) > HOLDER_REACH_MM) if len(occupied) else within
    share = max(float(free.mean()), 0.2 * float(within.mean()), 0.01)
    return share * 4 * np.pi * radius**2

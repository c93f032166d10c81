"""Names against capsules: sums over all partial matchings, and the fit of the cap under them.

A matching gives each name at most one capsule and each capsule at most one name; what is left
over is a name without capsule, or a blob that is no electrode. The sum over all matchings (a
monomer-dimer partition function) and the share of each pair in it are computed by belief
propagation, which converges for every such sum.

References
----------
.. [1] Bayati M, Shah D, Sharma M (2008). Max-product for maximum weight matching. IEEE Trans
   Inf Theory 54:1241-1251.
.. [2] Chertkov M, Kroc L, Krzakala F, Vergassola M, Zdeborova L (2010). Inference in particle
   tracking experiments by passing messages between images. PNAS 107:7663-7668.
.. [3] Chui H, Rangarajan A (2003). A new point matching algorithm for non-rigid registration.
   Comput Vis Image Underst 89:114-141.
.. [4] Myronenko A, Song X (2010). Point set registration: coherent point drift. IEEE TPAMI
   32:2262-2275.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.stats import ncx2

from locator.geometry import tangents
from locator.labels.cap import CapModel

FloatArray = NDArray[np.float64]


_NEGLIGIBLE = -12.0
# An electrode without capsule still has its holder: few stray blobs lie closer than this to it
# (gel, a capsule that slipped out of its holder). Common practice, no source.
HOLDER_REACH_MM = 12.0
_STRAY_ON_HOLDER = 0.1
# Standard deviation of an electrode's place before anything is known of the cap.
_BLIND_MM = 15.0


def match_sum(
    log_weights: FloatArray,
    apart: FloatArray | None = None,
    *,
    n_turns: int = 200,
    tolerance: float = 1e-6,
) -> tuple[FloatArray, float]:
    """Share of every pair in the sum over partial matchings, and the log of the sum.

    Parameters
    ----------
    log_weights : (E, M) ndarray
        Log weight of each pair against both staying alone.
    apart : (E, M) ndarray, optional
        Factor (0 to 1) by which the weight of an arrangement falls when this name has no capsule
        and this capsule no name: a stray blob cannot lie where the bare holder is. Default 1.
    n_turns : int
        Most message rounds.
    tolerance : float
        Largest change of a share at which to stop.

    Returns
    -------
    share : (E, M) ndarray
        Marginal probabilities of the pairs (Bethe approximation).
    log_sum : float

    Examples
    --------
    >>> share, log_sum = match_sum(np.log(np.array([[3.0]])))
    >>> round(float(share[0, 0]), 6), round(float(np.exp(log_sum)), 6)
    (0.75, 4.0)

    Half the weight for both alone:

    >>> share, log_sum = match_sum(np.log(np.array([[3.0]])), np.array([[0.5]]))
    >>> round(float(share[0, 0]), 6), round(float(np.exp(log_sum)), 6)
    (0.857143, 3.5)
    """
    # Capsules that no name can reach stay alone, whatever the messages say.
    reached = np.flatnonzero(log_weights.max(axis=0, initial=-np.inf) > _NEGLIGIBLE)
    if len(reached) < log_weights.shape[1]:
        share = np.zeros_like(log_weights)
        if len(reached) == 0:
            return share, 0.0
        share[:, reached], log_sum = match_sum(
            log_weights[:, reached],
            None if apart is None else apart[:, reached],
            n_turns=n_turns,
            tolerance=tolerance,
        )
        return share, log_sum
    weight = np.exp(np.clip(log_weights, -60.0, 60.0))
    lost = np.zeros_like(weight) if apart is None else 1.0 - apart
    # Every message says two things, against "something else": that the other end would match
    # (`..._match`), and that it allows this end to stay alone (`..._alone`).
    row_match, row_alone = weight.copy(), np.ones_like(weight)
    share = np.zeros_like(weight)
    for turn in range(n_turns):
        row_free, row_rest = _cavity(row_match, row_alone, axis=1)
        column_match, column_alone = weight / row_rest, 1.0 - row_free / row_rest * lost
        column_free, column_rest = _cavity(column_match, column_alone, axis=0)
        row_match, row_alone = weight / column_rest, 1.0 - column_free / column_rest * lost
        if turn % 4 == 3:
            new = row_match / (np.prod(row_alone, axis=1) + row_match.sum(axis=1))[:, None]
            change = float(np.abs(new - share).max()) if new.size else 0.0
            share = new
            if change < tolerance:
                break
    row_free, row_rest = _cavity(row_match, row_alone, axis=1)
    column_match, column_alone = weight / row_rest, 1.0 - row_free / row_rest * lost
    column_free, column_rest = _cavity(column_match, column_alone, axis=0)
    rows = np.prod(row_alone, axis=1) + row_match.sum(axis=1)
    columns = np.prod(column_alone, axis=0) + column_match.sum(axis=0)
    pairs = 1.0 + (weight - row_free * column_free * lost) / (row_rest * column_rest)
    log_sum = float(np.log(rows).sum() + np.log(columns).sum() - np.log(pairs).sum())
    return row_match / rows[:, None], log_sum


def _cavity(match: FloatArray, alone: FloatArray, *, axis: int) -> tuple[FloatArray, FloatArray]:
    """What each end says without one neighbour: weight of staying alone, and of all but it."""
    free = np.prod(alone, axis=axis, keepdims=True) / alone
    return free, free + (match.sum(axis=axis, keepdims=True) - match)


@dataclass(kw_only=True)
class Evidence:
    """What the fit knows of the capsules, apart from the cap.

    Attributes
    ----------
    points : (M, 3) ndarray
        Contact points of the capsules on the skin, mm.
    log_ratio : (M,) ndarray
        Log likelihood ratio of each being a capsule of the cap, by its looks.
    stray_per_mm2 : float
        Density of blobs that are no electrodes.
    absent : float
        Probability that a name has no capsule.
    """

    points: FloatArray
    log_ratio: FloatArray
    stray_per_mm2: float
    absent: float


@dataclass(kw_only=True)
class Fit:
    """One fit of the cap: a local maximum of the evidence."""

    model: CapModel
    parameters: FloatArray
    jitter_mm: float
    share: FloatArray
    log_evidence: float
    places: FloatArray
    spread: FloatArray  # (E, 3, 3) covariance of the places
    origin: str = ""
    normals: FloatArray = field(default_factory=lambda: np.zeros((0, 3)))


# Prior of the jitter: log-normal about 3 mm; 1 to 8 mm is what caps show.
_JITTER_MM = 3.0
_JITTER_LOG_SD = 0.5


def pair_log_weights(
    places: FloatArray, spread: FloatArray | None, jitter_mm: float, evidence: Evidence
) -> FloatArray:
    """Log weights (E, M) of names against capsules, given where the names are expected."""
    away = evidence.points[None] - places[:, None]
    gap2 = (away**2).sum(axis=2)
    if spread is None:
        variance = np.full(len(places), jitter_mm**2)
        log_density = -0.5 * gap2 / variance[:, None] - np.log(2 * np.pi * variance)[:, None]
    else:
        full = spread + jitter_mm**2 * np.eye(3)
        inverse = np.linalg.inv(full)
        # Only the two tangential axes are uncertain: the third has jitter alone.
        log_det = np.linalg.slogdet(full)[1] - np.log(jitter_mm**2)
        mahalanobis = np.einsum("ema,eab,emb->em", away, inverse, away)
        log_density = -0.5 * mahalanobis - (np.log(2 * np.pi) + 0.5 * log_det)[:, None]
    odds = np.log((1 - evidence.absent) / evidence.absent) - np.log(evidence.stray_per_mm2)
    weights: FloatArray = log_density + odds + evidence.log_ratio[None, :]
    return weights


def holder_factor(
    places: FloatArray, spread: FloatArray, jitter_mm: float, points: FloatArray
) -> FloatArray:
    """How much rarer a stray blob is at each point, were the holder of each name bare; (E, M).

    One less the chance that the holder lies within `HOLDER_REACH_MM` of the blob, for a holder
    that is spread evenly in two directions about the place where it is expected.
    """
    variance = 0.5 * np.einsum("eaa->e", spread) + jitter_mm**2
    gap = np.linalg.norm(points[None] - places[:, None], axis=2)
    deviation = np.broadcast_to(np.sqrt(variance)[:, None], gap.shape)
    near = gap < HOLDER_REACH_MM + 4.0 * deviation
    factor = np.ones_like(gap)
    factor[near] -= (1.0 - _STRAY_ON_HOLDER) * ncx2.cdf(
        (HOLDER_REACH_MM / deviation[near]) ** 2, 2, (gap[near] / deviation[near]) ** 2
    )
    return factor


def _jitter_log_prior(jitter_mm: float) -> float:
    return float(-0.5 * (np.log(jitter_mm / _JITTER_MM) / _JITTER_LOG_SD) ** 2)


def fit_cap(
    model: CapModel,
    evidence: Evidence,
    start: FloatArray,
    *,
    widths_mm: tuple[float, ...] = (14.0, 11.0, 8.5, 6.5, 5.0, 4.0),
    free_jitter: bool = True,
    n_final: int = 12,
    origin: str = "",
) -> Fit:
    """Annealed fit of the cap from one start, then the jitter and the evidence of the fit.

    Each width of the schedule takes the matching's shares at that width and moves the cap to the
    most probable place under them (an expectation-maximisation step with the prior as a ridge, so
    that wide stages move the cap as a whole and narrow ones bend it).
    """
    parameters = np.array(start, dtype=np.float64)
    jitter = widths_mm[-1]
    schedule = [*widths_mm] + [0.0] * n_final
    identity = np.eye(model.n_parameters)
    precision = identity
    share = np.zeros((len(model.base), len(evidence.points)))
    for width in schedule:
        final = width == 0.0
        wide = jitter if final else width
        places, slopes, _ = model.linear(parameters)
        weights = pair_log_weights(places, None, wide, evidence)
        share, _ = match_sum(weights, n_turns=24 if not final else 60, tolerance=1e-4)
        taken = share.sum(axis=1)
        pull = share @ evidence.points - taken[:, None] * places
        precision = identity + _information(taken, slopes) / wide**2
        gradient = np.einsum("eap,ea->p", slopes, pull) / wide**2 - parameters
        move = np.linalg.solve(precision, gradient)
        parameters = parameters + move
        if final and free_jitter:
            covariance = np.linalg.inv(precision)
            places, slopes, _ = model.linear(parameters)
            away2 = ((evidence.points[None] - places[:, None]) ** 2).sum(axis=2)
            own = ((slopes @ covariance) * slopes).sum(axis=(1, 2))
            total = float((share * away2).sum() + (taken * own).sum())
            count = float(taken.sum())
            jitter = _best_jitter(total, count)
        elif not final:
            jitter = width
        if final and np.abs(move).max() < 1e-3:
            break
    return finish_fit(model, evidence, parameters, jitter, origin)


def _information(taken: FloatArray, slopes: FloatArray) -> FloatArray:
    """Sum over names of the outer products of their slopes, weighted; (P, P)."""
    flat = (slopes * np.sqrt(taken)[:, None, None]).reshape(-1, slopes.shape[2])
    return flat.T @ flat


def _precision(
    evidence: Evidence,
    places: FloatArray,
    slopes: FloatArray,
    share: FloatArray,
    jitter: float,
) -> FloatArray:
    """Curvature of the log evidence in the parameters (P, P), with the doubt of the assignment.

    What the capsules would tell if their names were known, less what is lost because they are
    not (Louis 1982, J R Stat Soc B 44:226; each name on its own). Never less than half of the
    prior in any direction.
    """
    taken = share.sum(axis=1)
    known = np.eye(slopes.shape[2]) + _information(taken, slopes) / jitter**2
    away = evidence.points[None] - places[:, None]
    mean = np.einsum("em,ema->ea", share, away)
    second = np.einsum("em,ema,emb->eab", share, away, away)
    scatter = second - mean[:, :, None] * mean[:, None, :]
    lost = (slopes.transpose(0, 2, 1) @ scatter @ slopes).sum(axis=0) / jitter**4
    values, vectors = np.linalg.eigh(known - lost)
    precision: FloatArray = (vectors * np.maximum(values, 0.5)) @ vectors.T
    return precision


def _without_own(
    evidence: Evidence,
    places: FloatArray,
    normals: FloatArray,
    spread: FloatArray,
    share: FloatArray,
    jitter: float,
) -> tuple[FloatArray, FloatArray]:
    """Where the other electrodes alone expect each name, and the covariance of that place.

    The fit has been pulled towards the very capsule whose label is to be judged; here each
    name's own pull and information are taken out again (the cavity of expectation propagation,
    Minka 2001, UAI 17:362).
    """
    frame = np.stack(tangents(normals), axis=2)  # (E, 3, 2)
    turned = frame.transpose(0, 2, 1)
    away = np.einsum("eka,ema->emk", turned, evidence.points[None] - places[:, None])
    taken = share.sum(axis=1)
    pull = np.einsum("em,emk->ek", share, away)
    scatter = np.einsum("em,emk,eml->ekl", share, away, away) - pull[:, :, None] * pull[:, None]
    own = taken[:, None, None] * np.eye(2) / jitter**2 - scatter / jitter**4
    values, vectors = np.linalg.eigh(np.linalg.inv(turned @ spread @ frame) - own)
    # No place is less sure than a cap that is put on with closed eyes.
    values = np.maximum(values, 1.0 / _BLIND_MM**2)
    cavity = (vectors / values[:, None, :]) @ vectors.transpose(0, 2, 1)
    moved = np.einsum("ekl,el->ek", cavity, pull) / jitter**2
    return (
        places - np.einsum("eak,ek->ea", frame, moved),
        frame @ cavity @ turned,
    )


def _best_jitter(total: float, count: float) -> float:
    """Most probable jitter for a sum of squared distances over `count` pairs in two axes."""
    grid = np.exp(np.linspace(np.log(0.8), np.log(10.0), 60))
    score = -count * 2 * np.log(grid) - 0.5 * total / grid**2
    score += -0.5 * (np.log(grid / _JITTER_MM) / _JITTER_LOG_SD) ** 2
    return float(grid[int(score.argmax())])


def finish_fit(
    model: CapModel, evidence: Evidence, parameters: FloatArray, jitter: float, origin: str
) -> Fit:
    """Evidence of a fit (Laplace about its maximum) and the shares with the cap's own doubt."""
    places, slopes, normals = model.linear(parameters)
    weights = pair_log_weights(places, None, jitter, evidence)
    none = np.zeros((len(places), 3, 3))
    apart = holder_factor(places, none, jitter, evidence.points)
    share, log_sum = match_sum(weights, apart)
    taken = share.sum(axis=1)
    precision = _precision(evidence, places, slopes, share, jitter)
    covariance = np.linalg.inv(precision)
    log_evidence = (
        log_sum
        + len(model.base) * np.log(evidence.absent)
        + len(evidence.points) * np.log(evidence.stray_per_mm2)
        - 0.5 * float(parameters @ parameters)
        - 0.5 * float(np.linalg.slogdet(precision)[1])
        + _jitter_log_prior(jitter)
        # the jitter's own width about its maximum: 1 / sqrt(2 n)
        - 0.5 * np.log(4 * max(float(taken.sum()), 1.0) + 1 / _JITTER_LOG_SD**2)
    )
    spread = (slopes @ covariance) @ slopes.transpose(0, 2, 1)
    others_places, others_spread = _without_own(evidence, places, normals, spread, share, jitter)
    weights = pair_log_weights(others_places, others_spread, jitter, evidence)
    apart = holder_factor(others_places, others_spread, jitter, evidence.points)
    share, _ = match_sum(weights, apart)
    return Fit(
        model=model,
        parameters=parameters,
        jitter_mm=jitter,
        share=share,
        log_evidence=float(log_evidence),
        places=places,
        spread=spread,
        origin=origin,
        normals=normals,
    )

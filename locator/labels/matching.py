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

from locator.labels.cap import CapModel

FloatArray = NDArray[np.float64]


_NEGLIGIBLE = -12.0


def match_sum(
    log_weights: FloatArray, *, n_turns: int = 200, tolerance: float = 1e-6
) -> tuple[FloatArray, float]:
    """Share of every pair in the sum over partial matchings, and the log of the sum.

    Parameters
    ----------
    log_weights : (E, M) ndarray
        Log weight of each pair against both staying alone.
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
    """
    # Capsules that no name can reach stay alone, whatever the messages say.
    reached = np.flatnonzero(log_weights.max(axis=0, initial=-np.inf) > _NEGLIGIBLE)
    if len(reached) < log_weights.shape[1]:
        share = np.zeros_like(log_weights)
        if len(reached) == 0:
            return share, 0.0
        share[:, reached], log_sum = match_sum(
            log_weights[:, reached], n_turns=n_turns, tolerance=tolerance
        )
        return share, log_sum
    weight = np.exp(np.clip(log_weights, -60.0, 60.0))
    to_row = np.ones_like(weight)  # message from column j to row i
    share = np.zeros_like(weight)
    to_column = to_row
    for turn in range(n_turns):
        flow = weight * to_row
        to_column = 1.0 / (1.0 + (flow.sum(axis=1, keepdims=True) - flow))
        flow = weight * to_column
        to_row = 1.0 / (1.0 + (flow.sum(axis=0, keepdims=True) - flow))
        if turn % 4 == 3:
            product = weight * to_row * to_column
            new = product / (1.0 + product)
            change = float(np.abs(new - share).max()) if new.size else 0.0
            share = new
            if change < tolerance:
                break
    flow = weight * to_row
    log_rows = np.log1p(flow.sum(axis=1)).sum()
    log_columns = np.log1p((weight * to_column).sum(axis=0)).sum()
    product = weight * to_row * to_column
    return product / (1.0 + product), float(log_rows + log_columns - np.log1p(product).sum())


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


def _best_jitter(total: float, count: float) -> float:
    """Most probable jitter for a sum of squared distances over `count` pairs in two axes."""
    grid = np.exp(np.linspace(np.log(0.8), np.log(10.0), 60))
    score = -count * 2 * np.log(grid) - 0.5 * total / grid**2
    score += -0.5 * (np.log(grid / _JITTER_MM) / _JITTER_LOG_SD) ** 2
    return float(grid[int(score.argmax())])


# An electrode without capsule still has its holder: no stray blob lies closer than this to it.
HOLDER_REACH_MM = 12.0
# Odds of every label are divided by this before they are stated: densities of strays and absent
# capsules are estimates from one cap. From simulated caps over many heads (jitter 4 mm, 6 off,
# 8 extra): without it labels stated at 0.93 were right in 0.80, with it stated and true agree to
# 0.05, on the cautious side.
_CAUTION = 3.0


def finish_fit(
    model: CapModel, evidence: Evidence, parameters: FloatArray, jitter: float, origin: str
) -> Fit:
    """Evidence of a fit (Laplace about its maximum) and the shares with the cap's own doubt."""
    places, slopes, normals = model.linear(parameters)
    weights = pair_log_weights(places, None, jitter, evidence)
    share, log_sum = match_sum(weights)
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
    weights = pair_log_weights(places, spread, jitter, evidence) - np.log(_CAUTION)
    share, _ = match_sum(weights)
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

"""How much a blob looks like the capsules of its scan."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

LEAST_SD = np.array([0.08, 0.06, 0.5, 0.25, 0.08])
"""Least scatter of capsules in log contrast, log diameter, height (mm), log residual and log
roundness: no cap is more regular than that. Common experience, no source."""

BROAD_MEAN = np.array([-0.7, 1.9, 3.0, -1.2, -0.9])
BROAD_SD = np.array([0.9, 0.5, 5.0, 0.7, 0.6])
"""Bright spots that are no capsules (ears, folds, vessels, ghosts), in the same five looks: wide on
purpose. From heads without capsules, see the markers benchmark."""


def capsule_probability(
    looks: FloatArray, prior: FloatArray, *, log_diameter: float | None = None
) -> tuple[FloatArray, FloatArray]:
    """Probability that each blob is one of the capsules, from their likeness to each other.

    A mixture of two classes: capsules, which resemble each other, and everything else, which is
    spread widely. The capsules' class starts where plausible blobs lie closest together and is
    fitted by expectation maximisation.

    Parameters
    ----------
    looks : (N, 5) ndarray
        Log contrast (fat = 0), log diameter (mm), height (mm), log residual, log roundness.
    prior : (N,) ndarray
        Plausibility of each blob by itself, 0 to 1.
    log_diameter : float, optional
        Logarithm of the diameter, mm, where it is known.

    Returns
    -------
    probability : (N,) ndarray
    mean : (5,) ndarray
        Looks of this scan's capsules.
    """
    count = len(looks)
    width = 2.5 * LEAST_SD
    difference = (looks[:, None] - looks[None]) / width
    alike = np.exp(-0.5 * (difference[..., :3] ** 2).sum(axis=2)) @ prior
    start = alike * prior
    if log_diameter is not None:
        start = start * np.exp(-0.5 * ((looks[:, 1] - log_diameter) / 0.25) ** 2)
    seed = int(np.argmax(start))
    weight = np.exp(-0.5 * (((looks - looks[seed]) / (2 * width)) ** 2).sum(axis=1)) * prior
    mean, spread = looks[seed], 2 * width
    share = 0.5
    other_mean, other_sd = BROAD_MEAN, BROAD_SD
    probability = weight
    for _ in range(30):
        total = weight.sum() + 1e-9
        # A pinch of the starting spread keeps a handful of blobs from collapsing on themselves.
        mean = (weight @ looks + 0.5 * looks[seed]) / (total + 0.5)
        variance = (weight @ (looks - mean) ** 2 + 3 * width**2 / 2) / (total + 3)
        spread = np.clip(np.sqrt(variance), LEAST_SD, 4 * width)
        inside = _density(looks, mean, spread) * share * prior
        outside = _density(looks, other_mean, other_sd) * (1 - share)
        probability = inside / np.maximum(inside + outside, 1e-300)
        if np.abs(probability - weight).max() < 1e-4:
            break
        weight = probability
        share = float(np.clip((weight.sum() + 2) / (count + 4), 0.05, 0.95))
    return probability, mean


def _density(looks: FloatArray, mean: FloatArray, spread: FloatArray) -> FloatArray:
    """Product of Student t densities with 5 degrees of freedom: tails heavier than normal."""
    z2 = ((looks - mean) / spread) ** 2
    density: FloatArray = ((1 + z2 / 5) ** -3 / spread).prod(axis=1)
    return density

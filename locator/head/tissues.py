"""Tissue classes inside the brain, and the smooth shading of the image."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray
from scipy import ndimage

from locator.errors import HeadError

FloatArray = NDArray[np.float64]
Float32Array = NDArray[np.float32]
BoolArray = NDArray[np.bool_]

STEP = 3
"""The mixture is fitted on every third voxel along each axis."""


MOST_GREY, MOST_CSF = 0.86, 0.85
"""Grey over white and CSF over grey at most; 0.72 to 0.79 and 0.35 to 0.75 on T1 volumes at hand."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Mixture:
    """Three Gaussian classes (CSF, grey, white) and a smooth multiplicative field.

    Attributes
    ----------
    mean, sd, share : (3,) ndarray
        In corrected intensity, dark to bright.
    field : (i, j, k) ndarray
        Shading on the coarse grid (every `STEP`-th voxel), about 1 in the brain.
    """

    mean: FloatArray
    sd: FloatArray
    share: FloatArray
    field: FloatArray


def _start_classes(values: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """First class means by splitting the histogram where three class variances are least."""
    low, high = np.percentile(values, [0.5, 99.5])
    counts, edges = np.histogram(np.clip(values, low, high), bins=64)
    centers = 0.5 * (edges[1:] + edges[:-1])
    weight = np.concatenate([[0.0], np.cumsum(counts, dtype=float)])
    first = np.concatenate([[0.0], np.cumsum(counts * centers)])
    best, cut = -1.0, (20, 40)
    for a in range(2, 60):
        for b in range(a + 2, 63):
            total = 0.0
            for lo, hi in ((0, a), (a, b), (b, 64)):
                mass = weight[hi] - weight[lo]
                if mass > 0:
                    total += (first[hi] - first[lo]) ** 2 / mass
            if total > best:
                best, cut = total, (a, b)
    bounds = [(0, cut[0]), (cut[0], cut[1]), (cut[1], 64)]
    mass = np.array([max(weight[hi] - weight[lo], 1.0) for lo, hi in bounds])
    mean = np.array([(first[hi] - first[lo]) / m for (lo, hi), m in zip(bounds, mass, strict=True)])
    return mean, np.full(3, 0.1 * mean[2]), mass / mass.sum()


def fit_mixture(
    image: Float32Array,
    mask: BoolArray,
    *,
    field_mm: float = 40.0,
    n_rounds: int = 12,
    start_field: FloatArray | None = None,
) -> Mixture:
    """Fit three classes and a smooth field to the brain by expectation-maximisation.

    The field is the smoothed ratio of the intensities to what the classes expect, each voxel
    weighted by how sure its class is (as in Wells et al. 1996). The class deviations are held at or
    above 7 % of the white mean: partial volumes otherwise pull the classes apart.

    Parameters
    ----------
    image : (I, J, K) ndarray
    mask : (I, J, K) ndarray of bool
    field_mm : float
        Full width at half maximum of the field's smoothing.
    n_rounds : int
    start_field : ndarray, optional
        Field on the coarse grid to begin with.

    Returns
    -------
    Mixture

    Raises
    ------
    HeadError
        If the mask holds too little.

    References
    ----------
    .. [1] Wells WM, Grimson WEL, Kikinis R, Jolesz FA (1996). Adaptive segmentation of MRI data.
       IEEE Trans Med Imaging 15:429-442. https://doi.org/10.1109/42.511747
    """
    coarse = np.asarray(image[::STEP, ::STEP, ::STEP], dtype=np.float64)
    where = np.ascontiguousarray(mask[::STEP, ::STEP, ::STEP]) & (coarse > 0)
    if int(where.sum()) < 2000:
        msg = (
            f"The brain found holds {int(where.sum()) * STEP**3 / 1000:.0f} mL, too little to tell"
            " its tissues apart (stage head). Check that the T1 shows a whole head."
        )
        raise HeadError(msg)
    values = coarse[where]
    sigma = field_mm / 2.355 / STEP
    field = np.ones_like(coarse) if start_field is None else start_field.copy()
    corrected = values / field[where]
    mean, sd, share = _start_classes(corrected)
    for turn in range(n_rounds):
        for _ in range(4):
            spread = np.maximum(sd, 0.07 * mean[2])
            log = np.log(share) - np.log(spread) - 0.5 * ((corrected[:, None] - mean) / spread) ** 2
            log -= log.max(axis=1, keepdims=True)
            chance = np.exp(log)
            chance /= chance.sum(axis=1, keepdims=True)
            mass = chance.sum(axis=0) + 1e-9
            mean = (chance * corrected[:, None]).sum(axis=0) / mass
            sd = np.sqrt((chance * (corrected[:, None] - mean) ** 2).sum(axis=0) / mass)
            share = mass / mass.sum()
            # Where a class is all but absent it must not split another one.
            mean[1] = min(mean[1], MOST_GREY * mean[2])
            mean[0] = min(mean[0], MOST_CSF * mean[1])
        if turn == n_rounds - 1:
            break
        # CSF says little about the field: its mean is near zero signal.
        precision = chance[:, 1:] / np.maximum(sd[1:], 0.07 * mean[2]) ** 2
        top = np.zeros_like(coarse)
        bottom = np.zeros_like(coarse)
        top[where] = values * (precision * mean[1:]).sum(axis=1)
        bottom[where] = (precision * mean[1:] ** 2).sum(axis=1)
        top, bottom = _spread(top, sigma), _spread(bottom, sigma)
        floor = 1e-12 * bottom.max()
        field = (top + floor) / (bottom + floor)
        field /= np.median(field[where])
        field = np.clip(field, 0.2, 5.0)
        corrected = values / field[where]
    if not np.isfinite(mean).all() or mean[1] <= 0 or share[0] + share[1] < 1e-3:
        msg = (
            "Inside the head there is one brightness only, so no tissues can be told apart (stage"
            " head). Check that this is the T1 image and not a mask."
        )
        raise HeadError(msg)
    return Mixture(mean=mean, sd=sd, share=share, field=field)


def _spread(values: FloatArray, sigma: float) -> FloatArray:
    """Smooth; far from the brain, where nothing is left of that, a much wider smoothing."""
    near = ndimage.gaussian_filter(values, sigma, truncate=3.0)
    thin = ndimage.gaussian_filter(near[::3, ::3, ::3], sigma, mode="constant")
    result: FloatArray = near + 1e-3 * _stretch(thin, 3, near.shape)
    return result


def _stretch(values: FloatArray, step: int, shape: tuple[int, ...]) -> FloatArray:
    """Trilinear values on the full grid from every `step`-th voxel of it."""
    full = values
    for axis, length in enumerate(shape):
        at = np.arange(length) / step
        low = np.minimum(np.floor(at).astype(int), full.shape[axis] - 1)
        high = np.minimum(low + 1, full.shape[axis] - 1)
        part = (at - low).astype(full.dtype)
        part = part.reshape([-1 if a == axis else 1 for a in range(3)])
        full = np.take(full, low, axis=axis) * (1 - part) + np.take(full, high, axis=axis) * part
    return full


def shading(mixture: Mixture, shape: tuple[int, ...]) -> Float32Array:
    """Return the field on the full grid, trilinear from the coarse one."""
    return np.ascontiguousarray(_stretch(mixture.field, STEP, shape), dtype=np.float32)


@njit(cache=True)
def _sweep(image, labels, mean, sd, cost, weight):  # type: ignore[no-untyped-def]
    """One pass of iterated conditional modes over the six neighbours; labels 0 is outside."""
    s0, s1, s2 = image.shape
    changed = 0
    for i in range(1, s0 - 1):
        for j in range(1, s1 - 1):
            for k in range(1, s2 - 1):
                if labels[i, j, k] == 0:
                    continue
                best = 1e30
                pick = labels[i, j, k]
                for c in range(3):
                    deviation = (image[i, j, k] - mean[c]) / sd[c]
                    energy = 0.5 * deviation * deviation + cost[c]
                    label = c + 1
                    unlike = 0.0
                    for other in (
                        labels[i - 1, j, k],
                        labels[i + 1, j, k],
                        labels[i, j - 1, k],
                        labels[i, j + 1, k],
                        labels[i, j, k - 1],
                        labels[i, j, k + 1],
                    ):
                        gap = abs(other - label) if other > 0 else 0
                        unlike += gap if gap < 2 else 2.0
                    energy += weight * unlike
                    if energy < best:
                        best = energy
                        pick = label
                if pick != labels[i, j, k]:
                    labels[i, j, k] = pick
                    changed += 1
    return changed


def classify(
    corrected: Float32Array,
    mask: BoolArray,
    mixture: Mixture,
    *,
    weight: float = 0.3,
    n_sweeps: int = 4,
) -> NDArray[np.uint8]:
    """Label the voxels of the mask 1 CSF, 2 grey, 3 white with a Markov random field.

    Iterated conditional modes (Besag 1986, J R Stat Soc B 48:259); neighbours that differ by two
    classes cost twice, because grey lies between CSF and white.
    """
    sd = np.maximum(mixture.sd, 0.07 * mixture.mean[2])
    # Equal class costs near the borders: shares of the whole say nothing about one voxel there.
    cost = np.log(sd)
    middle = 0.5 * (mixture.mean[1:] + mixture.mean[:-1])
    labels = np.zeros(corrected.shape, dtype=np.uint8)
    labels[mask] = 1 + np.searchsorted(middle, corrected[mask]).astype(np.uint8)
    for _ in range(n_sweeps):
        if _sweep(corrected, labels, mixture.mean, sd, cost, weight) == 0:
            break
    return labels

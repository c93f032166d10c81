"""Distances and pieces of voxel masks: dilating, eroding and closing by balls, quickly."""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray
from scipy import ndimage

BoolArray = NDArray[np.bool_]
Float32Array = NDArray[np.float32]


@njit(cache=True)
def _envelope(values, out, place, border):  # type: ignore[no-untyped-def]
    """Lower envelope of parabolas (Felzenszwalb & Huttenlocher 2012) along one line."""
    n = values.shape[0]
    k = -1
    for q in range(n):
        if values[q] >= 1e9:
            continue
        if k < 0:
            k = 0
            place[0] = q
            border[0] = -1e30
            continue
        while True:
            p = place[k]
            at = ((values[q] + q * q) - (values[p] + p * p)) / (2.0 * (q - p))
            if at <= border[k] and k > 0:
                k -= 1
            else:
                break
        k += 1
        place[k] = q
        border[k] = at
    if k < 0:
        for q in range(n):
            out[q] = 1e9
        return
    m = 0
    for q in range(n):
        while m < k and border[m + 1] < q:
            m += 1
        gap = q - place[m]
        out[q] = gap * gap + values[place[m]]


@njit(cache=True)
def _squared(mask):  # type: ignore[no-untyped-def]
    s0, s1, s2 = mask.shape
    result = np.empty((s0, s1, s2), dtype=np.float32)
    for i in range(s0):
        for j in range(s1):
            last = -100000
            for k in range(s2):
                if mask[i, j, k]:
                    last = k
                gap = float(k - last)
                result[i, j, k] = gap * gap if gap < 30000 else 1e9
            last = 100000
            for k in range(s2 - 1, -1, -1):
                if mask[i, j, k]:
                    last = k
                gap = float(last - k)
                if gap < 30000 and gap * gap < result[i, j, k]:
                    result[i, j, k] = gap * gap
    longest = max(s0, s1)
    line = np.empty(longest, dtype=np.float64)
    out = np.empty(longest, dtype=np.float64)
    place = np.empty(longest, dtype=np.int64)
    border = np.empty(longest, dtype=np.float64)
    for i in range(s0):
        for k in range(s2):
            for j in range(s1):
                line[j] = result[i, j, k]
            _envelope(line[:s1], out[:s1], place, border)
            for j in range(s1):
                result[i, j, k] = out[j]
    for j in range(s1):
        for k in range(s2):
            for i in range(s0):
                line[i] = result[i, j, k]
            _envelope(line[:s0], out[:s0], place, border)
            for i in range(s0):
                result[i, j, k] = out[i]
    return result


def distance_to(mask: BoolArray) -> Float32Array:
    """Distance of every voxel to the nearest one of the mask, voxels; huge when it is empty.

    References
    ----------
    .. [1] Felzenszwalb PF, Huttenlocher DP (2012). Distance transforms of sampled functions.
       Theory of Computing 8:415-428. https://doi.org/10.4086/toc.2012.v008a019

    Examples
    --------
    >>> mask = np.zeros((5, 5, 5), dtype=bool)
    >>> mask[0, 0, 0] = True
    >>> float(distance_to(mask)[3, 4, 0])
    5.0
    """
    square: Float32Array = _squared(np.ascontiguousarray(mask))
    return np.sqrt(square, out=square)


def close(mask: BoolArray, radius: float) -> BoolArray:
    """Fill what a ball of this radius (voxels) cannot enter from outside."""
    pad = int(np.ceil(radius)) + 1
    padded = np.pad(mask, pad)
    closed = distance_to(~(distance_to(padded) <= radius)) > radius
    return closed[pad:-pad, pad:-pad, pad:-pad]


def largest_piece(mask: BoolArray) -> BoolArray:
    """Return the largest face-connected piece of a mask (all false when it is empty)."""
    labels, count = ndimage.label(mask)
    if count == 0:
        return np.zeros_like(mask)
    sizes = np.bincount(labels.ravel())
    sizes[0] = 0
    result: BoolArray = labels == sizes.argmax()
    return result


def box_around(mask: BoolArray, margin: int) -> tuple[slice, slice, slice]:
    """Slices of the smallest box round the mask with a margin, clipped to the array.

    Examples
    --------
    >>> mask = np.zeros((9, 9, 9), dtype=bool)
    >>> mask[4, 4, 4] = True
    >>> box_around(mask, 1)[0]
    slice(3, 6, None)
    """
    slices = []
    for axis in range(3):
        found = np.flatnonzero(mask.any(axis=tuple(a for a in range(3) if a != axis)))
        slices.append(
            slice(
                int(max(0, found[0] - margin)), int(min(mask.shape[axis], found[-1] + margin + 1))
            )
        )
    return slices[0], slices[1], slices[2]

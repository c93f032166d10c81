"""Cerebellum and brain stem, told from the cerebrum by where the white matter leads."""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from locator.head.model import BRAIN_STEM, CEREBELLUM
from locator.head.morphology import box_around

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

TEMPLATE_CENTER_MM = np.array([0.0, -22.0, 9.0])
TEMPLATE_ANGLE_DEG = 14.0
TEMPLATE_SD_MM = np.array([33.0, 39.5, 29.7])
"""Centre, tilt of the long axis in the sagittal plane (front up) and spread across, along the long
axis and square to both, of whole brains in MNI 152 space (measured here on two templates)."""

SEEDS_MM = {
    CEREBELLUM: ((-24.0, -63.0, -38.0), (24.0, -63.0, -38.0), (0.0, -62.0, -28.0)),
    BRAIN_STEM: ((0.0, -27.0, -30.0), (0.0, -32.0, -42.0), (0.0, -38.0, -52.0)),
}
"""Middles of the parts in MNI 152 space (values from memory, good to about 5 mm)."""

SEED_RADIUS_MM = {CEREBELLUM: 8.0, BRAIN_STEM: 6.0}


MOST_CONTACT = 3000
"""Faces of white voxels between cerebrum and cerebellum, of 1 mm^2, above which they are not two
things: white matter joins them only by way of the brain stem (under 150 on three real heads, 6,400 in a layered ball)."""


def _white_contact(labels: NDArray[np.int8], white: BoolArray) -> int:
    """Count voxel faces where white matter of the cerebrum meets that of the cerebellum."""
    first = white & (labels == 1)
    second = white & (labels == CEREBELLUM)
    total = 0
    for axis in range(3):
        low: list[slice] = [slice(None)] * 3
        high: list[slice] = [slice(None)] * 3
        low[axis], high[axis] = slice(None, -1), slice(1, None)
        total += int((first[tuple(low)] & second[tuple(high)]).sum())
        total += int((second[tuple(low)] & first[tuple(high)]).sum())
    return total


def _brain_frame(mask: BoolArray) -> tuple[FloatArray, FloatArray]:
    """Centre of the brain and the matrix that takes template mm (centred) to its voxels."""
    at = np.argwhere(mask[::2, ::2, ::2]) * 2.0
    center = at.mean(axis=0)
    spread = np.cov((at - center).T)
    tilt = 0.5 * np.arctan2(2 * spread[1, 2], spread[1, 1] - spread[2, 2])
    minor, major = np.sqrt(np.linalg.eigvalsh(spread[1:, 1:]))
    sizes = np.array([np.sqrt(spread[0, 0]), major, minor]) / TEMPLATE_SD_MM

    def turn(angle: float) -> FloatArray:
        cosine, sine = np.cos(angle), np.sin(angle)
        return np.array([[1.0, 0, 0], [0, cosine, -sine], [0, sine, cosine]])

    return center, turn(tilt) @ np.diag(sizes) @ turn(-np.radians(TEMPLATE_ANGLE_DEG))


@njit(cache=True)
def _spread_labels(cost, labels, longest):  # type: ignore[no-untyped-def]
    """Give every voxel the label that reaches it first; integer costs, 0 is a wall (in place)."""
    s0, s1, s2 = cost.shape
    n = s0 * s1 * s2
    flat_cost = cost.ravel()
    flat = labels.ravel()
    best = np.full(n, 2**30, dtype=np.int32)
    head = np.full(longest + 1, -1, dtype=np.int64)
    capacity = 8 * n
    entry = np.empty(capacity, dtype=np.int32)
    following = np.empty(capacity, dtype=np.int32)
    used = 0
    for p in range(n):
        if flat[p] > 0 and flat_cost[p] > 0:
            best[p] = 0
            entry[used] = p
            following[used] = head[0]
            head[0] = used
            used += 1
    steps = (s1 * s2, -s1 * s2, s2, -s2, 1, -1)
    pending = used
    distance = 0
    while pending > 0:
        slot = distance % (longest + 1)
        while head[slot] >= 0:
            e = head[slot]
            head[slot] = following[e]
            pending -= 1
            p = entry[e]
            if best[p] != distance:
                continue
            i = p // (s1 * s2)
            j = (p // s2) % s1
            k = p % s2
            for d in range(6):
                if (
                    (d == 0 and i == s0 - 1)
                    or (d == 1 and i == 0)
                    or (d == 2 and j == s1 - 1)
                    or (d == 3 and j == 0)
                    or (d == 4 and k == s2 - 1)
                    or (d == 5 and k == 0)
                ):
                    continue
                q = p + steps[d]
                if flat_cost[q] == 0:
                    continue
                new = distance + flat_cost[q]
                if new < best[q]:
                    best[q] = new
                    flat[q] = flat[p]
                    other = new % (longest + 1)
                    entry[used] = q
                    following[used] = head[other]
                    head[other] = used
                    used += 1
                    pending += 1
        distance += 1


def seed_mask(mask: BoolArray, radius_mm: float) -> BoolArray:
    """Balls round the expected middles of cerebellum and brain stem of the brain in `mask`."""
    center, voxel_from_template = _brain_frame(mask)
    grids = np.ogrid[tuple(slice(0, n) for n in mask.shape)]
    found = np.zeros(mask.shape, dtype=bool)
    for middles in SEEDS_MM.values():
        for middle in middles:
            at = center + voxel_from_template @ (np.array(middle) - TEMPLATE_CENTER_MM)
            found |= sum((g - c) ** 2 for g, c in zip(grids, at, strict=True)) < radius_mm**2
    return found


def label_parts(
    corrected: NDArray[np.float32], mask: BoolArray, mean: FloatArray
) -> dict[int, BoolArray]:
    """Cerebellum and brain stem in the brain's mask.

    Labels spread from seeds in the cerebellum, the brain stem and the cerebrum, fast in white
    matter, slower in grey and slowest in its dark rim, so that each piece of cortex goes with the
    white matter under it and the parts meet where CSF or a partial volume of it lies between them.
    The seeds are placed by the brain's own centre, tilt and size.

    Parameters
    ----------
    corrected : (i, j, k) ndarray
        Intensity without shading.
    mask : (i, j, k) ndarray of bool
        The brain, voxels of 1 mm.
    mean : (3,) ndarray
        Class means: CSF, grey, white.

    Returns
    -------
    dict
        Label of the part to its mask; empty masks when cerebrum and cerebellum are not apart, as in
        a ball of grey and white layers.
    """
    center, voxel_from_template = _brain_frame(mask)
    template_from_voxel = np.linalg.inv(voxel_from_template)
    lowest = template_from_voxel @ -center + TEMPLATE_CENTER_MM
    x, y, z = (
        sum(
            (row[axis] * np.arange(n, dtype=np.float32)).reshape(
                [-1 if a == axis else 1 for a in range(3)]
            )
            for axis, n in enumerate(mask.shape)
        )
        + np.float32(start)
        for row, start in zip(template_from_voxel.astype(np.float32), lowest, strict=True)
    )
    whole = {part: np.zeros(mask.shape, dtype=bool) for part in SEEDS_MM}
    near = mask & (z < 18) & (y < 6)
    if not near.any():
        return whole
    box = box_around(near, 1)
    near, x, y, z = near[box], x[box], y[box], z[box]
    grey, white = float(mean[1]), float(mean[2])
    level = np.clip((corrected[box] - grey) / (white - grey), -1.0, 1.0)
    cost = np.where(level > 0, 12.0 - 10.0 * level, 12.0 - 18.0 * level)
    cost = np.where(near, np.rint(cost), 0).astype(np.int16)
    labels = np.zeros(near.shape, dtype=np.int8)
    cerebrum = near & (
        (z > 14) | (y > -2) | ((np.abs(x) > 30) & (y > -38) & (z > -24)) | ((y < -55) & (z > 2))
    )
    labels[cerebrum] = 1
    for part, middles in SEEDS_MM.items():
        for middle in middles:
            square = (x - middle[0]) ** 2 + (y - middle[1]) ** 2 + (z - middle[2]) ** 2
            labels[near & (square < SEED_RADIUS_MM[part] ** 2)] = part
    _spread_labels(np.ascontiguousarray(cost), labels, int(cost.max()) + 1)
    if _white_contact(labels, level > 0.4) > MOST_CONTACT:
        return whole
    for part, where in whole.items():
        where[box] = labels == part
    return whole

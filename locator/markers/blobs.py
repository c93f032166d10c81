"""Bright blobs in the shell around the skin: where capsules can be, at every size they can have."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from locator.geometry import voxel_sizes_mm
from locator.skin import Skin

FloatArray = NDArray[np.float64]
Grid = NDArray[np.float32]

SCALE_STEP = 2**0.5
"""Ratio of neighbouring scales; common practice in scale-space blob detection (Lindeberg 1998,
Int J Comput Vis 30:79)."""

DIAMETER_PER_SIGMA = 2 * 3**0.5
"""A ball of diameter d answers most to a Laplacian of Gaussian of sigma = d / (2 sqrt 3), from
setting the derivative of its scale-normalised response to zero in three dimensions."""


EDGE_ROOM = 8
"""Voxels of air beyond an edge of the field: more than half of the widest capsule. Even, so that
halving the grid does not move it."""


@dataclass(frozen=True, eq=False, slots=True)
class Blobs:
    """Local maxima of the scale-normalised response.

    Attributes
    ----------
    places : (N, 3) ndarray
        Positions on the working grid, voxels.
    diameter_mm : (N,) ndarray
        Of the scale at which the response was strongest.
    response : (N,) ndarray
        In units of the response of a ball as bright as 1.
    """

    places: FloatArray
    diameter_mm: FloatArray
    response: FloatArray


def air_only(image: Grid, height: Grid, floor: float) -> Grid:
    """The image over the skin: what lies under it is faded out across the skin line."""
    # Fades from 0.75 mm under the skin to 0.75 mm over it, about the blur of the edge itself.
    ramp = np.clip((height + np.float32(0.75)) * np.float32(1 / 1.5), 0, 1)
    over = image - np.float32(floor)
    np.maximum(over, 0, out=over)
    over *= ramp
    return over


def find_blobs(
    image: Grid,
    skin: Skin,
    *,
    floor: float,
    least: float,
    diameters_mm: tuple[float, float],
    shell_mm: tuple[float, float],
    at_most: int,
) -> Blobs:
    """Find bright blobs over the skin.

    Parameters
    ----------
    image : (I, J, K) ndarray of float32
        On the working grid of the skin.
    skin : Skin
        From `find_skin`.
    floor : float
        Level of the air.
    least : float
        Least brightness of a ball-shaped blob over its surroundings, image units.
    diameters_mm : (float, float)
        Smallest and largest blob, mm.
    shell_mm : (float, float)
        Least and greatest height of a blob's centre over the skin, mm.
    at_most : int
        Only the strongest so many are returned.

    Returns
    -------
    Blobs
        Strongest first.
    """
    height = skin.height_map_mm
    voxel_mm = voxel_sizes_mm(skin.scanner_from_grid)
    over = air_only(image, height, floor)
    # Where the field of view ends near the skin, a capsule may be cut in two: what is seen of it
    # is a blob of its own only with air beyond.
    room = [
        tuple(EDGE_ROOM if height.take(end, axis).min() < shell_mm[1] else 0 for end in (0, -1))
        for axis in range(3)
    ]
    corner = np.array([first for first, _ in room], dtype=np.float64)
    if corner.any() or any(last for _, last in room):
        over = np.pad(over, room, mode="constant")
        height = np.pad(height, room, mode="edge")
    low, high = (d / DIAMETER_PER_SIGMA for d in diameters_mm)
    count = max(2, round(np.log(high / low) / np.log(SCALE_STEP)) + 1)
    # A difference of Gaussians at s and k s stands for the Laplacian at about s sqrt(k).
    sigmas = low * SCALE_STEP ** (np.arange(count + 1) - 0.5)
    places, diameters, responses = [], [], []
    smooth, at, factor = over, 0.0, 1
    pending: Grid | None = None
    for index, sigma in enumerate(sigmas):
        if factor == 1 and at >= 1.6 and index >= 2:
            # Smooth enough for a grid of half the resolution.
            smooth, height, factor = _halved(smooth), _halved(height), 2
            pending = smooth
        extra = np.sqrt(max(sigma**2 - at**2, 0.0)) / (voxel_mm * factor)
        smooth = ndimage.gaussian_filter(smooth, extra, truncate=3.0, mode="nearest")
        at = sigma
        if pending is not None:
            answer = pending - smooth
            scale = sigmas[index - 1] * SCALE_STEP**0.5
            found, strength = _peaks(answer, height, shell_mm, least * _ball_answer(SCALE_STEP))
            places.append(found * factor + (factor - 1) / 2)
            responses.append(strength / _ball_answer(SCALE_STEP))
            diameters.append(np.full(len(found), scale * DIAMETER_PER_SIGMA))
        pending = smooth
    place, diameter = np.concatenate(places) - corner, np.concatenate(diameters)
    response = np.concatenate(responses)
    keep = _strongest(place * voxel_mm, diameter, response, at_most)
    return Blobs(place[keep], diameter[keep], response[keep])


def _ball_answer(ratio: float) -> float:
    """Answer of the difference of Gaussians to a ball of brightness 1 at its best scale."""
    # Share of a ball of radius r = sqrt(3) s that a Gaussian of s/sqrt(k), or s sqrt(k), sees.
    from math import erf, exp, pi, sqrt

    def share(sigma: float) -> float:
        u = sqrt(3) / (sqrt(2) * sigma)
        return erf(u) - 2 / sqrt(pi) * u * exp(-(u**2))

    return share(1 / ratio**0.5) - share(ratio**0.5)


def _halved(image: Grid) -> Grid:
    even = image[tuple(slice(0, n - n % 2) for n in image.shape)]
    half = even[0::2] + even[1::2]
    half = half[:, 0::2] + half[:, 1::2]
    half = half[:, :, 0::2] + half[:, :, 1::2]
    half *= np.float32(1 / 8)
    return half


def _peaks(
    answer: Grid, height: Grid, shell_mm: tuple[float, float], least: float
) -> tuple[FloatArray, FloatArray]:
    """Local maxima over the 26 neighbours, to a fraction of a voxel."""
    strong = (answer > least) & (height > shell_mm[0]) & (height < shell_mm[1])
    for axis in range(3):
        for end in (0, -1):
            edge = [slice(None)] * 3
            edge[axis] = slice(0, 1) if end == 0 else slice(-1, None)
            strong[tuple(edge)] = False
    at = np.argwhere(strong)
    if len(at) == 0:
        return np.zeros((0, 3)), np.zeros(0)
    steps = np.stack(np.meshgrid(*[[-1, 0, 1]] * 3, indexing="ij"), -1).reshape(-1, 3)
    value = answer[tuple(at.T)]
    peak = np.ones(len(at), bool)
    for step in steps:
        if step.any():
            peak &= value >= answer[tuple((at + step).T)]
    at, value = at[peak], value[peak]
    exact = at.astype(np.float64)
    for axis in range(3):
        step = np.eye(3, dtype=int)[axis]
        before, after = answer[tuple((at - step).T)], answer[tuple((at + step).T)]
        curve = 2 * value - before - after
        shift = np.where(curve > 0, (after - before) / np.where(curve > 0, 2 * curve, 1), 0)
        exact[:, axis] += np.clip(shift, -0.5, 0.5)
    return exact, value.astype(np.float64)


def _strongest(
    points_mm: FloatArray, diameter: FloatArray, response: FloatArray, at_most: int
) -> NDArray[np.int64]:
    """Greedy choice: a blob that lies within a stronger one is the same blob."""
    order = np.lexsort((*points_mm.T, -response))
    kept: list[int] = []
    for index in order:
        if len(kept) >= at_most:
            break
        if kept:
            away = np.linalg.norm(points_mm[kept] - points_mm[index], axis=1)
            if (away < 0.5 * np.maximum(diameter[kept], 4.0)).any():
                continue
        kept.append(int(index))
    return np.array(kept, dtype=np.int64)

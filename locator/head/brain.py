"""The brain in the image: a surface that grows outward until the intensity falls."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray
from scipy import ndimage

from locator.errors import HeadError
from locator.geometry import icosphere
from locator.head.grid import WorkGrid
from locator.head.morphology import box_around, distance_to
from locator.head.parts import seed_mask
from locator.head.shape import fill_mesh, ring_neighbours
from locator.head.tissues import Mixture, fit_mixture, shading

FloatArray = NDArray[np.float64]
Float32Array = NDArray[np.float32]
BoolArray = NDArray[np.bool_]


SMOOTH_MM = 1.0
"""Smoothing for the growing surface: without it, sharp sulci stop it (0.8 to 1.1 served alike)."""

TOO_BRIGHT = 1.4
"""Brain is at most this many times the white-matter mean; fat is brighter (figures: 2 times)."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Brain:
    """The brain on a box of the working grid.

    Attributes
    ----------
    box : tuple of slice
        Where the box lies in the working grid.
    mask : (i, j, k) ndarray of bool
        Grey and white matter, brain stem and cerebellum in the box.
    corrected : (i, j, k) ndarray of float32
        Intensity in the box without the shading.
    mixture : Mixture
        Classes; its field covers the box.
    leak : float
        Volume of the grown surface over that of a tighter one; near 1.1 on good heads, much more
        where it ran out of the brain.
    """

    box: tuple[slice, slice, slice]
    mask: BoolArray
    corrected: Float32Array
    mixture: Mixture
    leak: float


@njit(cache=True)
def _grow(  # type: ignore[no-untyped-def]
    image, vertices, ring, low, floor, median, fraction, n_steps, stiff, soft
):
    """Move the vertices in place; forces of Smith (2002)."""
    n = vertices.shape[0]
    s0, s1, s2 = image.shape
    alpha = 0.5 * (1.0 / stiff + 1.0 / soft)
    beta = 6.0 / (1.0 / stiff - 1.0 / soft)
    normals = np.empty_like(vertices)
    means = np.empty_like(vertices)
    for _step in range(n_steps):
        length = 0.0
        for v in range(n):
            nx = ny = nz = 0.0
            mx = my = mz = 0.0
            for e in range(6):
                a = ring[v, e]
                b = ring[v, (e + 1) % 6]
                px = vertices[a, 0] - vertices[v, 0]
                py = vertices[a, 1] - vertices[v, 1]
                pz = vertices[a, 2] - vertices[v, 2]
                qx = vertices[b, 0] - vertices[v, 0]
                qy = vertices[b, 1] - vertices[v, 1]
                qz = vertices[b, 2] - vertices[v, 2]
                nx += py * qz - pz * qy
                ny += pz * qx - px * qz
                nz += px * qy - py * qx
                mx += vertices[a, 0]
                my += vertices[a, 1]
                mz += vertices[a, 2]
                length += np.sqrt(px * px + py * py + pz * pz)
            size = np.sqrt(nx * nx + ny * ny + nz * nz) + 1e-12
            normals[v, 0] = nx / size
            normals[v, 1] = ny / size
            normals[v, 2] = nz / size
            means[v, 0] = mx / 6
            means[v, 1] = my / 6
            means[v, 2] = mz / 6
        length /= 6 * n
        for v in range(n):
            nx, ny, nz = normals[v]
            sx = means[v, 0] - vertices[v, 0]
            sy = means[v, 1] - vertices[v, 1]
            sz = means[v, 2] - vertices[v, 2]
            along = sx * nx + sy * ny + sz * nz
            f_smooth = 0.5 * (1.0 + np.tanh(beta * (2.0 * abs(along) / length**2 - alpha)))
            least = median
            most = low
            for d in range(1, 21):
                i = round(vertices[v, 0] - d * nx)
                j = round(vertices[v, 1] - d * ny)
                k = round(vertices[v, 2] - d * nz)
                if i < 0 or j < 0 or k < 0 or i >= s0 or j >= s1 or k >= s2:
                    break
                value = image[i, j, k]
                if value < least:
                    least = value
                if d <= 10 and value > most:
                    most = value
            least = max(floor, least)
            most = min(median, most)
            edge = (most - floor) * fraction + floor
            force = 2.0 * (least - edge) / (most - floor) if most > floor else -1.0
            push = 0.05 * force * length + f_smooth * along
            vertices[v, 0] += 0.5 * (sx - along * nx) + push * nx
            vertices[v, 1] += 0.5 * (sy - along * ny) + push * ny
            vertices[v, 2] += 0.5 * (sz - along * nz) + push * nz


def _start(grid: WorkGrid) -> tuple[FloatArray, float]:
    """First guess of the brain's middle (grid indices) and radius (mm), from the head's outline."""
    top = int(grid.vertex_k)
    low = max(0, top - 130)
    inside = grid.height_mm[:, :, low : top + 1] < -4
    if inside.sum() < 300_000:
        msg = (
            f"Only {inside.sum() / 1000:.0f} mL of head lie in the upper 130 mm of the volume, too"
            " little for a head with a brain (stage head). Check that the volume shows a whole head"
            " and that its orientation is right."
        )
        raise HeadError(msg)
    counts = [inside.sum(axis=axes) for axes in ((1, 2), (0, 2))]
    x, y = (float((np.arange(len(c)) * c).sum() / c.sum()) for c in counts)
    width = float(np.percentile(inside.any(axis=2).sum(axis=0), 90))
    radius = 0.42 * width
    return np.array([x, y, top - 12.0 - radius]), float(np.clip(radius, 45, 80))


def find_brain(grid: WorkGrid, scale: float) -> Brain:
    """Find the brain: a surface that grows from inside, then what in it has the brain's classes.

    Parameters
    ----------
    grid : WorkGrid
    scale : float
        The surface stops where the intensity falls to this share of the middle between CSF and
        grey matter.

    Returns
    -------
    Brain

    Raises
    ------
    HeadError
        If there is no room for a brain, or nothing brain-like.

    References
    ----------
    .. [1] Smith SM (2002). Fast robust automated brain extraction. Hum Brain Mapp 17:143-155.
       https://doi.org/10.1002/hbm.10062
    """
    center, radius = _start(grid)
    first = fit_mixture(grid.image, _ball(grid.image.shape, center, 0.8 * radius))
    corrected = grid.image / shading(first, grid.image.shape)
    # Fat and marrow are brighter than white matter: made dark, they stop the surface.
    corrected[corrected > TOO_BRIGHT * first.mean[2]] = 0.0
    smooth = ndimage.gaussian_filter(corrected, SMOOTH_MM)
    sphere, faces = icosphere(4)
    ring = ring_neighbours(faces, len(sphere))
    fraction = 0.5 * (first.mean[0] + first.mean[1]) / first.mean[2]
    volumes = []
    masks = []
    for share in (scale, 1.25 * scale):
        vertices = sphere * radius * 0.5 + center
        _grow(smooth, vertices, ring, 0.0, 0.0, first.mean[2], fraction * share, 1000, 3.33, 10.0)
        masks.append(fill_mesh(vertices, faces, grid.image.shape))
        volumes.append(float(masks[-1].sum()))
    if volumes[0] < 300_000:
        msg = (
            f"The brain found holds {volumes[0] / 1000:.0f} mL, far less than any adult's (stage"
            " head). Check that the volume is a T1 of a whole head in the right orientation."
        )
        raise HeadError(msg)
    box = box_around(masks[0], 20)
    grown = masks[0][box]
    mixture = fit_mixture(grid.image[box], distance_to(~grown) > 4)
    corrected = np.ascontiguousarray(grid.image[box] / shading(mixture, grown.shape))
    lower = 0.5 * (mixture.mean[0] + mixture.mean[1])
    tissue = (
        (corrected > lower)
        & (corrected < TOO_BRIGHT * mixture.mean[2])
        & (distance_to(grown) <= 4)
        & (grid.height_mm[box] < -3)
    )
    core = _brain_pieces(distance_to(~tissue) > 2, grown)
    mask = (distance_to(core) <= 3) & tissue
    return Brain(
        box=box,
        mask=mask,
        corrected=corrected,
        mixture=mixture,
        leak=volumes[0] / max(volumes[1], 1.0),
    )


def _brain_pieces(core: BoolArray, grown: BoolArray) -> BoolArray:
    """Largest piece, and those lying where cerebellum and brain stem should be.

    Thin brain stems and sharp tentoria cut the cerebellum off when the tissue is eroded.
    """
    labels, count = ndimage.label(core)
    if count == 0:
        return core
    sizes = np.bincount(labels.ravel())
    sizes[0] = 0
    keep = np.zeros(count + 1, dtype=bool)
    keep[sizes.argmax()] = True
    seeds = seed_mask(grown, 14.0)
    in_seeds = np.bincount(labels[seeds], minlength=count + 1)
    in_grown = np.bincount(labels[grown], minlength=count + 1)
    with np.errstate(divide="ignore", invalid="ignore"):
        inside = in_grown / sizes
    keep |= (in_seeds > 500) & (inside > 0.9) & (sizes < 300_000)
    keep[0] = False
    return keep[labels]


def _ball(shape: tuple[int, ...], center: FloatArray, radius: float) -> BoolArray:
    grids = np.ogrid[tuple(slice(0, n) for n in shape)]
    inside: BoolArray = sum((g - c) ** 2 for g, c in zip(grids, center, strict=True)) < radius**2
    return inside

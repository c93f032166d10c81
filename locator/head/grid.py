"""The working grid of the head stage: about 1 mm, axes near R, A, S, cropped to the head."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import ndimage

from locator.errors import HeadError
from locator.geometry import apply_affine, voxel_sizes_mm
from locator.skin import Skin
from locator.volume import Volume, canonical

FloatArray = NDArray[np.float64]
Float32Array = NDArray[np.float32]

MARGIN_MM = 6.0
"""Air kept around the head."""


@dataclass(frozen=True, kw_only=True, slots=True)
class WorkGrid:
    """The image and the height over the skin on the working grid.

    Attributes
    ----------
    image : (I, J, K) ndarray of float32
        Intensity, capsules taken out.
    height_mm : (I, J, K) ndarray of float32
        Signed distance to the skin, negative inside.
    scanner_from_grid : (4, 4) ndarray
        1 mm steps along orthogonal axes.
    vertex_k : float
        Highest point of the head, grid index along the third axis.
    bottom_k : float
        Where the model ends, grid index along the third axis.
    cut_at_bottom, cut_elsewhere : bool
        The volume ends inside the head at its lower face; at another face.
    cut_faces : tuple of str
        Names of those other faces.
    """

    image: Float32Array
    height_mm: Float32Array
    scanner_from_grid: FloatArray
    vertex_k: float
    bottom_k: float
    cut_at_bottom: bool
    cut_faces: tuple[str, ...]


def _sample(
    values: ArrayLike, from_new: FloatArray, shape: tuple[int, ...], outside: float | None
) -> Float32Array:
    """Trilinear values of an array on a new grid; `from_new` maps new to old indices."""
    array = np.asarray(values, dtype=np.float32)
    linear, offset = from_new[:3, :3], from_new[:3, 3]
    near = np.rint(offset)
    if np.allclose(linear, np.eye(3), atol=1e-4) and np.allclose(offset, near, atol=1e-2):
        start = near.astype(int)
        stop = start + shape
        inner = tuple(
            slice(max(0, a), max(0, min(b, n)))
            for a, b, n in zip(start, stop, array.shape, strict=True)
        )
        pad = [
            (min(max(0, -a), m), min(max(0, b - n), m))
            for a, b, n, m in zip(start, stop, array.shape, shape, strict=True)
        ]
        if outside is None:
            return np.ascontiguousarray(np.pad(array[inner], pad, mode="edge"))
        return np.ascontiguousarray(np.pad(array[inner], pad, constant_values=outside))
    mode = "nearest" if outside is None else "constant"
    moved: Float32Array = ndimage.affine_transform(
        array,
        linear,
        offset,
        output_shape=shape,
        order=1,
        mode=mode,
        cval=0.0 if outside is None else outside,
    )
    return moved


def make_grid(
    volume: Volume,
    skin: Skin,
    *,
    capsule_centers_scanner_mm: ArrayLike | None,
    capsule_mm: float | None,
    below_vertex_mm: float,
) -> WorkGrid:
    """Put the image and the skin on a grid of 1 mm, cropped to the head, without capsules.

    Parameters
    ----------
    volume : Volume
    skin : Skin
    capsule_centers_scanner_mm : (N, 3) array_like or None
        Capsules to take out, scanner mm.
    capsule_mm : float or None
        Their diameter; 10 mm when not known.
    below_vertex_mm : float
        The head is looked at down to this far below its highest point.

    Returns
    -------
    WorkGrid

    Raises
    ------
    HeadError
        If no skin lies inside the volume.
    """
    turned = canonical(volume)
    affine = np.asarray(turned.scanner_from_voxel, dtype=np.float64)
    sizes = voxel_sizes_mm(affine)
    left, _, right = np.linalg.svd(affine[:3, :3] / sizes)
    rotation = left @ right
    height = np.asarray(skin.height_map_mm)
    inside = height < 0
    if not inside.any():
        msg = (
            "The skin encloses nothing, so there is no head to model (stage head)."
            " Check the T1 in a viewer."
        )
        raise HeadError(msg)
    limits = np.array(
        [
            np.flatnonzero(inside.any(axis=tuple(a for a in range(3) if a != axis)))[[0, -1]]
            for axis in range(3)
        ]
    )
    corners = np.stack(np.meshgrid(*limits, indexing="ij"), axis=-1).reshape(-1, 3)
    world = apply_affine(np.asarray(skin.scanner_from_grid), corners)
    origin_old = affine[:3, 3]
    turned_corners = (world - origin_old) @ rotation
    extent = np.array(turned.intensity.shape) * sizes
    low = np.maximum(np.floor(turned_corners.min(axis=0)) - MARGIN_MM, -MARGIN_MM)
    high = np.minimum(np.ceil(turned_corners.max(axis=0)) + MARGIN_MM, extent + MARGIN_MM)
    shape = tuple(int(n) for n in high - low + 1)
    if min(shape) < 20:
        msg = (
            f"The head on the working grid is only {shape} mm large (stage head): the skin and the"
            " volume do not lie over each other. Check that both are of one session."
        )
        raise HeadError(msg)
    scanner_from_grid = np.eye(4)
    scanner_from_grid[:3, :3] = rotation
    scanner_from_grid[:3, 3] = origin_old + rotation @ low
    height_grid = _sample(
        height, np.linalg.inv(np.asarray(skin.scanner_from_grid)) @ scanner_from_grid, shape, None
    )
    tops = np.flatnonzero((height_grid < 0).reshape(-1, shape[2]).sum(axis=0) > 50)
    if len(tops) == 0:
        msg = "The skin encloses nothing inside the volume (stage head). Check the T1 in a viewer."
        raise HeadError(msg)
    vertex_k = float(tops[-1])
    bottom_k = max(vertex_k - below_vertex_mm, 0.0)
    drop = int(max(0, np.floor(bottom_k - MARGIN_MM)))
    if drop:
        scanner_from_grid[:3, 3] += rotation @ np.array([0, 0, float(drop)])
        height_grid = np.ascontiguousarray(height_grid[:, :, drop:])
        shape = height_grid.shape
        vertex_k -= drop
        bottom_k -= drop
    volume_from_grid = np.linalg.inv(affine) @ scanner_from_grid
    image = _sample(turned.intensity, volume_from_grid, shape, 0.0)
    if image is turned.intensity or not image.flags.writeable or image.base is not None:
        image = image.copy()
    # Where the volume ends, in grid indices (voxel edges).
    edge_low = apply_affine(np.linalg.inv(volume_from_grid), np.zeros(3))
    edge_high = apply_affine(
        np.linalg.inv(volume_from_grid), np.array(turned.intensity.shape, dtype=float) - 1
    )
    bottom_k = max(bottom_k, float(edge_low[2]) + 0.5)
    names = (("left", "right"), ("back", "front"), ("bottom", "top"))
    cut = []
    for axis in range(3):
        for end, place in enumerate((edge_low[axis], edge_high[axis])):
            plane = round(float(place)) + (1 if end == 0 else -1)
            if not 0 <= plane < shape[axis]:
                continue
            face = np.take(height_grid, plane, axis=axis)
            rows = face if axis == 2 else face[:, int(vertex_k - 120 if vertex_k > 120 else 0) :]
            if int((rows < -1.5).sum()) > 300:
                cut.append(names[axis][end])
    if capsule_centers_scanner_mm is not None and len(np.asarray(capsule_centers_scanner_mm)):
        _take_out(
            image,
            height_grid,
            apply_affine(
                np.linalg.inv(scanner_from_grid),
                np.asarray(capsule_centers_scanner_mm, dtype=float),
            ),
            (10.0 if capsule_mm is None else float(capsule_mm)) / 2 + 2.0,
        )
    return WorkGrid(
        image=image,
        height_mm=height_grid,
        scanner_from_grid=scanner_from_grid,
        vertex_k=vertex_k,
        bottom_k=bottom_k,
        cut_at_bottom="bottom" in cut,
        cut_faces=tuple(name for name in cut if name != "bottom"),
    )


def _take_out(
    image: Float32Array, height: Float32Array, centers: FloatArray, radius: float
) -> None:
    """Set the balls around the capsules to air where they lie outside the skin, in place."""
    for center in centers:
        low = np.maximum(np.floor(center - radius), 0).astype(int)
        high = np.minimum(np.ceil(center + radius) + 1, image.shape).astype(int)
        if (high <= low).any():
            continue
        box = tuple(slice(a, b) for a, b in zip(low, high, strict=True))
        grids = np.ogrid[box]
        distance = sum((g - c) ** 2 for g, c in zip(grids, center, strict=True))
        image[box][(distance <= radius**2) & (height[box] > 0.0)] = 0.0

"""Cuts through the volume and views of the head from outside, as plain arrays."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.ndimage import map_coordinates

from locator.geometry import apply_affine
from locator.skin import Skin
from locator.volume import Volume

FloatArray = NDArray[np.float64]

# Okabe & Ito (2008), Color Universal Design: eight colours told apart by most colour-blind people.
ORANGE = "#E69F00"
SKY = "#56B4E9"
GREEN = "#009E73"
YELLOW = "#F0E442"
BLUE = "#0072B2"
VERMILION = "#D55E00"
PURPLE = "#CC79A7"

_RIGHT = np.array([1.0, 0.0, 0.0])
_FRONT = np.array([0.0, 1.0, 0.0])
_UP = np.array([0.0, 0.0, 1.0])

PLANES: dict[str, tuple[FloatArray, FloatArray, tuple[str, str, str, str]]] = {
    "axial": (_RIGHT, _FRONT, ("L", "R", "P", "A")),
    "coronal": (_RIGHT, _UP, ("L", "R", "I", "S")),
    "sagittal": (_FRONT, _UP, ("P", "A", "I", "S")),
}
"""Per plane: direction to the right of the picture, direction up, letters left, right, below, above."""

VIEWS: dict[str, tuple[FloatArray, FloatArray, str]] = {
    "from the left": (-_FRONT, _UP, "front on the left"),
    "from the front": (-_RIGHT, _UP, "the person's right (R) on the left"),
    "from the right": (_FRONT, _UP, "front on the right"),
    "from behind": (_RIGHT, _UP, "the person's left (L) on the left"),
    "from above": (_RIGHT, _FRONT, "front at the top, the person's left (L) on the left"),
}
"""Per view: direction to the right of the picture, direction up, and a caption."""


def grey_window(volume: Volume) -> tuple[float, float]:
    """Intensities shown as black and as white: 1st and 99.7th percentile of the non-air voxels."""
    values = volume.intensity[::3, ::3, ::3]
    low = float(np.percentile(values, 1))
    inside = values[values > low + 0.05 * (float(values.max()) - low)]
    return low, float(np.percentile(inside if inside.size else values, 99.7))


def sample_plane(
    volume: Volume,
    center_scanner_mm: ArrayLike,
    plane: str,
    *,
    half_mm: float | tuple[float, float],
    pixels_per_mm: float,
    values: NDArray[np.floating] | NDArray[np.integer] | None = None,
    order: int = 1,
) -> FloatArray:
    """Cut a plane of scanner space out of a volume.

    Parameters
    ----------
    volume : Volume
        Any axis order.
    center_scanner_mm : (3,) array_like
        Middle of the picture.
    plane : {"axial", "coronal", "sagittal"}
        Which plane of `PLANES`.
    half_mm : float or (float, float)
        Half the width and half the height, mm.
    pixels_per_mm : float
        Resolution of the picture.
    values : (I, J, K) ndarray, optional
        Another array on the same grid to cut instead of the intensity.
    order : int
        0 nearest, 1 linear.

    Returns
    -------
    (H, W) ndarray
        First row on top; 0 outside the volume.
    """
    across, upward, _ = PLANES[plane]
    half_w, half_h = half_mm if isinstance(half_mm, tuple) else (half_mm, half_mm)
    u = np.arange(-half_w, half_w + 1e-6, 1 / pixels_per_mm)
    v = np.arange(half_h, -half_h - 1e-6, -1 / pixels_per_mm)
    points = (
        np.asarray(center_scanner_mm, float) + u[None, :, None] * across + v[:, None, None] * upward
    )
    voxel = apply_affine(np.linalg.inv(volume.scanner_from_voxel), points)
    image = volume.intensity if values is None else values
    cut: FloatArray = map_coordinates(image, np.moveaxis(voxel, -1, 0), order=order, output=float)
    return cut


def to_grey(cut: FloatArray, window: tuple[float, float]) -> NDArray[np.uint8]:
    """Intensities to grey levels between black and white of the window."""
    low, high = window
    level = np.clip((cut - low) / max(high - low, 1e-9), 0, 1)
    return (255 * level).astype(np.uint8)


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class HeadView:
    """The head seen from one side, with what is needed to draw on it.

    Attributes
    ----------
    shade : (H, W) ndarray
        0 (background) to 1.
    depth_mm : (H, W) ndarray
        Position along the line of sight of what is seen; NaN where there is no head.
    extent_mm : tuple of float
        Left, right, bottom, top of the picture in its own two directions, scanner mm.
    across, upward, towards : (3,) ndarray
        Directions of the picture and towards the viewer.
    """

    shade: FloatArray
    depth_mm: FloatArray
    extent_mm: tuple[float, float, float, float]
    across: FloatArray
    upward: FloatArray
    towards: FloatArray

    def place(self, points_scanner_mm: ArrayLike) -> tuple[FloatArray, NDArray[np.bool_]]:
        """Where points fall in the picture (N, 2), and whether they face the viewer (N,)."""
        points = np.asarray(points_scanner_mm, float).reshape(-1, 3)
        flat = np.stack([points @ self.across, points @ self.upward], axis=1)
        left, right, bottom, top = self.extent_mm
        height, width = self.depth_mm.shape
        column = np.clip((flat[:, 0] - left) / (right - left) * width, 0, width - 1).astype(int)
        row = np.clip((top - flat[:, 1]) / (top - bottom) * height, 0, height - 1).astype(int)
        seen = np.nan_to_num(self.depth_mm[row, column], nan=-np.inf)
        return flat, points @ self.towards > seen - 6.0


def head_view(skin: Skin, view: str, *, step_mm: float = 1.0) -> HeadView:
    """Look at the skin from outside.

    Parameters
    ----------
    skin : Skin
        Its height map is what is seen.
    view : str
        A key of `VIEWS`.
    step_mm : float
        Pixel size and step along the line of sight.

    Returns
    -------
    HeadView
    """
    across, upward, _ = VIEWS[view]
    towards = np.cross(across, upward)
    shape = np.array(skin.height_map_mm.shape)
    corners = apply_affine(
        skin.scanner_from_grid,
        np.array(np.meshgrid(*[[0, n - 1] for n in shape])).reshape(3, -1).T,
    )
    spans = [(np.min(corners @ d), np.max(corners @ d)) for d in (across, upward, towards)]
    u, v, w = (np.arange(low, high + step_mm, step_mm) for low, high in spans)
    grid_from_scanner = np.linalg.inv(skin.scanner_from_grid)
    depth = np.full((len(v), len(u)), np.nan)
    flat = u[None, :, None] * across + v[::-1][:, None, None] * upward
    before = np.full(depth.shape, np.inf)
    for height in w[::-1]:
        open_px = np.isnan(depth)
        if not open_px.any():
            break
        voxel = apply_affine(grid_from_scanner, flat[open_px] + height * towards)
        value = map_coordinates(skin.height_map_mm, voxel.T, order=1, mode="nearest", output=float)
        inside = ((voxel >= 0) & (voxel <= shape - 1)).all(axis=1)
        value = np.where(inside, value, np.inf)
        last = before[open_px]
        hit = value < 0
        crossed = hit & np.isfinite(last)
        fraction = np.zeros(len(value))
        fraction[crossed] = value[crossed] / (value[crossed] - last[crossed])
        found = np.where(hit, height + fraction * step_mm, np.nan)
        depth[open_px] = found
        before[open_px] = value
    slope_v, slope_u = np.gradient(np.nan_to_num(depth, nan=float(w[0])), step_mm)
    normal = np.stack([-slope_u, slope_v, np.ones_like(depth)], axis=-1)
    normal /= np.linalg.norm(normal, axis=-1, keepdims=True)
    light = np.array([-0.35, 0.45, 0.82])
    shade = np.where(np.isnan(depth), 0.0, 0.25 + 0.75 * np.clip(normal @ light, 0, 1))
    half = step_mm / 2
    return HeadView(
        shade=shade,
        depth_mm=depth,
        extent_mm=(u[0] - half, u[-1] + half, v[0] - half, v[-1] + half),
        across=across,
        upward=upward,
        towards=towards,
    )

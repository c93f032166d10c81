"""Shape functions on a grid: about the signed distance in mm, negative inside."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

Field = NDArray[np.float32]


class Grid:
    """Points of a grid in the head's own frame, as three float32 fields.

    Parameters
    ----------
    x, y, z : (A, B, C) ndarray of float32
        Right, front, up, mm.
    """

    def __init__(self, x: Field, y: Field, z: Field) -> None:
        self.x, self.y, self.z = x, y, z

    def ellipsoid(self, center: Sequence[float], radii: Sequence[float]) -> Field:
        """Ellipsoid with axes along the frame (first-order distance)."""
        u = (self.x - np.float32(center[0])) / np.float32(radii[0])
        v = (self.y - np.float32(center[1])) / np.float32(radii[1])
        w = (self.z - np.float32(center[2])) / np.float32(radii[2])
        size = np.sqrt(u * u + v * v + w * w)
        u /= np.float32(radii[0])
        v /= np.float32(radii[1])
        w /= np.float32(radii[2])
        slope = np.sqrt(u * u + v * v + w * w) + np.float32(1e-6)
        level: Field = size * (size - 1) / slope
        return level

    def pair(self, center: Sequence[float], radii: Sequence[float]) -> Field:
        """The same ellipsoid on both sides (``center`` is the right one)."""
        mirrored = Grid(np.abs(self.x), self.y, self.z)
        return mirrored.ellipsoid(center, radii)

    def rod(
        self,
        start: Sequence[float],
        end: Sequence[float],
        radius_start: float,
        radius_end: float | None = None,
        *,
        mirror: bool = False,
    ) -> Field:
        """Round rod between two points; the radius may change along it."""
        x = np.abs(self.x) if mirror else self.x
        a = np.asarray(start, np.float32)
        along = np.asarray(end, np.float32) - a
        px, py, pz = x - a[0], self.y - a[1], self.z - a[2]
        share = np.clip((px * along[0] + py * along[1] + pz * along[2]) / (along @ along), 0, 1)
        px -= share * along[0]
        py -= share * along[1]
        pz -= share * along[2]
        last = radius_start if radius_end is None else radius_end
        radius = np.float32(radius_start) + share * np.float32(last - radius_start)
        level: Field = np.sqrt(px * px + py * py + pz * pz) - radius
        return level

    def chain(
        self, points: Sequence[Sequence[float]], radii: Sequence[float], *, mirror: bool = False
    ) -> Field:
        """Rods through a row of points."""
        level = self.rod(points[0], points[1], radii[0], radii[1], mirror=mirror)
        for index in range(1, len(points) - 1):
            level = np.minimum(
                level,
                self.rod(
                    points[index],
                    points[index + 1],
                    radii[index],
                    radii[index + 1],
                    mirror=mirror,
                ),
            )
        return level


def join(first: Field, second: Field, blend_mm: float = 0.0) -> Field:
    """Union of two shapes, the crease rounded over ``blend_mm``."""
    if blend_mm <= 0:
        return np.minimum(first, second)
    share = np.clip(0.5 + 0.5 * (second - first) / np.float32(blend_mm), 0, 1)
    joined: Field = second + (first - second) * share - np.float32(blend_mm) * share * (1 - share)
    return joined


def overlap(first: Field, second: Field, blend_mm: float = 0.0) -> Field:
    """Common part of two shapes."""
    return -join(-first, -second, blend_mm)


def cut(first: Field, second: Field, blend_mm: float = 0.0) -> Field:
    """The first shape without the second."""
    return overlap(first, -second, blend_mm)


def as_distance(level: Field, step_mm: float, reach_mm: float = 60.0) -> Field:
    """Rescale a level by its slope so that it counts mm near its surface."""
    slope = np.zeros_like(level)
    for part in np.gradient(level, np.float32(step_mm)):
        slope += part * part
    np.sqrt(slope, out=slope)
    scaled: Field = np.clip(level / np.maximum(slope, 0.05), -reach_mm, reach_mm)
    return scaled.astype(np.float32)


def finer(field: Field) -> Field:
    """Linear interpolation to half the step: (n, ...) to (2 n - 1, ...) along each axis."""
    for axis in range(3):
        first = np.moveaxis(field, axis, 0)
        wide = np.empty((2 * first.shape[0] - 1, *first.shape[1:]), dtype=np.float32)
        wide[::2] = first
        wide[1::2] = 0.5 * (first[1:] + first[:-1])
        field = np.moveaxis(wide, 0, axis)
    return np.ascontiguousarray(field)


def band_noise(
    rng: np.random.Generator, shape: Sequence[int], step_mm: float, wave_mm: float, width: float
) -> Field:
    """Smooth random field of about one wavelength, mean 0, SD 1.

    Parameters
    ----------
    rng : numpy.random.Generator
        Source of randomness.
    shape : sequence of int
        Grid.
    step_mm : float
        Grid step, mm.
    wave_mm : float
        Middle wavelength, mm.
    width : float
        Relative width of the band.
    """
    white = rng.standard_normal(tuple(shape), dtype=np.float32)
    spectrum = np.fft.rfftn(white)
    waves = np.sqrt(
        np.fft.fftfreq(shape[0], step_mm)[:, None, None] ** 2
        + np.fft.fftfreq(shape[1], step_mm)[None, :, None] ** 2
        + np.fft.rfftfreq(shape[2], step_mm)[None, None, :] ** 2
    )
    middle = 1.0 / wave_mm
    spectrum *= np.exp(-0.5 * ((waves - middle) / (width * middle)) ** 2)
    field = np.fft.irfftn(spectrum, s=tuple(shape), axes=(0, 1, 2))
    scaled: Field = ((field - field.mean()) / field.std()).astype(np.float32)
    return scaled

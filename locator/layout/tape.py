"""The tape-measure rules of the 10-20, 10-10 and 10-05 systems, on any star-shaped head.

A person with a tape finds the places by halving arcs on the skin between four landmarks
(nasion, inion, two preauricular points). Here the arcs are the curves in which planes through
three points cut a smooth surface, and the same steps are taken along them.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from locator.layout.names import PLACES
from locator.results import Frozen

FloatArray = NDArray[np.float64]

# Samples of one arc and steps of the ray search: lengths then hold to 0.05 mm on a head.
_SAMPLES = 48
_STEPS = 10


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class StarSurface(Frozen):
    """A smooth closed surface that every ray from its centre meets once.

    Attributes
    ----------
    center_mm : (3,) ndarray
        The inner point, mm, in the space of the surface.
    radius_mm : (T, P) ndarray
        Distance to the surface by polar angle (0 to pi from the third axis, `T` rows) and azimuth
        (0 to 2 pi from the first axis, `P` columns, the last one before 2 pi), mm.
    axes : (3, 3) ndarray
        Rows: the surface's own axes (right, anterior, superior) in its space.
    """

    center_mm: FloatArray
    radius_mm: FloatArray
    axes: FloatArray

    def radius(self, directions: FloatArray) -> FloatArray:
        """Distance to the surface along unit `directions` (..., 3), mm."""
        local = directions @ self.axes.T
        n_polar, n_azimuth = self.radius_mm.shape
        polar = np.arccos(np.clip(local[..., 2], -1.0, 1.0)) * ((n_polar - 1) / np.pi)
        azimuth = np.arctan2(local[..., 1], local[..., 0]) % (2 * np.pi)
        azimuth = azimuth * (n_azimuth / (2 * np.pi))
        return _bilinear(self.radius_mm, polar, azimuth)

    def project(self, points: FloatArray) -> FloatArray:
        """Points (..., 3) moved along the ray from the centre onto the surface."""
        out = points - self.center_mm
        length = np.linalg.norm(out, axis=-1, keepdims=True)
        out = out / np.where(length > 1e-9, length, 1.0)
        moved: FloatArray = self.center_mm + out * self.radius(out)[..., None]
        return moved

    def normals(self, points: FloatArray, step_mm: float = 4.0) -> FloatArray:
        """Outward unit normals at surface points (N, 3), over a patch of `step_mm`."""
        out = points - self.center_mm
        out = out / np.linalg.norm(out, axis=1, keepdims=True)
        first = np.cross(out, np.array([0.0, 0.0, 1.0]) @ self.axes)
        weak = np.linalg.norm(first, axis=1) < 0.2
        first[weak] = np.cross(out[weak], np.array([1.0, 0.0, 0.0]) @ self.axes)
        first /= np.linalg.norm(first, axis=1, keepdims=True)
        second = np.cross(out, first)
        around = np.stack([first, -first, second, -second])
        ahead, behind, one, other = self.project(points + step_mm * around)
        normal = np.cross(ahead - behind, one - other)
        normal /= np.linalg.norm(normal, axis=1, keepdims=True)
        flipped: FloatArray = normal * np.sign((normal * out).sum(axis=1, keepdims=True))
        return flipped


def _bilinear(table: FloatArray, row: FloatArray, column: FloatArray) -> FloatArray:
    """Interpolated `table` at fractional (row, column); columns wrap round."""
    n_rows, n_columns = table.shape
    row = np.clip(row, 0.0, n_rows - 1.000001)
    first = row.astype(np.intp)
    down = row - first
    left = np.floor(column).astype(np.intp)
    right_part = column - left
    left %= n_columns
    right = (left + 1) % n_columns
    upper = table[first, left] * (1 - right_part) + table[first, right] * right_part
    lower = table[first + 1, left] * (1 - right_part) + table[first + 1, right] * right_part
    value: FloatArray = upper * (1 - down) + lower * down
    return value


def star_surface(
    radius_of: Callable[[FloatArray], FloatArray],
    center_mm: FloatArray,
    axes: FloatArray | None = None,
    *,
    n_polar: int = 121,
    n_azimuth: int = 180,
) -> StarSurface:
    """Tabulate a radius given as a function of unit directions (N, 3) in the surface's space."""
    frame = np.eye(3) if axes is None else np.asarray(axes, dtype=np.float64)
    polar = np.linspace(0, np.pi, n_polar)[:, None]
    azimuth = (np.arange(n_azimuth) * (2 * np.pi / n_azimuth))[None, :]
    local = np.stack(
        [
            np.sin(polar) * np.cos(azimuth),
            np.sin(polar) * np.sin(azimuth),
            np.cos(polar) * np.ones_like(azimuth),
        ],
        axis=-1,
    ).reshape(-1, 3)
    radius = np.asarray(radius_of(local @ frame)).reshape(n_polar, n_azimuth)
    return StarSurface(center_mm=np.asarray(center_mm, float), radius_mm=radius, axes=frame)


def arc(
    surface: StarSurface, start: FloatArray, middle: FloatArray, end: FloatArray
) -> tuple[FloatArray, FloatArray, float]:
    """The curve from `start` through `middle` to `end` in which their plane cuts the surface.

    Returns
    -------
    points : (N, 3) ndarray
        Along the curve.
    along_mm : (N,) ndarray
        Length from the start, mm.
    middle_mm : float
        Length at `middle`, mm.
    """
    normal = np.cross(middle - start, end - middle)
    size = np.linalg.norm(normal)
    if size < 1e-9:
        normal = np.cross(middle - start, surface.center_mm - start)
        size = np.linalg.norm(normal)
    normal = normal / size
    origin = surface.center_mm + normal * ((start - surface.center_mm) @ normal)
    first = start - origin
    first /= np.linalg.norm(first)
    second = np.cross(normal, first)

    def angle(point: FloatArray) -> float:
        away = point - origin
        return float(np.arctan2(away @ second, away @ first) % (2 * np.pi))

    at_middle, at_end = angle(middle), angle(end)
    if at_end < at_middle:  # go the other way round, so that the middle lies between
        second = -second
        at_middle, at_end = angle(middle), angle(end)
    n_first = max(round(_SAMPLES * at_middle / max(at_end, 1e-9)), 2)
    n_first = min(n_first, _SAMPLES - 2)
    turn = np.concatenate(
        [
            np.linspace(0, at_middle, n_first, endpoint=False),
            np.linspace(at_middle, at_end, _SAMPLES - n_first),
        ]
    )
    rays = np.cos(turn)[:, None] * first + np.sin(turn)[:, None] * second
    shift = origin - surface.center_mm
    reach = np.full(len(turn), float(np.linalg.norm(middle - origin)))
    for _ in range(_STEPS):
        place = shift + reach[:, None] * rays
        length = np.linalg.norm(place, axis=1)
        out = place / length[:, None]
        gain = np.clip((rays * out).sum(axis=1), 0.35, 1.0)
        reach = np.maximum(reach + (surface.radius(out) - length) / gain, 1.0)
    points = origin + reach[:, None] * rays
    steps = np.linalg.norm(np.diff(points, axis=0), axis=1)
    along = np.concatenate([[0.0], np.cumsum(steps)])
    return points, along, float(along[n_first])


def _at(points: FloatArray, along: FloatArray, wanted: FloatArray | float) -> FloatArray:
    """Points at the lengths `wanted` along a curve."""
    lengths = np.atleast_1d(wanted)
    found = np.stack([np.interp(lengths, along, points[:, axis]) for axis in range(3)], axis=1)
    return found


def find_vertex(
    surface: StarSurface, landmarks: FloatArray, *, rounds: int = 4
) -> tuple[FloatArray, float, float]:
    """Cz: half of the way from nasion to inion and from ear to ear at once.

    Parameters
    ----------
    surface : StarSurface
    landmarks : (4, 3) ndarray
        NAS, LPA, RPA, inion, mm.
    rounds : int
        Turns of the alternation; four leave less than 0.1 mm.

    Returns
    -------
    vertex : (3,) ndarray
    sagittal_mm, coronal_mm : float
        Lengths of the two arcs.
    """
    nasion, left, right, inion = landmarks
    up = 0.5 * (np.cross(right - left, nasion - inion))
    up /= np.linalg.norm(up)
    vertex = surface.project(surface.center_mm + 100.0 * up)
    sagittal = coronal = 0.0
    for _ in range(rounds):
        points, along, _ = arc(surface, nasion, vertex, inion)
        sagittal = float(along[-1])
        by_sagittal = _at(points, along, 0.5 * sagittal)[0]
        points, along, _ = arc(surface, left, by_sagittal, right)
        coronal = float(along[-1])
        by_coronal = _at(points, along, 0.5 * coronal)[0]
        vertex = surface.project(0.5 * (by_sagittal + by_coronal))
    return vertex, sagittal, coronal


def tape_places(surface: StarSurface, landmarks: FloatArray, names: Sequence[str]) -> FloatArray:
    """Places of 10-05 names by the tape-measure rules.

    Parameters
    ----------
    surface : StarSurface
        The head.
    landmarks : (4, 3) array
        NAS, LPA, RPA, inion, in the space of the surface, mm; brought onto the surface first.
    names : sequence of str
        Canonical names (`normalise_name`).

    Returns
    -------
    (E, 3) ndarray
        Places on the surface, mm.

    Notes
    -----
    Rows lie at every 5 % of the arc from nasion to inion, the ring through Fpz, T7, Oz and T8 at
    10 % of the arcs (each quarter in five steps), rows between ring and midline in quarters and
    eighths. The lower ring runs through nasion, preauricular points and inion. Ear lobes (A) and
    mastoids (M) are not part of the rules: they are placed 25 mm below, and 25 mm behind and
    20 mm below the preauricular point (common practice, no source).

    References
    ----------
    .. [1] Jasper HH (1958). The ten-twenty electrode system of the International Federation.
       Electroencephalogr Clin Neurophysiol 10:371-375.
    .. [2] Acharya JN et al. (2016). American Clinical Neurophysiology Society guideline 2.
       J Clin Neurophysiol 33:308-311.
    .. [3] Oostenveld R, Praamstra P (2001). The five percent electrode system for
       high-resolution EEG and ERP measurements. Clin Neurophysiol 112:713-719.
    """
    marks = surface.project(np.asarray(landmarks, dtype=np.float64))
    nasion, left_ear, right_ear, inion = marks
    vertex, _, _ = find_vertex(surface, marks)
    sagittal, sagittal_mm, vertex_mm = arc(surface, nasion, vertex, inion)
    # Front and back halves are measured apart, so that Cz is exactly the 50 % place.
    front, back = vertex_mm, float(sagittal_mm[-1]) - vertex_mm

    def midline(row: float) -> FloatArray:
        length = front * row / 50 if row <= 50 else front + back * (row - 50) / 50
        return _at(sagittal, sagittal_mm, length)[0]

    coronal, coronal_mm, top_mm = arc(surface, left_ear, vertex, right_ear)
    ring_side = {
        -1: _at(coronal, coronal_mm, 0.2 * top_mm)[0],
        1: _at(coronal, coronal_mm, coronal_mm[-1] - 0.2 * (coronal_mm[-1] - top_mm))[0],
    }
    ear = {-1: left_ear, 1: right_ear}
    rings: dict[tuple[int, int], Callable[[float], FloatArray]] = {}

    def ring(side: int, low: int) -> Callable[[float], FloatArray]:
        """Place at a fraction (0 front to 1 back) of the ring (low 0) or lower ring (low 1)."""
        if (side, low) not in rings:
            ends = (nasion, inion) if low else (midline(10), midline(90))
            through = ear[side] if low else ring_side[side]
            points, along, middle = arc(surface, ends[0], through, ends[1])

            def place(fraction: float) -> FloatArray:
                length = (
                    2 * fraction * middle
                    if fraction <= 0.5
                    else middle + (2 * fraction - 1) * (along[-1] - middle)
                )
                return _at(points, along, length)[0]

            rings[side, low] = place
        return rings[side, low]

    rows: dict[int, tuple[FloatArray, FloatArray, float]] = {}

    def place_of(name: str) -> FloatArray:
        row, column, side = PLACES[name]
        if row < 0:
            forward = (nasion - inion) / np.linalg.norm(nasion - inion)
            across = (right_ear - left_ear) / np.linalg.norm(right_ear - left_ear)
            up = np.cross(across, forward)
            down, behind = (25.0, 0.0) if row == -1 else (20.0, 25.0)
            return surface.project(ear[side] - down * up - behind * forward)
        if column == 0:
            return midline(row)
        if row in (10, 90):
            step = column * 0.05
            return ring(side, 0)(step if row == 10 else 1 - step)
        if row in (0, 100):
            step = column * 0.05
            return ring(side, 1)(step if row == 0 else 1 - step)
        if row in (5, 95):
            step = column * 0.05
            at = step if row == 5 else 1 - step
            return surface.project(0.5 * (ring(side, 0)(at) + ring(side, 1)(at)))
        fraction = row / 100
        if column >= 8:
            upper, lower = ring(side, 0)(fraction), ring(side, 1)(fraction)
            return surface.project(upper + (column - 8) / 4 * (lower - upper))
        if row not in rows:
            ends = ring(-1, 0)(fraction), ring(1, 0)(fraction)
            rows[row] = arc(surface, ends[0], midline(row), ends[1])
        points, along, middle = rows[row]
        half = middle if side < 0 else float(along[-1]) - middle
        return _at(points, along, middle + side * half * column / 8)[0]

    return np.array([place_of(name) for name in names]).reshape(len(names), 3)


def smooth_table(table: FloatArray, sigma_deg: float) -> FloatArray:
    """A radius table smoothed by about `sigma_deg` over the sphere, true to the poles.

    The table is resampled into bands of directions, averaged with a Gaussian in angle.
    """
    n_polar, n_azimuth = table.shape
    polar = np.linspace(0, np.pi, n_polar)
    step = np.degrees(np.pi / (n_polar - 1))
    # Smooth along the meridians through the poles: row beyond the pole continues on the far side.
    half = n_azimuth // 2
    pad = int(np.ceil(3 * sigma_deg / step))
    top = np.roll(table[1 : pad + 1][::-1], half, axis=1)
    bottom = np.roll(table[-pad - 1 : -1][::-1], half, axis=1)
    tall = np.concatenate([top, table, bottom])
    offset = np.arange(-pad, pad + 1)
    kernel = np.exp(-0.5 * (offset * step / sigma_deg) ** 2)
    kernel /= kernel.sum()
    smooth = np.stack([np.convolve(tall[:, j], kernel, mode="valid") for j in range(n_azimuth)], 1)
    # Along the parallels the same angle spans ever more columns; in Fourier space it is exact.
    order = np.fft.rfftfreq(n_azimuth, 1 / n_azimuth)[None, :]
    width = np.radians(sigma_deg) / np.maximum(np.sin(polar), 1e-3)[:, None]
    spectrum = np.fft.rfft(smooth, axis=1) * np.exp(-0.5 * (order * width) ** 2)
    out: FloatArray = np.fft.irfft(spectrum, n=n_azimuth, axis=1)
    return out

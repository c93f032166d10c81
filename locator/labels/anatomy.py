"""The head as the cap sees it: a smooth star-shaped surface, and the landmarks on it.

Nasion and the plane of symmetry are read off the skin; ears and inion are placed by the
proportions of heads, with the deviations that people show. Nothing here needs the face to be
whole: what cannot be seen is replaced by its proportion and a wider deviation.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import grey_opening, map_coordinates
from scipy.optimize import least_squares
from scipy.spatial import ConvexHull
from scipy.spatial.transform import Rotation

from locator.geometry import apply_affine
from locator.layout.tape import StarSurface, smooth_table, star_surface
from locator.results import Frozen
from locator.skin import Skin

FloatArray = NDArray[np.float64]

# Proportions of the head in its own frame (origin between the preauricular points, y to the
# front, z up), as shares of an average head; millimetres of that head and deviations between
# people. Vertex, back and breadth: ANSUR II 2012 (Gordon et al. 2014, NATICK/TR-15/007), means
# of men and women; the place of the nasion against the ears: value from memory.
_VERTEX_MM, _VERTEX_SD = 128.8, 6.0
_BACK_MM, _BACK_SD = 97.3, 6.0
_HALF_BREADTH_MM, _HALF_BREADTH_SD = 75.5, 3.0
_NASION_MM, _NASION_SD = (95.0, 11.0), (5.0, 7.0)
_INION_MM = (-97.0, 10.0)
_SCALE_SD = 0.06
# Heads lie in the coil with the nose up or down by this much (common practice, no source).
_PITCH_SD_DEG = 10.0


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Anatomy(Frozen):
    """The head's frame, its smooth surface and its landmarks, scanner mm.

    Attributes
    ----------
    surface : StarSurface
        Skin without ears, nose and details, in scanner space.
    landmarks_mm : (4, 3) ndarray
        NAS, LPA, RPA, inion.
    landmarks_sd_mm : (4, 3) ndarray
        Deviations along right, anterior and superior of the head's frame.
    axes : (3, 3) ndarray
        Rows: right, anterior, superior of the head in scanner space.
    nasion_seen : bool
        True when the notch over the nose was found.
    asymmetry_mm : float
        Root mean square distance of the mirrored skin from the skin.
    """

    surface: StarSurface
    landmarks_mm: FloatArray
    landmarks_sd_mm: FloatArray
    axes: FloatArray
    nasion_seen: bool
    asymmetry_mm: float


def _height(skin: Skin, points: FloatArray) -> FloatArray:
    """Signed distance to the skin; far outside beyond the grid."""
    grid = apply_affine(np.linalg.inv(skin.scanner_from_grid), points)
    value: FloatArray = map_coordinates(
        skin.height_map_mm,
        grid.reshape(-1, 3).T,
        order=1,
        mode="constant",
        cval=50.0,
        output=np.float64,
    )
    return value.reshape(points.shape[:-1])


def symmetry_plane(skin: Skin) -> tuple[FloatArray, float, float]:
    """Plane that mirrors the upper head best onto itself.

    Returns
    -------
    right : (3,) ndarray
        Unit normal, towards the right of the scanner.
    offset_mm : float
        The plane is ``right @ point == offset_mm``.
    asymmetry_mm : float
        Root mean square distance of the mirrored skin from the skin.
    """
    vertices = skin.vertices_scanner_mm
    upper = vertices[vertices[:, 2] > vertices[:, 2].max() - 115.0]
    points = upper[:: max(1, len(upper) // 1500)]

    def normal_of(parameters: FloatArray) -> FloatArray:
        return Rotation.from_euler("yz", parameters[:2], degrees=True).apply([1.0, 0.0, 0.0])

    middle = 0.5 * (points[:, 0].min() + points[:, 0].max())

    def gaps(parameters: FloatArray) -> FloatArray:
        normal = normal_of(parameters)
        away = points @ normal - parameters[2]
        return np.clip(_height(skin, points - 2 * away[:, None] * normal), -15.0, 15.0)

    best = None
    for yaw in (-12.0, 0.0, 12.0):
        start = np.array([0.0, yaw, middle])
        found = least_squares(gaps, start, loss="soft_l1", f_scale=2.0, diff_step=1e-2, x_scale=2.0)
        if best is None or found.cost < best.cost:
            best = found
    assert best is not None
    normal = normal_of(best.x)
    rms = float(np.sqrt(np.mean(gaps(best.x) ** 2)))
    return normal, float(best.x[2]), rms


def _profile(
    skin: Skin, right: FloatArray, front: FloatArray, up: FloatArray, offset: float
) -> tuple[FloatArray, FloatArray]:
    """Outline of the head in its plane of symmetry, (N, 2) along front and up, and its centre."""
    vertices = skin.vertices_scanner_mm
    top = (vertices @ up).max()
    upper = vertices[vertices @ up > top - 100.0]
    along = upper @ front
    center = np.array([0.5 * (along.min() + along.max()), top - 90.0])
    angle = np.radians(np.arange(-80.0, 261.0, 1.0))
    reach = np.arange(30.0, 200.0, 0.5)
    rays = np.stack([np.cos(angle), np.sin(angle)], axis=1)
    flat = center + reach[None, :, None] * rays[:, None]
    points = offset * right + flat[..., :1] * front + flat[..., 1:] * up
    inside = _height(skin, points) < 0
    last = inside.shape[1] - 1 - inside[:, ::-1].argmax(axis=1)
    outline = center + reach[last, None] * rays
    return outline[inside.any(axis=1)], center


def _notch(outline: FloatArray, top: float) -> FloatArray | None:
    """The nasion: deepest point of the first gap between the outline and its hull, from above."""
    front = outline[outline[:, 0] > np.median(outline[:, 0])]
    front = front[np.argsort(-front[:, 1])]
    low = front[:, 1] < top - 60.0
    first = int(np.argmax(low)) if low.any() else len(front)
    if len(front) - first < 20:
        return None
    hull = ConvexHull(outline)
    gap = -(hull.equations[:, :2] @ front.T + hull.equations[:, 2:]).max(axis=0)
    for index in range(first, len(front) - 1):
        window = slice(max(index - 8, 0), index + 9)
        deep = gap[index] >= 1.2 and gap[index] == gap[window].max()
        if deep and top - 165.0 < front[index, 1] < top - 70.0:
            found: FloatArray = front[index]
            return found
    return None


def head_frame(skin: Skin) -> tuple[FloatArray, FloatArray, float, FloatArray | None, FloatArray]:
    """Frame of the head from symmetry, outline and proportions.

    Returns
    -------
    origin : (3,) ndarray
        Between the preauricular points, scanner mm.
    axes : (3, 3) ndarray
        Rows: right, anterior, superior.
    scale : float
        Size against the average head.
    nasion : (3,) ndarray or None
        The notch over the nose, where it was found.
    sd : (4,) ndarray
        Deviations of the origin along front and up (mm), of pitch (rad) and scale.
    """
    right, offset, _ = symmetry_plane(skin)
    front = np.array([0.0, 1.0, 0.0]) - right[1] * right
    front /= np.linalg.norm(front)
    up = np.cross(right, front)
    outline, _ = _profile(skin, right, front, up, offset)
    top = float(outline[:, 1].max())
    notch = _notch(outline, top)
    vertices = skin.vertices_scanner_mm
    side = np.abs(vertices @ right - offset)
    level = vertices @ up
    band = (level > top - 110.0) & (level < top - 40.0)
    half_breadth = float(np.quantile(side[band], 0.995)) if band.any() else _HALF_BREADTH_MM

    def residuals(parameters: FloatArray) -> FloatArray:
        origin, pitch, scale = parameters[:2], parameters[2], parameters[3]
        ahead = np.array([np.cos(pitch), np.sin(pitch)])
        above = np.array([-np.sin(pitch), np.cos(pitch)])
        shape = outline - origin
        high, deep = shape @ above, shape @ ahead
        back = -deep[high > -5.0].min() if (high > -5.0).any() else -deep.min()
        terms = [
            (high.max() - _VERTEX_MM * scale) / _VERTEX_SD,
            (back - _BACK_MM * scale) / _BACK_SD,
            (half_breadth - _HALF_BREADTH_MM * scale) / _HALF_BREADTH_SD,
            pitch / np.radians(_PITCH_SD_DEG),
            (scale - 1.0) / _SCALE_SD,
        ]
        if notch is not None:
            at = notch - origin
            terms.append((at @ ahead - _NASION_MM[0] * scale) / _NASION_SD[0])
            terms.append((at @ above - _NASION_MM[1] * scale) / _NASION_SD[1])
        else:
            # No nose: the forehead alone, less sure.
            ahead_most = deep[high > 20.0].max() if (high > 20.0).any() else deep.max()
            terms.append((ahead_most - 99.0 * scale) / 8.0)
        return np.array(terms)

    start = np.array([0.5 * (outline[:, 0].min() + outline[:, 0].max()), top - 128.0, 0.0, 1.0])
    found = least_squares(residuals, start, x_scale=[5.0, 5.0, 0.1, 0.05], diff_step=1e-3)
    covariance = np.linalg.inv(found.jac.T @ found.jac + 1e-9 * np.eye(4))
    pitch = found.x[2]
    ahead = np.cos(pitch) * front + np.sin(pitch) * up
    above = -np.sin(pitch) * front + np.cos(pitch) * up
    origin = offset * right + found.x[0] * front + found.x[1] * up
    nasion = None
    if notch is not None:
        nasion = offset * right + notch[0] * front + notch[1] * up
    return (
        origin,
        np.stack([right, ahead, above]),
        float(found.x[3]),
        nasion,
        np.sqrt(np.diag(covariance)),
    )


def smooth_surface(skin: Skin, center: FloatArray, axes: FloatArray) -> StarSurface:
    """The skin as seen from `center`, without what is narrower than ears and nose."""
    reach = np.arange(40.0, 170.0, 1.5)

    def radius_of(directions: FloatArray) -> FloatArray:
        inside = np.zeros((len(directions), len(reach)), dtype=bool)
        heights = np.zeros((len(directions), len(reach)))
        for column, length in enumerate(reach):
            heights[:, column] = _height(skin, center + length * directions)
        inside = heights < 0
        last = inside.shape[1] - 1 - inside[:, ::-1].argmax(axis=1)
        last = np.where(inside.any(axis=1), last, 0)
        after = np.minimum(last + 1, len(reach) - 1)
        row = np.arange(len(directions))
        low, high = heights[row, last], heights[row, after]
        part = np.where(high > low, -low / np.where(high > low, high - low, 1.0), 0.0)
        found: FloatArray = reach[last] + np.clip(part, 0.0, 1.0) * (reach[after] - reach[last])
        return found

    raw = star_surface(radius_of, center, axes, n_polar=91, n_azimuth=120)
    table = raw.radius_mm
    # What is left of ears and nose is narrower than 24 mm: 15 degrees round the equator.
    rows, columns = 13, 5
    wrapped = np.concatenate([table[:, -columns:], table, table[:, :columns]], axis=1)
    opened = grey_opening(wrapped, size=(rows, columns), mode="nearest")[:, columns:-columns]
    polar = np.linspace(0, 180.0, len(table))
    # Only below the brow: above it the skin is taken as it is.
    blend = np.clip((polar - 75.0) / 20.0, 0.0, 1.0)[:, None]
    table = (1 - blend) * table + blend * opened
    return StarSurface(center_mm=raw.center_mm, radius_mm=smooth_table(table, 4.0), axes=raw.axes)


def find_anatomy(skin: Skin, landmarks_scanner_mm: FloatArray | None = None) -> Anatomy:
    """Frame, smooth surface and landmarks of a head.

    Parameters
    ----------
    skin : Skin
    landmarks_scanner_mm : (3, 3) ndarray, optional
        NAS, LPA, RPA that a person has marked; default: estimated.
    """
    right, _, asymmetry = symmetry_plane(skin)
    if landmarks_scanner_mm is not None:
        given = np.asarray(landmarks_scanner_mm, dtype=np.float64)
        origin = 0.5 * (given[1] + given[2])
        right = given[2] - given[1]
        right = right / np.linalg.norm(right)
        ahead = given[0] - origin
        ahead -= (ahead @ right) * right
        ahead /= np.linalg.norm(ahead)
        above = np.cross(right, ahead)
        # Nasion and ears lie nearly level; the nasion is a little higher (as on the average head).
        tilt = -np.arctan2(_NASION_MM[1], _NASION_MM[0])
        axes = np.stack(
            [
                right,
                np.cos(tilt) * ahead + np.sin(tilt) * above,
                -np.sin(tilt) * ahead + np.cos(tilt) * above,
            ]
        )
        scale = float(np.linalg.norm(given[0] - origin) / np.hypot(*_NASION_MM))
        surface = smooth_surface(skin, origin + 30.0 * axes[2], axes)
        inion = origin + scale * (_INION_MM[0] * axes[1] + _INION_MM[1] * axes[2])
        marks = np.vstack([given, surface.project(inion[None])])
        sd = np.array([[2.0, 2.0, 2.0], [2.0, 2.5, 2.5], [2.0, 2.5, 2.5], [3.0, 3.0, 10.0]])
        return Anatomy(
            surface=surface,
            landmarks_mm=marks,
            landmarks_sd_mm=sd,
            axes=axes,
            nasion_seen=True,
            asymmetry_mm=asymmetry,
        )
    origin, axes, scale, nasion, frame_sd = head_frame(skin)
    surface = smooth_surface(skin, origin + 30.0 * scale * axes[2], axes)
    half = _HALF_BREADTH_MM * scale
    left = surface.project((origin - half * axes[0])[None])[0]
    right_ear = surface.project((origin + half * axes[0])[None])[0]
    inion = origin + scale * (_INION_MM[0] * axes[1] + _INION_MM[1] * axes[2])
    inion = surface.project(inion[None])[0]
    seen = nasion is not None
    if nasion is None:
        nasion = origin + scale * (_NASION_MM[0] * axes[1] + _NASION_MM[1] * axes[2])
    front_back, up_down = np.hypot(frame_sd[0], 4.0), np.hypot(frame_sd[1], 4.0)
    high = float(np.hypot(2.5, 1.0)) if seen else float(np.hypot(up_down, 5.0))
    inion_up = float(np.hypot(up_down + 97.0 * frame_sd[2] * 0.5, 8.0))
    sd = np.array(
        [
            [2.0, 2.0, high],
            [2.0, front_back, up_down],
            [2.0, front_back, up_down],
            [3.0, 3.0, inion_up],
        ]
    )
    return Anatomy(
        surface=surface,
        landmarks_mm=np.stack([surface.project(nasion[None])[0], left, right_ear, inion]),
        landmarks_sd_mm=sd,
        axes=axes,
        nasion_seen=seen,
        asymmetry_mm=asymmetry,
    )

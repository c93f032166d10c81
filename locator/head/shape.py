"""Closed surfaces as radial functions on one icosphere: nested and apart by construction."""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int32]


def ring_neighbours(faces: IntArray, n_vertices: int) -> IntArray:
    """Neighbours of each vertex in order around it, (V, 6); valence 5 repeats the first one.

    Examples
    --------
    >>> from locator.geometry import icosphere
    >>> ring_neighbours(icosphere(0)[1], 12).shape
    (12, 6)
    """
    following: list[dict[int, int]] = [{} for _ in range(n_vertices)]
    for a, b, c in faces.tolist():
        following[a][b] = c
        following[b][c] = a
        following[c][a] = b
    ring = np.empty((n_vertices, 6), dtype=np.int32)
    for vertex, after in enumerate(following):
        start = min(after)
        order = [start]
        while len(order) < len(after):
            order.append(after[order[-1]])
        ring[vertex] = (order + order[:1])[:6]
    return ring


def smooth_on_sphere(values: FloatArray, ring: IntArray, n_steps: int) -> FloatArray:
    """Average each value with the mean of its neighbours, `n_steps` times."""
    result = np.asarray(values, dtype=np.float64)
    for _ in range(n_steps):
        result = 0.5 * result + 0.5 * result[ring].mean(axis=1)
    return result


@njit(cache=True)
def _fill(vertices, faces, shape_0, shape_1, shape_2):  # type: ignore[no-untyped-def]
    change = np.zeros((shape_0, shape_1, shape_2 + 1), dtype=np.int8)
    for f in range(faces.shape[0]):
        ax, ay, az = vertices[faces[f, 0]]
        bx, by, bz = vertices[faces[f, 1]]
        cx, cy, cz = vertices[faces[f, 2]]
        area = (bx - ax) * (cy - ay) - (cx - ax) * (by - ay)
        if area == 0.0:
            continue
        low_x = max(0, int(np.ceil(min(ax, bx, cx))))
        high_x = min(shape_0 - 1, int(np.floor(max(ax, bx, cx))))
        low_y = max(0, int(np.ceil(min(ay, by, cy))))
        high_y = min(shape_1 - 1, int(np.floor(max(ay, by, cy))))
        for x in range(low_x, high_x + 1):
            for y in range(low_y, high_y + 1):
                u = ((x - ax) * (cy - ay) - (cx - ax) * (y - ay)) / area
                v = ((bx - ax) * (y - ay) - (x - ax) * (by - ay)) / area
                if u < 0.0 or v < 0.0 or u + v > 1.0:
                    continue
                z = az + u * (bz - az) + v * (cz - az)
                k = min(max(int(np.ceil(z)), 0), shape_2)
                change[x, y, k] += np.int8(-1) if area > 0.0 else np.int8(1)
    mask = np.zeros((shape_0, shape_1, shape_2), dtype=np.bool_)
    for x in range(shape_0):
        for y in range(shape_1):
            count = 0
            for z in range(shape_2):
                count += change[x, y, z]
                mask[x, y, z] = count > 0
    return mask


def fill_mesh(vertices: FloatArray, faces: IntArray, shape: tuple[int, ...]) -> NDArray[np.bool_]:
    """Voxels whose centres lie inside a closed outward mesh; vertices in voxel indices.

    Examples
    --------
    >>> from locator.geometry import icosphere
    >>> points, triangles = icosphere(4)
    >>> mask = fill_mesh(points * 10 + 12, triangles, (25, 25, 25))
    >>> bool(abs(mask.sum() / (4 / 3 * np.pi * 1000) - 1) < 0.02)
    True
    """
    # The tiny offset keeps grid columns off shared edges, where two faces would both count.
    moved = np.asarray(vertices, dtype=np.float64) + np.array([1.37e-7, 2.11e-7, 0.0])
    filled: NDArray[np.bool_] = _fill(moved, faces, *shape)
    return filled


@njit(cache=True)
def _point_triangle(p, a, b, c):  # type: ignore[no-untyped-def]
    """Squared distance of a point to a triangle (regions as in Ericson 2005, section 5.1.5)."""
    ab, ac, ap = b - a, c - a, p - a
    d1, d2 = np.dot(ab, ap), np.dot(ac, ap)
    if d1 <= 0.0 and d2 <= 0.0:
        return np.dot(ap, ap)
    bp = p - b
    d3, d4 = np.dot(ab, bp), np.dot(ac, bp)
    if d3 >= 0.0 and d4 <= d3:
        return np.dot(bp, bp)
    vc = d1 * d4 - d3 * d2
    if vc <= 0.0 and d1 >= 0.0 and d3 <= 0.0 and d1 > d3:
        q = ap - (d1 / (d1 - d3)) * ab
        return np.dot(q, q)
    cp = p - c
    d5, d6 = np.dot(ab, cp), np.dot(ac, cp)
    if d6 >= 0.0 and d5 <= d6:
        return np.dot(cp, cp)
    vb = d5 * d2 - d1 * d6
    if vb <= 0.0 and d2 >= 0.0 and d6 <= 0.0 and d2 > d6:
        q = ap - (d2 / (d2 - d6)) * ac
        return np.dot(q, q)
    va = d3 * d6 - d5 * d4
    if va <= 0.0 and d4 - d3 >= 0.0 and d5 - d6 >= 0.0 and (d4 - d3) + (d5 - d6) > 0.0:
        q = bp - ((d4 - d3) / ((d4 - d3) + (d5 - d6))) * (c - b)
        return np.dot(q, q)
    total = va + vb + vc
    if total <= 0.0:  # a face without area: its corners and edges were looked at
        return min(np.dot(ap, ap), np.dot(bp, bp), np.dot(cp, cp))
    scale = 1.0 / total
    q = ap - (vb * scale) * ab - (vc * scale) * ac
    return np.dot(q, q)


@njit(cache=True)
def _nearest_squared(points, vertices, faces, limit):  # type: ignore[no-untyped-def]
    """Least squared distance of each point to the faces, `limit`^2 at most, by a bin grid."""
    n_points = points.shape[0]
    low = np.empty(3)
    high = np.empty(3)
    for d in range(3):
        low[d] = min(vertices[:, d].min(), points[:, d].min()) - limit
        high[d] = max(vertices[:, d].max(), points[:, d].max()) + limit
    cell = max(limit, 4.0)
    n = np.empty(3, dtype=np.int64)
    for d in range(3):
        n[d] = int((high[d] - low[d]) / cell) + 1
    head = np.full(n[0] * n[1] * n[2], -1, dtype=np.int64)
    following = np.empty(n_points, dtype=np.int64)
    for p in range(n_points):
        i = int((points[p, 0] - low[0]) / cell)
        j = int((points[p, 1] - low[1]) / cell)
        k = int((points[p, 2] - low[2]) / cell)
        b = (i * n[1] + j) * n[2] + k
        following[p] = head[b]
        head[b] = p
    best = np.full(n_points, limit * limit)
    face_of = np.full(n_points, -1, dtype=np.int64)
    first = np.empty(3, dtype=np.int64)
    last = np.empty(3, dtype=np.int64)
    for f in range(faces.shape[0]):
        a, b_, c = vertices[faces[f, 0]], vertices[faces[f, 1]], vertices[faces[f, 2]]
        for d in range(3):
            first[d] = int((min(a[d], b_[d], c[d]) - limit - low[d]) / cell)
            last[d] = int((max(a[d], b_[d], c[d]) + limit - low[d]) / cell)
            first[d] = max(first[d], 0)
            last[d] = min(last[d], n[d] - 1)
        for i in range(first[0], last[0] + 1):
            for j in range(first[1], last[1] + 1):
                for k in range(first[2], last[2] + 1):
                    p = head[(i * n[1] + j) * n[2] + k]
                    while p >= 0:
                        square = _point_triangle(points[p], a, b_, c)
                        if square < best[p]:
                            best[p] = square
                            face_of[p] = f
                        p = following[p]
    return best, face_of


def distance_to_mesh(
    points: FloatArray, vertices: FloatArray, faces: IntArray, limit_mm: float
) -> FloatArray:
    """Unsigned distance of points to a triangle mesh, exact up to `limit_mm`, there cut off, (N,).

    Examples
    --------
    >>> triangle = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0]])
    >>> point = np.array([[0.2, 0.2, 3.0]])
    >>> distance_to_mesh(point, triangle, np.array([[0, 1, 2]], dtype=np.int32), 5.0).tolist()
    [3.0]
    """
    square, _ = _nearest_squared(
        np.ascontiguousarray(points, dtype=np.float64),
        np.ascontiguousarray(vertices, dtype=np.float64),
        np.ascontiguousarray(faces),
        float(limit_mm),
    )
    distance: FloatArray = np.sqrt(square)
    return distance


@njit(cache=True)
def _winding(points, vertices, faces):  # type: ignore[no-untyped-def]
    result = np.empty(len(points))
    for p in range(len(points)):
        total = 0.0
        for f in range(len(faces)):
            ax = vertices[faces[f, 0], 0] - points[p, 0]
            ay = vertices[faces[f, 0], 1] - points[p, 1]
            az = vertices[faces[f, 0], 2] - points[p, 2]
            bx = vertices[faces[f, 1], 0] - points[p, 0]
            by = vertices[faces[f, 1], 1] - points[p, 1]
            bz = vertices[faces[f, 1], 2] - points[p, 2]
            cx = vertices[faces[f, 2], 0] - points[p, 0]
            cy = vertices[faces[f, 2], 1] - points[p, 1]
            cz = vertices[faces[f, 2], 2] - points[p, 2]
            la = np.sqrt(ax * ax + ay * ay + az * az)
            lb = np.sqrt(bx * bx + by * by + bz * bz)
            lc = np.sqrt(cx * cx + cy * cy + cz * cz)
            triple = ax * (by * cz - bz * cy) + ay * (bz * cx - bx * cz) + az * (bx * cy - by * cx)
            below = (
                la * lb * lc
                + (ax * bx + ay * by + az * bz) * lc
                + (bx * cx + by * cy + bz * cz) * la
                + (cx * ax + cy * ay + cz * az) * lb
            )
            total += np.arctan2(triple, below)
        result[p] = total / (2 * np.pi)
    return result


def winding(points: ArrayLike, vertices: ArrayLike, faces: ArrayLike) -> NDArray[np.bool_]:
    """Tell which points lie inside a closed outward mesh, by the solid angle of its faces, (N,).

    References
    ----------
    .. [1] van Oosterom A, Strackee J (1983). The solid angle of a plane triangle. IEEE Trans
       Biomed Eng 30:125-126.

    Examples
    --------
    >>> from locator.geometry import icosphere
    >>> winding([[0.0, 0, 0.5], [0, 0, 1.5]], *icosphere(2)).tolist()
    [True, False]
    """
    turns = _winding(
        np.ascontiguousarray(points, dtype=np.float64),
        np.ascontiguousarray(vertices, dtype=np.float64),
        np.ascontiguousarray(faces, dtype=np.int32),
    )
    inside: NDArray[np.bool_] = turns > 0.5
    return inside


@njit(cache=True)
def _crossings(own, edges, other, faces, low, high, same):  # type: ignore[no-untyped-def]
    count = 0
    place = np.full(3, np.nan)
    for e in range(len(edges)):
        i, j = edges[e, 0], edges[e, 1]
        p, q = own[i], own[j]
        least = np.minimum(p, q)
        most = np.maximum(p, q)
        d0, d1, d2 = q[0] - p[0], q[1] - p[1], q[2] - p[2]
        for f in range(len(faces)):
            if (
                low[f, 0] > most[0]
                or high[f, 0] < least[0]
                or low[f, 1] > most[1]
                or high[f, 1] < least[1]
                or low[f, 2] > most[2]
                or high[f, 2] < least[2]
            ):
                continue
            a, b, c = faces[f, 0], faces[f, 1], faces[f, 2]
            if same and (i == a or i == b or i == c or j == a or j == b or j == c):
                continue
            u0 = other[b, 0] - other[a, 0]
            u1 = other[b, 1] - other[a, 1]
            u2 = other[b, 2] - other[a, 2]
            v0 = other[c, 0] - other[a, 0]
            v1 = other[c, 1] - other[a, 1]
            v2 = other[c, 2] - other[a, 2]
            h0, h1, h2 = d1 * v2 - d2 * v1, d2 * v0 - d0 * v2, d0 * v1 - d1 * v0
            scale = u0 * h0 + u1 * h1 + u2 * h2
            if scale == 0.0:
                continue
            s0, s1, s2 = p[0] - other[a, 0], p[1] - other[a, 1], p[2] - other[a, 2]
            u = (s0 * h0 + s1 * h1 + s2 * h2) / scale
            if u < 0.0 or u > 1.0:
                continue
            w0, w1, w2 = s1 * u2 - s2 * u1, s2 * u0 - s0 * u2, s0 * u1 - s1 * u0
            v = (d0 * w0 + d1 * w1 + d2 * w2) / scale
            if v < 0.0 or u + v > 1.0:
                continue
            t = (v0 * w0 + v1 * w1 + v2 * w2) / scale
            if t < 0.0 or t > 1.0:
                continue
            if count == 0:
                place[0], place[1], place[2] = p[0] + t * d0, p[1] + t * d1, p[2] + t * d2
            count += 1
            break
    return count, place


def crossings(
    vertices: FloatArray,
    faces: IntArray,
    other_vertices: FloatArray,
    other_faces: IntArray,
    *,
    same: bool,
) -> tuple[int, FloatArray]:
    """Count the edges of one closed mesh that pass through a face of another, or of itself.

    Parameters
    ----------
    vertices, faces : (V, 3) and (F, 3) ndarray
        The mesh whose edges are looked at.
    other_vertices, other_faces : (W, 3) and (G, 3) ndarray
    same : bool
        Both are one mesh: faces that share a vertex with the edge do not count.

    Returns
    -------
    count : int
    place : (3,) ndarray
        Of the first one; NaN when there is none.

    References
    ----------
    .. [1] Möller T, Trumbore B (1997). Fast, minimum storage ray/triangle intersection. J Graphics
       Tools 2:21-28.

    Examples
    --------
    >>> from locator.geometry import icosphere
    >>> points, faces = icosphere(2)
    >>> crossings(points, faces, points, faces, same=True)[0]
    0
    >>> crossings(points, faces, points + [1.0, 0, 0], faces, same=False)[0] > 0
    True
    """
    edges = np.concatenate([faces[:, [0, 1]], faces[:, [1, 2]], faces[:, [2, 0]]])
    edges = edges[edges[:, 0] < edges[:, 1]]
    corners = other_vertices[other_faces]
    count, place = _crossings(
        np.ascontiguousarray(vertices, dtype=np.float64),
        np.ascontiguousarray(edges),
        np.ascontiguousarray(other_vertices, dtype=np.float64),
        np.ascontiguousarray(other_faces),
        corners.min(axis=1),
        corners.max(axis=1),
        same,
    )
    return int(count), place


def separate(
    inner_mm: FloatArray,
    outer_mm: FloatArray,
    rays: FloatArray,
    faces: IntArray,
    least_mm: float,
) -> FloatArray:
    """Smallest radii at or above `outer_mm` that keep the two meshes apart.

    Both meshes are radial functions on the same rays. The returned one is the least fixed point
    of "every vertex at least `least_mm` from every face of the other mesh": moving an outer
    vertex out along its ray can only enlarge both kinds of distance (the inner body is star-shaped,
    so scaling a point by s > 1 scales its distance to it by at least s; and a larger outer body has
    its boundary farther from any point inside), so vertices are moved out until all distances hold.

    Parameters
    ----------
    inner_mm, outer_mm : (V,) ndarray
        Radii along the rays, mm.
    rays : (V, 3) ndarray
        Unit directions.
    faces : (F, 3) ndarray of int32
    least_mm : float

    Returns
    -------
    (V,) ndarray
        Radii of the outer mesh, mm.
    """
    # 1/r is linear over a face in barycentric weights of the rays, so nesting at the vertices is
    # nesting everywhere.
    radii = np.maximum(outer_mm, inner_mm + least_mm)
    inner = rays * inner_mm[:, None]
    for _ in range(200):
        outer = rays * radii[:, None]
        to_inner, _ = _nearest_squared(outer, inner, faces, least_mm)
        to_outer, face = _nearest_squared(inner, outer, faces, least_mm)
        lack = np.maximum(least_mm - np.sqrt(to_inner), 0.0)
        for vertex in np.flatnonzero(face >= 0):
            missing = least_mm - np.sqrt(to_outer[vertex])
            lack[faces[face[vertex]]] = np.maximum(lack[faces[face[vertex]]], missing)
        if lack.max() <= 1e-9:
            return radii
        radii = radii + np.where(lack > 0, lack * 1.02 + 1e-3, 0.0)
    return radii


def limit_slope(
    radii_mm: FloatArray, ring: IntArray, angle_rad: float, slope: float, *, outward: bool
) -> FloatArray:
    """Nearest radii on one side of those given whose logarithm changes at most `slope` a radian.

    Keeps triangles of a radial mesh from becoming needles where the surface runs along the rays.
    With `outward` low places are lifted, else high places are cut.
    """
    sign = -1.0 if outward else 1.0
    log = sign * np.log(radii_mm)
    for _ in range(200):
        new = np.minimum(log, log[ring].min(axis=1) + slope * angle_rad)
        if np.array_equal(new, log):
            break
        log = new
    result: FloatArray = np.exp(sign * log)
    return result


def face_weights(
    rays: FloatArray, model_rays: FloatArray, faces: IntArray
) -> tuple[IntArray, FloatArray]:
    """Face of a model that each ray crosses and the weights of its corners, (N, 3) both.

    A ray is the weighted sum of the corners' rays, so ``1 / (weights / radii).sum()`` is the
    radius of the radial mesh along it.
    """
    middles = model_rays[faces].mean(axis=1)
    near = np.argsort(-(rays @ middles.T), axis=1)[:, :4]
    inverse = np.linalg.inv(np.transpose(model_rays[faces], (0, 2, 1)))
    weights = np.einsum("nfij,nj->nfi", inverse[near], rays)
    best = weights.min(axis=2).argmax(axis=1)
    row = np.arange(len(rays))
    return faces[near[row, best]], weights[row, best]


def cover(
    radii_mm: FloatArray,
    least_mm: FloatArray,
    corners: IntArray,
    weights: FloatArray,
    most_mm: float,
) -> FloatArray:
    """Radii of a coarse mesh moved out until it holds points on finer rays.

    Parameters
    ----------
    radii_mm : (V,) ndarray
        Radii of the coarse mesh.
    least_mm : (N,) ndarray
        Radii of the points that shall lie inside, along the fine rays.
    corners, weights : (N, 3) ndarray
        From `face_weights`.
    most_mm : float
        No vertex moves farther than this.
    """
    radii = radii_mm.copy()
    limit = radii_mm + most_mm
    for _ in range(60):
        mesh = 1.0 / (weights / radii[corners]).sum(axis=1)
        lack = np.maximum(least_mm - mesh, 0.0)
        if lack.max() < 0.02:
            break
        push = np.zeros_like(radii)
        for corner in range(3):
            np.maximum.at(push, corners[:, corner], lack * np.clip(weights[:, corner], 0.0, 1.0))
        new = np.minimum(radii + push, limit)
        if np.array_equal(new, radii):
            break
        radii = new
    return radii

"""Closed surfaces as radial functions on one icosphere: nested and apart by construction."""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

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

"""Small tools on triangle meshes: closest points, plane cuts, normals, level surfaces."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.spatial import cKDTree
from skimage.measure import marching_cubes

Array = NDArray[np.float64]
Faces = NDArray[np.int32]


def unit(vectors: ArrayLike) -> Array:
    """Scale vectors to length one along the last axis."""
    values = np.asarray(vectors, dtype=np.float64)
    scaled: Array = values / np.maximum(np.linalg.norm(values, axis=-1, keepdims=True), 1e-12)
    return scaled


def vertex_normals(vertices: ArrayLike, faces: ArrayLike) -> Array:
    """Outward unit normals (V, 3) of an outward-wound mesh, area weighted."""
    points = np.asarray(vertices, dtype=np.float64)
    triangles = np.asarray(faces)
    corners = points[triangles]
    area = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    normals = np.stack(
        [
            sum(
                np.bincount(triangles[:, corner], weights=area[:, axis], minlength=len(points))
                for corner in range(3)
            )
            for axis in range(3)
        ],
        axis=1,
    )
    return unit(normals)


def closest_on_triangles(points: Array, corners: Array) -> Array:
    """Closest point of each triangle to the point paired with it.

    Parameters
    ----------
    points : (N, 3) ndarray
        Points, mm.
    corners : (N, 3, 3) ndarray
        Triangle corners, mm.

    Returns
    -------
    (N, 3) ndarray
        Closest points, mm.

    References
    ----------
    .. [1] Ericson C (2005). Real-Time Collision Detection, section 5.1.5 (the region test;
       written anew here).

    Examples
    --------
    >>> corners = np.array([[[0.0, 0, 0], [1, 0, 0], [0, 1, 0]]])
    >>> closest_on_triangles(np.array([[2.0, 2.0, 5.0]]), corners).tolist()
    [[0.5, 0.5, 0.0]]
    """
    a, b, c = corners[:, 0], corners[:, 1], corners[:, 2]
    normal = np.cross(b - a, c - a)
    square = np.maximum((normal**2).sum(axis=1), 1e-18)
    offset = points - a
    # barycentric weights of the foot of the perpendicular
    weight_c = np.einsum("ij,ij->i", np.cross(b - a, offset), normal) / square
    weight_b = np.einsum("ij,ij->i", np.cross(offset, c - a), normal) / square
    inside = (weight_b >= 0) & (weight_c >= 0) & (weight_b + weight_c <= 1)
    best = a + weight_b[:, None] * (b - a) + weight_c[:, None] * (c - a)
    distance = np.where(inside, ((best - points) ** 2).sum(axis=1), np.inf)
    for start, end in ((a, b), (b, c), (c, a)):
        along = end - start
        length = np.maximum((along**2).sum(axis=1), 1e-18)
        share = np.clip(np.einsum("ij,ij->i", points - start, along) / length, 0, 1)
        foot = start + share[:, None] * along
        to_foot = ((foot - points) ** 2).sum(axis=1)
        nearer = to_foot < distance
        best[nearer] = foot[nearer]
        distance[nearer] = to_foot[nearer]
    return best


class Skin:
    """A closed skin mesh that answers: which point of the skin is closest, and its normal.

    Parameters
    ----------
    vertices_mm : (V, 3) array_like
        Vertices, mm.
    faces : (F, 3) array_like of int
        Triangles, outward.
    """

    def __init__(self, vertices_mm: ArrayLike, faces: ArrayLike) -> None:
        self.vertices = np.asarray(vertices_mm, dtype=np.float64)
        self.faces = np.asarray(faces)
        self.normals = vertex_normals(self.vertices, self.faces)
        self._index()

    def _index(self) -> None:
        self._corners = self.vertices[self.faces]
        self._tree = cKDTree(self._corners.mean(axis=1))
        self._used = np.unique(self.faces)
        self._vertex_tree = cKDTree(self.vertices[self._used])

    def without_thin_parts(
        self, places_mm: ArrayLike, reach_mm: float = 60.0, thick_mm: float = 9.0
    ) -> Skin:
        """The same skin without what is a thin plate there: the ears.

        Parameters
        ----------
        places_mm : (N, 3) array_like
            Where to look (the preauricular points), mm.
        reach_mm : float
            How far round them, mm.
        thick_mm : float
            A plate thinner than this is left out, mm.

        Returns
        -------
        Skin
            Fewer faces, the same vertices and normals.
        """
        near = self._used[
            np.unique(np.concatenate(self._vertex_tree.query_ball_point(places_mm, reach_mm)))
            .astype(int)
        ]  # fmt: skip
        thin = np.zeros(len(self.vertices), dtype=bool)
        for depth in (0.6 * thick_mm, thick_mm):
            below = self.vertices[near] - depth * self.normals[near]
            _, other = self._vertex_tree.query(below)
            other = self._used[other]
            # the place below the skin lies outside again
            height = np.einsum("ij,ij->i", below - self.vertices[other], self.normals[other])
            thin[near[height > 0.3]] = True
        bare = object.__new__(Skin)
        bare.vertices, bare.normals = self.vertices, self.normals
        bare.faces = self.faces[~thin[self.faces].any(axis=1)]
        bare._index()
        return bare

    def closest(self, points_mm: ArrayLike) -> Array:
        """Closest points on the skin, (N, 3), mm."""
        points = np.atleast_2d(np.asarray(points_mm, dtype=np.float64))
        n_near = min(24, len(self.faces))
        _, near = self._tree.query(points, k=n_near)
        flat = near.reshape(-1)
        repeated = np.repeat(points, n_near, axis=0)
        feet = closest_on_triangles(repeated, self._corners[flat])
        distance = ((feet - repeated) ** 2).sum(axis=1).reshape(len(points), n_near)
        chosen = distance.argmin(axis=1)
        picked: Array = feet.reshape(len(points), n_near, 3)[np.arange(len(points)), chosen]
        return picked

    def normal(self, points_mm: ArrayLike, radius_mm: float = 8.0) -> Array:
        """Outward normals (N, 3), averaged over the skin within ``radius_mm`` (a pad's rest)."""
        points = np.atleast_2d(np.asarray(points_mm, dtype=np.float64))
        found = np.zeros_like(points)
        _, first = self._vertex_tree.query(points)
        normals = self.normals[self._used]
        for index, near in enumerate(self._vertex_tree.query_ball_point(points, radius_mm)):
            own = normals[first[index]]
            around = normals[near] if near else own[None]
            # the other side of an ear or a fold is no part of the pad's rest
            around = around[around @ own > 0.3]
            found[index] = around.sum(axis=0) if len(around) else own
        return unit(found)


def plane_cut(vertices: Array, faces: NDArray[np.int_], origin: Array, normal: Array) -> Array:
    """Points (N, 3) where the edges of a mesh cross a plane, unordered.

    Examples
    --------
    >>> vertices = np.array([[0.0, 0, -1], [0, 0, 1], [1, 0, 1]])
    >>> cut = plane_cut(vertices, np.array([[0, 1, 2]]), np.zeros(3), np.array([0, 0, 1.0]))
    >>> sorted(cut[:, 0].tolist())
    [0.0, 0.5]
    """
    height = (vertices - origin) @ normal
    side = height > 0
    above = side[faces].sum(axis=1)
    crossing = faces[(above > 0) & (above < 3)]
    edges = np.concatenate([crossing[:, [0, 1]], crossing[:, [1, 2]], crossing[:, [2, 0]]])
    edges = edges[side[edges[:, 0]] != side[edges[:, 1]]]
    edges = np.unique(np.sort(edges, axis=1), axis=0)
    first, second = height[edges[:, 0]], height[edges[:, 1]]
    share = (first / (first - second))[:, None]
    cut: Array = vertices[edges[:, 0]] * (1 - share) + vertices[edges[:, 1]] * share
    return cut


def level_surface(
    level: NDArray[np.float32], spacing_mm: float, first_mm: Array
) -> tuple[Array, Faces]:
    """Closed outward mesh where a level field (negative inside) is zero.

    Parameters
    ----------
    level : (A, B, C) ndarray
        Level, mm, negative inside.
    spacing_mm : float
        Grid step, mm.
    first_mm : (3,) ndarray
        Place of ``level[0, 0, 0]``, scanner mm.

    Returns
    -------
    vertices_mm : (V, 3) ndarray
    faces : (F, 3) ndarray of int32
    """
    padded = np.pad(level, 1, mode="constant", constant_values=np.float32(1e3))
    vertices, faces, _, _ = marching_cubes(padded, level=0.0)
    placed = (vertices.astype(np.float64) - 1.0) * spacing_mm + first_mm
    corners = placed[faces]
    volume = np.einsum("ij,ij->i", corners[:, 0], np.cross(corners[:, 1], corners[:, 2])).sum()
    if volume < 0:
        faces = faces[:, ::-1]
    return placed, np.ascontiguousarray(faces, dtype=np.int32)


def largest_part(vertices: Array, faces: Faces) -> tuple[Array, Faces]:
    """Keep the connected part of a mesh with the most vertices."""
    from scipy.sparse import coo_matrix
    from scipy.sparse.csgraph import connected_components

    rows = faces[:, [0, 1, 2]].ravel()
    columns = faces[:, [1, 2, 0]].ravel()
    graph = coo_matrix((np.ones(len(rows), np.int8), (rows, columns)), shape=(len(vertices),) * 2)
    _, part = connected_components(graph, directed=False)
    main = part == np.bincount(part).argmax()
    new_index = np.cumsum(main) - 1
    kept = faces[main[faces[:, 0]]]
    return vertices[main], new_index[kept].astype(np.int32)


def icosphere(subdivisions: int) -> tuple[Array, Faces]:
    """Unit sphere of ``10 * 4**subdivisions + 2`` vertices with outward faces.

    Examples
    --------
    >>> vertices, faces = icosphere(2)
    >>> vertices.shape, faces.shape
    ((162, 3), (320, 3))
    """
    from scipy.spatial import ConvexHull

    golden = (1 + 5**0.5) / 2
    points = np.array(
        [p for a in (-1, 1) for b in (-golden, golden) for p in ((0, a, b), (a, b, 0), (b, 0, a))],
        dtype=np.float64,
    )
    points = unit(points)
    faces = ConvexHull(points).simplices
    for _ in range(subdivisions):
        edges = np.concatenate([faces[:, [0, 1]], faces[:, [1, 2]], faces[:, [2, 0]]])
        pairs, which = np.unique(np.sort(edges, axis=1), axis=0, return_inverse=True)
        which = which.reshape(-1)
        middle = unit(points[pairs].mean(axis=1))
        n_faces, n_old = len(faces), len(points)
        ab, bc, ca = (which[k * n_faces : (k + 1) * n_faces] + n_old for k in range(3))
        a, b, c = faces.T
        points = np.concatenate([points, middle])
        faces = np.concatenate(
            [np.stack(t, axis=1) for t in ((a, ab, ca), (ab, b, bc), (ca, bc, c), (ab, bc, ca))]
        )
    corners = points[faces]
    inward = np.einsum("ij,ij->i", np.cross(corners[:, 0], corners[:, 1]), corners[:, 2]) < 0
    faces[inward] = faces[inward][:, ::-1]
    return points, faces.astype(np.int32)

"""One step of interpolating subdivision of a closed triangle mesh, as a sparse matrix."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import sparse

IntArray = NDArray[np.int64]


def mesh_edges(faces: ArrayLike) -> tuple[IntArray, IntArray]:
    """Edges of a mesh and, for each face, the edge opposite to each corner.

    Returns
    -------
    edges : (E, 2) ndarray of int64
        Vertex pairs, the smaller first.
    face_edges : (F, 3) ndarray of int64
    """
    triangles = np.asarray(faces, dtype=np.int64)
    pairs = np.sort(triangles[:, [[1, 2], [2, 0], [0, 1]]].reshape(-1, 2), axis=1)
    edges, inverse = np.unique(pairs, axis=0, return_inverse=True)
    return edges, inverse.reshape(-1, 3).astype(np.int64)


def butterfly(faces: ArrayLike, n_vertices: int) -> tuple[sparse.csr_array, IntArray]:
    """Matrix and faces of one step of the modified butterfly subdivision.

    Every edge gets a vertex whose place (or value) is a weighted sum over its neighbours; the old
    vertices stay. On a smooth surface the new vertices lie much nearer to it than the middles of
    the edges.

    Parameters
    ----------
    faces : (F, 3) array_like of int
        Closed mesh.
    n_vertices : int

    Returns
    -------
    fine_from_coarse : (n_vertices + E, n_vertices) csr_array
        Rows sum to one.
    fine_faces : (4 F, 3) ndarray of int64
        Faces ``4 i .. 4 i + 3`` are the children of face i.

    References
    ----------
    .. [1] Dyn N, Levine D, Gregory JA (1990). A butterfly subdivision scheme for surface
       interpolation with tension control. ACM Trans Graph 9:160-169.
    .. [2] Zorin D, Schröder P, Sweldens W (1996). Interpolating subdivision for meshes with
       arbitrary topology. SIGGRAPH 96, 189-192.

    Examples
    --------
    >>> octahedron = [[0, 1, 2], [0, 2, 3], [0, 3, 4], [0, 4, 1]]
    >>> octahedron += [[5, 2, 1], [5, 3, 2], [5, 4, 3], [5, 1, 4]]
    >>> matrix, fine = butterfly(octahedron, 6)
    >>> matrix.shape, fine.shape, bool(np.allclose(matrix.sum(axis=1), 1))
    ((18, 6), (32, 3), True)
    """
    triangles = np.asarray(faces, dtype=np.int64)
    # following[v][w] = u: going round v counter-clockwise, u comes after w.
    following: list[dict[int, int]] = [{} for _ in range(n_vertices)]
    for a, b, c in triangles.tolist():
        following[a][b] = c
        following[b][c] = a
        following[c][a] = b

    def ring(vertex: int, start: int) -> list[int]:
        around, after = [start], following[vertex][start]
        while after != start:
            around.append(after)
            after = following[vertex][after]
        return around

    edges, face_edges = mesh_edges(triangles)
    rows, columns, weights = [], [], []

    def put(row: int, column: int, weight: float) -> None:
        rows.append(row)
        columns.append(column)
        weights.append(weight)

    for row, (a, b) in enumerate(edges.tolist(), start=n_vertices):
        around_a, around_b = ring(a, b), ring(b, a)
        regular_a, regular_b = len(around_a) == 6, len(around_b) == 6
        if regular_a and regular_b:
            put(row, a, 0.5)
            put(row, b, 0.5)
            put(row, around_a[1], 0.125)
            put(row, around_a[-1], 0.125)
            for neighbour in (around_a[2], around_a[-2], around_b[2], around_b[-2]):
                put(row, neighbour, -0.0625)
            continue
        irregular = [
            (vertex, around)
            for vertex, around, regular in ((a, around_a, regular_a), (b, around_b, regular_b))
            if not regular
        ]
        for vertex, around in irregular:
            put(row, vertex, 0.75 / len(irregular))
            for neighbour, weight in zip(around, _spokes(len(around)), strict=True):
                put(row, neighbour, weight / len(irregular))
    old = np.arange(n_vertices)
    matrix = sparse.csr_array(
        (
            np.concatenate([np.ones(n_vertices), weights]),
            (np.concatenate([old, rows]), np.concatenate([old, columns])),
        ),
        shape=(n_vertices + len(edges), n_vertices),
    )
    opposite_a, opposite_b, opposite_c = face_edges.T + n_vertices
    corner_a, corner_b, corner_c = triangles.T
    children = np.stack(
        [
            np.c_[corner_a, opposite_c, opposite_b],
            np.c_[corner_b, opposite_a, opposite_c],
            np.c_[corner_c, opposite_b, opposite_a],
            np.c_[opposite_a, opposite_b, opposite_c],
        ],
        axis=1,
    )
    return matrix, children.reshape(-1, 3)


def _spokes(valence: int) -> list[float]:
    """Weights of the ring of an irregular vertex, its own being 3/4 (Zorin et al. 1996)."""
    if valence == 3:
        return [5 / 12, -1 / 12, -1 / 12]
    if valence == 4:
        return [3 / 8, 0.0, -1 / 8, 0.0]
    steps = [2 * math.pi * j / valence for j in range(valence)]
    return [(0.25 + math.cos(step) + 0.5 * math.cos(2 * step)) / valence for step in steps]

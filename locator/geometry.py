"""Transforms between named spaces, rigid fits, and distances to triangle meshes."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]


def apply_affine(target_from_source: ArrayLike, points: ArrayLike) -> Array:
    """Move points from one space to another.

    Parameters
    ----------
    target_from_source : (4, 4) array_like
        Affine between the spaces.
    points : (..., 3) array_like
        Points in the source space.

    Returns
    -------
    (..., 3) ndarray
        The same points in the target space.

    Examples
    --------
    >>> apply_affine(np.diag([2.0, 2, 2, 1]), [1, 0, 3]).tolist()
    [2.0, 0.0, 6.0]
    """
    affine = np.asarray(target_from_source, dtype=np.float64)
    values = np.asarray(points, dtype=np.float64)
    moved: Array = values @ affine[:3, :3].T + affine[:3, 3]
    return moved


def voxel_sizes_mm(scanner_from_voxel: ArrayLike) -> Array:
    """Length of one voxel step along each array axis, mm, shape (3,)."""
    affine = np.asarray(scanner_from_voxel, dtype=np.float64)
    sizes: Array = np.sqrt((affine[:3, :3] ** 2).sum(axis=0))
    return sizes


def rigid_fit(
    target: ArrayLike, source: ArrayLike, weights: ArrayLike | None = None, *, scale: bool = False
) -> Array:
    """Least-squares rotation and translation that carry paired points onto others.

    Parameters
    ----------
    target, source : (N, 3) array_like
        Paired points, one unit for both.
    weights : (N,) array_like, optional
        Weight of each pair; default 1.
    scale : bool
        Also fit one common scale.

    Returns
    -------
    (4, 4) ndarray
        ``target_from_source``, never a reflection.

    References
    ----------
    .. [1] Umeyama S (1991). Least-squares estimation of transformation parameters between
       two point patterns. IEEE TPAMI 13:376-380. https://doi.org/10.1109/34.88573

    Examples
    --------
    >>> source = np.array([[0.0, 0, 0], [1, 0, 0], [0, 2, 0], [0, 0, 3]])
    >>> moved = apply_affine(rigid_fit(source + [5, 6, 7], source), source)
    >>> bool(np.allclose(moved, source + [5, 6, 7]))
    True
    """
    there = np.asarray(target, dtype=np.float64)
    here = np.asarray(source, dtype=np.float64)
    weight = np.ones(len(here)) if weights is None else np.asarray(weights, dtype=np.float64)
    weight = weight / weight.sum()
    there_mean, here_mean = weight @ there, weight @ here
    spread = (there - there_mean).T @ ((here - here_mean) * weight[:, None])
    left, singular, right = np.linalg.svd(spread)
    signs = np.ones(3)
    signs[2] = np.sign(np.linalg.det(left) * np.linalg.det(right))
    rotation = left @ np.diag(signs) @ right
    factor = 1.0
    if scale:
        factor = float((singular * signs).sum() / (weight @ ((here - here_mean) ** 2).sum(axis=1)))
    affine = np.eye(4)
    affine[:3, :3] = factor * rotation
    affine[:3, 3] = there_mean - affine[:3, :3] @ here_mean
    return affine


def vertex_normals(vertices: ArrayLike, faces: ArrayLike) -> Array:
    """Outward unit normals at the vertices of an outward-wound mesh, area weighted, (V, 3)."""
    points = np.asarray(vertices, dtype=np.float64)
    triangles = np.asarray(faces)
    corners = points[triangles]
    face_normal = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    normals = np.zeros_like(points)
    for corner in range(3):
        np.add.at(normals, triangles[:, corner], face_normal)
    length = np.linalg.norm(normals, axis=1, keepdims=True)
    return normals / np.where(length > 0, length, 1.0)


def tangents(normals: ArrayLike) -> tuple[Array, Array]:
    """Two unit vectors square to each unit normal and to each other.

    Parameters
    ----------
    normals : (N, 3) array_like

    Returns
    -------
    first, second : (N, 3) ndarray

    Examples
    --------
    >>> first, second = tangents([[1.0, 0.0, 0.0]])
    >>> np.abs(first).tolist(), np.abs(second).tolist()
    ([[0.0, 1.0, 0.0]], [[0.0, 0.0, 1.0]])
    """
    out = np.asarray(normals, dtype=np.float64)
    first = np.cross(out, np.array([0.0, 0.0, 1.0]))
    weak = np.linalg.norm(first, axis=1) < 0.2
    first[weak] = np.cross(out[weak], np.array([1.0, 0.0, 0.0]))
    first /= np.linalg.norm(first, axis=1, keepdims=True)
    return first, np.cross(out, first)


def mesh_volume_mm3(vertices: ArrayLike, faces: ArrayLike) -> float:
    """Signed volume inside a closed mesh; positive when the faces point outward.

    Examples
    --------
    >>> corners = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1]])
    >>> faces = [[0, 2, 1], [0, 1, 3], [0, 3, 2], [1, 2, 3]]
    >>> round(mesh_volume_mm3(corners, faces), 6)
    0.166667
    """
    corners = np.asarray(vertices, dtype=np.float64)[np.asarray(faces)]
    return float(
        np.einsum("ij,ij->i", corners[:, 0], np.cross(corners[:, 1], corners[:, 2])).sum() / 6.0
    )


def icosphere(subdivisions: int) -> tuple[Array, NDArray[np.int32]]:
    """Unit icosphere with ``10 * 4**subdivisions + 2`` vertices, outward faces.

    Examples
    --------
    >>> vertices, faces = icosphere(3)
    >>> vertices.shape, faces.shape
    ((642, 3), (1280, 3))
    """
    golden = (1 + 5**0.5) / 2
    corners = [(-1, golden, 0), (1, golden, 0), (-1, -golden, 0), (1, -golden, 0)]
    points = np.array(
        corners + [(z, x, y) for x, y, z in corners] + [(y, z, x) for x, y, z in corners], float
    )
    points /= np.linalg.norm(points, axis=1, keepdims=True)
    edge = min(np.linalg.norm(points[0] - points[j]) for j in range(1, 12)) * 1.01
    near = np.linalg.norm(points[:, None] - points[None], axis=2) < edge
    triangles = np.array(
        [
            (i, j, k)
            for i in range(12)
            for j in range(i + 1, 12)
            for k in range(j + 1, 12)
            if near[i, j] and near[j, k] and near[i, k]
        ]
    )
    wrong = (
        np.einsum(
            "ij,ij->i",
            points[triangles[:, 0]],
            np.cross(points[triangles[:, 1]], points[triangles[:, 2]]),
        )
        < 0
    )
    triangles[wrong] = triangles[wrong][:, ::-1]
    for _ in range(subdivisions):
        edges = np.sort(triangles[:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2), axis=1)
        unique, inverse = np.unique(edges, axis=0, return_inverse=True)
        middle = points[unique].sum(axis=1)
        middle /= np.linalg.norm(middle, axis=1, keepdims=True)
        ab, bc, ca = (inverse.reshape(-1, 3) + len(points)).T
        a, b, c = triangles.T
        points = np.vstack([points, middle])
        triangles = np.concatenate(
            [np.c_[a, ab, ca], np.c_[b, bc, ab], np.c_[c, ca, bc], np.c_[ab, bc, ca]]
        )
    return points, triangles.astype(np.int32)

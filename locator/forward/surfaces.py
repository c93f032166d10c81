"""Check three nested surfaces, refine them, and keep them from touching."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import sparse

from locator.errors import ForwardError
from locator.forward import kernels
from locator.forward.model import Layer, in_threads, make_layer
from locator.forward.subdivide import butterfly, mesh_edges
from locator.geometry import mesh_volume_mm3, vertex_normals
from locator.results import Finding

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Mesh = tuple[FloatArray, IntArray]

NAMES = ("inner skull", "outer skull", "scalp")
LEAST_GAP_MM = 0.1
"""Below this, two surfaces count as touching."""
THIN_GAP_MM = 1.0
"""Refinement must not bring surfaces nearer than this (or than they were)."""


@dataclass(frozen=True)
class Nearest:
    """Where points lie with respect to a closed mesh."""

    distance_mm: FloatArray
    face: IntArray
    weights: FloatArray
    inside: NDArray[np.bool_]


def nearest_on(points: ArrayLike, vertices: FloatArray, faces: IntArray) -> Nearest:
    """Nearest place on a closed mesh for each point, and whether the point is inside.

    Examples
    --------
    >>> corners = np.array([[0.0, 0, 0], [3, 0, 0], [0, 3, 0], [0, 0, 3]])
    >>> faces = np.array([[0, 2, 1], [0, 1, 3], [0, 3, 2], [1, 2, 3]])
    >>> found = nearest_on([[0.5, 0.5, 0.25], [-1.0, 1, 1]], corners, faces)
    >>> found.distance_mm.tolist(), found.inside.tolist()
    ([0.25, 1.0], [True, False])
    """
    places = np.ascontiguousarray(points, dtype=np.float64)
    packed = kernels.pack_triangles(vertices, faces)
    n = len(places)
    distance, face = np.empty(n), np.zeros(n, dtype=np.int64)
    weights = np.zeros((n, 3))

    def fill(first: int, last: int) -> None:
        kernels.nearest_triangles(first, last, places, packed, distance, face, weights)

    in_threads(fill, n, 64)
    return Nearest(distance, face, weights, _inside(places, vertices, faces, packed, face, weights))


def _inside(
    places: FloatArray,
    vertices: FloatArray,
    faces: IntArray,
    packed: FloatArray,
    face: IntArray,
    weights: FloatArray,
) -> NDArray[np.bool_]:
    """Side of the nearest feature: face, edge or vertex, by its angle-weighted normal.

    Baerentzen & Aanaes 2005, IEEE Trans Vis Comput Graph 11:243-253.
    """
    normals = packed[:, kernels.NORMAL : kernels.TANGENTS]
    tangents = packed[:, kernels.TANGENTS : kernels.OUTWARD].reshape(-1, 3, 3)
    at_vertex = np.zeros_like(vertices)
    for corner in range(3):
        cosine = -(tangents[:, (corner + 1) % 3] * tangents[:, (corner + 2) % 3]).sum(axis=1)
        angle = np.arccos(np.clip(cosine, -1.0, 1.0))
        np.add.at(at_vertex, faces[:, corner], angle[:, None] * normals)
    _, face_edges = mesh_edges(faces)
    at_edge = np.zeros((int(face_edges.max()) + 1, 3))
    np.add.at(at_edge, face_edges.ravel(), np.repeat(normals, 3, axis=0))
    zero = weights <= 1e-12
    outward = normals[face].copy()
    on_edge = zero.sum(axis=1) == 1
    outward[on_edge] = at_edge[face_edges[face[on_edge], zero[on_edge].argmax(axis=1)]]
    on_vertex = zero.sum(axis=1) == 2
    outward[on_vertex] = at_vertex[faces[face[on_vertex], weights[on_vertex].argmax(axis=1)]]
    foot = np.einsum("pk,pkx->px", weights, vertices[faces[face]])
    inside: NDArray[np.bool_] = ((places - foot) * outward).sum(axis=1) < 0
    return inside


def check_closed(vertices: FloatArray, faces: IntArray, name: str) -> None:
    """Refuse a mesh that is not one closed, outward, consistently wound surface."""
    where = f" ({name} surface, stage forward)."
    if vertices.ndim != 2 or vertices.shape[1] != 3 or faces.ndim != 2 or faces.shape[1] != 3:
        msg = (
            f"Vertices have shape {vertices.shape} and faces {faces.shape}; both need (N, 3){where}"
            " Pass a triangle mesh."
        )
        raise ForwardError(msg)
    if not np.isfinite(vertices).all():
        bad = int((~np.isfinite(vertices).all(axis=1)).sum())
        msg = f"{bad} of {len(vertices)} vertices are not finite{where} Repair the surface."
        raise ForwardError(msg)
    if len(faces) == 0 or faces.min() < 0 or faces.max() >= len(vertices):
        msg = f"Faces point at vertices outside 0..{len(vertices) - 1}{where} Repair the surface."
        raise ForwardError(msg)
    directed = np.concatenate([faces[:, [0, 1]], faces[:, [1, 2]], faces[:, [2, 0]]])
    forth = directed[:, 0] * len(vertices) + directed[:, 1]
    back = directed[:, 1] * len(vertices) + directed[:, 0]
    unpaired = len(np.setdiff1d(forth, back))
    repeated = len(forth) - len(np.unique(forth))
    if unpaired or repeated:
        msg = (
            f"{unpaired} edges have no neighbour of opposite direction and {repeated} occur twice:"
            f" the mesh is open, or its faces are not wound alike{where} Close it, or make it"
            " again with the head stage."
        )
        raise ForwardError(msg)
    if len(np.unique(faces)) != len(vertices):
        loose = len(vertices) - len(np.unique(faces))
        msg = f"{loose} vertices belong to no face{where} Remove them."
        raise ForwardError(msg)
    joined = sparse.csr_array(
        (np.ones(len(directed)), (directed[:, 0], directed[:, 1])),
        shape=(len(vertices), len(vertices)),
    )
    pieces = sparse.csgraph.connected_components(joined, directed=False)[0]
    euler = len(vertices) - len(directed) // 2 + len(faces)
    if pieces != 1 or euler != 2:
        msg = (
            f"The mesh has {pieces} pieces and Euler number {euler}, a sphere-like surface has 1"
            f" and 2{where} Keep the largest piece and close its handles."
        )
        raise ForwardError(msg)
    area = kernels.pack_triangles(vertices, faces)[:, kernels.AREA]
    if not area.min() > 1e-6 * np.median(area):
        flat = int((~(area > 1e-6 * np.median(area))).sum())
        msg = f"{flat} triangles have no area{where} Merge their vertices."
        raise ForwardError(msg)
    if mesh_volume_mm3(vertices, faces) <= 0:
        msg = f"The faces point inward{where} Reverse the order of each face's vertices."
        raise ForwardError(msg)


def gaps_mm(inner: Mesh, outer: Mesh) -> tuple[FloatArray, FloatArray, Nearest, Nearest]:
    """Signed gap at each inner vertex and at each outer vertex; negative where they cross."""
    out = nearest_on(inner[0], *outer)
    back = nearest_on(outer[0], *inner)
    return (
        np.where(out.inside, out.distance_mm, -out.distance_mm),
        np.where(back.inside, -back.distance_mm, back.distance_mm),
        out,
        back,
    )


def check_nested(meshes: list[Mesh]) -> list[float]:
    """Refuse surfaces that cross or touch; returns the least gap of each neighbouring pair, mm."""
    least = []
    for k in range(2):
        there, back, _, _ = gaps_mm(meshes[k], meshes[k + 1])
        gap = float(min(there.min(), back.min()))
        if gap < LEAST_GAP_MM:
            crossing = int((there < 0).sum() + (back < 0).sum())
            worst = (
                meshes[k][0][there.argmin()]
                if there.min() < back.min()
                else (meshes[k + 1][0][back.argmin()])
            )
            at = ", ".join(f"{value:.0f}" for value in worst)
            msg = (
                f"The {NAMES[k]} and the {NAMES[k + 1]} must be nested with at least"
                f" {LEAST_GAP_MM} mm between them; the least gap is {gap:.2f} mm at ({at}) scanner"
                f" mm, {crossing} vertices lie on the wrong side (stage forward). Check that the"
                " surfaces belong to one head and push them apart there."
            )
            raise ForwardError(msg)
        least.append(gap)
    return least


def _bulge(
    vertices: FloatArray, faces: IntArray, matrix: sparse.csr_array, edges: IntArray
) -> FloatArray:
    """Move vertices out so that flat faces enclose about what the curved surface does.

    The faces of a mesh whose vertices lie on a convex surface lie inside it. The butterfly middle
    of each edge estimates how far; each vertex moves along its normal by the mean over its edges.
    """
    middle = (matrix[len(vertices) :] @ vertices) - vertices[edges].mean(axis=1)
    normals = vertex_normals(vertices, faces)
    lift = np.zeros(len(vertices))
    count = np.bincount(edges.ravel(), minlength=len(vertices))
    for end in range(2):
        np.add.at(lift, edges[:, end], (middle * normals[edges[:, end]]).sum(axis=1))
    return normals * (lift / count)[:, None]


def prepare_layers(
    meshes: list[Mesh], *, subdivided: bool
) -> tuple[tuple[Layer, Layer, Layer], Mesh, list[Finding]]:
    """Layers to integrate over, the read-out mesh on the skin, and what had to be given up."""
    findings: list[Finding] = []
    base, bends, flats = [], [], []
    steps: list[tuple[IntArray, sparse.csr_array, IntArray, IntArray]] = []

    def step_of(faces: IntArray, n: int) -> tuple[sparse.csr_array, IntArray, IntArray]:
        # The three surfaces often share their triangles.
        for known, matrix, fine, edges in steps:
            if known.shape == faces.shape and np.array_equal(known, faces):
                return matrix, fine, edges
        matrix, fine = butterfly(faces, n)
        edges, _ = mesh_edges(faces)
        steps.append((faces, matrix, fine, edges))
        return matrix, fine, edges

    for vertices, faces in meshes:
        if subdivided:
            matrix, fine, edges = step_of(faces, len(vertices))
            flat = np.concatenate([vertices, vertices[edges].mean(axis=1)])
            smooth = matrix @ vertices
        else:
            matrix = sparse.csr_array(sparse.eye_array(len(vertices), format="csr"))
            fine, flat, smooth = faces, vertices, vertices
        base.append((matrix, fine, smooth))
        next_matrix, _, next_edges = step_of(fine, len(smooth))
        bends.append(smooth + _bulge(smooth, fine, next_matrix, next_edges) - flat)
        flats.append(flat)
    shares = [np.ones(len(flat)) for flat in flats]
    least = []
    for k in range(2):
        there, back, _, _ = gaps_mm((flats[k], base[k][1]), (flats[k + 1], base[k + 1][1]))
        least.append((np.minimum(THIN_GAP_MM, 0.95 * there), np.minimum(THIN_GAP_MM, 0.95 * back)))
    for _ in range(12):
        now = [flats[k] + shares[k][:, None] * bends[k] for k in range(3)]
        unsafe = [np.zeros(len(flat), dtype=bool) for flat in flats]
        for k in range(2):
            inner, outer = (now[k], base[k][1]), (now[k + 1], base[k + 1][1])
            there, back, out, into = gaps_mm(inner, outer)
            for near, gap, limit, own, other, mesh in (
                (out, there, least[k][0], k, k + 1, outer),
                (into, back, least[k][1], k + 1, k, inner),
            ):
                tight = gap < limit
                unsafe[own] |= tight
                unsafe[other][mesh[1][near.face[tight]].ravel()] = True
        change = [unsafe[k] & (shares[k] > 0) for k in range(3)]
        if not any(part.any() for part in change):
            break
        for k in range(3):
            shares[k][change[k]] = np.where(shares[k][change[k]] > 0.4, shares[k][change[k]] / 2, 0)
    flattened = [int((share < 1).sum()) for share in shares]
    if any(flattened):
        listed = ", ".join(
            f"{count} of {len(flats[k])} on the {NAMES[k]}"
            for k, count in enumerate(flattened)
            if count
        )
        findings.append(
            Finding(
                level="note",
                stage="forward",
                problem=(
                    f"Smooth refinement would bring surfaces nearer than {THIN_GAP_MM:g} mm or"
                    f" make them cross; the faces were kept flat there ({listed} vertices)."
                ),
                suggestion="Potentials over these places are a little less exact.",
                subject="surfaces",
                doubt=0.2,
            )
        )
    layers = []
    for k in range(3):
        matrix, fine, _ = base[k]
        places = flats[k] + shares[k][:, None] * bends[k]
        unknowns = matrix
        if k == 2:
            unknowns = sparse.csr_array(sparse.eye_array(len(places), format="csr"))
        layers.append(make_layer(places, fine, unknowns, unknowns))
    scalp = (
        base[2][2] if not flattened[2] else np.where(shares[2][:, None] < 1, flats[2], base[2][2])
    )
    return (layers[0], layers[1], layers[2]), (scalp, base[2][1]), findings

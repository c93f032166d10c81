"""From the potentials at the read-out mesh to electrodes anywhere on the skin."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import sparse

from locator.errors import ForwardError
from locator.forward.surfaces import nearest_on
from locator.geometry import vertex_normals

FloatArray = NDArray[np.float64]

FARTHEST_MM = 30.0
_RINGS = 3


def electrode_weights(
    vertices: ArrayLike, faces: ArrayLike, positions_scanner_mm: ArrayLike
) -> sparse.csr_array:
    """Interpolate vertex values to places on or near the skin, smoother than linearly.

    Each place goes to its nearest point on the mesh. There a cubic spline (radial, with a
    quadratic polynomial) through the values of the vertices up to three edges away is evaluated
    in the tangent plane; it reproduces quadratics, where linear interpolation within the face
    would flatten the peaks.

    Parameters
    ----------
    vertices : (V, 3) array_like
        Closed outward mesh, scanner mm.
    faces : (F, 3) array_like of int
    positions_scanner_mm : (E, 3) array_like

    Returns
    -------
    (E, V) csr_array
        Rows sum to one.

    Raises
    ------
    ForwardError
        If a position is not finite or farther than 30 mm from the mesh.
    """
    mesh = np.asarray(vertices, dtype=np.float64)
    triangles = np.asarray(faces, dtype=np.int64)
    places = np.asarray(positions_scanner_mm, dtype=np.float64)
    if places.ndim != 2 or places.shape[1] != 3 or not np.isfinite(places).all():
        msg = (
            f"Electrode positions have shape {places.shape} or are not finite; needed (E, 3)"
            " finite scanner mm (stage forward, electrode rows). Leave such electrodes out."
        )
        raise ForwardError(msg)
    near = nearest_on(places, mesh, triangles)
    if len(places) and near.distance_mm.max() > FARTHEST_MM:
        worst = int(near.distance_mm.argmax())
        at = ", ".join(f"{value:.0f}" for value in places[worst])
        msg = (
            f"Electrode {worst} at ({at}) scanner mm lies {near.distance_mm[worst]:.0f} mm from the"
            f" skin, at most {FARTHEST_MM:g} is plausible (stage forward, electrode rows). Check"
            " that the positions and the T1 share one space."
        )
        raise ForwardError(msg)
    normals = vertex_normals(mesh, triangles)
    pairs = np.concatenate([triangles[:, [0, 1]], triangles[:, [1, 2]], triangles[:, [2, 0]]])
    joined = sparse.csr_array(
        (np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(len(mesh), len(mesh))
    )
    rows, columns, weights = [], [], []
    for row in range(len(places)):
        corners = triangles[near.face[row]]
        share = near.weights[row]
        foot = share @ mesh[corners]
        normal = share @ normals[corners]
        normal /= np.linalg.norm(normal)
        known = set(corners.tolist())
        for _ in range(_RINGS):
            known |= {
                int(other)
                for vertex in known
                for other in joined.indices[joined.indptr[vertex] : joined.indptr[vertex + 1]]
            }
        around = np.array(sorted(known))
        around = around[normals[around] @ normal > 0.5]
        part = _spline_weights(mesh[around] - foot, normal)
        if part is None:
            around, part = corners, share
        rows += [row] * len(around)
        columns += around.tolist()
        weights += part.tolist()
    return sparse.csr_array((weights, (rows, columns)), shape=(len(places), len(mesh)))


def _spline_weights(offsets: FloatArray, normal: FloatArray) -> FloatArray | None:
    """Weights at the origin of the tangent plane, or None when the places do not allow it."""
    if len(offsets) < 10:
        return None
    first = np.cross(normal, np.eye(3)[np.abs(normal).argmin()])
    first /= np.linalg.norm(first)
    flat = offsets @ np.c_[first, np.cross(normal, first)]
    flat = flat / np.abs(flat).max()
    x, y = flat.T
    polynomial = np.c_[np.ones(len(x)), x, y, x * x, x * y, y * y]
    n = len(x)
    system = np.zeros((n + 6, n + 6))
    system[:n, :n] = np.linalg.norm(flat[:, None] - flat, axis=2) ** 3
    system[:n, n:] = polynomial
    system[n:, :n] = polynomial.T
    right = np.zeros(n + 6)
    right[:n] = np.linalg.norm(flat, axis=1) ** 3
    right[n] = 1.0
    try:
        weights = np.asarray(np.linalg.solve(system, right)[:n], dtype=np.float64)
    except np.linalg.LinAlgError:
        return None
    # A smooth interpolant on a sane mesh stays near 1.2; folds of the chart give large weights.
    if not np.isfinite(weights).all() or np.abs(weights).sum() > 2.5:
        return None
    return weights

"""A surface half-way through the cortex, from the tissue map."""

from __future__ import annotations

import logging
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from skimage.measure import marching_cubes

from locator.errors import HeadError
from locator.geometry import apply_affine, mesh_volume_mm3, voxel_sizes_mm
from locator.head.model import BRAIN_STEM, CEREBELLUM, GREY, WHITE, Head
from locator.head.morphology import box_around
from locator.results import Frozen

logger = logging.getLogger(__name__)

FloatArray = NDArray[np.float64]

HALF_CORTEX_MM = 1.3
"""Half of the cortex's thickness: 2.5 mm on average, 1 to 4.5 (Fischl & Dale 2000, PNAS
97:11050). Where the banks of a sulcus touch, no fluid shows how thick each is."""

CLOSING_MM = 2.0
"""Gaps of the white matter up to twice this width (vessels, noise) are closed."""

LEAST_AREA_MM2 = 500.0
"""Pieces with less surface than this are specks of the tissue map."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Cortex(Frozen):
    """The middle of the cortex as a triangle mesh; holes and handles of the tissue map remain.

    Attributes
    ----------
    vertices_scanner_mm : (V, 3) ndarray
    faces : (F, 3) ndarray of int32
        Wound so that normals point out of the cortex, towards the fluid.
    """

    vertices_scanner_mm: FloatArray
    faces: NDArray[np.int32]


def find_cortex(head: Head) -> Cortex:
    """Surface half-way between white matter and the outside of the cerebral cortex.

    Parameters
    ----------
    head : Head

    Returns
    -------
    Cortex

    Raises
    ------
    HeadError
        If the tissue map holds no white matter that cortex could surround.

    Notes
    -----
    The level set on which the distance to white matter equals half of the local thickness (its sum
    with the distance to the outside), or `HALF_CORTEX_MM` where that is less: inside closed sulci
    the outside is not seen. Cerebellum and brain stem are left out. Against the known surfaces of
    a real head: see ``tests/benchmarks/head.py``.
    """
    tissues = np.asarray(head.tissues)
    affine = np.asarray(head.scanner_from_voxel)
    sizes = voxel_sizes_mm(affine)
    box = box_around(np.isin(tissues, (GREY, WHITE)), 4)
    cut = tissues[box]
    core = cut == WHITE
    if core.sum() * float(np.prod(sizes)) < 20_000:
        msg = (
            f"The tissue map holds {core.sum() * float(np.prod(sizes)) / 1000:.0f} mL of white"
            " matter, too little for a cortex around it (stage head). Look at the tissues over"
            " the T1, or take the source space 'grey'."
        )
        raise HeadError(msg)
    # Ventricles and deep nuclei lie within the white matter; what it encloses is not cortex.
    reach = max(1, round(CLOSING_MM / float(np.mean(sizes))))
    core = ndimage.binary_fill_holes(ndimage.binary_closing(core, iterations=reach) | core)
    brain = core | (cut == GREY)
    to_core = _signed_distance(core, sizes)
    to_outside = -_signed_distance(brain, sizes)
    half = np.minimum(0.5 * np.maximum(to_core + to_outside, 0.0), HALF_CORTEX_MM)
    level = ndimage.gaussian_filter(to_core - half, 0.5 / sizes)
    # Cut off where cerebellum and brain stem begin.
    level[np.isin(cut, (CEREBELLUM, BRAIN_STEM))] = 3.0
    vertices, faces, _, _ = marching_cubes(level, 0.0)
    faces = _large_pieces(vertices * sizes, faces.astype(np.int64))
    used, faces = np.unique(faces, return_inverse=True)
    vertices, faces = vertices[used], faces.reshape(-1, 3)
    offset = np.array([part.start for part in box], dtype=float)
    placed = apply_affine(affine, vertices + offset)
    # Out of the closed pieces: the volume they hold is positive.
    if mesh_volume_mm3(placed - placed.mean(axis=0), faces) < 0:
        faces = faces[:, ::-1]
    logger.info("cortex: %d vertices, %d triangles", len(placed), len(faces))
    return Cortex(vertices_scanner_mm=placed, faces=np.ascontiguousarray(faces, dtype=np.int32))


def _signed_distance(mask: NDArray[np.bool_], sizes: FloatArray) -> FloatArray:
    """Distance to the edge of a mask, mm, negative inside; the edge lies between voxels."""
    outside = ndimage.distance_transform_edt(~mask, sampling=sizes)
    inside = ndimage.distance_transform_edt(mask, sampling=sizes)
    half = 0.5 * float(np.mean(sizes))
    result: FloatArray = np.where(mask, half - inside, outside - half)
    return result


def _large_pieces(vertices_mm: FloatArray, faces: NDArray[np.int64]) -> NDArray[np.int64]:
    """Faces of the pieces that have at least `LEAST_AREA_MM2`."""
    count = len(vertices_mm)
    edges = np.concatenate([faces[:, [0, 1]], faces[:, [1, 2]]])
    graph = coo_array((np.ones(len(edges)), (edges[:, 0], edges[:, 1])), shape=(count, count))
    _, piece = connected_components(graph, directed=False)
    corners = vertices_mm[faces]
    area = 0.5 * np.linalg.norm(
        np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]), axis=1
    )
    whole = np.bincount(piece[faces[:, 0]], weights=area)
    return faces[whole[piece[faces[:, 0]]] >= LEAST_AREA_MM2]

"""Where activity may be: sources in the grey matter, the whole brain or along the cortex."""

from __future__ import annotations

import logging
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from scipy.spatial import cKDTree

from locator.errors import HeadError
from locator.geometry import apply_affine, vertex_normals, voxel_sizes_mm
from locator.head import BRAIN, BRAIN_STEM, CEREBELLUM, CSF, GREY, WHITE, Head, Surface
from locator.head.cortex import find_cortex
from locator.head.morphology import box_around
from locator.head.shape import distance_to_mesh, fill_mesh
from locator.results import Finding, Frozen, Progress

logger = logging.getLogger(__name__)

FloatArray = NDArray[np.float64]

KINDS = ("grey", "brain", "cortex")

LEAST_SHARE = {"grey": 0.2, "brain": 0.5}
"""A grid point is kept when at least this share of the cell around it is of its tissue."""

NORMAL_SMOOTHING_MM = 1.7
"""Standard deviation of the smoothing of the tissue map whose gradient gives the normals; about
half the cortex's thickness keeps both banks of a sulcus apart (chosen on one head with known
surfaces, between 1 and 3 mm it changes little)."""

SKIRT_MM = 1.5
"""How far a grid point outside its tissue may be moved onto it, in units of millimetres."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Sources(Frozen):
    """A source space.

    Attributes
    ----------
    positions_scanner_mm : (S, 3) ndarray
    normals : (S, 3) ndarray
        Unit vectors out of the cortex; NaN where there is none.
    kind : str
        `grey`, `brain` or `cortex`.
    spacing_mm : float
    nearest_source : (I, J, K) ndarray of int32
        For each voxel of the T1 grid the index of its nearest source, -1 outside the source space.
    scanner_from_voxel : (4, 4) ndarray
        Affine of the T1 grid.
    findings : tuple of Finding
    """

    positions_scanner_mm: FloatArray
    normals: FloatArray
    kind: str
    spacing_mm: float
    nearest_source: NDArray[np.int32]
    scanner_from_voxel: FloatArray
    findings: tuple[Finding, ...] = ()


def make_sources(
    head: Head,
    *,
    kind: str = "grey",
    spacing_mm: float = 5.0,
    margin_mm: float = 3.0,
    progress: Progress | None = None,
) -> Sources:
    """Lay a regular grid of sources into the head's tissue map.

    Parameters
    ----------
    head : Head
    kind : {"grey", "brain", "cortex"}
        ``grey``: cerebral grey matter, without cerebellum and brain stem. ``brain``: all of the
        brain with both. ``cortex``: on the surface half-way through the cortex
        (`locator.head.cortex`), one source in each cell of the grid that it passes, with that
        surface's normal.
    spacing_mm : float
        Distance of the grid's points or width of its cells, 2 to 20 mm.
    margin_mm : float
        Least distance to the inner skull, mm; boundary elements lose accuracy nearer to it.
        Points of tissue that lie nearer are moved in along the surface's normal, by at most
        half the spacing.
    progress : Progress, optional

    Returns
    -------
    Sources
        Sorted along x, then y, then z of the grid.

    Raises
    ------
    HeadError
        If the kind is unknown, the spacing out of range, or the tissue map holds too little.
    """
    if kind not in KINDS:
        msg = (
            f"The source space {kind!r} is not known (stage sources)."
            f" Choose one of {', '.join(KINDS)}."
        )
        raise HeadError(msg)
    if not 2.0 <= spacing_mm <= 20.0:
        msg = (
            f"A source spacing of {spacing_mm:g} mm is outside 2 to 20 mm (stage sources)."
            " Choose a value in that range; 5 mm is usual."
        )
        raise HeadError(msg)
    if progress is not None:
        progress(0.0, "laying the sources")
    tissues = np.asarray(head.tissues)
    wanted = np.isin(tissues, BRAIN) if kind == "brain" else tissues == GREY
    affine = np.asarray(head.scanner_from_voxel)
    voxel_mm3 = abs(float(np.linalg.det(affine[:3, :3])))
    if wanted.sum() * voxel_mm3 < 20_000:
        msg = (
            f"The tissue map holds {wanted.sum() * voxel_mm3 / 1000:.0f} mL for the source space"
            f" {kind!r}, too little for one (stage sources). Look at the tissues over the T1."
        )
        raise HeadError(msg)
    voxels = np.argwhere(wanted)
    places = apply_affine(affine, voxels)
    origin = np.asarray(head.center_scanner_mm)
    normals = None
    if kind == "cortex":
        points, normals = _on_cortex(head, origin, spacing_mm)
    else:
        cells = np.rint((places - origin) / spacing_mm).astype(np.int64)
        unique, counts = np.unique(cells, axis=0, return_counts=True)
        share = counts * voxel_mm3 / spacing_mm**3
        points = unique[share >= LEAST_SHARE[kind]] * spacing_mm + origin
    points, good, moved = _keep_clear(points, head.inner_skull, margin_mm, spacing_mm / 2)
    reach, _ = cKDTree(places).query(points, distance_upper_bound=0.75 * spacing_mm)
    near = np.isfinite(reach)
    points = points[near]
    if normals is not None:
        normals = normals[good][near]
    if len(points) < 50:
        msg = (
            f"Only {len(points)} sources fit into the source space {kind!r} at {spacing_mm:g} mm"
            " (stage sources). Choose a smaller spacing or look at the tissues over the T1."
        )
        raise HeadError(msg)
    if progress is not None:
        progress(0.5, "giving every voxel its source")
    away, nearest = cKDTree(points).query(places, distance_upper_bound=2.0 * spacing_mm)
    nearest_source = np.full(tissues.shape, -1, dtype=np.int32)
    found = np.isfinite(away)
    nearest_source[tuple(voxels[found].T)] = nearest[found]
    if normals is None:
        flat = np.full(points.shape, np.nan)
        normals = _normals(tissues, affine, points) if kind == "grey" else flat
    findings = []
    uncovered = float((~found).mean())
    if uncovered > 0.05:
        findings.append(
            Finding(
                level="look",
                stage="sources",
                problem=f"{100 * uncovered:.0f} % of the tissue has no source within"
                f" {2 * spacing_mm:g} mm, because it lies outside the inner skull or close to it.",
                suggestion="Look at the inner skull over the T1.",
                subject="inner_skull",
                doubt=0.6,
            )
        )
    logger.info("sources: %d of kind %s, %d moved in", len(points), kind, moved)
    if progress is not None:
        progress(1.0, "sources done")
    return Sources(
        positions_scanner_mm=points,
        normals=normals,
        kind=kind,
        spacing_mm=float(spacing_mm),
        nearest_source=nearest_source,
        scanner_from_voxel=affine,
        findings=tuple(findings),
    )


def _inside(points: FloatArray, surface: Surface) -> NDArray[np.bool_]:
    """Tell which points lie inside a closed surface, by voxels of 1 mm (so to about 1 mm)."""
    vertices = np.asarray(surface.vertices_scanner_mm)
    low = np.floor(vertices.min(axis=0)) - 2
    shape = tuple(int(n) for n in np.ceil(vertices.max(axis=0)) - low + 3)
    mask = fill_mesh(vertices - low, np.asarray(surface.faces), shape)
    at = np.rint(points - low).astype(int)
    valid = ((at >= 0) & (at < shape)).all(axis=1)
    inside = np.zeros(len(points), dtype=bool)
    inside[valid] = mask[tuple(at[valid].T)]
    return inside


def _on_cortex(head: Head, origin: FloatArray, spacing_mm: float) -> tuple[FloatArray, FloatArray]:
    """One vertex of the cortex for each cell of the grid, and its outward normal."""
    cortex = find_cortex(head)
    vertices = np.asarray(cortex.vertices_scanner_mm)
    normals = vertex_normals(vertices, np.asarray(cortex.faces))
    cells = np.rint((vertices - origin) / spacing_mm).astype(np.int64)
    _, cell, counts = np.unique(cells, axis=0, return_inverse=True, return_counts=True)
    cell = cell.ravel()
    middle = np.stack([np.bincount(cell, weights=axis) for axis in vertices.T], axis=1)
    away = np.linalg.norm(vertices - (middle / counts[:, None])[cell], axis=1)
    order = np.lexsort((away, cell))
    first = order[np.concatenate([[0], np.cumsum(counts)[:-1]])]
    # Cells that the surface only grazes belong to their neighbours.
    first = first[counts >= 0.2 * np.median(counts)]
    return vertices[first], normals[first]


def _keep_clear(
    points: FloatArray, surface: Surface, margin_mm: float, furthest_mm: float
) -> tuple[FloatArray, NDArray[np.bool_], int]:
    """Move points that are too near to the surface inward; drop those that would go too far.

    Returns the points that are left, which ones they are, and how many were moved.
    """
    vertices = np.asarray(surface.vertices_scanner_mm)
    faces = np.asarray(surface.faces)
    center = vertices.mean(axis=0)
    result = points.copy()
    travelled = np.zeros(len(points))
    pending = np.arange(len(points))
    good = np.zeros(len(points), dtype=bool)
    step = 0.5
    while len(pending):
        here = result[pending]
        clear = _inside(here, surface) & (
            distance_to_mesh(here, vertices, faces, margin_mm + 1.5) >= margin_mm + 1e-6
        )
        good[pending[clear]] = True
        pending = pending[~clear & (travelled[pending] + step <= furthest_mm)]
        direction = center - result[pending]
        direction /= np.linalg.norm(direction, axis=1, keepdims=True)
        result[pending] += step * direction
        travelled[pending] += step
    moved = int((good & (travelled > 0)).sum())
    return result[good], good, moved


def _normals(tissues: NDArray[np.int32], affine: FloatArray, points: FloatArray) -> FloatArray:
    """Unit vectors from white matter towards CSF at the points, NaN where the map is flat."""
    brain = np.isin(tissues, (GREY, WHITE))
    box = box_around(brain, 6)
    cut = tissues[box]
    level = np.zeros(cut.shape, dtype=np.float32)
    level[cut == GREY] = 0.5
    level[np.isin(cut, (WHITE, BRAIN_STEM, CEREBELLUM))] = 1.0
    # CSF deep in the brain (ventricles) is no outside of the cortex.
    del_csf = cut == CSF
    level[del_csf] = 0.0
    sizes = voxel_sizes_mm(affine)
    smooth = ndimage.gaussian_filter(level, NORMAL_SMOOTHING_MM / sizes)
    offset = np.array([b.start for b in box], dtype=float)
    at = (apply_affine(np.linalg.inv(affine), points) - offset).T
    gradient = np.stack(
        [
            ndimage.map_coordinates(np.gradient(smooth, axis=axis), at, order=1, mode="nearest")
            for axis in range(3)
        ],
        axis=1,
    )
    # Gradients are covectors: d/dscanner = inverse-transpose of the affine times d/dvoxel.
    in_scanner = -gradient @ np.linalg.inv(affine[:3, :3])
    length = np.linalg.norm(in_scanner, axis=1, keepdims=True)
    return np.where(length > 0.01, in_scanner / np.maximum(length, 1e-12), np.nan)

"""The head from one T1 volume: brain, skull, scalp and tissues in order."""

from __future__ import annotations

import logging

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import ndimage

from locator.errors import HeadError
from locator.geometry import apply_affine, icosphere
from locator.head.brain import Brain, find_brain
from locator.head.checks import check_head
from locator.head.grid import make_grid
from locator.head.model import (
    BONE,
    CEREBELLUM,
    CSF,
    GREY,
    OTHER,
    SOFT,
    WHITE,
    Head,
    HeadOptions,
    Surface,
)
from locator.head.morphology import close, distance_to
from locator.head.parts import label_parts
from locator.head.shape import (
    cover,
    face_weights,
    fill_mesh,
    limit_slope,
    ring_neighbours,
    separate,
    smooth_on_sphere,
)
from locator.head.skull import find_skull, mask_radii
from locator.head.tissues import classify
from locator.results import Progress
from locator.skin import Skin
from locator.volume import Volume

logger = logging.getLogger(__name__)

FloatArray = NDArray[np.float64]

HULL_MM = 15.0
"""The brain is closed by a ball of this radius before rays meet it: raw brains are not
star-shaped."""

LEAST_BRAIN_MM3 = 300_000
"""Less connected tissue than this (mm^3) is no brain of a child or an adult."""

LEAST_ROOM_MM = 6.0
"""Scalp and skull together take 9 mm and more on any vault (figures in `HeadOptions`)."""

CLEAR_MM = 0.5
"""Least distance of the inner skull outside the brain's hull, along the rays."""

STEEPEST = 1.7
"""Largest change of the logarithm of a radius per radian (60 degrees between ray and normal)."""


def build_head(
    volume: Volume,
    skin: Skin,
    *,
    capsule_centers_scanner_mm: ArrayLike | None = None,
    capsule_mm: float | None = None,
    options: HeadOptions | None = None,
    progress: Progress | None = None,
) -> Head:
    """Make scalp, outer skull, inner skull and tissues from one T1 volume.

    Parameters
    ----------
    volume : Volume
        Whole-head T1, voxels of 0.7 to 1.5 mm for full accuracy.
    skin : Skin
        From `locator.skin.find_skin`, of the same volume.
    capsule_centers_scanner_mm : (N, 3) array_like, optional
        Capsules on the skin, scanner mm; they are replaced by air.
    capsule_mm : float, optional
        Their diameter.
    options : HeadOptions, optional
    progress : Progress, optional

    Returns
    -------
    Head
        Surfaces that are closed, outward and nested, never closer to each other than
        ``options.separation_mm``.

    Raises
    ------
    HeadError
        If the volume holds no head, no brain (skull-stripped volumes have no skull), or is too
        coarse or too short for one.

    Notes
    -----
    Errors against known surfaces: see ``tests/benchmarks/head.py``.
    """
    options = HeadOptions() if options is None else options
    report: Progress = (lambda _fraction, _words: None) if progress is None else progress
    report(0.0, "placing the head")
    grid = make_grid(
        volume,
        skin,
        capsule_centers_scanner_mm=capsule_centers_scanner_mm,
        capsule_mm=capsule_mm,
        below_vertex_mm=options.below_vertex_mm,
    )
    report(0.05, "finding the brain")
    brain = find_brain(grid, options.brain_threshold)
    if int(brain.mask.sum()) < LEAST_BRAIN_MM3:
        msg = (
            f"Only {brain.mask.sum() / 1000:.0f} mL of connected grey and white matter were found"
            " (stage head), too little for a brain. Check that the volume is a T1-weighted image of"
            " a whole head in the right orientation."
        )
        raise HeadError(msg)
    report(0.35, "telling tissues apart")
    labels = classify(brain.corrected, brain.mask, brain.mixture)
    closed = close(brain.mask, HULL_MM)
    distance = distance_to(closed) - distance_to(~closed)
    distance = distance - np.sign(distance).astype(np.float32) * 0.5
    offset = np.array([b.start for b in brain.box], dtype=float)
    center = np.array(ndimage.center_of_mass(closed))
    report(0.5, "following the skull")
    rays, faces = icosphere(4)
    ring = ring_neighbours(faces, len(rays))
    hull = mask_radii(distance, center, rays, float(np.linalg.norm(closed.shape)))
    angle = _angle(rays, ring)
    hull = limit_slope(hull, ring, angle, STEEPEST, outward=True)
    profile_image = grid.image / np.float32(brain.mixture.mean[1])
    profile_image[brain.box] = brain.corrected / np.float32(brain.mixture.mean[1])
    center = center + offset
    csf_level = _csf_level(brain, labels, distance)
    skull = find_skull(grid, profile_image, center, rays, ring, hull, csf_level, options)
    above = rays[:, 2] > 0.2
    room = float(np.median((skull.scalp - hull)[above]))
    if room < LEAST_ROOM_MM:
        msg = (
            f"Only {room:.1f} mm lie between the brain and the outline of the head on the vault"
            " (stage head): there is no skull in this volume, it looks skull-stripped."
            " Use the T1 as the scanner delivered it."
        )
        raise HeadError(msg)
    report(0.7, "making the surfaces")
    inner = np.maximum(smooth_on_sphere(skull.inner, ring, 1), hull + CLEAR_MM)
    inner = limit_slope(inner, ring, angle, STEEPEST, outward=True)
    outer = limit_slope(smooth_on_sphere(skull.outer, ring, 1), ring, angle, STEEPEST, outward=True)
    scalp = limit_slope(skull.scalp, ring, angle, STEEPEST, outward=False)
    model_rays, model_faces = icosphere(options.subdivisions)
    pick, weight = _onto(model_rays, rays)
    radii = [(values[pick] * weight).sum(axis=1) for values in (inner, outer, scalp)]
    corners, corner_weights = face_weights(rays, model_rays, model_faces)
    covering = cover(radii[0], hull + CLEAR_MM, corners, corner_weights, 4.0)
    on_vault = (skull.vault[pick] * weight).sum(axis=1) > 0.5
    # Where the outer table was only assumed it goes along with the inner one.
    radii[1] = radii[1] + np.where(on_vault, 0.0, covering - radii[0])
    radii[0] = covering
    least = options.separation_mm
    wanted_outer, wanted_scalp = radii[1].copy(), radii[2].copy()
    radii[1] = separate(radii[0], radii[1], model_rays, model_faces, least)
    radii[2] = separate(radii[1], radii[2], model_rays, model_faces, least)
    padded = np.maximum(radii[1] - wanted_outer, 0) + np.maximum(radii[2] - wanted_scalp, 0)
    # Coarse voxels blur thin bone: one millimetre more for 2 mm voxels (no source; cautious).
    blur = max(float(volume.voxel_mm.max()) - 1.0, 0.0)
    scalp_sd = np.full(len(model_rays), max(float(skin.sd_mm), 0.1))
    spreads = [
        (skull.inner_sd[pick] * weight).sum(axis=1),
        (skull.outer_sd[pick] * weight).sum(axis=1),
        scalp_sd,
    ]
    surfaces = [
        Surface(
            vertices_scanner_mm=apply_affine(
                grid.scanner_from_grid, center + model_rays * radius[:, None]
            ),
            faces=model_faces,
            sd_mm=np.sqrt(sd**2 + blur**2 + (0.5 * padded) ** 2),
        )
        for radius, sd in zip(radii, spreads, strict=True)
    ]
    report(0.8, "painting the tissue map")
    shape = grid.image.shape
    tissues = np.zeros(shape, dtype=np.uint8)
    tissues[grid.height_mm < 0] = SOFT
    dark = profile_image < 0.5 * csf_level
    tissues[(tissues == SOFT) & dark & (grid.height_mm < -4)] = OTHER
    tissues[fill_mesh(center + rays * outer[:, None], faces, shape)] = BONE
    in_skull = fill_mesh(center + rays * inner[:, None], faces, shape)
    tissues[in_skull] = CSF
    parts = label_parts(brain.corrected, brain.mask, brain.mixture.mean)
    inside = tissues[brain.box]
    within = in_skull[brain.box]
    inside[within & (labels == 2)] = GREY
    inside[within & (labels == 3)] = WHITE
    for label, where in parts.items():
        inside[within & where & (labels >= 2)] = label
    brain_ml = float((within & (labels >= 2)).sum()) / 1000.0
    on_t1 = _on_volume(tissues, grid.scanner_from_grid, volume)
    findings = check_head(
        volume,
        grid,
        brain,
        radii=radii,
        vault=on_vault,
        rays=model_rays,
        padded=padded,
        brain_ml=brain_ml,
        cerebellum_ml=float((inside == CEREBELLUM).sum()) / 1000.0,
    )
    report(1.0, "head done")
    logger.info("head: brain %.0f mL, leak %.2f, %d findings", brain_ml, brain.leak, len(findings))
    return Head(
        inner_skull=surfaces[0],
        outer_skull=surfaces[1],
        scalp=surfaces[2],
        tissues=on_t1,
        scanner_from_voxel=np.asarray(volume.scanner_from_voxel),
        center_scanner_mm=apply_affine(grid.scanner_from_grid, center),
        padded_mm=padded,
        brain_volume_ml=brain_ml,
        findings=findings,
    )


def _csf_level(brain: Brain, labels: NDArray[np.uint8], distance: NDArray[np.float32]) -> float:
    """Intensity of pure CSF in units of grey matter: the inside of the ventricles."""
    middle = 0.5 * (brain.mixture.mean[0] + brain.mixture.mean[1])
    fluid = (distance < -12) & (labels < 2) & (brain.corrected < middle)
    core = brain.corrected[ndimage.binary_erosion(fluid)]
    level = np.median(core) if len(core) > 300 else brain.mixture.mean[0]
    return float(level / brain.mixture.mean[1])


def _angle(rays: FloatArray, ring: NDArray[np.int32]) -> float:
    """Mean angle between neighbouring rays, rad."""
    return float(np.arccos(np.clip((rays[:, None] * rays[ring]).sum(axis=2), -1, 1)).mean())


def _onto(model_rays: FloatArray, rays: FloatArray) -> tuple[NDArray[np.int64], FloatArray]:
    """Rays near each model ray and their weights, so that values can be carried over."""
    spread = max(0.02, np.sqrt(4 * np.pi / max(len(model_rays), len(rays))) * 0.5)
    if len(model_rays) <= len(rays):
        first = np.argsort(-(model_rays @ rays.T), axis=1)[:, :7]
    else:
        first = np.argsort(-(model_rays @ rays.T), axis=1)[:, :3]
    distance = np.arccos(np.clip(np.einsum("vd,vnd->vn", model_rays, rays[first]), -1, 1))
    weight = np.exp(-0.5 * (distance / spread) ** 2)
    return first, weight / weight.sum(axis=1, keepdims=True)


def _on_volume(
    tissues: NDArray[np.uint8], scanner_from_grid: FloatArray, volume: Volume
) -> NDArray[np.int32]:
    """Labels of the working grid on the T1's own grid, nearest voxel, 0 beyond it."""
    grid_from_voxel = np.linalg.inv(scanner_from_grid) @ np.asarray(volume.scanner_from_voxel)
    moved = ndimage.affine_transform(
        tissues,
        grid_from_voxel[:3, :3],
        grid_from_voxel[:3, 3],
        output_shape=volume.intensity.shape,
        order=0,
        cval=0,
    )
    return moved.astype(np.int32)

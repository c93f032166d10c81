"""Figures of the head stage: real heads against what is known of them, invented heads exactly.

Run with ``python -m tests.benchmarks.head [real] [invented] [forward] [perturbed]``. Real heads come
from the package registries (see ``tests/real_heads.py``).
"""

from __future__ import annotations

import resource
import sys
import time

import nibabel as nib
import numpy as np
from scipy import ndimage
from scipy.spatial import cKDTree
from scipy.spatial.transform import Rotation

from locator.errors import LocatorError
from locator.forward import compute_lead_field, electrode_rows
from locator.geometry import apply_affine, mesh_volume_mm3
from locator.head import BRAIN_STEM, CEREBELLUM, GREY, WHITE, Head, Surface, build_head
from locator.head.cortex import find_cortex
from locator.head.morphology import close, distance_to
from locator.head.shape import distance_to_mesh, fill_mesh, separate
from locator.head.skull import mask_radii
from locator.markers import find_markers
from locator.skin import find_skin
from locator.sources import make_sources
from locator.volume import Volume, check_volume
from tests import real_heads
from tests.benchmarks.electrodes import Condition, regrid
from tests.painted import NAMES_61, painted_head

SURFACES = ("inner_skull", "outer_skull", "scalp")
VAULT = 0.15
"""Vault: rays that rise by more than this (sine of the elevation) from the brain's centre."""


def read(path) -> Volume:
    """Read a test volume."""
    image = nib.load(path)
    return check_volume(np.asarray(image.dataobj, dtype=np.float32).squeeze(), image.affine)


def solve(volume: Volume) -> tuple[Head, float]:
    """Head and processor seconds of the head stage alone (the skin stage is separate)."""
    skin = find_skin(volume)
    start = time.process_time()
    head = build_head(volume, skin)
    return head, time.process_time() - start


def radii(head: Head, name: str) -> np.ndarray:
    """Length of each ray up to a surface, mm."""
    points = getattr(head, name).vertices_scanner_mm
    return np.linalg.norm(points - head.center_scanner_mm, axis=1)


def vault(head: Head) -> np.ndarray:
    """Which rays go to the vault."""
    rays = head.inner_skull.vertices_scanner_mm - head.center_scanner_mm
    return rays[:, 2] / np.linalg.norm(rays, axis=1) > VAULT


def voxels_inside(vertices, faces, volume_affine, shape) -> np.ndarray:
    """Voxels of a grid that lie inside a closed scanner-space mesh."""
    inverse = np.linalg.inv(volume_affine)
    triangles = np.array(faces, dtype=np.int32)
    if mesh_volume_mm3(apply_affine(inverse, vertices), triangles) < 0:
        triangles = np.ascontiguousarray(triangles[:, ::-1])
    return fill_mesh(apply_affine(inverse, vertices), triangles, shape)


def inside(points, vertices, faces) -> np.ndarray:
    """Which points lie inside a closed mesh, by half-millimetre voxels."""
    low = np.floor(vertices.min(axis=0)) - 1
    shape = tuple(int(n) for n in 2 * (np.ceil(vertices.max(axis=0)) - low) + 3)
    mask = fill_mesh(2 * (np.asarray(vertices) - low), np.asarray(faces, dtype=np.int32), shape)
    at = np.rint(2 * (points - low)).astype(int)
    valid = ((at >= 0) & (at < shape)).all(axis=1)
    found = np.zeros(len(points), dtype=bool)
    found[valid] = mask[tuple(at[valid].T)]
    return found


def signed_distance(points, vertices, faces) -> np.ndarray:
    """Distance to a closed mesh, negative inside, cut off at 20 mm."""
    distance = distance_to_mesh(
        points, np.asarray(vertices, float), np.asarray(faces, np.int32), 20.0
    )
    return np.where(inside(points, np.asarray(vertices, float), faces), -distance, distance)


def dice(first, second) -> float:
    """Overlap of two masks."""
    return float(2 * (first & second).sum() / max(first.sum() + second.sum(), 1))


def describe(name: str, head: Head, seconds: float) -> None:
    """Print what needs no truth."""
    up = vault(head)
    bone = (radii(head, "outer_skull") - radii(head, "inner_skull"))[up]
    skin = (radii(head, "scalp") - radii(head, "outer_skull"))[up]
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
    print(
        f"{name}: {seconds:.1f} s, peak of the process so far {peak:.2f} GB, brain"
        f" {head.brain_volume_ml:.0f} mL, vault bone {bone.mean():.1f} mm (5-95 %:"
        f" {np.percentile(bone, 5):.1f}-{np.percentile(bone, 95):.1f}), scalp {skin.mean():.1f} mm,"
        f" {len(make_sources(head).positions_scanner_mm)} sources at 5 mm"
    )
    for finding in head.findings:
        print(f"    {finding.level}: {finding.problem}")


def s1_figures() -> None:
    """S1 against its pial and white surfaces."""
    volume = read(real_heads.s1())
    head, seconds = solve(volume)
    describe("S1", head, seconds)
    affine, shape = volume.scanner_from_voxel, volume.intensity.shape
    meshes = {}
    for name in ("pia_lh", "pia_rh", "wm_lh", "wm_rh"):
        data = nib.load(real_heads.s1_surface(name)).darrays
        meshes[name] = (data[0].data.astype(float), data[1].data.astype(np.int32))
    points = np.vstack([meshes["pia_lh"][0], meshes["pia_rh"][0]])
    inner = head.inner_skull
    share = inside(points, inner.vertices_scanner_mm, inner.faces).mean()
    masks = {
        kind: np.logical_or(
            *[voxels_inside(*meshes[f"{kind}_{side}h"], affine, shape) for side in "lr"]
        )
        for kind in ("pia", "wm")
    }
    hull = close(masks["pia"], 15)
    height = distance_to(hull) - distance_to(~hull)
    at = apply_affine(np.linalg.inv(affine), inner.vertices_scanner_mm)
    gap = ndimage.map_coordinates(height, at.T, order=1, mode="nearest")[vault(head)]
    ribbon = masks["pia"] & ~masks["wm"]
    cortex = np.asarray(find_cortex(head).vertices_scanner_mm)
    middle = np.vstack([0.5 * (meshes[f"pia_{s}h"][0] + meshes[f"wm_{s}h"][0]) for s in "lr"])
    there, back = cKDTree(middle).query(cortex)[0], cKDTree(cortex).query(middle)[0]
    near = (distance_to(masks["pia"]) <= 2) & (distance_to(~masks["pia"]) <= 4.5)
    grey = np.asarray(head.tissues) == GREY
    print(f"    pial vertices inside the inner skull: {100 * share:.2f} %")
    print(
        f"    inner skull minus pial hull (closed by 15 mm), vault: {gap.mean():.2f} +- {gap.std():.2f} mm"
    )
    print(
        f"    grey Dice against the ribbon: {dice(grey & near, ribbon & near):.3f} in the shell from"
        f" 2 mm outside to 4.5 mm inside the pia,"
        f" {dice(grey & (distance_to(masks['pia']) <= 2), ribbon):.3f} with deep grey matter"
    )

    print(
        f"    middle of the cortex: ours to the true one {there.mean():.2f} mm (95 %:"
        f" {np.quantile(there, 0.95):.2f}), back {back.mean():.2f} ({np.quantile(back, 0.95):.2f})"
    )


def ch2_figures() -> None:
    """Averaged head against its brain-extracted twin (itself automatic)."""
    volume = read(real_heads.ch2())
    head, seconds = solve(volume)
    describe("ch2", head, seconds)
    brain = np.asarray(nib.load(real_heads.ch2bet()).dataobj).squeeze() > 0
    ours = np.isin(np.asarray(head.tissues), (GREY, WHITE, BRAIN_STEM, CEREBELLUM))
    for radius in (8, 15):
        first, second = close(ours, radius), close(brain, radius)
        edges = []
        for one, other in ((first, second), (second, first)):
            edge = one & (distance_to(~one) < 1.5)
            edges.append(np.abs(distance_to(other) - distance_to(~other))[edge].mean() - 0.5)
        print(
            f"    both closed by {radius} mm: Dice {dice(first, second):.4f},"
            f" mean surface distance {np.mean(edges):.2f} mm"
        )


def invented_figures(seeds=range(1, 11)) -> None:
    """Invented heads and the layered ball against their exact surfaces."""
    from synthetic_heads import heads
    from synthetic_heads.scan import make_scan

    rows = []
    for kind, seed in [("sphere", 0), *[("shaped", seed) for seed in seeds]]:
        truth = heads.make_head(seed, kind)
        volume = check_volume(*make_scan(truth, None, seed=seed))
        head, seconds = solve(volume)
        describe(f"{kind} {seed}", head, seconds)
        up = vault(head)
        row = []
        for name in SURFACES:
            off = signed_distance(getattr(head, name).vertices_scanner_mm, *truth.surfaces[name])
            row += [np.abs(off[up]).mean(), off[up].mean(), np.abs(off[~up]).mean()]
            print(
                f"    {name}: vault |d| {row[-3]:.2f} mm, bias {row[-2]:+.2f}; base |d| {row[-1]:.2f}"
            )
        if kind == "shaped":
            rows.append(row)
    mean = np.mean(rows, axis=0)
    for k, name in enumerate(SURFACES):
        print(
            f"mean of {len(rows)} shaped heads, {name}: vault |d| {mean[3 * k]:.2f} mm,"
            f" bias {mean[3 * k + 1]:+.2f}; base |d| {mean[3 * k + 2]:.2f}"
        )


def on_rays(head: Head, mesh) -> Surface:
    """An exact surface as radii along the rays of ours, so that both have the same triangles."""
    vertices, faces = np.asarray(mesh[0], float), np.asarray(mesh[1], np.int32)
    low = np.floor(vertices.min(axis=0)) - 2
    shape = tuple(int(n) for n in 2 * (np.ceil(vertices.max(axis=0)) - low) + 5)
    mask = fill_mesh(2 * (vertices - low), faces, shape)
    height = distance_to(mask) - distance_to(~mask)
    height -= 0.5 * np.sign(height)
    rays = head.scalp.vertices_scanner_mm - head.center_scanner_mm
    rays /= np.linalg.norm(rays, axis=1, keepdims=True)
    radii = 0.5 * mask_radii(
        height, 2 * (head.center_scanner_mm - low), rays, float(np.linalg.norm(shape))
    )
    return Surface(
        vertices_scanner_mm=head.center_scanner_mm + radii[:, None] * rays,
        faces=head.scalp.faces,
        sd_mm=np.zeros(len(rays)),
    )


def forward_figures(seeds=range(1, 5)) -> None:
    """Lead fields with our surfaces against those with the exact ones, by depth of the source."""
    from synthetic_heads import heads
    from synthetic_heads.cap import make_cap
    from synthetic_heads.scan import make_scan

    # Distances are cut off at 20 mm: the last row is all that lies deeper than 15.
    edges = np.array([3.0, 6.0, 10.0, 15.0, 90.0])
    table = []
    for seed in seeds:
        truth = heads.make_head(seed, "shaped")
        head, _ = solve(check_volume(*make_scan(truth, None, seed=seed)))
        exact = {name: on_rays(head, truth.surfaces[name]) for name in SURFACES}
        outer = exact["outer_skull"]
        radii = [np.linalg.norm(exact[n].vertices_scanner_mm - head.center_scanner_mm, axis=1)
                 for n in SURFACES]  # fmt: skip
        rays = (outer.vertices_scanner_mm - head.center_scanner_mm) / radii[1][:, None]
        # The solver needs the separation that our surfaces have too.
        for low, high in ((0, 1), (1, 2)):
            radii[high] = separate(radii[low], radii[high], rays, np.asarray(outer.faces), 2.5)
        exact = {
            name: Surface(
                vertices_scanner_mm=head.center_scanner_mm + length[:, None] * rays,
                faces=outer.faces,
                sd_mm=np.zeros(len(rays)),
            )
            for name, length in zip(SURFACES, radii, strict=True)
        }
        sources = make_sources(head, spacing_mm=8.0).positions_scanner_mm
        inner = exact["inner_skull"]
        depth = -signed_distance(sources, inner.vertices_scanner_mm, inner.faces)
        sources, depth = sources[depth > 3.0], depth[depth > 3.0]
        cap = make_cap(*truth.surfaces["scalp"], truth.landmarks_mm, NAMES_61, seed)
        fields = []
        for surfaces in ({n: getattr(head, n) for n in SURFACES}, exact):
            lead = compute_lead_field(
                surfaces["scalp"], surfaces["outer_skull"], surfaces["inner_skull"], sources
            )
            rows = electrode_rows(lead, cap.contacts_mm)
            fields.append(rows - rows.mean(axis=0))
        ours, right = fields
        sizes = [np.sqrt((f**2).sum(axis=0)) for f in (ours, right)]
        rdm = np.sqrt((((ours / sizes[0]) - (right / sizes[1])) ** 2).sum(axis=0)).mean(axis=1)
        mag = (sizes[0] / sizes[1]).mean(axis=1)
        bins = np.digitize(depth, edges) - 1
        table.append(
            [[rdm[bins == k].mean(), mag[bins == k].mean()] for k in range(len(edges) - 1)]
        )
        print(f"shaped {seed}: {len(sources)} sources", flush=True)
    mean = np.mean(table, axis=0)
    for k, (rdm_mean, mag_mean) in enumerate(mean):
        print(
            f"from {edges[k]:.0f} mm inside the inner skull: RDM {rdm_mean:.3f},"
            f" MAG {mag_mean:.3f} (mean of {len(table)} shaped heads)"
        )


def disturbed(volume: Volume, reference: Head, which: str):
    """Yield a name, the disturbed volume, and the matrix that brings its world back."""
    image = np.asarray(volume.intensity)
    affine = np.asarray(volume.scanner_from_voxel)
    still = np.eye(4)
    white = float(np.median(image[np.asarray(reference.tissues) == WHITE]))
    ramp = np.linspace(-1, 1, image.shape[1])[None, :, None]
    rng = np.random.default_rng(0)
    yield "13 times brighter", check_volume(image * 13, affine), still
    for noise in (3, 6, 9):
        size = noise / 100 * white
        noisy = np.hypot(image + rng.normal(0, size, image.shape), rng.normal(0, size, image.shape))
        yield f"noise {noise} %", check_volume(noisy.astype(np.float32), affine), still
    for bias in (20, 45):
        shaded = (image * (1 + bias / 100 * ramp)).astype(np.float32)
        yield f"bias {bias} %", check_volume(shaded, affine), still
    for pitch in (-20, 20):
        turn = np.eye(4)
        turn[:3, :3] = Rotation.from_euler("x", pitch, degrees=True).as_matrix()
        turn[:3, 3] = reference.center_scanner_mm - turn[:3, :3] @ reference.center_scanner_mm
        # The head is turned within the grid, not the grid with the head.
        take = np.linalg.inv(affine) @ np.linalg.inv(turn) @ affine
        pitched = ndimage.affine_transform(image, take[:3, :3], take[:3, 3], order=3)
        pitched = np.maximum(pitched, 0.0).astype(np.float32)
        yield f"pitch {pitch:+d} degrees", check_volume(pitched, affine), np.linalg.inv(turn)
    grid = np.moveaxis(np.indices(image.shape, dtype=np.float32), 0, -1)
    away = grid @ affine[:3, :3].T.astype(np.float32) + (
        affine[:3, 3] - reference.center_scanner_mm
    ).astype(np.float32)
    faceless = np.where(0.8 * away[..., 1] - 0.6 * away[..., 2] > 82.0, 0.0, image)
    yield "face removed", check_volume(faceless.astype(np.float32), affine), still
    outside = distance_to(
        voxels_inside(
            reference.scalp.vertices_scanner_mm, reference.scalp.faces, affine, image.shape
        )
    )
    zeroed = np.where((outside > 6) & (away[..., 2] > -60.0), 0.0, image)
    yield "background zeroed", check_volume(zeroed.astype(np.float32), affine), still
    painted, its_affine, _ = painted_head(which, NAMES_61, 0)
    yield "61 painted capsules", check_volume(painted, its_affine), still


def perturbed_figures() -> None:
    """Shift of the surfaces on the vault when a real head is disturbed."""
    for name, path in (("S1", real_heads.s1()), ("ch2", real_heads.ch2())):
        volume = read(path)
        reference, _ = solve(volume)
        for label, changed, back in disturbed(volume, reference, name.lower()):
            skin = find_skin(changed)
            centers, capsule_mm = None, None
            if "capsules" in label:
                markers = find_markers(changed, skin)
                centers = markers.centers_scanner_mm[markers.score > 0.5]
                capsule_mm = markers.capsule_mm
            head = build_head(
                changed, skin, capsule_centers_scanner_mm=centers, capsule_mm=capsule_mm
            )
            words = []
            for surface in SURFACES:
                points = apply_affine(back, getattr(head, surface).vertices_scanner_mm)
                rays = points - reference.center_scanner_mm
                up = rays[:, 2] / np.linalg.norm(rays, axis=1) > VAULT
                other = getattr(reference, surface)
                shift = distance_to_mesh(points[up], other.vertices_scanner_mm, other.faces, 20.0)
                words.append(f"{surface} {shift.mean():.2f}")
            print(f"{name}, {label}: mean shift on the vault, mm: {', '.join(words)}", flush=True)
        for label, voxel in (("2 mm", (2.0, 2.0, 2.0)), ("1 x 1 x 3 mm", (1.0, 1.0, 3.0))):
            grid = Condition(title=label, count=61, cap={}, voxel_mm=voxel)
            coarse = check_volume(
                *regrid(np.asarray(volume.intensity), np.asarray(volume.scanner_from_voxel), grid)
            )
            try:
                head, _ = solve(coarse)
            except LocatorError as error:
                print(f"{name}, {label}: refused: {error}", flush=True)
                continue
            change = 100 * (head.brain_volume_ml / reference.brain_volume_ml - 1)
            told = [one.problem for one in head.findings if one.level == "look"]
            print(f"{name}, {label}: brain {change:+.1f} %; told: {told}", flush=True)


def main(parts: list[str]) -> None:
    """Print the tables asked for; all without an argument."""
    if not parts or "real" in parts:
        s1_figures()
        ch2_figures()
        volume = read(real_heads.low2mm())
        describe("2 mm head", *solve(volume))
    if not parts or "invented" in parts:
        invented_figures()
    if not parts or "forward" in parts:
        forward_figures()
    if not parts or "perturbed" in parts:
        perturbed_figures()


if __name__ == "__main__":
    main(sys.argv[1:])

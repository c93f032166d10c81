"""The head: shape guarantees, surfaces and tissues of heads with known answers, refusals."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from scipy import ndimage

from locator.errors import HeadError
from locator.geometry import apply_affine, icosphere, mesh_volume_mm3
from locator.head import (
    BONE,
    BRAIN_STEM,
    CEREBELLUM,
    CSF,
    GREY,
    SOFT,
    WHITE,
    Head,
    HeadOptions,
    build_head,
)
from locator.head.morphology import close, distance_to, largest_piece
from locator.head.parts import label_parts
from locator.head.shape import cover, distance_to_mesh, face_weights, fill_mesh, ring_neighbours
from locator.head.skull import _half_way, table_beyond
from locator.skin import Skin, find_skin
from locator.volume import Volume, check_volume
from tests import real_heads

SURFACES = ("inner_skull", "outer_skull", "scalp")
RADII = {"inner_skull": 76.0, "outer_skull": 82.0, "scalp": 88.0}


def ball_volume(
    *, voxel_mm=(1.0, 1.0, 1.0), noise: float = 2.0, seed: int = 0, turn: str = "RAS"
) -> Volume:
    """A ball of white matter, grey shell, CSF, bone and fat; contrast as in a usual T1."""
    size = np.ceil(200 / np.array(voxel_mm)).astype(int)
    axes = [(np.arange(n) - (n - 1) / 2) * s for n, s in zip(size, voxel_mm, strict=True)]
    radius = np.sqrt(sum(a**2 for a in np.meshgrid(*axes, indexing="ij", sparse=True)))
    image = np.zeros(radius.shape)
    soft = 0.5 * float(np.mean(voxel_mm))
    for outer, level in ((88, 190.0), (82, 6.0), (76, 25.0), (73.5, 72.0), (66, 105.0)):
        share = np.clip((outer - radius) / (2 * soft) + 0.5, 0, 1)
        image = image * (1 - share) + level * share
    # A dark middle stands for the ventricles.
    share = np.clip((12 - radius) / (2 * soft) + 0.5, 0, 1)
    image = image * (1 - share) + 25.0 * share
    rng = np.random.default_rng(seed)
    image = np.hypot(
        image + rng.normal(0, noise, image.shape), rng.normal(0, noise, image.shape)
    ).astype(np.float32)
    affine = np.diag([*voxel_mm, 1.0])
    affine[:3, 3] = [-a[-1] for a in axes] + np.array([3.0, -5.0, 7.0])
    if turn == "LIA":
        image = np.ascontiguousarray(image.transpose(0, 2, 1)[::-1, ::-1])
        turned = np.zeros((4, 4))
        turned[0, 0], turned[2, 1], turned[1, 2], turned[3, 3] = (
            -voxel_mm[0],
            -voxel_mm[2],
            voxel_mm[1],
            1,
        )
        corner = affine[:3, 3] + [
            voxel_mm[0] * (size[0] - 1),
            0.0,
            voxel_mm[2] * (size[2] - 1),
        ]
        turned[:3, 3] = corner
        affine = turned
    return check_volume(image, affine)


CENTER = np.array([3.0, -5.0, 7.0])


def ball_skin(radius_mm: float = 88.0) -> Skin:
    """The exact skin of the ball, so that these tests rest on the head stage alone."""
    affine = np.eye(4)
    affine[:3, 3] = CENTER - 99.5
    axis = np.arange(200) - 99.5
    height = np.sqrt(sum(a**2 for a in np.meshgrid(axis, axis, axis, sparse=True))) - radius_mm
    rays, faces = icosphere(4)
    return Skin(
        height_map_mm=height.astype(np.float32),
        scanner_from_grid=affine,
        vertices_scanner_mm=CENTER + radius_mm * rays,
        faces=faces,
        sd_mm=0.2,
        noise_sd=2.0,
        fat_intensity=190.0,
    )


@cache
def ball_head() -> tuple[Volume, Skin, Head]:
    volume = ball_volume()
    skin = ball_skin()
    return volume, skin, build_head(volume, skin)


def distances(points, center=CENTER):
    return np.linalg.norm(points - center, axis=1)


def test_surfaces_of_a_layered_ball_lie_at_its_radii():
    _, _, head = ball_head()
    for name in SURFACES:
        off = distances(getattr(head, name).vertices_scanner_mm) - RADII[name]
        # 1 mm voxels with noise: the places of the tables are searched in steps of 0.5 mm.
        assert np.abs(off).mean() < 0.8, name
        assert np.abs(off).max() < 2.5, name


def test_surfaces_are_closed_outward_and_share_their_faces():
    _, _, head = ball_head()
    for name in SURFACES:
        surface = getattr(head, name)
        edges = np.sort(surface.faces[:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2), axis=1)
        _, counts = np.unique(edges, axis=0, return_counts=True)
        assert (counts == 2).all()
        assert len(surface.vertices_scanner_mm) - len(counts) + len(surface.faces) == 2  # genus 0
        assert mesh_volume_mm3(surface.vertices_scanner_mm, surface.faces) > 1e6
        assert np.array_equal(surface.faces, head.scalp.faces)


def test_surfaces_keep_their_separation_vertex_to_face():
    _, _, head = ball_head()
    pairs = (("inner_skull", "outer_skull"), ("outer_skull", "scalp"))
    for first, second in pairs:
        a, b = getattr(head, first), getattr(head, second)
        for one, other in ((a, b), (b, a)):
            gap = distance_to_mesh(
                one.vertices_scanner_mm, other.vertices_scanner_mm, other.faces, 20.0
            )
            assert gap.min() >= 2.5 - 1e-6


def test_tissues_lie_in_their_layers():
    volume, _, head = ball_head()
    index = np.stack(
        np.meshgrid(*[np.arange(n) for n in volume.intensity.shape], indexing="ij"), -1
    )
    radius = np.linalg.norm(apply_affine(volume.scanner_from_voxel, index) - CENTER, axis=-1)
    tissues = np.asarray(head.tissues)
    assert (tissues[(radius > 20) & (radius < 64)] == WHITE).mean() > 0.98
    assert (tissues[(radius > 67.5) & (radius < 72)] == GREY).mean() > 0.95
    assert (tissues[radius < 10] == CSF).mean() > 0.9
    assert (tissues[(radius > 78) & (radius < 80.5)] == BONE).mean() > 0.95
    assert (tissues[(radius > 84) & (radius < 86)] == SOFT).mean() > 0.95
    assert not np.isin(tissues[radius > 90], (GREY, WHITE, CSF, BONE)).any()


def test_a_ball_has_no_cerebellum_and_no_brain_stem_and_that_is_said():
    _, _, head = ball_head()
    assert any("No cerebellum" in one.problem and one.level == "look" for one in head.findings)
    assert not np.isin(np.asarray(head.tissues), (CEREBELLUM, BRAIN_STEM)).any()


def test_stored_axis_order_does_not_move_the_surfaces():
    # The same scan stored left-inferior-anterior: noise is the same, so nothing may change.
    _, _, head = ball_head()
    volume = ball_volume(turn="LIA")
    other = build_head(volume, ball_skin())
    for name in SURFACES:
        first = getattr(head, name).vertices_scanner_mm
        second = getattr(other, name).vertices_scanner_mm
        assert np.abs(first - second).max() < 0.05, name
    assert other.tissues.shape == volume.intensity.shape


@pytest.mark.parametrize("voxel_mm", [(1.4, 1.2, 1.3)])
def test_other_voxel_sizes_give_the_same_surfaces(voxel_mm):
    volume = ball_volume(voxel_mm=voxel_mm)
    head = build_head(volume, ball_skin())
    for name in SURFACES:
        off = distances(getattr(head, name).vertices_scanner_mm) - RADII[name]
        assert np.abs(off).mean() < 1.0, name
    assert head.tissues.shape == volume.intensity.shape


def test_coarse_voxels_work_with_a_wider_uncertainty_and_say_so():
    _, _, fine = ball_head()
    volume = ball_volume(voxel_mm=(2.0, 2.0, 2.0))
    head = build_head(volume, ball_skin())
    assert head.inner_skull.sd_mm.mean() > fine.inner_skull.sd_mm.mean() + 0.3
    assert any("2.0" in f.problem and "coarse" in f.problem for f in head.findings)
    off = distances(head.inner_skull.vertices_scanner_mm) - RADII["inner_skull"]
    assert np.abs(off).mean() < 2.0


def test_intensity_scale_does_not_matter():
    volume, _, head = ball_head()
    scaled = check_volume(np.asarray(volume.intensity) * 13, volume.scanner_from_voxel)
    other = build_head(scaled, ball_skin())
    for name in SURFACES:
        shift = getattr(other, name).vertices_scanner_mm - getattr(head, name).vertices_scanner_mm
        assert np.linalg.norm(shift, axis=1).mean() < 0.1, name


def test_capsules_are_taken_out():
    volume, _, head = ball_head()
    image = np.array(volume.intensity)
    index = np.stack(np.meshgrid(*[np.arange(n) for n in image.shape], indexing="ij"), -1)
    places = apply_affine(volume.scanner_from_voxel, index)
    rays = icosphere(1)[0]
    centers = CENTER + 95.0 * rays[rays[:, 2] > -0.3]
    for center in centers:
        image[((places - center) ** 2).sum(-1) < 5.0**2] = 210.0
    painted = check_volume(image, volume.scanner_from_voxel)
    worn = build_head(
        painted,
        ball_skin(),
        capsule_centers_scanner_mm=centers,
        capsule_mm=10.0,
    )
    for name in SURFACES:
        shift = getattr(worn, name).vertices_scanner_mm - getattr(head, name).vertices_scanner_mm
        assert np.linalg.norm(shift, axis=1).mean() < 0.3, name
    near = min(distances(worn.scalp.vertices_scanner_mm, center).min() for center in centers)
    # The skin is 7 mm below the centres: a surface over a capsule would come within 5.
    assert near > 5.0


def test_more_vertices_on_request():
    volume, skin, head = ball_head()
    fine = build_head(volume, skin, options=HeadOptions(subdivisions=4))
    assert len(fine.scalp.vertices_scanner_mm) == 2562
    assert len(head.scalp.vertices_scanner_mm) == 642
    off = distances(fine.inner_skull.vertices_scanner_mm) - RADII["inner_skull"]
    assert np.abs(off).mean() < 0.8


def test_the_same_input_gives_the_same_head():
    volume, skin, head = ball_head()
    again = build_head(volume, skin)
    for name in SURFACES:
        assert np.array_equal(
            getattr(again, name).vertices_scanner_mm, getattr(head, name).vertices_scanner_mm
        )
    assert np.array_equal(again.tissues, head.tissues)


def test_the_input_is_left_alone():
    volume, skin, _ = ball_head()
    before = np.array(volume.intensity)
    build_head(volume, skin, capsule_centers_scanner_mm=(CENTER + np.array([0, 0, 95.0]))[None])
    assert np.array_equal(before, volume.intensity)


def test_a_skull_stripped_brain_is_refused():
    volume = ball_volume(noise=0.0)
    image = np.array(volume.intensity)
    index = np.stack(np.meshgrid(*[np.arange(n) for n in image.shape], indexing="ij"), -1)
    radius = np.linalg.norm(apply_affine(volume.scanner_from_voxel, index) - CENTER, axis=-1)
    image[radius > 74] = 0
    stripped = check_volume(image, volume.scanner_from_voxel)
    with pytest.raises(HeadError, match="skull-stripped"):
        build_head(stripped, ball_skin(74.0))


def test_noise_is_refused():
    volume, skin, _ = ball_head()
    rng = np.random.default_rng(0)
    noise = np.abs(rng.normal(0, 50, volume.intensity.shape)).astype(np.float32)
    with pytest.raises(HeadError, match=r"stage head"):
        build_head(check_volume(noise, volume.scanner_from_voxel), skin)


def test_one_brightness_is_refused():
    volume, skin, _ = ball_head()
    image = np.where(np.asarray(volume.intensity) > 4, 100.0, 0.0).astype(np.float32)
    with pytest.raises(HeadError, match=r"stage head"):
        build_head(check_volume(image, volume.scanner_from_voxel), skin)


def test_a_skin_of_another_place_is_refused():
    volume, skin, _ = ball_head()
    affine = np.array(skin.scanner_from_grid)
    affine[:3, 3] += 500
    elsewhere = Skin(
        height_map_mm=skin.height_map_mm,
        scanner_from_grid=affine,
        vertices_scanner_mm=skin.vertices_scanner_mm,
        faces=skin.faces,
        sd_mm=skin.sd_mm,
        noise_sd=skin.noise_sd,
        fat_intensity=skin.fat_intensity,
    )
    with pytest.raises(HeadError, match="do not lie over each other"):
        build_head(volume, elsewhere)


@pytest.mark.parametrize(
    ("name", "value"), [("subdivisions", 7), ("separation_mm", 1.0), ("skull_mm", 40.0)]
)
def test_options_outside_their_range_are_refused(name, value):
    with pytest.raises(HeadError, match=name):
        HeadOptions(**{name: value})


def test_distance_transform_agrees_with_another_one():
    rng = np.random.default_rng(0)
    mask = rng.random((17, 23, 19)) > 0.97
    assert np.allclose(distance_to(mask), ndimage.distance_transform_edt(~mask), atol=1e-4)


def test_closing_fills_a_crack_but_not_a_bay():
    mask = np.zeros((40, 40, 40), dtype=bool)
    mask[8:32, 8:32, 8:32] = True
    mask[19:21, 8:32, 20:32] = False
    closed = close(mask, 4)
    assert closed[20, 20, 28]
    wide = mask.copy()
    wide[13:27, 8:32, 20:32] = False
    assert not close(wide, 4)[20, 20, 28]
    assert largest_piece(np.zeros((3, 3, 3), dtype=bool)).sum() == 0


def test_filled_mesh_has_the_mesh_volume():
    rays, faces = icosphere(3)
    points = rays * [30.0, 22.0, 26.0] + 40.0
    mask = fill_mesh(points, faces, (80, 80, 80))
    assert mask.sum() == pytest.approx(mesh_volume_mm3(points, faces), rel=0.002)


def test_point_to_mesh_distance_of_a_sphere():
    rays, faces = icosphere(4)
    points = np.array([[0.0, 0, 13], [0, 7, 0], [0, 0, 40]])
    found = distance_to_mesh(points, rays * 10, faces, 8.0)
    # The faces lie up to 0.03 mm inside the sphere of 10 mm; 40 is beyond the limit.
    assert found == pytest.approx([3.0, 3.0, 8.0], abs=0.04)


def _skull_profile(table: float) -> np.ndarray:
    """Brain, fluid, inner table, marrow, outer table, galea, fat, air every half millimetre."""
    layers = (
        (1.0, 8),  # 4 mm of brain before the hull
        (0.2, 4),
        (0.1, 4),
        (2.2, 5),
        (table, 2),
        (0.8, 2),
        (3.3, 8),
        (0.05, 43),
    )
    return np.concatenate([np.full(count, level) for level, count in layers])


@pytest.mark.parametrize("table", [0.1, 0.35, 0.5])
def test_marrow_is_not_taken_for_scalp(table):
    profile = np.tile(_skull_profile(table), (3, 1))
    marrow, galea = 16, 23  # first sample beyond the inner table, beyond the outer one
    clear = table_beyond(profile, np.array([marrow, galea]), np.full(3, 32.0))
    assert clear[:, 0].min() > 0.7
    assert clear[:, 1].max() == 0.0
    # Without an outer table beyond it, the bright layer is the scalp.
    plain = np.tile(np.where(np.arange(76) == 21, 2.2, _skull_profile(2.2)), (3, 1))
    plain[:, 23:25] = 2.2
    assert table_beyond(plain, np.array([marrow]), np.full(3, 32.0)).max() == 0.0


@pytest.mark.parametrize("start", [-1.0, 0.0, 0.8])
def test_the_outer_table_ends_where_the_first_soft_layer_begins(start):
    rays, faces = icosphere(1)
    ring = ring_neighbours(faces, len(rays))
    profile = np.tile(_skull_profile(0.1), (len(rays), 1))
    edge = 0.5 * 22.5 - 4.0  # between sample 22 (table) and 23 (galea), from the hull
    found = _half_way(profile, 4.0, np.full(len(rays), edge + start), ring)
    np.testing.assert_allclose(found, edge, atol=0.15)


def test_ring_neighbours_are_neighbours_in_order():
    rays, faces = icosphere(2)
    ring = ring_neighbours(faces, len(rays))
    edges = {tuple(sorted(e)) for f in faces for e in ((f[0], f[1]), (f[1], f[2]), (f[2], f[0]))}
    for vertex, around in enumerate(ring):
        assert all(tuple(sorted((vertex, int(n)))) in edges for n in around)
        valence = len(set(around.tolist()))
        follow = [(around[k], around[(k + 1) % valence]) for k in range(valence)]
        assert all(tuple(sorted((int(a), int(b)))) in edges for a, b in follow)


def test_cover_holds_the_points_it_must():
    fine, _ = icosphere(4)
    rays, faces = icosphere(2)
    corners, weights = face_weights(fine, rays, faces)
    assert (weights > -1e-9).all()
    least = 50 + 3 * np.sin(3 * fine[:, 0]) + 2 * fine[:, 2]
    radii = cover(np.full(len(rays), 45.0), least, corners, weights, 20.0)
    assert (1 / (weights / radii[corners]).sum(axis=1) >= least - 0.03).all()


def _real_head(path) -> tuple[Volume, Head]:
    import nibabel as nib

    image = nib.load(path)
    volume = check_volume(np.asarray(image.dataobj, dtype=np.float32).squeeze(), image.affine)
    return volume, build_head(volume, find_skin(volume))


@pytest.mark.real_head
def test_pial_vertices_of_a_real_head_lie_inside_the_inner_skull():
    import nibabel as nib

    volume, head = _real_head(real_heads.s1())
    inner = head.inner_skull
    pia = np.vstack(
        [nib.load(real_heads.s1_surface(n)).darrays[0].data for n in ("pia_lh", "pia_rh")]
    )
    low = np.floor(np.asarray(inner.vertices_scanner_mm).min(axis=0)) - 2
    shape = tuple(int(n) for n in 2 * (np.asarray(inner.vertices_scanner_mm).max(axis=0) - low) + 8)
    mask = fill_mesh(2 * (inner.vertices_scanner_mm - low), inner.faces, shape)
    at = np.rint(2 * (pia - low)).astype(int)
    valid = ((at >= 0) & (at < shape)).all(axis=1)
    share = mask[tuple(at[valid].T)].sum() / len(pia)
    assert share >= 0.995
    # 1.5 to 3.5 mm of CSF on the vault: the inner skull must not simply be far out.
    assert 1150 <= mesh_volume_mm3(inner.vertices_scanner_mm, inner.faces) / 1000 <= 1750
    ml = abs(np.linalg.det(volume.scanner_from_voxel[:3, :3])) / 1000
    tissues = np.asarray(head.tissues)
    assert 90 < (tissues == CEREBELLUM).sum() * ml < 180
    assert 15 < (tissues == BRAIN_STEM).sum() * ml < 50


@pytest.mark.real_head
def test_the_cerebellum_of_a_real_head_is_as_large_as_usual():
    _, head = _real_head(real_heads.s1())
    assert not any("cerebellum" in one.problem.lower() for one in head.findings)


@pytest.mark.real_head
def test_brain_of_the_averaged_head_agrees_with_its_extracted_twin():
    import nibabel as nib

    _, head = _real_head(real_heads.ch2())
    twin = np.asarray(nib.load(real_heads.ch2bet()).dataobj).squeeze() > 0
    ours = np.isin(np.asarray(head.tissues), (GREY, WHITE, BRAIN_STEM, CEREBELLUM))
    first, second = close(ours, 15), close(twin, 15)
    dice = 2 * (first & second).sum() / (first.sum() + second.sum())
    # The twin was made automatically too and holds the basal cisterns.
    assert dice > 0.975


@pytest.mark.real_head
def test_a_coarse_real_head_works_and_says_so():
    _, head = _real_head(real_heads.low2mm())
    assert any("coarse" in f.problem for f in head.findings)
    assert 1200 < head.brain_volume_ml < 1700


def test_parts_need_a_brain_below():
    # A small ball all of whose voxels are above the cerebellum's seeds still gets an answer.
    mask = np.zeros((60, 60, 60), dtype=bool)
    mask[20:40, 20:40, 20:40] = True
    corrected = np.where(mask, 100.0, 0.0).astype(np.float32)
    parts = label_parts(corrected, mask, np.array([30.0, 70.0, 100.0]))
    assert set(parts) == {CEREBELLUM, BRAIN_STEM}
    assert not any((p & ~mask).any() for p in parts.values())

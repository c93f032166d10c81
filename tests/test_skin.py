"""The skin: found to a fraction of a voxel, whatever sits on it, or refused with the reason."""

from __future__ import annotations

import nibabel as nib
import numpy as np
import pytest
from scipy.spatial import cKDTree

from locator.errors import SettingError, SkinError
from locator.geometry import mesh_volume_mm3
from locator.skin import SkinOptions, find_skin, height_mm, project_to_skin, skin_normals
from locator.volume import Volume, check_volume
from tests import real_heads
from tests.sphere_scan import (
    CENTER_MM,
    RADIUS_MM,
    Scene,
    affine,
    directions,
    on_the_skin,
    scan,
    volume,
)

NOBODY = np.zeros((0, 3))
AROUND = directions(300, lowest=-0.8)


def on_sphere(over_mm: float) -> np.ndarray:
    return CENTER_MM + AROUND * (RADIUS_MM + over_mm)


@pytest.mark.parametrize("voxel_mm", [(1.0, 1.0, 1.0), (2.0, 2.0, 2.0), (1.0, 2.5, 1.0)])
def test_heights_over_a_sphere_are_exact_to_a_fraction_of_a_voxel(voxel_mm):
    skin = find_skin(volume(Scene(NOBODY), voxel_mm=voxel_mm, noise=0.02))
    for over in (-2.0, 0.0, 3.0, 10.0):
        error = height_mm(skin, on_sphere(over)) - over
        # One-sided on purpose: where a voxel cannot part skin and fat, the edge lies deeper.
        assert -0.3 < error.mean() < 0.2 + 0.25 * max(0, max(voxel_mm) - 1)
        assert error.std() < 0.12 * max(voxel_mm)


def test_normals_and_feet_on_a_sphere():
    skin = find_skin(volume(Scene(NOBODY), noise=0.02))
    points = on_sphere(6.0)
    normals = skin_normals(skin, points)
    np.testing.assert_allclose(np.linalg.norm(normals, axis=1), 1, atol=1e-9)
    assert np.degrees(np.arccos((normals * AROUND).sum(axis=1))).mean() < 1.5
    feet = project_to_skin(skin, points)
    assert np.abs(height_mm(skin, feet)).max() < 0.02
    assert np.linalg.norm(feet - on_sphere(0.0), axis=1).mean() < 0.4


def test_mesh_is_closed_and_outward():
    skin = find_skin(volume(Scene(NOBODY)))
    edges = np.sort(skin.faces[:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2), axis=1)
    _, shared = np.unique(edges, axis=0, return_counts=True)
    assert (shared == 2).all()
    exact = 4 / 3 * np.pi * RADIUS_MM**3
    assert mesh_volume_mm3(skin.vertices_scanner_mm, skin.faces) == pytest.approx(exact, rel=0.02)


@pytest.mark.parametrize(
    ("radii_mm", "gap_mm"), [((4.0, 3.0), 0.0), ((6.0, 6.0), 0.0), ((6.0, 2.5), 1.0), ((4, 4), 8)]
)
def test_capsules_neither_lift_nor_dent_the_skin(radii_mm, gap_mm):
    centers = on_the_skin(24, gap_mm, radii_mm[1])
    skin = find_skin(volume(Scene(centers, radii_mm=radii_mm, shade=0.3), noise=0.02))
    bare = find_skin(volume(Scene(NOBODY), noise=0.02))
    under = CENTER_MM + directions(24) * RADIUS_MM
    moved = height_mm(skin, under) - height_mm(bare, under)
    assert np.abs(moved).max() < 0.5
    assert np.abs(moved.mean()) < 0.2


def test_brightness_scale_and_bias_do_not_move_the_skin():
    matrix, shape = affine()
    image = scan(Scene(NOBODY), matrix, shape, noise=0.02)
    ramp = np.linspace(-0.4, 0.4, shape[0])[:, None, None].astype(np.float32)
    plain = height_mm(find_skin(check_volume(image, matrix)), on_sphere(0))
    tiny = height_mm(find_skin(check_volume(image * 1e-4, matrix)), on_sphere(0))
    biased = height_mm(find_skin(check_volume(image * np.exp(ramp), matrix)), on_sphere(0))
    np.testing.assert_allclose(tiny, plain, atol=0.02)
    assert np.abs(biased - plain).max() < 0.6


def test_a_head_cut_by_the_field_of_view_is_found_where_it_is_seen():
    matrix, shape = affine()
    image = scan(Scene(NOBODY), matrix, shape, noise=0.02)
    cut = 40
    matrix = matrix.copy()
    matrix[:3, 3] += matrix[:3, :3] @ [0, 0, cut]
    skin = find_skin(check_volume(image[:, :, cut:], matrix))
    seen = on_sphere(0)[:, 2] > matrix[2, 3] + 12
    assert np.abs(height_mm(skin, on_sphere(0))[seen]).max() < 0.9


def test_a_head_cut_at_the_far_ends_of_the_array_is_no_trouble():
    matrix, shape = affine()
    image = scan(Scene(NOBODY), matrix, shape, noise=0.02)
    for stop in range(108, 113):
        cut = np.ascontiguousarray(image[:stop, : stop + 1])
        height = height_mm(find_skin(check_volume(cut, matrix)), on_sphere(0))
        inside = (matrix[:2, 3] + matrix[0, 0] * (stop - 8) > on_sphere(0)[:, :2]).all(axis=1)
        assert np.abs(height[inside]).max() < 0.9


def test_zeroed_background_is_no_trouble():
    matrix, shape = affine()
    image = scan(Scene(NOBODY), matrix, shape, noise=0.02)
    image[image < 40] = 0
    error = height_mm(find_skin(check_volume(image, matrix)), on_sphere(0))
    assert np.abs(error).max() < 0.9


def refused(image: np.ndarray, match: str) -> None:
    matrix, _ = affine()
    with pytest.raises(SkinError, match=match):
        find_skin(check_volume(image, matrix))


def test_what_is_no_head_is_refused():
    matrix, shape = affine()
    rng = np.random.default_rng(0)
    refused(np.abs(rng.normal(size=shape)), "head|noisy|tissue")
    bottle = Scene(NOBODY, layers=((0.0, 1.0),))
    refused(scan(bottle, matrix, shape, noise=0.02), "not a head")
    ball = Scene(NOBODY, radius_mm=40.0)
    refused(scan(ball, matrix, shape, noise=0.02), r"holds 0\.\d+ L")
    # A brain already extracted: grey and white matter, no bone over them.
    brain = Scene(NOBODY, layers=((0.0, 0.35), (3.0, 0.5)))
    refused(scan(brain, matrix, shape, noise=0.02), "not a head")
    capsules = Scene(on_the_skin(), layers=((0.0, 0.0),))
    refused(scan(capsules, matrix, shape, noise=0.02), "head|body")


@pytest.mark.parametrize("setting", [{"threshold": 0.9}, {"opening_mm": 1.0}])
def test_settings_out_of_range_are_named(setting):
    with pytest.raises(SettingError, match=next(iter(setting))):
        SkinOptions(**setting)


def real(path) -> Volume:
    image = nib.load(path)
    return check_volume(image.get_fdata(dtype=np.float32), image.affine)


@pytest.mark.real_head
@pytest.mark.parametrize("which", ["s1", "ch2", "low2mm"])
def test_skin_of_a_real_head_lies_on_its_edge(which):
    scan_ = real(getattr(real_heads, which)())
    skin = find_skin(scan_)
    vertices = skin.vertices_scanner_mm
    top = vertices[:, 2].max()
    vault = vertices[(vertices[:, 2] > top - 90)][::7]
    normals = skin_normals(skin, vault)
    # Bright under the line, dark over it: where nothing of the volume's edge is near.
    index = np.linalg.inv(scan_.scanner_from_voxel)
    values = []
    for over in (-2.0, 2.5):
        places = (index[:3, :3] @ (vault + over * normals).T).T + index[:3, 3]
        inside = ((places > 1) & (places < np.array(scan_.intensity.shape) - 2)).all(axis=1)
        nearest = np.clip(np.rint(places).astype(int), 0, np.array(scan_.intensity.shape) - 1)
        values.append(np.where(inside, scan_.intensity[tuple(nearest.T)], np.nan))
    under, over = values
    both = np.isfinite(under) & np.isfinite(over)
    assert np.mean(under[both] > 2 * over[both] + 0.02 * skin.fat_intensity) > 0.95
    assert 0 < skin.sd_mm < 0.5
    assert skin.fat_intensity > 5 * skin.noise_sd


@pytest.mark.real_head
def test_skin_agrees_with_a_threshold_surface_on_the_vault():
    # An independent surface, made by test code: threshold and marching cubes.
    from tests.painted import real_head

    head = real_head("s1")
    skin = find_skin(check_volume(head.intensity, head.scanner_from_voxel))
    vault = head.vertices_mm[:, 2] > head.landmarks_mm["NAS"][2] + 30
    away, _ = cKDTree(skin.vertices_scanner_mm).query(head.vertices_mm[vault][::5])
    # Vertices are 2 mm apart: half of that is the best there can be.
    assert np.median(away) < 1.2
    assert np.abs(np.median(height_mm(skin, head.vertices_mm[vault]))) < 0.6

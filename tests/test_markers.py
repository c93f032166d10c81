"""Capsules: all found, to a fraction of a voxel, with an honest covariance; or the reason why not."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.spatial import cKDTree
from scipy.stats import chi2

from locator.errors import MarkerError, SettingError
from locator.markers import MarkerOptions, Markers, find_markers
from locator.skin import find_skin
from locator.volume import Volume, check_volume
from tests.sphere_scan import CENTER_MM, Scene, affine, on_the_skin, scan, volume

NOBODY = np.zeros((0, 3))


def found(volume_: Volume, options: MarkerOptions | None = None) -> Markers:
    return find_markers(volume_, find_skin(volume_), options=options)


def errors(markers: Markers, truth: np.ndarray) -> np.ndarray:
    """Offsets of the markers with score > 0.5 nearest to each true centre."""
    likely = markers.centers_scanner_mm[markers.score > 0.5]
    _, nearest = cKDTree(likely).query(truth)
    return likely[nearest] - truth


def check_all_found(markers: Markers, truth: np.ndarray, mean_mm: float) -> None:
    away = np.linalg.norm(errors(markers, truth), axis=1)
    assert away.max() < 2.0
    assert away.mean() < mean_mm
    likely = markers.centers_scanner_mm[markers.score > 0.5]
    strays, _ = cKDTree(truth).query(likely)
    assert (strays > 3).sum() <= 0.05 * len(truth)


@pytest.mark.parametrize(
    ("radii_mm", "gap_mm", "brightness", "voxel_mm"),
    [
        ((4.0, 3.0), 1.5, 1.1, (1.5, 1.5, 1.5)),
        ((2.0, 2.0), 0.0, 1.1, (1.0, 1.0, 1.0)),
        ((6.0, 6.0), 8.0, 0.5, (1.5, 1.5, 1.5)),
        ((6.0, 2.5), 1.0, 1.5, (1.5, 1.5, 1.5)),
        ((4.0, 3.0), 0.0, 0.7, (1.0, 1.0, 2.5)),
        ((4.0, 3.0), 1.5, 1.1, (2.0, 2.0, 2.0)),
    ],
)
def test_capsules_of_every_kind_are_found(radii_mm, gap_mm, brightness, voxel_mm):
    truth = on_the_skin(24, gap_mm, radii_mm[1])
    scene = Scene(truth, radii_mm=radii_mm, brightness=brightness)
    markers = found(volume(scene, noise=0.02, voxel_mm=voxel_mm))
    check_all_found(markers, truth, 0.12 * max(voxel_mm))
    ball = 2 * (radii_mm[0] ** 2 * radii_mm[1]) ** (1 / 3)
    assert markers.capsule_mm == pytest.approx(ball, rel=0.2)
    likely = markers.score > 0.5
    assert np.median(markers.skin_mm[likely]) == pytest.approx(gap_mm + radii_mm[1], abs=0.7)
    assert np.median(markers.contrast[likely]) == pytest.approx(brightness, rel=0.25)
    assert np.all(np.diff(markers.score) <= 0)


def test_covariance_matches_the_errors():
    truth = on_the_skin(40)
    squares = []
    for seed in range(2):
        markers = found(volume(Scene(truth, brightness=0.8), noise=0.06, seed=seed))
        likely = markers.score > 0.5
        tree = cKDTree(markers.centers_scanner_mm[likely])
        _, nearest = tree.query(truth)
        offset = markers.centers_scanner_mm[likely][nearest] - truth
        covariance = markers.covariance_mm2[likely][nearest]
        squares += list(np.einsum("ni,nij,nj->n", offset, np.linalg.inv(covariance), offset))
    inside = np.mean(np.array(squares) < chi2.ppf(0.95, 3))
    assert inside > 0.88
    # And not so wide that it says nothing: the median of chi2 with 3 degrees is 2.4.
    assert np.median(squares) > 0.3


def test_a_head_without_capsules_is_refused_with_the_reason():
    with pytest.raises(MarkerError, match=r"Found \d+ blobs.*not fat-suppressed"):
        found(volume(Scene(NOBODY), noise=0.02))


def test_suppressed_fat_is_named():
    dark = ((0.0, 0.25), (2.0, 0.1), (6.0, 0.06), (12.0, 0.35), (16.0, 0.5))
    with pytest.raises(MarkerError, match="fat suppression"):
        found(volume(Scene(NOBODY, layers=dark), noise=0.02))


@pytest.mark.parametrize("scalp_too", [True, False])
def test_chemical_shift_is_estimated_when_nothing_tells_it(scalp_too):
    truth = on_the_skin(40, gap_mm=2.0)
    scene = Scene(truth, shift_mm=(0.0, 2.2, 0.0), shift_scalp=scalp_too)
    markers = found(volume(scene, noise=0.02))
    # A third of a voxel: at 1.5 mm the edge of the skin is partly that of the shifted fat.
    np.testing.assert_allclose(markers.shift_mm, [0, 2.2, 0], atol=0.5)
    assert any("chemical shift" in f.problem for f in markers.findings)
    check_all_found(markers, truth, 0.5)


def test_sidecar_gives_the_size_and_the_image_the_sign():
    # 3.4 ppm at 3 T is 434 Hz: 2.17 voxels at 200 Hz per pixel.
    for sign in (1, -1):
        truth = on_the_skin(40, gap_mm=2.0)
        scene = Scene(truth, shift_mm=(sign * 2.17 * 1.5, 0.0, 0.0))
        matrix, shape = affine()
        told = check_volume(
            scan(scene, matrix, shape, noise=0.02),
            matrix,
            read_axis=0,
            pixel_bandwidth_hz=200.0,
            field_tesla=3.0,
        )
        markers = found(told)
        np.testing.assert_allclose(markers.shift_mm, [sign * 3.26, 0, 0], atol=0.2)
        check_all_found(markers, truth, 0.3)


def test_water_filled_markers_are_not_shifted():
    truth = on_the_skin(40, gap_mm=2.0)
    matrix, shape = affine()
    told = check_volume(
        scan(Scene(truth), matrix, shape, noise=0.02),
        matrix,
        read_axis=2,
        pixel_bandwidth_hz=200.0,
        field_tesla=3.0,
    )
    markers = found(told)
    assert np.abs(markers.shift_mm).max() == 0
    assert any("hold water" in f.problem for f in markers.findings)
    check_all_found(markers, truth, 0.2)


def test_without_shift_nothing_is_taken_off():
    markers = found(volume(Scene(on_the_skin(40)), noise=0.02))
    assert np.abs(markers.shift_mm).max() == 0


def test_same_input_same_markers():
    scan_ = volume(Scene(on_the_skin(24)), noise=0.03)
    first, second = found(scan_), found(scan_)
    np.testing.assert_array_equal(first.centers_scanner_mm, second.centers_scanner_mm)
    np.testing.assert_array_equal(first.score, second.score)


def test_a_bright_rim_beside_a_capsule_does_not_take_it_away():
    truth = on_the_skin(24)
    matrix, shape = affine()
    image = scan(Scene(truth), matrix, shape, noise=0.02)
    points = np.indices(shape).reshape(3, -1).T @ matrix[:3, :3].T + matrix[:3, 3] - CENTER_MM
    radius = np.linalg.norm(points, axis=1)
    # Walls as bright as fat, like the rim of an ear, 1.5 to 4 mm beside the first eight capsules.
    for center in truth[:8] - CENTER_MM:
        up = center / np.linalg.norm(center)
        side = np.cross(up, [0.3, 0.9, 0.2])
        side /= np.linalg.norm(side)
        offset = points - center
        wall = (np.abs(offset @ side - 6.75) < 1.25) & (np.abs(offset @ np.cross(up, side)) < 9)
        wall &= (radius < 88) & (radius > 77) & (offset @ up > -8)
        image.reshape(-1)[wall] = 500.0
    markers = found(check_volume(image, matrix))
    likely = markers.centers_scanner_mm[markers.score > 0.5]
    away, _ = cKDTree(likely).query(truth[:8])
    assert away.max() < 0.25


def test_capsules_cut_by_the_field_are_found_and_told():
    truth = on_the_skin(24)
    matrix, shape = affine()
    image = scan(Scene(truth), matrix, shape, noise=0.02)
    top = int(np.floor((truth[:, 2].max() + 1.0 - matrix[2, 3]) / matrix[2, 2]))
    markers = found(check_volume(np.ascontiguousarray(image[:, :, : top + 1]), matrix))
    away, nearest = cKDTree(markers.centers_scanner_mm).query(truth)
    first = int(np.argmax(truth[:, 2]))
    assert away[first] < 0.5
    assert markers.score[nearest[first]] > 0.5
    assert markers.cut_off[nearest[first]]
    assert not markers.cut_off[nearest[truth[:, 2] < truth[first, 2] - 6]].any()
    spread = np.trace(markers.covariance_mm2, axis1=1, axis2=2)
    assert spread[nearest[first]] > 4 * np.median(spread[nearest])
    assert any("edge of the field" in f.problem for f in markers.findings)


DIM_FAT = ((0.0, 0.25), (2.0, 0.42), (6.0, 0.06), (12.0, 0.35), (16.0, 0.4))


def test_bright_markers_on_suppressed_fat_are_found():
    truth = on_the_skin(24)
    markers = found(volume(Scene(truth, layers=DIM_FAT, brightness=1.6), noise=0.02))
    check_all_found(markers, truth, 0.2)
    assert any("suppression" in f.problem for f in markers.findings)


def test_fat_no_brighter_than_the_brain_is_named_as_suppressed():
    with pytest.raises(MarkerError, match="fat suppression, which takes oil"):
        found(volume(Scene(NOBODY, layers=DIM_FAT), noise=0.02))


def test_flat_capsules_keep_their_centre_and_half_height():
    truth = on_the_skin(24, gap_mm=1.0, half_mm=1.75)
    scan_ = volume(Scene(truth, radii_mm=(5.0, 1.75)), noise=0.01, voxel_mm=(1.0, 1.0, 1.0))
    markers = found(scan_)
    check_all_found(markers, truth, 0.03)
    likely = markers.score > 0.5
    assert np.median(markers.half_height_mm[likely]) == pytest.approx(1.75, abs=0.2)


@pytest.mark.parametrize(
    "setting", [{"capsule_mm": -8.0}, {"least_contrast": 3.0}, {"at_least": 0}]
)
def test_settings_out_of_range_are_named(setting):
    name = next(iter(setting))
    with pytest.raises(SettingError, match=name):
        replace(MarkerOptions(), **setting)


@pytest.mark.real_head
@pytest.mark.parametrize("which", ["s1", "ch2"])
def test_painted_capsules_on_real_heads(which):
    from tests.painted import CLEAN, NAMES_61, painted_head

    image, matrix, truth = painted_head(which, NAMES_61, 11, **CLEAN)
    markers = found(check_volume(image, matrix))
    worn = np.concatenate([truth["capsules_mm"][truth["present"]], truth["extras_mm"]])
    check_all_found(markers, worn, 0.25)
    assert len(markers.score) <= max(30, 3 * len(worn))

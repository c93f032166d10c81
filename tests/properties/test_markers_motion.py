"""Markers stay where they are, however the image is stored, turned or sampled."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from scipy.spatial import cKDTree
from scipy.spatial.transform import Rotation

from locator.markers import Markers, find_markers
from locator.skin import find_skin
from locator.volume import Volume, check_volume
from tests.sphere_scan import Scene, affine, on_the_skin, scan, volume

TRUTH = on_the_skin(20)
FEW = settings(
    max_examples=3,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large],
)


def found(scan_: Volume) -> Markers:
    return find_markers(scan_, find_skin(scan_))


def centers(markers: Markers) -> np.ndarray:
    likely = markers.centers_scanner_mm[markers.score > 0.5]
    away, nearest = cKDTree(likely).query(TRUTH)
    assert away.max() < 2
    return likely[nearest]


@FEW
@given(
    turn=st.tuples(*[st.floats(-180, 180)] * 3),
    move=st.tuples(*[st.floats(-60, 60)] * 3),
)
def test_a_rigid_motion_of_the_volume_moves_the_markers_alike(turn, move):
    matrix, shape = affine((2.0, 2.0, 2.0))
    image = scan(Scene(TRUTH), matrix, shape, noise=0.01)
    motion = np.eye(4)
    motion[:3, :3] = Rotation.from_euler("xyz", turn, degrees=True).as_matrix()
    motion[:3, 3] = move
    here = centers(found(check_volume(image, matrix)))
    moved = found(check_volume(image, motion @ matrix))
    there = (moved.centers_scanner_mm[moved.score > 0.5] - motion[:3, 3]) @ motion[:3, :3]
    away, _ = cKDTree(there).query(here)
    assert away.max() < 0.1


@FEW
@given(order=st.permutations([0, 1, 2]), flips=st.tuples(*[st.booleans()] * 3))
def test_the_order_of_the_axes_does_not_move_a_centre(order, flips):
    matrix, shape = affine((2.0, 2.0, 2.0))
    image = scan(Scene(TRUTH), matrix, shape, noise=0.01)
    here = centers(found(check_volume(image, matrix)))
    stored = np.transpose(image, order)
    other = matrix[:, [*order, 3]].copy()
    for axis, flip in enumerate(flips):
        if flip:
            stored = np.flip(stored, axis)
            other[:3, 3] += other[:3, axis] * (stored.shape[axis] - 1)
            other[:3, axis] *= -1
    there = centers(found(check_volume(np.ascontiguousarray(stored), other)))
    # Odd counts are cut on one side: the working grid may lie half a voxel elsewhere.
    assert np.linalg.norm(there - here, axis=1).max() < 0.15


@pytest.mark.parametrize(
    ("voxel_mm", "turn_deg", "axes"),
    [
        ((1.2, 1.2, 1.2), (0.0, 0.0, 0.0), "RAS"),
        ((1.2, 1.2, 2.5), (12.0, 0.0, 0.0), "PIL"),
        ((2.0, 2.0, 2.0), (8.0, -9.0, 15.0), "LPI"),
        ((1.6, 1.2, 1.4), (-10.0, 5.0, 20.0), "SRA"),
    ],
)
def test_neither_voxels_nor_obliqueness_move_a_centre(voxel_mm, turn_deg, axes):
    grid = {"voxel_mm": voxel_mm, "turn_deg": turn_deg, "axes": axes}
    there = centers(found(volume(Scene(TRUTH), noise=0.01, **grid)))
    assert np.linalg.norm(there - TRUTH, axis=1).mean() < 0.08 * max(voxel_mm)

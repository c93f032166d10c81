"""The source space: in the grey matter, clear of the skull, every voxel with its nearest source."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.spatial import cKDTree

from locator.errors import HeadError
from locator.geometry import apply_affine, mesh_volume_mm3
from locator.head import BRAIN_STEM, CEREBELLUM, GREY, WHITE, Head
from locator.head.cortex import HALF_CORTEX_MM, find_cortex
from locator.head.shape import distance_to_mesh
from locator.sources import make_sources
from tests.test_head import CENTER, ball_head


@pytest.fixture(scope="module")
def head() -> Head:
    return ball_head()[2]


@pytest.fixture(scope="module")
def grey(head):
    return make_sources(head)


def test_sources_of_a_ball_lie_in_its_grey_shell(grey):
    radius = np.linalg.norm(grey.positions_scanner_mm - CENTER, axis=1)
    # The shell is 66 to 73.5 mm, cells reach half a spacing (and its diagonal) beyond.
    assert radius.min() > 60
    # 3 mm inside an inner skull that is itself found within half a millimetre of 76 mm.
    assert radius.max() < 73.5
    shell = 4 / 3 * np.pi * (73.5**3 - 66**3)
    assert 0.7 < len(radius) / (shell / 5**3) < 2.0


def test_sources_keep_clear_of_the_inner_skull(head, grey):
    inner = head.inner_skull
    gap = distance_to_mesh(grey.positions_scanner_mm, inner.vertices_scanner_mm, inner.faces, 10.0)
    assert gap.min() >= 3.0


def test_normals_point_out_of_the_cortex(grey):
    out = grey.positions_scanner_mm - CENTER
    out /= np.linalg.norm(out, axis=1, keepdims=True)
    cosine = (out * grey.normals).sum(axis=1)
    known = np.isfinite(cosine)
    assert known.mean() > 0.95
    # The exact normal of a spherical shell is radial.
    assert np.median(np.degrees(np.arccos(np.clip(cosine[known], -1, 1)))) < 5
    assert (cosine[known] > 0).mean() > 0.99
    assert np.allclose(np.linalg.norm(grey.normals[known], axis=1), 1)


def test_every_grey_voxel_takes_its_nearest_source(head, grey):
    tissues, chosen = np.asarray(head.tissues), np.asarray(grey.nearest_source)
    assert (chosen[tissues != GREY] == -1).all()
    voxels = np.argwhere(chosen >= 0)
    assert len(voxels) > 0.95 * (tissues == GREY).sum()
    pick = np.random.default_rng(0).choice(len(voxels), 500, replace=False)
    places = apply_affine(head.scanner_from_voxel, voxels[pick])
    _, nearest = cKDTree(grey.positions_scanner_mm).query(places)
    assert np.array_equal(nearest, chosen[tuple(voxels[pick].T)])
    assert set(np.unique(chosen)) - {-1} <= set(range(len(grey.positions_scanner_mm)))


def test_the_brain_space_fills_the_brain(head, grey):
    brain = make_sources(head, kind="brain")
    assert len(brain.positions_scanner_mm) > 1.5 * len(grey.positions_scanner_mm)
    assert np.isnan(brain.normals).all()
    assert np.linalg.norm(brain.positions_scanner_mm - CENTER, axis=1).min() < 20


def test_the_cortex_of_a_ball_is_a_sphere_half_a_cortex_over_white_matter(head):
    cortex = find_cortex(head)
    radius = np.linalg.norm(cortex.vertices_scanner_mm - CENTER, axis=1)
    # White matter ends at 66 mm; the shell of grey is thicker than any cortex.
    assert abs(np.median(radius) - (66 + HALF_CORTEX_MM)) < 0.4
    assert np.quantile(np.abs(radius - np.median(radius)), 0.95) < 1.0
    assert mesh_volume_mm3(cortex.vertices_scanner_mm, cortex.faces) > 0


def test_sources_along_the_cortex_have_its_normals(head):
    along = make_sources(head, kind="cortex")
    out = along.positions_scanner_mm - CENTER
    radius = np.linalg.norm(out, axis=1)
    cosine = (out / radius[:, None] * along.normals).sum(axis=1)
    assert np.abs(radius - (66 + HALF_CORTEX_MM)).mean() < 0.7
    assert np.median(np.degrees(np.arccos(np.clip(cosine, -1, 1)))) < 8
    # One in every cell that the sphere passes: about 1.5 for each square of the spacing.
    squares = 4 * np.pi * 67.3**2 / 5.0**2
    assert 0.8 * squares < len(radius) < 2.2 * squares
    inner = head.inner_skull
    gap = distance_to_mesh(along.positions_scanner_mm, inner.vertices_scanner_mm, inner.faces, 10.0)
    assert gap.min() >= 3.0
    chosen = np.asarray(along.nearest_source)
    assert (chosen[np.asarray(head.tissues) == GREY] >= 0).mean() > 0.9


def test_a_head_without_white_matter_has_no_cortex(head):
    tissues = np.where(np.asarray(head.tissues) == WHITE, GREY, np.asarray(head.tissues))
    with pytest.raises(HeadError, match="white matter"):
        find_cortex(replace(head, tissues=tissues))
    assert len(find_cortex(head).faces) > 1000


def test_a_wider_spacing_gives_fewer_sources(head, grey):
    wide = make_sources(head, spacing_mm=10.0)
    ratio = len(grey.positions_scanner_mm) / len(wide.positions_scanner_mm)
    assert 4 < ratio < 12
    assert wide.spacing_mm == 10.0


def test_cerebellum_and_brain_stem_are_left_out(head):
    tissues = np.array(head.tissues)
    grey = np.argwhere(tissues == GREY)
    places = apply_affine(head.scanner_from_voxel, grey)
    low = places[:, 2] < CENTER[2] - 30
    tissues[tuple(grey[low].T)] = CEREBELLUM
    stem = low & (np.abs(places[:, 0] - CENTER[0]) < 8)
    tissues[tuple(grey[stem].T)] = BRAIN_STEM
    changed = Head(
        scalp=head.scalp,
        outer_skull=head.outer_skull,
        inner_skull=head.inner_skull,
        tissues=tissues,
        scanner_from_voxel=head.scanner_from_voxel,
        center_scanner_mm=head.center_scanner_mm,
        padded_mm=head.padded_mm,
        brain_volume_ml=head.brain_volume_ml,
    )
    cortex = make_sources(changed)
    assert cortex.positions_scanner_mm[:, 2].min() > CENTER[2] - 34
    everything = make_sources(changed, kind="brain")
    assert everything.positions_scanner_mm[:, 2].min() < CENTER[2] - 60


def test_an_unknown_kind_is_refused(head):
    with pytest.raises(HeadError, match="'skin'"):
        make_sources(head, kind="skin")


@pytest.mark.parametrize("spacing_mm", [0.5, 50.0, float("nan")])
def test_a_senseless_spacing_is_refused(head, spacing_mm):
    with pytest.raises(HeadError, match="spacing"):
        make_sources(head, spacing_mm=spacing_mm)


def test_an_empty_tissue_map_is_refused(head):
    changed = Head(
        scalp=head.scalp,
        outer_skull=head.outer_skull,
        inner_skull=head.inner_skull,
        tissues=np.zeros_like(np.asarray(head.tissues)),
        scanner_from_voxel=head.scanner_from_voxel,
        center_scanner_mm=head.center_scanner_mm,
        padded_mm=head.padded_mm,
        brain_volume_ml=head.brain_volume_ml,
    )
    with pytest.raises(HeadError, match="0 mL"):
        make_sources(changed)

"""What must not change, or must change along, when image, names or blobs change."""

import dataclasses

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from locator.labels import label_markers
from locator.labels.matching import match_sum
from locator.layout import PLACES, standard_layout
from locator.markers import Markers
from locator.skin import Skin
from synthetic_heads.tape import NAMES_19, NAMES_31
from tests.point_caps import make_point_cap, make_point_head

_PER_MARKER = (
    "centers_scanner_mm covariance_mm2 diameter_mm contrast roundness skin_mm score".split()
)


@pytest.fixture(scope="module")
def head():
    return make_point_head(12)


@pytest.fixture(scope="module")
def drawn(head):
    return make_point_cap(head, NAMES_31, 21, n_off=2, n_extra=3, jitter_mm=2.0, turn_deg=3.0)


@pytest.fixture(scope="module")
def labelled(head, drawn):
    return label_markers(drawn.markers, head.skin, standard_layout(NAMES_31))


def _rows(markers: Markers, index: np.ndarray) -> Markers:
    return dataclasses.replace(
        markers, **{name: getattr(markers, name)[index] for name in _PER_MARKER}
    )


def _moved(markers: Markers, skin: Skin, affine: np.ndarray) -> tuple[Markers, Skin]:
    turn, shift = affine[:3, :3], affine[:3, 3]
    faces = skin.faces if np.linalg.det(turn) > 0 else skin.faces[:, ::-1]
    return (
        dataclasses.replace(
            markers,
            centers_scanner_mm=markers.centers_scanner_mm @ turn.T + shift,
            covariance_mm2=turn @ markers.covariance_mm2 @ turn.T,
        ),
        dataclasses.replace(
            skin,
            scanner_from_grid=affine @ skin.scanner_from_grid,
            vertices_scanner_mm=skin.vertices_scanner_mm @ turn.T + shift,
            faces=faces,
        ),
    )


@settings(
    max_examples=3, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    st.tuples(*[st.floats(-8.0, 8.0)] * 3),
    st.tuples(*[st.floats(-30.0, 30.0)] * 3),
)
def test_moving_the_image_moves_the_electrodes(head, drawn, labelled, angles, shift):
    from scipy.spatial.transform import Rotation

    affine = np.eye(4)
    affine[:3, :3] = Rotation.from_euler("xyz", angles, degrees=True).as_matrix()
    affine[:3, 3] = shift
    markers, skin = _moved(drawn.markers, head.skin, affine)
    moved = label_markers(markers, skin, standard_layout(NAMES_31))
    sure = (labelled.confidence >= 0.9) & (labelled.marker >= 0)
    # The start from the head's shape has a prior on the head's tilt in the scanner, so that
    # doubtful labels may differ; the sure ones may not.
    assert (moved.marker[sure] == labelled.marker[sure]).all()
    there = labelled.positions_scanner_mm[sure] @ affine[:3, :3].T + affine[:3, 3]
    assert np.abs(moved.positions_scanner_mm[sure] - there).max() < 0.5


def test_mirroring_the_image_swaps_left_and_right(head, drawn, labelled):
    markers, skin = _moved(drawn.markers, head.skin, np.diag([-1.0, 1.0, 1.0, 1.0]))
    mirrored = label_markers(markers, skin, standard_layout(NAMES_31))
    partner = []
    for name in NAMES_31:
        row, column, side = PLACES[name]
        partner.append(
            next(k for k, other in enumerate(NAMES_31) if PLACES[other] == (row, column, -side))
        )
    sure = (labelled.confidence >= 0.95) & (labelled.marker >= 0)
    for index in np.flatnonzero(sure):
        assert mirrored.marker[partner[index]] == labelled.marker[index]


def test_the_order_of_names_is_the_order_of_rows(head, drawn, labelled):
    order = np.random.default_rng(0).permutation(len(NAMES_31))
    again = label_markers(
        drawn.markers, head.skin, standard_layout([NAMES_31[index] for index in order])
    )
    assert again.names == tuple(NAMES_31[index] for index in order)
    np.testing.assert_array_equal(again.marker, labelled.marker[order])
    np.testing.assert_allclose(again.confidence, labelled.confidence[order], atol=1e-3)
    np.testing.assert_allclose(
        again.positions_scanner_mm, labelled.positions_scanner_mm[order], atol=0.05
    )


def test_the_order_of_blobs_does_not_matter(head, drawn, labelled):
    order = np.random.default_rng(1).permutation(len(drawn.markers.score))
    again = label_markers(_rows(drawn.markers, order), head.skin, standard_layout(NAMES_31))
    back = np.where(again.marker >= 0, order[np.maximum(again.marker, 0)], -1)
    np.testing.assert_array_equal(back, labelled.marker)
    np.testing.assert_allclose(again.confidence, labelled.confidence, atol=1e-3)


@pytest.mark.parametrize("name", ["Cz", "C3", "O2"])
def test_removing_a_capsule_changes_its_own_row_only(head, drawn, labelled, name):
    place = NAMES_31.index(name)
    row = labelled.marker[place]
    if row < 0:
        pytest.skip(f"{name} has no capsule in this cap")
    keep = np.delete(np.arange(len(drawn.markers.score)), row)
    again = label_markers(_rows(drawn.markers, keep), head.skin, standard_layout(NAMES_31))
    back = np.where(again.marker >= 0, keep[np.maximum(again.marker, 0)], -1)
    assert again.status[place] == "inferred"
    sure = (labelled.confidence >= 0.9) & (np.arange(len(NAMES_31)) != place)
    np.testing.assert_array_equal(back[sure], labelled.marker[sure])


def test_a_far_blob_changes_nothing(head, drawn, labelled):
    markers = drawn.markers
    chin = head.landmarks_mm["NAS"] + np.array([0.0, -10.0, -75.0])
    values = {name: getattr(markers, name) for name in _PER_MARKER}
    added = {name: np.concatenate([value, value[:1]]) for name, value in values.items()}
    added["centers_scanner_mm"] = np.concatenate([values["centers_scanner_mm"], chin[None]])
    again = label_markers(
        dataclasses.replace(markers, **added), head.skin, standard_layout(NAMES_31)
    )
    np.testing.assert_array_equal(again.marker, labelled.marker)
    np.testing.assert_allclose(again.positions_scanner_mm, labelled.positions_scanner_mm, atol=0.05)
    assert again.why_not[-1]


def test_twice_the_same_is_the_same(head, drawn, labelled):
    again = label_markers(drawn.markers, head.skin, standard_layout(NAMES_31))
    np.testing.assert_array_equal(again.positions_scanner_mm, labelled.positions_scanner_mm)
    np.testing.assert_array_equal(again.confidence, labelled.confidence)


@settings(max_examples=60, deadline=None)
@given(st.integers(1, 6), st.integers(1, 8), st.integers(0, 2**32 - 1))
def test_shares_are_probabilities(n_names, n_blobs, seed):
    rng = np.random.default_rng(seed)
    share, log_sum = match_sum(rng.normal(0.0, 6.0, (n_names, n_blobs)))
    assert (share >= 0).all()
    assert (share.sum(axis=0) <= 1 + 1e-4).all()
    assert (share.sum(axis=1) <= 1 + 1e-4).all()
    assert log_sum >= -1e-9


@settings(max_examples=40, deadline=None)
@given(st.lists(st.sampled_from(NAMES_19), min_size=1, max_size=19, unique=True))
def test_a_subset_of_names_keeps_its_places(names):
    full = dict(zip(NAMES_19, standard_layout(NAMES_19).positions_mm, strict=True))
    part = standard_layout(names)
    for name, place in zip(part.names, part.positions_mm, strict=True):
        np.testing.assert_allclose(place, full[name], atol=1e-9)

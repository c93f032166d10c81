"""Labels against caps with known answers, on invented heads without an image."""

import dataclasses
import itertools
import pickle

import numpy as np
import pytest

from locator.errors import LabelError, MarkerError, SettingError, SideError
from locator.labels import LabelOptions, find_anatomy, label_markers
from locator.labels.anatomy import symmetry_plane
from locator.labels.matching import match_sum
from locator.labels.search import choose
from locator.layout import custom_layout, standard_layout
from synthetic_heads.tape import CAPS, NAMES_19, NAMES_31, NAMES_61
from tests.point_caps import make_point_cap, make_point_head

CLEAN = {"n_off": 2, "n_extra": 3, "jitter_mm": 2.5, "turn_deg": 2.5}
HARD = {"n_off": 6, "n_extra": 8, "jitter_mm": 4.0, "turn_deg": 5.7}


def score(electrodes, cap):
    """Right labels, wrong ones, wrong ones with confidence, present capsules."""
    seen = electrodes.marker >= 0
    near = np.linalg.norm(electrodes.positions_scanner_mm - cap.contacts_mm, axis=1) < 4.0
    right, wrong = seen & near, seen & ~near
    sure = electrodes.confidence >= 0.9
    return right, wrong, wrong & sure, cap.present


@pytest.fixture(scope="module")
def head():
    return make_point_head(3)


@pytest.fixture(scope="module")
def clean(head):
    drawn = make_point_cap(head, NAMES_61, 5, **CLEAN)
    return drawn, label_markers(drawn.markers, head.skin, standard_layout(NAMES_61))


def _brute(weight):
    """Sum over partial matchings and the share of each pair, by listing them all."""
    n_rows, n_columns = weight.shape
    total, share = 0.0, np.zeros_like(weight)
    for count in range(min(n_rows, n_columns) + 1):
        for rows in itertools.combinations(range(n_rows), count):
            for columns in itertools.permutations(range(n_columns), count):
                value = float(np.prod(weight[list(rows), list(columns)]))
                total += value
                share[list(rows), list(columns)] += value
    return share / total, np.log(total)


def test_matching_sums_agree_with_listing_every_matching():
    rng = np.random.default_rng(0)
    for _ in range(20):
        log_weights = rng.normal(0.0, 2.5, (4, 5))
        exact, log_exact = _brute(np.exp(log_weights))
        share, log_sum = match_sum(log_weights)
        # The Bethe sum is an approximation: its shares are a few hundredths off on dense graphs
        # as small as this, and it never exceeds the exact sum by more than rounding.
        assert np.abs(share - exact).max() < 0.12
        assert abs(log_sum - log_exact) < 0.5


def test_matching_sums_are_exact_without_loops():
    log_weights = np.full((3, 3), -40.0)
    log_weights[0, 0], log_weights[0, 1], log_weights[1, 1], log_weights[2, 2] = 1.0, 0.5, -0.3, 2.0
    exact, log_exact = _brute(np.exp(log_weights))
    share, log_sum = match_sum(log_weights)
    np.testing.assert_allclose(share, exact, atol=1e-5)
    assert abs(log_sum - log_exact) < 1e-5


def test_a_bare_holder_keeps_strays_away():
    # One name and three blobs have no loops: the sum is exact.
    weight, apart = np.array([[3.0, 0.5, 1.0]]), np.array([[0.2, 0.5, 1.0]])
    alone = apart.prod()
    total = alone + weight.sum()
    share, log_sum = match_sum(np.log(weight), apart)
    np.testing.assert_allclose(share, weight / total, atol=1e-6)
    assert log_sum == pytest.approx(np.log(total), abs=1e-6)


def test_a_blob_beside_a_bare_place_is_less_likely_a_stray_the_nearer_it_is():
    head = make_point_head(11)
    drawn = make_point_cap(head, NAMES_31, 3, jitter_mm=3.0)
    electrodes = label_markers(drawn.markers, head.skin, standard_layout(NAMES_31))
    near = electrodes.residual_mm < 4.0
    assert near.sum() > 10
    assert electrodes.confidence[near].min() > 0.98


def test_choice_gives_each_capsule_once():
    share = np.array([[0.6, 0.38], [0.7, 0.05]])
    assert choose(share, 1 - share.sum(axis=1)).tolist() == [1, 0]
    share = np.array([[0.6, 0.01], [0.3, 0.1]])
    assert choose(share, 1 - share.sum(axis=1)).tolist() == [0, -1]


def test_a_clean_cap_is_labelled_without_a_mistake(clean):
    drawn, electrodes = clean
    right, wrong, sure_wrong, present = score(electrodes, drawn.cap)
    assert right[present].all()
    assert not sure_wrong.any()
    assert wrong.sum() <= 1
    assert (electrodes.confidence[right] >= 0.9).mean() >= 0.9
    absent = np.array([status == "inferred" for status in electrodes.status])
    assert absent[~present].sum() >= 1


def test_the_result_says_what_it_rests_on(clean):
    electrodes = clean[1]
    assert electrodes.names == NAMES_61
    seen = electrodes.marker >= 0
    assert all(
        (status == "seen") == one for status, one in zip(electrodes.status, seen, strict=True)
    )
    assert np.isfinite(electrodes.positions_scanner_mm).all()
    assert np.isfinite(electrodes.residual_mm[seen]).all()
    assert np.isnan(electrodes.residual_mm[~seen]).all()
    assert np.isnan(electrodes.capsule_scanner_mm[~seen]).all()
    assert ((electrodes.confidence >= 0) & (electrodes.confidence <= 1)).all()
    # A place read off the layout is less sure than a capsule.
    assert electrodes.sd_mm[~seen].min() > 2 * np.median(electrodes.sd_mm[seen])
    assert (np.linalg.eigvalsh(electrodes.covariance_mm2) > 0).all()
    worn = set(electrodes.marker[seen].tolist())
    assert len(worn) == seen.sum()
    for row, reason in enumerate(electrodes.why_not):
        assert (reason == "") == (row in worn)
    # Capsules 6 mm high, 2 mm off the skin; the diameter given is 8 mm.
    assert 0.0 <= electrodes.holder_mm < 3.0
    assert "affine" in electrodes.side_basis
    copy = pickle.loads(pickle.dumps(electrodes))
    assert copy.names == electrodes.names
    assert not copy.positions_scanner_mm.flags.writeable


def test_contact_points_are_the_feet_of_the_capsules(clean):
    drawn, electrodes = clean
    right, *_ = score(electrodes, drawn.cap)
    gap = np.linalg.norm(electrodes.positions_scanner_mm - drawn.cap.contacts_mm, axis=1)[right]
    # Centre noise of 0.25 mm per axis, a 2.5 mm grid of heights.
    assert np.median(gap) < 0.8
    assert gap.max() < 2.0


def test_inferred_places_are_where_the_deviation_says(head):
    misses = []
    for seed in range(3):
        drawn = make_point_cap(head, NAMES_31, seed, n_off=6, jitter_mm=2.5, turn_deg=4.0)
        electrodes = label_markers(drawn.markers, head.skin, standard_layout(NAMES_31))
        absent = (electrodes.marker < 0) & ~drawn.cap.present
        gap = electrodes.positions_scanner_mm - drawn.cap.contacts_mm
        misses.extend((np.linalg.norm(gap, axis=1) / (np.sqrt(3) * electrodes.sd_mm))[absent])
    misses = np.array(misses)
    assert len(misses) >= 14
    # Root mean square of distance over its deviation is 1 when the deviation is right.
    assert 0.5 < np.sqrt((misses**2).mean()) < 1.6


@pytest.mark.slow
def test_hard_caps_are_labelled_and_doubted():
    present_n = right_n = sure_wrong_n = sure_right_n = 0
    for seed in range(6):
        head = make_point_head(100 + seed)
        drawn = make_point_cap(head, NAMES_61, seed, **HARD)
        electrodes = label_markers(drawn.markers, head.skin, standard_layout(NAMES_61))
        right, _, sure_wrong, present = score(electrodes, drawn.cap)
        present_n += present.sum()
        right_n += right[present].sum()
        sure_wrong_n += sure_wrong.sum()
        sure_right_n += (right & (electrodes.confidence >= 0.9)).sum()
    assert right_n / present_n >= 0.97
    assert sure_wrong_n / present_n <= 0.015
    assert sure_right_n / right_n >= 0.9


@pytest.mark.parametrize("count", [8, 19, 128])
def test_any_number_of_names(head, count):
    names = CAPS[count]
    drawn = make_point_cap(head, names, 2, n_off=1, n_extra=2, jitter_mm=2.0, turn_deg=2.0)
    electrodes = label_markers(drawn.markers, head.skin, standard_layout(names))
    right, _, _, present = score(electrodes, drawn.cap)
    assert right[present].mean() >= 0.97


def test_a_cap_far_off_its_place_is_followed(head):
    drawn = make_point_cap(
        head, NAMES_61, 8, turn_deg=9.0, slide_mm=12.0, stretch=0.05, exact=True, jitter_mm=2.0,
        n_off=2,
    )  # fmt: skip
    electrodes = label_markers(drawn.markers, head.skin, standard_layout(NAMES_61))
    right, _, _, present = score(electrodes, drawn.cap)
    assert right[present].mean() >= 0.98


def test_reference_and_ground_are_labelled_too(head):
    also = ("AFpz", "M1")
    drawn = make_point_cap(head, NAMES_19, 4, also=also, jitter_mm=2.0)
    electrodes = label_markers(drawn.markers, head.skin, standard_layout(NAMES_19 + also))
    right, _, _, present = score(electrodes, drawn.cap)
    assert right[present].sum() >= present.sum() - 1
    assert electrodes.names[-2:] == also


@pytest.mark.parametrize("with_landmarks", [True, False])
def test_layouts_of_ones_own(head, with_landmarks):
    # A grid that is no 10-20 cap: spirals on the template head, its own names.
    template = standard_layout(CAPS[128])
    keep = [index for index in range(128) if index % 3 == 0]
    names = tuple(f"g{index}" for index in range(len(keep)))
    layout = custom_layout(
        names,
        template.positions_mm[keep],
        template.landmarks_mm if with_landmarks else None,
        "an invented grid",
    )
    chosen = tuple(template.names[index] for index in keep)
    drawn = make_point_cap(head, chosen, 6, jitter_mm=2.0, n_off=2)
    electrodes = label_markers(drawn.markers, head.skin, layout)
    right, _, _, present = score(electrodes, drawn.cap)
    assert electrodes.names == names
    assert right[present].mean() >= 0.95


def test_landmarks_are_estimated_near_the_true_ones():
    gaps, ratios = [], []
    for seed in range(4):
        head = make_point_head(200 + seed)
        anatomy = find_anatomy(head.skin)
        true = np.array([head.landmarks_mm[name] for name in ("NAS", "LPA", "RPA", "INI")])
        gap = np.linalg.norm(anatomy.landmarks_mm - true, axis=1)
        gaps.append(gap)
        ratios.append(gap / np.sqrt((anatomy.landmarks_sd_mm**2).sum(axis=1)))
    assert np.mean(gaps) < 12.0
    # Root mean square of error over deviation: near 1 when the deviations are honest.
    assert np.sqrt(np.mean(np.square(ratios))) < 1.8


def test_the_plane_of_symmetry_is_found(head):
    right, offset, asymmetry = symmetry_plane(head.skin)
    true = head.landmarks_mm["RPA"] - head.landmarks_mm["LPA"]
    angle = np.degrees(np.arccos(right @ true / np.linalg.norm(true)))
    assert angle < 4.0
    assert abs(head.landmarks_mm["NAS"] @ right - offset) < 4.0
    assert asymmetry < 4.0


def test_given_landmarks_are_used(head):
    marks = np.array([head.landmarks_mm[name] for name in ("NAS", "LPA", "RPA")])
    drawn = make_point_cap(head, NAMES_31, 1, jitter_mm=2.0, n_off=2, n_extra=2)
    electrodes = label_markers(
        drawn.markers,
        head.skin,
        standard_layout(NAMES_31),
        options=LabelOptions(landmarks_scanner_mm=marks),
    )
    right, _, _, present = score(electrodes, drawn.cap)
    assert right[present].all()
    assert electrodes.landmarks_given
    np.testing.assert_allclose(electrodes.landmarks_scanner_mm[:3], marks)


def test_landmarks_that_are_not_on_this_head_are_refused(head):
    marks = np.array([head.landmarks_mm[name] for name in ("NAS", "LPA", "RPA")])
    drawn = make_point_cap(head, NAMES_19, 1)
    layout = standard_layout(NAMES_19)
    with pytest.raises(LabelError, match=r"NAS \("):
        label_markers(
            drawn.markers,
            head.skin,
            layout,
            options=LabelOptions(landmarks_scanner_mm=marks + np.diag([0, 60, 0])[[1, 0, 0]]),
        )
    with pytest.raises(SideError, match="LPA"):
        label_markers(
            drawn.markers,
            head.skin,
            layout,
            options=LabelOptions(landmarks_scanner_mm=marks[[0, 2, 1]]),
        )


def test_far_too_few_capsules_are_refused(head):
    drawn = make_point_cap(head, NAMES_61, 1, n_off=45)
    with pytest.raises(MarkerError, match="61 electrodes"):
        label_markers(drawn.markers, head.skin, standard_layout(NAMES_61))


def _with_side_marker(head, side):
    drawn = make_point_cap(head, NAMES_31, 7, jitter_mm=2.0, side_marker=side)
    return drawn.markers, standard_layout(NAMES_31)


@pytest.mark.parametrize("side", ["right", "left"])
def test_a_side_marker_that_agrees_is_said(head, side):
    markers, layout = _with_side_marker(head, side)
    electrodes = label_markers(markers, head.skin, layout, options=LabelOptions(side_marker=side))
    assert f"side marker on the {side}" in electrodes.side_basis
    assert "agrees" in electrodes.side_basis


def test_a_side_marker_that_contradicts_stops_the_job(head):
    markers, layout = _with_side_marker(head, "left")
    with pytest.raises(SideError, match=r"right side.*left"):
        label_markers(markers, head.skin, layout, options=LabelOptions(side_marker="right"))


# A layout that is not its own mirror image.
ONE_SIDED = tuple(name for name in NAMES_31 if name not in ("F7", "P3"))


def _mirrored(head, markers):
    """Head and capsules as a scan with exchanged sides shows them."""
    flip = np.diag([-1.0, 1.0, 1.0])
    skin = dataclasses.replace(
        head.skin,
        vertices_scanner_mm=head.skin.vertices_scanner_mm @ flip,
        faces=head.skin.faces[:, ::-1],
        scanner_from_grid=np.diag([-1.0, 1.0, 1.0, 1.0]) @ head.skin.scanner_from_grid,
    )
    return skin, dataclasses.replace(markers, centers_scanner_mm=markers.centers_scanner_mm @ flip)


@pytest.mark.parametrize("seed", [1, 2])
def test_a_one_sided_layout_tells_a_mirrored_scan(seed):
    head = make_point_head(7000 + seed)
    markers = make_point_cap(head, ONE_SIDED, seed, jitter_mm=2.5, n_off=1, n_extra=1).markers
    layout = standard_layout(ONE_SIDED)
    straight = label_markers(markers, head.skin, layout)
    assert "times better than with left and right exchanged" in straight.side_basis
    assert not [one for one in straight.findings if "exchanged" in one.problem]
    skin, markers = _mirrored(head, markers)
    exchanged = label_markers(markers, skin, layout)
    first = exchanged.findings[0]
    assert "left and right exchanged" in first.problem
    assert exchanged.confidence.max() < 0.1


def test_a_symmetric_layout_says_that_it_cannot_tell_sides(clean):
    assert "its own mirror image" in clean[1].side_basis


def test_a_side_marker_that_is_not_there_is_a_finding(head):
    drawn = make_point_cap(head, NAMES_31, 7, jitter_mm=2.0)
    electrodes = label_markers(
        drawn.markers,
        head.skin,
        standard_layout(NAMES_31),
        options=LabelOptions(side_marker="right"),
    )
    assert any("was not found" in one.problem for one in electrodes.findings)


def test_a_doubtful_label_is_a_finding_and_comes_first(head):
    drawn = make_point_cap(head, NAMES_31, 3, jitter_mm=2.0)
    # Two capsules side by side at one place: which is the electrode?
    row = int(np.flatnonzero(drawn.owner == NAMES_31.index("C3"))[0])
    markers = drawn.markers
    twin = markers.centers_scanner_mm[row] + np.array([0.0, 3.0, 0.0])
    doubled = {
        field.name: np.concatenate(
            [getattr(markers, field.name), getattr(markers, field.name)[row : row + 1]]
        )
        for field in dataclasses.fields(markers)
        if field.name
        in ("covariance_mm2", "diameter_mm", "contrast", "roundness", "skin_mm", "score")
    }
    centers = np.concatenate([markers.centers_scanner_mm, twin[None]])
    both = dataclasses.replace(markers, centers_scanner_mm=centers, **doubled)
    electrodes = label_markers(both, head.skin, standard_layout(NAMES_31))
    place = NAMES_31.index("C3")
    assert electrodes.confidence[place] < 0.9
    assert electrodes.alternatives[place]
    assert any(one.subject == "C3" and one.level == "look" for one in electrodes.findings)
    doubts = [one.doubt for one in electrodes.findings]
    assert doubts == sorted(doubts, reverse=True)


@pytest.mark.parametrize(
    "wrong",
    [
        {"holder_mm": -1.0},
        {"side_marker": "up"},
        {"turn_deg": 90.0},
        {"slide_mm": 0.0},
        {"doubt_below": 0.2},
        {"landmarks_scanner_mm": [[0, 0, 0]]},
    ],
)
def test_settings_out_of_range_are_refused(wrong):
    with pytest.raises(SettingError, match=next(iter(wrong))):
        LabelOptions(**wrong)

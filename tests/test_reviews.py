"""Decisions of people: the newest per electrode holds, and those who differ are told."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from locator.errors import FileError
from locator.geometry import icosphere
from locator.io.reviews import append_review, read_reviews
from locator.labels import Electrodes
from locator.markers import Markers
from locator.reviews import Review, apply_reviews, decisions_in_force
from locator.skin import Skin

RADIUS = 80.0
CENTER = np.array([3.0, -4.0, 5.0])


def ball_skin():
    """Skin of a ball on a 2 mm grid."""
    affine = np.diag([2.0, 2.0, 2.0, 1.0])
    affine[:3, 3] = CENTER - 100
    grid = np.indices((101, 101, 101)) * 2.0 - 100
    directions, faces = icosphere(3)
    return Skin(
        height_map_mm=(np.sqrt((grid**2).sum(axis=0)) - RADIUS).astype(np.float32),
        scanner_from_grid=affine,
        vertices_scanner_mm=CENTER + RADIUS * directions,
        faces=faces,
        sd_mm=0.5,
        noise_sd=1.0,
        fat_intensity=250.0,
    )


def outward(*direction):
    direction = np.array(direction, dtype=float)
    return direction / np.linalg.norm(direction)


PLACES = {
    "Fz": outward(0, 0.7, 0.7),
    "Cz": outward(0, 0, 1),
    "C3": outward(-0.8, 0, 0.6),
    "C4": outward(0.8, 0, 0.6),
}


@pytest.fixture(scope="module")
def case():
    """Skin, blobs and electrodes on a ball: a blob for every name, and a fifth one for none."""
    directions = [*PLACES.values(), outward(0.3, -0.9, 0.4)]
    centers = CENTER + 86 * np.array(directions)
    n = len(centers)
    markers = Markers(
        centers_scanner_mm=centers,
        covariance_mm2=np.tile(np.eye(3) * 0.04, (n, 1, 1)),
        diameter_mm=np.full(n, 8.0),
        contrast=np.ones(n),
        roundness=np.ones(n),
        skin_mm=np.full(n, 6.0),
        score=np.full(n, 0.9),
        capsule_mm=8.0,
        shift_mm=np.zeros(3),
    )
    contact = CENTER + RADIUS * np.array(list(PLACES.values()))
    electrodes = Electrodes(
        names=tuple(PLACES),
        positions_scanner_mm=contact,
        covariance_mm2=np.tile(np.eye(3) * 0.04, (4, 1, 1)),
        status=("seen",) * 4,
        confidence=np.full(4, 0.95),
        residual_mm=np.zeros(4),
        sd_mm=np.full(4, 0.2),
        capsule_scanner_mm=centers[:4],
        marker=np.arange(4, dtype=np.int32),
        alternatives=("",) * 4,
        fitted_scanner_mm=contact,
        landmarks_scanner_mm=np.full((4, 3), np.nan),
        landmarks_sd_mm=np.full(4, np.nan),
        landmarks_given=False,
        holder_mm=2.0,
        side_basis="",
        why_not=("", "", "", "", "no name near it"),
    )
    return electrodes, markers, ball_skin()


def review(electrode, kind="capsule", place=None, who="A", when="2026-01-31T12:00:00Z"):
    place = None if place is None else np.asarray(place, dtype=float)
    return Review(who=who, when=when, electrode=electrode, kind=kind, place_scanner_mm=place)


def test_without_decisions_nothing_changes(case):
    electrodes, markers, skin = case
    assert apply_reviews(electrodes, markers, skin, ()) is electrodes


def test_accepting_keeps_the_place_and_says_who_is_sure(case):
    electrodes, markers, skin = case
    near = markers.centers_scanner_mm[1] + [0.5, -0.5, 0.2]
    after = apply_reviews(electrodes, markers, skin, [review("Cz", place=near)])
    assert after.status == ("seen", "corrected", "seen", "seen")
    assert np.allclose(after.capsule_scanner_mm[1], markers.centers_scanner_mm[1])
    # The skin of the ball is known on a 2 mm grid, linear in between.
    assert np.allclose(after.positions_scanner_mm[1], electrodes.positions_scanner_mm[1], atol=0.3)
    assert np.isnan(after.confidence[1])
    assert after.marker[1] == 1


def test_moving_to_another_blob_frees_the_old_one(case):
    electrodes, markers, skin = case
    after = apply_reviews(
        electrodes, markers, skin, [review("C4", place=markers.centers_scanner_mm[4])]
    )
    assert after.marker.tolist() == [0, 1, 2, 4]
    assert after.why_not[3] == "a person decided on C4"
    assert after.why_not[4] == ""
    gap = np.linalg.norm(after.positions_scanner_mm[3] - electrodes.fitted_scanner_mm[3])
    assert after.residual_mm[3] == pytest.approx(gap)


def test_a_swap_is_two_decisions(case):
    electrodes, markers, skin = case
    swap = [
        review("C3", place=markers.centers_scanner_mm[3]),
        review("C4", place=markers.centers_scanner_mm[2]),
    ]
    after = apply_reviews(electrodes, markers, skin, swap)
    assert after.marker.tolist() == [0, 1, 3, 2]
    assert np.allclose(
        after.positions_scanner_mm[[2, 3]], electrodes.positions_scanner_mm[[3, 2]], atol=0.3
    )
    assert not after.findings


def test_taking_anothers_capsule_leaves_that_one_inferred_and_told(case):
    electrodes, markers, skin = case
    after = apply_reviews(
        electrodes, markers, skin, [review("C3", place=markers.centers_scanner_mm[3])]
    )
    assert after.status == ("seen", "seen", "corrected", "inferred")
    assert after.marker.tolist() == [0, 1, 3, -1]
    assert np.isnan(after.capsule_scanner_mm[3]).all()
    assert [(f.level, f.subject) for f in after.findings] == [("look", "C4")]


def test_an_absent_capsule_leaves_the_layout_s_place(case):
    electrodes, markers, skin = case
    after = apply_reviews(electrodes, markers, skin, [review("Fz", "absent")])
    assert after.status[0] == "corrected"
    assert np.isnan(after.capsule_scanner_mm[0]).all()
    assert np.array_equal(after.positions_scanner_mm[0], electrodes.fitted_scanner_mm[0])


def test_a_place_without_a_blob_is_taken_as_it_is(case):
    electrodes, markers, skin = case
    place = CENTER + 86 * outward(0.5, 0.5, 0.7)
    after = apply_reviews(electrodes, markers, skin, [review("Fz", place=place)])
    assert after.marker[0] == -1
    assert np.array_equal(after.capsule_scanner_mm[0], place)
    assert np.linalg.norm(after.positions_scanner_mm[0] - CENTER) == pytest.approx(80, abs=0.3)
    contact = apply_reviews(electrodes, markers, skin, [review("Fz", "contact", place)])
    assert np.array_equal(contact.positions_scanner_mm[0], place)


def test_the_newest_decision_holds_whatever_the_order_of_the_lines():
    old = review("Cz", place=[0, 0, 90], when="2026-01-31T12:00:00Z")
    new = review("Cz", "absent", when="2026-01-31T13:30:00+01:00")  # 12:30 UTC
    for lines in ([old, new], [new, old]):
        in_force, findings = decisions_in_force(lines)
        assert in_force["Cz"] is new
        assert findings == ()  # one person may change their mind
    same = review("Cz", place=[0, 0, 91])
    assert decisions_in_force([old, same])[0]["Cz"] is same


def test_two_people_who_differ_are_a_finding_and_two_who_agree_are_none():
    first = review("Cz", place=[0, 0, 90])
    differs = review("Cz", place=[0, 4, 90], who="B", when="2026-01-31T14:00:00Z")
    agrees = replace(differs, place_scanner_mm=np.array([0.0, 0.3, 90]))
    in_force, findings = decisions_in_force([first, differs])
    assert in_force["Cz"] is differs
    assert [(f.level, f.subject) for f in findings] == [("look", "Cz")]
    assert "A" in findings[0].problem
    assert "B" in findings[0].problem
    assert decisions_in_force([first, agrees])[1] == ()


def test_a_decision_taken_back_does_not_count():
    first = review("Cz", place=[0, 0, 90])
    other = review("Cz", "absent", who="B", when="2026-01-31T13:00:00Z")
    back = review("Cz", "withdrawn", who="B", when="2026-01-31T14:00:00Z")
    in_force, findings = decisions_in_force([first, other, back])
    assert in_force == {"Cz": first}
    assert findings == ()
    assert decisions_in_force([first, replace(back, who="A")])[0] == {}


def test_one_capsule_for_two_and_unknown_names_are_told(case):
    electrodes, markers, skin = case
    place = markers.centers_scanner_mm[4]
    after = apply_reviews(
        electrodes, markers, skin, [review("C3", place=place), review("C4", place=place)]
    )
    assert any("C3 and C4" in finding.problem for finding in after.findings)
    after = apply_reviews(electrodes, markers, skin, [review("Oz", place=place)])
    assert [(f.level, f.subject) for f in after.findings] == [("note", "Oz")]
    assert after.status == electrodes.status


def test_decisions_come_back_from_the_file_as_they_were_added(tmp_path):
    path = tmp_path / "review.jsonl"
    added = [
        review("Cz", place=[1.25, -2, 90.5]),
        review("C3", "contact", [1, 2, 3], who="Ø. Ü"),
        review("C4", "absent"),
        review("Cz", "withdrawn"),
    ]
    size = 0
    for one in added:
        append_review(path, one, before=None)
        assert path.stat().st_size > size
        size = path.stat().st_size
    back, findings = read_reviews(path)
    assert findings == ()
    for here, there in zip(added, back, strict=True):
        assert (here.who, here.when, here.electrode, here.kind) == (
            there.who,
            there.when,
            there.electrode,
            there.kind,
        )
        if here.place_scanner_mm is not None:
            assert np.allclose(here.place_scanner_mm, there.place_scanner_mm, atol=1e-3)


def test_adding_after_a_cut_off_line_loses_nothing(tmp_path):
    path = tmp_path / "review.jsonl"
    append_review(path, review("Cz", "absent"), before=None)
    path.write_bytes(path.read_bytes() + b'{"who": "A", "wh')
    append_review(path, review("C3", "absent"), before=None)
    with pytest.raises(FileError, match="Line 2"):
        read_reviews(path)


@pytest.mark.parametrize(
    "line",
    [
        "[]",
        '{"who": "A", "when": "2026-01-31T12:00:00Z", "electrode": "Cz"}',
        '{"who": "A", "when": "yesterday", "electrode": "Cz", "after": null}',
        '{"who": "", "when": "2026-01-31T12:00:00Z", "electrode": "Cz", "after": null}',
        '{"who": "A", "when": "2026-01-31T12:00:00Z", "electrode": "Cz", "after": {"x": 1}}',
        '{"who": "A", "when": "2026-01-31T12:00:00Z", "electrode": "Cz", "after": {"capsule": [1]}}',
    ],
)
def test_a_line_that_is_no_decision_is_refused_by_its_number(tmp_path, line):
    path = tmp_path / "review.jsonl"
    append_review(path, review("Cz", "absent"), before=None)
    path.write_text(path.read_text() + line + "\n")
    with pytest.raises(FileError, match=r"Line 2 of .*review\.jsonl"):
        read_reviews(path)

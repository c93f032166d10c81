"""The phantoms are what they claim to be: closed forms, volumes, places, bytes."""

from __future__ import annotations

import hashlib
import json
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from scipy import ndimage as ndi
from scipy.spatial import cKDTree
from scipy.spatial.transform import Rotation

from synthetic_heads import heads
from synthetic_heads.__main__ import main
from synthetic_heads.cap import make_cap
from synthetic_heads.heads import make_head
from synthetic_heads.meshes import Skin, icosphere
from synthetic_heads.scan import make_scan, paint_capsules, scan_grid, water_and_fat
from synthetic_heads.tape import CAPS, NAMES_19, NAMES_61, all_places, place_names

SPHERE_MARKS = {
    "NAS": np.array([0.0, 90, 0]),
    "INI": np.array([0.0, -90, 0]),
    "LPA": np.array([-90.0, 0, 0]),
    "RPA": np.array([90.0, 0, 0]),
}


@pytest.fixture(scope="module")
def shaped():
    return make_head(11)


@pytest.fixture(scope="module")
def sphere():
    return make_head(3, "sphere")


@pytest.fixture(scope="module")
def small():
    """The shaped head on a 2 mm grid."""
    return make_head(11, voxel_mm=2.0)


@pytest.fixture(scope="module")
def small_sphere():
    return make_head(3, "sphere", voxel_mm=2.0)


@pytest.fixture(scope="module")
def ball():
    vertices, faces = icosphere(5)
    return 90.0 * vertices, faces


def mesh_volume(vertices, faces):
    corners = vertices[faces]
    return np.einsum("ij,ij->i", corners[:, 0], np.cross(corners[:, 1], corners[:, 2])).sum() / 6


def is_closed(faces):
    """Every edge is walked once in each direction."""
    edges = np.concatenate([faces[:, [0, 1]], faces[:, [1, 2]], faces[:, [2, 0]]]).astype(np.int64)
    size = edges.max() + 1
    forward = np.sort(edges[:, 0] * size + edges[:, 1])
    backward = np.sort(edges[:, 1] * size + edges[:, 0])
    return bool(np.all(np.diff(forward) > 0) and np.array_equal(forward, backward))


def voxel_places(head):
    index = np.indices(head.labels.shape).reshape(3, -1).T
    return index @ head.scanner_from_voxel[:3, :3].T + head.scanner_from_voxel[:3, 3]


# --- heads ---------------------------------------------------------------------------------


def test_sphere_labels_fill_the_exact_shells(sphere):
    # counting voxel centres: the surface term averages out, 0.5 % is three times what is left
    label = sphere.labels
    voxel = abs(np.linalg.det(sphere.scanner_from_voxel[:3, :3]))
    ball_mm3 = {name: 4 / 3 * np.pi * r**3 for name, r in sphere.radii_mm.items()}
    bone = np.isin(label, (heads.BONE, heads.MARROW)).sum() * voxel
    skin = np.isin(label, (heads.SKIN, heads.FAT)).sum() * voxel
    inside = np.isin(label, (heads.CSF, heads.GREY, heads.WHITE)).sum() * voxel
    assert bone == pytest.approx(ball_mm3["outer_skull"] - ball_mm3["inner_skull"], rel=0.005)
    assert skin == pytest.approx(ball_mm3["scalp"] - ball_mm3["outer_skull"], rel=0.005)
    assert inside == pytest.approx(ball_mm3["inner_skull"], rel=0.005)


def test_sphere_has_grey_matter_at_four_fifths_of_the_inner_radius(sphere):
    radius = np.linalg.norm(voxel_places(sphere) - sphere.center_mm, axis=1)
    shell = np.abs(radius - 0.8 * sphere.radii_mm["inner_skull"]) < 1.0
    share = np.mean(sphere.labels.reshape(-1)[shell] == heads.GREY)
    assert 0.15 < share < 0.7


def test_sphere_landmarks_and_vertices_lie_on_it(sphere):
    for name, radius in sphere.radii_mm.items():
        vertices, _ = sphere.surfaces[name]
        away = np.linalg.norm(vertices - sphere.center_mm, axis=1)
        assert np.allclose(away, radius, atol=1e-9)
    for point in sphere.landmarks_mm.values():
        assert np.linalg.norm(point - sphere.center_mm) == pytest.approx(92.0)


@pytest.mark.parametrize("name", ["scalp", "outer_skull", "inner_skull", "pial"])
def test_shaped_surfaces_are_closed_and_outward(shaped, name):
    vertices, faces = shaped.surfaces[name]
    assert is_closed(faces)
    assert mesh_volume(vertices, faces) > 0


def test_shaped_surfaces_are_where_the_labels_change(shaped):
    # the label grid samples the same levels: a surface vertex moved 1 mm in or out along its
    # normal changes tissue (thin places and folds excepted)
    affine = np.linalg.inv(shaped.scanner_from_voxel)
    inside_brain_case = (
        heads.CSF, heads.GREY, heads.WHITE, heads.CEREBELLUM, heads.BRAINSTEM,
    )  # fmt: skip
    for name, tissues, goal in (
        ("inner_skull", inside_brain_case, 0.97),
        ("scalp", tuple(range(1, 12)), 0.97),
    ):
        vertices, faces = shaped.surfaces[name]
        skin = Skin(vertices, faces)
        upper = vertices[:, 2] > shaped.center_mm[2] - 20
        for shift, expected in ((-1.2, True), (1.2, False)):
            points = vertices[upper] + shift * skin.normals[upper]
            index = np.rint(points @ affine[:3, :3].T + affine[:3, 3]).astype(int)
            index = np.clip(index, 0, np.array(shaped.labels.shape) - 1)
            found = np.isin(shaped.labels[tuple(index.T)], tissues)
            assert np.mean(found == expected) > goal


def test_shaped_surfaces_are_nested(shaped):
    scalp, outer, inner = (shaped.surfaces[n] for n in ("scalp", "outer_skull", "inner_skull"))
    for small, large in ((inner, outer), (outer, scalp)):
        skin = Skin(*large)
        near = skin.closest(small[0])
        height = np.einsum("ij,ij->i", small[0] - near, skin.normal(near, 4.0))
        assert np.percentile(height, 99.9) < -1.0


def test_head_sizes_follow_the_drawn_norms_over_seeds():
    for seed in range(4):
        head = make_head(seed, voxel_mm=2.0, pose_sd=(0.0, 5.0))
        drawn = head.settings
        vertices = head.surfaces["scalp"][0]
        ears = (head.landmarks_mm["LPA"] + head.landmarks_mm["RPA"]) / 2
        upper = vertices[vertices[:, 2] > ears[2] + 38.0]
        breadth = np.ptp(upper[:, 0])
        assert breadth == pytest.approx(drawn["breadth"], abs=4.0)
        length = np.ptp(upper[:, 1])
        assert length == pytest.approx(drawn["length"], abs=4.0)
        height = vertices[:, 2].max() - ears[2]
        assert height == pytest.approx(drawn["tragion_height"], abs=4.0)
        # 5th to 95th percentile of the survey, a little wider (men and women)
        assert 137 < drawn["breadth"] < 166
        assert 175 < drawn["length"] < 214
        # brain case 1.1 to 1.9 litres: the usual range of adults (common knowledge, no source)
        volume = mesh_volume(*head.surfaces["inner_skull"]) / 1e6
        assert 1.1 < volume < 1.95
        # skull 6.0 +- 1.9 mm at the sites of the 10-20 system (Strangman et al. 2014,
        # NeuroImage 85:136), mean of the vault
        outer = head.surfaces["outer_skull"][0]
        vault = outer[outer[:, 2] > head.center_mm[2]]
        thickness = cKDTree(head.surfaces["inner_skull"][0]).query(vault)[0].mean()
        assert 4.0 < thickness < 9.5


def test_shaped_head_has_every_tissue_in_plausible_amounts(shaped):
    litres = np.bincount(shaped.labels.ravel(), minlength=12) * 1e-6
    assert 0.40 < litres[heads.GREY] < 0.85
    assert 0.30 < litres[heads.WHITE] < 0.80
    assert 0.10 < litres[heads.CSF] < 0.50
    assert 0.08 < litres[heads.CEREBELLUM] < 0.18
    for tissue in range(1, 12):
        assert litres[tissue] > 0.003, heads.TISSUE_NAMES[tissue]


def test_cortex_is_folded_and_about_as_thick_as_drawn(shaped):
    label = shaped.labels
    grey, white = label == heads.GREY, label == heads.WHITE
    # folded: much more pial surface than a smooth brain of the same volume
    vertices, faces = shaped.surfaces["pial"]
    corners = vertices[faces]
    area = 0.5 * np.linalg.norm(
        np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]), axis=1
    ).sum()  # fmt: skip
    volume = (grey | white).sum()
    smooth = (36 * np.pi * volume**2) ** (1 / 3)
    assert area > 2.0 * smooth
    # white matter next to grey: the distance from fluid to white is the cortex
    far = ndi.distance_transform_edt(white | grey)
    border = white & ndi.binary_dilation(grey)
    middle = np.median(far[border]) - 0.5
    assert middle == pytest.approx(shaped.settings["cortex"], abs=0.6)


def test_cord_leaves_through_the_base_to_the_lower_edge(shaped):
    stem = shaped.labels == heads.BRAINSTEM
    assert stem[:, :, 0].sum() > 40
    parts, count = ndi.label(stem)
    sizes = np.bincount(parts.ravel())[1:]
    assert sizes.max() > 0.98 * sizes.sum(), count


def test_left_and_right_differ_a_little(shaped):
    head = make_head(11, voxel_mm=2.0, pose_sd=(0.0, 0.0))
    skin = head.surfaces["scalp"][0]
    upper = skin[skin[:, 2] > 0]
    mirrored = upper * [-1, 1, 1]
    apart = cKDTree(skin).query(mirrored)[0]
    assert 0.4 < np.sqrt(np.mean(apart**2)) < 4.0


def test_landmarks_are_on_the_skin_and_in_order(shaped):
    skin = Skin(*shaped.surfaces["scalp"])
    for point in shaped.landmarks_mm.values():
        assert np.linalg.norm(skin.closest(point[None])[0] - point) < 0.6
    marks = shaped.landmarks_mm
    assert marks["RPA"][0] - marks["LPA"][0] > 120
    assert marks["NAS"][1] - marks["INI"][1] > 160
    # the nose stands out in front of the nasion, below it
    nose = skin.vertices[skin.vertices[:, 1].argmax()]
    assert nose[1] > marks["NAS"][1] + 10
    assert nose[2] < marks["NAS"][2] - 20


def test_same_seed_same_head_and_another_seed_another_head():
    one, two, other = (make_head(seed, voxel_mm=3.0) for seed in (5, 5, 6))
    assert np.array_equal(one.labels, two.labels)
    assert all(np.array_equal(one.surfaces[n][0], two.surfaces[n][0]) for n in one.surfaces)
    assert one.labels.shape != other.labels.shape or (one.labels != other.labels).mean() > 0.02


def test_unknown_kind_is_refused():
    with pytest.raises(ValueError, match="cube"):
        make_head(0, "cube")


# --- tape ----------------------------------------------------------------------------------


def test_places_on_a_sphere_are_the_closed_form_angles(ball):
    # Landmarks on the equator: tapes are half circles, percent are degrees / 1.8.
    places = all_places(*ball, SPHERE_MARKS)
    for name, percent in (("Fpz", 10), ("Fz", 30), ("Cz", 50), ("Pz", 70), ("Oz", 90)):
        angle = np.radians(1.8 * percent)
        exact = 90 * np.array([0, np.cos(angle), np.sin(angle)])
        # the mesh is inscribed: a chord lies up to 0.06 mm inside and 0.02 % short
        assert np.linalg.norm(places[name] - exact) < 0.25, name
    for name, percent in (("T7", 10), ("C3", 30), ("C4", 70), ("T8", 90)):
        angle = np.radians(1.8 * percent)
        exact = 90 * np.array([-np.cos(angle), 0, np.sin(angle)])
        assert np.linalg.norm(places[name] - exact) < 0.25, name
    # the ring through Fpz, T7, Oz is a circle of radius 90 cos 18 deg; Fp1 is a fifth of a
    # quarter from Fpz, F7 three fifths
    ring, height = 90 * np.cos(np.radians(18)), 90 * np.sin(np.radians(18))
    for name, share in (("Fp1", 0.2), ("AF7", 0.4), ("F7", 0.6), ("P7", 1.4), ("O1", 1.8)):
        angle = np.radians(90 * share)
        exact = np.array([-ring * np.sin(angle), ring * np.cos(angle), height])
        assert np.linalg.norm(places[name] - exact) < 0.3, name


def test_places_move_with_the_head(shaped):
    vertices, faces = shaped.surfaces["scalp"]
    turn = Rotation.from_euler("xyz", [12, -7, 30], degrees=True).as_matrix()
    shift = np.array([5.0, -40, 12])
    names = (*NAMES_61, "TP9", "F10", "Iz", "A1", "M2", "FFC3h")
    here = place_names(vertices, faces, shaped.landmarks_mm, names)
    marks = {k: turn @ v + shift for k, v in shaped.landmarks_mm.items()}
    there = place_names(vertices @ turn.T + shift, faces, marks, names)
    assert np.abs(there - (here @ turn.T + shift)).max() < 0.1


def test_mirroring_the_head_swaps_left_and_right_names(shaped):
    vertices, faces = shaped.surfaces["scalp"]
    flip = np.array([-1.0, 1, 1])
    marks = {k: v * flip for k, v in shaped.landmarks_mm.items()}
    marks["LPA"], marks["RPA"] = marks["RPA"], marks["LPA"]
    here = all_places(vertices, faces, shaped.landmarks_mm)
    there = all_places(vertices * flip, faces[:, ::-1], marks)
    for left, right in (("C3", "C4"), ("F7", "F8"), ("PO7", "PO8"), ("FC5", "FC6"), ("T9", "T10")):
        assert np.linalg.norm(there[left] - here[right] * flip) < 0.3


def test_neighbours_stand_about_as_far_apart_as_published(shaped):
    # Nearest neighbours of the 61 places of the template set: 32.1 +- 2.8 mm on a head 169 mm
    # wide between T7 and T8 (computed from mne's builtin set); so 0.190 of that width.
    places = place_names(*shaped.surfaces["scalp"], shaped.landmarks_mm, NAMES_61)
    wide = np.linalg.norm(places[NAMES_61.index("T7")] - places[NAMES_61.index("T8")])
    nearest = cKDTree(places).query(places, k=2)[0][:, 1]
    assert np.mean(nearest) / wide == pytest.approx(0.190, abs=0.025)
    assert nearest.min() > 18


def test_old_names_are_the_new_places(ball):
    old = place_names(*ball, SPHERE_MARKS, ["T3", "T4", "T5", "T6"])
    new = place_names(*ball, SPHERE_MARKS, ["T7", "T8", "P7", "P8"])
    assert np.array_equal(old, new)


@pytest.mark.parametrize("count", sorted(CAPS))
def test_caps_have_as_many_different_names_as_they_say(count):
    assert len(set(CAPS[count])) == len(CAPS[count]) == count


def test_unknown_name_and_missing_landmark_are_named(ball):
    with pytest.raises(ValueError, match="Q7"):
        place_names(*ball, SPHERE_MARKS, ["Cz", "Q7"])
    with pytest.raises(ValueError, match="INI"):
        all_places(*ball, {k: v for k, v in SPHERE_MARKS.items() if k != "INI"})


# --- cap -----------------------------------------------------------------------------------


def test_capsules_sit_over_their_contacts(ball):
    cap = make_cap(*ball, SPHERE_MARKS, NAMES_61, 0, gap_mm=3.0, capsule_mm=(8.0, 5.0))
    height = np.linalg.norm(cap.capsules.centers_mm, axis=1) - np.linalg.norm(
        cap.contacts_mm, axis=1
    )
    assert np.allclose(height, cap.capsules.gaps_mm + cap.capsules.heights_mm / 2, atol=0.02)
    assert cap.capsules.gaps_mm.mean() == pytest.approx(3.0, abs=0.2)
    assert np.allclose(cap.normals, cap.contacts_mm / 90, atol=0.02)


def test_an_untouched_cap_sits_at_the_places(ball):
    cap = make_cap(*ball, SPHERE_MARKS, NAMES_19, 0)
    places = place_names(*ball, SPHERE_MARKS, NAMES_19)
    assert np.abs(cap.contacts_mm - places).max() < 0.05


def test_jitter_has_the_stated_spread_per_axis(ball):
    still = make_cap(*ball, SPHERE_MARKS, NAMES_61, 0).contacts_mm
    squares = [
        ((make_cap(*ball, SPHERE_MARKS, NAMES_61, s, jitter_mm=2.5).contacts_mm - still) ** 2)
        .sum(axis=1)
        for s in range(8)
    ]  # fmt: skip
    # two tangential axes; 976 draws: SD of the estimate 1.6 %
    assert np.sqrt(np.mean(squares) / 2) == pytest.approx(2.5, rel=0.06)


def test_exact_turn_turns_every_electrode(ball):
    still = make_cap(*ball, SPHERE_MARKS, NAMES_61, 0).contacts_mm
    turned = make_cap(*ball, SPHERE_MARKS, NAMES_61, 1, turn_deg=6.0, exact=True)
    fit, residual = Rotation.align_vectors(turned.contacts_mm, still)
    # the turn is about the middle of the ring of the cap, 28 mm over the ball's centre, and the
    # cap is then put back on the ball; so the ball turns by less than 6 degrees about x and y
    angle = np.degrees(np.abs(fit.as_rotvec()))
    assert angle[2] == pytest.approx(6.0, abs=0.7)
    assert np.all((angle > 3.0) & (angle < 7.0))
    assert residual / np.sqrt(61) < 3.0


def test_slide_moves_the_cap_as_a_whole(ball):
    still = make_cap(*ball, SPHERE_MARKS, NAMES_61, 0).contacts_mm
    slid = make_cap(*ball, SPHERE_MARKS, NAMES_61, 2, slide_mm=8.0, exact=True).contacts_mm
    vertex = NAMES_61.index("Cz")
    assert np.linalg.norm(slid[vertex] - still[vertex]) == pytest.approx(8.0, abs=0.3)
    # tangential at the vertex, so no electrode of the ring moves further than the vertex does
    assert np.linalg.norm(slid - still, axis=1).max() < 8.5


@pytest.mark.parametrize("where", ["anywhere", "inside", "outside"])
def test_extra_blobs_keep_clear_of_every_named_place(shaped, where):
    for seed in range(3):
        cap = make_cap(
            *shaped.surfaces["scalp"], shaped.landmarks_mm, NAMES_61, seed,
            n_extra=8, n_off=4, jitter_mm=2.5, extra_where=where,
        )  # fmt: skip
        assert len(cap.extras) == 8
        feet = cap.extras.centers_mm - cap.extras.axes * (
            cap.extras.gaps_mm + cap.extras.heights_mm / 2
        )[:, None]  # fmt: skip
        assert cKDTree(cap.contacts_mm).query(feet)[0].min() >= 12.0
        assert cap.present.sum() == 57
        if where == "outside":
            center = shaped.center_mm[2]
            assert feet[:, 2].max() < center


def test_no_electrode_and_no_blob_sits_on_an_ear(shaped):
    # below a pad on the head there is head; below one on an ear there is air again
    inverse = np.linalg.inv(shaped.scanner_from_voxel)
    for seed in range(3):
        cap = make_cap(
            *shaped.surfaces["scalp"], shaped.landmarks_mm, CAPS[128], seed,
            jitter_mm=3.0, turn_deg=4.0, slide_mm=4.0, n_extra=8, extra_where="outside",
        )  # fmt: skip
        feet = cap.worn.centers_mm - cap.worn.axes * (
            cap.worn.gaps_mm + cap.worn.heights_mm / 2 + 9.0
        )[:, None]  # fmt: skip
        index = np.rint(feet @ inverse[:3, :3].T + inverse[:3, 3]).astype(int)
        index = np.clip(index, 0, np.array(shaped.labels.shape) - 1)
        smooth = ndi.binary_closing(shaped.labels > 0, iterations=3)
        assert np.mean(smooth[tuple(index.T)]) > 0.99


def test_reference_and_side_marker_are_worn(shaped):
    cap = make_cap(
        *shaped.surfaces["scalp"], shaped.landmarks_mm, NAMES_19, 0,
        also=("FCz", "AFz"), off=("Cz",), side_marker="left",
    )  # fmt: skip
    assert cap.names == (*NAMES_19, "FCz", "AFz")
    assert not cap.present[NAMES_19.index("Cz")]
    assert len(cap.worn) == 19 + 2 - 1 + 1
    assert cap.side_capsule.centers_mm[0, 0] < shaped.landmarks_mm["LPA"][0] + 15
    truth = cap.truth()
    assert truth["side_marker"] == "left"
    by_name = {e["name"]: e for e in truth["electrodes"]}
    assert by_name["Cz"]["capsule_mm"] is None
    assert not by_name["FCz"]["channel"]


@pytest.mark.parametrize(
    ("settings", "culprit"),
    [
        ({"capsule_mm": (3.0, 6.0)}, "3.0"),
        ({"capsule_mm": (8.0, 13.0)}, "13.0"),
        ({"shape": "cube"}, "cube"),
        ({"extra_where": "above"}, "above"),
        ({"side_marker": "front"}, "front"),
        ({"also": ("Cz",)}, "Cz"),
        ({"n_off": 40}, "40"),
        ({"n_extra": 400}, "400"),
    ],
)
def test_impossible_caps_are_refused(ball, settings, culprit):
    with pytest.raises(ValueError, match=culprit):
        make_cap(*ball, SPHERE_MARKS, NAMES_19, 0, **settings)


# --- painting and scanning -------------------------------------------------------------------


def blob(image, affine, center, reach=9.0):
    """Sum (times voxel volume) and centre of mass of the image round a place."""
    index = np.indices(image.shape).reshape(3, -1).T
    places = index @ affine[:3, :3].T + affine[:3, 3]
    near = np.linalg.norm(places - center, axis=1) < reach
    weight = image.reshape(-1)[near].astype(np.float64)
    return weight.sum() * abs(np.linalg.det(affine[:3, :3])), weight @ places[near] / weight.sum()


@pytest.mark.parametrize("form", ["ellipsoid", "disc"])
@pytest.mark.parametrize(
    ("voxel", "oblique"), [((1.0, 1.0, 1.0), 0.0), ((0.8, 0.8, 2.5), 17.0), ((2.0, 1.0, 1.0), -9.0)]
)
def test_painted_oil_has_its_volume_and_its_centre(ball, form, voxel, oblique):
    cap = make_cap(
        *ball, SPHERE_MARKS, ("Cz", "C3"), 0, shape=form, capsule_mm=(8.0, 5.0), brightness_sd=0.0
    )
    affine = np.eye(4)
    turn = Rotation.from_euler("xyz", [oblique, oblique / 2, -oblique], degrees=True).as_matrix()
    affine[:3, :3] = turn @ np.diag(voxel)
    center = cap.capsules.centers_mm[0]
    shape = tuple(int(30 / v) for v in voxel)
    affine[:3, 3] = center + np.array([0.3, -0.2, 0.1]) - affine[:3, :3] @ (np.array(shape) / 2)
    image = paint_capsules(
        np.zeros(shape), affine, cap, brightness=1.0, fat_intensity=100.0, darken=0.0
    )
    d, h = cap.capsules.diameters_mm[0], cap.capsules.heights_mm[0]
    exact = np.pi * d**2 * h * (1 / 6 if form == "ellipsoid" else 1 / 4)
    volume, middle = blob(image / 100.0, affine, center)
    assert volume == pytest.approx(exact, rel=0.02)
    assert np.linalg.norm(middle - center) < 0.05


def test_painted_oil_shifts_and_the_input_stays(ball):
    cap = make_cap(*ball, SPHERE_MARKS, ("Cz", "C3"), 0)
    affine = np.eye(4)
    center = cap.capsules.centers_mm[0]
    affine[:3, 3] = np.round(center) - 15
    image = np.zeros((31, 31, 31), np.float32)
    before = image.copy()
    settings = {"fat_intensity": 100.0, "darken": 0.0}
    still = blob(paint_capsules(image, affine, cap, **settings), affine, center)[1]
    moved = paint_capsules(image, affine, cap, shift_mm=(0.0, 2.2, 0.0), **settings)
    assert np.array_equal(image, before)
    shift = blob(moved, affine, center)[1] - still
    assert np.abs(shift - [0, 2.2, 0]).max() < 0.05


def test_housing_and_shade_darken_what_is_below(shaped):
    cap = make_cap(*shaped.surfaces["scalp"], shaped.landmarks_mm, NAMES_19, 0, gap_mm=1.0)
    bare, affine = make_scan(shaped, None, noise=0.0, bias=0.0)
    worn, _ = make_scan(shaped, cap, noise=0.0, bias=0.0, darken=0.4, housing_mm=1.0)
    inverse = np.linalg.inv(affine)
    points = cap.contacts_mm - 1.5 * cap.normals
    index = np.rint(points @ inverse[:3, :3].T + inverse[:3, 3]).astype(int)
    before, after = bare[tuple(index.T)], worn[tuple(index.T)]
    assert np.all(after <= before)
    assert np.median(after / before) < 0.8


def test_capsule_brightness_is_as_asked(shaped):
    cap = make_cap(
        *shaped.surfaces["scalp"], shaped.landmarks_mm, NAMES_19, 0, capsule_mm=(10, 9),
        brightness_sd=0.0,
    )  # fmt: skip
    image, affine = make_scan(shaped, cap, noise=0.0, bias=0.0, brightness=1.1, texture=0.0)
    inverse = np.linalg.inv(affine)
    index = np.rint(cap.worn.centers_mm @ inverse[:3, :3].T + inverse[:3, 3]).astype(int)
    oil = image[tuple(index.T)]
    _, fat = water_and_fat(shaped, 0, texture=0.0)
    deep = ndi.binary_erosion(shaped.labels == heads.FAT, iterations=2)
    white = ndi.binary_erosion(shaped.labels == heads.WHITE, iterations=2)
    water, _ = water_and_fat(shaped, 0, texture=0.0)
    # fat over white matter about 2 to 2.3, capsule 1.0 to 1.15 x fat (computed from T1 values)
    pure_fat = 6.0 * np.median((fat + water)[deep])
    pure_white = 6.0 * np.median(water[white])
    assert 2.0 < pure_fat / pure_white < 2.35
    assert np.median(oil) / pure_fat == pytest.approx(1.1, abs=0.06)


@pytest.mark.parametrize(("axes", "read_axis"), [("RAS", 0), ("LIA", 1), ("PSR", 2)])
def test_all_fat_moves_along_the_read_axis_and_water_does_not(small_sphere, axes, read_axis):
    sphere = small_sphere
    cap = make_cap(*sphere.surfaces["scalp"], sphere.landmarks_mm, NAMES_19, 0)
    settings = {
        "axes": axes,
        "read_axis": read_axis,
        "noise": 0.0,
        "bias": 0.0,
        "voxel_mm": (2,) * 3,
    }
    plain, affine = make_scan(sphere, cap, **settings)
    moved, _ = make_scan(sphere, cap, chemical_shift_voxels=2.0, **settings)
    way = affine[:3, read_axis] * 2.0
    center = cap.worn.centers_mm[list(NAMES_19).index("Cz")]
    along = way / np.linalg.norm(way)
    if abs(along[2]) < 0.5:  # away from the scalp's own fat
        start = blob(np.where(plain > 300, plain, 0), affine, center, 6.0)[1]
        end = blob(np.where(moved > 300, moved, 0), affine, center + way, 6.0)[1]
        assert np.abs(end - start - way).max() < 0.4
    # brain: no change; scalp: the fat shell has moved by two voxels as a whole
    index = np.linalg.inv(affine)
    middle = np.rint(index[:3, :3] @ sphere.center_mm + index[:3, 3]).astype(int)
    box = tuple(slice(m - 12, m + 13) for m in middle)
    assert np.allclose(plain[box], moved[box], atol=1e-2)
    fat, fat_moved = (np.where(i > 700, i, 0.0) for i in (plain, moved))
    score = {
        k: float((np.roll(fat, k, axis=read_axis) * fat_moved).sum()) for k in range(-4, 5)
    }  # fmt: skip
    assert max(score, key=score.get) == 2


def test_every_grid_shows_the_same_head_at_the_same_place(small):
    rng = np.random.default_rng(0)
    # values deep in white matter do not depend on the grid; a wrong axis would find other tissue
    deep = ndi.binary_erosion(small.labels == heads.WHITE, iterations=2)
    index = np.argwhere(deep)
    index = index[rng.choice(len(index), 300)]
    points = index @ small.scanner_from_voxel[:3, :3].T + small.scanner_from_voxel[:3, 3]
    for grid in (
        {"voxel_mm": (2.0, 2.0, 2.0)},
        {"voxel_mm": (2.0, 2.0, 2.0), "axes": "LIA"},
        {"axes": "PSR", "voxel_mm": (2.4, 1.8, 2.0)},
        {"voxel_mm": (2.0, 2.0, 2.0), "oblique_deg": (15.0, -8.0, 5.0)},
        {"voxel_mm": (2.0, 2.0, 4.0), "axes": "RAI"},
        {"voxel_mm": (2.0, 2.0, 2.0), "crop_mm": {"I": 30.0, "R": 10.0}},
    ):
        image, affine = make_scan(small, None, noise=0.0, bias=0.0, texture=0.0, **grid)
        inverse = np.linalg.inv(affine)
        place = (points @ inverse[:3, :3].T + inverse[:3, 3]).T
        found = ndi.map_coordinates(image, place, order=1, mode="constant", cval=np.nan)
        assert np.nanmedian(np.abs(found - 600.0)) < 12.0, grid
        assert np.nanpercentile(np.abs(found - 600.0), 90) < 60.0, grid
        assert np.isnan(found).mean() < 0.25
        wanted = grid.get("axes", "RAS")
        assert "".join(nib.aff2axcodes(affine)) == wanted
        sizes = np.linalg.norm(affine[:3, :3], axis=0)
        assert np.allclose(sizes, grid["voxel_mm"])


def test_the_skin_in_the_scan_is_where_the_surface_is(sphere):
    # half of the skin's signal lies on the surface: the exact radius, to a tenth of a voxel
    image, affine = make_scan(sphere, None, noise=0.0, bias=0.0, texture=0.0)
    directions, _ = icosphere(3)
    run = np.arange(86.0, 98.0, 0.05)
    points = sphere.center_mm + directions[:, None] * run[:, None]
    inverse = np.linalg.inv(affine)
    index = np.moveaxis(points @ inverse[:3, :3].T + inverse[:3, 3], -1, 0)
    profile = ndi.map_coordinates(image, index, order=1)
    skin = 6.0 * 58.0
    beyond = profile < skin / 2
    edge = run[np.argmax(beyond & (run > 90.5), axis=1)]
    assert np.mean(edge) == pytest.approx(92.0, abs=0.1)
    assert np.std(edge) < 0.15


def test_noise_in_air_is_rician(small_sphere):
    image, _ = make_scan(small_sphere, None, noise=0.05, bias=0.0, seed=4)
    corner = image[:20, :20, :20]
    sd = 0.05 * 600.0
    # Rayleigh: mean sd sqrt(pi/2), SD sd sqrt(2 - pi/2); 8000 voxels: 0.6 %
    assert corner.mean() == pytest.approx(sd * np.sqrt(np.pi / 2), rel=0.03)
    assert corner.std() == pytest.approx(sd * np.sqrt(2 - np.pi / 2), rel=0.04)


def test_receive_field_changes_the_brain_by_the_stated_amount(small_sphere):
    sphere = small_sphere
    flat, _ = make_scan(sphere, None, noise=0.0, bias=0.0, seed=2)
    bent, _ = make_scan(sphere, None, noise=0.0, bias=0.3, seed=2)
    inside = flat > 200
    ratio = bent[inside] / flat[inside]
    assert 0.15 < np.abs(np.log(ratio)).max() / np.log(1.3) < 1.35
    assert np.abs(np.log(ratio)).max() / np.log(1.3) > 0.6


def test_fat_suppression_takes_the_capsules_away(small_sphere):
    sphere = small_sphere
    cap = make_cap(*sphere.surfaces["scalp"], sphere.landmarks_mm, NAMES_19, 0)
    image, affine = make_scan(sphere, cap, noise=0.0, bias=0.0, fat_suppression=1.0)
    inverse = np.linalg.inv(affine)
    index = np.rint(cap.worn.centers_mm @ inverse[:3, :3].T + inverse[:3, 3]).astype(int)
    assert image[tuple(index.T)].max() < 30


@pytest.mark.parametrize("axes", ["RAX", "RRS", "RA"])
def test_impossible_axes_are_refused(sphere, axes):
    with pytest.raises(ValueError, match=axes):
        scan_grid(sphere, axes=axes)


# --- sessions --------------------------------------------------------------------------------


def hashes(folder: Path) -> dict[str, str]:
    return {p.name: hashlib.sha256(p.read_bytes()).hexdigest() for p in sorted(folder.iterdir())}


@pytest.mark.slow
def test_same_seed_same_bytes_and_the_truth_beside_them(tmp_path, capsys):
    arguments = ["--kind", "sphere", "--names", "19", "--also", "FCz", "--seed", "4",
                 "--voxel-mm", "2", "--trials", "8", "--off", "1", "--extra", "2"]  # fmt: skip
    for name in ("a", "b"):
        assert main(["--out", str(tmp_path / name), *arguments]) == 0
    assert "truth" in capsys.readouterr().out
    assert hashes(tmp_path / "a") == hashes(tmp_path / "b")
    assert (
        main(["--out", str(tmp_path / "c"), *arguments[:-6], "--seed", "5", "--no-recording"]) == 0
    )
    assert hashes(tmp_path / "c")["T1.nii.gz"] != hashes(tmp_path / "a")["T1.nii.gz"]

    image = nib.load(tmp_path / "a" / "T1.nii.gz")
    assert int(image.header["sform_code"]) == int(image.header["qform_code"]) == 1
    assert np.allclose(image.header.get_qform(), image.header.get_sform(), atol=1e-3)
    truth = json.loads((tmp_path / "a" / "truth.json").read_text())
    assert [e["name"] for e in truth["electrodes"]] == [*NAMES_19, "FCz"]
    assert sum(e["capsule_mm"] is None for e in truth["electrodes"]) == 1
    assert len(truth["extras_mm"]) == 2
    assert len(truth["dipoles"]) == 1
    # a present capsule shows as a bright blob where truth and shift say
    seen = next(e for e in truth["electrodes"] if e["capsule_mm"] and e["name"] != "FCz")
    place = np.array(seen["capsule_mm"]) + truth["chemical_shift_mm"]
    inverse = np.linalg.inv(image.affine)
    index = np.rint(inverse[:3, :3] @ place + inverse[:3, 3]).astype(int)
    data = np.asarray(image.dataobj)
    assert data[tuple(index)] > 1.2 * np.median(data[data > 300])
    sidecar = json.loads((tmp_path / "a" / "T1.json").read_text())
    hertz = 3.4 * 42.577 * sidecar["MagneticFieldStrength"]
    shift = hertz / sidecar["PixelBandwidth"]
    assert abs(truth["chemical_shift_voxels"]) == pytest.approx(shift, rel=1e-3)
    channels = (tmp_path / "a" / "eeg.vhdr").read_text(encoding="utf-8")
    assert "Cz" in channels
    assert "FCz" not in [line.split("=")[-1].split(",")[0] for line in channels.splitlines()]


def test_command_line_refuses_with_the_culprit(tmp_path, capsys):
    with pytest.raises(SystemExit) as stopped:
        main(["--out", str(tmp_path), "--kind", "sphere", "--capsule-mm", "2"])
    assert stopped.value.code == 2
    assert "2.0" in capsys.readouterr().err
    with pytest.raises(SystemExit) as stopped:
        main(["--out", str(tmp_path), "--names", "17"])
    assert stopped.value.code == 2
    assert "17" in capsys.readouterr().err

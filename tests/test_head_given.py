"""Surfaces of the user's own in place of ours: the same guarantees, and what follows from them."""

from __future__ import annotations

import json
import re
import shutil
from dataclasses import replace
from functools import cache

import nibabel as nib
import numpy as np
import pytest

from locator.errors import CommandLineError, FileError, HeadError
from locator.forward import ForwardOptions, compute_lead_field, electrode_rows
from locator.geometry import apply_affine, icosphere, mesh_volume_mm3
from locator.head import BONE, CSF, GREY, SOFT, Head, Surface, replace_surfaces, skull_thickness_mm
from locator.head.shape import crossings, distance_to_mesh, winding
from locator.io.gifti import read_surface
from locator.report.page import make_report
from locator.results import Finding
from locator.session.inputs import read_inputs
from locator.session.options import gather_options
from locator.sources import make_sources
from tests.sessions import run_arguments, small_run_folder, small_session, start
from tests.small_results import small_run, small_volume

CENTER = np.array([30.0, -50.0, 5.0])
RADII = {"inner_skull": 68.0, "outer_skull": 76.0, "scalp": 86.0}


@cache
def layered(*, left_handed: bool = True) -> Head:
    """Balls of 68, 76 and 86 mm; grey matter up to 62, CSF up to 68; 2 mm voxels."""
    size = 101
    affine = np.diag([-2.0 if left_handed else 2.0, 2.0, 2.0, 1.0])
    affine[:3, 3] = CENTER - affine[:3, :3] @ np.full(3, size // 2)
    radius = np.linalg.norm(
        apply_affine(affine, np.argwhere(np.ones((size,) * 3))) - CENTER, axis=1
    )
    tissues = np.select([radius < r for r in (62, 68, 76, 86)], [GREY, CSF, BONE, SOFT], 0)
    points, faces = icosphere(3)
    surfaces = {
        role: Surface(
            vertices_scanner_mm=CENTER + r * points, faces=faces, sd_mm=np.full(len(points), 0.7)
        )
        for role, r in RADII.items()
    }
    return Head(
        **surfaces,
        tissues=tissues.reshape((size,) * 3).astype(np.int32),
        scanner_from_voxel=affine,
        center_scanner_mm=CENTER,
        padded_mm=np.full(len(points), 0.5),
        brain_volume_ml=998.0,
        findings=tuple(
            Finding(level="look", stage="head", problem=f"of {s}", subject=s, doubt=0.5)
            for s in ("inner_skull", "outer_skull", "scalp", "")
        ),
    )


def ball(radius, level=3, center=CENTER):
    """Vertices and faces of a ball whose rays are not those of ours."""
    points, faces = icosphere(level)
    turn = np.linalg.qr(np.random.default_rng(1).normal(size=(3, 3)))[0]
    return center + radius * points @ (turn * np.linalg.det(turn)).T, faces


def radius_map(head):
    voxels = np.argwhere(np.ones(head.tissues.shape, bool))
    places = apply_affine(head.scanner_from_voxel, voxels)
    return np.linalg.norm(places - CENTER, axis=1).reshape(head.tissues.shape)


def of_distance(head):
    return [f for f in head.findings if "is used instead of ours" in f.problem]


# ── what is taken ────────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize("level", [2, 3, 4])
def test_a_sound_surface_takes_the_place_of_ours(level):
    vertices, faces = ball(66.0, level)
    head = replace_surfaces(layered(), {"inner_skull": (vertices, faces)})
    assert head.given == ("inner_skull",)
    assert np.array_equal(head.inner_skull.vertices_scanner_mm, vertices)
    assert np.isnan(head.inner_skull.sd_mm).all()
    assert head.outer_skull is layered().outer_skull
    assert head.scalp is layered().scalp
    (finding,) = of_distance(head)
    assert (finding.level, finding.subject) == ("note", "inner_skull")
    # Flat faces between vertices at 68 mm lie a little inside: 2 mm less that.
    assert "it lies 1.8 mm from ours on average (1.8 mm inside" in finding.problem


def test_nothing_given_changes_nothing():
    assert replace_surfaces(layered(), {}) is layered()


def test_a_surface_far_from_ours_needs_an_eye():
    near = of_distance(replace_surfaces(layered(), {"inner_skull": ball(65.5)}))[0]
    far = of_distance(replace_surfaces(layered(), {"inner_skull": ball(64.5)}))[0]
    assert (near.level, far.level) == ("note", "look")
    assert far.doubt > near.doubt


def test_faces_that_point_inward_are_turned_and_that_is_told():
    vertices, faces = ball(66.0)
    head = replace_surfaces(layered(), {"inner_skull": (vertices, faces[:, ::-1])})
    assert mesh_volume_mm3(head.inner_skull.vertices_scanner_mm, head.inner_skull.faces) > 1e6
    assert any("pointed inward" in f.problem for f in head.findings)
    plain = replace_surfaces(layered(), {"inner_skull": (vertices, faces)})
    assert not any("pointed inward" in f.problem for f in plain.findings)
    assert np.array_equal(head.tissues, plain.tissues)


def test_what_was_said_of_a_surface_that_is_gone_is_gone():
    def said(**given):
        return {f.problem for f in replace_surfaces(layered(), given).findings}

    assert {"of inner_skull", "of ", "of scalp"} <= said(outer_skull=ball(75.0))
    assert "of outer_skull" not in said(outer_skull=ball(75.0))
    assert "of outer_skull" in said(scalp=ball(85.0))
    assert "of scalp" not in said(scalp=ball(85.0))
    assert "of outer_skull" not in said(inner_skull=ball(67.0))  # its thickness was meant


def test_all_three_may_be_given_even_where_they_do_not_fit_ours():
    given = {"inner_skull": ball(77.0), "outer_skull": ball(83.0), "scalp": ball(92.0)}
    head = replace_surfaces(layered(), given)
    assert head.given == ("inner_skull", "outer_skull", "scalp")
    assert not head.padded_mm.any()
    assert [f.level for f in of_distance(head)] == ["look"] * 3
    with pytest.raises(HeadError, match="nested"):
        replace_surfaces(layered(), {"inner_skull": given["inner_skull"]})


def test_a_vault_that_is_too_thin_or_thick_is_told():
    def told(**given):
        head = replace_surfaces(layered(), given)
        return [f.problem for f in head.findings if "thick on average" in f.problem]

    assert not told(inner_skull=ball(66.0))
    assert "3.3 mm" in told(inner_skull=ball(72.5))[0]
    assert told(inner_skull=ball(63.0))


# ── what is refused, each beside the sound one ───────────────────────────────────────────


def torus():
    around, across = 40, 20
    a, b = np.meshgrid(np.arange(around), np.arange(across), indexing="ij")
    s, t = 2 * np.pi * a / around, 2 * np.pi * b / across
    ring = 55 + 35 * np.cos(t)
    vertices = CENTER + np.stack([ring * np.cos(s), ring * np.sin(s), 35 * np.sin(t)], -1)
    index = a * across + b
    right = np.roll(index, -1, axis=0)
    up, both = np.roll(index, -1, axis=1), np.roll(right, -1, axis=1)
    faces = np.concatenate(
        [np.stack([index, right, both], -1), np.stack([index, both, up], -1)]
    ).reshape(-1, 3)
    return vertices.reshape(-1, 3), faces


def broken(kind):
    """Return a sound inner skull with one thing wrong with it."""
    vertices, faces = (np.array(part) for part in ball(66.0))
    n = len(vertices)
    if kind == "flat points":
        return vertices[:, :2], faces
    if kind == "whole numbers":
        return vertices, faces.astype(float)
    if kind == "nan":
        vertices[17, 1] = np.nan
    if kind == "too many":
        return ball(66.0, 5)
    if kind == "too few":
        return ball(66.0, 1)
    if kind == "counted from 1":
        return vertices, faces + 1
    if kind == "hole":
        return vertices, faces[1:]
    if kind == "fin":
        a, b, _ = faces[0]
        vertices = np.concatenate([vertices, vertices[[a]] * 1.01])
        faces = np.concatenate([faces, [[a, b, n], [b, a, n]]])
    if kind == "one turned":
        faces[5] = faces[5, ::-1]
    if kind == "loose":
        vertices = np.concatenate([vertices, vertices[:1] * 0.5])
    if kind in ("two pieces", "pinched"):
        more, more_faces = ball(5.0, 1)
        more_faces = more_faces + n
        if kind == "pinched":
            more = more + vertices[3] - more[0]
            more_faces = np.where(more_faces == n, 3, more_faces - 1)
            more = more[1:]
            more_faces[more_faces == n - 1] = 3
        vertices = np.concatenate([vertices, more])
        faces = np.concatenate([faces, more_faces])
    if kind == "handle":
        return torus()
    if kind == "no area":
        vertices[faces[0, 0]] = vertices[faces[0, 1]]
    if kind == "metres":
        vertices = vertices / 1000
    if kind == "centimetres":
        vertices = vertices / 10
    if kind == "shrunk":
        vertices = CENTER + 0.7 * (vertices - CENTER)
    if kind == "spike":
        vertices[9] = CENTER - 1.02 * (vertices[9] - CENTER)
    if kind == "elsewhere":
        vertices = vertices + np.array([0.0, 150.0, 0.0])
    if kind == "volume's middle as origin":
        vertices = vertices - CENTER + [0.0, 0.0, -40.0]
    if kind == "x to the left":
        vertices = vertices * [-1, -1, 1]
    return vertices, faces


REFUSED = {
    "flat points": r"shape \(642, 2\)",
    "whole numbers": "float64.*whole numbers",
    "nan": "1 of 642 vertices.*not finite, first vertex 17",
    "too many": "10242 vertices; 162 to 2562.*Decimate",
    "too few": "42 vertices; 162 to 2562",
    "counted from 1": "outside 0 to 641",
    "hole": "is open: 3 edges.*mm",
    "fin": "1 edges with more than two faces",
    "one turned": "wound against",
    "loose": "1 vertices that belong to no face",
    "two pieces": r"2 pieces \(642, 42 vertices\)",
    "pinched": "pinched at 1 vertices",
    "handle": "1 handles",
    "no area": "without area",
    "metres": "in metres; multiply its coordinates by 1000",
    "centimetres": "in centimetres; multiply",
    "shrunk": r"0\.41 L.*0\.6 to 2\.5 L are plausible",
    "spike": "crosses itself: [0-9]+ edges",
    "elsewhere": r"lies elsewhere.*150 mm from ours.*Moved by about \(.?0, -150, 2\) mm it would fit",
    "volume's middle as origin": r"Moved by about \(30, -50, 47\) mm it would fit.*another\s+origin",
    "x to the left": "With x and y reversed in sign it would fit",
}


@pytest.mark.parametrize("kind", REFUSED)
def test_a_broken_surface_is_refused_with_number_and_advice(kind):
    with pytest.raises(HeadError, match=REFUSED[kind]) as caught:
        replace_surfaces(layered(), {"inner_skull": broken(kind)})
    assert "inner skull" in str(caught.value)
    assert "given surfaces" in str(caught.value)


def test_the_surface_beside_the_broken_ones_passes():
    assert replace_surfaces(layered(), {"inner_skull": broken("")}).given == ("inner_skull",)


def test_an_unknown_name_is_refused():
    with pytest.raises(HeadError, match=r"'brain'.*inner_skull, outer_skull, scalp"):
        replace_surfaces(layered(), {"brain": ball(66.0)})


@pytest.mark.parametrize(
    ("role", "good_mm", "bad_mm", "words"),
    [
        ("inner_skull", 73.0, 73.8, "[oO]ur outer skull.*give the outer skull"),
        ("outer_skull", 71.2, 70.2, "[oO]ur inner skull.*give the inner skull"),
        ("outer_skull", 83.0, 83.8, "[oO]ur scalp.*or give"),
        ("scalp", 79.2, 78.2, "[oO]ur outer skull"),
        ("inner_skull", 73.0, 79.0, "on the wrong side"),
    ],
)
def test_neighbours_keep_the_least_separation(role, good_mm, bad_mm, words):
    head = replace_surfaces(layered(), {role: ball(good_mm)})
    for inner, outer in (("inner_skull", "outer_skull"), ("outer_skull", "scalp")):
        first, second = getattr(head, inner), getattr(head, outer)
        for one, other in ((first, second), (second, first)):
            gap = distance_to_mesh(
                one.vertices_scanner_mm, other.vertices_scanner_mm, other.faces, 9.0
            )
            assert gap.min() > 2.48
    with pytest.raises(HeadError, match=r"2\.5 mm apart everywhere.*the worst is") as caught:
        replace_surfaces(layered(), {role: ball(bad_mm)})
    assert re.search(words, str(caught.value))


def test_the_refusal_says_where():
    vertices, faces = (np.array(part) for part in ball(66.0))
    place = int(((vertices - CENTER) @ [1.0, 0.0, 1.0]).argmax())
    vertices[place] += 8.0 * (vertices[place] - CENTER) / 66.0
    at = ", ".join(f"{v:.0f}" for v in vertices[place])
    with pytest.raises(HeadError, match=r"1 of 1284 vertices are nearer") as caught:
        replace_surfaces(layered(), {"inner_skull": (vertices, faces)})
    assert at in str(caught.value)
    assert "right and above" in str(caught.value)


def test_a_surface_of_another_place_inside_the_head_is_named_as_such():
    vertices, faces = ball(66.0)
    with pytest.raises(HeadError, match=r"Moved by about \(-20, .?0, 2\) mm it would fit"):
        replace_surfaces(layered(), {"inner_skull": (vertices + np.array([20.0, 0, 0]), faces)})


def test_three_surfaces_of_another_place_are_refused_together():
    # They fit each other, so only their place can tell.
    def at(shift):
        center = CENTER + np.asarray(shift)
        return {role: ball(radius, 3, center) for role, radius in RADII.items()}

    with pytest.raises(HeadError, match=r"Moved by about \(-9, 9, .?0\) mm it would fit"):
        replace_surfaces(layered(), at([9.0, -9.0, 0.0]))
    head = replace_surfaces(layered(), at([2.0, -2.0, 0.0]))
    assert [f.level for f in of_distance(head)] == ["note"] * 3
    # A surface that is larger all round is no shift: it may be ours that is wrong.
    given = {role: ball(radius + 9.0) for role, radius in RADII.items()}
    assert [f.level for f in of_distance(replace_surfaces(layered(), given))] == ["look"] * 3


def test_edges_that_cross_between_the_vertices_are_seen():
    # A ridge of the inner surface and a valley of the outer one, at right angles: every vertex
    # keeps its distance from the other surface, the two edges pass through each other.
    points, faces = icosphere(2)
    a, b, c = faces[100]
    d = next(
        int(v) for f in faces if a in f and b in f and c not in f for v in f if v not in (a, b)
    )
    z = points[[a, b]].mean(axis=0)
    z /= np.linalg.norm(z)
    k = np.array([[0, -z[2], z[1]], [z[2], 0, -z[0]], [-z[1], z[0], 0]])
    quarter = np.eye(3) + k + k @ k
    inner_r, outer_r = np.full(len(points), 62.0), np.full(len(points), 80.0)
    inner_r[[a, b]], inner_r[[c, d]] = 70.8, 58.0
    outer_r[[a, b]], outer_r[[c, d]] = 70.0, 84.0
    inner = (CENTER + points * inner_r[:, None], faces)
    outer = (CENTER + (points * outer_r[:, None]) @ quarter.T, faces)
    given = {"inner_skull": inner, "outer_skull": outer, "scalp": ball(92.0)}
    for one, other in ((inner, outer), (outer, inner)):
        assert distance_to_mesh(one[0], *other, 9.0).min() > 2.5
    assert winding(inner[0], *outer).all()
    with pytest.raises(HeadError, match=r"cross: [0-9]+ edges pass through"):
        replace_surfaces(layered(), given)
    inner_r[[a, b]] = 66.0
    given["inner_skull"] = (CENTER + points * inner_r[:, None], faces)
    assert replace_surfaces(layered(), given).given


def test_crossings_are_counted():
    points, faces = icosphere(2)
    assert crossings(points, faces, points, faces, same=True)[0] == 0
    assert crossings(points, faces, 1.2 * points, faces, same=False)[0] == 0
    count, place = crossings(points, faces, points + np.array([1.9, 0, 0]), faces, same=False)
    assert count > 0
    assert np.allclose(place, [0.95, 0, 0], atol=0.35)


# ── what follows them ────────────────────────────────────────────────────────────────────


@pytest.mark.parametrize("left_handed", [True, False])
def test_the_tissue_map_follows(left_handed):
    ours = layered(left_handed=left_handed)
    radius = radius_map(ours)

    def labels(low, high, **given):
        head = replace_surfaces(ours, given)
        return set(np.unique(head.tissues[(radius > low) & (radius < high)]).tolist())

    assert labels(64.7, 67.5) == {CSF}
    assert labels(64.7, 75.5, inner_skull=ball(64.5)) == {BONE}
    assert labels(62.5, 63.5, inner_skull=ball(64.5)) == {CSF}
    assert labels(0, 61.5, inner_skull=ball(64.5)) == {GREY}
    assert labels(68.5, 70.5, inner_skull=ball(71.5)) == {CSF}
    assert labels(74.2, 85.5, outer_skull=ball(74.0)) == {SOFT}
    assert labels(76.5, 80.5, outer_skull=ball(81.5)) == {BONE}
    assert labels(86.5, 90.5, scalp=ball(91.5)) == {SOFT}
    assert labels(86.5, 90.5) == {0}
    voxels = np.argwhere(radius >= 0)
    height = apply_affine(ours.scanner_from_voxel, voxels)[:, 2].reshape(radius.shape) - CENTER[2]
    given = replace_surfaces(ours, {"scalp": ball(79.5)})
    assert (given.tissues[(radius > 79.7) & (height > -79)] == 0).all()
    neck = height < -79.7
    assert (ours.tissues[neck] == SOFT).any()
    assert np.array_equal(given.tissues[neck], ours.tissues[neck])


def test_brain_outside_the_given_inner_skull_is_told_and_not_counted():
    few = replace_surfaces(layered(), {"inner_skull": ball(63.0)})
    many = replace_surfaces(layered(), {"inner_skull": ball(58.0)})
    assert few.brain_volume_ml == pytest.approx(998.0, rel=1e-3)
    assert many.brain_volume_ml == pytest.approx(998.0 * (57.8 / 62) ** 3, rel=0.01)
    assert [f.level for f in many.findings if "look like brain" in f.problem] == ["look"]
    assert not [f for f in few.findings if f.level == "look" and "look like brain" in f.problem]


@pytest.mark.parametrize("kind", ["grey", "brain"])
def test_sources_stay_inside_the_given_inner_skull(kind):
    vertices, faces = ball(58.0)
    for head, safe in (
        (layered(), False),
        (replace_surfaces(layered(), {"inner_skull": (vertices, faces)}), True),
    ):
        places = make_sources(head, kind=kind, spacing_mm=8.0).positions_scanner_mm
        clear = winding(places, vertices, faces) & (
            distance_to_mesh(places, vertices, faces, 5.0) >= 3.0
        )
        assert clear.all() == safe
        assert len(places) > 500


def test_the_same_shapes_with_other_vertices_give_the_same_lead_field():
    sources = CENTER + np.array([[0, 0, 40.0], [30, 20, 30], [-45, 0, 10], [0, -50, 20]])
    given = {
        "inner_skull": ball(68.0, 2),
        "outer_skull": ball(76.0, 3),
        "scalp": ball(86.0, 3),
    }
    options = ForwardOptions(route="plain")
    fields = []
    at = CENTER + 86.0 * icosphere(1)[0]
    for head in (layered(), replace_surfaces(layered(), given)):
        field = compute_lead_field(
            head.scalp, head.outer_skull, head.inner_skull, sources, options=options
        )
        rows = electrode_rows(field, at)
        fields.append(rows - rows.mean(axis=0))
    error = np.linalg.norm(fields[1] - fields[0], axis=0) / np.linalg.norm(fields[0], axis=0)
    assert error.max() < 0.03


def test_thickness_and_page_do_not_count_on_common_rays():
    points, faces = icosphere(2)
    run = small_run()
    middle = np.asarray(run.head.center_scanner_mm)
    head = replace_surfaces(
        run.head, {"inner_skull": ball(66.0, 4, middle), "scalp": (middle + 82 * points, faces)}
    )
    thickness = skull_thickness_mm(head)
    assert thickness.shape == (2562,)
    assert np.abs(thickness - 7.85).max() < 0.3
    assert np.allclose(skull_thickness_mm(run.head), 6.0)
    page = make_report(replace(run, head=head))
    assert re.search(r"7\.[789] mm thick the shortest way across", page)
    assert "The scalp and inner skull were given, not made here." in page
    assert "nan mm" not in page


# ── files ────────────────────────────────────────────────────────────────────────────────


def write(path, vertices, faces, *, space="NIFTI_XFORM_UNKNOWN", other=None, xform=None):
    """Write a surface as another program would, with nibabel alone."""
    system = nib.gifti.GiftiCoordSystem(
        dataspace=nib.nifti1.xform_codes.code[space],
        xformspace=nib.nifti1.xform_codes.code[other or space],
        xform=np.eye(4) if xform is None else xform,
    )
    image = nib.gifti.GiftiImage(
        darrays=[
            nib.gifti.GiftiDataArray(
                vertices.astype(np.float32), intent="NIFTI_INTENT_POINTSET", coordsys=system
            ),
            nib.gifti.GiftiDataArray(faces.astype(np.int32), intent="NIFTI_INTENT_TRIANGLE"),
        ]
    )
    nib.save(image, path)


SCANNER = "NIFTI_XFORM_SCANNER_ANAT"


@pytest.mark.parametrize(
    ("space", "other", "moved"),
    [
        ("NIFTI_XFORM_UNKNOWN", None, False),
        ("NIFTI_XFORM_UNKNOWN", "NIFTI_XFORM_TALAIRACH", False),
        ("NIFTI_XFORM_ALIGNED_ANAT", None, False),
        (SCANNER, "NIFTI_XFORM_MNI_152", False),
        ("NIFTI_XFORM_UNKNOWN", SCANNER, True),
        ("NIFTI_XFORM_MNI_152", SCANNER, True),
    ],
)
def test_a_file_goes_through_in_scanner_mm(tmp_path, space, other, moved):
    vertices, faces = ball(66.0)
    xform = np.eye(4)
    xform[:3, :3] = [[0, -1, 0], [1, 0, 0], [0, 0, 1]]
    xform[:3, 3] = [7.0, -20.0, 3.0]
    stored = apply_affine(np.linalg.inv(xform), vertices) if moved else vertices
    write(tmp_path / "i.gii", stored, faces, space=space, other=other, xform=xform)
    surface = read_surface(tmp_path / "i.gii")
    assert np.abs(surface.vertices_scanner_mm - vertices).max() < 1e-4
    head = replace_surfaces(
        layered(), {"inner_skull": (surface.vertices_scanner_mm, surface.faces)}
    )
    assert np.array_equal(head.inner_skull.faces, faces)


def test_a_file_in_a_template_s_space_is_refused(tmp_path):
    write(tmp_path / "i.gii", *ball(66.0), space="NIFTI_XFORM_MNI_152")
    with pytest.raises(FileError, match=r"mni space.*scanner mm of this T1"):
        read_surface(tmp_path / "i.gii")
    write(tmp_path / "j.gii", *ball(66.0), space="NIFTI_XFORM_MNI_152", other=SCANNER)
    assert len(read_surface(tmp_path / "j.gii").faces) == 1280
    write(
        tmp_path / "k.gii",
        *ball(66.0),
        space="NIFTI_XFORM_UNKNOWN",
        other=SCANNER,
        xform=np.zeros((4, 4)),
    )
    with pytest.raises(FileError, match="affine"):
        read_surface(tmp_path / "k.gii")


def session(folder, **flags):
    volume = small_volume()
    image = nib.Nifti1Image(volume.intensity, volume.scanner_from_voxel)
    image.set_sform(volume.scanner_from_voxel, 1)
    nib.save(image, folder / "t1.nii.gz")
    own = folder / "own"
    own.mkdir()
    options = gather_options({"t1": str(folder / "t1.nii.gz"), "surfaces": str(own), **flags})
    return own, lambda: read_inputs(options, names=False, recording=False, out=folder / "out")


def test_a_folder_is_read_by_the_names_of_its_files(tmp_path):
    own, read = session(tmp_path)
    write(own / "scalp.surf.gii", *ball(86.0))
    write(own / "inner_skull.gii", *ball(66.0, 2))
    inputs = read()
    assert list(inputs.surfaces) == ["inner_skull", "scalp"]
    assert [len(inputs.surfaces[role][0]) for role in inputs.surfaces] == [162, 642]
    roles = {file.role: file for file in inputs.files}
    assert roles["inner skull surface"].path == str(own / "inner_skull.gii")
    assert len(roles["scalp surface"].sha256) == 64
    assert not inputs.findings
    write(own / "cortex.surf.gii", *ball(60.0))
    (finding,) = read().findings
    assert "cortex.surf.gii" in finding.problem
    assert "not used" in finding.problem


def test_a_folder_that_cannot_be_meant_is_refused(tmp_path):
    own, read = session(tmp_path)
    with pytest.raises(FileError, match=r"no \.gii file, but none of scalp\.surf\.gii"):
        read()
    write(own / "skull.gii", *ball(76.0))
    with pytest.raises(FileError, match=r"skull\.gii, but none of"):
        read()
    write(own / "scalp.gii", *ball(86.0))
    assert list(read().surfaces) == ["scalp"]
    write(own / "scalp.surf.gii", *ball(86.0))
    with pytest.raises(FileError, match=r"scalp\.gii and scalp\.surf\.gii"):
        read()
    (own / "scalp.gii").unlink()
    assert list(read().surfaces) == ["scalp"]
    (own / "scalp.surf.gii").write_text("no surface")
    with pytest.raises(FileError, match="cannot be opened as a GIFTI surface"):
        read()


def test_a_folder_that_is_not_there_is_refused(tmp_path):
    own, read = session(tmp_path)
    own.rmdir()
    with pytest.raises(FileError, match=r"no folder.*own"):
        read()


def test_the_folder_where_the_output_goes_is_refused(tmp_path):
    (tmp_path / "out").mkdir()
    _, read = session(tmp_path, surfaces=str(tmp_path / "out" / "head"))
    (tmp_path / "out" / "head").mkdir()
    write(tmp_path / "out" / "head" / "scalp.surf.gii", *ball(86.0))
    with pytest.raises(CommandLineError, match="writes its own"):
        read()


# ── the command line ─────────────────────────────────────────────────────────────────────


def coarser(folder, shift=(0.0, 0.0, 0.0)):
    """The surfaces of a finished run with 162 vertices each, a little farther apart."""
    _, faces = icosphere(2)
    for role, more_mm in (("inner_skull", 0.0), ("outer_skull", 2.0), ("scalp", 4.0)):
        points = np.array(
            read_surface(small_run_folder() / "head" / f"{role}.surf.gii").vertices_scanner_mm
        )[:162]
        middle = points.mean(axis=0)
        radius = np.linalg.norm(points - middle, axis=1, keepdims=True)
        points += more_mm * (points - middle) / radius + shift
        write(folder / f"{role}.gii", points, faces)


@pytest.mark.slow
@pytest.mark.timeout(900)
def test_a_run_takes_own_surfaces_and_names_them(tmp_path):
    own, out = tmp_path / "own", tmp_path / "out"
    own.mkdir()
    coarser(own, shift=(25.0, 0.0, 0.0))
    shutil.copytree(small_run_folder() / ".locator" / "stages", out / ".locator" / "stages")
    arguments = [*run_arguments(small_session(), out), "--surfaces", str(own)]
    refused = start(arguments)
    assert refused.returncode == 3, refused.stderr
    assert "Moved by about (-25" in refused.stderr
    assert "Traceback" not in refused.stderr
    assert not (out / "report.html").exists()

    coarser(own)
    done = start(arguments)
    assert done.returncode == 0, done.stderr
    assert re.search(r"^head: unchanged", done.stderr, flags=re.MULTILINE)
    assert re.search(r"^given surfaces: [\d.]+ s", done.stderr, flags=re.MULTILINE)
    record = json.loads((out / "provenance.json").read_text())
    assert record["session"]["surfaces"] == str(own)
    named = {entry["role"]: entry["path"] for entry in record["inputs"]}
    for role in ("inner_skull", "outer_skull", "scalp"):
        path = own / f"{role}.gii"
        assert named[f"{role.replace('_', ' ')} surface"] == str(path)
        written = nib.load(out / "head" / f"{role}.surf.gii")
        assert f"as given in {path.name}" in written.meta["Description"]
        assert np.abs(written.darrays[0].data - nib.load(path).darrays[0].data).max() < 1e-4
    assert "The scalp, outer skull and inner skull were given" in (out / "report.html").read_text()
    lead = (small_run_folder() / "sources" / "inverse.fif").read_bytes()
    assert (out / "sources" / "inverse.fif").read_bytes() != lead


@pytest.mark.slow
@pytest.mark.timeout(900)
def test_head_takes_own_surfaces_and_computes_anew_only_when_a_file_changes(tmp_path):
    own, out = tmp_path / "own", tmp_path / "out"
    own.mkdir()
    surface = read_surface(small_run_folder() / "head" / "scalp.surf.gii")
    points = np.array(surface.vertices_scanner_mm)
    shutil.copytree(small_run_folder() / ".locator" / "stages", out / ".locator" / "stages")
    arguments = ["head", small_session() / "T1.nii.gz", "--out", out, "--surfaces", own]
    for factor, anew in ((1.01, True), (1.01, False), (1.02, True)):
        middle = points.mean(axis=0)
        write(own / "scalp.gii", middle + factor * (points - middle), surface.faces)
        done = start(arguments)
        assert done.returncode == 0, done.stderr
        computed = re.findall(r"^(.+): [\d.]+ s$", done.stderr, flags=re.MULTILINE)
        assert ("given surfaces" in computed) == anew
    inner = "head/inner_skull.surf.gii"
    assert (out / inner).read_bytes() == (small_run_folder() / inner).read_bytes()
    written = read_surface(out / "head" / "scalp.surf.gii").vertices_scanner_mm
    assert np.abs(written - (middle + 1.02 * (points - middle))).max() < 1e-3

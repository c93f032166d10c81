"""Names as people write them, and the places that the tape-measure rules give them."""

import numpy as np
import pytest

from locator.errors import LabelError
from locator.layout import (
    PLACES,
    channel_kind,
    custom_layout,
    nearest_names,
    normalise_name,
    standard_layout,
    tape_places,
    template_head,
)
from locator.layout.tape import arc, find_vertex, smooth_table, star_surface


@pytest.mark.parametrize(
    ("text", "name"),
    [
        ("Fp1", "Fp1"),
        ("FP1", "Fp1"),
        ("fp1", "Fp1"),
        ("EEG Fp1-REF", "Fp1"),
        ("EEG FP1-LE", "Fp1"),
        ("EEG-Cz", "Cz"),
        ("EEG Cz", "Cz"),
        ("EEGCz", "Cz"),
        ("fpz", "Fpz"),
        ("FPZ", "Fpz"),
        ("Cz-A1", "Cz"),
        ("C3-A2", "C3"),
        ("C3-M2", "C3"),
        ("C3-A1A2", "C3"),
        ("T3", "T7"),
        ("t4", "T8"),
        ("EEG T5-Ref", "P7"),
        ("T6", "P8"),
        ("Fc5.", "FC5"),
        ("Fp 1", "Fp1"),
        (" 'POz' ", "POz"),
        ("AFF1h", "AFF1h"),
        ("aff1H", "AFF1h"),
        ("TTP7h", "TTP7h"),
        ("A1", "A1"),
        ("M2", "M2"),
        ("Nz", "Nz"),
        ("iz", "Iz"),
        ("F3-C3", None),
        ("Cz-Pz", None),
        ("ECG", None),
        ("EEG 001", None),
        ("E12", None),
        ("C9", None),
        ("", None),
    ],
)
def test_usual_spellings_are_understood(text, name):
    assert normalise_name(text) == name


def test_every_name_is_its_own_spelling():
    assert all(normalise_name(name) == name for name in PLACES)
    assert all(normalise_name(name.upper()) == name for name in PLACES)
    # 345 places by the count of Oostenveld & Praamstra 2001 (figures read in the abstract), here
    # with ear lobes and mastoids beside them.
    assert 340 <= len(PLACES) <= 352


@pytest.mark.parametrize(
    ("text", "kind"),
    [
        ("EEG Fp1-REF", "electrode"),
        ("T3", "electrode"),
        ("ECG", "ecg"),
        ("EKG2", "ecg"),
        ("ECG1-ECG2", "ecg"),
        ("HEOG", "eog"),
        ("EOG left", "eog"),
        ("LOC", "eog"),
        ("EMG chin", "emg"),
        ("Chin1", "emg"),
        ("STI 014", "trigger"),
        ("Status", "trigger"),
        ("TRIG", "trigger"),
        ("REF", "reference"),
        ("GND", "reference"),
        ("SpO2", "other"),
        ("Resp thorax", "other"),
        ("X1", "other"),
    ],
)
def test_channels_are_told_apart(text, kind):
    assert channel_kind(text) == kind


def test_unknown_names_are_named_with_their_neighbours():
    with pytest.raises(LabelError, match=r"'Qz'"):
        standard_layout(["Fp1", "Qz"])
    with pytest.raises(LabelError, match=r"'AFF1g'.*AFF1h"):
        standard_layout(["AFF1g"])
    with pytest.raises(LabelError, match=r"'ECG'.*kind ecg"):
        standard_layout(["Cz", "ECG"])
    assert "FC5" in nearest_names("FC55")


def test_doubled_names_are_refused_under_any_spelling():
    with pytest.raises(LabelError, match=r"'T7' \(the same place as 'T3'\)"):
        standard_layout(["T3", "Cz", "T7"])
    with pytest.raises(LabelError, match="Cz"):
        standard_layout(["Cz", "Cz"])
    assert standard_layout(["T3", "T8"]).names == ("T7", "T8")


@pytest.mark.parametrize("names", [[], ["Cz", ""], ["  "]])
def test_empty_names_are_refused(names):
    with pytest.raises(LabelError, match=r"No electrode names|empty"):
        standard_layout(names)


def test_arcs_on_a_sphere_are_great_circles():
    ball = star_surface(lambda way: np.full(len(way), 90.0), np.zeros(3))
    marks = 90.0 * np.array([[0, 1.0, 0], [-1, 0, 0], [1, 0, 0], [0, -1, 0]])
    vertex, sagittal, coronal = find_vertex(ball, marks)
    # Half of a great circle is pi r; the polyline of 48 chords is shorter by 0.02 %.
    assert np.pi * 90 * 0.999 < sagittal <= np.pi * 90
    assert np.pi * 90 * 0.999 < coronal <= np.pi * 90
    np.testing.assert_allclose(vertex, [0, 0, 90], atol=0.05)
    places = dict(
        zip(
            ("Fz", "T7", "C3", "T8"),
            tape_places(ball, marks, ["Fz", "T7", "C3", "T8"]),
            strict=True,
        )
    )
    # Fz stands at 30 % of the sagittal half circle: 54 degrees from the nasion.
    angle = np.degrees(np.arccos(places["Fz"] @ marks[0] / 90**2))
    assert abs(angle - 54.0) < 0.2
    angle = np.degrees(np.arccos(places["T7"] @ marks[1] / 90**2))
    assert abs(angle - 18.0) < 0.2
    np.testing.assert_allclose(places["T7"] * [-1, 1, 1], places["T8"], atol=0.05)


def test_an_arc_passes_its_middle():
    surface, marks = template_head()
    vertex, _, _ = find_vertex(surface, marks)
    points, along, middle = arc(surface, marks[0], vertex, marks[3])
    gap = np.linalg.norm(points - vertex, axis=1)
    assert gap.min() < 0.1
    assert abs(along[gap.argmin()] - middle) < 1.0
    np.testing.assert_allclose(points[0], marks[0], atol=0.1)
    np.testing.assert_allclose(points[-1], marks[3], atol=0.1)


def test_template_sizes_are_those_of_heads():
    surface, marks = template_head()
    _, sagittal, coronal = find_vertex(surface, marks)
    # Nasion to inion 34-38 cm, ear to ear 33-37 cm (values from memory).
    assert 340 < sagittal < 380
    assert 330 < coronal < 370
    layout = standard_layout(["T7", "T8"])
    # Head breadth 154.3 +- 5.5 (men), 147.8 +- 5.2 mm (women), ANSUR II 2012.
    assert 135 < np.linalg.norm(layout.positions_mm[0] - layout.positions_mm[1]) < 165


def test_neighbours_are_a_tenth_of_an_arc_apart():
    names = ("Fpz", "AFz", "Fz", "FCz", "Cz", "CPz", "Pz", "POz", "Oz")
    places = standard_layout(names).positions_mm
    steps = np.linalg.norm(np.diff(places, axis=0), axis=1)
    # A tenth of an arc of 34-38 cm; 64 channels are 3-4 cm apart.
    assert (steps > 30).all()
    assert (steps < 39).all()


def test_left_and_right_are_mirror_images():
    odd = [name for name, (_, _, side) in PLACES.items() if side < 0]
    even = []
    for name in odd:
        row, column, _ = PLACES[name]
        even.append(next(n for n, place in PLACES.items() if place == (row, column, 1)))
    left = standard_layout(odd).positions_mm
    right = standard_layout(even).positions_mm
    np.testing.assert_allclose(left * [-1, 1, 1], right, atol=0.3)
    assert (left[:, 0] < 0).all()


def test_places_move_with_the_head():
    surface, marks = template_head()
    angle = np.radians(25.0)
    turn = np.array(
        [[np.cos(angle), -np.sin(angle), 0], [np.sin(angle), np.cos(angle), 0], [0, 0, 1]]
    )
    shift = np.array([10.0, -20.0, 30.0])
    moved = star_surface(
        lambda way: surface.radius(way @ turn),
        surface.center_mm @ turn.T + shift,
        np.eye(3) @ turn.T,
    )
    names = ("Fp1", "C3", "P8", "AFF5h", "TP9")
    there = tape_places(moved, marks @ turn.T + shift, names)
    here = tape_places(surface, marks, names) @ turn.T + shift
    np.testing.assert_allclose(there, here, atol=0.3)


def test_smoothing_keeps_a_sphere_and_damps_a_spike():
    table = np.full((91, 120), 90.0)
    np.testing.assert_allclose(smooth_table(table, 5.0), table, atol=1e-6)
    table[45, 60] += 10.0
    smooth = smooth_table(table, 5.0)
    assert smooth.max() < 91.0
    assert abs(smooth[45].sum() - smooth[45].mean() * 120) < 1e-6
    assert smooth[45, 60] == smooth.max()


def test_custom_layouts_keep_their_own_names():
    places = np.array([[0, 0, 120.0], [70, 0, 40.0], [-70, 0, 40.0], [0, 90, 30.0]])
    layout = custom_layout(["g1", "g2", "g3", "g4"], places, None, "a grid", wanted=["G3", "g1"])
    assert layout.names == ("g3", "g1")
    np.testing.assert_allclose(layout.positions_mm, places[[2, 0]])
    assert not layout.by_rule
    with pytest.raises(LabelError, match="'g9'"):
        custom_layout(["g1", "g2"], places[:2], None, "a grid", wanted=["g9"])


@pytest.mark.parametrize(
    ("names", "places", "marks", "words"),
    [
        (["a", "a"], np.eye(3)[:2] * 90, None, "twice"),
        (["a", "b"], np.eye(3) * 90, None, "shape"),
        (["a", "b"], [[0, 0, np.nan], [1, 1, 1]], None, "finite place for a"),
        (["a", "b", "c", "d"], np.eye(4, 3) * 0.09, None, "metres"),
        (["a", "b"], [[0, 0, 90.0], [0, 0, 90.0]], None, "one place"),
        (["a", "b"], np.eye(3)[:2] * 90, np.eye(2), "landmarks"),
    ],
)
def test_unusable_layouts_are_refused(names, places, marks, words):
    with pytest.raises(LabelError, match=words):
        custom_layout(names, places, marks, "a test layout")

"""What happens between the stages: sources to voxels, given positions, capsules to take out."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from locator.errors import LabelError
from locator.pipeline import (
    GIVEN_SD_MM,
    ball_on_grid,
    capsules_to_remove,
    find,
    on_grid,
    place_given,
    region_on_grid,
)
from locator.sources import Sources
from locator.statistics import Peaks
from tests.test_files import sample_electrodes, sample_markers
from tests.test_reviews import CENTER, RADIUS, ball_skin, outward


def line_of_sources(count=5, spacing_mm=10.0):
    """Sources along x, each with a cube of voxels of 2 mm round it; a margin belongs to none."""
    affine = np.diag([2.0, 2.0, 2.0, 1.0])
    per = int(spacing_mm / 2)
    nearest = np.full((count * per + 4, per + 4, per + 4), -1, dtype=np.int32)
    for source in range(count):
        nearest[2 + source * per : 2 + (source + 1) * per, 2 : 2 + per, 2 : 2 + per] = source
    middle = 2 * (2 + (per - 1) / 2)
    positions = np.array(
        [[2 * (2 + s * per + (per - 1) / 2), middle, middle] for s in range(count)]
    )
    return Sources(
        positions_scanner_mm=positions,
        normals=np.full((count, 3), np.nan),
        kind="grey",
        spacing_mm=spacing_mm,
        nearest_source=nearest,
        scanner_from_voxel=affine,
    )


def peaks_with(probability, sources, source=0):
    return Peaks(
        positions_scanner_mm=sources.positions_scanner_mm[[source]],
        source=np.array([source], dtype=np.int32),
        statistic=np.array([30.0]),
        corrected_p=np.array([0.001]),
        time_s=np.array([0.1]),
        region_mm=np.array([99.0]),
        region_probability=np.asarray(probability, dtype=float),
        region_causes_mm={},
    )


def test_voxels_take_the_value_of_their_source_and_nothing_in_between():
    sources = line_of_sources()
    values = np.array([1.0, 2, 3, 4, 5])
    volume = on_grid(sources, values, outside=-7)
    assert set(np.unique(volume)) == {-7, 1, 2, 3, 4, 5}
    assert (volume == -7).sum() == (sources.nearest_source == -1).sum()
    assert (volume == 3).sum() == 125


def test_a_region_sums_to_one_whatever_the_number_of_voxels_of_a_source():
    sources = line_of_sources()
    nearest = np.array(sources.nearest_source)
    nearest[(nearest == 1) & (np.indices(nearest.shape)[1] > 3)] = -1  # fewer voxels for one
    sources = replace(sources, nearest_source=nearest)
    density = region_on_grid(peaks_with([0.5, 0.5, 0, 0, 0], sources), sources)
    assert density.sum() == pytest.approx(1, abs=1e-5)
    assert density[sources.nearest_source == 1].sum() == pytest.approx(0.5, abs=1e-5)
    assert (density[sources.nearest_source == -1] == 0).all()


def test_the_ball_of_a_region_holds_95_percent_of_its_map():
    sources = line_of_sources()
    peaks = ball_on_grid(peaks_with([0.6, 0.3, 0.06, 0.04, 0], sources), sources)
    density = region_on_grid(peaks, sources)
    places = 2.0 * np.argwhere(density > 0)
    gap = np.linalg.norm(places - peaks.positions_scanner_mm[0], axis=1)
    held = density[density > 0]
    radius = peaks.region_mm[0]
    assert held[gap <= radius + 1e-9].sum() >= 0.95 - 1e-6
    assert held[gap < radius - 1e-9].sum() < 0.95
    # 0.6 + 0.3 end 15 mm along the line, five sixths of the third source's 0.06 lie within 25 mm.
    assert 15 < radius < 27


def test_a_region_without_a_peak_is_nothing():
    sources = line_of_sources()
    none = replace(
        peaks_with(np.zeros(5), sources),
        positions_scanner_mm=np.zeros((0, 3)),
        source=np.zeros(0, dtype=np.int32),
        region_mm=np.zeros(0),
    )
    assert (region_on_grid(none, sources) == 0).all()
    assert ball_on_grid(none, sources) is none


def test_given_positions_keep_their_place_and_say_how_well_they_are_known():
    skin = ball_skin()
    directions = [outward(0, 0, 1), outward(1, 0, 1), outward(0, 1, 1), outward(-1, 0, 1)]
    places = CENTER + RADIUS * np.array(directions)
    places[3] += 12 * directions[3]
    given = place_given(("Cz", "C4", "Fz", "C3"), places, [1.5, np.nan, 2, 2], skin)
    assert np.array_equal(given.positions_scanner_mm, places)
    assert given.status == ("given",) * 4
    assert given.sd_mm.tolist() == [1.5, GIVEN_SD_MM, 2, 2]
    assert given.covariance_mm2[0].tolist() == (np.eye(3) * 2.25).tolist()
    assert [(f.level, f.subject) for f in given.findings] == [("look", "C3")]
    assert "12 mm outside" in given.findings[0].problem


def test_positions_of_another_space_are_refused():
    directions = np.array([outward(0, 0, 1), outward(1, 0, 1), outward(0, 1, 1)])
    with pytest.raises(LabelError, match=r"elsewhere\.tsv.*off the skin.*scanner"):
        place_given(
            ("Cz", "C4", "Fz"),
            CENTER + [0, 0, 120] + RADIUS * directions,
            [1, 1, 1],
            ball_skin(),
            where="elsewhere.tsv",
        )


def test_capsules_are_taken_out_by_label_or_by_looks_in_the_order_of_the_blobs():
    markers = sample_markers()  # scores 0.99, 0.595, 0.2
    assert len(capsules_to_remove(None, None)) == 0
    assert np.array_equal(capsules_to_remove(markers, None), markers.centers_scanner_mm[:2])
    named = replace(sample_electrodes(), marker=np.array([2, -1, 0], dtype=np.int32))
    assert np.array_equal(capsules_to_remove(markers, named), markers.centers_scanner_mm)
    swapped = replace(named, marker=np.array([0, -1, 2], dtype=np.int32))
    assert np.array_equal(capsules_to_remove(markers, named), capsules_to_remove(markers, swapped))


def test_capsules_are_taken_out_where_they_are_drawn():
    markers = replace(sample_markers(), shift_mm=np.array([0.0, 2.0, 0.0]))
    expected = np.add(markers.centers_scanner_mm[:2], [0, 2, 0])
    assert np.allclose(capsules_to_remove(markers, None), expected)


def test_every_stage_goes_through_the_step():
    seen = []

    def step(stage, function, /, *arguments, **settings):
        seen.append((stage, function.__name__, sorted(settings)))
        return sample_electrodes() if stage in ("labels", "reviews") else sample_markers()

    options = {"skin_options": None, "marker_options": None, "label_options": None}
    found = find(None, None, reviews=("one",), step=step, **options)
    assert [stage for stage, _, _ in seen] == ["skin", "markers", "labels", "reviews"]
    assert found.electrodes.names == sample_electrodes().names

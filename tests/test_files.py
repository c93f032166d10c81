"""Files are complete or not there; what was written is read back the same."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import textwrap
from dataclasses import dataclass, replace
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest

from locator.errors import BusyError, FileError
from locator.geometry import icosphere
from locator.head import Surface
from locator.io import bids, cache
from locator.io.files import (
    clean_parts,
    folder_lock,
    gzip_bytes,
    sha256_of,
    write_bytes,
    write_json,
    write_whole,
)
from locator.io.gifti import read_surface, write_surface
from locator.io.nifti import read_grid, read_map, read_volume, write_map
from locator.labels import Electrodes
from locator.markers import Markers
from locator.results import Finding, Frozen
from locator.statistics import Peaks

TURN = nib.eulerangles.euler2mat(0.3, -0.2, 0.1)


def oblique_affine(voxel_mm=(1.1, 0.9, 1.3), origin=(-70.0, -95.0, -60.0)):
    affine = np.eye(4)
    affine[:3, :3] = TURN * np.array(voxel_mm)
    affine[:3, 3] = origin
    return affine


def save_t1(path, *, sform=None, qform=None, sform_code=1, qform_code=1, shape=(90, 100, 95)):
    rng = np.random.default_rng(3)
    image = nib.Nifti1Image(rng.integers(0, 200, shape).astype(np.int16), None)
    image.header.set_xyzt_units("mm")
    image.header.set_qform(qform, qform_code if qform is not None else 0)
    image.header.set_sform(sform, sform_code if sform is not None else 0)
    nib.save(image, path)
    return path


# ── whole files ──────────────────────────────────────────────────────────────────────────


def test_a_writer_that_fails_leaves_the_old_file_and_nothing_else(tmp_path):
    target = tmp_path / "table.tsv"
    target.write_text("old")

    def fails(part):
        part.write_text("half")
        raise RuntimeError("out of luck")

    with pytest.raises(RuntimeError, match="out of luck"):
        write_whole(target, fails)
    assert target.read_text() == "old"
    assert [p.name for p in tmp_path.iterdir()] == ["table.tsv"]


def test_a_file_that_fails_its_check_never_gets_its_name(tmp_path):
    def check(part):
        raise ValueError(f"{part.read_text()} is wrong")

    with pytest.raises(ValueError, match="new is wrong"):
        write_whole(tmp_path / "a", lambda part: _write(part, "new"), check=check)
    assert list(tmp_path.iterdir()) == []


def _write(path, text):
    path.write_text(text)


def test_a_folder_that_cannot_be_written_is_named(tmp_path):
    blocked = tmp_path / "file"
    blocked.write_text("no folder")
    with pytest.raises(FileError, match="file"):
        write_bytes(blocked / "x.json", b"1")


def test_left_over_parts_are_cleaned_and_other_files_stay(tmp_path):
    (tmp_path / "head").mkdir()
    (tmp_path / "head" / ".part-123-abcd-scalp.surf.gii").write_text("half")
    (tmp_path / "keep.tsv").write_text("whole")
    assert clean_parts(tmp_path) == 1
    assert sorted(p.name for p in tmp_path.rglob("*")) == ["head", "keep.tsv"]


def test_compressed_bytes_carry_no_time():
    first, second = gzip_bytes(b"x" * 1000), gzip_bytes(b"x" * 1000)
    assert first == second
    assert first[4:8] == b"\0\0\0\0"  # MTIME of RFC 1952, section 2.3


def test_json_is_sorted_and_refuses_what_json_does_not_know(tmp_path):
    write_json(tmp_path / "a.json", {"b": 1, "a": {"d": 1, "c": 2}})
    assert (tmp_path / "a.json").read_text().index('"a"') < (tmp_path / "a.json").read_text().index(
        '"b"'
    )
    with pytest.raises(ValueError, match="JSON compliant"):
        write_json(tmp_path / "b.json", {"a": float("nan")})
    assert not (tmp_path / "b.json").exists()


def test_the_hash_of_a_beginning_is_that_of_the_shorter_file(tmp_path):
    (tmp_path / "long").write_bytes(b"abc" * 700_000)
    (tmp_path / "short").write_bytes(b"abc" * 400_000)
    assert sha256_of(tmp_path / "long", 1_200_000) == sha256_of(tmp_path / "short")
    assert sha256_of(tmp_path / "long") != sha256_of(tmp_path / "short")


# ── the lock ─────────────────────────────────────────────────────────────────────────────

HOLDER = """
    import sys, time
    from pathlib import Path
    from locator.io.files import folder_lock, write_bytes
    with folder_lock(Path(sys.argv[1])):
        write_bytes(Path(sys.argv[1]) / "made.txt", b"1")
        print("held", flush=True)
        time.sleep(60)
"""


def _holder(folder):
    process = subprocess.Popen(
        [sys.executable, "-c", textwrap.dedent(HOLDER), str(folder)],
        stdout=subprocess.PIPE,
        text=True,
    )
    assert process.stdout.readline().strip() == "held"
    return process


def test_a_second_command_is_refused_and_a_dead_ones_lock_is_taken_over(tmp_path):
    holder = _holder(tmp_path / "out")
    try:
        with pytest.raises(BusyError, match=str(holder.pid)), folder_lock(tmp_path / "out"):
            pytest.fail("two commands hold one folder")
        holder.send_signal(signal.SIGKILL)
        holder.wait(timeout=10)
        with folder_lock(tmp_path / "out"):
            held = (tmp_path / "out" / ".locator" / "lock").read_text()
        assert held.strip() == str(os.getpid())
    finally:
        holder.kill()
        holder.wait()
        holder.stdout.close()


def test_a_command_that_writes_nothing_leaves_no_folder(tmp_path):
    with pytest.raises(RuntimeError), folder_lock(tmp_path / "new" / "out"):
        raise RuntimeError("refused")
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_was_there_stays(tmp_path):
    (tmp_path / "out").mkdir()
    with folder_lock(tmp_path / "out"):
        pass
    assert (tmp_path / "out").is_dir()


# ── stored results ───────────────────────────────────────────────────────────────────────


def sample_markers(count=3):
    rng = np.random.default_rng(0)
    return Markers(
        centers_scanner_mm=rng.normal(size=(count, 3)) * 50,
        covariance_mm2=np.tile(np.eye(3) * 0.04, (count, 1, 1)),
        diameter_mm=np.full(count, 8.0),
        contrast=np.linspace(1.1, 0.9, count),
        roundness=np.full(count, 0.9),
        skin_mm=np.full(count, 6.0),
        score=np.linspace(0.99, 0.2, count),
        capsule_mm=8.0,
        shift_mm=np.zeros(3),
        findings=(Finding(level="look", stage="markers", problem="p", doubt=0.25),),
    )


def test_a_result_comes_back_the_same(tmp_path):
    markers = sample_markers()
    cache.store(tmp_path / "m.zip", markers)
    back = cache.load(tmp_path / "m.zip")
    assert isinstance(back, Markers)
    assert cache.digest_of(back) == cache.digest_of(markers)
    assert back.findings == markers.findings
    assert np.array_equal(back.covariance_mm2, markers.covariance_mm2)
    assert not back.centers_scanner_mm.flags.writeable


def test_every_kind_of_value_comes_back(tmp_path):
    value = {
        "none": None,
        "nan": float("nan"),
        "inf": float("-inf"),
        "tuple": (1, "two", (3.5, True)),
        "list": [np.float32(0.1), np.int64(7)],
        "map": {1: {"a": np.arange(6).reshape(2, 3)}},
        "empty": np.zeros((0, 3)),
        "text": np.array(["Fp1", "Oz"]),
        "flags": np.array([True, False]),
        "turned": np.asfortranarray(np.arange(12.0).reshape(3, 4)),
    }
    cache.store(tmp_path / "v.zip", value)
    back = cache.load(tmp_path / "v.zip")
    assert back["none"] is None
    assert np.isnan(back["nan"])
    assert back["inf"] == float("-inf")
    assert back["tuple"] == value["tuple"]
    assert back["list"][0] == np.float32(0.1)
    assert back["list"][0].dtype == np.float32
    assert list(back["map"]) == [1]
    for name in ("empty", "text", "flags", "turned"):
        assert back[name].dtype == value[name].dtype
        assert np.array_equal(back[name], value[name])


def test_the_same_value_gives_the_same_bytes(tmp_path):
    for name in ("a", "b"):
        cache.store(tmp_path / name, sample_markers())
    assert (tmp_path / "a").read_bytes() == (tmp_path / "b").read_bytes()


def test_objects_and_foreign_classes_are_refused(tmp_path):
    with pytest.raises(TypeError, match="objects"):
        cache.store(tmp_path / "o", np.array([object()]))
    with pytest.raises(TypeError, match="Path"):
        cache.store(tmp_path / "o", Path())
    assert list(tmp_path.iterdir()) == []
    with pytest.raises(ValueError, match="no class of this package"):
        cache.decode({"class": "subprocess:Popen", "fields": {}}, {})


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Counted(Frozen):
    value: float


calls: list[str] = []


def _stage(number, *, options=None, progress=None):
    calls.append("called")
    return sample_markers(number)


def test_a_key_changes_with_whatever_the_result_rests_on(tmp_path, monkeypatch):
    store = cache.StageCache(tmp_path)
    markers = sample_markers()

    def key(stage="s", function=_stage, args=(markers,), **settings):
        return store.key(stage, function, args, settings)

    first = key(options=1.0, rng=np.random.default_rng(0))
    assert key(options=1.0, rng=np.random.default_rng(0), progress=print) == first
    assert key(options=1.0, args=(sample_markers(),), rng=np.random.default_rng(0)) == first
    different = {
        "setting": key(options=1.5, rng=np.random.default_rng(0)),
        "seed": key(options=1.0, rng=np.random.default_rng(1)),
        "input": key(options=1.0, args=(sample_markers(4),), rng=np.random.default_rng(0)),
        "stage": key(stage="t", options=1.0, rng=np.random.default_rng(0)),
    }
    with monkeypatch.context() as patch:
        patch.setattr(cache, "code_digest", lambda module: "other code")
        different["code"] = key(options=1.0, rng=np.random.default_rng(0))
    with monkeypatch.context() as patch:
        patch.setattr(cache, "library_versions", lambda: {"numpy": "9.9"})
        different["versions"] = key(options=1.0, rng=np.random.default_rng(0))
    assert first not in different.values()
    assert len(set(different.values())) == len(different)


def test_code_of_a_stage_is_followed_through_its_imports():
    behind = cache.modules_behind("locator.pipeline")
    assert {"locator.skin", "locator.geometry", "locator.errors"} <= set(behind)
    assert not [name for name in behind if name.startswith(("locator.io", "locator.cli"))]


def test_a_damaged_entry_is_no_entry(tmp_path):
    store = cache.StageCache(tmp_path)
    store.put("s", "k" * 64, sample_markers())
    path = store.path("s", "k" * 64)
    whole = path.read_bytes()
    for damaged in (whole[: len(whole) // 2], b"", whole[:200] + b"\xff" * 40 + whole[240:]):
        path.write_bytes(damaged)
        assert store.get("s", "k" * 64) is None
        assert not path.exists()
    path.write_bytes(whole)
    assert isinstance(store.get("s", "k" * 64), Markers)


def test_the_budget_removes_what_was_used_longest_ago_but_nothing_in_use(tmp_path):
    store = cache.StageCache(tmp_path)
    for number, letter in enumerate("abcd"):
        store.put(letter, letter * 64, np.zeros(1000))
        os.utime(store.path(letter, letter * 64), (number, number))
    kept = store.path("a", "a" * 64).name
    store.prune({kept}, budget_bytes=2 * store.path("a", "a" * 64).stat().st_size)
    assert sorted(p.name[0] for p in tmp_path.iterdir()) == ["a", "d"]


# ── volumes and surfaces ─────────────────────────────────────────────────────────────────

FORMS = {
    "both": {"sform": oblique_affine(), "qform": oblique_affine()},
    "sform alone": {"sform": oblique_affine()},
    "qform alone": {"qform": oblique_affine()},
    "left-handed": {"sform": oblique_affine() @ np.diag([-1, 1, 1, 1.0])},
    "left-handed qform": {"qform": oblique_affine() @ np.diag([-1, 1, 1, 1.0])},
    "template sform, scanner qform": {
        "sform": oblique_affine(origin=(-60, -90, -50)),
        "sform_code": 4,
        "qform": oblique_affine(),
    },
}


@pytest.mark.parametrize("forms", FORMS.values(), ids=FORMS)
def test_a_map_stands_where_the_scan_stands(tmp_path, forms):
    path = save_t1(tmp_path / "t1.nii.gz", **forms)
    before = path.read_bytes()
    grid = read_grid(path)
    values = np.random.default_rng(0).random(grid.shape).astype(np.float32)
    write_map(tmp_path / "p.nii.gz", values, grid, description="p", intent="p value")
    there, here = nib.load(path), nib.load(tmp_path / "p.nii.gz")
    corners = np.array([[0, 0, 0], [89, 99, 94], [10, 80, 3]])
    for voxel in corners:
        # The contract of the project: world coordinates agree to 0.01 mm.
        gap = nib.affines.apply_affine(there.affine, voxel) - nib.affines.apply_affine(
            here.affine, voxel
        )
        assert np.abs(gap).max() < 0.01
    for code in ("sform_code", "qform_code"):
        assert here.header[code] == there.header[code]
    assert np.allclose(here.get_qform(), there.get_qform(), atol=1e-4)
    assert int(here.header["xyzt_units"]) == 10
    assert int(here.header["intent_code"]) == 22  # NIFTI_INTENT_PVAL, nifti1.h
    assert np.array_equal(read_map(tmp_path / "p.nii.gz")[0], values)
    assert path.read_bytes() == before


def test_maps_that_do_not_fit_are_refused_and_leave_nothing(tmp_path):
    grid = read_grid(save_t1(tmp_path / "t1.nii", sform=oblique_affine()))
    for values, words in (
        (np.zeros((2, 2, 2)), "does not fit"),
        (np.full(grid.shape, np.nan), "not finite"),
    ):
        with pytest.raises(ValueError, match=words):
            write_map(tmp_path / "m.nii.gz", values, grid, description="m")
    assert [p.name for p in tmp_path.iterdir()] == ["t1.nii"]


def test_sidecar_and_header_tell_of_the_chemical_shift(tmp_path):
    path = save_t1(tmp_path / "t1.nii.gz", sform=oblique_affine())
    plain = read_volume(path)
    assert (plain.read_axis, plain.pixel_bandwidth_hz, plain.field_tesla) == (None, None, None)
    sidecar = {"PixelBandwidth": 200, "MagneticFieldStrength": 3, "PhaseEncodingDirection": "j-"}
    (tmp_path / "t1.json").write_text(json.dumps({**sidecar, "SliceEncodingDirection": "i"}))
    told = read_volume(path)
    assert (told.read_axis, told.pixel_bandwidth_hz, told.field_tesla) == (2, 200.0, 3.0)
    (tmp_path / "t1.json").write_text("{broken")
    assert any("t1.json" in finding.problem for finding in read_volume(path).findings)


def test_a_scan_in_metres_is_read_in_millimetres(tmp_path):
    path = save_t1(tmp_path / "t1.nii.gz", sform=np.diag([0.001, 0.001, 0.001, 1]))
    image = nib.load(path)
    image.header.set_xyzt_units("meter")
    nib.save(image, tmp_path / "m.nii.gz")
    assert np.allclose(read_volume(tmp_path / "m.nii.gz").voxel_mm, 1.0, atol=1e-5)


def ball(radius=90.0):
    vertices, faces = icosphere(2)
    return Surface(
        vertices_scanner_mm=vertices * radius + [1.5, -20, 30],
        faces=faces,
        sd_mm=np.ones(len(vertices)),
    )


def test_a_surface_comes_back_in_the_scanner_s_millimetres(tmp_path):
    surface = ball()
    for name in ("a", "b"):
        write_surface(tmp_path / f"{name}.surf.gii", surface, name="scalp", description="of t1")
    image = nib.load(tmp_path / "a.surf.gii")
    points, triangles = image.agg_data("pointset"), image.agg_data("triangle")
    assert np.abs(points - surface.vertices_scanner_mm).max() < 0.01
    assert np.array_equal(triangles, surface.faces)
    system = image.darrays[0].coordsys
    assert system.dataspace == system.xformspace == 1  # NIFTI_XFORM_SCANNER_ANAT, nifti1.h
    assert b"NIFTI_XFORM_SCANNER_ANAT" in (tmp_path / "a.surf.gii").read_bytes()
    assert np.array_equal(system.xform, np.eye(4))
    assert image.darrays[0].meta["AnatomicalStructurePrimary"] == "Head"
    back = read_surface(tmp_path / "a.surf.gii")
    assert np.abs(back.vertices_scanner_mm - surface.vertices_scanner_mm).max() < 0.01
    assert (tmp_path / "a.surf.gii").read_bytes() == (tmp_path / "b.surf.gii").read_bytes()
    (tmp_path / "c.surf.gii").write_text("<GIFTI>")
    with pytest.raises(FileError, match=r"c\.surf\.gii"):
        read_surface(tmp_path / "c.surf.gii")


# ── tables ───────────────────────────────────────────────────────────────────────────────


def sample_electrodes():
    nan = np.full(3, np.nan)
    return Electrodes(
        names=("Fp1", "Oz", "Cz"),
        positions_scanner_mm=np.array([[-30.0, 90, 20], [0, -100, 10], [0.0, -0.0001, 110]]),
        covariance_mm2=np.tile(np.eye(3), (3, 1, 1)),
        status=("seen", "inferred", "given"),
        confidence=np.array([0.98, 0.7, np.nan]),
        residual_mm=np.array([1.0, np.nan, 2.0]),
        sd_mm=np.array([0.3, 3.0, 1.0]),
        capsule_scanner_mm=np.array([[-32.0, 96, 22], nan, nan]),
        marker=np.array([1, -1, -1], dtype=np.int32),
        alternatives=("", "", ""),
        fitted_scanner_mm=np.array([[-30.0, 91, 20], [0, -100, 10], [0.0, 0, 112]]),
        landmarks_scanner_mm=np.array([[0.0, 85, -30], [-75, 5, -40], [75, 5, -40], nan]),
        landmarks_sd_mm=np.ones(4),
        landmarks_given=False,
        holder_mm=2.0,
        side_basis="the header",
        why_not=("too large", "", "under the skin"),
    )


def test_electrode_table_has_the_columns_and_order_of_the_contract(tmp_path):
    bids.write_electrodes(tmp_path, sample_electrodes(), t1_name="t1.nii.gz")
    lines = (tmp_path / "electrodes.tsv").read_text().splitlines()
    assert lines[0].split("\t") == (
        "name x y z status confidence residual_mm sd_mm capsule_x capsule_y capsule_z".split()
    )
    assert [line.split("\t")[0] for line in lines[1:]] == ["Fp1", "Oz", "Cz"]
    assert lines[1].split("\t")[4:6] == ["seen", "0.9800"]
    assert lines[2].split("\t")[6] == "n/a"
    assert lines[3].split("\t")[2] == "0.000"  # never a minus zero
    assert lines[3].split("\t")[5:] == ["n/a", "2.000", "1.000", "n/a", "n/a", "n/a"]
    described = json.loads((tmp_path / "electrodes.json").read_text())
    assert set(lines[0].split("\t")) - {"name"} == set(described)
    system = json.loads((tmp_path / "coordsystem.json").read_text())
    assert system["EEGCoordinateSystem"] == "Other"
    assert system["EEGCoordinateUnits"] == "mm"
    assert "t1.nii.gz" in system["EEGCoordinateSystemDescription"]
    assert system["AnatomicalLandmarkCoordinates"]["LPA"] == [-75, 5, -40]


def test_positions_are_read_back_and_units_beside_them_are_heeded(tmp_path):
    bids.write_electrodes(tmp_path, sample_electrodes(), t1_name="t1.nii.gz")
    names, places, spread = bids.read_positions(tmp_path / "electrodes.tsv", "electrodes")
    assert names == ("Fp1", "Oz", "Cz")
    assert np.allclose(places, sample_electrodes().positions_scanner_mm, atol=1e-3)
    assert np.allclose(spread, [0.3, 3.0, 1.0])
    metres = "name\tx\ty\tz\nFp1\t-0.03\t0.09\t0.02\nOz\t0\t-0.1\t0.01\nCz\t0\t0\t0.11\nC3\t-0.06\t0\t0.1\n"
    (tmp_path / "sub-01_electrodes.tsv").write_text(metres)
    (tmp_path / "sub-01_coordsystem.json").write_text('{"EEGCoordinateUnits": "m"}')
    assert np.allclose(
        bids.read_positions(tmp_path / "sub-01_electrodes.tsv", "electrodes")[1][0], [-30, 90, 20]
    )
    (tmp_path / "bare.tsv").write_text(metres)
    (tmp_path / "coordsystem.json").unlink()
    with pytest.raises(FileError, match=r"0\.1\d+ mm, which is no head"):
        bids.read_positions(tmp_path / "bare.tsv", "electrodes")


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("name\tx\ty\nFp1\t1\t2\n", "no column z"),
        ("name\tx\ty\tz\nFp1\t1\t2\n", "Line 2"),
        ("name\tx\ty\tz\nFp1\t1\t2\tup\n", "Fp1"),
        ("name\tx\ty\tz\nFp1\t1\t2\tinf\n", "not finite"),
        ("name\tx\ty\tz\nFp1\t1\t2\t3\nFp1\t1\t2\t4\n", "two rows for Fp1"),
        ("name\tx\ty\tz\nFp1\tn/a\tn/a\tn/a\n", "no row with a place"),
    ],
)
def test_broken_tables_name_the_place(tmp_path, text, words):
    (tmp_path / "electrodes.tsv").write_text(text)
    with pytest.raises(FileError, match=words) as caught:
        bids.read_positions(tmp_path / "electrodes.tsv", "electrodes")
    assert "electrodes.tsv" in str(caught.value)


def test_landmarks_are_three_named_places(tmp_path):
    path = tmp_path / "l.json"
    path.write_text('{"NAS": [0, 85, -30], "LPA": [-75, 5, -40], "RPA": [75, 5, -40]}')
    assert bids.read_landmarks(path)[1].tolist() == [-75, 5, -40]
    path.write_text('{"NAS": [0, 85, -30], "LPA": [-75, 5], "RPA": [75, 5, -40]}')
    with pytest.raises(FileError, match="LPA"):
        bids.read_landmarks(path)


def test_marker_table_says_why_a_blob_is_no_electrode(tmp_path):
    bids.write_markers(tmp_path / "markers.tsv", sample_markers(), sample_electrodes())
    header, *rows = [
        line.split("\t") for line in (tmp_path / "markers.tsv").read_text().splitlines()
    ]
    assert (
        header
        == (
            "x y z xx xy xz yy yz zz diameter_mm contrast roundness skin_mm score electrode why_not"
        ).split()
    )
    assert [row[-2:] for row in rows] == [
        ["n/a", "too large"],
        ["Fp1", "n/a"],
        ["n/a", "under the skin"],
    ]


def test_peak_table_without_peaks_is_its_header(tmp_path):
    none = Peaks(
        positions_scanner_mm=np.zeros((0, 3)),
        source=np.zeros(0, dtype=np.int32),
        statistic=np.zeros(0),
        corrected_p=np.zeros(0),
        time_s=np.zeros(0),
        region_mm=np.zeros(0),
        region_probability=np.zeros(5),
        region_causes_mm={},
    )
    bids.write_peaks(tmp_path / "peaks.tsv", none)
    assert (tmp_path / "peaks.tsv").read_text() == (
        "x\ty\tz\tstatistic\tcorrected_p\ttime_s\tregion_mm\n"
    )
    one = replace(
        none,
        positions_scanner_mm=np.array([[1.0, 2, 3]]),
        source=np.array([2], dtype=np.int32),
        statistic=np.array([40.0]),
        corrected_p=np.array([1 / 5000]),
        time_s=np.array([0.1]),
        region_mm=np.array([np.nan]),
    )
    bids.write_peaks(tmp_path / "peaks.tsv", one)
    assert (tmp_path / "peaks.tsv").read_text().splitlines()[1].split("\t") == [
        "1.00", "2.00", "3.00", "40.0000", "0.000200", "0.1000", "n/a",
    ]  # fmt: skip

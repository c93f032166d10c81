"""Small results with plain numbers in them, for tests of what is shown (not of what is computed)."""

from __future__ import annotations

import numpy as np

from locator.geometry import icosphere
from locator.head import Head, Surface
from locator.inverse import Inverse
from locator.labels import Electrodes
from locator.pipeline import InputFile, LeadFieldSummary, RunResults, Timing
from locator.recording import Epochs
from locator.results import Finding
from locator.skin import Skin
from locator.sources import Sources
from locator.statistics import NullControl, Peaks, SourceTest
from locator.volume import Volume

NAMES = ("Fz", "Cz", "C3", "C4", "Oz")
CENTER = np.array([3.0, -4.0, 5.0])


def small_volume() -> Volume:
    """A ball of 80 mm with brighter shells, 2 mm voxels."""
    affine = np.diag([2.0, 2.0, 2.0, 1.0])
    affine[:3, 3] = -100 + CENTER
    grid = np.indices((101, 101, 101)) * 2.0 - 100
    radius = np.sqrt((grid**2).sum(axis=0))
    image = np.where(radius < 80, 100.0, 2.0) + np.where((radius > 74) & (radius < 80), 150, 0)
    return Volume(
        intensity=image.astype(np.float32),
        scanner_from_voxel=affine,
        orientation_basis="the sform of the header (code 1)",
    )


def small_run(*, p: float = 0.001, trials: int = 20, complete: bool = True) -> RunResults:
    """Build the results of a run whose first corrected p is given; one trial is an average."""
    rng = np.random.default_rng(0)
    volume = small_volume()
    affine = np.array(volume.scanner_from_voxel)
    grid = np.indices(volume.intensity.shape) * 2.0 - 100
    height = (np.sqrt((grid**2).sum(axis=0)) - 80).astype(np.float32)
    directions, faces = icosphere(3)
    skin = Skin(
        height_map_mm=height,
        scanner_from_grid=affine,
        vertices_scanner_mm=CENTER + 80 * directions,
        faces=faces,
        sd_mm=0.5,
        noise_sd=1.0,
        fat_intensity=250.0,
    )
    places = np.array([[0, 0.7, 0.7], [0, 0, 1], [-0.8, 0, 0.6], [0.8, 0, 0.6], [0, -1, 0.1]])
    places /= np.linalg.norm(places, axis=1, keepdims=True)
    capsules = CENTER + 85 * places
    capsules[4] = np.nan
    n = len(NAMES)
    electrodes = Electrodes(
        names=NAMES,
        positions_scanner_mm=CENTER + 80 * places,
        covariance_mm2=np.tile(np.eye(3), (n, 1, 1)),
        status=("seen", "seen", "seen", "seen", "inferred"),
        confidence=np.array([0.999, 0.998, 0.6, 0.97, 0.93]),
        residual_mm=np.array([1.0, 2.0, 6.5, 1.2, np.nan]),
        sd_mm=np.array([0.6, 0.6, 0.6, 0.6, 4.0]),
        capsule_scanner_mm=capsules,
        marker=np.array([0, 1, 2, 3, -1], np.int32),
        alternatives=("", "", "C5 is nearly as likely <b>", "", ""),
        fitted_scanner_mm=CENTER + 80 * places,
        landmarks_scanner_mm=np.full((4, 3), np.nan),
        landmarks_sd_mm=np.full(4, np.nan),
        landmarks_given=False,
        holder_mm=1.0,
        side_basis="the sform of the header (code 1) alone",
        why_not=("", "", "", ""),
        findings=(
            Finding(
                level="look", stage="labels", subject="C3", problem="Two names fit.", doubt=0.4
            ),
        ),
    )

    def surface(radius: float) -> Surface:
        return Surface(
            vertices_scanner_mm=CENTER + radius * directions,
            faces=faces,
            sd_mm=np.full(len(directions), 0.7),
        )

    head = Head(
        scalp=surface(80),
        outer_skull=surface(74),
        inner_skull=surface(68),
        tissues=np.where(height < -14, 1, 0).astype(np.int32),
        scanner_from_voxel=affine,
        center_scanner_mm=CENTER,
        padded_mm=np.zeros(len(directions)),
        brain_volume_ml=1300.0,
    )
    positions = CENTER + 50 * directions[::8]
    nearest = np.full(volume.intensity.shape, -1, np.int32)
    shell = (height < -20) & (height > -40)
    voxel = np.argwhere(shell)
    unit = (voxel * 2.0 - 100) / np.linalg.norm(voxel * 2.0 - 100, axis=1, keepdims=True)
    nearest[shell] = (unit @ directions[::8].T).argmax(axis=1)
    sources = Sources(
        positions_scanner_mm=positions,
        normals=directions[::8],
        kind="grey",
        spacing_mm=5.0,
        nearest_source=nearest,
        scanner_from_voxel=affine,
    )
    n_sources, times = len(positions), np.arange(-0.1, 0.3, 0.01)
    epochs = Epochs(
        data_uv=rng.normal(size=(trials, n, len(times))),
        electrode_names=NAMES,
        times_s=times,
        sampling_hz=100.0,
        event="tone",
        n_trials_read=trials + 2,
        dropped_trials=("trial 3: 300 µV at C3", "trial 9: 250 µV at Oz"),
        bad_channels=(),
        other_channels=("ECG1: heart",),
        testable=trials > 1,
    )
    inverse = Inverse(
        kernel_nam_per_uv=rng.normal(size=(n_sources, 3, n)),
        standardise=np.tile(np.eye(3), (n_sources, 1, 1)),
        electrode_names=NAMES,
        noise_covariance_uv2=np.eye(n),
        noise_rank=n - 1,
        method="eloreta",
        lambda2=0.11,
        snr=3.0,
        n_average=trials,
        noise_norm_per_nam=np.ones(n_sources),
        depth_prior=np.ones(n_sources),
        normals=np.full((n_sources, 3), np.nan),
    )
    statistic = np.linspace(1, 9, n_sources)
    corrected = np.where(statistic > 8.5, p, 1.0)
    if trials == 1:
        corrected = np.full(n_sources, np.nan)
    test = SourceTest(
        statistic=statistic,
        statistic_time_s=np.full(n_sources, 0.1),
        corrected_p=corrected,
        amplitude_nam=statistic,
        null_maxima=np.linspace(2, 8.4, 1000),
        threshold=8.2,
        n_permutations=1000,
        exact=False,
        window_s=np.array([0.0, 0.29]),
    )
    found = trials > 1 and p < 0.05
    peaks = Peaks(
        positions_scanner_mm=positions[-1:] if found else np.zeros((0, 3)),
        source=np.array([n_sources - 1] if found else [], np.int32),
        statistic=statistic[-1:] if found else np.zeros(0),
        corrected_p=np.array([p] if found else []),
        time_s=np.array([0.1] if found else []),
        region_mm=np.array([12.0] if found else []),
        region_probability=np.full(n_sources, 1 / n_sources if found else 0),
        region_causes_mm={"trials": 9.0, "electrode positions": 2.0} if found else {},
    )
    control = NullControl(
        rate=0.04, low=0.0, high=0.1, n_checks=50, sentence="2 of 50 pseudo-runs found something."
    )
    return RunResults(
        command="run",
        subject="invented-01",
        volume=volume,
        skin=skin,
        electrodes=electrodes,
        head=head,
        sources=sources,
        lead_field=LeadFieldSummary(
            n_sources=n_sources, n_scalp_vertices=642, conductivity_s_per_m=(0.33, 0.0132, 0.33)
        ),
        epochs=epochs,
        inverse=inverse,
        test=test,
        peaks=peaks if complete else None,
        null_control=control if complete else None,
        complete=complete,
        settings={"statistics": {"n_permutations": 1000}},
        session_settings={"t1": "t1.nii.gz"},
        inputs=(InputFile(role="t1", path="t1.nii.gz", sha256="0" * 64),),
        timings=(Timing(stage="skin", seconds=1.0, kept=False, peak_mb=100.0),),
        seeds={"run": 0},
        versions={"locator": "0.1.0"},
    )

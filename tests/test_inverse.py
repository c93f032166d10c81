"""Source estimates against mne, and the properties they must have."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from locator.errors import InverseError
from locator.inverse import (
    METHODS,
    InverseOptions,
    estimate,
    make_inverse,
    noise_covariance,
    statistic,
)
from locator.recording import Epochs
from locator.sources import Sources

N_ELECTRODES, N_TRIALS = 32, 40


def sphere_points(n: int, radius: float, lowest: float = -0.3) -> np.ndarray:
    step = np.arange(n) + 0.5
    z = 1 - (1 - lowest) * step / n
    turn = np.pi * (1 + 5**0.5) * step
    flat = np.sqrt(1 - z**2)
    return radius * np.c_[flat * np.cos(turn), flat * np.sin(turn), z]


def made_rows(seed: int = 0, spacing: float = 16.0) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Potentials of dipoles in an unbounded medium, 0.33 S/m: smooth, strong at the surface."""
    electrodes = sphere_points(N_ELECTRODES, 92.0)
    axis = np.arange(-64.0, 65.0, spacing)
    grid = np.stack(np.meshgrid(axis, axis, axis, indexing="ij"), axis=-1).reshape(-1, 3)
    sources = grid[np.linalg.norm(grid, axis=1) < 72.0]
    rng = np.random.default_rng(seed)
    sources = sources + rng.normal(0, 1.0, sources.shape)
    offset = electrodes[:, None] - sources
    rows = 1000 / (4 * np.pi * 0.33) * offset / np.linalg.norm(offset, axis=2, keepdims=True) ** 3
    return rows, sources, electrodes


def made_epochs(rows: np.ndarray, *, seed: int = 1, moment_nam: float = 40.0) -> Epochs:
    rng = np.random.default_rng(seed)
    times = np.arange(-20, 41) / 100.0
    mixing = rng.normal(size=(N_ELECTRODES, N_ELECTRODES)) + 2 * np.eye(N_ELECTRODES)
    noise = 2.0 * np.einsum(
        "ef,nft->net", mixing, rng.normal(size=(N_TRIALS, N_ELECTRODES, len(times)))
    )
    course = np.exp(-((times - 0.15) ** 2) / 0.002)
    data = noise + moment_nam * rows[:, 40, 2][:, None] * course
    data -= data.mean(axis=1, keepdims=True)
    data -= data[:, :, times <= 0].mean(axis=2, keepdims=True)
    return Epochs(
        data_uv=data,
        electrode_names=tuple(f"E{k}" for k in range(N_ELECTRODES)),
        times_s=times,
        sampling_hz=100.0,
        event="flash",
        n_trials_read=N_TRIALS,
        dropped_trials=(),
        bad_channels=(),
        other_channels=(),
        testable=True,
    )


@pytest.fixture(scope="module")
def made() -> tuple[np.ndarray, np.ndarray, np.ndarray, Epochs]:
    rows, sources, electrodes = made_rows()
    return rows, sources, electrodes, made_epochs(rows)


def mne_objects(rows, sources, electrodes, epochs, noise_uv2, average_uv):
    """A forward solution, covariance and average that hold exactly our arrays."""
    import mne
    from mne.io.constants import FIFF

    names = list(epochs.electrode_names)
    info = mne.create_info(names, 100.0, "eeg", verbose="ERROR")
    for channel, place in zip(info["chs"], electrodes, strict=True):
        channel["loc"][:3] = place / 1000
    evoked = mne.EvokedArray(average_uv * 1e-6, info, nave=N_TRIALS, verbose="ERROR")
    evoked.set_eeg_reference(projection=True, verbose="ERROR")
    evoked.apply_proj(verbose="ERROR")
    n_sources = len(sources)
    space = mne.setup_volume_source_space(
        pos={"rr": sources / 1000, "nn": np.tile([0.0, 0, 1], (n_sources, 1))}, verbose="ERROR"
    )
    space[0]["coord_frame"] = FIFF.FIFFV_COORD_HEAD
    gain = (rows - rows.mean(axis=0)).reshape(len(names), -1) * 1e-6 / 1e-9
    forward = mne.Forward(
        sol={
            "data": gain,
            "row_names": names,
            "col_names": [],
            "nrow": gain.shape[0],
            "ncol": gain.shape[1],
        },
        sol_grad=None,
        source_ori=FIFF.FIFFV_MNE_FREE_ORI,
        source_nn=np.tile(np.eye(3), (n_sources, 1)),
        source_rr=sources / 1000,
        nsource=n_sources,
        nchan=len(names),
        coord_frame=FIFF.FIFFV_COORD_HEAD,
        src=space,
        surf_ori=False,
        info=evoked.info.copy(),
        mri_head_t=mne.transforms.Transform("mri", "head", np.eye(4)),
        _orig_sol=gain.copy(),
        _orig_source_ori=FIFF.FIFFV_MNE_FREE_ORI,
        _orig_orient_prior=None,
    )
    with forward["info"]._unlock():
        forward["info"]["mri_head_t"] = forward["mri_head_t"]
        forward["info"]["mri_file"] = forward["info"]["meas_file"] = ""
        forward["info"]["mri_id"] = forward["info"]["meas_id"] = None
    covariance = mne.Covariance(
        noise_uv2 * 1e-12, names, [], evoked.info["projs"], 1000, verbose="ERROR"
    )
    return evoked, forward, covariance


@pytest.mark.parametrize("method", METHODS)
def test_estimates_equal_those_of_mne(made, method):
    # For one lead field, covariance and lambda the current estimates are the same numbers;
    # dSPM and sLORETA come from mne multiplied with one factor a source.
    import mne

    from locator.io.inverse_fif import mne_settings

    rows, sources, electrodes, epochs = made
    inverse = make_inverse(rows, epochs, options=InverseOptions(method=method, snr=2.5))
    average = epochs.data_uv.mean(axis=0)
    evoked, forward, covariance = mne_objects(
        rows, sources, electrodes, epochs, inverse.noise_covariance_uv2, average
    )
    operator = mne.minimum_norm.make_inverse_operator(
        evoked.info, forward, covariance, loose=1.0, depth=0.8, verbose="ERROR"
    )
    settings = mne_settings(inverse)
    theirs = mne.minimum_norm.apply_inverse(
        evoked,
        operator,
        lambda2=settings["lambda2"],
        method=settings["method"],
        method_params=settings.get("method_params"),
        pick_ori="vector",
        verbose="ERROR",
    ).data
    ours = estimate(inverse, average)
    if method in ("dspm", "sloreta"):
        ours = ours * inverse.noise_norm_per_nam[:, None, None]
    else:
        ours = ours * 1e-9
    assert np.abs(ours - theirs).max() < 1e-6 * np.abs(theirs).max()
    assert inverse.noise_rank == N_ELECTRODES - 1


@pytest.mark.parametrize("orientation", ["free", "loose", "fixed"])
@pytest.mark.parametrize("method", METHODS)
def test_written_operator_gives_the_same_estimate(made, method, orientation, tmp_path: Path):
    # The format stores the decomposition in single precision (relative 6e-8 a number).
    import mne

    from locator.io.inverse_fif import mne_settings, write_inverse

    rows, sources, electrodes, epochs = made
    normals = sources / np.linalg.norm(sources, axis=1, keepdims=True)
    inverse = make_inverse(
        rows,
        epochs,
        options=InverseOptions(method=method, orientation=orientation),
        normals=normals,
    )
    average = epochs.data_uv.mean(axis=0)
    evoked = mne_objects(rows, sources, electrodes, epochs, inverse.noise_covariance_uv2, average)[
        0
    ]
    path = tmp_path / "operator-inv.fif"
    space = Sources(
        positions_scanner_mm=sources,
        normals=normals,
        kind="brain",
        spacing_mm=16.0,
        nearest_source=np.full((1, 1, 1), -1, dtype=np.int32),
        scanner_from_voxel=np.eye(4),
    )
    write_inverse(path, inverse, rows, space, electrodes)
    first = path.read_bytes()
    write_inverse(path, inverse, rows, space, electrodes)
    assert path.read_bytes() == first
    operator = mne.minimum_norm.read_inverse_operator(path, verbose="ERROR")
    places = np.array([channel["loc"][:3] for channel in operator["info"]["chs"]])
    assert np.abs(1000 * places - electrodes).max() < 1e-4
    assert np.abs(1000 * operator["src"][0]["rr"] - sources).max() < 1e-4
    settings = mne_settings(inverse)
    ready = mne.minimum_norm.prepare_inverse_operator(operator, **settings, verbose="ERROR")
    theirs = mne.minimum_norm.apply_inverse(
        evoked,
        ready,
        lambda2=settings["lambda2"],
        method=settings["method"],
        pick_ori="vector" if orientation != "fixed" else None,
        prepared=True,
        verbose="ERROR",
    ).data
    ours = estimate(inverse, average)
    if orientation == "fixed":
        ours = np.einsum("sxt,sx->st", ours, normals)
    if method in ("dspm", "sloreta"):
        norm = inverse.noise_norm_per_nam
        ours = ours * norm.reshape(-1, *[1] * (ours.ndim - 1))
    else:
        ours = ours * 1e-9
    assert np.abs(ours - theirs).max() < 1e-6 * np.abs(theirs).max()


@pytest.mark.parametrize("snr", [0.7, 3.0, 100.0])
@pytest.mark.parametrize("method", ["sloreta", "eloreta"])
def test_peak_of_one_source_is_at_the_source(made, method, snr):
    # Exact zero error without noise, with regularisation: Pascual-Marqui 2002, 2007.
    rows, _, _, epochs = made
    inverse = make_inverse(rows, epochs, options=InverseOptions(method=method, snr=snr))
    rng = np.random.default_rng(3)
    moments = rng.normal(size=(rows.shape[1], 3))
    fields = np.einsum("esx,sx->es", rows, moments)
    assert (statistic(inverse, fields).argmax(axis=0) == np.arange(rows.shape[1])).all()


def test_peaks_of_mne_go_outward_and_of_dspm_inward(made):
    # Directional truths of figures measured on a sphere: unweighted minimum norm outward, dSPM
    # inward for superficial sources (Hauk et al. 2011, NeuroImage 54:1966-1974, and own check).
    rows, sources, _, epochs = made
    radius = np.linalg.norm(sources, axis=1)
    fields = np.einsum("esx,sx->es", rows, sources / radius[:, None])
    seen = sources[:, 2] > 0
    shift = {}
    for method, depth in (("mne", 0.0), ("dspm", 0.8)):
        inverse = make_inverse(
            rows, epochs, options=InverseOptions(method=method, depth=depth, snr=3.0)
        )
        at = statistic(inverse, fields).argmax(axis=0)
        shift[method] = radius[at] - radius
    assert shift["mne"][seen & (radius < 45)].mean() > 5
    assert shift["dspm"][seen & (radius > 60)].mean() < -1


def test_dspm_has_unit_power_under_noise(made):
    rows, _, _, epochs = made
    noise = noise_covariance(epochs)
    inverse = make_inverse(rows, epochs, options=InverseOptions(method="dspm"))
    rng = np.random.default_rng(4)
    root = np.linalg.cholesky(noise.covariance_uv2 + 1e-9 * np.eye(N_ELECTRODES))
    draws = root @ rng.normal(size=(N_ELECTRODES, 4000)) / np.sqrt(N_TRIALS)
    power = statistic(inverse, draws).mean(axis=1)
    # Standard error of a mean of 4,000 powers with at least one degree of freedom: 0.022.
    assert np.abs(power - 1).max() < 0.1


def test_loose_lies_between_free_and_fixed(made):
    rows, sources, _, epochs = made
    normals = sources / np.linalg.norm(sources, axis=1, keepdims=True)
    average = epochs.data_uv.mean(axis=0)
    result = {
        name: estimate(
            make_inverse(
                rows,
                epochs,
                options=InverseOptions(method="dspm", orientation=orientation, loose=loose, snr=3),
                normals=normals,
            ),
            average,
        )
        for name, orientation, loose in (
            ("free", "free", 0.2),
            ("open", "loose", 1.0),
            ("tight", "loose", 1e-8),
            ("fixed", "fixed", 0.2),
        )
    }
    scale = np.abs(result["free"]).max()
    assert np.abs(result["open"] - result["free"]).max() < 1e-9 * scale
    along = np.einsum("sxt,sx->st", result["tight"], normals)
    across = result["tight"] - along[:, None] * normals[:, :, None]
    assert np.abs(across).max() < 1e-5 * np.abs(along).max()
    fixed_across = np.cross(result["fixed"], normals[:, :, None], axis=1)
    assert np.abs(fixed_across).max() < 1e-12 * np.abs(result["fixed"]).max()


def test_estimate_is_linear_and_blind_to_the_reference(made):
    rows, _, _, epochs = made
    inverse = make_inverse(rows, epochs)
    average = epochs.data_uv.mean(axis=0)
    once = estimate(inverse, average)
    assert np.allclose(estimate(inverse, 2.5 * average), 2.5 * once, rtol=1e-10, atol=1e-9)
    assert np.allclose(estimate(inverse, average + 7.0), once, atol=1e-7 * np.abs(once).max())
    shifted = make_inverse(rows + np.linspace(0, 1, rows.shape[1])[:, None], epochs)
    assert np.allclose(estimate(shifted, average), once, atol=1e-7 * np.abs(once).max())


def test_units_of_the_recording_do_not_move_the_map(made):
    # Ten times the recording, ten times the currents; the statistic has no unit.
    rows, _, _, epochs = made
    loud = made_epochs(rows)
    values = {
        field: getattr(loud, field) for field in Epochs.__dataclass_fields__ if field != "data_uv"
    }
    loud = Epochs(data_uv=10 * epochs.data_uv, **values)
    one, ten = make_inverse(rows, epochs), make_inverse(rows, loud)
    assert ten.snr == pytest.approx(one.snr, rel=1e-9)
    assert np.allclose(
        statistic(ten, loud.data_uv.mean(axis=0)), statistic(one, epochs.data_uv.mean(axis=0))
    )


def test_signal_to_noise_follows_the_source(made):
    rows, _, _, _ = made
    measured = [make_inverse(rows, made_epochs(rows, moment_nam=m)).snr for m in (0, 40, 80)]
    assert measured[0] < 1.3
    assert measured[2] == pytest.approx(2 * measured[1], rel=0.15)


def test_noise_shrinks_less_with_more_trials(made):
    epochs = made[3]
    few = Epochs(
        **{
            field: getattr(epochs, field)
            for field in Epochs.__dataclass_fields__
            if field != "data_uv"
        },
        data_uv=epochs.data_uv[:8],
    )
    much, little = noise_covariance(epochs), noise_covariance(few)
    assert 0 < much.shrinkage < little.shrinkage <= 1
    assert np.abs(much.covariance_uv2.sum(axis=0)).max() < 1e-8 * much.covariance_uv2.max()
    white = much.whitener @ much.covariance_uv2 @ much.whitener.T
    assert np.allclose(white, np.eye(N_ELECTRODES - 1), atol=1e-8)


def test_result_is_ready_for_products(made):
    rows, _, _, epochs = made
    inverse = make_inverse(rows, epochs)
    for array in (inverse.kernel_nam_per_uv, inverse.standardise):
        assert array.dtype == np.float64
        assert array.flags.c_contiguous


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda rows, epochs: make_inverse(rows[:-1], epochs), "31 electrodes"),
        (lambda rows, epochs: make_inverse(rows * np.nan, epochs), "not finite"),
        (lambda rows, epochs: make_inverse(rows[:, :, 0], epochs), r"\(E, S, 3\)"),
        (
            lambda rows, epochs: make_inverse(
                rows, epochs, options=InverseOptions(orientation="fixed")
            ),
            "no normals",
        ),
        (
            lambda rows, epochs: make_inverse(
                rows,
                epochs,
                options=InverseOptions(orientation="loose"),
                normals=np.full((rows.shape[1], 3), np.nan),
            ),
            "absent or not of unit length",
        ),
        (lambda rows, epochs: InverseOptions(method="best"), "'best'"),  # type: ignore[arg-type]
        (lambda rows, epochs: InverseOptions(snr=-1.0), "snr is -1"),
        (lambda rows, epochs: noise_covariance(epochs, baseline_s=(3, 4)), "0 samples"),
        (lambda rows, epochs: estimate(make_inverse(rows, epochs), np.ones((5, 2))), r"\(5, 2\)"),
    ],
)
def test_wrong_input_is_named(made, change, words):
    rows, _, _, epochs = made
    with pytest.raises(InverseError, match=words):
        change(rows, epochs)

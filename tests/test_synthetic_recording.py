"""Invented recordings carry exactly what they were told to, and their files say the same."""

import json

import mne
import numpy as np
import pytest

from synthetic_heads.currents import choose_patch, scalp_potentials
from synthetic_heads.heads import GREY, make_head
from synthetic_heads.recording import Dipole, choose_dipole, make_recording, write_recording

N = 32
NAMES = [f"E{i + 1}" for i in range(N)]


def over_the_top(center, radius):
    k = np.arange(N)
    z = 1 - 1.2 * (k + 0.5) / N
    turn = k * np.pi * (3 - np.sqrt(5))
    ring = np.sqrt(1 - z**2)
    return center + radius * np.stack([ring * np.cos(turn), ring * np.sin(turn), z], axis=1)


@pytest.fixture(scope="module")
def sphere():
    head = make_head(3, kind="sphere", voxel_mm=2.0)
    return head, over_the_top(head.center_mm, head.radii_mm["scalp"])


@pytest.fixture(scope="module")
def shaped():
    head = make_head(3, voxel_mm=2.0)
    vertices = head.surfaces["scalp"][0]
    wanted = over_the_top(head.center_mm, 95.0)
    nearest = np.linalg.norm(vertices[None] - wanted[:, None], axis=2).argmin(1)
    return head, vertices[nearest]


def short(head, electrodes, **options):
    return make_recording(
        head,
        NAMES,
        electrodes,
        **{"seed": 1, "n_trials": 20, "event_free_s": 10.0, "voxel_mm": 4.0}
        | {"background_voxel_mm": 4.0}
        | options,
    )


def label_at(head, position_mm):
    voxel = np.linalg.inv(head.scanner_from_voxel) @ [*position_mm, 1.0]
    return head.labels[tuple(np.rint(voxel[:3]).astype(int))]


def test_without_noise_the_recording_is_the_forward_solution_times_the_course(sphere):
    head, electrodes = sphere
    dipole = choose_dipole(head, 2, latency_s=0.2, width_s=0.08)
    recording = short(
        head, electrodes, dipoles=[dipole], background_uv=0, sensor_noise_uv=0, extra_channels=()
    )
    expected = scalp_potentials(head, electrodes, [dipole.position_mm], [dipole.moment_nam])[:, 0]
    peak = recording.event_samples + 50
    assert recording.data_uv[:, peak] == pytest.approx(
        np.repeat(expected[:, None], 20, axis=1), rel=1e-5, abs=1e-5
    )
    # Half of it half a width later (0.04 s are 10 samples).
    assert recording.data_uv[:, peak + 10] == pytest.approx(
        np.repeat(expected[:, None] / 2, 20, axis=1), rel=1e-4, abs=1e-5
    )
    assert np.abs(recording.data_uv[:, : recording.event_samples[0]]).max() < 1e-6


def test_the_background_has_its_size_its_slope_and_its_alpha(sphere):
    head, electrodes = sphere
    recording = short(
        head, electrodes, background_uv=8.0, sensor_noise_uv=0, extra_channels=(), n_trials=100
    )
    data = recording.data_uv.astype(float)
    assert np.sqrt((data**2).mean()) == pytest.approx(8.0, rel=1e-4)
    power = (np.abs(np.fft.rfft(data, axis=1)) ** 2).mean(0)
    hz = np.fft.rfftfreq(data.shape[1], 1 / 250)

    def mean_power(low, high):
        return power[(hz >= low) & (hz < high)].mean()

    # 1/f: twenty times the frequency, a twentieth of the power (away from alpha).
    assert mean_power(1, 2) / mean_power(20, 40) == pytest.approx(20, rel=0.25)
    assert mean_power(9, 11) > 4 * mean_power(14, 16)
    # Through the head: neighbours look alike, white noise would not.
    correlation = np.corrcoef(data)
    distance = np.linalg.norm(electrodes[:, None] - electrodes[None], axis=2)
    distance[np.arange(N), np.arange(N)] = np.inf
    assert np.mean([correlation[i, distance[i].argmin()] for i in range(N)]) > 0.5


def test_the_average_over_trials_shows_the_dipole(sphere):
    head, electrodes = sphere
    dipole = choose_dipole(head, 5, amplitude_nam=40)
    recording = short(head, electrodes, dipoles=[dipole], n_trials=120, extra_channels=())
    latency = round(dipole.latency_s * 250)
    epochs = np.stack([recording.data_uv[:, s + latency] for s in recording.event_samples])
    before = np.stack([recording.data_uv[:, s - 50 : s].mean(1) for s in recording.event_samples])
    average = (epochs - before).mean(0)
    expected = np.array(recording.truth["dipoles"][0]["peak_uv"])
    # The noise of the average is about 8 / sqrt(120) = 0.7 uV, correlated between electrodes.
    assert np.corrcoef(average, expected)[0, 1] > 0.8
    assert np.sqrt(((average - expected) ** 2).mean()) < 2.0


def test_the_same_seed_gives_the_same_bytes_and_another_does_not(sphere, tmp_path):
    head, electrodes = sphere
    dipole = choose_dipole(head, 2)
    for folder, seed in (("a", 1), ("b", 1), ("c", 2)):
        recording = short(head, electrodes, dipoles=[dipole], seed=seed, blinks_per_minute=10)
        write_recording(tmp_path / folder / "rec.vhdr", recording)
    for ending in ("vhdr", "vmrk", "eeg", "truth.json"):
        first, second, third = (
            (tmp_path / folder / f"rec.{ending}").read_bytes() for folder in "abc"
        )
        assert first == second
        assert ending == "vhdr" or first != third


def test_the_files_read_back_as_they_were_made(sphere, tmp_path):
    head, electrodes = sphere
    dipoles = [
        choose_dipole(head, 2, event="S  1"),
        choose_dipole(head, 3, event="S 12", orientation="radial"),
    ]
    recording = short(
        head,
        electrodes,
        dipoles=dipoles,
        n_trials={"S  1": 12, "S 12": 8, "pause": 2},
        reference="E7",
        sampling_hz=500.0,
    )
    assert "E7" not in recording.channel_names
    assert recording.data_uv.shape[0] == N - 1 + 3
    header = write_recording(tmp_path / "rec.vhdr", recording)
    raw = mne.io.read_raw_brainvision(header, verbose="error")
    assert raw.info["sfreq"] == 500.0
    assert tuple(raw.ch_names) == recording.channel_names
    # Half of a 0.1 uV step, and the hair that keeps the writer from cutting off.
    assert np.abs(raw.get_data() * 1e6 - recording.data_uv).max() < 0.052
    written = {"S  1": "Stimulus/S  1", "S 12": "Stimulus/S 12", "pause": "Comment/pause"}
    assert list(raw.annotations.description) == [written[n] for n in recording.event_names]
    assert np.rint(raw.annotations.onset * 500).astype(int).tolist() == (
        recording.event_samples.tolist()
    )
    assert sorted(recording.event_names).count("S 12") == 8
    truth = json.loads((tmp_path / "rec.truth.json").read_text(encoding="utf-8"))
    assert truth["dipoles"][1]["position_mm"] == dipoles[1].position_mm.tolist()
    assert truth["reference"] == "E7"
    assert raw.info["meas_date"] is None


def test_the_event_free_stretch_is_where_it_should_be(sphere):
    head, electrodes = sphere
    at_start = short(head, electrodes, event_free_s=30.0)
    at_end = short(head, electrodes, event_free_s=30.0, event_free_at="end")
    assert at_start.event_samples[0] >= 30 * 250
    assert at_end.data_uv.shape[1] - at_end.event_samples[-1] >= 30 * 250
    gaps = np.diff(at_start.event_samples) / 250
    assert gaps.min() >= 1.245
    assert gaps.max() <= 1.755
    assert gaps.std() > 0.05


def test_what_spoils_a_recording_is_in_it(sphere):
    head, electrodes = sphere
    clean = short(head, electrodes)
    rms = np.sqrt((clean.data_uv[:N] ** 2).mean(1))
    bad = short(
        head, electrodes, bad_channels={"E3": "flat", "E5": "noisy", "E9": "loose"}, n_bad_trials=3
    )
    spoiled = np.sqrt((bad.data_uv[:N] ** 2).mean(1))
    assert spoiled[2] == 0
    assert spoiled[4] > 4 * rms[4]
    assert spoiled[8] > 4 * rms[8]
    assert len(bad.truth["bad_trials"]) == 3
    for trial in range(20):
        first = bad.event_samples[trial]
        burst = np.diff(bad.data_uv[10:N, first + 13 : first + 88], axis=1).std()
        assert (burst > 40) == (trial in bad.truth["bad_trials"])

    scanner = short(head, electrodes, gradient_artefact_uv=2000.0)
    assert np.sqrt((scanner.data_uv[:N] ** 2).mean()) > 500
    assert scanner.event_names.count("T  1") == len(scanner.event_names) - 20

    blinking = short(head, electrodes, blinks_per_minute=15.0)
    difference = blinking.data_uv[:N].astype(float) - clean.data_uv[:N]
    # The nearer to the eyes, the more positive.
    at_peak = difference[:, np.abs(difference).max(0).argmax()]
    from_eyes = np.linalg.norm(electrodes - head.landmarks_mm["NAS"], axis=1)
    assert np.corrcoef(at_peak, from_eyes)[0, 1] < -0.7
    assert at_peak[from_eyes.argmin()] > 50


def test_the_locked_drift_repeats_from_trial_to_trial_and_goes_on_without_events(sphere):
    head, electrodes = sphere
    options = {"iti_jitter_s": 0.0, "background_uv": 0.0, "sensor_noise_uv": 0.0}
    drifting = short(head, electrodes, locked_drift_uv=10.0, extra_channels=(), **options)
    first, cycle = int(drifting.event_samples[0]), 375
    for start in (first + cycle, first - 3 * cycle):
        assert drifting.data_uv[:, start : start + cycle] == pytest.approx(
            drifting.data_uv[:, first : first + cycle], abs=0.02
        )
    assert np.ptp(drifting.data_uv, axis=1).max() > 10


@pytest.mark.parametrize("orientation", ["tangential", "radial", "cortex"])
def test_a_chosen_dipole_lies_in_grey_matter_under_the_cap(sphere, shaped, orientation):
    for head, _ in (sphere, shaped):
        for seed in range(4):
            dipole = choose_dipole(head, seed, orientation=orientation)
            assert np.linalg.norm(dipole.moment_nam) == pytest.approx(40.0)
            outward = dipole.position_mm - head.center_mm
            if head.kind == "sphere":
                assert np.linalg.norm(outward) == pytest.approx(64.0)
                across = abs(outward @ dipole.moment_nam) / 64.0
                assert across == pytest.approx(0.0 if orientation == "tangential" else 40.0)
            else:
                assert label_at(head, dipole.position_mm) == GREY
                ears = (head.landmarks_mm["LPA"][2] + head.landmarks_mm["RPA"][2]) / 2
                assert dipole.position_mm[2] > ears + 14


def test_a_shaped_head_records_through_finite_volumes(shaped):
    head, electrodes = shaped
    patch = choose_patch(head, 1)
    assert 5 < len(patch) <= 40
    middle = np.mean([d.position_mm for d in patch], axis=0)
    assert max(np.linalg.norm(d.position_mm - middle) for d in patch) < 16
    recording = short(head, electrodes, dipoles=patch[:3], extra_channels=())
    assert recording.truth["forward"] == "finite volumes, 4 mm"
    assert np.isfinite(recording.data_uv).all()
    # Microvolts from tens of nanoampere metres (here a few of forty parts of them): a wrong unit
    # would be off by a thousand.
    peak = np.abs([d["peak_uv"] for d in recording.truth["dipoles"]]).max()
    assert 0.01 < peak / np.linalg.norm(patch[0].moment_nam) < 0.5


def test_what_cannot_be_made_is_refused(sphere, tmp_path):
    head, electrodes = sphere
    with pytest.raises(ValueError, match="31 electrode names"):
        make_recording(head, NAMES[:-1], electrodes, seed=1)
    with pytest.raises(ValueError, match=r"doubled: \['E1'\]"):
        make_recording(head, ["E1", *NAMES[:-1]], electrodes, seed=1)
    with pytest.raises(ValueError, match="'Nowhere' is not one of"):
        short(head, electrodes, reference="Nowhere")
    with pytest.raises(ValueError, match="'E2' is 'broken'"):
        short(head, electrodes, bad_channels={"E2": "broken"})
    dipole = Dipole(position_mm=head.center_mm, moment_nam=np.ones(3), event="S  9")
    with pytest.raises(ValueError, match="event 'S  9'"):
        short(head, electrodes, dipoles=[dipole], n_trials={"S  1": 3})
    with pytest.raises(ValueError, match="'Respiration': its name must contain"):
        short(head, electrodes, extra_channels=["Respiration"])
    with pytest.raises(ValueError, match=r"must end in \.vhdr"):
        write_recording(tmp_path / "rec.edf", short(head, electrodes, n_trials=2))

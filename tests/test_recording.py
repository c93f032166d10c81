"""Channels, scanner artefacts, events, filtering, epochs, rejection."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import signal

from locator.errors import RecordingError, SettingError
from locator.recording import (
    EpochOptions,
    Recording,
    check_times,
    choose_event,
    cut_epochs,
    find_channels,
    make_epochs,
    match_event,
    prepare_recording,
    refuse_scanner_artefact,
    scalp_electrodes,
    scanner_evidence,
)

NAMES = (
    "Fp1 Fp2 F7 F3 Fz F4 F8 T7 C3 Cz C4 T8 P7 P3 Pz P4 P8 O1 O2 FC1 FC2 CP1 CP2 Oz".split()
)  # fmt: skip
RATE = 250.0


def _background(seed: int, n: int, seconds: float, rate: float = RATE) -> np.ndarray:
    """1/f-like noise of 10 µV, alike in neighbouring channels, with waxing and waning alpha."""
    rng = np.random.default_rng(seed)
    length = int(seconds * rate)
    sources = rng.standard_normal((30, length))
    frequency = np.fft.rfftfreq(length, 1 / rate)
    shape = 1 / np.sqrt(np.maximum(frequency, 0.3))
    sources = np.fft.irfft(np.fft.rfft(sources) * shape, length)
    sources /= sources.std(axis=1, keepdims=True)
    alpha = signal.sosfiltfilt(
        signal.butter(2, [9, 11], "band", fs=rate, output="sos"), rng.standard_normal(length)
    )
    alpha /= alpha.std()
    place = np.arange(n)[:, None] / n
    mixing = np.exp(-((place - np.linspace(0, 1, 30)) ** 2) / 0.01) * rng.choice([-1, 1], 30)
    data = mixing @ sources + (0.5 + place) * alpha + 0.3 * rng.standard_normal((n, length))
    return 10 * data / data.std()


def _recording(
    data: np.ndarray | None = None,
    names=NAMES,
    rate: float = RATE,
    events: tuple[str, ...] | None = None,
    samples: np.ndarray | None = None,
    **settings,
) -> Recording:
    if data is None:
        data = _background(0, len(names), 100.0, rate)
    if samples is None:
        samples = np.arange(int(1.0 * rate), data.shape[1] - int(1.0 * rate), int(1.2 * rate))
    if events is None:
        events = ("S1",) * len(samples)
    return Recording(
        data_uv=data.astype(np.float32),
        channel_names=tuple(names),
        channel_kinds=("eeg",) * len(names),
        sampling_hz=rate,
        event_names=events,
        event_samples=np.asarray(samples),
        **settings,
    )


# Channels


def test_channels_are_known_by_the_names_people_write():
    names = ["EEG FP1-REF", "T3", "fz", "Cz.", "ECG", "VEOG", "Status", "GND", "A1"]
    recording = _recording(np.ones((9, 100)), names, samples=np.array([50]))
    assert scalp_electrodes(recording) == ("Fp1", "T7", "Fz", "Cz")
    others = find_channels(recording).others
    assert len(others) == 5
    assert any("ECG: taken for ecg" in text for text in others)
    assert any("Status: taken for trigger" in text for text in others)
    assert any("A1: taken for an ear lobe" in text for text in others)


def test_asked_for_names_come_in_their_order_and_name_the_absent():
    recording = _recording(np.ones((3, 100)), ["Cz", "T3", "Oz"], samples=np.array([50]))
    found = find_channels(recording, ["T7", "Cz"], also=["FCz", "Oz"])
    assert found.electrode_names == ("T7", "Cz")
    assert found.index.tolist() == [1, 0]
    assert found.without_channel == ("FCz", "Oz")
    with pytest.raises(RecordingError, match=r"1 of .* C2 \(nearest channel: Cz\).*--also"):
        find_channels(recording, ["C2", "Cz"])
    with pytest.raises(RecordingError, match="Cz is named twice"):
        find_channels(recording, ["Cz", "cz"])


def test_names_outside_the_layout_work_when_asked_for():
    recording = _recording(np.ones((2, 100)), ["X-one", "X-two"], samples=np.array([50]))
    assert find_channels(recording, ["x-two"]).index.tolist() == [1]
    with pytest.raises(RecordingError, match="None of the 2 channels is a scalp electrode"):
        find_channels(recording)


def test_two_channels_of_one_electrode_are_refused():
    recording = _recording(np.ones((2, 100)), ["T3", "T7"], samples=np.array([50]))
    with pytest.raises(RecordingError, match=r"'T3' and 'T7' are both electrode T7"):
        find_channels(recording)


# Events


@pytest.mark.parametrize("asked", ["S1", "S  1", "s1", "1", "Stimulus/S  1", "S 1", "S01"])
def test_an_event_is_understood_as_people_write_it(asked):
    assert match_event(asked, ["S1", "S11", "S2"]) == ("S1",)


def test_several_kinds_and_none_chosen_lists_them():
    samples = np.array([300, 900, 1500])
    recording = _recording(events=("S1", "S2", "S1"), samples=samples)
    with pytest.raises(RecordingError, match=r"2 kinds.*'S1' \(2 times\), 'S2' \(1 times\)"):
        choose_event(recording, None)
    assert choose_event(recording, "s 2") == "S2"
    with pytest.raises(RecordingError, match=r"no event 'S3'.*nearest is 'S[12]'"):
        choose_event(recording, "S3")
    with pytest.raises(RecordingError, match="fits 2 kinds"):
        choose_event(replace(recording, event_names=("S1", "R1", "S1")), "1")


def test_no_events_at_all_is_an_error():
    recording = _recording(events=(), samples=np.zeros(0, int))
    with pytest.raises(RecordingError, match="holds no events"):
        make_epochs(recording)


def test_the_only_kind_is_taken_without_asking():
    assert make_epochs(_recording()).event == "S1"


@pytest.mark.parametrize(
    ("epoch", "window", "culprit"),
    [
        ((0.5, -0.2), None, "epoch runs from 0.5 s to -0.2"),
        ((0.0, 0.5), None, "baseline"),
        ((-0.2, 0.5), (0.3, 0.1), "window runs from 0.3 s to 0.1"),
        ((-0.2, 0.5), (0.3, 0.9), "leaves the epoch"),
        ((-0.2, float("nan")), None, "epoch runs"),
    ],
)
def test_times_that_cannot_be_are_refused(epoch, window, culprit):
    with pytest.raises(SettingError, match=culprit):
        check_times(epoch, window)


# Filtering and epochs


def _pulse(rate: float, seconds: float = 60.0):
    """A Gaussian deflection of up to 30 µV around Cz, 0.1 s after every event."""
    data = _background(1, len(NAMES), seconds, rate)
    samples = np.arange(int(2 * rate), int((seconds - 2) * rate), int(1.5 * rate))
    time = np.arange(data.shape[1]) / rate
    around = np.exp(-((np.arange(len(NAMES)) - 9) ** 2) / 8)
    for sample in samples:
        near = np.abs(time - sample / rate - 0.1) < 0.2
        bump = np.exp(-0.5 * ((time[near] - sample / rate - 0.1) / 0.02) ** 2)
        data[:, near] += 30 * around[:, None] * bump
    return _recording(data, rate=rate, samples=samples)


@pytest.mark.parametrize("rate", [250.0, 512.0, 1000.0, 5000.0])
def test_filter_and_fewer_samples_move_nothing_in_time(rate):
    epochs = make_epochs(_pulse(rate, 30.0))
    assert epochs.sampling_hz <= 512
    assert 0.0 in epochs.times_s
    average = epochs.data_uv.mean(axis=0)[epochs.electrode_names.index("Cz")]
    late = (epochs.times_s > 0.03) & (epochs.times_s < 0.17)
    weight = np.clip(average[late] - 0.5 * average.max(), 0, None)
    centre = (weight * epochs.times_s[late]).sum() / weight.sum()
    # Noise of the average and half a sample of the epochs.
    assert abs(centre - 0.1) < 0.003


def test_the_pass_band_is_what_is_stated():
    rate, seconds = 250.0, 60.0
    time = np.arange(int(rate * seconds)) / rate
    for hz, low, high in ((10.0, 0.98, 1.02), (40.0, 0.68, 0.74), (0.3, 0.68, 0.74), (60, 0, 0.05)):
        wave = np.sin(2 * np.pi * hz * time)[None].repeat(8, axis=0) * 20
        out = prepare_recording(_recording(wave, NAMES[:8])).data_uv[0, 5000:-5000]
        assert low <= np.sqrt(2) * out.std() / 20 <= high, hz


def test_epochs_are_average_referenced_with_no_offset_before_the_event():
    epochs = make_epochs(_recording())
    assert abs(epochs.data_uv.mean(axis=1)).max() < 1e-9
    assert abs(epochs.data_uv[:, :, epochs.times_s <= 0].mean(axis=2)).max() < 1e-9
    assert any("zero phase" in text for text in epochs.processing)


def test_the_reference_of_the_file_does_not_matter():
    recording = _recording()
    data = recording.data_uv
    other = replace(recording, data_uv=data - data[4] + 3.0)
    one = make_epochs(recording)
    two = make_epochs(other)
    # The channel that was the reference is flat in the second file and cannot be used there.
    assert [text.split(":")[0] for text in two.bad_channels] == ["Fz"]
    rows = [one.electrode_names.index(name) for name in two.electrode_names]
    same = one.data_uv[:, rows] - one.data_uv[:, rows].mean(axis=1, keepdims=True)
    np.testing.assert_allclose(two.data_uv, same, atol=0.01)


def test_permuting_channels_permutes_the_epochs():
    recording = _recording()
    order = np.random.default_rng(0).permutation(len(NAMES))
    mixed = replace(
        recording,
        data_uv=recording.data_uv[order],
        channel_names=tuple(NAMES[k] for k in order),
    )
    one, two = make_epochs(recording), make_epochs(mixed)
    rows = [two.electrode_names.index(name) for name in one.electrode_names]
    np.testing.assert_allclose(two.data_uv[:, rows], one.data_uv, atol=1e-6)


def test_scaling_the_data_scales_the_epochs():
    recording = _recording()
    one = make_epochs(recording)
    two = make_epochs(replace(recording, data_uv=recording.data_uv * np.float32(2)))
    np.testing.assert_allclose(two.data_uv, 2 * one.data_uv, atol=1e-4)


def test_epochs_never_reach_across_a_pause():
    recording = _recording()
    sample = int(recording.event_samples[10]) + 20
    epochs = make_epochs(replace(recording, break_samples=np.array([sample])))
    across = [text for text in epochs.dropped_trials if "pause" in text]
    assert len(across) == 1
    assert across[0].startswith("trial 11 ")
    marked = make_epochs(replace(recording, bad_spans=np.array([[sample, sample + 5]])))
    assert any("marked bad" in text for text in marked.dropped_trials)


def test_events_near_the_ends_are_left_out_with_the_reason():
    recording = _recording()
    samples = np.concatenate([[3], recording.event_samples, [recording.data_uv.shape[1] - 3]])
    epochs = make_epochs(
        replace(recording, event_samples=samples, event_names=("S1",) * len(samples))
    )
    assert sum("beyond the recording" in text for text in epochs.dropped_trials) == 2
    with pytest.raises(RecordingError, match="Only 0 of 1 trials"):
        make_epochs(replace(recording, event_samples=np.array([3]), event_names=("S1",)))


# Bad channels and trials


def test_good_data_keep_all_channels_and_nearly_all_trials():
    for seed in range(4):
        epochs = make_epochs(_recording(_background(seed, len(NAMES), 100.0)))
        assert epochs.bad_channels == ()
        assert len(epochs.dropped_trials) <= 0.03 * epochs.n_trials_read


@pytest.mark.parametrize("seed", range(3))
def test_bad_channels_are_named_with_their_reason(seed):
    rng = np.random.default_rng(seed)
    data = _background(seed, len(NAMES), 100.0)
    data[2] = 0.0
    data[7] += 120 * rng.standard_normal(data.shape[1])
    data[12] = 10 * signal.lfilter([1], [1, -0.95], rng.standard_normal(data.shape[1]))
    epochs = make_epochs(_recording(data))
    reasons = {text.split(":")[0]: text for text in epochs.bad_channels}
    assert set(reasons) == {NAMES[2], NAMES[7], NAMES[12]}
    assert "flat" in reasons[NAMES[2]]
    assert "noisy" in reasons[NAMES[7]]
    assert {finding.subject for finding in epochs.findings} >= set(reasons)


def test_a_channel_that_is_often_bad_by_itself_goes_and_the_trials_stay():
    data = _background(3, len(NAMES), 100.0)
    recording = _recording(data)
    for sample in recording.event_samples[::3]:
        data[5, sample + 10 : sample + 30] += 500
    epochs = make_epochs(_recording(data))
    assert [text.split(":")[0] for text in epochs.bad_channels] == [NAMES[5]]
    assert len(epochs.dropped_trials) <= 3


def test_blinks_and_jerks_cost_their_trials_only():
    data = _background(4, len(NAMES), 100.0)
    recording = _recording(data)
    hit = [5, 17, 40]
    shape = np.array([1.0, 1.0, 0.7, 0.5, 0.4, 0.5, 0.7] + [0.1] * (len(NAMES) - 7))
    for trial in hit:
        first = recording.event_samples[trial]
        data[:, first : first + 75] += 250 * shape[:, None] * np.hanning(75)
    epochs = make_epochs(_recording(data))
    dropped = {int(text.split()[1]) for text in epochs.dropped_trials}
    assert dropped >= {trial + 1 for trial in hit}
    assert len(dropped) <= len(hit) + 2
    assert epochs.bad_channels == ()
    assert len(epochs.event_samples) == len(epochs.data_uv) == epochs.n_average


def test_rejection_looks_at_sizes_and_not_at_signs():
    data = _background(5, len(NAMES), 100.0)
    one = make_epochs(_recording(data))
    two = make_epochs(_recording(-data))
    assert one.dropped_trials == two.dropped_trials
    np.testing.assert_allclose(two.data_uv, -one.data_uv, atol=1e-9)


def test_amplitudes_that_are_no_eeg_are_refused():
    data = _background(0, len(NAMES), 60.0)
    with pytest.raises(RecordingError, match="not those of an EEG"):
        make_epochs(_recording(data * 1e6))
    with pytest.raises(RecordingError, match="all channels are flat"):
        make_epochs(_recording(data * 0))


def test_too_few_electrodes_are_refused_with_the_reasons():
    data = _background(0, len(NAMES), 60.0)
    data[5:] = 0
    with pytest.raises(RecordingError, match=r"Only 5 good electrodes.*flat"):
        make_epochs(_recording(data))


def test_few_trials_are_a_finding_and_no_error():
    recording = _recording()
    few = replace(recording, event_samples=recording.event_samples[:8], event_names=("S1",) * 8)
    findings = make_epochs(few).findings
    assert any("8 trials only" in finding.problem for finding in findings)


# Averages without trials


def test_a_finished_average_is_taken_and_cannot_be_tested():
    data = _background(0, len(NAMES), 0.7)
    recording = _recording(
        data, events=("tone",), samples=np.array([50]), averaged_from=80, first_time_s=-0.2
    )
    epochs = make_epochs(recording)
    assert not epochs.testable
    assert epochs.data_uv.shape[:2] == (1, len(NAMES))
    assert epochs.n_average == 80
    assert abs(epochs.data_uv.mean(axis=1)).max() < 1e-5
    assert any("nothing could be tested" in finding.problem for finding in epochs.findings)
    with pytest.raises(RecordingError, match="nothing after the event"):
        make_epochs(replace(recording, first_time_s=-5.0))


# Artefacts of the scanner


def _gradient(rate: float, seconds: float, slice_s: float, amplitude: float, tr_s: float, duty=1.0):
    """Trapezoid trains of slices; the sampled pattern moves with the phase, as with free clocks."""
    time = np.arange(int(rate * seconds)) / rate
    phase = (time % slice_s) / slice_s
    wave = np.zeros_like(time)
    for at, height in ((0.05, 1.0), (0.2, -0.8), (0.35, 0.6), (0.5, -1.0), (0.75, 0.5)):
        wave += height * np.exp(-0.5 * ((phase - at) / 0.03) ** 2)
    wave[(time % tr_s) > duty * tr_s] = 0
    return amplitude * wave


@pytest.mark.parametrize("rate", [250.0, 1000.0, 5000.0])
@pytest.mark.parametrize(
    ("slice_s", "tr_s", "duty", "amplitude"),
    [(0.07, 2.1, 1.0, 2000.0), (1 / 15, 2.0, 1.0, 800.0), (0.05, 3.0, 0.7, 1500.0)],
)
def test_uncorrected_scanner_artefacts_are_refused(rate, slice_s, tr_s, duty, amplitude):
    rng = np.random.default_rng(0)
    data = _background(0, 12, 40.0, rate)
    wave = _gradient(rate, 40.0, slice_s, amplitude, tr_s, duty)
    data += rng.uniform(0.3, 1.0, (12, 1)) * rng.choice([-1, 1], (12, 1)) * wave
    with pytest.raises(RecordingError, match=r"uncorrected scanner artefacts.*uV.*Remove"):
        refuse_scanner_artefact(_recording(data, NAMES[:12], rate))


def test_artefacts_in_a_part_of_the_recording_are_refused():
    data = _background(0, 12, 200.0)
    first = int(120 * RATE)
    data[:, first:] += _gradient(RATE, 80.0, 0.07, 1500.0, 2.1)
    with pytest.raises(RecordingError, match=r"in \d of \d stretches"):
        refuse_scanner_artefact(_recording(data, NAMES[:12]))


def _with_blinks(data, rng):
    for start in range(200, data.shape[1] - 200, 700):
        data[:4, start : start + 75] += 600 * np.hanning(75)
    return data


def _with_alpha(data, rng):
    alpha = signal.sosfiltfilt(
        signal.butter(2, [9.5, 10.5], "band", fs=RATE, output="sos"),
        rng.standard_normal(data.shape[1]),
    )
    return data + 120 * alpha / alpha.std()


def _with_mains(data, rng):
    time = np.arange(data.shape[1]) / RATE
    return data + 2000 * np.sin(2 * np.pi * 50.02 * time) + 500 * np.sin(2 * np.pi * 100.04 * time)


def _with_movement(data, rng):
    steps = np.zeros(data.shape[1])
    for start in rng.integers(0, data.shape[1], 15):
        steps[start:] += rng.normal(0, 3000)
    return data + steps * rng.uniform(0.2, 1, (len(data), 1))


def _with_drift(data, rng):
    time = np.arange(data.shape[1]) / RATE
    return data + 5000 * np.sin(2 * np.pi * 0.25 * time)


def _with_pulse(data, rng):
    """What is left of the pulse artefact: every beat alike, intervals as a heart has them."""
    at, wave = 0.5, np.zeros(data.shape[1])
    while at < data.shape[1] / RATE - 1:
        first = int(at * RATE)
        wave[first : first + 100] += 150 * np.hanning(100) * np.sin(np.linspace(0, 9, 100))
        at += rng.normal(0.9, 0.05)
    return data + wave * rng.uniform(0.3, 1, (len(data), 1))


def _corrected(data, rng):
    return data + 0.01 * _gradient(RATE, data.shape[1] / RATE, 0.07, 2000.0, 2.1)


@pytest.mark.parametrize(
    "spoil",
    [_with_blinks, _with_alpha, _with_mains, _with_movement, _with_drift, _with_pulse, _corrected],
)
@pytest.mark.parametrize("seed", range(3))
def test_other_large_things_are_not_taken_for_the_scanner(spoil, seed):
    rng = np.random.default_rng(seed)
    recording = _recording(spoil(_background(seed, 12, 90.0), rng), NAMES[:12])
    refuse_scanner_artefact(recording)
    assert not scanner_evidence(recording).present


def test_scanner_evidence_says_what_it_saw():
    data = _background(0, 12, 60.0) + _gradient(RATE, 60.0, 0.08, 2000.0, 2.0)
    found = scanner_evidence(_recording(data, NAMES[:12]))
    assert found.present
    assert found.repeat > 0.9
    assert found.rms_uv > 300
    # The period is a whole number of slices.
    assert found.period_s / 0.08 == pytest.approx(round(found.period_s / 0.08), abs=0.06)


def test_pseudo_events_use_the_electrodes_they_are_given():
    recording = _recording()
    continuous = prepare_recording(recording)
    epochs = cut_epochs(
        continuous, recording.event_samples[:20], event="x", good_electrodes=NAMES[3:15]
    )
    assert epochs.electrode_names == tuple(NAMES[3:15])


def test_options_outside_their_range_are_named():
    with pytest.raises(SettingError, match=r"pass_hz is 40 0\.3"):
        EpochOptions(pass_hz=(40.0, 0.3))
    with pytest.raises(SettingError, match="trial_z is 0"):
        EpochOptions(trial_z=0)

"""Sign flips, peaks, regions and the null control, on a sphere whose answer is known."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise, product

import mne
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from locator.errors import SettingError, StatisticsError
from locator.forward import electrode_rows
from locator.inverse import Inverse, InverseOptions, make_inverse
from locator.recording import EpochOptions, Epochs, Recording, make_epochs
from locator.statistics import (
    RegionOptions,
    find_peaks,
    null_control,
    peak_region,
    sign_flip_test,
)
from locator.statistics.bounds import group_filters, largest
from locator.statistics.flips import filters, power
from locator.statistics.null_control import pseudo_trains
from tests.sphere_statistics import (
    NAMES,
    RATE,
    electrodes_mm,
    grid_mm,
    lead_field,
    noise_uv,
    session,
)

FAST = RegionOptions(n_draws=16, reach_mm=45.0, head_model_mm=0.0)


def _small(seed: int, n: int, n_sources: int = 5, n_electrodes: int = 4, n_samples: int = 3):
    """Random epochs and filters: for the test itself it does not matter what they mean."""
    rng = np.random.default_rng(seed)
    names = tuple(NAMES[:n_electrodes])
    times = np.arange(-2, n_samples) / 100
    epochs = Epochs(
        data_uv=rng.standard_normal((n, n_electrodes, len(times))),
        electrode_names=names,
        times_s=times,
        sampling_hz=100.0,
        event="x",
        n_trials_read=n,
        dropped_trials=(),
        bad_channels=(),
        other_channels=(),
        testable=True,
        n_average=n,
    )
    inverse = Inverse(
        kernel_nam_per_uv=rng.standard_normal((n_sources, 3, n_electrodes)),
        standardise=rng.standard_normal((n_sources, 3, 3)),
        electrode_names=names,
        noise_covariance_uv2=np.eye(n_electrodes),
        noise_rank=n_electrodes,
        method="none",
        lambda2=1.0,
        snr=1.0,
        n_average=n,
        noise_norm_per_nam=np.ones(n_sources),
        depth_prior=np.ones(n_sources),
        normals=np.full((n_sources, 3), np.nan),
    )
    return epochs, inverse


def _by_hand(epochs: Epochs, inverse: Inverse):
    """Every sign pattern, one after the other, with nothing clever."""
    weights = inverse.standardise @ inverse.kernel_nam_per_uv
    late = epochs.times_s > 1e-9
    maxima = []
    for signs in product([1, -1], repeat=len(epochs.data_uv)):
        average = np.tensordot(signs, epochs.data_uv, axes=1)[:, late] / len(signs)
        estimate = np.einsum("sce,et->sct", weights, average)
        maxima.append((estimate**2).sum(axis=1).max(axis=1))
    all_of_them = np.array(maxima)
    return all_of_them[0], all_of_them.max(axis=1)


@pytest.mark.parametrize("n", [5, 6, 8])
def test_few_trials_use_every_sign_pattern(n):
    epochs, inverse = _small(n, n)
    test = sign_flip_test(epochs, inverse, rng=np.random.default_rng(0))
    statistic, maxima = _by_hand(epochs, inverse)
    assert test.exact
    assert test.n_permutations == 2**n
    np.testing.assert_allclose(test.statistic, statistic, rtol=1e-10)
    np.testing.assert_allclose(np.sort(test.null_maxima), np.sort(maxima), rtol=1e-5)
    expected = [(maxima >= value * (1 - 1e-9)).mean() for value in statistic]
    np.testing.assert_allclose(test.corrected_p, expected)
    # A pattern and its opposite give the same power: no p is smaller than two patterns.
    assert test.corrected_p.min() >= 2 / 2**n


def test_many_trials_draw_patterns_and_count_the_identity():
    epochs, inverse = _small(1, 30)
    test = sign_flip_test(epochs, inverse, n_permutations=400, rng=np.random.default_rng(0))
    assert not test.exact
    assert test.n_permutations == len(test.null_maxima) == 400
    assert test.null_maxima[0] == test.statistic.max()
    assert test.corrected_p.min() >= 1 / 400
    strong = replace(epochs, data_uv=epochs.data_uv + 5)
    test = sign_flip_test(strong, inverse, n_permutations=400, rng=np.random.default_rng(0))
    assert test.corrected_p.min() == pytest.approx(1 / 400)


def test_one_source_one_sample_agrees_with_scipy_and_mne():
    # With one filter along one direction the power of the mean orders the sign patterns as the
    # absolute t value does (flips leave the sum of squares alone), so other people's sign-flip
    # tests must give the same p.
    for seed in range(5):
        epochs, inverse = _small(seed, 9, n_sources=1, n_samples=2)
        epochs = replace(epochs, data_uv=epochs.data_uv + 0.3)
        kernel = np.zeros((1, 3, 4))
        kernel[0, 0] = [1.0, -0.5, 0.2, 0.1]
        inverse = replace(inverse, kernel_nam_per_uv=kernel, standardise=np.eye(3)[None])
        p = sign_flip_test(epochs, inverse, rng=np.random.default_rng(0)).corrected_p[0]
        values = epochs.data_uv[:, :, -1] @ kernel[0, 0]
        other = stats.permutation_test(
            (values,), lambda x, axis: np.abs(x.mean(axis=axis)), permutation_type="samples",
            alternative="greater", n_resamples=np.inf, vectorized=True,
        )  # fmt: skip
        assert p == pytest.approx(other.pvalue, abs=1e-12)
        from_mne = mne.stats.permutation_t_test(
            values[:, None], n_permutations="all", tail=0, verbose="ERROR"
        )[1][0]
        # It leaves out one pattern of each pair, and may leave out the identity's own.
        assert p == pytest.approx(from_mne, abs=2 / 2**8)


def test_scaling_data_or_filters_changes_no_p():
    epochs, inverse = _small(3, 20)
    base = sign_flip_test(epochs, inverse, n_permutations=200, rng=np.random.default_rng(0))
    for factor in (1e-4, 1e4):
        scaled = sign_flip_test(
            replace(epochs, data_uv=epochs.data_uv * factor), inverse,
            n_permutations=200, rng=np.random.default_rng(0),
        )  # fmt: skip
        np.testing.assert_array_equal(scaled.corrected_p, base.corrected_p)
        np.testing.assert_allclose(scaled.statistic, base.statistic * factor**2)


def test_permuting_sources_permutes_the_result():
    epochs, inverse = _small(4, 20, n_sources=40)
    order = np.random.default_rng(1).permutation(40)
    mixed = replace(
        inverse,
        kernel_nam_per_uv=inverse.kernel_nam_per_uv[order],
        standardise=inverse.standardise[order],
    )
    one = sign_flip_test(epochs, inverse, n_permutations=100, rng=np.random.default_rng(0))
    two = sign_flip_test(epochs, mixed, n_permutations=100, rng=np.random.default_rng(0))
    np.testing.assert_array_equal(two.corrected_p, one.corrected_p[order])
    np.testing.assert_allclose(two.null_maxima, one.null_maxima, rtol=1e-5)


def test_same_seed_same_numbers():
    epochs, inverse = _small(5, 25)
    runs = [
        sign_flip_test(epochs, inverse, n_permutations=100, rng=np.random.default_rng(3))
        for _ in range(2)
    ]
    np.testing.assert_array_equal(runs[0].null_maxima, runs[1].null_maxima)


@settings(max_examples=25, deadline=None)
@given(
    seed=st.integers(0, 10_000),
    n_sources=st.integers(1, 60),
    rank=st.integers(1, 12),
    alike=st.floats(0, 1),
)
def test_the_bounds_never_lose_the_maximum(seed, n_sources, rank, alike):
    rng = np.random.default_rng(seed)
    common = rng.standard_normal((1, 3, rank))
    weights = alike * common + (1 - alike) * rng.standard_normal((n_sources, 3, rank))
    root = rng.standard_normal((rank, rank))
    groups = group_filters(weights, root @ root.T)
    sums = rng.standard_normal((7, rank, 5))
    found = largest(groups, np.einsum("re,pet->prt", groups.whiten, sums).astype(np.float32))
    exact = [power(weights, one).max() for one in sums]
    np.testing.assert_allclose(found, exact, rtol=2e-3 if rank == 1 else 2e-4)


def test_noise_alone_survives_in_one_of_twenty():
    # 400 noise recordings; binomial 99.9 % interval around 0.05 is 0.017 to 0.093.
    hits = 0
    for seed in range(400):
        epochs, inverse = _small(seed, 16, n_sources=30, n_electrodes=8, n_samples=6)
        test = sign_flip_test(epochs, inverse, n_permutations=120, rng=np.random.default_rng(seed))
        hits += bool((test.corrected_p < 0.05).any())
    assert 0.017 <= hits / 400 <= 0.093


def test_an_average_without_trials_is_not_tested():
    epochs, inverse = _small(6, 1)
    test = sign_flip_test(replace(epochs, testable=False), inverse, rng=np.random.default_rng(0))
    assert np.isnan(test.corrected_p).all()
    assert np.isnan(test.threshold)
    assert np.isfinite(test.statistic).all()
    assert any("Nothing could be tested" in finding.problem for finding in test.findings)
    peaks = find_peaks(test, epochs, inverse, np.ones((4, 5, 3)), np.zeros((5, 3)))
    assert len(peaks.source) == 0


def test_five_trials_cannot_be_significant_and_say_so():
    epochs, inverse = _small(7, 5)
    strong = replace(epochs, data_uv=epochs.data_uv + 100)
    test = sign_flip_test(strong, inverse, rng=np.random.default_rng(0))
    assert test.corrected_p.min() == pytest.approx(2 / 32)
    assert any("smallest possible p" in finding.problem for finding in test.findings)


def test_what_does_not_fit_is_refused():
    epochs, inverse = _small(8, 10)
    rng = np.random.default_rng(0)
    with pytest.raises(StatisticsError, match="not the same ones"):
        sign_flip_test(epochs, replace(inverse, electrode_names=("a", "b", "c", "d")), rng=rng)
    with pytest.raises(SettingError, match="window runs from"):
        sign_flip_test(epochs, inverse, window_s=(0.02, 0.01), rng=rng)
    with pytest.raises(SettingError, match="leaves the epoch"):
        sign_flip_test(epochs, inverse, window_s=(0.0, 1.0), rng=rng)
    with pytest.raises(StatisticsError, match="permutations"):
        sign_flip_test(epochs, inverse, n_permutations=5, rng=rng)


# On the sphere


def _place(seed: int, eccentricity: float = 0.8) -> np.ndarray:
    rng = np.random.default_rng(1000 + seed)
    direction = rng.standard_normal(3)
    direction[2] = abs(direction[2]) + 0.2
    return 80 * eccentricity * direction / np.linalg.norm(direction)


def _run(seed: int, sources, n_permutations: int = 200, **kwargs):
    epochs, positions = session(seed, sources, **kwargs)
    field = lead_field()
    rows = electrode_rows(field, positions)
    inverse = make_inverse(rows, epochs)
    rng = np.random.default_rng(seed)
    test = sign_flip_test(epochs, inverse, n_permutations=n_permutations, rng=rng)
    peaks = find_peaks(test, epochs, inverse, rows, grid_mm())
    return epochs, positions, inverse, test, peaks


def _radial(place: np.ndarray, nam: float = 40.0) -> np.ndarray:
    return nam * place / np.linalg.norm(place)


@pytest.mark.parametrize("seed", range(4))
def test_one_source_gives_one_peak_near_it_at_its_time(seed):
    place = _place(seed)
    *_, test, peaks = _run(seed, ((place, _radial(place), 0.15),))
    assert len(peaks.source) == 1
    # The grid alone (8 mm) costs up to 7 mm.
    assert np.linalg.norm(peaks.positions_scanner_mm[0] - place) < 15
    assert abs(peaks.time_s[0] - 0.15) < 0.02
    assert peaks.corrected_p[0] < 0.05
    assert peaks.statistic[0] == pytest.approx(test.statistic.max())
    assert np.isnan(peaks.region_mm).all()
    assert peaks.point_spread_mm[0] > 8


def test_noise_alone_has_no_peak_nearly_always():
    assert sum(len(_run(seed, ())[-1].source) > 0 for seed in range(8)) <= 2


def test_two_sources_far_apart_give_two_peaks():
    right, left = np.array([55.0, 10, 30]), np.array([-50.0, -25, 30])
    *_, peaks = _run(0, ((right, _radial(right), 0.12), (left, _radial(left), 0.2)))
    assert len(peaks.source) == 2
    for place in (right, left):
        assert np.linalg.norm(peaks.positions_scanner_mm - place, axis=1).min() < 15
    assert (np.diff(peaks.statistic) <= 0).all()


def test_two_sources_at_the_same_time_give_two_peaks():
    right, left = np.array([55.0, 10, 30]), np.array([-50.0, -25, 30])
    *_, peaks = _run(1, ((right, _radial(right), 0.15), (left, _radial(left, 35), 0.15)))
    assert len(peaks.source) == 2


def test_the_region_is_a_probability_whose_ball_holds_95_per_cent():
    place = _place(1)
    epochs, positions, inverse, _, peaks = _run(1, ((place, _radial(place), 0.15),))
    field = lead_field()
    out = peak_region(
        peaks, epochs, inverse, field, positions, options=FAST, rng=np.random.default_rng(0),
        other_conductivities=[lead_field(8.0, 0.0066)],
        other_inverses=[make_inverse(electrode_rows(field, positions), epochs,
                                     options=InverseOptions(snr=1.5))],
    )  # fmt: skip
    assert out.region_probability.sum() == pytest.approx(1)
    distance = np.linalg.norm(grid_mm() - peaks.positions_scanner_mm[0], axis=1)
    assert out.region_probability[distance <= out.region_mm[0]].sum() >= 0.95
    assert set(out.region_causes_mm) == {
        "trials", "electrode positions", "skull conductivity", "regularisation", "head model"
    }  # fmt: skip
    assert distance[np.argmax(out.region_probability)] < 20


def test_doubtful_electrodes_widen_the_region():
    place = _place(2)
    epochs, positions, inverse, _, peaks = _run(2, ((place, _radial(place), 0.15),))
    found = [
        peak_region(
            peaks, epochs, inverse, lead_field(), positions, options=FAST,
            covariance_mm2=np.tile(sd**2 * np.eye(3), (len(positions), 1, 1)),
            rng=np.random.default_rng(0),
        )
        for sd in (0.1, 8.0, 40.0)
    ]  # fmt: skip
    assert found[1].region_mm[0] > found[0].region_mm[0] + 3
    causes = [each.region_causes_mm["electrode positions"] for each in found]
    assert causes[1] > causes[0]


def test_region_refuses_what_does_not_fit():
    place = _place(2)
    epochs, positions, inverse, _, peaks = _run(2, ((place, _radial(place), 0.15),))
    with pytest.raises(StatisticsError, match="40 electrodes need positions"):
        peak_region(
            peaks, epochs, inverse, lead_field(), positions[:3], rng=np.random.default_rng(0)
        )


# Null control


def _continuous(
    seed: int, *, rest_s: float, n_events: int = 80, interval_s: float = 1.5, drift_uv: float = 0.0
) -> Recording:
    """A rest, then events at jittered intervals; a ramp in step with the trials all through."""
    rng = np.random.default_rng(seed)
    positions = electrodes_mm(30)
    first = rest_s + 2.0
    onsets = first + np.cumsum(rng.uniform(0.9, 1.1, n_events) * interval_s)
    total = int((onsets[-1] + 2) * RATE)
    data = noise_uv(seed, positions, total)
    samples = (onsets * RATE).astype(int)
    # The ramp begins anew with every trial, and goes on in the same rhythm through the rest.
    starts = np.concatenate(
        [np.arange(samples[0], 0, -interval_s * RATE)[::-1].astype(int), samples[1:], [total]]
    )
    ramp = np.zeros(total)
    for begin, end in pairwise(starts):
        ramp[begin:end] = np.linspace(-0.5, 0.5, end - begin)
    data = data + drift_uv * (positions[:, 1:2] / 92) * ramp
    return Recording(
        data_uv=data.astype(np.float32),
        channel_names=tuple(NAMES[:30]),
        channel_kinds=("eeg",) * 30,
        sampling_hz=RATE,
        event_names=("S1",) * n_events,
        event_samples=samples,
    )


def _inverse_for(recording: Recording) -> Inverse:
    return make_inverse(electrode_rows(lead_field(), electrodes_mm(30)), make_epochs(recording))


def test_pseudo_events_touch_no_event_and_not_each_other():
    for seed in range(3):
        recording = _continuous(seed, rest_s=40)
        trains = pseudo_trains(recording, "S1", (-0.2, 0.5))
        assert sum(len(train.samples) for train in trains) > 60
        before, after = round(0.2 * RATE), round(0.5 * RATE)
        for train in trains:
            assert (np.diff(train.samples) >= before + after).all()
            for sample in train.samples:
                assert before <= sample < recording.data_uv.shape[1] - after
                # Nothing within the epoch, and no event whose consequences reach into it.
                gap = sample - recording.event_samples
                assert not ((gap > -after) & (gap < before + after)).any()


def test_clock_markers_of_the_scanner_do_not_use_up_the_free_stretches():
    recording = _continuous(0, rest_s=40)
    clock = np.arange(10, recording.data_uv.shape[1], 500)
    samples = np.concatenate([recording.event_samples, clock])
    order = np.argsort(samples, kind="stable")
    names = np.array([*recording.event_names, *["R128"] * len(clock)])[order]
    both = replace(recording, event_samples=samples[order], event_names=tuple(names))
    one, two = (pseudo_trains(each, "S1", (-0.2, 0.5)) for each in (recording, both))
    assert [t.samples.tolist() for t in one] == [t.samples.tolist() for t in two]


def test_a_drift_in_step_with_the_trials_is_caught():
    caught = 0
    for seed in range(3):
        recording = _continuous(seed, rest_s=90, drift_uv=40.0)
        control = null_control(
            recording, _inverse_for(recording), event="S1", n_permutations=100,
            rng=np.random.default_rng(seed),
        )  # fmt: skip
        assert control.n_checks >= 6
        caught += bool(control.findings) and control.low > 0.05
    assert caught == 3


def test_honest_noise_gives_no_finding():
    rates = []
    for seed in range(4):
        recording = _continuous(seed, rest_s=90)
        control = null_control(
            recording, _inverse_for(recording), event="S1", n_permutations=100,
            rng=np.random.default_rng(seed),
        )  # fmt: skip
        assert control.findings == ()
        assert control.low <= 0.05 <= control.high
        assert control.low <= control.rate <= control.high
        assert "nominal" in control.sentence
        rates.append(control.rate)
    assert np.mean(rates) < 0.25


def test_too_little_event_free_recording_could_not_be_checked():
    recording = _continuous(0, rest_s=2, n_events=60, interval_s=0.9)
    control = null_control(
        recording, _inverse_for(recording), event="S1", rng=np.random.default_rng(0)
    )
    assert "could not be checked" in control.sentence
    assert np.isnan(control.rate)
    assert control.n_checks == 0
    assert {finding.level for finding in control.findings} == {"note"}


def test_the_control_uses_the_options_of_the_real_epochs():
    recording = _continuous(0, rest_s=60)
    with pytest.raises(SettingError, match="leaves the epoch"):
        null_control(
            recording, _inverse_for(recording), event="S1", window_s=(0.0, 3.0),
            options=EpochOptions(epoch_s=(-0.1, 0.4)), rng=np.random.default_rng(0),
        )  # fmt: skip


def test_filters_are_what_the_statistic_says():
    _, inverse = _small(9, 10)
    field = np.random.default_rng(0).standard_normal((4, 2))
    estimate = inverse.kernel_nam_per_uv @ field
    expected = (np.einsum("sij,sjt->sit", inverse.standardise, estimate) ** 2).sum(axis=1)
    np.testing.assert_allclose(power(filters(inverse), field), expected)

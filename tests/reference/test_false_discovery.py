"""Worked examples and other people's code for the corrections."""

from __future__ import annotations

import mne
import numpy as np
import pytest
from scipy import stats

from locator.errors import StatisticsError
from locator.statistics import false_discovery
from locator.statistics.flips import shares, threshold_at

# Benjamini & Hochberg 1995, J R Stat Soc B 57:289, section 3.1 (thrombolysis trial, 15 hypotheses);
# printed values from memory, the adjusted ones follow by arithmetic.
P_VALUES = [
    0.0001, 0.0004, 0.0019, 0.0095, 0.0201, 0.0278, 0.0298, 0.0344, 0.0459, 0.3240, 0.4262,
    0.5719, 0.6528, 0.7590, 1.000,
]  # fmt: skip
ADJUSTED = [
    0.0015, 0.003, 0.0095, 0.035625, 0.0603, 0.0638571, 0.0638571, 0.0645, 0.0765, 0.486,
    0.581182, 0.714875, 0.753231, 0.813214, 1.0,
]  # fmt: skip


def test_the_worked_example_of_the_false_discovery_rate():
    adjusted = false_discovery(P_VALUES)
    np.testing.assert_allclose(adjusted, ADJUSTED, rtol=2e-6)
    # At q = 0.05 four are rejected; Bonferroni rejects three.
    assert (adjusted <= 0.05).sum() == 4
    assert (np.array(P_VALUES) * 15 <= 0.05).sum() == 3


def test_the_order_of_the_p_values_does_not_matter():
    order = np.random.default_rng(0).permutation(15)
    np.testing.assert_allclose(
        false_discovery(np.array(P_VALUES)[order]), np.array(ADJUSTED)[order], rtol=2e-6
    )


def test_false_discovery_agrees_with_scipy_and_mne():
    values = np.random.default_rng(1).random(200) ** 2
    mine = false_discovery(values)
    np.testing.assert_allclose(mine, stats.false_discovery_control(values, method="bh"))
    np.testing.assert_allclose(mine, mne.stats.fdr_correction(values)[1])


def test_missing_p_values_are_not_counted():
    with_gap = [*P_VALUES[:5], np.nan, *P_VALUES[5:]]
    adjusted = false_discovery(with_gap)
    assert np.isnan(adjusted[5])
    np.testing.assert_allclose(np.delete(adjusted, 5), ADJUSTED, rtol=2e-6)
    with pytest.raises(StatisticsError, match=r"p value is 1\.2"):
        false_discovery([0.1, 1.2])


def test_threshold_of_the_maximum():
    # Nichols & Holmes 2002, Hum Brain Mapp 15:1: the (floor(alpha P) + 1)-th largest maximum, for
    # p <= alpha. Here "significant" is p < alpha, which at alpha P whole is one place higher.
    maxima = np.arange(1.0, 1001.0)
    assert threshold_at(maxima, 0.0501) == 1000 - 50
    assert threshold_at(maxima, 0.05) == 1000 - 49
    above = np.nextafter(threshold_at(maxima), 2000) * (1 + 1e-4)
    at = threshold_at(maxima)
    assert shares(maxima, np.array([above]))[0] < 0.05 <= shares(maxima, np.array([at]))[0]

"""Rank correlations, plain and partial, and running medians with undetected values."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from kspipe.comparison.trends import partial_rank_correlation, running_median, trends


@pytest.fixture
def three():
    rng = np.random.default_rng(6)
    radius = rng.uniform(0, 10, 300)
    gas = np.exp(-radius / 3) * 10 ** rng.normal(0, 0.2, 300)
    residual = -0.05 * radius + rng.normal(0, 0.2, 300)
    return residual, gas, radius


def test_without_controls_it_is_spearmans(three):
    residual, gas, _ = three
    expected = stats.spearmanr(residual, gas)
    assert partial_rank_correlation(residual, gas, ()) == pytest.approx(tuple(expected))


def test_one_control_follows_the_textbook_formula(three):
    # Kendall & Stuart 1979, vol. 2, Eq. 27.5.
    residual, gas, radius = three
    a, b, c = (stats.spearmanr(*pair).statistic for pair in
               ((residual, gas), (residual, radius), (gas, radius)))  # fmt: skip
    expected = (a - b * c) / math.sqrt((1 - b**2) * (1 - c**2))
    assert partial_rank_correlation(residual, gas, [radius])[0] == pytest.approx(expected)


def test_what_only_follows_radius_vanishes_when_radius_is_held(three):
    residual, gas, radius = three
    observed, predicted = 10**residual, np.ones(300)
    found = {
        t.against: t
        for t in trends(
            observed, predicted, {"radius_kpc": radius, "sigma_gas": gas}, ["radius_kpc"]
        )
    }
    assert found["sigma_gas"].chance < 1e-6
    assert found["sigma_gas"].partial_chance > 0.01
    assert found["sigma_gas"].held == ("radius_kpc",)
    assert found["radius_kpc"].held == ()
    assert "shares noise" in found["sigma_gas"].note


def test_azimuth_is_correlated_as_an_angle():
    rng = np.random.default_rng(7)
    azimuth = rng.uniform(0, 360, 200)
    observed = 10 ** (0.3 * np.sin(np.radians(azimuth)) + rng.normal(0, 0.1, 200))
    (trend,) = trends(observed, np.ones(200), {"azimuth": azimuth}, [])
    assert trend.rank_correlation > 0.8
    assert trend.chance < 1e-6


def test_negative_values_count_in_the_median():
    ratio = np.concatenate([np.full(30, -1.0), np.full(31, 2.0)])
    found = running_median(np.arange(61.0), ratio, n_bins=1)
    assert found.median_dex == pytest.approx((math.log10(2.0),))
    assert math.isnan(running_median(np.arange(61.0), -ratio, n_bins=1).median_dex[0])


@pytest.mark.parametrize(("n", "why"), [(5, "5 independent samples"), (50, "the same")])
def test_no_correlation_is_invented(n, why):
    (trend,) = trends(np.ones(n), np.ones(n), {"metallicity": np.full(n, 8.7)}, [])
    assert math.isnan(trend.rank_correlation)
    assert why in trend.note

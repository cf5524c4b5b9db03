"""Quantiles along an axis."""

import numpy as np
import pytest

from kspipe.products.running import running_quantiles

EDGES = np.array([0.0, 1.0, 2.0])


def test_median_counts_values_below_every_logarithm():
    x = np.full(5, 0.5)
    running = running_quantiles(x, np.array([-np.inf, -np.inf, 0.1, 0.2, 0.3]), EDGES, [0.5])
    assert running.y[0] == pytest.approx([0.1])


def test_nan_is_left_out_and_not_counted():
    running = running_quantiles(
        np.array([0.5, 0.5, np.nan]), np.array([1.0, np.nan, 2.0]), EDGES, [0.5]
    )
    assert running.count == [1]


def test_bins_with_too_few_values_are_absent():
    x, y = np.array([0.2, 0.4, 1.5]), np.array([1.0, 2.0, 3.0])
    running = running_quantiles(x, y, EDGES, [0.16, 0.5, 0.84], least=2)
    assert running.x == pytest.approx([0.3])
    assert running.y.shape == (3, 1)


def test_nothing_gives_nothing():
    running = running_quantiles(np.array([]), np.array([]), EDGES, [0.16, 0.5, 0.84], least=3)
    assert running.y.shape == (3, 0)


def test_quantiles_of_a_normal_sample():
    rng = np.random.default_rng(5)
    y = rng.normal(size=20_000)
    low, middle, high = running_quantiles(np.full(y.size, 0.5), y, EDGES, [0.16, 0.5, 0.84]).y[:, 0]
    # Quantiles of a unit normal; errors of sqrt(q (1 - q) / n) / density are 0.011 and below.
    assert (low, middle, high) == pytest.approx((-0.9945, 0.0, 0.9945), abs=0.04)

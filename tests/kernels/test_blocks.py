"""Correlation lengths of maps, blocks, and the bootstrap of blocks."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.ndimage import gaussian_filter

from kspipe.kernels.blocks import block_bootstrap_error, correlation_length, square_blocks


@pytest.mark.parametrize("sigma", [2.0, 4.0])
def test_smoothed_noise_correlates_over_two_sigma(sigma):
    # White noise smoothed with a Gaussian has the autocorrelation exp(-d^2 / 4 sigma^2).
    noise = gaussian_filter(np.random.default_rng(1).normal(size=(300, 300)), sigma, mode="wrap")
    used = np.ones(noise.shape, dtype=bool)
    used[:60, :90] = False
    assert correlation_length(noise + 3.0, used) == pytest.approx(2 * sigma, rel=0.05)


def test_what_is_flat_has_no_length():
    assert math.isnan(correlation_length(np.ones((9, 9)), np.ones((9, 9), dtype=bool)))


def test_blocks_are_squares_about_the_centre():
    positions = np.array([[0.1, 0.1], [9.9, 9.9], [10.1, 0.0], [-0.1, 0.0]])
    blocks = square_blocks(positions, 10.0, (0.0, 0.0))
    assert blocks[0] == blocks[1]
    assert len(set(blocks.tolist())) == 3


def test_bootstrap_error_counts_what_blocks_share():
    # The variance of a sum of b independent blocks of m equal values is b m^2 times theirs.
    rng = np.random.default_rng(2)
    shared = rng.normal(size=400)
    values = np.repeat(shared, 5)
    blocks = np.repeat(np.arange(400), 5)
    error = block_bootstrap_error(values, blocks, rng, 4000)
    assert error == pytest.approx(5 * shared.std() * math.sqrt(400), rel=0.05)

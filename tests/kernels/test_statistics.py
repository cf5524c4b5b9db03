"""Robust numbers and sums of correlated pixels.

Codes such as C803 number the worked check values of the project's reference sheet.
"""

import math

import numpy as np
import pytest
from scipy import stats

from kspipe.kernels.fourier import gaussian_smooth
from kspipe.kernels.geometry import beam_area, beam_covariance
from kspipe.kernels.statistics import (
    average_ranks,
    beam_averaging_dex,
    clipped_scatter,
    correlation_area,
    median_error,
    pareto_shape,
    ratio_interval,
)


def normal(n: int, seed: int = 1) -> np.ndarray:
    return np.random.default_rng(seed).normal(size=n)


def test_clipping_a_normal_sample_costs_little() -> None:
    values = 3.0 + 2.0 * normal(400_000)
    centre, sigma = clipped_scatter(values)
    # A normal distribution cut at a = 4 sigma has the variance 1 - 2 a phi(a) / (1 - 2 Q(a)):
    # sigma is 5.4e-4 too low, and once more of that when clipped again (identity).
    cut = 1 - math.sqrt(1 - 8 * math.exp(-8) / math.sqrt(2 * math.pi))
    assert cut == pytest.approx(5.4e-4, abs=0.05e-4)
    assert 0 <= 1 - sigma / np.std(values) < 1.5 * cut
    assert centre == pytest.approx(np.mean(values), abs=1e-3 * 2.0)


@pytest.mark.parametrize("share", [0.01, 0.05, 0.15])
@pytest.mark.parametrize("bright", [8.0, 100.0, 1e4])
def test_emission_and_stars_do_not_count(share: float, bright: float) -> None:
    blank = 0.2 + 0.5 * normal(40_000)
    n = int(share * blank.size)
    stars = 0.2 + 0.5 * bright * (1 + np.random.default_rng(2).exponential(size=n))
    values = np.random.default_rng(3).permutation(np.concatenate([blank, stars]))
    centre, sigma = clipped_scatter(values)
    # Sources start at 8 sigma, twice the cut: only the sky is left, 0.05 % narrower. Its own
    # scatter is known to 1 / sqrt(2 n) = 0.35 %, its mean to 0.5 %.
    assert sigma == pytest.approx(0.5, rel=4 * 0.0035 + 0.001)
    assert centre == pytest.approx(0.2, abs=4 * 0.005 * 0.5)
    assert np.std(values) > 1.5 * sigma


def test_scatter_knows_shift_and_scale() -> None:
    values = np.concatenate([normal(2000), np.full(50, 30.0)])
    centre, sigma = clipped_scatter(values)
    moved = clipped_scatter(-7.0 * values + 100.0)
    assert moved == pytest.approx((100.0 - 7.0 * centre, 7.0 * sigma), rel=1e-9)
    assert clipped_scatter(values[::-1].copy()) == pytest.approx((centre, sigma), rel=1e-12)


def test_a_narrower_cut_cuts_more() -> None:
    values = normal(100_000)
    widths = [clipped_scatter(values, n_sigma=n, n_iterations=1)[1] for n in (2.0, 3.0, 4.0, 9.0)]
    assert widths == sorted(widths)
    # Cut at 2 sigma once: sqrt(1 - 4 phi(2) / (1 - 2 Q(2))) = 0.8796 (identity).
    phi = math.exp(-2) / math.sqrt(2 * math.pi)
    once = math.sqrt(1 - 4 * phi / math.erf(math.sqrt(2)))
    assert widths[0] == pytest.approx(once, rel=4 / math.sqrt(2 * values.size) + 0.005)


def test_constant_values_have_no_scatter() -> None:
    assert clipped_scatter(np.full(100, 2.5)) == (2.5, 0.0)


@pytest.mark.parametrize(
    "covariance",
    [
        np.diag([4.0, 4.0]),
        np.diag([9.0, 2.0]),
        np.array([[6.0, 2.5], [2.5, 3.0]]),
    ],
)
def test_the_correlation_area_is_the_sum_over_all_lags(covariance: np.ndarray) -> None:
    # Noise smoothed with C has the autocorrelation exp(-d^T C^-1 d / 4) (two equal Gaussians
    # convolved); summed here over whole pixels, exact to exp(-4 pi^2 2) for the narrowest.
    lag = np.arange(-40, 41)
    steps = np.stack(np.meshgrid(lag, lag), axis=-1)
    exponent = np.einsum("...i,ij,...j", steps, np.linalg.inv(covariance), steps)
    assert correlation_area(covariance) == pytest.approx(np.exp(-exponent / 4).sum(), rel=1e-9)


def test_the_correlation_area_is_two_beams() -> None:
    beam = beam_covariance(10.0, 7.0, 40.0)
    assert correlation_area(beam) == pytest.approx(2 * beam_area(beam), rel=1e-12)
    assert correlation_area(np.zeros((2, 2))) == 0.0


def test_independent_beams_of_a_patch() -> None:
    # C803: N_beam = N_pix Omega_pix / Omega_beam for 1000 pixels of 2" in a 10" beam; the error of
    # a mean counts half as many.
    beam = beam_covariance(10.0, 10.0, 0.0)
    assert 1000 * 4 / beam_area(beam) == pytest.approx(35.302, rel=5e-5)
    assert 1000 * 4 / correlation_area(beam) == pytest.approx(35.302 / 2, rel=5e-5)
    # C909: errors of the mean are too small by this much when pixels count as independent.
    assert math.sqrt(beam_area(beam) / 4) == pytest.approx(5.3223, rel=5e-5)


def test_the_mean_of_correlated_pixels_by_drawing_noise() -> None:
    covariance = np.array([[5.0, 1.5], [1.5, 3.0]])
    noise = np.random.default_rng(5).normal(size=(1320, 1320))
    smooth = gaussian_smooth(noise, covariance, margin=12).array[32:-32, 32:-32]
    side = 64
    n = smooth.shape[0] // side
    blocks = smooth[: n * side, : n * side].reshape(n, side, n, side).mean(axis=(1, 3))
    measured = np.var(blocks) / np.var(smooth) * side**2
    # Blocks of finite side lose what correlates across their edges: on each axis the mean lag over
    # the side, sqrt(4 c / pi) / 64, 6 % in all. 400 blocks tell a variance to 7 %.
    lost = sum(math.sqrt(4 * c / math.pi) / side for c in np.diag(covariance))
    assert measured == pytest.approx(
        correlation_area(covariance) * (1 - lost), rel=4 * math.sqrt(2 / n**2)
    )


def test_the_error_of_a_median() -> None:
    # The median of n normal numbers scatters by sqrt(pi / 2 n) (textbook, large n).
    errors = [
        median_error(normal(400, seed), np.random.default_rng(seed), n_draws=300)
        for seed in range(30)
    ]
    # A single bootstrap of a median is known to some 25 %; thirty of them to 5 %.
    assert np.mean(errors) == pytest.approx(math.sqrt(math.pi / 800), rel=0.15)


@pytest.mark.parametrize("values", [[], [1.0]])
def test_too_few_values_have_no_error(values: list[float]) -> None:
    assert math.isnan(median_error(np.array(values), np.random.default_rng(1)))


def test_the_same_generator_gives_the_same_error() -> None:
    values = normal(50)
    first, second = (median_error(values, np.random.default_rng(9)) for _ in range(2))
    assert first == second > 0


# --- Ratios --------------------------------------------------------------------------------------


def test_the_interval_of_a_ratio_solves_its_definition() -> None:
    """At its ends top - r bottom is exactly n sigma from zero (the definition, Fieller 1954)."""
    top, bottom = np.array([3.0, 1.0, -2.0]), np.array([10.0, 4.0, 6.0])
    terms = np.array([[0.5, 0.2, 0.3], [0.4, 0.1, 0.6], [0.1, -0.05, 0.2]])
    for n_sigma in (1.0, 2.0):
        for r in ratio_interval(top, bottom, terms, n_sigma):
            distance = (top - r * bottom) ** 2
            variance = terms[0] - 2 * r * terms[2] + r**2 * terms[1]
            np.testing.assert_allclose(distance, n_sigma**2 * variance, rtol=1e-10)


def test_a_sharp_denominator_leaves_the_usual_error() -> None:
    """Where the denominator has no noise the interval is value +- error."""
    low, high = ratio_interval(np.array(3.0), np.array(2.0), np.array([0.25, 0.0, 0.0]), 1.0)
    np.testing.assert_allclose([low, high], [1.25, 1.75], rtol=1e-12)


@pytest.mark.parametrize(
    ("top", "bottom"), [(0, 0.3), (1, 0.3), (0, 1), (1, 1), (0, 3), (1, 3), (10, 3), (10, 30)]
)
@pytest.mark.parametrize("shared", [-0.4, 0.0, 0.6])
def test_the_interval_holds_the_truth_as_often_as_it_says(top, bottom, shared) -> None:
    """50,000 draws (0.2 %) from no signal to much, noise of both signs shared.

    Where the denominator is faint the solution may be all but a gap; the interval then goes over
    the gap, and holds the truth up to 5 % oftener.
    """
    truth = top / bottom
    terms = np.array([1.0, 1.0, shared])
    noise = np.random.default_rng(7).multivariate_normal([0, 0], [[1, shared], [shared, 1]], 50_000)
    for n_sigma, expected in ((1.0, 0.6827), (2.0, 0.9545)):
        low, high = ratio_interval(
            top + noise[:, 0], bottom + noise[:, 1], terms[:, None] + np.zeros(50_000), n_sigma
        )
        within = np.mean((low <= truth) & (truth <= high))
        assert expected - 0.008 < within < expected + (0.05 if bottom < 2 else 0.008)


def test_open_ends() -> None:
    one = np.array([1.0, 1.0, 0.0])
    # A bright numerator over nothing: a lower limit; a negative one: an upper limit.
    low, high = ratio_interval(np.array(9.0), np.array(0.5), one)
    assert 0 < low < 18
    assert high == np.inf
    low, high = ratio_interval(np.array(-9.0), np.array(0.5), one)
    assert -18 < high < 0
    assert low == -np.inf
    # Nothing over nothing: anything.
    low, high = ratio_interval(np.array(0.1), np.array(0.1), one)
    assert (low, high) == (-np.inf, np.inf)
    assert np.isnan(ratio_interval(np.array(np.nan), np.array(1.0), one)).all()


def test_heavy_tails_of_weights_are_measured():
    # Zhang & Stephens 2009: the estimator recovers the shape of a generalised Pareto sample.
    rng = np.random.default_rng(3)
    for shape in (0.2, 0.5, 1.0):
        found = [
            pareto_shape(stats.genpareto.rvs(shape, size=4000, random_state=rng)) for _ in range(20)
        ]
        assert np.mean(found) == pytest.approx(shape, abs=0.1)
    assert pareto_shape(np.ones(10)) == np.inf


def test_a_beam_over_clouds_raises_a_steep_law():
    # <x^N> / <x>^N of a log-normal is exp((N^2 - N) (w ln 10)^2 / 2); drawn here instead.
    clouds = 10 ** (0.35 * np.random.default_rng(4).normal(size=2_000_000))
    drawn = np.log10(np.mean(clouds**1.4) / np.mean(clouds) ** 1.4)
    assert beam_averaging_dex(1.4, 0.35) == pytest.approx(drawn, abs=0.002)
    assert beam_averaging_dex(1.0, 0.35) == 0.0


def test_ranks_are_those_of_scipy() -> None:
    rng = np.random.default_rng(6)
    for values in (rng.normal(size=50), rng.integers(0, 5, 60).astype(float), np.ones(4)):
        np.testing.assert_array_equal(average_ranks(values), stats.rankdata(values))

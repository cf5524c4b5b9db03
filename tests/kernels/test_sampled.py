"""Smoothing with a kernel that is an image, against sums over pixels and drawn noise."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import ndimage, signal

from kspipe.kernels.fourier import gaussian_smooth
from kspipe.kernels.sampled import kernel_noise, kernel_smooth


def lopsided(reach: int, seed: int = 3) -> np.ndarray:
    """A kernel without any symmetry, some of it negative, of sum 1."""
    kernel = np.random.default_rng(seed).normal(0.2, 1.0, (2 * reach + 1, 2 * reach + 1))
    return kernel / kernel.sum()


def delta(reach: int = 0) -> np.ndarray:
    return np.pad(np.ones((1, 1)), reach)


@pytest.mark.parametrize("shape", [(40, 51), (7, 30), (5, 5), (1, 9)])
@pytest.mark.parametrize("reach", [1, 4, 12])
def test_a_convolution_is_the_sum_over_pixels(shape, reach) -> None:
    # scipy.signal.convolve2d sums over pixels in real space.
    array, kernel = np.random.default_rng(1).normal(size=shape), lopsided(reach)
    expected = signal.convolve2d(array, kernel, mode="full")
    np.testing.assert_allclose(
        kernel_smooth(array, kernel, margin=reach).array, expected, atol=1e-12
    )
    inner = expected[reach : reach + shape[0], reach : reach + shape[1]]
    np.testing.assert_allclose(kernel_smooth(array, kernel).array, inner, atol=1e-12)
    np.testing.assert_allclose(kernel_smooth(array, kernel, workers=2).array, inner, atol=1e-12)


def test_a_point_leaves_an_array_as_it_is() -> None:
    array = np.random.default_rng(2).normal(size=(20, 30))
    for reach in (0, 3):
        np.testing.assert_allclose(kernel_smooth(array, delta(reach)).array, array, atol=1e-13)


def test_spline_coefficients_are_those_of_the_smoothed_values() -> None:
    # scipy.ndimage.spline_filter on an array that is zero around its edges.
    array = np.zeros((80, 90))
    array[30:50, 30:60] = np.random.default_rng(4).normal(size=(20, 30))
    kernel = lopsided(3)
    values = kernel_smooth(array, kernel).array
    expected = ndimage.spline_filter(values, order=3, mode="grid-wrap")
    got = kernel_smooth(array, kernel, as_spline=True).array
    np.testing.assert_allclose(got, expected, atol=1e-9)


def test_a_sampled_gaussian_is_the_exact_one() -> None:
    # A Gaussian of 2 pixels and more is sampled exactly: its transform at Nyquist is 3e-9.
    covariance = np.array([[5.0, 1.0], [1.0, 4.0]])
    y, x = np.mgrid[-20:21, -20:21]
    inverse = np.linalg.inv(covariance)
    kernel = np.exp(
        -0.5 * (inverse[0, 0] * x**2 + 2 * inverse[0, 1] * x * y + inverse[1, 1] * y**2)
    )
    array = np.random.default_rng(5).normal(size=(50, 60))
    got = kernel_smooth(array, kernel / kernel.sum()).array
    np.testing.assert_allclose(got, gaussian_smooth(array, covariance, margin=0).array, atol=1e-7)


# --- Noise -------------------------------------------------------------------------------------


@pytest.mark.parametrize("reach", [0, 1, 5])
def test_independent_noise_keeps_the_sum_of_the_squared_kernel(reach) -> None:
    kernel = lopsided(reach)
    gain, after = kernel_noise(kernel, delta())
    assert gain == pytest.approx(np.sum(kernel**2), rel=1e-12)
    # The autocorrelation of the kernel, by sums over pixels.
    auto = signal.correlate2d(kernel, kernel, mode="full") / np.sum(kernel**2)
    cut = (auto.shape[0] - after.shape[0]) // 2
    expected = auto[cut : len(auto) - cut, cut : len(auto) - cut]
    np.testing.assert_allclose(after, expected, atol=1e-12)


@pytest.mark.parametrize("before", [delta(), delta(2), None], ids=["white", "padded", "smooth"])
def test_drawn_noise_has_the_variance_and_the_correlation(before) -> None:
    generator, first, kernel = np.random.default_rng(8), lopsided(2, seed=6), lopsided(4)
    noise = generator.normal(size=(900, 900))
    if before is None:
        noise = signal.fftconvolve(noise, first, mode="valid") / math.sqrt(np.sum(first**2))
        before = signal.correlate2d(first, first) / np.sum(first**2)
    gain, after = kernel_noise(kernel, before)
    smooth = signal.fftconvolve(noise, kernel, mode="valid")
    # 8e5 pixels, a few dozen of them correlated: good to half a per cent.
    assert np.var(smooth) == pytest.approx(gain, rel=0.02)
    middle = after.shape[0] // 2
    for dy, dx in ((0, 1), (1, 0), (2, -1), (3, 2)):
        here, there = smooth[5:-5, 5:-5], np.roll(smooth, (-dy, -dx), axis=(0, 1))[5:-5, 5:-5]
        measured = np.mean(here * there) / gain
        assert after[middle + dy, middle + dx] == pytest.approx(measured, abs=0.02)


def test_smoothing_twice_is_smoothing_once() -> None:
    first, second = lopsided(3), lopsided(5, seed=9)
    gain_1, after_1 = kernel_noise(first, delta())
    gain_2, after_2 = kernel_noise(second, after_1)
    both = signal.convolve2d(first, second)
    gain, after = kernel_noise(both, delta())
    assert gain_1 * gain_2 == pytest.approx(gain, rel=1e-9)
    size = min(len(after), len(after_2)) // 2
    window = [slice(len(a) // 2 - size, len(a) // 2 + size + 1) for a in (after_2, after)]
    np.testing.assert_allclose(
        after_2[window[0], window[0]], after[window[1], window[1]], atol=1e-9
    )


def test_far_lags_that_hold_nothing_are_cut_off() -> None:
    y, x = np.mgrid[-60:61, -60:61]
    kernel = np.exp(-(x**2 + y**2) / 2 / 3.0**2)
    _, after = kernel_noise(kernel / kernel.sum(), delta())
    # The correlation is a Gaussian of sqrt(2) x 3 pixels: 1e-3 of it lies beyond 3.7 sigma.
    assert 12 < after.shape[0] // 2 < 18
    assert after.sum() == pytest.approx(2 * math.pi * 18.0, rel=2e-3)

"""Interpolation between pixels, and what it does to noise."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from kspipe.kernels.fourier import gaussian_smooth
from kspipe.kernels.regrid import interpolation_noise_gain, sample_cubic, sample_linear

Array = np.ndarray
fixed = settings(derandomize=True, deadline=None, max_examples=40)
FWHM_PER_SIGMA = 2.3548200450309493  # value from memory


@pytest.mark.parametrize(
    ("fwhm_pix", "worst"),
    [
        # Largest error over the peak, measured on 200 000 positions and rounded up; it falls as
        # the fourth power of the sampling, the order of a cubic spline.
        (2.0, 0.017),
        (3.0, 0.0065),
        (4.0, 0.0022),
        (6.0, 0.0004),
    ],
)
def test_a_gaussian_is_interpolated(fwhm_pix: float, worst: float) -> None:
    sigma = fwhm_pix / FWHM_PER_SIGMA
    y, x = np.indices((61, 71))
    array = np.exp(-((x - 35.0) ** 2 + (y - 30.0) ** 2) / (2 * sigma**2))
    px, py = np.random.default_rng(1).uniform(-10, 10, (2, 20_000)) + np.array([[35.0], [30.0]])
    expected = np.exp(-((px - 35.0) ** 2 + (py - 30.0) ** 2) / (2 * sigma**2))
    error = np.abs(sample_cubic(array, px, py) - expected).max()
    assert worst / 2 < error < worst


@pytest.mark.parametrize("sample", [sample_cubic, sample_linear])
def test_pixel_centres_are_kept(sample) -> None:
    array = np.random.default_rng(2).normal(size=(17, 23))
    y, x = np.indices(array.shape, dtype=float)
    np.testing.assert_allclose(sample(array, x, y), array, rtol=0, atol=1e-13)


@pytest.mark.parametrize("sample", [sample_cubic, sample_linear])
def test_x_runs_along_a_row(sample) -> None:
    array = np.zeros((21, 31))
    array[12, 20] = 1.0
    assert sample(array, np.array([20.0]), np.array([12.0]))[0] == pytest.approx(1.0)
    assert sample(array, np.array([12.0]), np.array([20.0]))[0] == pytest.approx(0.0, abs=1e-4)


@pytest.mark.parametrize("sample", [sample_cubic, sample_linear])
def test_zero_beyond_the_array(sample) -> None:
    outside = np.array([-0.01, -3.0, 10.01, 50.0])
    assert np.array_equal(sample(np.ones((11, 11)), outside, np.full(4, 5.0)), np.zeros(4))
    assert np.array_equal(sample(np.ones((11, 11)), np.full(4, 5.0), outside), np.zeros(4))


def test_a_cubic_polynomial_is_followed_exactly() -> None:
    # A cubic spline holds every cubic; the mirrored ends are forgotten at 0.27 per pixel
    # (2 - sqrt 3, the pole of the cubic B-spline), 1e-12 after twenty.
    y, x = np.indices((60, 60)) / 10.0

    def curve(x: Array, y: Array) -> Array:
        return x**3 - 4 * x * y + 2 * y**2 - y**3 + 1

    px, py = np.random.default_rng(3).uniform(2.5, 3.5, (2, 500))
    got = sample_cubic(curve(x, y), px * 10, py * 10)
    np.testing.assert_allclose(got, curve(px, py), rtol=0, atol=1e-8)


@fixed
@given(x=st.floats(0, 19), y=st.floats(0, 29), seed=st.integers(0, 1000))
def test_a_linear_sample_is_a_mean_of_four(x: float, y: float, seed: int) -> None:
    array = np.random.default_rng(seed).exponential(size=(30, 20))
    i, j = min(int(y), 28), min(int(x), 18)
    v, w = y - i, x - j
    square = array[i : i + 2, j : j + 2]
    expected = np.array([1 - v, v]) @ square @ np.array([1 - w, w])
    got = sample_linear(array, np.array([x]), np.array([y]))[0]
    assert got == pytest.approx(expected, rel=1e-12)
    assert got > 0


# --- noise ---------------------------------------------------------------------------------------


def spline_power(phase: float, frequency: Array) -> Array:
    """Squared transfer function of cubic B-spline interpolation at a phase.

    Weights of the four neighbours over those on a pixel, (1, 4, 1)/6: Unser, Aldroubi & Eden 1993,
    IEEE Trans. Signal Process. 41, 821 (from memory).
    """
    p = phase
    weights = np.array(
        [(1 - p) ** 3, 3 * p**3 - 6 * p**2 + 4, 3 * p + 3 * p**2 - 3 * p**3 + 1, p**3]
    )
    wave = np.exp(2j * np.pi * np.array([-1, 0, 1, 2])[:, None] * frequency)
    return np.abs(weights @ wave / (4 + 2 * np.cos(2 * np.pi * frequency))) ** 2


def exact_gain(phase: tuple[float, float], sigma: float) -> float:
    """Variance left when white noise smoothed with a round kernel is interpolated."""
    k = (np.arange(2048) + 0.5) / 2048 - 0.5
    power = np.exp(-4 * np.pi**2 * sigma**2 * k**2)
    x, y = (np.mean(power * spline_power(p, k)) / np.mean(power) for p in phase)
    return float(x * y)


def gain(phase: tuple[float, float], sigma: float) -> float:
    x, y = (np.array([p]) for p in phase)
    return float(interpolation_noise_gain(x, y, sigma**2 * np.eye(2))[0])


PHASES = [(0.5, 0.5), (0.25, 0.25), (0.5, 0.0), (0.125, 0.75), (1 / 16, 1 / 16), (0.3, 0.9)]


@pytest.mark.parametrize("sigma", [0.0, 0.2, 0.3, 0.4, 0.5, 0.7, 0.99, 1.01, 3.0])
def test_noise_between_pixels_has_the_error_that_is_told(sigma: float) -> None:
    # Straight lines between eight tabulated phases cost up to 1 % of sigma (measured on white
    # noise, at a sixteenth of a pixel; also what remains at 1 pixel, taken as well sampled).
    got = np.sqrt([gain(phase, sigma) for phase in PHASES])
    expected = np.sqrt([exact_gain(phase, sigma) for phase in PHASES])
    np.testing.assert_allclose(got, expected, rtol=0.01)


@pytest.mark.parametrize("sigma", [0.0, 0.7])
@pytest.mark.parametrize("phase", PHASES)
def test_noise_between_pixels_by_drawing_noise(phase: tuple[float, float], sigma: float) -> None:
    noise = np.random.default_rng(4).normal(size=(300, 300))
    smooth = gaussian_smooth(noise, sigma**2 * np.eye(2), margin=5).array[40:-40, 40:-40]
    y, x = (index[10:-10, 10:-10] for index in np.indices(smooth.shape, dtype=float))
    variance = np.var(sample_cubic(smooth, x + phase[0], y + phase[1])) / np.var(smooth)
    # About 40 000 numbers, one in 2 + 4 pi sigma^2 independent: 4 sigma of their variance, and 2 %
    # for the table.
    scatter = math.sqrt(2 * (2 + 4 * math.pi * sigma**2) / x.size)
    assert gain(phase, sigma) == pytest.approx(variance, rel=4 * scatter + 0.02)


def test_noise_that_is_smooth_along_one_axis_only() -> None:
    # Noise smoothed along x by 0.9 pixels keeps nearly all between columns, little between rows.
    got = interpolation_noise_gain(np.array([0.5, 0.0]), np.array([0.0, 0.5]), np.diag([0.81, 0.0]))
    along, across = exact_gain((0.5, 0.0), 0.9), exact_gain((0.5, 0.0), 0.0)
    np.testing.assert_allclose(got, [along, across], rtol=0.02)
    assert along > across + 0.2


def test_white_noise_half_way_between_four_pixels() -> None:
    # The mean square of the spline's weights, 0.757 on each axis.
    assert gain((0.5, 0.5), 0.0) == pytest.approx(exact_gain((0.5, 0.5), 0.0), rel=1e-4)
    assert gain((0.5, 0.0), 0.0) ** 2 == pytest.approx(gain((0.5, 0.5), 0.0), rel=1e-4)


@pytest.mark.parametrize("sigma", [0.0, 0.3, 0.9, 2.0])
def test_noise_on_pixel_centres_stays(sigma: float) -> None:
    x, y = np.array([0.0, 5.0, 17.0]), np.array([3.0, 0.0, 8.0])
    got = interpolation_noise_gain(x, y, sigma**2 * np.eye(2))
    np.testing.assert_allclose(got, 1.0, rtol=1e-9)


@fixed
@given(
    x=st.floats(-20, 500), y=st.floats(-20, 500), a=st.floats(0.0, 0.95), ratio=st.floats(0.1, 1.0)
)
def test_symmetries_of_the_gain(x: float, y: float, a: float, ratio: float) -> None:
    covariance = np.diag([a, ratio * a])

    def at(x: float, y: float, c: Array = covariance) -> float:
        return float(interpolation_noise_gain(np.array([x]), np.array([y]), c)[0])

    value = at(x, y)
    assert 0.5 < value <= 1.0 + 1e-9
    # Mirrors, whole steps and exchanged axes. The spline's weights may be cut at some pixels, which
    # a mirror sees: at eight pixels it is (2 - sqrt 3)^16 of the squared weights, 1e-9, and up to
    # 1e-7 where noise is anticorrelated.
    assert at(-x, y) == pytest.approx(value, rel=1e-6)
    assert at(x, -y) == pytest.approx(value, rel=1e-6)
    assert at(x + 3, y - 2) == pytest.approx(value, rel=1e-9)
    assert at(y, x, covariance[::-1, ::-1]) == pytest.approx(value, rel=1e-9)


def test_the_gain_has_the_shape_of_its_positions() -> None:
    y, x = np.indices((4, 6)) + 0.3
    for sigma in (0.0, 0.5, 3.0):
        assert interpolation_noise_gain(x, y, sigma**2 * np.eye(2)).shape == (4, 6)

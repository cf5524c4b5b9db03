"""Gaussian smoothing and what is left of noise, against closed forms and another smoother.

Codes such as C804 number the worked check values of the project's reference sheet.
"""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import ndimage

from kspipe.kernels.fourier import correlated_noise_gain, gaussian_smooth, white_noise_gain
from kspipe.kernels.regrid import sample_cubic

Array = np.ndarray
fixed = settings(derandomize=True, deadline=None, max_examples=40)

ROUND = np.eye(2)
KERNELS = {
    "wide": 16.0 * ROUND,
    "tilted": np.array([[20.0, 8.0], [8.0, 6.0]]),
    "falling": np.array([[9.0, -7.0], [-7.0, 12.0]]),
    "sub-pixel": 0.09 * ROUND,
    "tilted sub-pixel": np.array([[0.5, -0.3], [-0.3, 0.2]]),
    "one axis only": np.array([[4.0, 0.0], [0.0, 0.0]]),
}
kernels = pytest.mark.parametrize("kernel", KERNELS.values(), ids=KERNELS.keys())


def gaussian(shape: tuple[int, int], centre: tuple[float, float], covariance: Array) -> Array:
    """Draw a Gaussian of unit peak; centre and covariance on (x, y)."""
    y, x = np.indices(shape)
    step = np.stack([x - centre[0], y - centre[1]], axis=-1)
    return np.exp(-0.5 * np.einsum("...i,ij,...j", step, np.linalg.inv(covariance), step))


def random_covariance(major: float, ratio: float, angle: float) -> Array:
    turn = np.array([[math.cos(angle), -math.sin(angle)], [math.sin(angle), math.cos(angle)]])
    return turn @ np.diag([major**2, (ratio * major) ** 2]) @ turn.T


def inside(padded, shape: tuple[int, int]) -> Array:
    margin = padded.margin
    assert padded.array.shape == (shape[0] + 2 * margin, shape[1] + 2 * margin)
    return padded.array[margin : margin + shape[0], margin : margin + shape[1]]


@kernels
def test_a_gaussian_becomes_the_wider_gaussian(kernel: Array) -> None:
    # Covariances of convolved Gaussians add and the integral stays (identity).
    source = np.array([[6.0, 1.5], [1.5, 4.0]])
    shape, centre = (90, 101), (50.3, 44.6)
    padded = gaussian_smooth(gaussian(shape, centre, source), kernel)
    peak = math.sqrt(np.linalg.det(source) / np.linalg.det(source + kernel))
    moved = (centre[0] + padded.margin, centre[1] + padded.margin)
    expected = peak * gaussian(padded.array.shape, moved, source + kernel)
    # Beyond the Nyquist frequency a Gaussian of 2 pixels holds exp(-2 pi^2 4/4) = 3e-9.
    np.testing.assert_allclose(padded.array, expected, rtol=0, atol=1e-8)


@fixed
@given(major=st.floats(0.05, 6.0), ratio=st.floats(0.1, 1.0), angle=st.floats(0.0, 3.2))
def test_flux_and_centroid_stay(major: float, ratio: float, angle: float) -> None:
    image = gaussian((40, 52), (20.4, 17.8), 4.0 * ROUND)
    padded = gaussian_smooth(image, random_covariance(major, ratio, angle), margin=45)
    smooth, total = padded.array, image.sum()
    # The margin reaches 45 pixels: 7.5 sigma of the widest kernel.
    assert smooth.sum() == pytest.approx(total, rel=1e-9)
    y, x = np.indices(smooth.shape) - padded.margin
    assert (x * smooth).sum() / total == pytest.approx(20.4, abs=1e-5)
    assert (y * smooth).sum() / total == pytest.approx(17.8, abs=1e-5)


@fixed
@given(first=st.floats(0.2, 4.0), second=st.floats(0.2, 4.0), angle=st.floats(0.0, 3.2))
def test_two_kernels_are_one(first: float, second: float, angle: float) -> None:
    a, b = random_covariance(first, 0.5, angle), random_covariance(second, 0.8, -angle)
    image = gaussian((64, 60), (30.0, 31.0), 4.0 * ROUND)
    once = gaussian_smooth(image, a + b, margin=30)
    twice = gaussian_smooth(inside(gaussian_smooth(image, a), image.shape), b, margin=30)
    # What the first step spread beyond the image is lost to the second: 30 pixels from the
    # middle, 6 sigma of the widest, it is below 1e-7.
    np.testing.assert_allclose(twice.array, once.array, rtol=0, atol=1e-7)


def test_no_kernel_leaves_the_array() -> None:
    image = np.random.default_rng(1).normal(size=(7, 9))
    padded = gaussian_smooth(image, np.zeros((2, 2)))
    assert np.array_equal(inside(padded, image.shape), image)
    assert padded.array.sum() == pytest.approx(image.sum())
    assert gaussian_smooth(image, np.zeros((2, 2)), margin=0).array.shape == image.shape


@pytest.mark.parametrize("sigma", [2.5, 4.0, 8.0])
def test_the_far_side_sees_nothing(sigma: float) -> None:
    image = np.zeros((40, 50))
    image[20, 0] = image[0, 25] = 1.0
    padded = gaussian_smooth(image, sigma**2 * ROUND)
    smooth, margin = inside(padded, image.shape), padded.margin
    # Two sources on the edges give two Gaussians and nothing else: what came round would have
    # passed twice the margin, exp(-50) of the peak. Rounding is 1e-16 of the pixel.
    left, bottom = (gaussian(image.shape, at, sigma**2 * ROUND) for at in ((0, 20), (25, 0)))
    expected = (left + bottom) / (2 * math.pi * sigma**2)
    np.testing.assert_allclose(smooth, expected, rtol=0, atol=1e-13)
    # Where the margin ends the Gaussian has 5 sigma behind it: 4e-6 of the peak.
    edge = np.concatenate([padded.array[:, -1], padded.array[-1]])
    assert np.abs(edge).max() <= math.exp(-12.5) / (2 * math.pi * sigma**2)
    assert margin >= 5 * sigma


@pytest.mark.parametrize("sigma", [0.4, 1.0, 2.5])
def test_sky_around_the_map_changes_nothing(sigma: float) -> None:
    small = np.zeros((40, 40))
    small[20, 0] = 1.0
    big = np.zeros((300, 300))
    big[130:170, 130:170] = small
    padded = gaussian_smooth(small, sigma**2 * ROUND)
    whole = gaussian_smooth(big, sigma**2 * ROUND)
    first = 130 + whole.margin - padded.margin
    cut = slice(first, first + padded.array.shape[0])
    # Convolution knows nothing of the size of the array: what one edge sends to the other by
    # wrapping around must stay below 1e-4, the accuracy that the pipeline promises for flat maps.
    np.testing.assert_allclose(padded.array, whole.array[cut, cut], rtol=0, atol=1e-4)


@kernels
def test_threads_do_not_change_a_bit(kernel: Array) -> None:
    image = np.random.default_rng(2).normal(size=(123, 77))
    one, four = (gaussian_smooth(image, kernel, workers=n).array for n in (1, 4))
    assert np.array_equal(one, four)


def test_the_input_is_untouched() -> None:
    image, kernel = np.random.default_rng(3).normal(size=(20, 30)), KERNELS["tilted"].copy()
    before = image.copy(), kernel.copy()
    image.flags.writeable = kernel.flags.writeable = False
    gaussian_smooth(image, kernel)
    assert np.array_equal(image, before[0])
    assert np.array_equal(kernel, before[1])


@pytest.mark.parametrize("sigma", [3.0, 4.0, 8.0])
def test_a_wide_kernel_agrees_with_a_sampled_one(sigma: float) -> None:
    image = np.random.default_rng(4).normal(size=(80, 90))
    padded = gaussian_smooth(image, sigma**2 * ROUND)
    grown = np.pad(image, padded.margin)
    sampled = ndimage.gaussian_filter(grown, sigma, mode="constant", truncate=8.0)
    # Sampling a Gaussian of 3 pixels is exact to exp(-2 pi^2 9): what is left is its tail beyond
    # 5 sigma, which wraps into the outermost margin.
    np.testing.assert_allclose(padded.array, sampled, rtol=0, atol=1e-6)
    np.testing.assert_allclose(
        inside(padded, image.shape), inside_of(sampled, padded.margin), rtol=0, atol=1e-13
    )


def inside_of(array: Array, margin: int) -> Array:
    return array[margin:-margin, margin:-margin]


def test_elongated_along_an_axis_agrees_with_a_sampled_kernel() -> None:
    # The first axis of an array is y: a covariance on (x, y) must not be swapped.
    image = np.random.default_rng(5).normal(size=(60, 70))
    padded = gaussian_smooth(image, np.diag([36.0, 9.0]))
    sampled = ndimage.gaussian_filter(
        np.pad(image, padded.margin), (3.0, 6.0), mode="constant", truncate=8.0
    )
    np.testing.assert_allclose(padded.array, sampled, rtol=0, atol=1e-6)


# --- noise ---------------------------------------------------------------------------------------


def test_white_noise_after_a_wide_kernel() -> None:
    # C804: sigma / (2 sqrt(pi) sigma_k), for sigma_k = 4 pixels 0.070524 of the input.
    assert math.sqrt(white_noise_gain(16.0 * ROUND)) == pytest.approx(0.070524, rel=5e-5)


@pytest.mark.parametrize("sigma", [0.0, 0.1, 0.3, 0.6, 0.99, 1.01, 2.0, 5.0])
def test_white_noise_gain_in_closed_form(sigma: float) -> None:
    # The mean of exp(-4 pi^2 sigma^2 k^2) over |k| < 1/2, squared for two axes (integral tables).
    one_axis = math.erf(math.pi * sigma) / (2 * math.sqrt(math.pi) * sigma) if sigma else 1.0
    # Beyond 1 pixel the error function is taken as one: 2 erfc(pi) = 1.8e-5.
    assert white_noise_gain(sigma**2 * ROUND) == pytest.approx(one_axis**2, rel=2e-5)


@kernels
def test_white_noise_gain_is_the_sum_of_the_squared_kernel(kernel: Array) -> None:
    # A sum of independent pixels has the variance of the squared weights (identity).
    impulse = np.zeros((255, 255))
    impulse[127, 127] = 1.0
    weights = gaussian_smooth(impulse, kernel, margin=127).array
    # Where the transfer function reaches the edge of the band, frequencies spaced 1/512 give its
    # mean to 1/512 on each axis; where it has died out before, to rounding.
    is_wide = np.linalg.eigvalsh(kernel)[0] > 4.0
    rel = 1e-12 if is_wide else 2 / 512 / white_noise_gain(kernel)
    assert white_noise_gain(kernel) == pytest.approx(np.sum(weights**2), rel=rel)


@pytest.mark.parametrize("sigma", [0.4, 1.2, 2.5])
def test_white_noise_gain_by_drawing_noise(sigma: float) -> None:
    noise = np.random.default_rng(6).normal(size=(512, 512))
    smooth = inside_of(gaussian_smooth(noise, sigma**2 * ROUND).array, 30)
    gain = white_noise_gain(sigma**2 * ROUND)
    # Smooth noise holds 1 / gain pixels per independent number; the variance of n numbers is
    # known to sqrt(2 / n), and four times that never happens.
    n = smooth.size * gain
    assert np.var(smooth) == pytest.approx(gain, rel=4 * math.sqrt(2 / n))


@pytest.mark.parametrize(("fwhm_in", "fwhm_out"), [(5.0, 10.0), (7.5, 15.0), (10.0, 10.1)])
def test_noise_that_has_the_beam_falls_as_the_beam_widens(fwhm_in: float, fwhm_out: float) -> None:
    # sigma_out = sigma_in FWHM_in / FWHM_out (common practice, brightness units).
    correlation = fwhm_in**2 * ROUND
    kernel = (fwhm_out**2 - fwhm_in**2) * ROUND
    sigma_out = math.sqrt(correlated_noise_gain(correlation, kernel))
    assert sigma_out == pytest.approx(fwhm_in / fwhm_out, rel=1e-13)


@fixed
@given(
    a=st.tuples(st.floats(1.5, 9.0), st.floats(0.7, 1.0), st.floats(0.0, 3.2)),
    k=st.tuples(st.floats(1.5, 9.0), st.floats(0.7, 1.0), st.floats(0.0, 3.2)),
)
def test_two_steps_of_noise_are_one(a: tuple, k: tuple) -> None:
    # White noise smoothed with A and then with K is white noise smoothed with A + K.
    first, second = random_covariance(*a), random_covariance(*k)
    stepwise = white_noise_gain(first) * correlated_noise_gain(first, second)
    assert stepwise == pytest.approx(white_noise_gain(first + second), rel=1e-5)


def test_noise_gain_does_not_rise() -> None:
    gains = [white_noise_gain(sigma**2 * ROUND) for sigma in np.linspace(0.0, 3.0, 61)]
    # Where the wide form takes over it stands 1.8e-5 too high (see above).
    assert np.all(np.diff(gains) < 0)
    assert gains[0] == pytest.approx(1.0, rel=1e-12)
    assert correlated_noise_gain(ROUND, np.zeros((2, 2))) == 1.0


@pytest.mark.parametrize("shape", [(61, 61), (60, 64), (61, 64)])
def test_finer_samples_interpolate_what_pixels_hold(shape) -> None:
    """A Gaussian of 2.9 px FWHM between the pixels: analytic truth, odd and even shapes."""
    rng = np.random.default_rng(1)
    y, x = np.indices(shape)
    sigma2, kernel = 1.21, 0.3
    image = np.exp(-((x - 30.3) ** 2 + (y - 29.8) ** 2) / 2 / sigma2)
    tx, ty = rng.uniform(15, 45, (2, 200))
    wide = sigma2 + kernel
    truth = sigma2 / wide * np.exp(-((tx - 30.3) ** 2 + (ty - 29.8) ** 2) / 2 / wide)
    errors = {}
    for fine in (1, 2):
        spline = gaussian_smooth(image, kernel * np.eye(2), margin=0, as_spline=True, fine=fine)
        sampled = sample_cubic(spline.array, tx * fine, ty * fine, is_spline=True)
        errors[fine] = np.abs(sampled - truth).max() / truth.max()
    assert errors[2] < 2e-3
    assert errors[2] < 0.3 * errors[1]

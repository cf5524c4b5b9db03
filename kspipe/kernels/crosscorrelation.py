"""How far one image is displaced against another, and how noise moves the answer.

The measure is the correlation coefficient of the two images over the pixels that both observe
when one is moved over the other. Where both show one sky it is 1 at the true displacement and
smaller everywhere else, by the Cauchy-Schwarz inequality, whatever the scale and the zero level
of either image, their edges and their blanks. Minimising chi-square over displacement, scale and
level finds the same point; the plain product of zero-filled images is drawn towards zero.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
import scipy.fft
from numpy.typing import NDArray
from scipy.interpolate import RectBivariateSpline

from kspipe.kernels.noise import NoiseTerm, total_error

__all__ = ["ImagePair", "Peak", "displacement_covariance", "find_peak", "lag_correlations"]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]
Lag = tuple[int, int]

# Lags at which less than this share of the weight is left say nothing.
LEAST_OVERLAP: Final = 0.5
# An image whose spread is not more than this share of the noise variance holds nothing to align.
LEAST_SPREAD: Final = 0.25
# A quintic spline needs six points.
LEAST_REACH_PIX: Final = 3
# First derivative by five points: exact to (2 pi k)^4 / 30, one per cent at 8 pixels per period.
STENCIL: Final = ((-2, 1.0 / 12.0), (-1, -8.0 / 12.0), (1, 8.0 / 12.0), (2, -1.0 / 12.0))
AXES: Final = (np.array([1, 0]), np.array([0, 1]))
# The correlation exp(-d^2 / 4 sigma^2) falls to a millionth within this many sigma.
NOISE_REACH_SIGMA: Final = 7.5


@dataclass(frozen=True)
class ImagePair:
    """Two images on the same pixels.

    Attributes
    ----------
    first, second : (ny, nx) float64 array
        NaN where not observed.
    first_noise, second_noise : tuple of NoiseTerm
        Independent of each other.
    weight : (ny, nx) float64 array
        Of the pixels of `first`; zero leaves a pixel out.
    jacobian_arcsec : (2, 2) float64 array
        Sky offset (east, north) per pixel step (x, y).
    """

    first: Array
    second: Array
    first_noise: tuple[NoiseTerm, ...]
    second_noise: tuple[NoiseTerm, ...]
    weight: Array
    jacobian_arcsec: Array

    @property
    def used(self) -> Bools:
        """Pixels of `first` that count."""
        return np.isfinite(self.first) & (self.weight > 0)


@dataclass(frozen=True)
class Peak:
    """Where two images agree best.

    Attributes
    ----------
    x, y : float
        Displacement of the second image's features against the first's [pixel].
    correlation : float
        Correlation coefficient there, of what is not noise; may exceed 1 by its error.
    hessian : (2, 2) float64 array
        Second derivatives on (x, y) [pixel-2]; negative definite.
    """

    x: float
    y: float
    correlation: float
    hessian: Array


def lag_correlations(pair: ImagePair, reach_pix: int) -> Array:
    """Correlation coefficient of two images at each whole displacement.

    Parameters
    ----------
    pair : ImagePair
    reach_pix : int
        Largest displacement along each axis.

    Returns
    -------
    (2 r + 1, 2 r + 1) float64 array
        Entry [r + j, r + i] compares first(x, y) with second(x + i, y + j). The reach r is less
        than asked for, at worst zero, where farther lags have too few pixels in common or hold
        nothing but noise.

    Notes
    -----
    The noise variance is taken off the spread of either image: else a displacement that brings
    more of the bright sky into the common pixels would look like a better one.
    """
    used, seen = pair.used, np.isfinite(pair.second)
    w, m = np.where(used, pair.weight, 0.0), seen.astype(float)
    a, b = _about_mean(pair.first, used), _about_mean(pair.second, seen)
    noise_a = np.where(used, total_error(pair.first_noise), 0.0) ** 2
    noise_b = np.where(seen, total_error(pair.second_noise), 0.0) ** 2
    shape = _room(a.shape, reach_pix)
    w0, wa, waa, wna, m0, mb, mbb, mnb = (
        scipy.fft.rfft2(array, s=shape)
        for array in (w, w * a, w * a**2, w * noise_a, m, b, b**2, noise_b)
    )

    def sums(one: Array, other: Array) -> Array:
        return _at_lags(one, other, shape, reach_pix)

    total = sums(w0, m0)
    common = total > LEAST_OVERLAP * total[reach_pix, reach_pix]
    with np.errstate(invalid="ignore", divide="ignore"):
        mean_a, mean_b = sums(wa, m0) / total, sums(w0, mb) / total
        var_a, var_b = sums(wna, m0) / total, sums(w0, mnb) / total
        spread_a = sums(waa, m0) / total - mean_a**2 - var_a
        spread_b = sums(w0, mbb) / total - mean_b**2 - var_b
        both = sums(wa, mb) / total - mean_a * mean_b
        coefficient = both / np.sqrt(spread_a * spread_b)
        is_real = (spread_a > LEAST_SPREAD * var_a) & (spread_b > LEAST_SPREAD * var_b)
    return _within_square(coefficient, common & is_real)


def find_peak(correlations: Array) -> Peak | None:
    """Find the highest point between the lags, on a quintic spline through them.

    A parabola through three points is off by up to 0.02 pixel where a beam has three pixels; the
    spline is exact to a thousandth there.

    Returns
    -------
    Peak or None
        None where the highest lag lies on the edge, or the top is not curved.
    """
    reach = correlations.shape[0] // 2
    if reach < LEAST_REACH_PIX:
        return None
    row, column = np.unravel_index(int(np.argmax(correlations)), correlations.shape)
    if not (0 < row < 2 * reach and 0 < column < 2 * reach):
        return None
    lags = np.arange(-reach, reach + 1, dtype=float)
    spline = RectBivariateSpline(lags, lags, correlations, kx=5, ky=5)
    start = np.array([lags[column], lags[row]])
    at = start.copy()

    def derivative(in_x: int, in_y: int) -> float:
        return float(spline.ev(at[1], at[0], dx=in_y, dy=in_x))

    for _ in range(20):
        mixed = derivative(1, 1)
        hessian = np.array([[derivative(2, 0), mixed], [mixed, derivative(0, 2)]])
        if np.max(np.linalg.eigvalsh(hessian)) >= 0 or np.max(np.abs(at - start)) > 1.0:
            return None
        gradient = np.array([derivative(1, 0), derivative(0, 1)])
        step = np.clip(-np.linalg.solve(hessian, gradient), -0.5, 0.5)
        at += step
        if np.max(np.abs(step)) < 1e-7:
            break
    return Peak(float(at[0]), float(at[1]), derivative(0, 0), hessian)


def displacement_covariance(pair: ImagePair, peak: Peak) -> Array:
    """Covariance of a displacement on (x, y) [pixel2], from the noise of both images.

    Returns
    -------
    (2, 2) float64 array
        NaN where the images are too faint for an error.

    Notes
    -----
    At the peak the gradient of the coefficient is zero. Noise that changes the gradient by g
    moves the peak by -H^-1 g, with the second derivatives H: good while the error is well below
    the width of the peak. The gradient answers to each image through the slopes of the other,
    which are themselves noisy: their noise times noise is thereby counted twice, and taken off
    once.
    """
    lag = (round(peak.x), round(peak.y))
    middle = _Aligned.at(pair, lag)
    responses = _responses(pair, lag)
    if middle is None or responses is None:
        return np.full((2, 2), np.nan)
    gradient = np.zeros((2, 2))
    for response, terms in zip(responses, (pair.first_noise, pair.second_noise), strict=True):
        for term in terms:
            x, y = (part * np.where(part != 0, term.sigma, 0.0) for part in response)
            gradient += _sum_of_pairs((x, y), term, pair.jacobian_arcsec)
    gradient -= _noise_times_noise(pair, lag, middle)
    inverse = np.linalg.inv(peak.hessian)
    covariance = np.asarray(inverse @ gradient @ inverse.T)
    is_proper = float(np.min(np.linalg.eigvalsh(covariance))) > 0
    return covariance if is_proper else np.full((2, 2), np.nan)


@dataclass(frozen=True)
class _Aligned:
    """Two images at one lag, standardised over their common pixels; zero elsewhere.

    The correlation coefficient is the weighted mean of a b.
    """

    weight: Array
    a: Array
    b: Array
    sigma_a: float
    sigma_b: float

    @property
    def rho(self) -> float:
        """Correlation coefficient at this lag."""
        return float(np.sum(self.weight * self.a * self.b))

    @classmethod
    def at(cls, pair: ImagePair, lag: Lag) -> _Aligned | None:
        """Align a pair; None where nothing is common or the scatter of either is all noise."""
        second = _moved(pair.second, lag, np.nan)
        weight = np.where(pair.used & np.isfinite(second), pair.weight, 0.0)
        if not weight.any():
            return None
        weight = weight / float(np.sum(weight))
        noise = _moved(total_error(pair.second_noise), lag, np.nan)
        a = _standardised(pair.first, total_error(pair.first_noise), weight)
        b = _standardised(second, noise, weight)
        return None if a is None or b is None else cls(weight, a[0], b[0], a[1], b[1])


def _responses(pair: ImagePair, lag: Lag) -> tuple[Array, Array] | None:
    """Derivatives of the gradient with respect to each pixel of either image, (2, ny, nx) each.

    The coefficient answers to a pixel of the first image by w (b - rho a) / sigma_a, and to one of
    the second likewise; both are differentiated along the lag.
    """
    to_first, to_second = np.zeros((2, *pair.first.shape)), np.zeros((2, *pair.first.shape))
    for axis in (0, 1):
        for step, factor in STENCIL:
            beside = _beside(lag, axis, step)
            here = _Aligned.at(pair, beside)
            if here is None:
                return None
            to_first[axis] += factor * here.weight * (here.b - here.rho * here.a) / here.sigma_a
            there = here.weight * (here.a - here.rho * here.b) / here.sigma_b
            to_second[axis] += factor * _moved(there, (-beside[0], -beside[1]), 0.0)
    return to_first, to_second


def _noise_times_noise(pair: ImagePair, lag: Lag, here: _Aligned) -> Array:
    """Covariance of the gradient of the weighted mean of one noise times the other."""
    total = np.zeros((2, 2))
    scale = here.weight / (here.sigma_a * here.sigma_b)
    for one in pair.first_noise:
        for other in pair.second_noise:
            sigmas = one.sigma * _moved(other.sigma, lag, 0.0)
            part = np.where(here.weight > 0, scale * sigmas, 0.0)
            total += _sum_of_pairs((part, part), one, pair.jacobian_arcsec, slopes_of=other)
    return total


def _standardised(array: Array, noise: Array, weight: Array) -> tuple[Array, float] | None:
    """Deviation from the weighted mean over the scatter that is not noise, and that scatter.

    None where the scatter is all noise.
    """
    used = weight > 0
    filled = np.where(used, array, 0.0)
    deviation = np.where(used, filled - float(np.sum(weight * filled)), 0.0)
    variance = float(np.sum(weight * (deviation**2 - np.where(used, noise, 0.0) ** 2)))
    if not variance > 0:
        return None
    sigma = math.sqrt(variance)
    return deviation / sigma, sigma


def _sum_of_pairs(
    parts: tuple[Array, Array],
    term: NoiseTerm,
    jacobian_arcsec: Array,
    *,
    slopes_of: NoiseTerm | None = None,
) -> Array:
    """Covariance of two weighted sums of one noise, or of it times the slopes of another."""
    reach = min(_reach_pix(term, jacobian_arcsec), max(parts[0].shape))
    shape = _room(parts[0].shape, reach)
    spectra = [scipy.fft.rfft2(part, s=shape) for part in parts]
    correlation = _correlation(term, reach, jacobian_arcsec)
    slopes = np.ones((2, 2, 1, 1))
    if slopes_of is not None:
        slopes = _slope_covariance(slopes_of, reach, jacobian_arcsec)
    total = np.empty((2, 2))
    for i in (0, 1):
        for j in (0, 1):
            products = _at_lags(spectra[i], spectra[j], shape, reach)
            total[i, j] = float(np.sum(products * correlation * slopes[i, j]))
    return total


def _correlation(term: NoiseTerm, reach: int, jacobian_arcsec: Array) -> Array:
    """Correlation of a noise at all whole lags within the reach."""
    lag = np.arange(-reach, reach + 1, dtype=float)
    lag_x, lag_y = np.meshgrid(lag, lag)
    (ex, ey), (nx, ny) = jacobian_arcsec
    return term.correlation_at(ex * lag_x + ey * lag_y, nx * lag_x + ny * lag_y)


def _slope_covariance(term: NoiseTerm, reach: int, jacobian_arcsec: Array) -> Array:
    """Covariance of the slopes of a noise of unit variance, by axes and lag, (2, 2, n, n)."""
    margin = 2 * max(step for step, _ in STENCIL)
    wide = _correlation(term, reach + margin, jacobian_arcsec)
    inner = np.arange(margin, wide.shape[0] - margin)
    total = np.zeros((2, 2, inner.size, inner.size))
    for i in (0, 1):
        for j in (0, 1):
            for step_i, factor_i in STENCIL:
                for step_j, factor_j in STENCIL:
                    dx, dy = step_j * AXES[j] - step_i * AXES[i]
                    total[i, j] += factor_i * factor_j * wide[np.ix_(inner + dy, inner + dx)]
    return total


def _reach_pix(term: NoiseTerm, jacobian_arcsec: Array) -> int:
    """Pixels beyond which two noise values have nothing to do with each other."""
    pixel = math.sqrt(abs(float(np.linalg.det(jacobian_arcsec))))
    if term.sampled is not None:
        own = math.sqrt(abs(float(np.linalg.det(term.sampled.jacobian_arcsec))))
        lags: int = term.sampled.values.shape[0] // 2
        return math.ceil(own * lags / pixel)
    widest = math.sqrt(max(float(np.max(np.linalg.eigvalsh(term.correlation_arcsec2))), 0.0))
    return math.ceil(NOISE_REACH_SIGMA * widest / pixel)


def _room(shape: tuple[int, ...], reach: int) -> tuple[int, int]:
    """Shape for a transform in which lags up to the reach do not wrap around."""
    ny, nx = (scipy.fft.next_fast_len(n + reach, real=True) for n in shape)
    return ny, nx


def _at_lags(one: Array, other: Array, shape: tuple[int, int], reach: int) -> Array:
    """Sums of one(x) other(x + lag) from two spectra, for all lags within the reach."""
    lags = np.arange(-reach, reach + 1)
    sums = scipy.fft.irfft2(np.conj(one) * other, s=shape)
    return np.asarray(sums[np.ix_(lags % shape[0], lags % shape[1])])


def _within_square(lags: Array, good: Bools) -> Array:
    """Cut out the largest square about lag zero in which all is good."""
    reach = lags.shape[0] // 2
    away = np.abs(np.arange(-reach, reach + 1))
    bad = np.maximum(away[:, None], away[None, :])[~good]
    r = min(reach, max(int(bad.min(initial=reach + 1)) - 1, 0))
    return lags[reach - r : reach + r + 1, reach - r : reach + r + 1]


def _beside(lag: Lag, axis: int, step: int) -> Lag:
    x, y = np.array(lag) + step * AXES[axis]
    return int(x), int(y)


def _moved(array: Array, lag: Lag, fill: float) -> Array:
    """The array read at (x, y) + lag, with `fill` beyond its edges."""
    out = np.full(array.shape, fill)
    (ny, nx), (sx, sy) = array.shape, lag
    if abs(sx) < nx and abs(sy) < ny:
        into = np.s_[max(0, -sy) : ny - max(0, sy), max(0, -sx) : nx - max(0, sx)]
        out[into] = array[max(0, sy) : ny + min(0, sy), max(0, sx) : nx + min(0, sx)]
    return out


def _about_mean(array: Array, used: Bools) -> Array:
    """Deviation from the mean of the used pixels, zero elsewhere."""
    mean = float(np.mean(array[used])) if used.any() else 0.0
    return np.where(used, array - mean, 0.0)

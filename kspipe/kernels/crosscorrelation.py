"""How far one image is displaced against another, and how noise moves the answer.

The measure is the correlation coefficient of the two images over the pixels that both observe
when one is moved over the other. Where both show one sky it is 1 at the true displacement and
smaller everywhere else, by the Cauchy-Schwarz inequality, whatever the scale and the zero level
of either image, their edges and their blanks: a product of zero-filled images, the plain
cross-correlation, has none of these properties and is drawn towards zero displacement.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Final

import numpy as np
import scipy.fft
from numpy.typing import NDArray
from scipy.interpolate import RectBivariateSpline

from kspipe.kernels.noise import NoiseTerm

__all__ = ["Peak", "displacement_covariance", "find_peak", "lag_correlations", "shift_response"]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Lags at which less than this share of the weight is left say nothing.
LEAST_OVERLAP: Final = 0.5
# First derivative by five points: exact to (2 pi k)^4 / 30, one per cent at 8 pixels per period.
STENCIL: Final = ((-2, 1.0 / 12.0), (-1, -8.0 / 12.0), (1, 8.0 / 12.0), (2, -1.0 / 12.0))
# The correlation exp(-d^2 / 4 sigma^2) falls to a millionth within this many sigma.
NOISE_REACH_SIGMA: Final = 7.5


@dataclass(frozen=True)
class Peak:
    """Where two images agree best.

    Attributes
    ----------
    x, y : float
        Displacement of the second image's features against the first's [pixel].
    correlation : float
        Correlation coefficient there.
    hessian : (2, 2) float64 array
        Second derivatives on (x, y) [pixel-2]; negative definite.
    """

    x: float
    y: float
    correlation: float
    hessian: Array

    @property
    def lag(self) -> tuple[int, int]:
        """Whole pixels (x, y) nearest to it."""
        return round(self.x), round(self.y)


def lag_correlations(first: Array, second: Array, weight: Array, reach_pix: int) -> Array:
    """Correlation coefficient of two images at each whole displacement.

    Parameters
    ----------
    first, second : (ny, nx) float64 array
        NaN where not observed.
    weight : (ny, nx) float64 array
        Of the pixels of `first`; zero leaves a pixel out.
    reach_pix : int
        Largest displacement along each axis.

    Returns
    -------
    (2 reach + 1, 2 reach + 1) float64 array
        Entry [reach + j, reach + i] compares first(x, y) with second(x + i, y + j); -1 where too
        few pixels are common.
    """
    used, seen = np.isfinite(first) & (weight > 0), np.isfinite(second)
    w, m = np.where(used, weight, 0.0), seen.astype(float)
    a = np.where(used, first - _mean(first, used), 0.0)
    b = np.where(seen, second - _mean(second, seen), 0.0)
    shape = _room(first.shape, reach_pix)
    w0, wa, waa, m0, mb, mbb = (
        scipy.fft.rfft2(array, s=shape) for array in (w, w * a, w * a**2, m, m * b, m * b**2)
    )

    def sums(one: Array, other: Array) -> Array:
        return _at_lags(one, other, shape, reach_pix)

    total = sums(w0, m0)
    common = total > LEAST_OVERLAP * total[reach_pix, reach_pix]
    with np.errstate(invalid="ignore", divide="ignore"):
        mean_a, mean_b = sums(wa, m0) / total, sums(w0, mb) / total
        both = sums(wa, mb) / total - mean_a * mean_b
        spread_a = sums(waa, m0) / total - mean_a**2
        spread_b = sums(w0, mbb) / total - mean_b**2
        coefficient = both / np.sqrt(spread_a * spread_b)
    return np.where(common & np.isfinite(coefficient), coefficient, -1.0)


def find_peak(correlations: Array) -> Peak | None:
    """Find the highest point between the lags, on a quintic spline through them.

    A parabola through three points would be off by up to 0.02 pixel where a beam has three
    pixels; the spline is exact to 1e-4 pixel there.

    Returns
    -------
    Peak or None
        None where the highest lag lies on the edge, or the top is not curved.
    """
    reach = correlations.shape[0] // 2
    row, column = np.unravel_index(int(np.argmax(correlations)), correlations.shape)
    if not (0 < row < 2 * reach and 0 < column < 2 * reach):
        return None
    lags = np.arange(-reach, reach + 1, dtype=float)
    spline = RectBivariateSpline(lags, lags, correlations, kx=5, ky=5)

    def at(dy: int, dx: int) -> float:
        return float(spline.ev(y, x, dx=dy, dy=dx))

    y, x = float(lags[row]), float(lags[column])
    for _ in range(20):
        gradient = np.array([at(0, 1), at(1, 0)])
        hessian = np.array([[at(0, 2), at(1, 1)], [at(1, 1), at(2, 0)]])
        if np.max(np.linalg.eigvalsh(hessian)) >= 0:
            return None
        step_x, step_y = np.clip(-np.linalg.solve(hessian, gradient), -0.5, 0.5)
        x, y = x + step_x, y + step_y
        if max(abs(x - lags[column]), abs(y - lags[row])) > 1.0:
            return None
        if math.hypot(step_x, step_y) < 1e-7:
            break
    return Peak(x, y, at(0, 0), hessian)


def shift_response(
    first: Array, second: Array, weight: Array, lag: tuple[int, int]
) -> tuple[Array, Array]:
    """How the gradient of the correlation coefficient answers to each pixel of both images.

    Parameters
    ----------
    first, second, weight : (ny, nx) float64 array
        As in `lag_correlations`.
    lag : (int, int)
        Displacement (x, y) nearest to the peak.

    Returns
    -------
    to_first, to_second : (2, ny, nx) float64 array
        Derivative of d(coefficient)/dx and d(coefficient)/dy with respect to the value of each
        pixel; zero for pixels that do not enter.

    Notes
    -----
    With standardised images A and B the coefficient is the weighted mean of A B; its derivative
    with respect to a pixel of the first image is w (B - rho A) / (W sigma_A), and likewise for
    the second. Both are differentiated along the lag.
    """
    steps = [(axis, step, factor) for axis in (0, 1) for step, factor in STENCIL]
    lags = [(lag[0] + step * (axis == 0), lag[1] + step * (axis == 1)) for axis, step, _ in steps]
    moved = [_moved(second, at, np.nan) for at in lags]
    used = np.isfinite(first) & (weight > 0) & np.isfinite(moved).all(axis=0)
    to_first, to_second = np.zeros((2, *first.shape)), np.zeros((2, *first.shape))
    if not used.any():
        return to_first, to_second
    w = np.where(used, weight, 0.0) / float(np.sum(weight[used]))
    a, sigma_a = _standardised(first, w, used)
    for (axis, _, factor), at, image in zip(steps, lags, moved, strict=True):
        b, sigma_b = _standardised(image, w, used)
        rho = float(np.sum(w * a * b))
        to_first[axis] += factor * w * (b - rho * a) / sigma_a
        to_second[axis] += factor * _moved(w * (a - rho * b) / sigma_b, (-at[0], -at[1]), 0.0)
    return to_first, to_second


def displacement_covariance(
    peak: Peak,
    responses: Iterable[tuple[Array, tuple[NoiseTerm, ...]]],
    jacobian_arcsec: Array,
) -> Array:
    """Covariance of a displacement on (x, y) [pixel2], from the noise of both images.

    Parameters
    ----------
    peak : Peak
    responses : iterable of (response, noise terms)
        One for each image.
    jacobian_arcsec : (2, 2) float64 array
        Sky offset (east, north) per pixel step (x, y).

    Notes
    -----
    The peak is where the gradient is zero. A change g of the gradient moves it by -H^-1 g, with
    the second derivatives H: first order in the noise, good while the displacement's error is
    well below the width of the peak.
    """
    gradient = np.zeros((2, 2))
    for response, terms in responses:
        for term in terms:
            gradient += _response_covariance(response, term, jacobian_arcsec)
    inverse = np.linalg.inv(peak.hessian)
    return np.asarray(inverse @ gradient @ inverse.T)


def _response_covariance(response: Array, term: NoiseTerm, jacobian_arcsec: Array) -> Array:
    """Covariance of the two sums of response times noise: over all pairs of pixels in reach."""
    reach = min(_noise_reach_pix(term, jacobian_arcsec), max(response.shape[1:]))
    shape = _room(response.shape[1:], reach)
    x, y = (
        scipy.fft.rfft2(np.where(part != 0, part * term.sigma, 0.0), s=shape) for part in response
    )
    lag = np.arange(-reach, reach + 1, dtype=float)
    lag_x, lag_y = np.meshgrid(lag, lag)
    (ex, ey), (nx, ny) = jacobian_arcsec
    correlation = term.correlation_at(ex * lag_x + ey * lag_y, nx * lag_x + ny * lag_y)

    def pairs(one: Array, other: Array) -> float:
        return float(np.sum(correlation * _at_lags(one, other, shape, reach)))

    return np.array([[pairs(x, x), pairs(x, y)], [pairs(y, x), pairs(y, y)]])


def _noise_reach_pix(term: NoiseTerm, jacobian_arcsec: Array) -> int:
    """Pixels beyond which two noise values have nothing to do with each other."""
    pixel = math.sqrt(abs(float(np.linalg.det(jacobian_arcsec))))
    widest = math.sqrt(max(float(np.max(np.linalg.eigvalsh(term.correlation_arcsec2))), 0.0))
    reach = NOISE_REACH_SIGMA * widest
    if term.sampled is not None:
        own = math.sqrt(abs(float(np.linalg.det(term.sampled.jacobian_arcsec))))
        reach = own * (term.sampled.values.shape[0] // 2)
    return math.ceil(reach / pixel)


def _room(shape: tuple[int, ...], reach: int) -> tuple[int, int]:
    """Shape for a transform in which lags up to the reach do not wrap around."""
    ny, nx = (scipy.fft.next_fast_len(n + reach, real=True) for n in shape)
    return ny, nx


def _at_lags(one: Array, other: Array, shape: tuple[int, int], reach: int) -> Array:
    """Sums of one(x) other(x + lag) from two spectra, for all lags within the reach."""
    lags = np.arange(-reach, reach + 1)
    sums = scipy.fft.irfft2(np.conj(one) * other, s=shape)
    return np.asarray(sums[np.ix_(lags % shape[0], lags % shape[1])])


def _moved(array: Array, lag: tuple[int, int], fill: float) -> Array:
    """The array read at (x, y) + lag, with `fill` beyond its edges."""
    out = np.full(array.shape, fill)
    (ny, nx), (sx, sy) = array.shape, lag
    if abs(sx) < nx and abs(sy) < ny:
        into = np.s_[max(0, -sy) : ny - max(0, sy), max(0, -sx) : nx - max(0, sx)]
        out[into] = array[max(0, sy) : ny + min(0, sy), max(0, sx) : nx + min(0, sx)]
    return out


def _mean(array: Array, used: Bools) -> float:
    return float(np.mean(array[used])) if used.any() else 0.0


def _standardised(array: Array, weight: Array, used: Bools) -> tuple[Array, float]:
    """Deviation from the weighted mean over the weighted scatter, zero where not used."""
    filled = np.where(used, array, 0.0)
    deviation = np.where(used, filled - float(np.sum(weight * filled)), 0.0)
    sigma = math.sqrt(float(np.sum(weight * deviation**2)))
    return deviation / sigma, sigma

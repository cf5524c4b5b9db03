"""How the noise of neighbouring pixels goes together, where it is not simply a Gaussian.

Interferometer noise has the shape of the dirty beam, sidelobes included; a mosaic of detectors
may have stripes. Its autocorrelation is measured on blank sky and carried as it is.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray
from scipy import ndimage

from kspipe.kernels.fourier import gaussian_reach, gaussian_smooth

__all__ = [
    "SampledCorrelation",
    "gaussian_correlation",
    "interpolated_correlation",
    "measure_correlation",
    "pixel_correlation",
]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class SampledCorrelation:
    """An autocorrelation sampled at whole pixel lags.

    Attributes
    ----------
    values : (2 m + 1, 2 m + 1) float64 array
        1 at the centre; zero is assumed beyond.
    jacobian_arcsec : (2, 2) float64 array
        Sky offset (east, north) per pixel step (x, y).
    """

    values: Array
    jacobian_arcsec: Array

    def at(self, east_arcsec: Array, north_arcsec: Array) -> Array:
        """Correlation at sky lags, by cubic interpolation."""
        (a, b), (c, d) = np.linalg.inv(self.jacobian_arcsec)
        middle = self.values.shape[0] // 2
        x = a * east_arcsec + b * north_arcsec + middle
        y = c * east_arcsec + d * north_arcsec + middle
        y, x = np.atleast_1d(y), np.atleast_1d(x)
        sampled = ndimage.map_coordinates(self.values, [y, x], order=3, mode="constant")
        return np.asarray(sampled, dtype=float).reshape(np.shape(east_arcsec))

    def smoothed(self, kernel_pix2: Array) -> tuple[float, SampledCorrelation]:
        """What Gaussian smoothing leaves of the variance, and the correlation afterwards.

        The autocorrelation of smoothed noise is the old one smoothed with twice the kernel's
        covariance: once for each of the two positions.
        """
        twice = 2.0 * np.asarray(kernel_pix2)
        wide = gaussian_smooth(self.values, twice, margin=gaussian_reach(twice)).array
        middle = wide.shape[0] // 2
        gain = float(wide[middle, middle])
        return gain, SampledCorrelation(wide / gain, self.jacobian_arcsec)


def gaussian_correlation(
    covariance_arcsec2: Array, east_arcsec: Array, north_arcsec: Array
) -> Array:
    """Correlation exp(-d^T C^-1 d / 4) of white noise smoothed with a Gaussian of covariance C.

    Zeros stand for noise that is independent from pixel to pixel.
    """
    if not np.any(covariance_arcsec2):
        return np.asarray((east_arcsec == 0) & (north_arcsec == 0), dtype=float)
    (a, b), (_, d) = np.linalg.inv(covariance_arcsec2)
    square = a * east_arcsec**2 + 2 * b * east_arcsec * north_arcsec + d * north_arcsec**2
    return np.asarray(np.exp(-0.25 * square))


def pixel_correlation(covariance_pix2: Array, reach_pix: int) -> Array:
    """Correlation at whole lags of white noise on pixels, smoothed with a narrow Gaussian.

    It is the inverse transform of the squared transfer function over the frequencies that pixels
    hold; the Gaussian of `gaussian_correlation` is its limit for kernels wider than a pixel.

    Returns
    -------
    (2 reach + 1, 2 reach + 1) float64 array
    """
    n = 64
    ky, kx = np.meshgrid(np.fft.fftfreq(n), np.fft.fftfreq(n), indexing="ij")
    (a, b), (_, d) = covariance_pix2
    power = np.exp(-4.0 * math.pi**2 * (a * kx**2 + 2.0 * b * kx * ky + d * ky**2))
    correlation = np.fft.ifft2(power).real
    lags = np.arange(-reach_pix, reach_pix + 1) % n
    return np.asarray(correlation[np.ix_(lags, lags)] / correlation[0, 0])


def interpolated_correlation(covariance_pix2: Array, *, fine: int) -> tuple[Array, int]:
    """Correlation of narrow noise between interpolated positions, averaged over where they fall.

    Interpolation passes each frequency by its own response and lets images through: a cubic
    spline by (sinc^4 / samples)^2, the finer sampling of `gaussian_smooth` nearly like a
    rectangle.

    Parameters
    ----------
    covariance_pix2 : (2, 2) float64 array
        Covariance of the Gaussian that white noise on pixels was smoothed with.
    fine : int
        Samples per pixel before the spline.

    Returns
    -------
    values : (n, n) float64 array
        1 at the centre.
    per_pixel : int
        Lags per pixel.
    """
    window, per_pixel = 32, 4
    n = window * per_pixel
    k = np.fft.fftfreq(n) * per_pixel
    ky, kx = np.meshgrid(k, k, indexing="ij")
    # What the pixels hold repeats at every whole frequency.
    by, bx = (f - np.round(f) for f in (ky, kx))
    (a, b), (_, d) = covariance_pix2
    power = np.exp(-4.0 * math.pi**2 * (a * bx**2 + 2.0 * b * bx * by + d * by**2))
    if fine > 1:
        response = (np.abs(k) < 0.5).astype(float)
    else:
        response = (np.sinc(k) ** 4 * 3.0 / (2.0 + np.cos(2.0 * math.pi * k))) ** 2
    correlation = np.fft.fftshift(np.fft.ifft2(power * response * response[:, None]).real)
    odd = correlation[1:, 1:]
    return np.asarray(odd / odd[n // 2 - 1, n // 2 - 1]), per_pixel


def measure_correlation(values: Array, used: NDArray[np.bool_], reach_pix: int) -> Array:
    """Autocorrelation of the used pixels of an array about their mean.

    Parameters
    ----------
    values : (ny, nx) float64 array
    used : (ny, nx) bool array
        Blank sky.
    reach_pix : int
        Largest lag.

    Returns
    -------
    (2 reach + 1, 2 reach + 1) float64 array
        1 at the centre; each lag is the mean product over the pairs that there are, weighted by
        the share of pairs, which keeps it a proper autocorrelation.
    """
    ny, nx = values.shape
    shape = tuple(scipy.fft.next_fast_len(n + reach_pix, real=True) for n in (ny, nx))
    deviation = np.where(used, values - float(np.mean(values[used])), 0.0)
    lags = np.arange(-reach_pix, reach_pix + 1)
    window = np.ix_(lags % shape[0], lags % shape[1])

    def pairs(array: Array) -> Array:
        power = np.abs(scipy.fft.rfft2(array, s=shape)) ** 2
        return np.asarray(scipy.fft.irfft2(power, s=shape)[window])

    products, counts = pairs(deviation), pairs(used.astype(float))
    with np.errstate(invalid="ignore", divide="ignore"):
        mean_product = np.where(counts > 0.5, products / counts, 0.0)
    correlation = mean_product / mean_product[reach_pix, reach_pix]
    # Far lags are mean products of noise only: a window brings them to zero smoothly.
    radius = np.hypot(*np.meshgrid(lags, lags)) / max(reach_pix, 1)
    taper = np.where(radius < 1, 0.5 * (1 + np.cos(math.pi * np.clip(2 * radius - 1, 0, 1))), 0.0)
    return np.asarray(correlation * taper)

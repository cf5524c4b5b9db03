"""Smoothing with a kernel that is an image on the pixels, for values and for their noise."""

from __future__ import annotations

from typing import Final

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from kspipe.kernels.fourier import Padded, Transfer, filtered, spline_samples

__all__ = ["kernel_noise", "kernel_smooth"]

Array = NDArray[np.float64]

# Lags beyond which an autocorrelation holds less than this share of all of it are left out.
NEGLIGIBLE: Final = 1e-3


def kernel_smooth(
    array: Array,
    kernel: Array,
    *,
    margin: int = 0,
    workers: int = 1,
    as_spline: bool = False,
    fine: int = 1,
) -> Padded:
    """Convolve with an image; zero beyond the edges.

    Parameters
    ----------
    array : (ny, nx) float64 array
        Finite everywhere.
    kernel : (2 m + 1, 2 m + 1) float64 array
        Its origin is the middle pixel.
    margin : int
        Pixels of the output kept around the input.
    workers : int
        Threads of the FFT; the result does not depend on them.
    as_spline : bool
        Return the coefficients of the cubic B-spline through the smoothed values instead.
    fine : int
        Samples of the result per pixel.

    Returns
    -------
    Padded
    """
    reach = kernel.shape[0] // 2

    def transfer(shape: tuple[int, int]) -> Transfer:
        whole = np.zeros(shape)
        whole[: kernel.shape[0], : kernel.shape[1]] = kernel
        centred = np.roll(whole, (-reach, -reach), axis=(0, 1))
        spectrum = scipy.fft.rfft2(centred, workers=workers)
        return np.asarray(spectrum / spline_samples(shape, fine) if as_spline else spectrum)

    return filtered(array, transfer, reach=reach, margin=margin, workers=workers, fine=fine)


def kernel_noise(kernel: Array, correlation: Array) -> tuple[float, Array]:
    """What a kernel leaves of the variance of unit noise, and the correlation afterwards.

    The autocorrelation of smoothed noise is the old one convolved with the kernel's own: once for
    each of the two positions. Noise that is independent from pixel to pixel keeps the sum of the
    squared kernel.

    Parameters
    ----------
    kernel : (2 m + 1, 2 m + 1) float64 array
    correlation : (2 n + 1, 2 n + 1) float64 array
        Autocorrelation at whole pixel lags, 1 in the middle.

    Returns
    -------
    gain : float
        Share of the variance that is left.
    correlation : (2 k + 1, 2 k + 1) float64 array
        1 in the middle; far lags that hold nothing are cut off.
    """
    size = correlation.shape[0] + 2 * (kernel.shape[0] - 1)
    shape = (scipy.fft.next_fast_len(size, real=True),) * 2
    power = np.abs(scipy.fft.rfft2(kernel, s=shape)) ** 2
    # The autocorrelation starts at its middle, so that the product does, too.
    start = np.zeros(shape)
    start[: correlation.shape[0], : correlation.shape[1]] = correlation
    middle = correlation.shape[0] // 2
    spectrum = scipy.fft.rfft2(np.roll(start, (-middle, -middle), axis=(0, 1)))
    wide = np.fft.fftshift(scipy.fft.irfft2(spectrum * power, s=shape))
    centre = shape[0] // 2
    gain = float(wide[centre, centre])
    half = size // 2
    window = slice(centre - half, centre + half + 1)
    return gain, _trimmed(wide[window, window] / gain)


def _trimmed(correlation: Array) -> Array:
    """Cut off the far lags that together hold nothing that counts."""
    middle = correlation.shape[0] // 2
    lag = np.abs(np.arange(-middle, middle + 1))
    ring = np.maximum(lag[:, None], lag[None, :])
    held = np.cumsum(np.bincount(ring.ravel(), np.abs(correlation).ravel()))
    half = int(np.searchsorted(held, (1.0 - NEGLIGIBLE) * held[-1]))
    window = slice(middle - half, middle + half + 1)
    return np.ascontiguousarray(correlation[window, window])

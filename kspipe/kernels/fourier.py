"""Gaussian smoothing by its exact transfer function, for values and for their noise."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Any, Final

import numpy as np
import scipy.fft
from numpy.typing import NDArray

__all__ = [
    "Padded",
    "correlated_noise_gain",
    "filtered",
    "gaussian_reach",
    "gaussian_smooth",
    "spline_samples",
    "white_noise_gain",
]

Array = NDArray[np.float64]
Real = NDArray[Any]
Transfer = NDArray[np.floating[Any]] | NDArray[np.complexfloating[Any, Any]]

# A Gaussian falls to 1.5e-8 of its peak within this many sigma.
REACH_SIGMA: Final = 6.0
# A kernel narrower than a pixel rings: its tails fall with the square of the distance only.
LEAST_ROOM: Final = 64


@dataclass(frozen=True)
class Padded:
    """An array with a margin on each side, so that a map fades out instead of wrapping around.

    Attributes
    ----------
    array : (ny + 2 margin, nx + 2 margin) float64 array
    margin : int
        Pixels added on each side.
    """

    array: Real
    margin: int


@lru_cache(maxsize=8)
def _transfer(
    shape: tuple[int, int],
    cxx: float,
    cxy: float,
    cyy: float,
    spline: int,
    orders: tuple[int, int],
    single: bool,
) -> Transfer:
    """Fourier transform of a derivative of a unit Gaussian on the half plane of a real FFT.

    The value, its weight and other tiles share it, and it costs as much as the transform itself.
    With `spline` it gives coefficients of the spline through that many samples per pixel, with
    `single` in single precision.
    """
    ky = np.fft.fftfreq(shape[0])[:, None]
    kx = np.fft.rfftfreq(shape[1])[None, :]
    exponent = cxx * kx**2 + 2.0 * cxy * kx * ky + cyy * ky**2
    transfer = np.exp(-2.0 * math.pi**2 * exponent)
    if spline:
        transfer /= spline_samples(shape, spline)
    if orders != (0, 0):
        step = 2j * math.pi
        transfer = transfer * (step * kx) ** orders[0] * (step * ky) ** orders[1]
    if single:
        transfer = transfer.astype(np.complex64 if np.iscomplexobj(transfer) else np.float32)
    return np.asarray(transfer)


def spline_samples(shape: tuple[int, int], fine: int = 1) -> Array:
    """Fourier transform of the samples of a cubic B-spline, 1/6, 4/6, 1/6, on the half plane.

    Dividing by it turns values into coefficients of the spline through them, or through `fine`
    samples per pixel.
    """
    ky = np.fft.fftfreq(shape[0])[:, None] / fine
    kx = np.fft.rfftfreq(shape[1])[None, :] / fine
    along_y = (2.0 + np.cos(2 * math.pi * ky)) / 3.0
    return np.asarray(along_y * (2.0 + np.cos(2 * math.pi * kx)) / 3.0)


def gaussian_reach(covariance_pix2: Array) -> int:
    """Pixels beyond which a Gaussian kernel holds nothing that counts."""
    widest = math.sqrt(max(float(np.max(np.linalg.eigvalsh(covariance_pix2))), 0.0))
    return math.ceil(REACH_SIGMA * widest)


def gaussian_smooth(
    array: Real,
    covariance_pix2: Array,
    *,
    margin: int | None = None,
    workers: int = 1,
    as_spline: bool = False,
    fine: int = 1,
    derivative: tuple[int, int] = (0, 0),
) -> Padded:
    """Convolve with a Gaussian whose transfer function is exact; zero beyond the edges.

    Parameters
    ----------
    array : (ny, nx) float64 array
        Finite everywhere: blanks are zero in value and in weight. Single precision stays single,
        and takes half the time: enough for variances.
    covariance_pix2 : (2, 2) float64 array
        Kernel covariance on (x, y) [pixel2]; zeros leave the array as it is.
    margin : int, optional
        Pixels of the output kept around the input; by default the reach of the kernel.
    workers : int
        Threads of the FFT; the result does not depend on them.
    as_spline : bool
        Return the coefficients of the cubic B-spline through the smoothed values instead of the
        values: the spline's prefilter is one more division in Fourier space.
    fine : int
        Samples of the result per pixel, by zeros at high frequencies: exact for what the pixels
        hold. For maps whose final beam spans few pixels.
    derivative : (int, int)
        Orders in x and y [pixel] of the derivative of the result that is wanted.

    Returns
    -------
    Padded

    Notes
    -----
    The transfer function of a Gaussian of covariance C is exp(-2 pi^2 k^T C k); nothing is
    sampled on pixels, so a kernel narrower than a pixel is as exact as a wide one.
    """
    reach = gaussian_reach(covariance_pix2)
    margin = max(reach, 2) if margin is None else margin
    if not (np.any(covariance_pix2) or as_spline or any(derivative)) and fine == 1:
        return Padded(np.pad(array, margin), margin)
    (cxx, cxy), (_, cyy) = np.asarray(covariance_pix2).tolist()

    single = array.dtype == np.float32

    def transfer(shape: tuple[int, int]) -> Transfer:
        return _transfer(shape, cxx, cxy, cyy, fine if as_spline else 0, derivative, single)

    return filtered(array, transfer, reach=reach, margin=margin, workers=workers, fine=fine)


def filtered(
    array: Real,
    transfer: Callable[[tuple[int, int]], Transfer],
    *,
    reach: int,
    margin: int,
    workers: int = 1,
    fine: int = 1,
) -> Padded:
    """Multiply an array by a transfer function in Fourier space; zero beyond the edges.

    Parameters
    ----------
    array : (ny, nx) float64 array
        Finite everywhere.
    transfer : callable
        Gives the transfer function on the half plane of a real FFT of a shape.
    reach : int
        Pixels to which the kernel spreads a point.
    margin : int
        Pixels of the output kept around the input.
    workers : int
        Threads of the FFT.
    fine : int
        Samples of the result per pixel; the margin then counts in samples, too.

    Returns
    -------
    Padded
    """
    ny, nx = array.shape
    # Twice the reach must fit beyond the far edge, or the tail would wrap into the margin.
    room = margin + max(reach, margin, LEAST_ROOM)
    shape = (
        scipy.fft.next_fast_len(max(ny + room, 2 * reach + 1), real=True),
        scipy.fft.next_fast_len(max(nx + room, 2 * reach + 1), real=True),
    )
    spectrum = scipy.fft.rfft2(array, s=shape, workers=workers)
    spectrum *= transfer(shape)
    if fine > 1:
        spectrum = _widened(spectrum, shape, fine)
        shape = (shape[0] * fine, shape[1] * fine)
        ny, nx, margin = ny * fine, nx * fine, margin * fine
    smooth = scipy.fft.irfft2(spectrum, s=shape, workers=workers, overwrite_x=True)
    if not margin:
        return Padded(smooth[:ny, :nx], 0)
    rows = np.arange(-margin, ny + margin) % shape[0]
    columns = np.arange(-margin, nx + margin) % shape[1]
    return Padded(np.ascontiguousarray(smooth[np.ix_(rows, columns)]), margin)


def _widened(spectrum: Transfer, shape: tuple[int, int], fine: int) -> Transfer:
    """Put zeros at frequencies that the pixels do not hold; Nyquist is shared by both signs."""
    ny, nx = shape
    wide = np.zeros((ny * fine, nx * fine // 2 + 1), dtype=spectrum.dtype)
    half = ny // 2
    columns = spectrum.shape[1]
    wide[: half + 1, :columns] = spectrum[: half + 1]
    wide[ny * fine - (ny - half - 1) :, :columns] = spectrum[half + 1 :]
    if ny % 2 == 0:
        wide[ny * fine - half, :columns] = 0.5 * wide[half, :columns]
        wide[half, :columns] *= 0.5
    if nx % 2 == 0:
        wide[:, columns - 1] *= 0.5
    return np.asarray(wide * fine**2)


def white_noise_gain(covariance_pix2: Array) -> float:
    """Variance that is left of uncorrelated unit noise after Gaussian smoothing.

    Parameters
    ----------
    covariance_pix2 : (2, 2) float64 array
        Kernel covariance [pixel2].

    Returns
    -------
    float
        Mean of the squared transfer function over all frequencies of the pixel grid; 1 for no
        smoothing, 1 / (4 pi sqrt(det)) for a wide kernel.
    """
    wide = 1.0 / (4.0 * math.pi * math.sqrt(max(float(np.linalg.det(covariance_pix2)), 1e-300)))
    if float(np.min(np.linalg.eigvalsh(covariance_pix2))) > 1.0:
        return wide
    k = (np.arange(256) + 0.5) / 256.0 - 0.5
    kx, ky = np.meshgrid(k, k)
    (cxx, cxy), (_, cyy) = covariance_pix2
    exponent = cxx * kx**2 + 2.0 * cxy * kx * ky + cyy * ky**2
    return float(np.mean(np.exp(-4.0 * math.pi**2 * exponent)))


def correlated_noise_gain(correlation: Array, kernel: Array) -> float:
    """Variance that is left of correlated unit noise after Gaussian smoothing.

    Parameters
    ----------
    correlation : (2, 2) float64 array
        Covariance of the Gaussian that white noise was smoothed with.
    kernel : (2, 2) float64 array
        Covariance of the further smoothing, same unit.

    Returns
    -------
    float
        sqrt(det C / det(C + K)).
    """
    return math.sqrt(float(np.linalg.det(correlation) / np.linalg.det(correlation + kernel)))

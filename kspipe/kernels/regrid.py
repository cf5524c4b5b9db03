"""Sampling a smoothed array at fractional pixel positions, and what that does to its noise."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from kspipe.kernels.correlation import pixel_correlation

__all__ = ["interpolation_noise_gain", "sample_cubic", "sample_linear"]

Array = NDArray[np.float64]

_REACH: Final = 8
_PHASES: Final = 9


def sample_cubic(array: Array, x: Array, y: Array, *, is_spline: bool = False) -> Array:
    """Interpolate by a cubic B-spline; zero beyond the array.

    Parameters
    ----------
    array : (my, mx) float64 array
        Finite everywhere; values, or with `is_spline` the coefficients of the spline.
    x, y : float64 array
        Pixel positions, zero at the centre of the first pixel.
    is_spline : bool
        Whether `array` holds coefficients, as `gaussian_smooth` can give them.

    Returns
    -------
    float64 array
        The shape of `x`.
    """
    return np.asarray(
        ndimage.map_coordinates(
            array, [y, x], order=3, mode="constant", cval=0.0, prefilter=not is_spline
        ),
        dtype=float,
    )


def sample_linear(array: Array, x: Array, y: Array) -> Array:
    """Interpolate linearly, for variances: positive in, positive out; zero beyond the array."""
    return np.asarray(
        ndimage.map_coordinates(array, [y, x], order=1, mode="constant", cval=0.0), dtype=float
    )


def _spline_weights() -> Array:
    """Weights of the cubic B-spline for each phase and each neighbour, (phases, neighbours)."""
    size = 4 * _REACH + 1
    impulse = np.zeros(size)
    impulse[2 * _REACH] = 1.0
    offsets = np.arange(-_REACH, _REACH + 1)
    phases = np.linspace(0.0, 1.0, _PHASES)
    positions = 2 * _REACH + phases[:, None] - offsets[None, :]
    return np.asarray(
        ndimage.map_coordinates(impulse, positions.reshape(1, -1), order=3, mode="constant")
    ).reshape(positions.shape)


def interpolation_noise_gain(x: Array, y: Array, correlation_pix2: Array) -> Array:
    """Variance that is left of unit noise after cubic interpolation.

    Parameters
    ----------
    x, y : float64 array
        Pixel positions of the samples.
    correlation_pix2 : (2, 2) float64 array
        Covariance of the Gaussian that white noise was smoothed with [pixel2].

    Returns
    -------
    float64 array
        1 on pixel centres and for well-sampled noise; 0.57 half-way between four pixels of white
        noise.

    Notes
    -----
    The variance of a weighted sum is w^T R w, with R the correlation of the noise on pixels: the
    inverse transform of the squared transfer function over the frequencies that pixels hold. It
    is tabulated over the position within a pixel.
    """
    if float(np.min(np.linalg.eigvalsh(correlation_pix2))) > 1.0:
        return np.ones(np.shape(x))
    weights = _spline_weights()
    correlation = pixel_correlation(correlation_pix2, 2 * _REACH)
    # w^T R w with separable weights is the sum of R over lags times both autocorrelations.
    auto = np.array([np.correlate(w, w, mode="full") for w in weights])
    table = np.einsum("py,qx,yx->pq", auto, auto, correlation)
    steps = _PHASES - 1
    phases = [np.atleast_1d(np.asarray(p) % 1.0) * steps for p in (y, x)]
    gain = ndimage.map_coordinates(table, phases, order=1)
    return np.asarray(gain, dtype=float).reshape(np.shape(x))

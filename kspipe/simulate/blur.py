"""Gaussian smoothing and sampling in real space, by other means than the chain's.

A Gaussian of any shape is a chain of one-dimensional Gaussians along three directions of the
pixel lattice, whose covariances add up to its own. Nothing here is transformed or splined.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import convolve1d

__all__ = ["blur", "sample", "steps_of"]

Array = NDArray[np.float64]
# Steps along the rows and columns of an array.
_AXES: Final = {(1, 0): 1, (-1, 0): 1, (0, 1): 0, (0, -1): 0}
Step = tuple[int, int]

# A Gaussian holds 1 - 2e-9 of its weight within this many sigma.
REACH_SIGMA: Final = 6.0
# Sigma [pixel] of the Gaussian by which values are taken between the pixels: sums over pixels of
# a Gaussian this wide are exact to exp(-2 pi^2 1.4^2) = 2e-17.
SAMPLING_SIGMA: Final = 1.4
SAMPLING_REACH: Final = 5.0


def steps_of(covariance_pix2: Array) -> list[tuple[Step, float]]:
    """Split a covariance into variances along three directions of the lattice.

    Parameters
    ----------
    covariance_pix2 : (2, 2) float64 array
        On (x, y) [pixel2], positive definite.

    Returns
    -------
    list of ((int, int), float)
        Steps (x, y) and variances in squared steps, none negative:
        C = sum of variance x outer(step, step).

    References
    ----------
    .. [1] Selling 1874, Journal fuer die reine und angewandte Mathematik 77, 143: every positive
       quadratic form in two variables has an obtuse superbase (from memory).
    """
    cov = np.asarray(covariance_pix2, dtype=float)
    if float(np.linalg.det(cov)) <= 1e-12 * float(np.trace(cov)) ** 2:
        raise ValueError(f"covariance {cov.tolist()} is not positive definite")
    base = [np.array([1, 0]), np.array([0, 1]), np.array([-1, -1])]
    # In an obtuse superbase no two vectors have a positive product under the form.
    while True:
        for i, j in ((0, 1), (0, 2), (1, 2)):
            if base[i] @ cov @ base[j] > 1e-12 * float(np.trace(cov)):
                base = [-base[i], base[j], base[i] - base[j]]
                break
        else:
            break
    steps = []
    for i, j in ((0, 1), (0, 2), (1, 2)):
        variance = -float(base[i] @ cov @ base[j])
        along = base[3 - i - j]
        # The step is normal to the third vector of the superbase.
        steps.append(((int(-along[1]), int(along[0])), max(variance, 0.0)))
    return steps


def _weights(variance: float) -> Array:
    """Weights of a one-dimensional Gaussian on whole steps, with exactly this variance."""
    sigma = math.sqrt(variance)
    if sigma < 1.0:
        # Too narrow to be sampled: three or five points that have its variance.
        narrow = np.array([0.5 * variance, 1.0 - variance, 0.5 * variance])
        if variance <= 0.5:
            return narrow
        half = np.array([0.25 * variance, 1.0 - 0.5 * variance, 0.25 * variance])
        return np.convolve(half, half)
    reach = math.ceil(REACH_SIGMA * sigma)
    lag = np.arange(-reach, reach + 1.0)
    weights = np.exp(-0.5 * (lag / sigma) ** 2)
    return np.asarray(weights / weights.sum())


def blur(image: Array, covariance_pix2: Array) -> Array:
    """Smooth with a Gaussian; zero beyond the edges.

    Parameters
    ----------
    image : (ny, nx) float64 array
    covariance_pix2 : (2, 2) float64 array
        On (x, y) [pixel2]; zeros leave the image as it is.

    Returns
    -------
    (ny, nx) float64 array
    """
    if not np.any(covariance_pix2):
        return image.copy()
    smooth = image
    for (dx, dy), variance in steps_of(covariance_pix2):
        if variance > 0:
            smooth = _along(smooth, dx, dy, _weights(variance))
    return smooth


def _along(image: Array, dx: int, dy: int, weights: Array) -> Array:
    """Weighted sum of copies shifted by whole steps."""
    if (dx, dy) in _AXES:
        return np.asarray(convolve1d(image, weights, axis=_AXES[dx, dy], mode="constant"))
    ny, nx = image.shape
    reach = len(weights) // 2
    total = np.multiply(image, weights[reach])
    for k in range(1, reach + 1):
        x, y = k * dx, k * dy
        if abs(x) >= nx or abs(y) >= ny:
            break
        here, there = _shifted(y, ny), _shifted(x, nx)
        total[here[0], there[0]] += weights[reach + k] * image[here[1], there[1]]
        total[here[1], there[1]] += weights[reach + k] * image[here[0], there[0]]
    return np.asarray(total)


def _shifted(lag: int, n: int) -> tuple[slice, slice]:
    return slice(max(0, lag), n + min(0, lag)), slice(max(0, -lag), n - max(0, lag))


def sample(image: Array, x: Array, y: Array) -> Array:
    """Gaussian-weighted sums around positions between the pixels.

    The image comes out smoothed with a round Gaussian of `SAMPLING_SIGMA` pixels, which the
    caller takes off the beam; positions are exact.

    Parameters
    ----------
    image : (ny, nx) float64 array
    x, y : float64 array
        Zero-based pixel positions.

    Returns
    -------
    float64 array
        Zero where the position is off the image by more than the Gaussian's reach.
    """
    reach = math.ceil(SAMPLING_REACH * SAMPLING_SIGMA)
    padded = np.pad(image, reach + 1)
    ny, nx = image.shape
    near = (x > -1) & (x < nx) & (y > -1) & (y < ny)
    column, row = np.rint(x[near]).astype(int), np.rint(y[near]).astype(int)
    offset_x, offset_y = x[near] - column, y[near] - row
    lags = np.arange(-reach, reach + 1)
    across = [np.exp(-0.5 * ((lag - offset_x) / SAMPLING_SIGMA) ** 2) for lag in lags]
    total = np.zeros(column.size)
    for lag_y in lags:
        up = np.exp(-0.5 * ((lag_y - offset_y) / SAMPLING_SIGMA) ** 2)
        line = (row + lag_y + reach + 1) * padded.shape[1] + column + reach + 1
        part = np.zeros(column.size)
        for weight, lag_x in zip(across, lags, strict=True):
            part += weight * padded.ravel()[line + lag_x]
        total += up * part
    out = np.zeros(np.shape(x))
    out[near] = total / (2.0 * math.pi * SAMPLING_SIGMA**2)
    return out

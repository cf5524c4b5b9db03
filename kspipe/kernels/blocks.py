"""How far residuals stay alike on a map, and blocks of sky that are wider than that."""

from __future__ import annotations

import math

import numpy as np
import scipy.fft
from numpy.typing import NDArray

__all__ = ["block_bootstrap_error", "correlation_length", "square_blocks"]

Array = NDArray[np.float64]


def correlation_length(values: Array, used: NDArray[np.bool_]) -> float:
    """Distance at which the autocorrelation of a map has fallen to 1/e.

    Parameters
    ----------
    values : (ny, nx) float64 array
    used : (ny, nx) bool array
        Pixels that count; their mean is taken off.

    Returns
    -------
    float
        [pixel]; the whole map's smaller side where it never falls so low, NaN for a flat map.
    """
    used = used & np.isfinite(values)
    if used.sum() < 2:
        return math.nan
    centred = np.where(used, values - np.mean(values[used]), 0.0)
    shape = tuple(scipy.fft.next_fast_len(2 * n, real=True) for n in values.shape)
    spectra = [scipy.fft.rfft2(a, s=shape) for a in (centred, used.astype(float))]
    product, pairs = (scipy.fft.irfft2(np.abs(s) ** 2, s=shape) for s in spectra)
    lag_y = np.abs(np.fft.fftfreq(shape[0], 1.0 / shape[0]))[:, None]
    lag_x = np.abs(np.fft.fftfreq(shape[1], 1.0 / shape[1]))[None, :]
    ring = np.rint(np.hypot(lag_x, lag_y)).astype(int)
    counted = pairs > 0.5
    top = np.bincount(ring[counted], product[counted])
    mean = top / np.maximum(np.bincount(ring[counted], pairs[counted]), 0.5)
    if mean[0] <= 0:
        return math.nan
    correlation = mean / mean[0]
    below = np.flatnonzero(correlation < math.exp(-1.0))
    smaller_side = float(min(values.shape))
    if not below.size:
        return smaller_side
    last = int(below[0])
    fall = (correlation[last - 1] - math.exp(-1.0)) / (correlation[last - 1] - correlation[last])
    return min(last - 1 + float(fall), smaller_side)


def square_blocks(positions: Array, side: float, centre: tuple[float, float]) -> NDArray[np.intp]:
    """Number the squares of a lattice about `centre` that (n, 2) positions fall in, from 0 up."""
    squares = np.floor((positions - np.asarray(centre)) / side).astype(int)
    return np.unique(squares, axis=0, return_inverse=True)[1].reshape(-1)


def block_bootstrap_error(
    values: Array, blocks: NDArray[np.intp], rng: np.random.Generator, n_draws: int = 1000
) -> float:
    """Standard deviation of the sum of values when whole blocks are drawn again.

    Parameters
    ----------
    values : (n,) float64 array
    blocks : (n,) int array
        From 0 up.

    References
    ----------
    .. [1] Kuensch 1989, Ann. Statist. 17, 1217: the bootstrap of blocks.
    """
    sums = np.bincount(blocks, values)
    picks = rng.integers(0, sums.size, (n_draws, sums.size))
    return float(np.std(sums[picks].sum(axis=1)))

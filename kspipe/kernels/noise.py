"""Random errors as named terms, and the arithmetic of them.

Terms of one source are the same noise: they add with their signs before they are squared, and
two quantities that share a source covary.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from kspipe.kernels.correlation import SampledCorrelation, gaussian_correlation

__all__ = ["NoiseTerm", "covariance", "propagate", "sum_covariance", "total_error"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class NoiseTerm:
    """One random error of a quantity.

    Attributes
    ----------
    source : str
        Where the noise comes from; terms of one source are the same noise.
    sigma : (ny, nx) float64 array
        Signed 1-sigma error in the unit of the quantity.
    correlation_arcsec2 : (2, 2) float64 array
        Covariance (east, north) of the Gaussian that white noise was smoothed with; zeros for
        noise that is independent from pixel to pixel.
    sampled : SampledCorrelation or None
        The correlation itself, where it was measured; it then replaces the Gaussian.
    """

    source: str
    sigma: Array
    correlation_arcsec2: Array
    sampled: SampledCorrelation | None = None

    def correlation_at(self, east_arcsec: Array, north_arcsec: Array) -> Array:
        """Correlation of the noise at two positions this far apart."""
        if self.sampled is not None:
            return self.sampled.at(east_arcsec, north_arcsec)
        return gaussian_correlation(self.correlation_arcsec2, east_arcsec, north_arcsec)

    def with_sigma(self, sigma: Array) -> NoiseTerm:
        """Return the same noise in another quantity."""
        return replace(self, sigma=sigma)


Terms = tuple[NoiseTerm, ...]


def total_error(terms: Iterable[NoiseTerm]) -> Array:
    """Random 1-sigma error: the root sum of squares over sources."""
    sigmas = [term.sigma for term in terms]
    if len(sigmas) == 1:
        return np.abs(sigmas[0])
    return np.asarray(np.sqrt(sum(sigma**2 for sigma in sigmas)))


def covariance(first: Iterable[NoiseTerm], second: Iterable[NoiseTerm]) -> Array | float:
    """Covariance per pixel of two quantities: the sum over the sources that they share."""
    by_source = {term.source: term.sigma for term in second}
    shared = [term.sigma * by_source[term.source] for term in first if term.source in by_source]
    return np.asarray(sum(shared[1:], shared[0])) if shared else 0.0


def propagate(terms: Mapping[str, Terms], slopes: Mapping[str, Array | float]) -> Terms:
    """Noise of a quantity from that of its inputs.

    Parameters
    ----------
    terms : mapping of str to tuple of NoiseTerm
        By input.
    slopes : mapping of str to float64 array
        Derivative of the quantity with respect to each input.

    Returns
    -------
    tuple of NoiseTerm
        One for each source.
    """
    sums: dict[str, NoiseTerm] = {}
    for name, slope in slopes.items():
        for term in terms[name]:
            part = slope * term.sigma
            if term.source in sums:
                part = sums[term.source].sigma + part
            sums[term.source] = term.with_sigma(part)
    return tuple(sums.values())


def sum_covariance(
    first: Iterable[NoiseTerm],
    second: Iterable[NoiseTerm],
    used: NDArray[np.bool_],
    jacobian_arcsec: Array,
) -> float:
    """Covariance of the sums of two quantities over a region.

    Parameters
    ----------
    first, second : iterable of NoiseTerm
    used : (ny, nx) bool array
        Pixels of the sum.
    jacobian_arcsec : (2, 2) float64 array
        Sky offset (east, north) per pixel step (x, y).

    Returns
    -------
    float

    Notes
    -----
    The sum over all pairs of pixels, sigma_i sigma_j rho(d_ij), is a sum over lags of rho times
    the cross-correlation of the two sigma maps, which one Fourier transform gives: exact for any
    region, from a single pixel to the whole map.
    """
    by_source = {term.source: term for term in second}
    rows, columns = (np.flatnonzero(used.any(axis=axis)) for axis in (1, 0))
    if not rows.size:
        return 0.0
    box = np.s_[rows[0] : rows[-1] + 1, columns[0] : columns[-1] + 1]
    n_rows, n_columns = used[box].shape
    shape = tuple(scipy.fft.next_fast_len(2 * n, real=True) for n in (n_rows, n_columns))
    lag_y = np.fft.fftfreq(shape[0], 1.0 / shape[0])[:, None]
    lag_x = np.fft.fftfreq(shape[1], 1.0 / shape[1])[None, :]
    (ex, ey), (nx, ny) = jacobian_arcsec
    east, north = ex * lag_x + ey * lag_y, nx * lag_x + ny * lag_y
    total = 0.0
    for term in first:
        if term.source in by_source:
            one, other = (
                scipy.fft.rfft2(np.where(used[box], t.sigma[box], 0.0), s=shape)
                for t in (term, by_source[term.source])
            )
            pairs = scipy.fft.irfft2(one * np.conj(other), s=shape)
            total += float(np.sum(pairs * term.correlation_at(east, north)))
    return total

"""Random errors as named terms, and the arithmetic of them.

Terms of one source are the same noise: they add with their signs before they are squared, and
two quantities that share a source covary.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kspipe.kernels.statistics import correlation_area

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
    """

    source: str
    sigma: Array
    correlation_arcsec2: Array


Terms = tuple[NoiseTerm, ...]


def total_error(terms: Iterable[NoiseTerm]) -> Array:
    """Random 1-sigma error: the root sum of squares over sources."""
    terms = tuple(terms)
    return np.asarray(np.sqrt(sum(term.sigma**2 for term in terms)))


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
    sums: dict[str, Array] = {}
    correlations: dict[str, Array] = defaultdict(lambda: np.zeros((2, 2)))
    for name, slope in slopes.items():
        for term in terms[name]:
            part = slope * term.sigma
            sums[term.source] = sums[term.source] + part if term.source in sums else part
            correlations[term.source] = term.correlation_arcsec2
    return tuple(NoiseTerm(source, sigma, correlations[source]) for source, sigma in sums.items())


def sum_covariance(
    first: Iterable[NoiseTerm],
    second: Iterable[NoiseTerm],
    used: NDArray[np.bool_],
    pixel_area_arcsec2: float,
) -> float:
    """Covariance of the sums of two quantities over many pixels.

    Neighbouring pixels share noise over the correlation area (4 pi sqrt(det C), at least one
    pixel), so that the variance of a sum is the sum of the variances times correlation area over
    pixel area. Good where the region is much larger than a beam and sigma varies slowly.

    Parameters
    ----------
    first, second : iterable of NoiseTerm
    used : (ny, nx) bool array
        Pixels of the sum.
    pixel_area_arcsec2 : float
    """
    by_source = {term.source: term.sigma for term in second}
    total = 0.0
    for term in first:
        if term.source in by_source:
            area = max(correlation_area(term.correlation_arcsec2), pixel_area_arcsec2)
            products = (term.sigma * by_source[term.source])[used]
            total += float(np.sum(products)) * area / pixel_area_arcsec2
    return total

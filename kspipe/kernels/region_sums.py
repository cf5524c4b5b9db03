"""Sums over many regions of one map, with the covariance that correlated noise gives them."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.special import log_ndtr, ndtri

from kspipe.kernels.noise import NoiseTerm

__all__ = ["region_covariance", "upper_limit"]

Array = NDArray[np.float64]
Terms = tuple[NoiseTerm, ...]
# Source and correlation: what makes noise the same noise.
Key = tuple[str, int, bytes]

LEAST_CORRELATION: Final = 1e-6


def region_covariance(
    pairs: Sequence[tuple[Terms, Terms]],
    labels: NDArray[np.int_],
    weights: Array,
    jacobian_arcsec: Array,
) -> list[tuple[Array, Array]]:
    """Covariance of weighted sums of two quantities, region by region and with the next region.

    Parameters
    ----------
    pairs : sequence of (terms, terms)
        The two quantities; twice the same for a variance. Sources that both have are the same
        noise.
    labels : (ny, nx) int array
        Region of each pixel, 0 to k - 1; -1 for none.
    weights : (ny, nx) float64 array
        Of each pixel in the sum of its region.
    jacobian_arcsec : (2, 2) float64 array
        Sky offset (east, north) per pixel step (x, y).

    Returns
    -------
    list of ((k,) float64 array, (k - 1,) float64 array)
        For each pair: within each region; between each region and the next.

    Notes
    -----
    sum_pq w_p s_p rho(p - q) t_q w_q, lag by lag: noise goes together over a few beams, so that
    the work grows with the map's pixels however many regions there are. Lags at which the
    correlation is below 1e-6 are left out.
    """
    used = labels >= 0
    count = int(labels.max()) + 1
    rows, columns = (np.flatnonzero(used.any(axis=axis)) for axis in (1, 0))
    box = np.s_[rows[0] : rows[-1] + 1, columns[0] : columns[-1] + 1]
    where = labels[box]
    totals = np.zeros((len(pairs), 2 * count + 1))
    by_noise: dict[Key, list[tuple[int, Array, Array]]] = {}
    terms: dict[Key, NoiseTerm] = {}
    for i, (first, second) in enumerate(pairs):
        by_source = {term.source: term for term in second}
        for term in first:
            if term.source in by_source:
                key = (term.source, id(term.sampled), term.correlation_arcsec2.tobytes())
                terms.setdefault(key, term)
                partner = by_source[term.source]
                one = np.where(used, term.sigma * weights, 0.0)[box]
                is_same = partner is term
                other = one if is_same else np.where(used, partner.sigma * weights, 0.0)[box]
                by_noise.setdefault(key, []).append((i, one, other))
    table, first_of, second_of = _bins(where, count)
    for key, products in by_noise.items():
        for dy, dx, rho in _half_lags(
            terms[key], (where.shape[0], where.shape[1]), jacobian_arcsec
        ):
            here, there = _overlap(dy, where.shape[0]), _overlap(dx, where.shape[1])
            at, beside = (here[0], there[0]), (here[1], there[1])
            bins = table[first_of[at] + second_of[beside]].ravel()
            for i, one, other in products:
                each = one[at] * other[beside]
                if (dy, dx) != (0, 0):
                    each = each + each if one is other else each + other[at] * one[beside]
                totals[i] += rho * np.bincount(bins, each.ravel(), minlength=2 * count + 1)
    # Both orders of a pair of neighbouring regions were added.
    return [(t[:count], 0.5 * t[count : 2 * count - 1]) for t in totals]


def _half_lags(
    term: NoiseTerm, shape: tuple[int, int], jacobian_arcsec: Array
) -> Iterator[tuple[int, int, float]]:
    """Pixel lags at which noise is correlated, and how much; of each and its opposite one."""
    if term.sampled is None and not np.any(term.correlation_arcsec2):
        yield 0, 0, 1.0
        return
    dy, dx = np.mgrid[0 : shape[0], -shape[1] + 1 : shape[1]]
    (ex, ey), (nx, ny) = jacobian_arcsec
    rho = term.correlation_at(ex * dx + ey * dy, nx * dx + ny * dy)
    is_first = (dy > 0) | (dx >= 0)
    for row, column in np.argwhere(is_first & (np.abs(rho) > LEAST_CORRELATION)):
        yield int(dy[row, column]), int(dx[row, column]), float(rho[row, column])


def _overlap(lag: int, n: int) -> tuple[slice, slice]:
    """Pixels along one axis that have a partner at a lag, and those partners."""
    return slice(max(0, -lag), n - max(0, lag)), slice(max(0, lag), n - max(0, -lag))


def _bins(
    labels: NDArray[np.int_], count: int
) -> tuple[NDArray[np.intp], NDArray[np.int_], NDArray[np.int_]]:
    """Where a pair of pixels counts: its region, the border to the next one, or nowhere.

    The bin is the table's entry at the sum of one number of each pixel.
    """
    one, other = np.meshgrid(np.arange(-1, count), np.arange(-1, count), indexing="ij")
    lower, apart = np.minimum(one, other), np.abs(one - other)
    bins = np.where(apart == 0, one, np.where(apart == 1, count + lower, 2 * count))
    table = np.where(lower < 0, 2 * count, bins).ravel().astype(np.intp)
    return table, (labels + 1) * (count + 1), labels + 1


def upper_limit(value: Array | float, error: Array | float, n_sigma: float = 3.0) -> Array:
    """Upper limit of a quantity that cannot be negative, from a Gaussian measurement.

    Parameters
    ----------
    value, error : float64 array
        Measured value, of any sign, and its 1-sigma error at that place.
    n_sigma : float
        The limit holds with the one-sided probability of so many sigma (3: 99.865 %).

    Returns
    -------
    float64 array
        Positive; 3.2 sigma at a value of zero.

    Notes
    -----
    The Gaussian is cut at zero and renormalised: limit = v + s Phi^-1(1 - (1 - p) Phi(v / s)),
    the Bayesian limit with a flat prior on positive values (Review of Particle Physics,
    "Statistics", section on bounded parameters; from memory).
    """
    beyond = log_ndtr(-n_sigma) + log_ndtr(np.asarray(value) / np.asarray(error))
    # isf of a tiny probability is exact, ppf of one minus it is not.
    return np.asarray(value + np.asarray(error) * -ndtri(np.exp(beyond)))

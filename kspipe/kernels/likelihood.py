"""Zero point and intrinsic scatter about predictions, without logarithms of noise."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize
from scipy.special import logsumexp

__all__ = ["ZeroPoint", "fit_zero_point", "log_likelihood"]

Array = NDArray[np.float64]

_LEGENDRE: Final = np.polynomial.legendre.leggauss(48)
_REACH: Final = 6.0
LN10: Final = math.log(10.0)
# Below this the scatter is not told from zero on a grid of double precision.
LEAST_SCATTER_DEX: Final = 1e-3


@dataclass(frozen=True)
class ZeroPoint:
    """Offset of measurements from predictions, with intrinsic scatter.

    Attributes
    ----------
    offset_dex, offset_error_dex : float
        Median of log10(true / predicted).
    scatter_dex, scatter_error_dex : float
        Standard deviation of that logarithm; error NaN where the scatter is at its lower limit.
    n : int
        Points used.
    """

    offset_dex: float
    offset_error_dex: float
    scatter_dex: float
    scatter_error_dex: float
    n: int


def log_likelihood(
    offset_dex: float, scatter_dex: float, y: Array, predicted: Array, variance_terms: Array
) -> float:
    """Log-likelihood of measured, possibly negative values about positive predictions.

    Parameters
    ----------
    offset_dex, scatter_dex : float
        Median of log10(true / predicted) and its standard deviation.
    y, predicted : (n,) float64 array
        Measured values, any sign; predictions, positive; one unit.
    variance_terms : (3, n) float64 array
        Variance of y, variance of the prediction, their covariance.

    Returns
    -------
    float

    Notes
    -----
    The true value is predicted x 10^(offset + scatter e) with e normal; y scatters about it with
    a Gaussian of variance s_y^2 + a^2 s_p^2 - 2 a cov, a = 10^offset: the prediction's own noise
    acts on the same difference. The integral over e is a sum over nodes laid where both factors
    are non-zero, so that neither a sharp measurement nor a narrow scatter is missed.
    """
    scale = 10.0**offset_dex
    s_y2, s_p2, cov = variance_terms
    sigma = np.sqrt(s_y2 + scale**2 * s_p2 - 2.0 * scale * cov)
    centre = np.log10(predicted) + offset_dex
    t, weights = _nodes(centre, scatter_dex, y, sigma)
    log_terms = (
        -0.5 * ((t - centre) / scatter_dex) ** 2
        - 0.5 * ((y - np.exp(t * LN10)) / sigma) ** 2
        - np.log(2.0 * math.pi * scatter_dex * sigma)
    )
    return float(np.sum(logsumexp(log_terms, b=weights, axis=0)))


def _nodes(centre: Array, scatter_dex: float, y: Array, sigma: Array) -> tuple[Array, Array]:
    """Gauss-Legendre nodes in t = log10(true) and their weights, (nodes, points).

    The ends of what the intrinsic scatter reaches and of what the noise reaches cut the axis into
    three pieces; the product lives in the middle one, which is their overlap or, for an outlier
    that neither reaches, the gap between them. Below a tenth of the noise the measurement no
    longer tells.
    """
    cuts = np.sort(
        [
            centre - _REACH * scatter_dex,
            centre + _REACH * scatter_dex,
            np.log10(np.maximum(y - _REACH * sigma, 0.1 * sigma)),
            np.log10(np.maximum(y, 0.0) + _REACH * sigma),
        ],
        axis=0,
    )
    half = 0.5 * np.diff(cuts, axis=0)[:, None, :]
    middle = 0.5 * (cuts[1:] + cuts[:-1])[:, None, :]
    t = middle + half * _LEGENDRE[0][None, :, None]
    weights = half * _LEGENDRE[1][None, :, None]
    return t.reshape(-1, y.size), weights.reshape(-1, y.size)


def fit_zero_point(y: Array, predicted: Array, variance_terms: Array) -> ZeroPoint | None:
    """Fit offset and scatter by maximum likelihood.

    Parameters
    ----------
    y, predicted, variance_terms
        As in `log_likelihood`; points should be independent.

    Returns
    -------
    ZeroPoint or None
        None for fewer than 10 points with a positive prediction: too few to give a scatter.
    """
    used = (predicted > 0) & np.isfinite(y) & np.all(np.isfinite(variance_terms), axis=0)
    if used.sum() < 10:
        return None
    y, predicted, variance_terms = y[used], predicted[used], variance_terms[:, used]

    def cost(x: Array) -> float:
        return -log_likelihood(
            x[0], max(math.exp(x[1]), LEAST_SCATTER_DEX), y, predicted, variance_terms
        )

    total = float(np.sum(y) / np.sum(predicted))
    begin = [math.log10(total) if total > 0 else -1.0, math.log(0.3)]
    best = minimize(cost, begin, method="Nelder-Mead", options={"xatol": 1e-5, "fatol": 1e-6})
    offset, scatter = float(best.x[0]), max(math.exp(best.x[1]), LEAST_SCATTER_DEX)
    is_limit = scatter < 2 * LEAST_SCATTER_DEX
    errors = _errors(cost, best.x, only_first=is_limit)
    return ZeroPoint(
        offset, errors[0], scatter, math.nan if is_limit else errors[1] * scatter, int(used.sum())
    )


def _errors(f: Callable[[Array], float], x: Array, *, only_first: bool) -> tuple[float, float]:
    """1-sigma errors from the curvature of the log-likelihood at its peak."""
    h = np.array([1e-3, 1e-2])
    e = np.diag(h)
    f0 = f(x)
    hess = np.empty((2, 2))
    for i in range(2):
        hess[i, i] = (f(x + e[i]) - 2 * f0 + f(x - e[i])) / h[i] ** 2
    mixed = f(x + e[0] + e[1]) - f(x + e[0] - e[1]) - f(x - e[0] + e[1]) + f(x - e[0] - e[1])
    hess[0, 1] = hess[1, 0] = mixed / (4 * h[0] * h[1])
    if only_first:
        return (1.0 / math.sqrt(hess[0, 0]) if hess[0, 0] > 0 else math.nan), math.nan
    variances = np.diag(np.linalg.inv(hess)) if np.linalg.det(hess) > 0 else np.full(2, np.nan)
    with np.errstate(invalid="ignore"):
        first, second = np.sqrt(variances)
    return float(first), float(second)

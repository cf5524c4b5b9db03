"""Likelihood of noisy linear measurements of two latent log-normal quantities.

A point has a latent X = log10 of its true abscissa, drawn from a population, and a latent Y that
scatters about f(X) with a Gaussian of `scatter_dex`. What is measured is (10^X, 10^Y) plus
Gaussian noise of a given covariance, of any sign. Both latents are integrated out.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.kernels.mixture import GaussianMixture

__all__ = ["Marginal", "Mean", "Measurements", "Rows", "marginal_likelihood"]

Array = NDArray[np.float64]
# Values of f at nodes (points, nodes) of the rows given; then its gradient, (parameters, ...).
Rows = slice | NDArray[np.intp]
Mean = Callable[[Array, Rows], Array]

LN10: Final = math.log(10.0)
# Where the integrand is exp(-DEPTH) of its peak it is left out.
DEPTH: Final = 16.0
_PANELS: Final = 4
_GRID: Final = 25
_ZOOMS: Final = 3
_UNIT: Final = np.linspace(0.0, 1.0, _GRID)[None, :]
# Points at a time, so that the nodes stay in the cache.
_BLOCK: Final = 128


@dataclass(frozen=True)
class Measurements:
    """Pairs of measured values with the covariance of their noise, in linear units.

    Attributes
    ----------
    x, y : (n,) float64 array
    var_x, var_y, cov : (n,) float64 array
        Positive variances; the correlation may be anything short of one.
    """

    x: Array
    y: Array
    var_x: Array
    var_y: Array
    cov: Array

    def take(self, rows: Rows) -> Measurements:
        """Return part of the points."""
        return Measurements(*(getattr(self, name)[rows] for name in _FIELDS))


_FIELDS: Final = ("x", "y", "var_x", "var_y", "cov")


@dataclass(frozen=True)
class Marginal:
    """Log-likelihood of each point, with derivatives.

    Parameters are those of the mean, then ln(scatter), then those of the population.

    Attributes
    ----------
    log_likelihood : (n,) float64 array
    scores : (p, n) float64 array
        First derivatives.
    information : (p, p) float64 array
        Minus the second derivatives of the sum; those of the mean itself are left out, so that
        it is exact where the mean is linear in its parameters.
    window : (n, 2) float64 array
        Where in X the integrand lives.
    """

    log_likelihood: Array
    scores: Array
    information: Array
    window: Array


def marginal_likelihood(
    data: Measurements,
    mean: Mean,
    gradient: Mean,
    scatter_dex: float,
    population: GaussianMixture,
    *,
    nodes: tuple[int, int] = (10, 18),
    near: Array | None = None,
) -> Marginal:
    """Integrate both latents out of every point.

    Parameters
    ----------
    data : Measurements
    mean, gradient : callable
        ``mean(X, rows)`` [dex] with X of shape (points, nodes); ``gradient`` puts its parameters
        on a leading axis.
    scatter_dex : float
        Standard deviation of Y about the mean, above zero.
    population : GaussianMixture
        Of X.
    nodes : (int, int)
        Gauss-Legendre nodes in each of four panels in X, and equally spaced ones in Y.
    near : (n, 2) float64 array, optional
        Windows of an evaluation with parameters close by, which saves most of the search.

    Returns
    -------
    Marginal

    Notes
    -----
    Each integral runs where its integrand is above exp(-16) of its peak, found on a grid that is
    refined three times. Nodes are spaced by the local width of the integrand: the inner ones
    equally in the variable tau of 10^Y = sigma p softplus(tau), p = 1 / (scatter ln 10), in which
    noise and scatter have constant width, so that the midpoint rule converges exponentially.
    Derivatives are posterior means over the nodes (Fisher's and Louis's identities).

    References
    ----------
    .. [1] Kelly 2007, ApJ 665, 1489: the Gaussian mixture as population of the latent abscissa.
    .. [2] Louis 1982, J. R. Stat. Soc. B 44, 226: observed information from complete data.
    """
    n = data.x.size
    blocks = [slice(i, min(i + _BLOCK, n)) for i in range(0, n, _BLOCK)]
    parts = [
        _block(
            data.take(rows),
            rows,
            mean,
            gradient,
            scatter_dex,
            population,
            nodes,
            None if near is None else near[rows],
        )
        for rows in blocks
    ]
    return Marginal(
        np.concatenate([part.log_likelihood for part in parts]),
        np.concatenate([part.scores for part in parts], axis=1),
        np.sum([part.information for part in parts], axis=0),
        np.concatenate([part.window for part in parts]),
    )


def _block(
    data: Measurements,
    rows: Rows,
    mean: Mean,
    gradient: Mean,
    s: float,
    population: GaussianMixture,
    nodes: tuple[int, int],
    near: Array | None,
) -> Marginal:
    conditional = _Conditional.of(data)
    window = _window(data, conditional, rows, mean, s, population, near)
    x, log_weight = _outer_nodes(data, conditional, rows, mean, s, population, nodes[0], window)
    y, sigma = conditional.at(x)
    mu = mean(x, rows)
    log_inner, moments = _inner(mu, s, y, sigma, nodes[1])
    log_terms = (
        log_weight
        + population.log_density(x)
        - 0.5 * (data.x[:, None] - np.exp(LN10 * x)) ** 2 / data.var_x[:, None]
        - 0.5 * np.log(2.0 * math.pi * data.var_x[:, None])
        + log_inner
    )
    top = log_terms.max(axis=1, keepdims=True)
    posterior = np.exp(log_terms - top)
    total = posterior.sum(axis=1, keepdims=True)
    posterior /= total
    log_likelihood = (top + np.log(total))[:, 0]
    return Marginal(
        log_likelihood,
        *_derivatives(x, posterior, moments, gradient(x, rows), s, population),
        window,
    )


@dataclass(frozen=True)
class _Conditional:
    """What the noise of x says about the noise of y."""

    x: Array
    y: Array
    slope: Array
    sigma: Array

    @classmethod
    def of(cls, data: Measurements) -> _Conditional:
        slope = data.cov / data.var_x
        # Noise that two axes share to the last bit would leave a delta function.
        variance = np.maximum(data.var_y - slope * data.cov, 1e-4 * data.var_y)
        return cls(data.x, data.y, slope, np.sqrt(variance))

    def at(self, x: Array) -> tuple[Array, Array]:
        """Value and error of y, given the latent x at (points, nodes)."""
        shift = self.slope[:, None] * (self.x[:, None] - np.exp(LN10 * x))
        return self.y[:, None] - shift, self.sigma[:, None]


def _closest(mu: Array, s: float, y: Array, sigma: Array, *, steps: int = 1) -> Array:
    """Least value of ((Y - mu)/s)^2/2 + ((y - 10^Y)/sigma)^2/2 over Y, to a few per cent.

    Three starts and steps of Gauss-Newton; what comes back is attained, so never too small.
    """
    with np.errstate(over="ignore"):
        width = sigma / (LN10 * np.maximum(y, sigma))
        from_y = np.log10(np.maximum(y, 0.1 * sigma))
        weighted = (mu / s**2 + from_y / width**2) / (1.0 / s**2 + 1.0 / width**2)
        starts = np.array([mu, np.broadcast_to(from_y, mu.shape), weighted])
        costs = _cost(starts, mu, s, y, sigma)
        if not steps:
            return np.asarray(costs.min(axis=0))
        pick = costs.argmin(axis=0)[None]
        best = np.take_along_axis(costs, pick, axis=0)[0]
        at = np.take_along_axis(starts, pick, axis=0)[0]
        for _ in range(steps):
            value = np.exp(LN10 * at)
            pull = LN10 * value / sigma
            step = ((mu - at) / s**2 + pull * (y - value) / sigma) / (1.0 / s**2 + pull**2)
            at = at + np.clip(step, -1.0, 1.0)
            best = np.minimum(best, _cost(at, mu, s, y, sigma))
    return np.asarray(best)


def _cost(at: Array, mu: Array, s: float, y: Array, sigma: Array) -> Array:
    return np.asarray(
        0.5 * ((at - mu) / s) ** 2 + 0.5 * ((y - np.exp(LN10 * np.minimum(at, 150.0))) / sigma) ** 2
    )


def _window(
    data: Measurements,
    conditional: _Conditional,
    rows: Rows,
    mean: Mean,
    s: float,
    population: GaussianMixture,
    near: Array | None,
) -> Array:
    """Ends in X of where the integrand is above exp(-DEPTH) of its peak, (points, 2)."""
    x, sigma_x = data.x[:, None], np.sqrt(data.var_x)[:, None]
    if near is not None:
        margin = 0.5 * (near[:, 1:] - near[:, :1])
        low, high, n_zooms = near[:, :1] - margin, near[:, 1:] + margin, 1
    else:
        low = np.minimum(
            np.log10(np.maximum(x - 7.0 * sigma_x, 0.1 * sigma_x)),
            np.min(population.means - 8.0 * population.widths),
        )
        high = np.maximum(
            np.log10(np.maximum(x, 0.0) + 7.0 * sigma_x),
            np.max(population.means + 8.0 * population.widths),
        )
        n_zooms = _ZOOMS
    for _ in range(n_zooms):
        grid = low + (high - low) * _UNIT
        y, sigma_y = conditional.at(grid)
        cost = (
            _closest(mean(grid, rows), s, y, sigma_y, steps=0)
            + 0.5 * ((x - np.exp(LN10 * grid)) / sigma_x) ** 2
            - population.log_density(grid)
        )
        inside = cost <= cost.min(axis=1, keepdims=True) + DEPTH
        if near is not None and (inside[:, 0].any() or inside[:, -1].any()):
            return _window(data, conditional, rows, mean, s, population, None)
        first = np.maximum(inside.argmax(axis=1) - 1, 0)
        last = np.minimum(_GRID - inside[:, ::-1].argmax(axis=1), _GRID - 1)
        low = np.take_along_axis(grid, first[:, None], axis=1)
        high = np.take_along_axis(grid, last[:, None], axis=1)
    return np.concatenate([low, high], axis=1)


def _outer_nodes(
    data: Measurements,
    conditional: _Conditional,
    rows: Rows,
    mean: Mean,
    s: float,
    population: GaussianMixture,
    n_nodes: int,
    window: Array,
) -> tuple[Array, Array]:
    """Nodes in X, (points, 4 n_nodes), and the logarithms of their weights."""
    sigma_x = np.sqrt(data.var_x)[:, None]
    grid = window[:, :1] + (window[:, 1:] - window[:, :1]) * _UNIT
    mu = mean(grid, rows)
    # How fast the mean runs away from what is measured, over how far it may be from it.
    expected = np.exp(LN10 * np.minimum(mu, 100.0))
    y, sigma_y = conditional.at(grid)
    apart = np.diff(expected - y, axis=1) / np.diff(grid, axis=1)
    spread = LN10 * s * 0.5 * (expected[:, 1:] + expected[:, :-1])
    middle = 0.5 * (grid[:, 1:] + grid[:, :-1])
    per_dex = np.sqrt(
        population.local_precision(middle)
        + (LN10 * np.exp(LN10 * middle) / sigma_x) ** 2
        + apart**2 / (sigma_y**2 + spread**2)
    )
    cuts = _equal_shares(grid, per_dex)
    node, weight = _gauss_legendre(n_nodes)
    half = 0.5 * np.diff(cuts, axis=1)[:, :, None]
    centre = 0.5 * (cuts[:, 1:] + cuts[:, :-1])[:, :, None]
    n = data.x.size
    with np.errstate(divide="ignore"):
        return (centre + half * node).reshape(n, -1), np.log(half * weight).reshape(n, -1)


@cache
def _gauss_legendre(n: int) -> tuple[Array, Array]:
    node, weight = np.polynomial.legendre.leggauss(n)
    return np.asarray(node), np.asarray(weight)


def _equal_shares(grid: Array, density: Array) -> Array:
    """Cut each row of a grid into panels that hold equal shares of a density."""
    summed = np.zeros(grid.shape)
    np.cumsum(density * np.diff(grid, axis=1), axis=1, out=summed[:, 1:])
    wanted = summed[:, -1:] * np.linspace(0.0, 1.0, _PANELS + 1)[None, 1:-1]
    cell = (summed[:, None, :] <= wanted[:, :, None]).sum(axis=2) - 1
    cell = np.clip(cell, 0, grid.shape[1] - 2)
    below = np.take_along_axis(summed, cell, axis=1)
    inside = (wanted - below) / np.take_along_axis(density, cell, axis=1)
    cuts = np.take_along_axis(grid, cell, axis=1) + inside
    return np.concatenate([grid[:, :1], cuts, grid[:, -1:]], axis=1)


def _inner(mu: Array, s: float, y: Array, sigma: Array, n_nodes: int) -> tuple[Array, Array]:
    """Log of the integral over Y, and moments 1 to 4 of (Y - mu)/s under the integrand."""
    reach = np.sqrt(2.0 * (_closest(mu, s, y, sigma) + DEPTH))
    p = 1.0 / (s * LN10)
    with np.errstate(over="ignore", divide="ignore"):
        low = np.maximum(mu - reach * s, np.log10(np.maximum(y - reach * sigma, 1e-300)))
        high = np.minimum(mu + reach * s, np.log10(np.maximum(y + reach * sigma, 1e-300)))
        scale = np.log10(sigma * p)
        low, high = _tau(low - scale), _tau(high - scale)
    step = (high - low) / n_nodes
    tau = low[..., None] + step[..., None] * (np.arange(n_nodes) + 0.5)
    a = np.maximum(tau, 0.0) + np.log1p(np.exp(-np.abs(tau)))
    d = (np.log(a) * (1.0 / LN10) + (scale - mu)[..., None]) / s
    noise = y[..., None] / sigma[..., None] - a * p
    log_value = -0.5 * (d**2 + noise**2)
    top = log_value.max(axis=-1, keepdims=True)
    # dY = (1 - exp(-a)) / (a ln 10) d tau
    value = np.exp(log_value - top) * (-np.expm1(-a) / a)
    total = value.sum(axis=-1)
    moments = np.empty((5, *mu.shape))
    moments[0] = 1.0
    for k in range(1, 5):
        value *= d
        moments[k] = value.sum(axis=-1) / total
    constant = np.log(step / (LN10 * 2.0 * math.pi * s * sigma))
    return top[..., 0] + np.log(total) + constant, moments


def _tau(log_ratio: Array) -> Array:
    """Solve softplus(tau) = 10^log_ratio."""
    a = np.exp(LN10 * np.minimum(log_ratio, 300.0))
    return np.asarray(a + np.where(a < 1e-8, LN10 * log_ratio, np.log(-np.expm1(-a))))


def _derivatives(
    x: Array,
    posterior: Array,
    moments: Array,
    slope: Array,
    s: float,
    population: GaussianMixture,
) -> tuple[Array, Array]:
    """Scores per point and the observed information."""
    m = slope.shape[0]
    share, of_component = population.complete_scores(x)
    of_x = np.einsum("kn...,kq...n->q...n", share[:, None], of_component[..., None])[..., 0]
    first, second, third, fourth = moments[1:]
    line = np.concatenate([slope * first / s, (second - 1.0)[None]])
    mean_scores = np.concatenate([line, of_x])
    scores = np.einsum("pnj,nj->pn", mean_scores, posterior)

    size = mean_scores.shape[0]
    bare = np.zeros((size, size))
    square = np.zeros((size, size))
    weighted = slope * posterior
    bare[:m, :m] = np.einsum("anj,bnj->ab", slope, weighted) / s**2
    bare[:m, m] = bare[m, :m] = 2.0 * np.einsum("anj,nj->a", weighted, first) / s
    bare[m, m] = 2.0 * np.sum(posterior * second)
    bare[m + 1 :, m + 1 :] = population.complete_information(x, posterior)
    square[:m, :m] = np.einsum("anj,bnj->ab", slope, weighted * second) / s**2
    square[:m, m] = square[m, :m] = np.einsum("anj,nj->a", weighted, third - first) / s
    square[m, m] = np.sum(posterior * (fourth - 2.0 * second + 1.0))
    cross = np.einsum("anj,bnj->ab", line, of_x * posterior)
    square[: m + 1, m + 1 :] = cross
    square[m + 1 :, : m + 1] = cross.T
    for k in range(population.size):
        square[m + 1 :, m + 1 :] += np.einsum(
            "anj,bnj->ab", of_component[k], of_component[k] * (share[k] * posterior)
        )
    return scores, bare - square + scores @ scores.T

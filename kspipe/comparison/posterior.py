"""Draws from the posterior of a fit, by importance from its peak."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln

from kspipe.comparison.latent_fit import LatentModel, Optimum
from kspipe.kernels.latent import Measurements
from kspipe.kernels.statistics import pareto_shape

__all__ = ["Posterior", "draw_posterior"]

Array = NDArray[np.float64]

_FREEDOM: Final = 7.0
# Posterior draws need the likelihood to a hundredth, not to a millionth.
_NODES: Final = (7, 13)
# Weights with a heavier tail than this have no reliable mean.
_HEAVY_TAIL: Final = 0.7
_LEAST_EFFECTIVE: Final = 200.0


@dataclass(frozen=True)
class Posterior:
    """Draws with what is needed to trust them.

    Attributes
    ----------
    names : tuple of str
    draws : (n, len(names)) float64 array
        Resampled with equal weights; empty where it has not converged.
    effective : float
        Effective number of draws.
    tail : float
        Shape of the generalised Pareto tail of the weights.
    is_converged : bool
    message : str
    """

    names: tuple[str, ...]
    draws: Array
    effective: float
    tail: float
    is_converged: bool
    message: str

    def interval(self, name: str, probability: float) -> tuple[float, float]:
        """Central interval of one parameter; NaN where there are no draws."""
        if not self.draws.size:
            return math.nan, math.nan
        half = 50.0 * (1.0 - probability)
        low, high = np.percentile(self.draws[:, self.names.index(name)], [half, 100.0 - half])
        return float(low), float(high)


def draw_posterior(
    model: LatentModel,
    data: Measurements,
    best: Optimum,
    n_draws: int,
    rng: np.random.Generator,
) -> Posterior:
    """Sample the posterior: Student's t about the peak, weighted by the true posterior.

    Parameters
    ----------
    model : LatentModel
    data : Measurements
    best : Optimum
        Its peak, the scatter not at its floor.
    n_draws : int
    rng : numpy.random.Generator

    Returns
    -------
    Posterior
        Parameters of the mean and the scatter [dex]; flat in ln(scatter).

    Notes
    -----
    Every draw stands alone, so that there is no chain to burn in or to thin; what can fail is
    that the proposal misses a tail, which the shape of the largest weights shows.

    References
    ----------
    .. [1] Vehtari et al. 2024, J. Mach. Learn. Res. 25 (72): the Pareto shape as diagnostic, to
       be below 0.7.
    """
    m, p = model.n_mean, best.parameters.size
    names = (*model.names, "scatter_dex")
    root = np.linalg.cholesky(np.linalg.inv(best.information))
    normal = rng.normal(size=(n_draws, p))
    stretch = np.sqrt(_FREEDOM / rng.chisquare(_FREEDOM, n_draws))
    standard = normal * stretch[:, None]
    places = best.parameters + standard @ root.T
    log_weight = np.empty(n_draws)
    for i, place in enumerate(places):
        posterior = model.marginal(data, place, _NODES).log_likelihood.sum()
        log_weight[i] = posterior + model.log_prior(place)[0]
    log_weight -= _log_t(np.sum(standard**2, axis=1), p)
    weight = np.exp(log_weight - log_weight.max())
    weight /= weight.sum()
    effective, tail = float(1.0 / np.sum(weight**2)), pareto_shape(weight)
    is_converged = effective >= _LEAST_EFFECTIVE and tail < _HEAVY_TAIL
    state = f"{effective:.0f} effective draws of {n_draws}, tail {tail:.2f}"
    message = state if is_converged else f"the sampler has not converged ({state}): no interval"
    keep = rng.choice(n_draws, n_draws, p=weight) if is_converged else np.empty(0, dtype=int)
    draws = places[keep][:, : m + 1].copy()
    draws[:, m] = np.exp(draws[:, m])
    return Posterior(names, draws, effective, tail, is_converged, message)


def _log_t(squared: Array, size: int) -> Array:
    """Log density of Student's t in `size` dimensions at a squared distance, but for a constant."""
    constant = gammaln(0.5 * (_FREEDOM + size)) - gammaln(0.5 * _FREEDOM)
    return np.asarray(constant - 0.5 * (_FREEDOM + size) * np.log1p(squared / _FREEDOM))

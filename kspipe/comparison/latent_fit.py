"""Maximum likelihood of a mean relation between latents, with scatter and a population."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize

from kspipe.kernels.latent import Marginal, Mean, Measurements, marginal_likelihood
from kspipe.kernels.mixture import GaussianMixture

__all__ = [
    "LEAST_SCATTER_DEX",
    "GaussianPrior",
    "LatentModel",
    "Optimum",
    "PopulationPrior",
    "maximise",
]

Array = NDArray[np.float64]

# Below this the scatter is not told from zero.
LEAST_SCATTER_DEX: Final = 1e-3
# A gradient this small moves no parameter by a hundredth of its error.
_GRADIENT: Final = 1e-2
_FINE: Final = (10, 18)
# Nodes to climb with and to check with; more where noise and relation run nearly in parallel.
_NODES: Final = (((8, 14), _FINE), ((16, 18), (20, 24)))
# Most steps; a fit that needs more is reported as not converged.
_STEPS: Final = 60


@dataclass(frozen=True)
class GaussianPrior:
    """Normal prior on one parameter; an infinite width is none."""

    mean: float
    width: float


@dataclass(frozen=True)
class PopulationPrior:
    """What is assumed of the Gaussian mixture of latent log10 x.

    Weights have a Dirichlet(2) prior, which keeps a component from dying; means are normal about
    `centre` with `spread`, and ln of what widths exceed
    `least_width` by, in quadrature, about ln(`width`).

    Attributes
    ----------
    components : int
    centre, spread, width : float
        [dex]
    least_width : float
        No component is narrower [dex].
    ln_width_spread : float
    """

    components: int
    centre: float
    spread: float = 1.5
    width: float = 0.4
    ln_width_spread: float = 0.5
    least_width: float = 0.1

    def start(self) -> GaussianMixture:
        """Return components side by side about the centre."""
        k = self.components
        means = self.centre - 0.1 + 0.5 * (np.arange(k) - 0.5 * (k - 1))
        weights, widths = np.full((2, k), [[1.0 / k], [0.35]])
        return GaussianMixture(weights, np.asarray(means, dtype=float), widths, self.least_width)

    def log_density(self, parameters: Array) -> tuple[float, Array, Array]:
        """Log prior, its gradient, and minus its second derivatives, at a mixture's parameters."""
        k = self.components
        mixture = GaussianMixture.from_parameters(parameters, self.least_width)
        value = float(np.log(mixture.weights).sum())
        gradient, curvature = np.zeros(parameters.size), np.zeros((parameters.size,) * 2)
        w = mixture.weights[:-1]
        gradient[: k - 1] = 1.0 - k * w
        curvature[: k - 1, : k - 1] = k * (np.diag(w) - np.outer(w, w))
        for part, centre, spread in (
            (slice(k - 1, 2 * k - 1), self.centre, self.spread),
            (slice(2 * k - 1, None), math.log(self.width), self.ln_width_spread),
        ):
            offset = parameters[part] - centre
            value -= 0.5 * float(np.sum((offset / spread) ** 2))
            gradient[part] = -offset / spread**2
            index = np.arange(parameters.size)[part]
            curvature[index, index] = spread**-2.0
        return value, gradient, curvature


@dataclass(frozen=True)
class LatentModel:
    """A mean relation f(X; theta) with priors.

    Attributes
    ----------
    names : tuple of str
        Of the parameters of the mean.
    mean : callable
        ``mean(theta)`` returns f(X, rows) and its gradient, as `marginal_likelihood` takes them.
    start : (m,) float64 array
    priors : tuple of GaussianPrior
        One for each parameter.
    population : PopulationPrior
    is_linear : bool
        Whether the mean is linear in its parameters; else curvatures are differenced.
    rows : (n,) int array or None
        Points of a larger set that the model is for now used on.
    """

    names: tuple[str, ...]
    mean: Callable[[Array], tuple[Mean, Mean]]
    start: Array
    priors: tuple[GaussianPrior, ...]
    population: PopulationPrior
    is_linear: bool = True
    rows: NDArray[np.intp] | None = None

    def at(self, rows: NDArray[np.intp]) -> LatentModel:
        """Return the same model for part of the points it was made for."""
        return replace(self, rows=rows)

    @property
    def n_mean(self) -> int:
        """Number of parameters of the mean."""
        return len(self.names)

    def begin(self, scatter_dex: float = 0.3) -> Array:
        """All parameters at the start of a fit."""
        population = self.population.start().parameters
        return np.concatenate([self.start, [math.log(scatter_dex)], population])

    def marginal(
        self,
        data: Measurements,
        parameters: Array,
        nodes: tuple[int, int] = _FINE,
        near: Array | None = None,
    ) -> Marginal:
        """Likelihood of every point, without priors."""
        m = self.n_mean
        mean, gradient = (self._at_rows(f) for f in self.mean(parameters[:m]))
        return marginal_likelihood(
            data,
            mean,
            gradient,
            max(math.exp(parameters[m]), LEAST_SCATTER_DEX),
            GaussianMixture.from_parameters(parameters[m + 1 :], self.population.least_width),
            nodes=nodes,
            near=near,
        )

    def _at_rows(self, function: Mean) -> Mean:
        if self.rows is None:
            return function
        rows = self.rows
        return lambda x, part: function(x, rows[part])

    def log_prior(self, parameters: Array) -> tuple[float, Array, Array]:
        """Log prior, its gradient, and minus its second derivatives."""
        m = self.n_mean
        value, of_population, curvature = self.population.log_density(parameters[m + 1 :])
        gradient, information = np.zeros(parameters.size), np.zeros((parameters.size,) * 2)
        gradient[m + 1 :] = of_population
        information[m + 1 :, m + 1 :] = curvature
        for i, prior in enumerate(self.priors):
            value -= 0.5 * ((parameters[i] - prior.mean) / prior.width) ** 2
            gradient[i] = -(parameters[i] - prior.mean) / prior.width**2
            information[i, i] = prior.width**-2.0
        return value, gradient, information


@dataclass(frozen=True)
class Optimum:
    """The peak of a likelihood times priors.

    Attributes
    ----------
    parameters : (p,) float64 array
        Of the mean, ln(scatter), of the population.
    log_likelihood, log_posterior : float
        Without and with the priors.
    information : (p, p) float64 array
        Minus the second derivatives of the log posterior.
    scores : (p, n) float64 array
        Of each point.
    is_converged : bool
    """

    parameters: Array
    log_likelihood: float
    log_posterior: float
    information: Array
    scores: Array
    is_converged: bool


class _Objective:
    """Minus the log posterior of the free parameters, evaluated once per place."""

    def __init__(self, model: LatentModel, data: Measurements, full: Array, free: Array) -> None:
        self.model, self.data, self.full, self.free = model, data, full.copy(), free
        self._at: Array | None = None
        self.near: Array | None = None
        self.nodes = _FINE

    def _evaluate(self, x: Array) -> None:
        if self._at is not None and np.array_equal(self._at, x):
            return
        self.full[self.free] = x
        marginal = self.model.marginal(self.data, self.full, self.nodes, self.near)
        self.near = marginal.window
        value, gradient, information = self.model.log_prior(self.full)
        self.marginal = marginal
        self.log_likelihood = float(marginal.log_likelihood.sum())
        self.value = self.log_likelihood + value
        self.gradient = marginal.scores.sum(axis=1) + gradient
        self.information = marginal.information + information
        scatter = self.model.n_mean
        if math.exp(self.full[scatter]) < LEAST_SCATTER_DEX:
            self.gradient[scatter] = 0.0
        self._at = x.copy()

    def refine(self, x: Array, nodes: tuple[int, int]) -> None:
        """Evaluate with other nodes, from here on."""
        self.nodes, self._at, self.near = nodes, None, None
        self._evaluate(x)

    def cost(self, x: Array) -> float:
        self._evaluate(x)
        return -self.value

    def slope(self, x: Array) -> Array:
        self._evaluate(x)
        return np.asarray(-self.gradient[self.free])

    def curvature(self, x: Array) -> Array:
        self._evaluate(x)
        return np.asarray(self.information[np.ix_(self.free, self.free)])


def maximise(
    model: LatentModel,
    data: Measurements,
    start: Array | None = None,
    *,
    held: tuple[int, ...] = (),
) -> Optimum:
    """Climb to the peak with second derivatives.

    Parameters
    ----------
    model : LatentModel
    data : Measurements
    start : (p,) float64 array, optional
    held : tuple of int
        Parameters that stay as they start, for a profile.

    Returns
    -------
    Optimum
    """
    full = model.begin() if start is None else start
    free = np.setdiff1d(np.arange(full.size), held)
    objective = _Objective(model, data, full, free)
    place = full[free]
    for climbing, checking in _NODES:
        objective.refine(place, climbing)
        result = minimize(
            objective.cost,
            place,
            jac=objective.slope,
            hess=objective.curvature,
            method="trust-exact",
            options={"gtol": _GRADIENT, "maxiter": _STEPS, "initial_trust_radius": 0.5},
        )
        place = result.x
        objective.refine(place, checking)
        is_converged = bool(np.abs(objective.gradient[free]).max() < 10 * _GRADIENT)
        if is_converged:
            break
    information = objective.information
    if not model.is_linear:
        information = _differenced(model, data, objective.full, information)
    return Optimum(
        objective.full.copy(),
        objective.log_likelihood,
        objective.value,
        information,
        objective.marginal.scores,
        is_converged,
    )


def _differenced(model: LatentModel, data: Measurements, at: Array, near: Array) -> Array:
    """Second derivatives along the parameters of the mean from differences of the gradient."""
    out = near.copy()
    rows = []
    for i in range(model.n_mean):
        step = 0.1 / math.sqrt(max(near[i, i], 1e-6))
        shift = np.zeros(at.size)
        shift[i] = step
        gradients = [
            model.marginal(data, place, _FINE).scores.sum(axis=1) + model.log_prior(place)[1]
            for place in (at + shift, at - shift)
        ]
        rows.append((gradients[1] - gradients[0]) / (2.0 * step))
    for i, row in enumerate(rows):
        out[i, :] = out[:, i] = row
    m = model.n_mean
    out[:m, :m] = 0.5 * (out[:m, :m] + out[:m, :m].T)
    return out

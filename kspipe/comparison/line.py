"""A straight line through noisy measurements, fitted with one generative model."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.comparison.latent_fit import (
    LEAST_SCATTER_DEX,
    GaussianPrior,
    LatentModel,
    Optimum,
    PopulationPrior,
    maximise,
)
from kspipe.comparison.phases import Phase, average_optima
from kspipe.comparison.samples import LinearSamples
from kspipe.kernels.latent import Mean, Measurements, Rows
from kspipe.kernels.mixture import GaussianMixture

__all__ = ["LineFit", "PhasedLine", "fit_line", "fit_line_phases", "line_model"]

Array = NDArray[np.float64]

# Twice the log-likelihood ratio at one-sided 95 %.
_ONE_SIDED_95: Final = 2.705543454095404
# The same, above which a scatter is a value and not a limit: 3 sigma.
_DETECTION: Final = 9.0
_NONE: Final = GaussianPrior(0.0, math.inf)


@dataclass(frozen=True)
class LineFit:
    """log10 y = intercept + slope (log10 x - pivot), with log-normal scatter in y.

    Attributes
    ----------
    n : int
        Independent samples used.
    slope, slope_error : float
    intercept, intercept_error : float
        log10 of the median of y at the pivot [dex].
    pivot : float
        log10 x at which slope and intercept are uncorrelated.
    scatter_dex, scatter_error : float
        Intrinsic scatter; where `is_limit`, the upper limit at 95 % and NaN.
    covariance : (3, 3) float64 array
        Of slope, intercept, scatter.
    is_limit : bool
        Whether the scatter is an upper limit.
    mean_over_median_dex : float
        What log10 of the mean of y lies above that of the median.
    log_likelihood : float
    n_parameters : int
        Free ones, those of the population included.
    population : dict of str to list of float
        Weights, means and widths of the mixture of log10 x.
    message : str
        Why there is no result, or what to beware of; empty where all is well.
    is_fitted : bool
        Where False every number is NaN.
    """

    n: int
    slope: float = math.nan
    slope_error: float = math.nan
    intercept: float = math.nan
    intercept_error: float = math.nan
    pivot: float = math.nan
    scatter_dex: float = math.nan
    scatter_error: float = math.nan
    covariance: Array = field(default_factory=lambda: np.full((3, 3), math.nan))
    is_limit: bool = False
    mean_over_median_dex: float = math.nan
    log_likelihood: float = math.nan
    n_parameters: int = 0
    population: dict[str, list[float]] = field(default_factory=dict)
    message: str = ""
    is_fitted: bool = False

    def at(self, log_x: float) -> tuple[float, float]:
        """Median of log10 y at log10 x, and its error."""
        lever = np.array([log_x - self.pivot, 1.0])
        variance = float(lever @ self.covariance[:2, :2] @ lever)
        return self.intercept + self.slope * lever[0], math.sqrt(variance)


def fit_line(samples: LinearSamples, *, components: int = 2) -> LineFit:
    """Fit slope, intercept and intrinsic scatter by maximum likelihood.

    Parameters
    ----------
    samples : LinearSamples
        Independent; negative and undetected values as measured.
    components : int
        Gaussians in the population of log10 x.

    Returns
    -------
    LineFit
        Without numbers, and with a message, where there are fewer than 10 samples, nothing is
        detected, or the fit did not converge.

    Notes
    -----
    The errors are from the observed information, population parameters marginalised.
    """
    positions = np.arange(samples.x.size, dtype=float)[:, None] * [1.0, 0.0]
    return fit_line_phases([Phase(samples, positions)], 1e-3, components=components).mean


@dataclass(frozen=True)
class PhasedLine:
    """A line fitted to every phase of a lattice.

    Attributes
    ----------
    mean : LineFit
        Average over the phases; its error counts how samples correlate, within and between them.
        ``n`` is that of one phase.
    phases : tuple of LineFit
        Each alone, its samples taken as independent.
    models, optima : tuple
        What the fits stand on.
    """

    mean: LineFit
    phases: tuple[LineFit, ...] = ()
    models: tuple[LatentModel, ...] = ()
    optima: tuple[Optimum, ...] = ()


def fit_line_phases(
    phases: Sequence[Phase], correlation_length: float, *, components: int = 2
) -> PhasedLine:
    """Fit a line to each phase of a lattice and average.

    Parameters
    ----------
    phases : sequence of Phase
        The first is the one whose samples are counted.
    correlation_length : float
        At which residuals correlate by 1/e, in the unit of the positions.
    components : int

    Returns
    -------
    PhasedLine
    """
    first = phases[0].samples
    obstacle = first.obstacle()
    if obstacle:
        return PhasedLine(LineFit(first.n, message=obstacle))
    if first.is_one_map:
        return PhasedLine(_one_map(first))
    usable = [phase for phase in phases if phase.samples.obstacle() is None]
    models: list[LatentModel] = []
    optima: list[Optimum] = []
    fits: list[LineFit] = []
    start: Array | None = None
    reference = first.measurements()
    for phase in usable:
        data = phase.samples.measurements()
        model = line_model(reference, components)
        best = _peak(model, data, start)
        fit = _alone(model, data, best)
        if not fit.is_fitted:
            return PhasedLine(fit)
        start = best.parameters
        models.append(model)
        optima.append(best)
        fits.append(fit)
    mean = _average(models[0], optima, fits, usable, correlation_length)
    return PhasedLine(mean, tuple(fits), tuple(models), tuple(optima))


def _peak(model: LatentModel, data: Measurements, start: Array | None = None) -> Optimum:
    """Maximise, with the scatter held at its floor where it wants to be below."""
    best = maximise(model, data, start)
    if best.is_converged and math.exp(best.parameters[2]) < LEAST_SCATTER_DEX:
        best = maximise(model, data, _with_scatter(best.parameters, LEAST_SCATTER_DEX), held=(2,))
    return best


def line_model(data: Measurements, components: int = 2) -> LatentModel:
    """A line through the mean of the data, log10 y against log10 x."""
    centre = math.log10(data.x.sum() / data.x.size)
    level = math.log10(data.y.sum() / data.x.size)

    def mean(theta: Array) -> tuple[Mean, Mean]:
        def value(x: Array, _rows: Rows) -> Array:
            return np.asarray(theta[1] + theta[0] * (x - centre))

        def gradient(x: Array, _rows: Rows) -> Array:
            return np.stack([x - centre, np.ones_like(x)])

        return value, gradient

    return LatentModel(
        names=("slope", "intercept"),
        mean=mean,
        start=np.array([1.0, level - 0.1]),
        priors=(_NONE, _NONE),
        population=PopulationPrior(components, centre),
    )


def _with_scatter(parameters: Array, scatter_dex: float) -> Array:
    out = parameters.copy()
    out[2] = math.log(scatter_dex)
    return out


def _alone(model: LatentModel, data: Measurements, best: Optimum) -> LineFit:
    """One phase, its samples taken as independent."""
    n = data.x.size
    if not best.is_converged:
        return LineFit(n, message="the fit did not converge: no result")
    limit = _scatter_limit(model, data, best)
    keep = _free(best, limit is not None)
    information = best.information[np.ix_(keep, keep)]
    if np.linalg.eigvalsh(information)[0] <= 0:
        return LineFit(n, message="the likelihood has no peak in slope and intercept: no result")
    size = 2 if limit is not None else 3
    covariance = np.asarray(np.linalg.inv(information)[:size, :size], dtype=float)
    return _written(n, best, best.parameters[:3], covariance, model.population, limit)


def _average(
    model: LatentModel,
    optima: Sequence[Optimum],
    fits: Sequence[LineFit],
    phases: Sequence[Phase],
    correlation_length: float,
) -> LineFit:
    """All phases together; the scatter is a limit where it is one in half of them or more."""
    is_limit = sum(fit.is_limit for fit in fits) * 2 >= len(fits)
    limit = float(np.median([f.scatter_dex for f in fits if f.is_limit])) if is_limit else None
    parameters, covariance = average_optima(
        optima,
        [phase.kept_positions() for phase in phases],
        _free(optima[0], is_limit),
        2 if is_limit else 3,
        correlation_length,
    )
    return _written(fits[0].n, optima[0], parameters, covariance, model.population, limit)


def _free(best: Optimum, is_limit: bool) -> NDArray[np.intp]:
    """Parameters that are not held: all but the scatter where that is a limit."""
    return np.array([i for i in range(best.parameters.size) if not (is_limit and i == 2)])


def _written(
    n: int,
    best: Optimum,
    parameters: Array,
    covariance: Array,
    population: PopulationPrior,
    limit: float | None,
) -> LineFit:
    """Turn slope, intercept and ln(scatter) into numbers at the decorrelated pivot."""
    lever = -covariance[0, 1] / covariance[0, 0]
    scatter = math.exp(parameters[2]) if limit is None else math.nan
    turn: Array = np.identity(covariance.shape[0])
    turn[1, 0] = lever
    if limit is None:
        turn[2, 2] = scatter
    full = np.full((3, 3), math.nan)
    full[: len(turn), : len(turn)] = turn @ covariance @ turn.T
    errors = np.sqrt(np.diag(full))
    return LineFit(
        n=n,
        slope=float(parameters[0]),
        slope_error=float(errors[0]),
        intercept=float(parameters[1] + lever * parameters[0]),
        intercept_error=float(errors[1]),
        pivot=float(population.centre + lever),
        scatter_dex=scatter if limit is None else limit,
        scatter_error=float(errors[2]),
        covariance=full,
        is_limit=limit is not None,
        mean_over_median_dex=0.5 * scatter**2 * math.log(10.0),
        log_likelihood=best.log_likelihood,
        n_parameters=best.parameters.size,
        population=_population(best.parameters[3:], population.least_width),
        is_fitted=True,
    )


def _one_map(samples: LinearSamples) -> LineFit:
    """What a map against itself gives: there is nothing to fit."""
    data = samples.measurements()
    factor = float(np.sum(data.cov) / np.sum(data.var_x))
    return LineFit(
        samples.n,
        slope=1.0,
        slope_error=0.0,
        intercept=math.log10(factor) if factor > 0 else math.nan,
        intercept_error=0.0,
        pivot=0.0,
        scatter_dex=0.0,
        scatter_error=0.0,
        message="x and y carry the same noise: one map stands on both axes, nothing is measured",
    )


def _population(parameters: Array, least_width: float) -> dict[str, list[float]]:
    mixture = GaussianMixture.from_parameters(parameters, least_width)
    return {name: getattr(mixture, name).tolist() for name in ("weights", "means", "widths")}


def _scatter_limit(model: LatentModel, data: Measurements, best: Optimum) -> float | None:
    """Upper limit at 95 % where the scatter is not told from zero; else None."""
    information = best.information[2, 2]
    at_floor = math.exp(best.parameters[2]) <= LEAST_SCATTER_DEX * 1.001
    if not at_floor and information > 0 and information**-0.5 < 0.2:
        return None
    floor = maximise(model, data, _with_scatter(best.parameters, LEAST_SCATTER_DEX), held=(2,))
    peak = max(best.log_posterior, floor.log_posterior)
    if 2.0 * (peak - floor.log_posterior) > _DETECTION:
        return None
    low, high, at = math.exp(best.parameters[2]), None, best
    scatter = max(2.0 * low, 0.02)
    for _ in range(12):
        at = maximise(model, data, _with_scatter(at.parameters, scatter), held=(2,))
        if 2.0 * (peak - at.log_posterior) < _ONE_SIDED_95:
            low = scatter
        else:
            high = scatter
        if high is None:
            scatter *= 1.6
        elif high / low < 1.03:
            break
        else:
            scatter = math.sqrt(low * high)
    return scatter

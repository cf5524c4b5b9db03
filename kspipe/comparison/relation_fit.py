"""A published relation fitted to noisy maps, by the same generative model as the line.

The relation acts on the latent surface density of gas, never on the noisy one.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Final, Literal

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
from kspipe.comparison.phases import average_optima
from kspipe.comparison.samples import LinearSamples
from kspipe.kernels.latent import Mean, Measurements, Rows
from kspipe.relations import LAWS

__all__ = [
    "ALPHA_CO_SCALE",
    "METALLICITY",
    "ZERO_POINT",
    "FreeParameter",
    "RelationFit",
    "RelationUse",
    "fit_relation",
    "relation_model",
]

Array = NDArray[np.float64]
Quantity = Literal["sigma_sfr", "f_mol"]

ZERO_POINT: Final = "zero_point"
ALPHA_CO_SCALE: Final = "alpha_co_scale"
METALLICITY: Final = "metallicity"
# No prediction is below this; where a relation has none, no stars form.
_FLOOR_DEX: Final = -30.0
_STEP_DEX: Final = 1e-4


@dataclass(frozen=True)
class FreeParameter:
    """A number of a relation that the data may move.

    Attributes
    ----------
    name : str
        `ZERO_POINT`, `ALPHA_CO_SCALE`, `METALLICITY`, or a parameter of the law.
    prior_width_dex : float
        Standard deviation of a normal prior on log10(value / stated value); for the metallicity,
        on 12 + log10(O/H). Infinite for a flat prior.
    """

    name: str
    prior_width_dex: float = math.inf


@dataclass(frozen=True)
class RelationUse:
    """A relation as a recipe uses it.

    Attributes
    ----------
    name, law : str
        The recipe's name and the key of the record.
    parameters : mapping of str to float
    free : tuple of FreeParameter
        The zero point among them where it is free.
    quantity : {"sigma_sfr", "f_mol"}
        What is compared; for ``f_mol`` the ordinate of the samples is Sigma_mol [Msun/pc2].
    """

    name: str
    law: str
    parameters: Mapping[str, float]
    free: tuple[FreeParameter, ...] = (FreeParameter(ZERO_POINT),)
    quantity: Quantity = "sigma_sfr"


@dataclass(frozen=True)
class RelationFit:
    """A relation with its free parameters at the peak.

    Attributes
    ----------
    n : int
        Independent samples used.
    offsets_dex, errors_dex : dict of str to float
        By free parameter: log10(value / stated value) and its error, prior included.
    values : dict of str to float
        The same as values of the law's parameters, or as factors.
    prior_widths_dex : dict of str to float
    scatter_dex, scatter_error : float
        Intrinsic scatter; where `is_limit`, at its floor, and NaN.
    is_limit : bool
    log_likelihood, log_posterior : float
    n_parameters : int
    message : str
        Why there is no result.
    is_fitted : bool
    """

    n: int
    offsets_dex: dict[str, float] = field(default_factory=dict)
    errors_dex: dict[str, float] = field(default_factory=dict)
    values: dict[str, float] = field(default_factory=dict)
    prior_widths_dex: dict[str, float] = field(default_factory=dict)
    scatter_dex: float = math.nan
    scatter_error: float = math.nan
    is_limit: bool = False
    log_likelihood: float = math.nan
    log_posterior: float = math.nan
    n_parameters: int = 0
    message: str = ""
    is_fitted: bool = False

    @property
    def bic(self) -> float:
        """Bayesian information criterion, k ln n - 2 ln L."""
        return self.n_parameters * math.log(self.n) - 2.0 * self.log_likelihood


def fit_relation(
    samples: LinearSamples,
    inputs: Mapping[str, Array],
    use: RelationUse,
    *,
    components: int = 2,
    population: Array | None = None,
    places: tuple[Array, float] | None = None,
) -> tuple[RelationFit, LatentModel | None, Optimum | None]:
    """Fit the free parameters of a relation and the scatter about it.

    Parameters
    ----------
    samples : LinearSamples
        x is Sigma_gas; y is Sigma_SFR, or Sigma_mol for the molecular fraction.
    inputs : mapping of str to (n,) float64 array
        What the law needs beside ``sigma_gas``, per sample, taken as known; and ``f_mol``
        where alpha_CO is free.
    use : RelationUse
    components : int
        Gaussians in the population of log10 Sigma_gas.
    population : (3 components - 1,) float64 array, optional
        Where to begin with it, from another fit of the same samples.
    places : tuple of (n, 2) float64 array and float, optional
        Position of each sample and the distance at which residuals correlate by 1/e, in one unit;
        without, samples are taken as independent.

    Returns
    -------
    fit, model, optimum
        The last two None where there is no fit.

    Notes
    -----
    With y = Sigma_mol and x = Sigma_gas, whose errors share those of Sigma_mol, the likelihood is
    that of (Sigma_atom, Sigma_mol): the two pairs differ by a linear map of determinant one.
    """
    obstacle = samples.obstacle()
    if obstacle:
        return RelationFit(samples.n, message=obstacle), None, None
    usable = samples.usable
    data = samples.measurements()
    law = LAWS.get(use.law)
    needed = set(law.needs) - {law.gas}
    if any(free.name == ALPHA_CO_SCALE for free in use.free):
        needed |= {"f_mol"}
    missing = sorted(needed - set(inputs))
    if missing:
        return RelationFit(samples.n, message=f"needs {', '.join(missing)}"), None, None
    taken = needed | (set(law.optional) & set(inputs))
    known = {name: np.asarray(inputs[name])[usable] for name in taken}
    valid = _has_prediction(data, known, use)
    if not valid.any():
        return RelationFit(0, message="no sample has a prediction"), None, None
    chosen = np.flatnonzero(usable)[valid]
    kept = samples.take(chosen)
    obstacle = kept.obstacle()
    if obstacle:
        return RelationFit(kept.n, message=obstacle), None, None
    data = kept.measurements()
    known = {name: value[valid] for name, value in known.items()}
    model = relation_model(data, known, use, components)
    scatter = model.n_mean
    begin = model.begin()
    if population is not None:
        begin[scatter + 1 :] = population
    best = maximise(model, data, begin)
    if best.is_converged and math.exp(best.parameters[scatter]) < LEAST_SCATTER_DEX:
        start = best.parameters.copy()
        start[scatter] = math.log(LEAST_SCATTER_DEX)
        best = maximise(model, data, start, held=(scatter,))
    if not best.is_converged:
        return RelationFit(kept.n, message="the fit did not converge: no result"), None, None
    where = None if places is None else (places[0][chosen], places[1])
    return _summarise(use, model, best, kept.n, where), model, best


def _summarise(
    use: RelationUse,
    model: LatentModel,
    best: Optimum,
    n: int,
    places: tuple[Array, float] | None,
) -> RelationFit:
    m = model.n_mean
    scatter = math.exp(best.parameters[m])
    is_limit = scatter <= 1.001 * LEAST_SCATTER_DEX
    keep = np.array([i for i in range(best.parameters.size) if not (is_limit and i == m)])
    information = best.information[np.ix_(keep, keep)]
    if np.linalg.eigvalsh(information)[0] <= 0:
        return RelationFit(n, message="the likelihood has no peak: no result")
    errors = np.full(best.parameters.size, math.nan)
    if places is None:
        errors[keep] = np.sqrt(np.diag(np.linalg.inv(information)))
    else:
        size = m + 1 - is_limit
        _, covariance = average_optima([best], [places[0]], keep, size, places[1])
        errors[keep[:size]] = np.sqrt(np.diag(covariance))
    offsets = dict(zip(model.names, best.parameters[:m].tolist(), strict=True))
    return RelationFit(
        n=n,
        offsets_dex=offsets,
        errors_dex=dict(zip(model.names, errors[:m].tolist(), strict=True)),
        values={
            name: use.parameters.get(name, 1.0) * 10.0**offset
            for name, offset in offsets.items()
            if name != METALLICITY
        },
        prior_widths_dex={free.name: free.prior_width_dex for free in use.free},
        scatter_dex=scatter,
        scatter_error=float(errors[m] * scatter),
        is_limit=is_limit,
        log_likelihood=best.log_likelihood,
        log_posterior=best.log_posterior,
        n_parameters=best.parameters.size,
        is_fitted=True,
    )


def _has_prediction(
    data: Measurements, inputs: Mapping[str, Array], use: RelationUse
) -> NDArray[np.bool_]:
    """Samples for which the law has a value at a gas density that their noise allows."""
    gas = np.maximum(data.x, np.sqrt(data.var_x))
    law = LAWS.get(use.law)
    prediction = law.predict({**inputs, law.gas: gas}, use.parameters, slopes=False)
    value = prediction.sigma_sfr if use.quantity == "sigma_sfr" else prediction.f_mol
    if value is None:
        return np.zeros(gas.shape, dtype=bool)
    return np.asarray(np.isfinite(value) & np.all([np.isfinite(v) for v in inputs.values()], 0))


def relation_model(
    data: Measurements, inputs: Mapping[str, Array], use: RelationUse, components: int
) -> LatentModel:
    """Write a relation as a mean of latents whose parameters are offsets in dex."""
    names = tuple(free.name for free in use.free)
    law = LAWS.get(use.law)

    def predicted(theta: Array, x: Array, rows: Rows) -> Array:
        offset = dict(zip(names, theta, strict=True))
        given = {name: value[rows][:, None] for name, value in inputs.items()}
        gas = np.exp(math.log(10.0) * x)
        if ALPHA_CO_SCALE in offset:
            factor = 10.0 ** offset[ALPHA_CO_SCALE]
            gas = gas * (1.0 + (factor - 1.0) * np.clip(given.pop("f_mol"), 0.0, 1.0))
        if METALLICITY in offset:
            given["oh"] = given["oh"] + offset[METALLICITY]
        parameters = {
            name: value * 10.0 ** offset.get(name, 0.0) for name, value in use.parameters.items()
        }
        prediction = law.predict({**given, law.gas: gas}, parameters, slopes=False)
        if use.quantity == "sigma_sfr":
            value = prediction.sigma_sfr
        else:
            value = np.asarray(prediction.f_mol) * gas
        with np.errstate(divide="ignore", invalid="ignore"):
            log_value = np.log10(value)
        log_value = np.where(np.isfinite(log_value), log_value, _FLOOR_DEX)
        return np.asarray(np.maximum(log_value, _FLOOR_DEX) + offset.get(ZERO_POINT, 0.0))

    def mean(theta: Array) -> tuple[Mean, Mean]:
        def value(x: Array, rows: Rows) -> Array:
            return predicted(theta, x, rows)

        def gradient(x: Array, rows: Rows) -> Array:
            out = np.empty((theta.size, *x.shape))
            for i, name in enumerate(names):
                if name == ZERO_POINT:
                    out[i] = 1.0
                    continue
                step = np.zeros(theta.size)
                step[i] = _STEP_DEX
                above, below = predicted(theta + step, x, rows), predicted(theta - step, x, rows)
                out[i] = (above - below) / (2.0 * _STEP_DEX)
            return out

        return value, gradient

    centre = math.log10(data.x.sum() / data.x.size)
    log_gas = np.log10(np.maximum(data.x, 0.1 * np.sqrt(data.var_x)))[:, None]
    total = np.sum(10.0 ** predicted(np.zeros(len(names)), log_gas, slice(None)))
    level = math.log10(data.y.sum() / total) if total > 0 else 0.0
    return LatentModel(
        names=names,
        mean=mean,
        start=np.array([level if name == ZERO_POINT else 0.0 for name in names]),
        priors=tuple(GaussianPrior(0.0, free.prior_width_dex) for free in use.free),
        population=PopulationPrior(components, centre),
        is_linear=set(names) <= {ZERO_POINT},
    )

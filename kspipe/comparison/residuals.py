"""Observed against predicted, pixel by pixel."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Final, Protocol

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions import Surface
from kspipe.kernels.noise import NoiseTerm, covariance, propagate, total_error
from kspipe.maps.skymap import Flag
from kspipe.relations import LAWS, Prediction

__all__ = ["Known", "Residuals", "compared", "predict_residuals", "prediction_noise"]

Array = NDArray[np.float64]

# Where first-order propagation is off by more than this, the error is integrated instead.
LINEAR_TOLERANCE: Final = 0.05
_NODES, _WEIGHTS = np.polynomial.hermite_e.hermegauss(32)
_WEIGHTS = _WEIGHTS / _WEIGHTS.sum()


class Known(Protocol):
    """A quantity in each pixel with the noise that it carries: a `Surface`, for example."""

    @property
    def value(self) -> Array:
        """Broadcasts with the grid."""

    @property
    def noise(self) -> tuple[NoiseTerm, ...]:
        """Empty where it has no random error."""


@dataclass(frozen=True)
class Residuals:
    """One relation held against the galaxy.

    Attributes
    ----------
    predicted, predicted_error : (ny, nx) float64 array
        Sigma_SFR [Msun/yr/kpc2] and its random error, which comes from those of all inputs.
    predicted_f_mol : (ny, nx) float64 array or None
    difference : (ny, nx) float64 array
        Observed - predicted [Msun/yr/kpc2], wherever both are.
    ratio_dex : (ny, nx) float64 array
        log10(observed / predicted); NaN with a flag where it has no argument.
    normalised : (ny, nx) float64 array
        Difference over its random error.
    covariance : (ny, nx) float64 array
        Of observed and predicted.
    noise : tuple of NoiseTerm
        Of the prediction.
    flags : (ny, nx) int32 array
    n_integrated : int
        Pixels whose error was integrated over the noise instead of propagated to first order.
    """

    predicted: Array
    predicted_error: Array
    predicted_f_mol: Array | None
    difference: Array
    ratio_dex: Array
    normalised: Array
    covariance: Array
    noise: tuple[NoiseTerm, ...]
    flags: NDArray[np.int32]
    n_integrated: int


def predict_residuals(
    inputs: Mapping[str, Known],
    sfr: Surface,
    flags: NDArray[np.int32],
    law: str,
    parameters: Mapping[str, float],
) -> Residuals:
    """Evaluate a relation on every pixel and compare.

    Parameters
    ----------
    inputs : mapping of str to Known
        By the names of `LAW_INPUTS`; at least those that the relation needs.
    sfr : Surface
        Observed sigma_sfr [Msun/yr/kpc2] with its noise.
    flags : (ny, nx) int32 array
        Of the surface densities; the relation's are added.
    law : str
        Key of the relation.
    parameters : mapping of str to float

    Returns
    -------
    Residuals

    Notes
    -----
    error^2 of the difference is s_obs^2 + s_pred^2 - 2 cov, random terms only: what all pixels
    share (distance, inclination, alpha_CO, calibration) stays out of it.
    """
    relation = LAWS.get(law)
    taken = {name: inputs[name] for name in relation.takes(inputs)}

    def evaluate(values: Mapping[str, Array]) -> Array:
        return relation.predict(values, parameters, slopes=False).sigma_sfr

    prediction = relation.predict({n: known.value for n, known in taken.items()}, parameters)
    noise = prediction_noise(prediction, taken)
    linear = np.broadcast_to(total_error(noise), sfr.value.shape)
    gas = relation.gas
    integrated = linear
    if taken[gas].noise and not relation.is_linear:
        slopes = prediction.derivatives["sigma_sfr"]
        integrated = _integrated_error(evaluate, taken, slopes, gas, linear)
    with np.errstate(invalid="ignore"):
        is_curved = np.abs(integrated - linear) > LINEAR_TOLERANCE * integrated
    error = np.where(is_curved, integrated, linear)
    return compared(prediction, sfr, noise, error, flags, n_integrated=int(np.sum(is_curved)))


def prediction_noise(prediction: Prediction, inputs: Mapping[str, Known]) -> tuple[NoiseTerm, ...]:
    """Noise of a prediction from that of its inputs; what inputs share adds with its sign."""
    slopes = prediction.derivatives["sigma_sfr"]
    return propagate({n: k.noise for n, k in inputs.items()}, {n: slopes[n] for n in inputs})


def compared(
    prediction: Prediction,
    sfr: Surface,
    noise: tuple[NoiseTerm, ...],
    error: Array,
    flags: NDArray[np.int32],
    *,
    n_integrated: int,
) -> Residuals:
    """Hold a prediction with its noise against the observed star formation."""
    shared = np.broadcast_to(covariance(sfr.noise, noise), error.shape)
    difference = sfr.value - prediction.sigma_sfr
    with np.errstate(invalid="ignore", divide="ignore"):
        usable = (sfr.value > 0) & (prediction.sigma_sfr > 0)
        ratio = np.where(usable, np.log10(sfr.value / prediction.sigma_sfr), np.nan)
        variance = sfr.error**2 + error**2 - 2.0 * shared
        normalised = np.where(variance > 0, difference / np.sqrt(variance), np.nan)
    flags = flags.copy()
    flags |= np.where(prediction.outside_range, int(Flag.OUTSIDE_RANGE), 0).astype(np.int32)
    flags |= np.where(prediction.no_solution, int(Flag.NO_SOLUTION), 0).astype(np.int32)
    return Residuals(
        predicted=prediction.sigma_sfr,
        predicted_error=error,
        predicted_f_mol=prediction.f_mol,
        difference=difference,
        ratio_dex=ratio,
        normalised=normalised,
        covariance=np.asarray(shared),
        noise=noise,
        flags=flags,
        n_integrated=n_integrated,
    )


def _integrated_error(
    evaluate: Callable[[Mapping[str, Array]], Array],
    inputs: Mapping[str, Known],
    slopes: Mapping[str, Array],
    gas: str,
    linear: Array,
) -> Array:
    """Standard deviation of the prediction over the noise of its inputs.

    Gauss-Hermite quadrature over the noise of the gas stands in for random draws: exact for smooth
    relations and the same at every run. Inputs that share noise with the gas move with it, by
    their regression on it; what they have besides is added to first order. Where the noise reaches
    below zero gas, no gas forms no stars.
    """
    error = total_error(inputs[gas].noise)
    with np.errstate(invalid="ignore", divide="ignore"):
        along = {
            name: np.where(error > 0, covariance(known.noise, inputs[gas].noise) / error, 0.0)
            for name, known in inputs.items()
            if known.noise
        }
    first, second = np.zeros(linear.shape), np.zeros(linear.shape)
    values = {name: known.value for name, known in inputs.items()}
    for node, weight in zip(_NODES, _WEIGHTS, strict=True):
        moved = {n: np.maximum(values[n] + node * step, 0.0) for n, step in along.items()}
        predicted = evaluate({**values, **moved})
        first += weight * predicted
        second += weight * predicted**2
    along_gas = sum(slopes[name] * step for name, step in along.items())
    besides = np.maximum(linear**2 - along_gas**2, 0.0)
    return np.asarray(np.sqrt(np.maximum(second - first**2, 0.0) + besides))

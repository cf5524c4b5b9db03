"""Observed against predicted, pixel by pixel."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions import Surface
from kspipe.kernels.noise import NoiseTerm, covariance, propagate, total_error
from kspipe.maps.skymap import Flag
from kspipe.relations import LAWS, Prediction

__all__ = ["Residuals", "predict_residuals"]

Array = NDArray[np.float64]

# Where first-order propagation is off by more than this, the error is integrated instead.
LINEAR_TOLERANCE: Final = 0.05
_NODES, _WEIGHTS = np.polynomial.hermite_e.hermegauss(32)
_WEIGHTS = _WEIGHTS / _WEIGHTS.sum()


@dataclass(frozen=True)
class Residuals:
    """One relation held against the galaxy.

    Attributes
    ----------
    predicted, predicted_error : (ny, nx) float64 array
        Sigma_SFR [Msun/yr/kpc2] and its random error, which comes from that of sigma_gas.
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
    gas: Surface,
    sfr: Surface,
    oh: Array,
    flags: NDArray[np.int32],
    law: str,
    parameters: Mapping[str, float],
) -> Residuals:
    """Evaluate a relation on every pixel and compare.

    Parameters
    ----------
    gas, sfr : Surface
        sigma_gas [Msun/pc2] and sigma_sfr [Msun/yr/kpc2] with their noise.
    oh : (ny, nx) float64 array
        12 + log10(O/H).
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

    def evaluate(sigma_gas: Array) -> Prediction:
        return relation.predict({"sigma_gas": sigma_gas, "oh": oh}, parameters)

    prediction = evaluate(gas.value)
    slope = prediction.derivatives["sigma_sfr"]["sigma_gas"]
    noise = propagate({"gas": gas.noise}, {"gas": slope})
    linear = total_error(noise)
    integrated = _integrated_error(evaluate, gas.value, gas.error)
    with np.errstate(invalid="ignore"):
        is_curved = np.abs(integrated - linear) > LINEAR_TOLERANCE * integrated
    error = np.where(is_curved, integrated, linear)

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
        n_integrated=int(np.sum(is_curved)),
    )


def _integrated_error(
    evaluate: Callable[[Array], Prediction], sigma_gas: Array, error: Array
) -> Array:
    """Standard deviation of the prediction over the noise of its input.

    Gauss-Hermite quadrature stands in for random draws: exact for smooth relations and the same
    at every run. Where the noise reaches below zero gas, no gas forms no stars.
    """
    first, second = np.zeros(sigma_gas.shape), np.zeros(sigma_gas.shape)
    for node, weight in zip(_NODES, _WEIGHTS, strict=True):
        shifted = np.maximum(sigma_gas + node * error, 0.0)
        predicted = evaluate(shifted).sigma_sfr
        first += weight * predicted
        second += weight * predicted**2
    return np.sqrt(np.maximum(second - first**2, 0.0))

"""Random errors of the state of the gas, which follows its column far from linearly."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.kernels.noise import NoiseTerm, covariance, propagate, total_error
from kspipe.relations.state import Traced

__all__ = ["state_errors"]

Array = NDArray[np.float64]
Noise = Mapping[str, tuple[NoiseTerm, ...]]

# Less gas than none is as good as none; its depth must stay a number.
NO_GAS: Final = 1e-9
_GAS: Final = ("sigma_gas", "sigma_atom", "sigma_mol")


def state_errors(
    tell: Callable[[Mapping[str, Array]], Mapping[str, Traced]],
    inputs: Mapping[str, Array],
    noise: Noise,
    found: Mapping[str, Traced],
    shape: tuple[int, int],
) -> dict[str, Array]:
    """Half of the interval that holds 68 % of what noise does to each quantity.

    Parameters
    ----------
    tell : callable
        The state of the gas for other inputs.
    inputs : mapping of str to (ny, nx) float64 array
    noise : mapping of str to tuple of NoiseTerm
        Of the inputs that have any, ``sigma_gas`` among them.
    found : mapping of str to Traced
        What `tell` gives for the inputs.
    shape : (int, int)

    Returns
    -------
    dict of str to (ny, nx) float64 array
        NaN where there is no value.

    Notes
    -----
    A quantity that follows the gas in one direction has its 16th and 84th percentile at the gas
    one sigma below and above: no draws are needed. Inputs that share noise with the gas move with
    it, by their regression on it; what they have besides is added to first order. Where one of
    the two ends has no value, the other side stands for both.
    """
    sigma = total_error(noise["sigma_gas"])
    with np.errstate(invalid="ignore", divide="ignore"):
        along = {
            name: np.where(sigma > 0, covariance(terms, noise["sigma_gas"]) / sigma, 0.0)
            for name, terms in noise.items()
        }
    above, below = (tell(_moved(inputs, along, sign)) for sign in (1.0, -1.0))
    return {
        name: _error(traced, noise, along, above[name].value, below[name].value, shape)
        for name, traced in found.items()
    }


def _moved(
    inputs: Mapping[str, Array], along: Mapping[str, Array], sign: float
) -> dict[str, Array]:
    """Inputs at gas one sigma away; gas that there is stays at least none."""
    moved = dict(inputs)
    for name, step in along.items():
        there = inputs[name] + sign * step
        if name in _GAS:
            there = np.where(inputs[name] > 0, np.maximum(there, NO_GAS), there)
        moved[name] = np.asarray(there)
    return moved


def _error(
    traced: Traced,
    noise: Noise,
    along: Mapping[str, Array],
    above: Array,
    below: Array,
    shape: tuple[int, int],
) -> Array:
    slopes = {name: slope for name, slope in traced.slopes.items() if name in noise}
    if not slopes:
        return np.where(np.isfinite(np.broadcast_to(traced.value, shape)), 0.0, np.nan)
    linear = total_error(propagate({name: noise[name] for name in slopes}, slopes))
    along_gas = sum(slopes[name] * along[name] for name in slopes)
    besides = np.maximum(linear**2 - along_gas**2, 0.0)
    half = 0.5 * np.abs(above - below)
    half = np.where(np.isnan(half), np.abs(above - traced.value), half)
    half = np.where(np.isnan(half), np.abs(below - traced.value), half)
    half = np.where(np.isnan(half), np.abs(along_gas), half)
    error = np.broadcast_to(np.sqrt(half**2 + besides), shape)
    return np.where(np.isfinite(traced.value), error, np.nan)

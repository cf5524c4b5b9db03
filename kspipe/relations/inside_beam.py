"""What a beam hides: clumping, and the bias of a curved relation over structure and over noise."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from typing import Final, Protocol

import numpy as np
from numpy.typing import NDArray

from kspipe.relations.law import Prediction

__all__ = [
    "Relation",
    "beam_bias_dex",
    "clumping_of_beam",
    "clumping_of_moments",
    "mean_over_lognormal",
    "mean_over_noise",
    "noise_bias",
]

Array = NDArray[np.float64]

# Clumping of krumholz2009: 1 where a beam holds one complex, 5 where it holds a piece of a disc.
SMALL_BEAM_PC: Final = 100.0
LARGE_BEAM_PC: Final = 1000.0
LARGE_BEAM_CLUMPING: Final = 5.0

_NODES, _WEIGHTS = np.polynomial.hermite_e.hermegauss(32)
_WEIGHTS = _WEIGHTS / _WEIGHTS.sum()


class Relation(Protocol):
    """What is needed of a `Law`."""

    @property
    def needs(self) -> tuple[str, ...]:
        """Names of the inputs, the gas first."""

    def predict(
        self,
        inputs: Mapping[str, Array],
        parameters: Mapping[str, float],
        *,
        slopes: bool = True,
    ) -> Prediction:
        """Evaluate it."""


def clumping_of_beam(beam_pc: Array | float) -> Array:
    """Surface density of a complex over that of a beam of this width.

    Parameters
    ----------
    beam_pc : float64 array or float
        FWHM, positive.

    References
    ----------
    .. [1] krumholz2009 for 1 at 100 pc and below, 5 near 1 kpc; a power law of the beam between
       them and constants outside are common practice, without a source.
    """
    decades = np.log(np.asarray(beam_pc, dtype=float) / SMALL_BEAM_PC)
    share = np.clip(decades / math.log(LARGE_BEAM_PC / SMALL_BEAM_PC), 0.0, 1.0)
    return np.asarray(LARGE_BEAM_CLUMPING**share)


def clumping_of_moments(mean: Array, mean_square: Array, mean_variance: Array | float) -> Array:
    """Clumping from a finer map: surface density seen by mass over that seen by area.

    Parameters
    ----------
    mean, mean_square : float64 array
        The finer map, and its square, smoothed to the beam.
    mean_variance : float64 array or float
        Its noise variance, smoothed to the beam: noise alone would look clumpy.

    Returns
    -------
    float64 array
        NaN where the mean is not positive. A value below 1, less than a smooth map has, is noise;
        it is left as it is, so that averages stay right.

    Notes
    -----
    c = (<S^2> - <sigma^2>) / <S>^2, averages weighted by the beam. <S^2>/<S> is the mean surface
    density weighted by mass (Leroy et al. 2013, ApJ 769, L12; from memory).
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray((mean_square - mean_variance) / np.where(mean > 0, mean, np.nan) ** 2)


def mean_over_lognormal(
    law: Relation,
    inputs: Mapping[str, Array],
    parameters: Mapping[str, float],
    scatter_dex: Array | float,
) -> Array:
    """Sigma_SFR of a beam inside which the gas is log-normal by area.

    Parameters
    ----------
    law : Law or other Relation
    inputs : mapping of str to float64 array
        As in `Law.predict`; its gas is the mean over the beam.
    parameters : mapping of str to float
    scatter_dex : float64 array or float
        Standard deviation of log10 Sigma_gas inside the beam.

    Returns
    -------
    float64 array
        [Msun/yr/kpc2], by Gauss-Hermite quadrature with 32 nodes: exact for smooth relations, to
        0.3 % where the gas lies about a kink such as that of krumholz2009 at 85 Msun/pc2.
    """
    sigma_ln = np.log(10.0) * np.asarray(scatter_dex)
    gas = np.asarray(inputs[law.needs[0]], dtype=float)

    def at(node: float) -> Array:
        return np.asarray(gas * np.exp(sigma_ln * node - sigma_ln**2 / 2.0))

    return _average(law, inputs, parameters, at)


def beam_bias_dex(
    law: Relation,
    inputs: Mapping[str, Array],
    parameters: Mapping[str, float],
    scatter_dex: Array | float,
) -> Array:
    """log10 of the relation at the mean over the mean of the relation, inside the beam.

    Negative where evaluating at the mean predicts too little. Parameters are those of
    `mean_over_lognormal`.
    """
    plain = law.predict(inputs, parameters, slopes=False).sigma_sfr
    return _log_ratio(plain, mean_over_lognormal(law, inputs, parameters, scatter_dex))


def mean_over_noise(
    law: Relation,
    inputs: Mapping[str, Array],
    parameters: Mapping[str, float],
    gas_error: Array,
) -> Array:
    """Mean Sigma_SFR that a relation gives where Sigma_gas is known with Gaussian noise.

    Parameters
    ----------
    law, inputs, parameters
        As in `mean_over_lognormal`; the gas stands for the truth.
    gas_error : float64 array
        Random 1-sigma error [Msun/pc2].

    Notes
    -----
    Where noise reaches below zero gas, no gas forms no stars.
    """
    gas = np.asarray(inputs[law.needs[0]], dtype=float)

    def at(node: float) -> Array:
        shifted = gas + node * gas_error
        return np.where(shifted < 0.0, 0.0, shifted)

    return _average(law, inputs, parameters, at)


def noise_bias(
    law: Relation,
    inputs: Mapping[str, Array],
    parameters: Mapping[str, float],
    gas_error: Array,
) -> Array:
    """Factor by which noise in Sigma_gas makes a relation predict too much on average.

    Parameters are those of `mean_over_noise`. NaN where nothing is predicted without noise.
    """
    plain = law.predict(inputs, parameters, slopes=False).sigma_sfr
    noisy = mean_over_noise(law, inputs, parameters, gas_error)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(plain > 0, noisy / plain, np.nan)


def _average(
    law: Relation,
    inputs: Mapping[str, Array],
    parameters: Mapping[str, float],
    at: Callable[[float], Array],
) -> Array:
    total: Array | float = 0.0
    for node, weight in zip(_NODES, _WEIGHTS, strict=True):
        predicted = law.predict({**inputs, law.needs[0]: at(float(node))}, parameters, slopes=False)
        total = total + weight * predicted.sigma_sfr
    return np.asarray(total)


def _log_ratio(top: Array, bottom: Array) -> Array:
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where((top > 0) & (bottom > 0), np.log10(top / bottom), np.nan)

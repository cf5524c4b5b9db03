"""Fits of several phases of a lattice, averaged, with errors that know how samples correlate."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from kspipe.comparison.latent_fit import Optimum
from kspipe.comparison.samples import LinearSamples

__all__ = ["Phase", "average_optima", "beam_correlation_length"]

Array = NDArray[np.float64]

# Pairs farther apart than this many correlation lengths correlate by less than 0.2 %.
_REACH: Final = 2.5


@dataclass(frozen=True)
class Phase:
    """Samples of one phase of the lattice and where they are.

    Attributes
    ----------
    samples : LinearSamples
    positions : (n, 2) float64 array
        Of each sample [pixel].
    """

    samples: LinearSamples
    positions: Array

    def kept_positions(self) -> Array:
        """Positions of the usable samples."""
        return self.positions[self.samples.usable]


def beam_correlation_length(fwhm: float) -> float:
    """Distance at which noise smoothed with a beam correlates by 1/e, in the unit of the beam."""
    return fwhm / math.sqrt(2.0 * math.log(2.0))


def average_optima(
    optima: Sequence[Optimum],
    positions: Sequence[Array],
    keep: NDArray[np.intp],
    size: int,
    correlation_length: float,
) -> tuple[Array, Array]:
    """Mean of the fits of all phases and its covariance.

    Parameters
    ----------
    optima : sequence of Optimum
        One per phase, of the same parameters.
    positions : sequence of (n, 2) float64 array
        Of the samples of each.
    keep : (p,) int array
        Free parameters.
    size : int
        How many of them, from the first, are wanted.
    correlation_length : float
        At which residuals correlate by 1/e, in the unit of the positions.

    Returns
    -------
    mean : (size,) float64 array
    covariance : (size, size) float64 array

    Notes
    -----
    A fit moves by the sum of its points' influences, inverse information times score. Influences
    of two points a distance d apart covary by A exp(-(d / length)^2); the matrix A is measured
    from all pairs, in one phase or two, so that the mean of overlapping phases and neighbours
    that are not quite independent are both counted. Variances are raised by n / (n - p), n being
    the samples of one phase.

    References
    ----------
    .. [1] Conley 1999, J. Econometrics 92, 1: estimates from spatially dependent data.
    """
    wanted = keep[:size]
    inverses = [np.linalg.inv(o.information[np.ix_(keep, keep)])[:size] for o in optima]
    influence = np.concatenate(
        [inverse @ o.scores[keep] for inverse, o in zip(inverses, optima, strict=True)], axis=1
    )
    alone = np.sum([inverse[:, :size] for inverse in inverses], axis=0)
    mean = np.mean([o.parameters[wanted] for o in optima], axis=0)
    place = np.concatenate(list(positions))
    pairs = cKDTree(place).query_pairs(_REACH * correlation_length, output_type="ndarray")
    together = np.zeros((size, size))
    if len(pairs):
        first, second = pairs.T
        distance2 = np.sum((place[first] - place[second]) ** 2, axis=1)
        rho = np.exp(-distance2 / correlation_length**2)
        product = (influence[:, first] * rho) @ influence[:, second].T
        # Each pair counts twice.
        together = (product + product.T) * rho.sum() / np.sum(rho**2)
    n, p = optima[0].scores.shape[1], keep.size
    # Fitted points scatter less about a fit than about the truth.
    few = n / max(n - p, 1)
    return mean, few * (alone + _positive_part(together, alone)) / len(optima) ** 2


def _positive_part(matrix: Array, scale: Array) -> Array:
    """Cut negative eigenvalues, in units in which `scale` is the identity."""
    root = np.linalg.cholesky(scale)
    inverse = np.linalg.inv(root)
    values, vectors = np.linalg.eigh(inverse @ matrix @ inverse.T)
    half = root @ vectors
    return np.asarray((half * np.maximum(values, 0.0)) @ half.T)

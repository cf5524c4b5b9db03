"""The numbers that sum up one relation."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kspipe.comparison.residuals import Residuals
from kspipe.conversions import Surface
from kspipe.kernels.likelihood import ZeroPoint, fit_zero_point
from kspipe.kernels.noise import sum_covariance
from kspipe.kernels.statistics import median_error

__all__ = ["Headline", "headline"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Headline:
    """How far a relation is from the galaxy.

    Attributes
    ----------
    n_pixels : int
        Covered pixels with an observed and a predicted value, of any sign.
    n_samples : int
        Independent samples among them.
    sum_ratio, sum_ratio_error : float
        Sum of observed over sum of predicted, with its random error.
    zero_point : ZeroPoint or None
        Fitted on the independent samples; None where there are fewer than 10.
    median_dex, median_dex_error : float
        Median of log10(observed / predicted) where both are positive; error from a bootstrap
        over the independent samples.
    fraction_without_log : float
        Share of all covered pixels that could not enter the median.
    """

    n_pixels: int
    n_samples: int
    sum_ratio: float
    sum_ratio_error: float
    zero_point: ZeroPoint | None
    median_dex: float
    median_dex_error: float
    fraction_without_log: float


def headline(
    residuals: Residuals,
    sfr: Surface,
    used: NDArray[np.bool_],
    independent: NDArray[np.bool_],
    jacobian_arcsec: Array,
    rng: np.random.Generator,
) -> Headline:
    """Sum up one relation.

    Parameters
    ----------
    residuals : Residuals
    sfr : Surface
        Observed sigma_sfr.
    used : (ny, nx) bool array
        Covered pixels.
    independent : (ny, nx) bool array
        Lattice of independent samples.
    jacobian_arcsec : (2, 2) float64 array
        Sky offset (east, north) per pixel step of the grid.
    rng : numpy.random.Generator
        For the bootstrap.
    """
    both = used & np.isfinite(residuals.difference)
    samples = both & independent
    observed, predicted = float(sfr.value[both].sum()), float(residuals.predicted[both].sum())
    has_log = both & np.isfinite(residuals.ratio_dex)
    in_median = residuals.ratio_dex[has_log]
    n_pixels, n_covered = int(both.sum()), int(used.sum())
    return Headline(
        n_pixels=n_pixels,
        n_samples=int(samples.sum()),
        sum_ratio=observed / predicted if predicted > 0 else math.nan,
        sum_ratio_error=_ratio_error(observed, predicted, residuals, sfr, both, jacobian_arcsec),
        zero_point=fit_zero_point(
            sfr.value[samples],
            residuals.predicted[samples],
            np.array(
                [
                    sfr.error[samples] ** 2,
                    residuals.predicted_error[samples] ** 2,
                    residuals.covariance[samples],
                ]
            ),
        ),
        median_dex=float(np.median(in_median)) if in_median.size else math.nan,
        median_dex_error=median_error(residuals.ratio_dex[has_log & independent], rng),
        fraction_without_log=1.0 - in_median.size / n_covered if n_covered else math.nan,
    )


def _ratio_error(
    observed: float,
    predicted: float,
    residuals: Residuals,
    sfr: Surface,
    used: NDArray[np.bool_],
    jacobian_arcsec: Array,
) -> float:
    """Random error of the ratio of the two sums, their covariance included."""
    if predicted <= 0:
        return math.nan
    ratio = observed / predicted
    variance = (
        sum_covariance(sfr.noise, sfr.noise, used, jacobian_arcsec)
        + ratio**2 * sum_covariance(residuals.noise, residuals.noise, used, jacobian_arcsec)
        - 2.0 * ratio * sum_covariance(sfr.noise, residuals.noise, used, jacobian_arcsec)
    )
    return math.sqrt(max(variance, 0.0)) / predicted

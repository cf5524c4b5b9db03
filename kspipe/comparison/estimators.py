"""The estimators of older papers, beside the generative model, for comparison only.

All take logarithms, so that values at or below zero are left out; how many stay is stated.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.comparison.samples import LEAST_SAMPLES, LinearSamples

__all__ = ["ClassicalFit", "classical_fits", "least_squares_with_errors", "ordinary_slopes"]

Array = NDArray[np.float64]

_CLIP: Final = 3.0
_ROUNDS: Final = 200


@dataclass(frozen=True)
class ClassicalFit:
    """A slope by an estimator that knows nothing of undetected values.

    Attributes
    ----------
    method : str
    slope, intercept : float
        log10 y = intercept + slope (log10 x - pivot).
    pivot : float
    n : int
        Samples that have both logarithms, or pass the cut.
    n_left_out : int
        Those that do not.
    """

    method: str
    slope: float
    intercept: float
    pivot: float
    n: int
    n_left_out: int


def classical_fits(samples: LinearSamples, pivot: float) -> tuple[ClassicalFit, ...]:
    """Fit a line by each of the estimators in use.

    Parameters
    ----------
    samples : LinearSamples
    pivot : float
        log10 x at which intercepts are given.

    Returns
    -------
    tuple of ClassicalFit
        ``y|x``, ``x|y``, ``bisector``, ``orthogonal`` (unweighted), ``bivariate without
        scatter`` (errors on both axes), and ``clipped y|x`` (both above 3 sigma); NaN where
        fewer than 10 samples enter.
    """
    kept = samples.take(samples.usable)
    positive = (kept.x > 0) & (kept.y > 0)
    detected = (kept.x > _CLIP * np.sqrt(kept.var_x)) & (kept.y > _CLIP * np.sqrt(kept.var_y))
    fits = []
    for name, line in _lines(kept.take(positive)).items():
        fits.append(_fit(name, line, pivot, int(positive.sum()), kept.n))
    clipped = _lines(kept.take(detected)).get("y|x", (math.nan, math.nan))
    fits.append(_fit("clipped y|x", clipped, pivot, int(detected.sum()), kept.n))
    return tuple(fits)


def _fit(name: str, line: tuple[float, float], pivot: float, n: int, total: int) -> ClassicalFit:
    slope, intercept = line
    return ClassicalFit(name, slope, intercept + slope * pivot, pivot, n, total - n)


def _lines(samples: LinearSamples) -> dict[str, tuple[float, float]]:
    """Slope, and intercept at log10 x = 0, by method."""
    methods = ("y|x", "x|y", "bisector", "orthogonal", "bivariate without scatter")
    if samples.x.size < LEAST_SAMPLES:
        return dict.fromkeys(methods, (math.nan, math.nan))
    x, y = np.log10(samples.x), np.log10(samples.y)
    slopes = ordinary_slopes(x, y)
    lines = {name: (m, float(np.mean(y) - m * np.mean(x))) for name, m in slopes.items()}
    per_dex = math.log(10.0)
    lines["bivariate without scatter"] = least_squares_with_errors(
        x,
        y,
        samples.var_x / (per_dex * samples.x) ** 2,
        samples.var_y / (per_dex * samples.y) ** 2,
        samples.cov / (per_dex**2 * samples.x * samples.y),
        start=slopes["orthogonal"],
    )
    return lines


def ordinary_slopes(x: Array, y: Array) -> dict[str, float]:
    """Slopes of the unweighted estimators.

    References
    ----------
    .. [1] Isobe et al. 1990, ApJ 364, 104, Table 1: OLS(Y|X), OLS(X|Y), the bisector of the two,
       and orthogonal regression.
    """
    dx, dy = x - np.mean(x), y - np.mean(y)
    sxx, syy, sxy = float(dx @ dx), float(dy @ dy), float(dx @ dy)
    first, second = sxy / sxx, syy / sxy
    root = math.sqrt((1.0 + first**2) * (1.0 + second**2))
    bisector = (first * second - 1.0 + root) / (first + second)
    half = 0.5 * (second - 1.0 / first)
    orthogonal = half + math.copysign(math.hypot(half, 1.0), sxy)
    return {"y|x": first, "x|y": second, "bisector": bisector, "orthogonal": orthogonal}


def least_squares_with_errors(
    x: Array, y: Array, var_x: Array, var_y: Array, cov: Array, *, start: float
) -> tuple[float, float]:
    """Line through points with errors on both axes, no scatter.

    Parameters
    ----------
    x, y, var_x, var_y, cov : (n,) float64 array
    start : float
        Slope to begin with.

    Returns
    -------
    slope, intercept : float
        NaN where the iteration does not settle.

    References
    ----------
    .. [1] York et al. 2004, Am. J. Phys. 72, 367, Eqs. 13a and 13b.
    """
    slope = start
    for _ in range(_ROUNDS):
        weight = 1.0 / (var_y + slope**2 * var_x - 2.0 * slope * cov)
        mean_x, mean_y = np.average(x, weights=weight), np.average(y, weights=weight)
        u, v = x - mean_x, y - mean_y
        beta = weight * (u * var_y + slope * v * var_x - (slope * u + v) * cov)
        new = float(np.sum(weight * beta * v) / np.sum(weight * beta * u))
        if not math.isfinite(new):
            break
        if abs(new - slope) < 1e-12 * max(1.0, abs(slope)):
            return new, float(mean_y - new * mean_x)
        slope = new
    return math.nan, math.nan

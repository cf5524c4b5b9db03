"""Errors of surface densities that are no straight line in their intensities."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import fields
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

from kspipe.conversions.alpha_co import ALPHA_CO
from kspipe.conversions.choices import Choices, Parameters
from kspipe.conversions.convert import Converted, convert
from kspipe.conversions.line_ratio import LINE_RATIO
from kspipe.conversions.star_formation import STAR_FORMATION

__all__ = ["LINEAR_TOLERANCE", "drawn_over_linear", "is_linear"]

Array = NDArray[np.float64]

# A pixel whose error changes by more than this share, by three nodes of each intensity, is drawn.
LINEAR_TOLERANCE: Final = 0.008
NODE: Final = math.sqrt(3.0)
# Evenly spread draws, in pairs z and -z. What is linear is known without them, so that they
# matter only for what bends.
N_PAIRS: Final = 512
# Pixels that are drawn together.
BLOCK: Final = 1024


def is_linear(choices: Choices) -> bool:
    """Whether all surface densities are straight lines in their intensities."""
    alpha_co = None if choices.alpha_co is None else ALPHA_CO.get(choices.alpha_co)
    bends = alpha_co is not None and {"sigma_total", "sigma_star"} & set(alpha_co.needs)
    ratio = None if choices.line_ratio is None else LINE_RATIO.get(choices.line_ratio)
    return (
        STAR_FORMATION.get(choices.calibration).is_linear
        and choices.balmer is None
        and choices.mass_to_light is None
        and not bends
        and not (ratio is not None and ratio.needs)
    )


def drawn_over_linear(
    converted: Converted,
    intensity: Mapping[str, Array],
    error: Mapping[str, Array],
    choices: Choices,
    parameters: Parameters,
) -> dict[str, Array]:
    """Find what the first-order error of each product must be multiplied by.

    Parameters
    ----------
    converted : Converted
        Of `intensity`, `choices` and `parameters`.
    intensity, error : mapping of str to (ny, nx) float64 array
        By tracer, with their random errors, which are independent of each other.
    choices, parameters
        As in `convert`.

    Returns
    -------
    dict of str to (ny, nx) float64 array
        By product that bends: the standard deviation over draws of all intensities divided by
        the first-order error; one where the product is straight enough. Draws in which a power
        law has no value are left out.

    Notes
    -----
    With f = l + r, l the linear part: var f = var l + 2 cov(l, r) + var r; only the last two are
    drawn. The draws are the same at every run.
    """
    if is_linear(choices):
        return {}
    shape = next(iter(converted.values.values())).shape
    bent = _bends(converted, intensity, error, choices, parameters)
    scales = {product: np.ones(shape) for product, where in bent.items() if where.any()}
    if not scales:
        return {}
    chosen = np.flatnonzero(np.logical_or.reduce([bent[product] for product in scales]))
    deviates = _deviates(len(intensity))
    for start in range(0, chosen.size, BLOCK):
        pixels = chosen[start : start + BLOCK]
        cut = {t: np.broadcast_to(m, shape).reshape(-1)[pixels] for t, m in intensity.items()}
        sigma = {t: np.broadcast_to(error[t], shape).reshape(-1)[pixels] for t in intensity}
        shift = {t: deviates[:, [i]] * sigma[t] for i, t in enumerate(intensity)}
        drawn = convert(
            {t: cut[t] + shift[t] for t in intensity}, choices, _cut(parameters, pixels, shape)
        ).values
        for product, scale in scales.items():
            slopes = {t: s.reshape(-1)[pixels] for t, s in converted.derivatives[product].items()}
            centre = converted.values[product].reshape(-1)[pixels]
            linear = sum(slopes[t] * shift[t] for t in slopes if t in shift)
            variance = sum((slopes[t] * sigma[t]) ** 2 for t in slopes if t in sigma)
            ratio = _ratio(drawn[product] - centre, np.asarray(linear), np.asarray(variance))
            flat = scale.reshape(-1)
            flat[pixels] = np.where(bent[product].reshape(-1)[pixels], ratio, 1.0)
    return scales


def _bends(
    converted: Converted,
    intensity: Mapping[str, Array],
    error: Mapping[str, Array],
    choices: Choices,
    parameters: Parameters,
) -> dict[str, NDArray[np.bool_]]:
    """Where the error of a product by three nodes of each intensity is not that to first order.

    Gauss-Hermite nodes at 0 and +-sqrt(3) sigma with weights 2/3, 1/6, 1/6.
    """
    variance: dict[str, Array] = {}
    linear = {
        product: sum((s * error[t]) ** 2 for t, s in slopes.items() if t in error)
        for product, slopes in converted.derivatives.items()
    }
    for tracer, value in intensity.items():
        high, low = (
            convert({**intensity, tracer: value + step * error[tracer]}, choices, parameters).values
            for step in (NODE, -NODE)
        )
        for product, slopes in converted.derivatives.items():
            if tracer in slopes:
                up, down = (end[product] - converted.values[product] for end in (high, low))
                part = (up**2 + down**2) / 6.0 - ((up + down) / 6.0) ** 2
                # Beyond the edge of a power law there is no value: that is bent enough.
                part = np.where(np.isnan(part) & np.isfinite(slopes[tracer]), np.inf, part)
                variance[product] = variance.get(product, np.zeros(())) + part
    with np.errstate(invalid="ignore", divide="ignore"):
        return {
            product: np.isfinite(linear[product])
            & ~(np.abs(np.sqrt(found / linear[product]) - 1.0) <= LINEAR_TOLERANCE)
            & (np.asarray(linear[product]) > 0)
            for product, found in variance.items()
        }


def _deviates(n_dimensions: int) -> Array:
    """Normal deviates, evenly spread: (2 `N_PAIRS`, `n_dimensions`), the same at every call.

    Notes
    -----
    The fractional parts of k / g, k / g^2, ... with g^(d + 1) = g + 1 fill a cube of d dimensions
    evenly; for d = 1, g is the golden ratio.
    """
    root = 1.5
    for _ in range(60):
        root = (1.0 + root) ** (1.0 / (n_dimensions + 1.0))
    steps = root ** -np.arange(1.0, n_dimensions + 1.0)
    uniform = (0.5 + np.arange(1, N_PAIRS + 1)[:, None] * steps) % 1.0
    half = ndtri(uniform)
    return np.concatenate([half, -half])


def _ratio(moved: Array, linear: Array, variance: Array) -> Array:
    """Drawn over first-order standard deviation; draws are on the first axis."""
    solved = np.isfinite(moved)
    n = solved.sum(axis=0)
    bent = np.where(solved, moved - linear, 0.0)
    straight = np.where(solved, linear, 0.0)
    with np.errstate(invalid="ignore", divide="ignore"):
        bent_mean, straight_mean = bent.sum(axis=0) / n, straight.sum(axis=0) / n
        cross = (bent * straight).sum(axis=0) / n - bent_mean * straight_mean
        square = (bent**2).sum(axis=0) / n - bent_mean**2
        # Where draws were lost the linear part is that of those that are left.
        kept = (straight**2).sum(axis=0) / n - straight_mean**2
        known = np.where(n == moved.shape[0], variance, kept)
        ratio = np.sqrt(np.maximum(known + 2.0 * cross + square, 0.0) / variance)
    return np.where(np.isfinite(ratio) & (n > 1), ratio, 1.0)


def _cut(parameters: Parameters, pixels: NDArray[np.intp], shape: tuple[int, ...]) -> Parameters:
    """Parameters of some pixels only."""

    def one(value: Any) -> Any:
        if isinstance(value, Mapping):
            return {name: one(entry) for name, entry in value.items()}
        if value is None or np.ndim(value) == 0:
            return value
        return np.broadcast_to(value, shape).reshape(-1)[pixels]

    return Parameters(**{f.name: one(getattr(parameters, f.name)) for f in fields(parameters)})

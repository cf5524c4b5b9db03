"""How the fitted line answers to changed data, without fitting again.

The peak of a likelihood moves by (information)^-1 times the change of the score. Scores of each
point are differentiated once by its own data; what all points have in common, a factor on
Sigma_gas or on Sigma_SFR, moves the line exactly and is taken out first.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.comparison.latent_fit import LatentModel, Optimum, maximise
from kspipe.comparison.line import LineFit, fit_line_phases, line_model
from kspipe.comparison.phases import Phase
from kspipe.comparison.samples import LinearSamples

__all__ = ["LineResponse", "Moved", "line_response", "refit"]

Array = NDArray[np.float64]

# Steps of the differences: ln of a scale, asinh of half the signal to noise, correlation.
_STEPS: Final = (0.1, 0.1, 0.1, 0.1, 0.05)


@dataclass(frozen=True)
class Moved:
    """The line under changed data, (draws,) each.

    Attributes
    ----------
    slope : float64 array
    level : float64 array
        log10 Sigma_SFR at the pivot of the unchanged fit.
    scatter_dex : float64 array
    """

    slope: Array
    level: Array
    scatter_dex: Array


@dataclass(frozen=True)
class LineResponse:
    """The fit of the unchanged data, and its derivatives by the data of each point.

    Attributes
    ----------
    fit : LineFit
    samples : LinearSamples
        Usable ones.
    usable : (all,) bool array
        Which of the samples given these are.
    centre : float
        log10 x at which the fit's own intercept is taken.
    parameters : (p,) float64 array
    gain : (p, p) float64 array
        Inverse of the information; zero for a parameter that is held.
    derivatives : (5, p, n) float64 array
        Of each point's scores by ln s_x, asinh(x / 2 s_x), the same of y, and the correlation.
    """

    fit: LineFit
    samples: LinearSamples
    usable: NDArray[np.bool_]
    centre: float
    parameters: Array
    gain: Array
    derivatives: Array

    def __call__(self, x: Array, y: Array, var_x: Array, var_y: Array, cov: Array) -> Moved:
        """Move the line to changed data of the same points.

        Parameters
        ----------
        x, y, var_x, var_y, cov : (draws, all) float64 array
            As in `LinearSamples`, before the unusable ones are left out.
        """
        old = _coordinates(*_fields(self.samples))
        new = _coordinates(*(array[:, self.usable] for array in (x, y, var_x, var_y, cov)))
        change = new - old[:, None, :]
        common = []
        for axis, scale in ((0, 1), (2, 3)):
            snr2 = (2.0 * np.sinh(old[scale])) ** 2
            weight = snr2 / (1.0 + snr2)
            # Sums without a threaded library: the same to the last digit on any machine's cores.
            common.append(np.einsum("dn,n->d", change[axis], weight) / weight.sum())
            change[axis] -= common[-1][:, None]
        # A point whose data make no sense under a draw (a power law of less than zero) stays.
        change = np.where(np.isfinite(change), change, 0.0)
        score = np.einsum("kpn,kdn->dp", self.derivatives, change)
        moved = self.parameters + np.einsum("dp,pq->dq", score, self.gain)
        factor_x, factor_y = (shift / math.log(10.0) for shift in common)
        lever = self.fit.pivot - factor_x - self.centre
        return Moved(
            slope=moved[:, 0],
            level=moved[:, 1] + factor_y + moved[:, 0] * lever,
            scatter_dex=np.exp(moved[:, 2]),
        )


def line_response(samples: LinearSamples) -> tuple[LineFit, LineResponse | None]:
    """Fit the line and prepare its response; without one where there is nothing to fit."""
    # Positions far apart: samples of one phase count as independent.
    places = np.arange(samples.x.size, dtype=float)[:, None] * [1.0, 0.0]
    phased = fit_line_phases([Phase(samples, places)], 1e-3)
    fit = phased.mean
    if not fit.is_fitted:
        return fit, None
    model, best = phased.models[0], phased.optima[0]
    usable = samples.usable
    kept = samples.take(usable)
    free = np.array([i for i in range(best.parameters.size) if not (fit.is_limit and i == 2)])
    gain = np.zeros_like(best.information)
    gain[np.ix_(free, free)] = np.linalg.inv(best.information[np.ix_(free, free)])
    centre = model.population.centre
    derivatives = _derivatives(kept, model, best)
    return fit, LineResponse(fit, kept, usable, centre, best.parameters, gain, derivatives)


def refit(response: LineResponse, samples: LinearSamples) -> Moved:
    """Fit changed data in full, from the unchanged peak; NaN where that fails."""
    if samples.obstacle():
        return Moved(*(np.full(1, math.nan) for _ in range(3)))
    data = samples.measurements()
    model = line_model(data)
    start = response.parameters.copy()
    begin = model.begin()
    start[1] = begin[1] + (response.parameters[1] - _old_level(response))
    shift = model.population.centre - response.centre
    k = (start.size - 3 + 1) // 3
    start[3 + k - 1 : 3 + 2 * k - 1] += shift
    held = (2,) if response.fit.is_limit else ()
    best = maximise(model, data, start, held=held)
    if not best.is_converged:
        return Moved(*(np.full(1, math.nan) for _ in range(3)))
    slope = best.parameters[0]
    level = best.parameters[1] + slope * (response.fit.pivot - model.population.centre)
    values = (slope, level, math.exp(best.parameters[2]))
    return Moved(*(np.array([value]) for value in values))


def _old_level(response: LineResponse) -> float:
    return float(line_model(response.samples.measurements()).start[1])


def _fields(samples: LinearSamples) -> tuple[Array, Array, Array, Array, Array]:
    return samples.x, samples.y, samples.var_x, samples.var_y, samples.cov


def _coordinates(x: Array, y: Array, var_x: Array, var_y: Array, cov: Array) -> Array:
    """Coordinates in which scores are smooth, bright points and faint ones alike, (5, ...).

    A factor on x and its error moves the first only; far above the noise the second is the
    logarithm of the signal to noise, in the noise it is proportional to it.
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        s_x, s_y = np.sqrt(var_x), np.sqrt(var_y)
        return np.array(
            [
                np.log(s_x),
                np.arcsinh(0.5 * x / s_x),
                np.log(s_y),
                np.arcsinh(0.5 * y / s_y),
                cov / (s_x * s_y),
            ]
        )


def _samples_at(coordinates: Array) -> LinearSamples:
    """Samples of coordinates, the inverse of `_coordinates`."""
    s_x, s_y = np.exp(coordinates[0]), np.exp(coordinates[2])
    return LinearSamples(
        2.0 * s_x * np.sinh(coordinates[1]),
        2.0 * s_y * np.sinh(coordinates[3]),
        s_x**2,
        s_y**2,
        np.clip(coordinates[4], -0.99, 0.99) * s_x * s_y,
    )


def _derivatives(samples: LinearSamples, model: LatentModel, best: Optimum) -> Array:
    """Derivatives of each point's scores by its own coordinates.

    Second derivatives by the data would need those by the parameters beside them: taken alone
    they give the scatter a rise that a turning line would take away again.
    """
    at = _coordinates(*_fields(samples))
    derivatives = np.zeros((5, *best.scores.shape))
    for k, step in enumerate(_STEPS):
        if k == 4 and not np.any(samples.cov):
            continue
        sides = []
        for sign in (1.0, -1.0):
            moved = at.copy()
            moved[k] += sign * step
            data = _samples_at(moved).measurements()
            sides.append(model.marginal(data, best.parameters).scores)
        derivatives[k] = (sides[0] - sides[1]) / (2.0 * step)
    return derivatives

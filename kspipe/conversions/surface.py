"""Surface densities with their noise terms, from matched intensities."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.choices import Choices, Parameters
from kspipe.conversions.convert import Converted, convert
from kspipe.conversions.drawn_error import drawn_over_linear
from kspipe.kernels.noise import NoiseTerm, covariance, propagate, total_error
from kspipe.kernels.statistics import ratio_interval

__all__ = ["Ratio", "Surface", "bend_errors", "carry_noise", "make_surface"]

Array = NDArray[np.float64]
Terms = tuple[NoiseTerm, ...]


@dataclass(frozen=True)
class Surface:
    """One map on the common grid with its random errors.

    Attributes
    ----------
    value : (ny, nx) float64 array
    noise : tuple of NoiseTerm
    slopes : dict of str to float64 array
        Derivative with respect to the intensity of each tracer that it was made from.
    """

    value: Array
    noise: Terms
    slopes: Mapping[str, Array]

    @property
    def error(self) -> Array:
        """Random 1-sigma error."""
        return total_error(self.noise)


@dataclass(frozen=True)
class Ratio(Surface):
    """A ratio of two surfaces, whose first-order error says little where the lower one is faint.

    Attributes
    ----------
    top, bottom : Surface
    unit : float
        What the ratio was multiplied with.
    """

    top: Surface
    bottom: Surface
    unit: float

    def interval(self, n_sigma: float = 1.0) -> tuple[Array, Array]:
        """Confidence interval of the true ratio, exact for any noise in the denominator.

        Parameters
        ----------
        n_sigma : float
            1 for 68.3 %.

        Returns
        -------
        lower, upper : (ny, nx) float64 array
            Infinite where the data leave an end open; also where the ratio itself is NaN for a
            denominator that is not positive.
        """
        top, bottom = self.top.noise, self.bottom.noise
        terms = [covariance(top, top), covariance(bottom, bottom), covariance(top, bottom)]
        shape = self.value.shape
        lower, upper = ratio_interval(
            self.top.value,
            self.bottom.value,
            np.array([np.broadcast_to(term, shape) for term in terms]),
            n_sigma,
        )
        return self.unit * lower, self.unit * upper


def make_surface(
    intensity: Mapping[str, Array],
    noise: Mapping[str, Terms],
    choices: Choices,
    parameters: Parameters,
) -> dict[str, Surface]:
    """Convert intensities and carry their noise through, ratios included.

    Parameters
    ----------
    intensity : mapping of str to (ny, nx) float64 array
        By tracer, canonical units.
    noise : mapping of str to tuple of NoiseTerm
        By tracer.
    choices, parameters
        As in `convert`.

    Returns
    -------
    dict of str to Surface
        ``sigma_atom sigma_gas sigma_sfr`` and, with CO, ``sigma_mol f_mol t_dep``; the last two
        are `Ratio`.
    """
    converted = convert(intensity, choices, parameters)
    return bend_errors(
        carry_noise(converted, noise), converted, intensity, noise, choices, parameters
    )


def bend_errors(
    surfaces: dict[str, Surface],
    converted: Converted,
    intensity: Mapping[str, Array],
    noise: Mapping[str, Terms],
    choices: Choices,
    parameters: Parameters,
) -> dict[str, Surface]:
    """Bring first-order errors to those of draws, where a product bends within its noise.

    Each noise term keeps its share, so that sums and differences know of it, too. Ratios keep
    their first-order errors: the ratio of two noisy numbers has no standard deviation.

    Parameters
    ----------
    surfaces : dict of str to Surface
        With first-order errors.
    converted : Converted
    intensity, noise, choices, parameters
        As in `make_surface`; noise of parameters is not drawn.
    """
    error = {tracer: total_error(noise[tracer]) for tracer in intensity}
    scales = drawn_over_linear(converted, intensity, error, choices, parameters)
    maps = {term.source for tracer in intensity for term in noise[tracer]}
    bent = {}
    for product, scale in scales.items():
        surface = surfaces[product]
        terms = tuple(
            term.with_sigma(term.sigma * scale) if term.source in maps else term
            for term in surface.noise
        )
        bent[product] = Surface(surface.value, terms, surface.slopes)
    return {**surfaces, **bent}


def carry_noise(converted: Converted, noise: Mapping[str, Terms]) -> dict[str, Surface]:
    """Carry noise through a conversion that was made; see `make_surface`.

    Notes
    -----
    f_mol = sigma_mol / sigma_gas has the derivatives (1 - f) / sigma_gas with respect to
    sigma_mol and -f / sigma_gas with respect to sigma_atom. Ratios are NaN where the denominator
    is not positive.
    """
    made = {}
    for name, value in converted.values.items():
        slopes = converted.derivatives[name]
        made[name] = Surface(value, propagate(noise, slopes), slopes)
    if "sigma_mol" in made:
        made["f_mol"] = _ratio(made["sigma_mol"], made["sigma_gas"], noise, 1.0)
        made["t_dep"] = _ratio(made["sigma_mol"], made["sigma_sfr"], noise, 1e-3)
    return made


def _ratio(top: Surface, bottom: Surface, noise: Mapping[str, Terms], unit: float) -> Ratio:
    """Ratio of two surfaces times a unit factor; what they share cancels in its error."""
    positive = np.where(bottom.value > 0, bottom.value, np.nan)
    ratio = top.value / positive
    slopes = {}
    for tracer in {**top.slopes, **bottom.slopes}:
        d_top, d_bottom = top.slopes.get(tracer, 0.0), bottom.slopes.get(tracer, 0.0)
        slopes[tracer] = unit * (d_top - ratio * d_bottom) / positive
    return Ratio(unit * ratio, propagate(noise, slopes), slopes, top, bottom, unit)

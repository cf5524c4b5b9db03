"""The critical isothermal sphere, integrated once from its equation."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache
from typing import Final

import numpy as np
from numpy.typing import NDArray

__all__ = ["CriticalSphere", "critical_sphere"]

Array = NDArray[np.float64]

# The series about the centre is good to 1e-13 here.
_START: Final = 0.05
_STEP: Final = 0.005


@dataclass(frozen=True)
class CriticalSphere:
    """The heaviest isothermal sphere that its own pressure can hold.

    Attributes
    ----------
    xi : float
        Dimensionless radius.
    contrast : float
        Density of the centre over that of the surface.
    mass : float
        In c^3 / (G^1.5 rho^0.5) of the surface density.
    radius : float
        In c / (G rho)^0.5 of the surface density.
    mean_over_surface : float
        Mean density over surface density.
    """

    xi: float
    contrast: float
    mass: float
    radius: float

    @property
    def mean_over_surface(self) -> float:
        """Mean density over surface density."""
        return self.mass / (4.0 / 3.0 * math.pi * self.radius**3)


@cache
def critical_sphere() -> CriticalSphere:
    """Integrate (xi^2 psi')' = xi^2 e^-psi outwards until the mass is the largest.

    At a given surface pressure the mass xi^2 psi' e^(-psi/2) / (4 pi)^0.5 is largest where
    psi'^2 = 2 e^-psi.

    References
    ----------
    .. [1] bonnor1956; ebert1955.
    """
    xi = _START
    # psi = xi^2/6 - xi^4/120 + xi^6/1890 about the centre, from the equation itself.
    state = np.array(
        [xi**2 / 6 - xi**4 / 120 + xi**6 / 1890, xi / 3 - xi**3 / 30 + xi**5 / 315], dtype=float
    )
    while _margin(state) > 0:
        before = xi, state
        state = _advance(xi, state, _STEP)
        xi += _STEP
    # The last step is repeated with the part of it that ends on the maximum.
    low, high = 0.0, _STEP
    for _ in range(60):
        middle = 0.5 * (low + high)
        if _margin(_advance(*before, middle)) > 0:
            low = middle
        else:
            high = middle
    xi, (psi, slope) = before[0] + low, _advance(*before, low)
    root = math.sqrt(4.0 * math.pi)
    return CriticalSphere(
        xi=xi,
        contrast=math.exp(psi),
        mass=xi**2 * float(slope) * math.exp(-psi / 2) / root,
        radius=xi * math.exp(-psi / 2) / root,
    )


def _margin(state: Array) -> float:
    """How far the mass is from its maximum: positive inside."""
    return 2.0 * math.exp(-state[0]) - float(state[1]) ** 2


def _advance(xi: float, state: Array, step: float) -> Array:
    """One step of the classical Runge-Kutta method of fourth order."""

    def rate(at: float, y: Array) -> Array:
        return np.array([y[1], math.exp(-y[0]) - 2.0 * y[1] / at])

    first = rate(xi, state)
    second = rate(xi + step / 2, state + step / 2 * first)
    third = rate(xi + step / 2, state + step / 2 * second)
    fourth = rate(xi + step, state + step * third)
    return np.asarray(state + step / 6 * (first + 2 * second + 2 * third + fourth))

"""Surface densities that depend on themselves."""

from __future__ import annotations

from collections.abc import Callable
from typing import Final

import numpy as np
from numpy.typing import NDArray

__all__ = ["solve_total"]

Array = NDArray[np.float64]
OfTotal = Callable[[Array], Array]
SlopeOfTotal = Callable[[Array], Array | float]

# Relative step after which the total is final: Newton's next step would be of the order of its
# square.
LAST_STEP: Final = 1e-6
MOST_STEPS: Final = 60


def solve_total(base: Array, line: Array, factor: OfTotal, log_slope: SlopeOfTotal) -> Array:
    """Find T = base + factor(T) line, where the factor falls or stays level with T.

    Parameters
    ----------
    base : float64 array
        What does not depend on the factor.
    line : float64 array
        Intensity of the same shape; where it is negative, T = base is returned.
    factor, log_slope : callable
        Of an array of T: the factor, and d ln(factor) / dT. For T^-g they must have g < 1.

    Returns
    -------
    float64 array
        NaN where an input is NaN.

    Raises
    ------
    ArithmeticError
        If it does not converge, which no factor as described does.

    Notes
    -----
    T - base - factor(T) line rises with T with a slope of at least 1 where line >= 0: there is one
    root. Newton's steps from T = base approach it from below where the factor is convex. Where
    the factor is level below a break (T_b) and a power law -g above, a step from the level part
    overshoots to base + factor(T_b) line, and the next ends above T_b again.
    """
    positive = np.maximum(line, 0.0)
    total = np.array(base, dtype=float)
    for _ in range(MOST_STEPS):
        product = factor(total) * positive
        step = (base + product - total) / (1.0 - product * log_slope(total))
        total = total + step
        if not np.any(np.abs(step) > LAST_STEP * np.abs(total)):
            return np.asarray(total, dtype=float)
    raise ArithmeticError(f"no surface density found in {MOST_STEPS} steps")

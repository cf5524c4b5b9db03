"""Roots of many equations at once."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from kspipe.kernels.dual import Dual

__all__ = ["bisect", "solve_falling"]

Array = NDArray[np.float64]

# Relative step after which a root is final: Newton's next step would be of the order of its square.
LAST_STEP: Final = 1e-7
MOST_STEPS: Final = 200
# A function of order one that is this near to zero is at its root.
CLOSE: Final = 1e-13
# Pixels that are done are left out once fewer than this share still moves.
WORTH_LEAVING_OUT: Final = 0.6


def solve_falling(
    residual: Callable[[Any, Mapping[str, Any]], Any],
    inputs: Mapping[str, Any],
    low: float,
    high: float,
    start: Array,
    doubtful: NDArray[np.bool_],
) -> Array:
    """Find where functions that fall from `low` to `high` cross zero.

    Parameters
    ----------
    residual : callable
        ``residual(x, inputs)``, of order one; of an array or a `Dual` and the inputs of the same
        pixels.
    inputs : mapping of str to float64 array
        Each a single value or of the shape of `start`.
    low, high : float
        Ends of the bracket.
    start : (n,) float64 array
        First guess, inside it.
    doubtful : (n,) bool array
        Where a function may be negative at `low` already.

    Returns
    -------
    (n,) float64 array
        `low` where a function is not positive there; NaN where an input is NaN.

    Raises
    ------
    ArithmeticError
        If the steps do not end, which halving the bracket makes impossible for finite functions.

    Notes
    -----
    Newton's steps, replaced by the middle of the bracket where they leave it or where they do
    not halve within two steps. Pixels that are done are left out of further steps.
    """
    shape = start.shape
    root = np.array(start, dtype=float).reshape(-1)
    taken = {name: np.reshape(a, -1) if np.size(a) > 1 else a for name, a in inputs.items()}
    index = np.arange(root.size)
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        asked = np.flatnonzero(doubtful.reshape(-1) & ~np.isnan(root))
        if asked.size:
            part = {n: a[asked] if np.size(a) > 1 else a for n, a in taken.items()}
            at_low = residual(np.full(asked.size, low), part)
            root[asked[~(at_low > 0)]] = low
            root[asked[np.isnan(at_low)]] = np.nan
        bracket = np.full(root.size, low), np.full(root.size, high)
        last = before = np.full(root.size, high - low)
        # Many first guesses are the root, which their value alone shows.
        moving = (root > low) & ~(np.abs(residual(root, taken)) <= CLOSE)
        for _ in range(MOST_STEPS):
            n_moving = np.count_nonzero(moving)
            if n_moving < WORTH_LEAVING_OUT * index.size or n_moving == 0:
                index = index[moving]
                bracket = bracket[0][moving], bracket[1][moving]
                before, last = before[moving], last[moving]
                taken = {n: a[moving] if np.size(a) > 1 else a for n, a in taken.items()}
            if not index.size:
                return root.reshape(shape)
            x = root[index]
            at = residual(Dual(x, {"x": 1.0}), taken)
            is_left = at.value > 0
            bracket = np.where(is_left, x, bracket[0]), np.where(is_left, bracket[1], x)
            step = at.value / at.slopes["x"]
            newton = x - step
            good = (newton >= bracket[0]) & (newton <= bracket[1]) & (np.abs(step) <= 0.5 * before)
            stepped = np.where(good, newton, 0.5 * (bracket[0] + bracket[1]))
            stepped = np.where((at.value == 0.0) | np.isnan(at.value), x + at.value, stepped)
            before, last = last, np.abs(stepped - x)
            root[index] = stepped
            moving = last > LAST_STEP * np.abs(stepped)
    raise ArithmeticError(f"no root found in {MOST_STEPS} steps")


def bisect(function: Callable[[Array], Array], low: Array, high: Array, steps: int = 60) -> Array:
    """Halve brackets in whose ends a function has different signs.

    Parameters
    ----------
    function : callable
        Of an array of the shape of `low`.
    low, high : float64 array
        Positive; halved in the logarithm.
    steps : int

    Returns
    -------
    float64 array
        The middle of the last brackets.
    """
    low, high = np.log(low), np.log(high)
    sign = np.sign(function(np.exp(low)))
    for _ in range(steps):
        middle = 0.5 * (low + high)
        same = np.sign(function(np.exp(middle))) == sign
        low, high = np.where(same, middle, low), np.where(same, high, middle)
    return np.asarray(np.exp(0.5 * (low + high)))

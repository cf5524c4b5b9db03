"""A quantity over the disc with its errors, and what is made of several such quantities."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Field", "combine"]

Array = NDArray[np.float64]

# A difference to find a slope goes no further than this share of the value, so that a ratio with
# a large error stays a ratio.
LONGEST_STEP = 0.5


@dataclass(frozen=True)
class Field:
    """A quantity on the grid.

    Attributes
    ----------
    value : float64 array
        Broadcasts with the grid; NaN where it is not known.
    random : float64 array or None
        Random 1-sigma error of each pixel; None where there is none.
    common : tuple of float64 array
        For each thing that all pixels share (a number, a region, a row of a table): the change of
        all pixels where it is 1 sigma higher.
    outside : bool array
        Where the quantity lies outside the range in which it is known.
    notes : tuple of str
        For the history.
    """

    value: Array
    random: Array | None = None
    common: tuple[Array, ...] = ()
    outside: NDArray[np.bool_] | None = None
    notes: tuple[str, ...] = ()

    def around(self, error: Array) -> tuple[Array, Array]:
        """The value one error higher and lower, or half of itself where that is nearer."""
        nearest = np.where(self.value == 0, np.inf, LONGEST_STEP * np.abs(self.value))
        step = np.minimum(np.abs(error), nearest)
        return np.asarray(self.value + step), np.asarray(self.value - step)


def combine(function: Callable[[Mapping[str, Array]], Array], fields: Mapping[str, Field]) -> Field:
    """Make one quantity of several, with first-order errors.

    Parameters
    ----------
    function : callable
        Of the values by name.
    fields : mapping of str to Field
        Independent of each other.

    Returns
    -------
    Field
        Differences are taken over one error, or half the value where that is less.
    """
    values = {name: field.value for name, field in fields.items()}
    made = np.asarray(function(values), dtype=float)

    def change(name: str, error: Array) -> Array:
        up, down = fields[name].around(error)
        high, low = (function({**values, name: value}) for value in (up, down))
        width = up - down
        with np.errstate(invalid="ignore", divide="ignore"):
            slope = np.where(width != 0, (high - low) / width, 0.0)
        return np.asarray(slope * error)

    variance: Array | float = 0.0
    common: list[Array] = []
    for name, field in fields.items():
        if field.random is not None:
            variance = variance + change(name, field.random) ** 2
        common += [change(name, pattern) for pattern in field.common]
    outside = [field.outside for field in fields.values() if field.outside is not None]
    return Field(
        made,
        np.sqrt(variance) if np.any(variance) else None,
        tuple(common),
        np.logical_or.reduce(np.broadcast_arrays(*outside)) if outside else None,
        tuple(note for field in fields.values() for note in field.notes),
    )

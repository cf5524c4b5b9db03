"""Values that carry their derivatives and what was lost on the way."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

__all__ = ["Traced", "chain"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
_NOWHERE: Mask = np.zeros((), dtype=bool)


@dataclass(frozen=True)
class Traced:
    """A value with its derivatives to first order.

    Attributes
    ----------
    value : float64 array
    slopes : mapping of str to float64 array
        Derivative with respect to each input.
    no_cold : bool array
        Where it needs a temperature and there is none.
    outside : bool array
        Where something it was made from lies outside the range of its record.
    """

    value: Array
    slopes: Mapping[str, Array] = field(default_factory=dict)
    no_cold: Mask = field(default_factory=lambda: _NOWHERE)
    outside: Mask = field(default_factory=lambda: _NOWHERE)

    @classmethod
    def given(cls, name: str, value: Array) -> Traced:
        """An input, which is its own derivative."""
        return cls(value, {name: np.ones(np.shape(value))})

    def power(self, exponent: float, factor: float = 1.0) -> Traced:
        """Return factor times the value to a power."""
        value = np.asarray(factor * self.value**exponent)
        return chain(value, (self, exponent * value / self.value))

    def __mul__(self, other: Traced) -> Traced:
        return chain(self.value * other.value, (self, other.value), (other, self.value))

    def __truediv__(self, other: Traced) -> Traced:
        ratio = np.asarray(self.value / other.value)
        return chain(ratio, (self, 1.0 / other.value), (other, -ratio / other.value))


def chain(
    value: Array,
    *parts: tuple[Traced, Array | float],
    no_cold: Mask = _NOWHERE,
    outside: Mask = _NOWHERE,
) -> Traced:
    """Apply the chain rule.

    Parameters
    ----------
    value : float64 array
        What was made of the parts.
    *parts : (Traced, float64 array)
        Each with the partial derivative of the value with respect to it.
    no_cold, outside : bool array
        Losses of this very step; those of the parts are added.
    """
    slopes: dict[str, Array] = {}
    for part, partial in parts:
        for name, slope in part.slopes.items():
            slopes[name] = np.asarray(slopes.get(name, 0.0) + partial * slope)
        no_cold = np.asarray(no_cold | part.no_cold)
        outside = np.asarray(outside | part.outside)
    return Traced(value, slopes, no_cold, outside)

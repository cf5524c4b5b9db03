"""Mach numbers in one and in three dimensions, as types that cannot be mixed up."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

__all__ = ["Mach1D", "Mach3D", "require_1d", "require_3d"]

Array = NDArray[np.float64]

_ROOT_3: Final = math.sqrt(3.0)


@dataclass(frozen=True)
class Mach1D:
    """Velocity dispersion along a line of sight over the sound speed.

    Attributes
    ----------
    value : float64 array
    """

    value: Array

    def to_3d(self) -> Mach3D:
        """Return the dispersion of all three directions, for isotropic motions."""
        return Mach3D(np.asarray(_ROOT_3 * np.asarray(self.value)))


@dataclass(frozen=True)
class Mach3D:
    """Velocity dispersion in three dimensions over the sound speed.

    Attributes
    ----------
    value : float64 array
    """

    value: Array

    def to_1d(self) -> Mach1D:
        """Return the dispersion along a line of sight, for isotropic motions."""
        return Mach1D(np.asarray(np.asarray(self.value) / _ROOT_3))


def require_1d(mach: object) -> Array:
    """Return the numbers of a one-dimensional Mach number.

    Raises
    ------
    TypeError
        If it is anything else: the two differ by 3^0.5, and a critical density by up to 9.
    """
    if not isinstance(mach, Mach1D):
        raise TypeError(f"expected Mach1D, not {type(mach).__name__}; Mach3D has to_1d()")
    return np.asarray(mach.value, dtype=float)


def require_3d(mach: object) -> Array:
    """Return the numbers of a three-dimensional Mach number.

    Raises
    ------
    TypeError
        If it is anything else.
    """
    if not isinstance(mach, Mach3D):
        raise TypeError(f"expected Mach3D, not {type(mach).__name__}; Mach1D has to_3d()")
    return np.asarray(mach.value, dtype=float)

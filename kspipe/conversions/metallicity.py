"""Metallicity over the disc, and the dimensionless Z' that records take."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from kspipe.core.constants import OH_SOLAR

__all__ = ["oh_from_gradient", "z_prime"]

Array = NDArray[np.float64]


def oh_from_gradient(radius: Array, oh_centre: float, slope_dex: float) -> Array:
    """12 + log10(O/H) at a radius, for a gradient in dex per unit of that radius."""
    return oh_centre + slope_dex * np.asarray(radius, dtype=float)


def z_prime(oh: Array | float, oh_solar: float = OH_SOLAR) -> Array:
    """Metallicity relative to the Sun, 10^(12+log(O/H) - solar).

    Parameters
    ----------
    oh : array_like
        12 + log10(O/H).
    oh_solar : float
        Its solar value; 8.69 by Asplund et al. 2009, ARA&A 47, 481 [1]_.

    References
    ----------
    .. [1] asplund2009, Table 1.
    """
    return np.asarray(10.0 ** (np.asarray(oh, dtype=float) - oh_solar))

"""What a metallicity of one means: anchors of the Sun, and the way from one to another."""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.core.constants import OH_SOLAR

__all__ = ["SOLAR_ANCHORS", "anchor_shift_dex", "oh_of_z_prime"]

Array = NDArray[np.float64]

# Metals by mass of the Sun with 12 + log10(O/H) = 8.69: Asplund et al. 2009, Table 4 (value from
# memory).
Z_SOLAR: Final = 0.0134

# 12 + log10(O/H) of Z' = 1: Asplund et al. 2009; the value of Krumholz, McKee & Tumlinson 2009;
# and metals that are 0.02 of the mass, in the proportions of the first.
SOLAR_ANCHORS: Final = {
    "8.69": OH_SOLAR,
    "8.76": 8.76,
    "Z = 0.02": OH_SOLAR + math.log10(0.02 / Z_SOLAR),
}


def oh_of_z_prime(z_prime: Array | float, anchor: str) -> Array:
    """12 + log10(O/H) of a metallicity relative to the Sun; NaN where it is not positive.

    Parameters
    ----------
    z_prime : array_like
    anchor : str
        Of `SOLAR_ANCHORS`.
    """
    value = np.asarray(z_prime, dtype=float)
    return np.asarray(SOLAR_ANCHORS[anchor] + np.log10(np.where(value > 0, value, np.nan)))


def anchor_shift_dex(anchor: str) -> float:
    """How much log10 Z' changes from an anchor to that of kspipe, 8.69."""
    return SOLAR_ANCHORS[anchor] - OH_SOLAR

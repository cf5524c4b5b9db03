"""The far-ultraviolet radiation field in a typed unit: a constant, or from star formation."""

from __future__ import annotations

from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

__all__ = ["FIELD_UNITS", "FieldUnit", "convert_field", "field_from_sfr"]

Array = NDArray[np.float64]

FieldUnit = Literal["solar neighbourhood", "Draine", "Habing"]

# Flux from 6 to 13.6 eV in units of Habing 1968's field, 1.6e-3 erg/s/cm2: 1.71 in that of Draine
# 1978 (value from memory), which is the field of the solar neighbourhood in the papers on
# shielding that count in it.
FIELD_UNITS: Final[dict[FieldUnit, float]] = {
    "solar neighbourhood": 1.71,
    "Draine": 1.71,
    "Habing": 1.0,
}

# Star formation of the solar neighbourhood [Msun/yr/kpc2] (value from memory).
SOLAR_SFR: Final = 2.5e-3


def convert_field(field: Array | float, given: FieldUnit, wanted: FieldUnit) -> Array:
    """Take a radiation field from one unit to another."""
    return np.asarray(field, dtype=float) * (FIELD_UNITS[given] / FIELD_UNITS[wanted])


def field_from_sfr(sigma_sfr_msun_yr_kpc2: Array, unit: FieldUnit) -> Array:
    """Radiation field that is proportional to star formation.

    Parameters
    ----------
    sigma_sfr_msun_yr_kpc2 : float64 array
        Face-on. Negative values stay negative: the caller flags them.
    unit : FieldUnit
        Of the result; 1 in the solar neighbourhood, where Sigma_SFR is 2.5e-3 Msun/yr/kpc2.

    References
    ----------
    .. [1] ostriker2010: the heating of the gas, and with it the field, follows star formation.
    """
    solar = np.asarray(sigma_sfr_msun_yr_kpc2, dtype=float) / SOLAR_SFR
    return convert_field(solar, "solar neighbourhood", unit)

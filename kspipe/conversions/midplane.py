"""Density of stars in the midplane, through a stated definition of the scale height."""

from __future__ import annotations

from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

__all__ = ["ScaleHeight", "midplane_density_msun_pc3", "scale_height_from_length"]

Array = NDArray[np.float64]

# What a stated scale height z0 is: of the profile sech^2(z / z0), or sech^2(z / (2 z0)), whose
# wings fall as exp(-z / z0).
ScaleHeight = Literal["sech2(z/z0)", "sech2(z/2z0)"]
_COLUMN_OVER_MIDPLANE: Final = {"sech2(z/z0)": 2.0, "sech2(z/2z0)": 4.0}

# Radial scale length over z0 of the second definition: Leroy et al. 2008 after Kregel et al. 2002
# (value from memory).
LENGTH_OVER_HEIGHT: Final = 7.3


def midplane_density_msun_pc3(
    sigma_star_msun_pc2: Array, scale_height_pc: Array | float, definition: ScaleHeight
) -> Array:
    """Density of stars in the midplane of a self-gravitating, isothermal disc.

    Parameters
    ----------
    sigma_star_msun_pc2 : float64 array
        Face-on.
    scale_height_pc : float or float64 array
        z0.
    definition : {"sech2(z/z0)", "sech2(z/2z0)"}
        Of z0: the two differ by a factor 2 in the density.

    Notes
    -----
    Sigma = 2 rho z0 for sech^2(z/z0), 4 rho z0 for sech^2(z/(2 z0)).
    """
    factor = _COLUMN_OVER_MIDPLANE[definition]
    return np.asarray(sigma_star_msun_pc2 / (factor * scale_height_pc))


def scale_height_from_length(scale_length_pc: Array | float, definition: ScaleHeight) -> Array:
    """Scale height of a typical disc of this radial scale length [pc].

    Parameters
    ----------
    scale_length_pc : array_like
        Of the exponential in radius.
    definition : {"sech2(z/z0)", "sech2(z/2z0)"}
        Of the height that comes out: that of the first is twice that of the second.

    References
    ----------
    .. [1] leroy2008, Appendix A, after Kregel et al. 2002: l / z0 = 7.3 (from memory), with
       Sigma = 4 rho z0.
    """
    height = np.asarray(scale_length_pc, dtype=float) / LENGTH_OVER_HEIGHT
    return np.asarray(height * 2.0 if definition == "sech2(z/z0)" else height)

"""Stellar surface density from near-infrared light, and the midplane density that follows."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.record import Record
from kspipe.core.registry import Registry

__all__ = ["STARS", "ScaleHeight", "Stars", "midplane_density_msun_pc3"]

Array = NDArray[np.float64]

# What a stated scale height z0 is: of the profile sech^2(z / z0), or sech^2(z / (2 z0)), whose
# wings fall as exp(-z / z0).
ScaleHeight = Literal["sech2(z/z0)", "sech2(z/2z0)"]
_COLUMN_OVER_MIDPLANE: Final = {"sech2(z/z0)": 2.0, "sech2(z/2z0)": 4.0}


@dataclass(frozen=True, kw_only=True)
class Stars(Record):
    """Surface density per intensity of one band.

    Attributes
    ----------
    tracer : str
    msun_pc2_per_intensity : float
        Msun/pc2 per MJy/sr at a mass-to-light ratio of 1 solar unit at 3.4 um.
    """

    tracer: str
    msun_pc2_per_intensity: float


STARS = Registry[Stars]("stellar-mass record")

_NOTE = (
    "M/L in solar units at 3.4 um: 0.5 where stars are old, about 0.2 where many are young "
    "(common practice). Hot dust adds some light."
)
STARS.add(
    Stars(
        key="leroy2019_36um",
        label="3.6 um",
        cite="leroy2019",
        where="the conversion of near-infrared light (equation number not confirmed)",
        formula="Sigma_star = 700 (M/L) I_3.6um cos i  [Msun/pc2; MJy/sr]",
        certainty="from memory",
        imf="Kroupa",
        note=_NOTE,
        tracer="3.6um",
        msun_pc2_per_intensity=700.0,
    )
)
STARS.add(
    Stars(
        key="leroy2019_w1",
        label="W1",
        cite="leroy2019",
        where="the conversion of near-infrared light (equation number not confirmed)",
        formula="Sigma_star = 660 (M/L) I_W1 cos i  [Msun/pc2; MJy/sr]",
        certainty="from memory",
        imf="Kroupa",
        note=_NOTE,
        tracer="W1",
        msun_pc2_per_intensity=660.0,
    )
)


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

"""How long ago the stars formed that a tracer sees, and how many of them are massive."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from typing import Final

from scipy.integrate import quad

from kspipe.conversions.imf import HIGHEST_MSUN, PIVOT_MSUN, imf_named

__all__ = ["MASSIVE_MSUN", "TRACER_AGES", "TracerAges", "massive_stars_per_msun"]

# Stars from here on end as supernovae (common practice).
MASSIVE_MSUN: Final = 8.0


@dataclass(frozen=True)
class TracerAges:
    """Ages of the stars behind a tracer under constant star formation.

    Attributes
    ----------
    youngest_myr, mean_myr, oldest_myr : float
        The youngest, the mean, and the age below which 90 percent of the emission arises.
    cite, where : str
        The source.
    """

    youngest_myr: float
    mean_myr: float
    oldest_myr: float
    cite: str = "kennicutt2012"
    where: str = "Table 1"

    def __str__(self) -> str:
        return f"{self.youngest_myr:g}-{self.mean_myr:g}-{self.oldest_myr:g}"


TRACER_AGES: Final = {
    "FUV": TracerAges(0.0, 10.0, 100.0),
    "NUV": TracerAges(0.0, 10.0, 200.0),
    "Halpha": TracerAges(0.0, 3.0, 10.0),
    "24um": TracerAges(0.0, 5.0, 100.0),
    "22um": TracerAges(0.0, 5.0, 100.0, where="Table 1, the row of 24 um"),
}


def massive_stars_per_msun(imf: str, least_msun: float = MASSIVE_MSUN) -> float:
    """Stars more massive than a limit for each solar mass that forms.

    Parameters
    ----------
    imf : str
        ``Kroupa``, ``Salpeter`` or ``Chabrier``.
    least_msun : float

    Returns
    -------
    float
        Per Msun of stars from 0.1 to 100 Msun; 0.011 for Kroupa and 8 Msun.
    """
    function = imf_named(imf)
    mass = function.mass_per_massive_star * function.number(PIVOT_MSUN)
    edges = (least_msun, *(edge for edge in function.breaks if edge > least_msun), HIGHEST_MSUN)
    number = math.fsum(
        quad(function.number, low, high, epsrel=1e-10)[0] for low, high in itertools.pairwise(edges)
    )
    return number / mass

"""The CO-to-H2 conversion factor, always for CO(1-0) and with helium."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.record import Range, Record
from kspipe.core.constants import HELIUM_FACTOR
from kspipe.core.registry import Registry

__all__ = ["ALPHA_CO", "AlphaCO"]

Array = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True)
class AlphaCO(Record):
    """alpha_CO [Msun/pc2 per K km/s of CO(1-0)] as a function of metallicity.

    Attributes
    ----------
    function : callable
        alpha_CO of Z' = 10^(12+log(O/H) - 8.69).
    depends_on_z : bool
        Whether Z' matters at all.
    """

    function: Callable[[Array], Array]
    depends_on_z: bool

    def __call__(self, z_prime: Array) -> Array:
        """Evaluate; NaN metallicity gives NaN where metallicity matters."""
        return self.function(np.asarray(z_prime, dtype=float))


def _galactic(z_prime: Array) -> Array:
    return np.full(np.shape(z_prime), 4.35)


def _sun2020(z_prime: Array) -> Array:
    return 4.35 * z_prime**-1.6


ALPHA_CO = Registry[AlphaCO]("alpha_CO record")

ALPHA_CO.add(
    AlphaCO(
        key="bolatto2013_galactic",
        label=r"$\alpha_{\rm CO}$ = 4.35",
        cite="bolatto2013",
        where="Section 8, the value recommended for the Milky Way",
        formula="alpha_CO = 4.35  [Msun/pc2 per K km/s], X_CO = 2e20 cm-2 per K km/s",
        certainty="verified",
        scatter_dex=0.11,
        helium_factor=HELIUM_FACTOR,
        note="+-30 % (0.11 dex) in the Milky Way disc; too high in galaxy centres, too low at low "
        "metallicity.",
        function=_galactic,
        depends_on_z=False,
    )
)
ALPHA_CO.add(
    AlphaCO(
        key="sun2020",
        label=r"$\alpha_{\rm CO} \propto Z'^{-1.6}$",
        cite="sun2020",
        where="alpha_CO prescription of the paper (equation number not confirmed)",
        formula="alpha_CO = 4.35 Z'^-1.6  [Msun/pc2 per K km/s]",
        certainty="verified",
        ranges=(Range("Z'", 0.2, 2.0),),
        helium_factor=HELIUM_FACTOR,
        note="Z' on the scale 12+log(O/H) = 8.69; an offset of 0.2 dex between metallicity scales "
        "is 0.32 dex in alpha_CO. The range is that of discs where such slopes are used (common "
        "practice), not one printed in the paper.",
        function=_sun2020,
        depends_on_z=True,
    )
)

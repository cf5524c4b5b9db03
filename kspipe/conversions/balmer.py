"""Attenuation of H-alpha by the ratio of H-alpha to H-beta."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.record import Record
from kspipe.core.registry import Registry

__all__ = ["BALMER", "Balmer"]

Array = NDArray[np.float64]

# Case B at 1e4 K and about 100 cm-3; 2.75 at 2e4 K and 3.04 at 5e3 K (the last two from memory).
CASE_B: Final = 2.86


@dataclass(frozen=True, kw_only=True)
class Balmer(Record):
    """A curve at the two lines.

    Attributes
    ----------
    k_halpha, k_hbeta : float
        A / E(B-V) of the gas.
    """

    k_halpha: float
    k_hbeta: float

    @property
    def power(self) -> float:
        """Of the decrement over its intrinsic value: H-alpha is multiplied by that."""
        return self.k_halpha / (self.k_hbeta - self.k_halpha)

    def excess(self, decrement: Array) -> Array:
        """E(B-V) of the gas [mag]; negative where H-beta is too bright, NaN where not positive."""
        ratio = np.asarray(decrement, dtype=float) / CASE_B
        log = np.log10(np.where(ratio > 0, ratio, np.nan))
        return np.asarray(2.5 / (self.k_hbeta - self.k_halpha) * log)

    def factor(self, decrement: Array) -> Array:
        """What H-alpha is multiplied by; NaN where the decrement is not positive."""
        ratio = np.asarray(decrement, dtype=float) / CASE_B
        return np.asarray(np.where(ratio > 0, ratio, np.nan) ** self.power)


BALMER = Registry[Balmer]("Balmer-decrement record")

_NOTE = (
    "A screen. Where Halpha/Hbeta is below 2.86 the attenuation is negative and kept, so that "
    "noise averages out; a pixel with either line at or below zero is NaN and counted as "
    "no_solution."
)
BALMER.add(
    Balmer(
        key="cardelli1989_balmer",
        label="Balmer decrement, Cardelli et al. 1989",
        cite="cardelli1989",
        where="Eqs. 1 to 3 with R_V = 3.1, at 6562.8 and 4861.3 A",
        formula="A_Halpha = 2.535 E(B-V), E(B-V) = 2.5 / (3.609 - 2.535) log10[(Halpha/Hbeta) / "
        "2.86]  [mag]",
        certainty="verified",
        note=_NOTE,
        k_halpha=2.535,
        k_hbeta=3.609,
    )
)
BALMER.add(
    Balmer(
        key="calzetti2000_balmer",
        label="Balmer decrement, Calzetti et al. 2000",
        cite="calzetti2000",
        where="the starburst curve with R_V = 4.05, at 6562.8 and 4861.3 A",
        formula="A_Halpha = 3.326 E(B-V), E(B-V) = 2.5 / (4.598 - 3.326) log10[(Halpha/Hbeta) / "
        "2.86]  [mag]",
        certainty="verified",
        note=f"{_NOTE} The curve is for the continuum of stars; for lines a Galactic screen is "
        "the usual choice.",
        k_halpha=3.326,
        k_hbeta=4.598,
    )
)

"""Initial mass functions, and what a star-formation rate is worth in another one.

A tracer counts massive stars. Two mass functions that give the same number of stars of
`PIVOT_MSUN` differ in the mass of all the others: the ratio of these masses is the factor between
their star-formation rates.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np

from kspipe.conversions.record import Record
from kspipe.core.registry import Registry

__all__ = ["IMFS", "Imf", "imf_factor", "imf_named"]

# At another mass the factors change by up to 10 % (slope -2.3 against -2.35).
PIVOT_MSUN: Final = 30.0
LOWEST_MSUN, HIGHEST_MSUN = 0.1, 100.0


@dataclass(frozen=True, kw_only=True)
class Imf(Record):
    """Number of stars per unit of mass, up to a constant, from 0.1 to 100 Msun.

    Attributes
    ----------
    name : str
        As records and recipes call it.
    number : callable
        Of the mass [Msun].
    breaks : tuple of float
        Where the function has a kink [Msun].
    """

    name: str
    number: Callable[[float], float]
    breaks: tuple[float, ...] = ()

    @property
    def mass_per_massive_star(self) -> float:
        """Mass of all stars over the number of stars per Msun at the pivot."""
        # Its import costs half a second, and few recipes change the mass function.
        from scipy.integrate import quad  # noqa: PLC0415

        edges = (LOWEST_MSUN, *self.breaks, HIGHEST_MSUN)
        mass = sum(
            quad(lambda m: m * self.number(m), low, high, epsrel=1e-12)[0]
            for low, high in itertools.pairwise(edges)
        )
        return float(mass / self.number(PIVOT_MSUN))


def _salpeter(mass: float) -> float:
    return float(mass**-2.35)


def _kroupa(mass: float) -> float:
    return float(mass**-2.3 if mass >= 0.5 else 2.0 * mass**-1.3)


def _chabrier(mass: float) -> float:
    if mass >= 1.0:
        return float(mass**-2.3)
    width = 2.0 * 0.69**2
    at_one = math.exp(-(np.log10(0.079) ** 2) / width)
    return math.exp(-(math.log10(mass / 0.079) ** 2) / width) / (at_one * mass)


IMFS = Registry[Imf]("initial mass function")

IMFS.add(
    Imf(
        key="salpeter1955",
        label="Salpeter",
        cite="salpeter1955",
        where="the slope of the paper, from 0.1 to 100 Msun",
        formula="dN/dm = m^-2.35  [Msun]",
        certainty="verified",
        imf="Salpeter",
        name="Salpeter",
        number=_salpeter,
    )
)
IMFS.add(
    Imf(
        key="kroupa2001",
        label="Kroupa",
        cite="kroupa2001",
        where="the universal form, from 0.1 to 100 Msun",
        formula="dN/dm = m^-2.3 from 0.5 Msun, 2 m^-1.3 below  [Msun]",
        certainty="verified",
        imf="Kroupa",
        name="Kroupa",
        number=_kroupa,
        breaks=(0.5,),
    )
)
IMFS.add(
    Imf(
        key="chabrier2003",
        label="Chabrier",
        cite="chabrier2003",
        where="single stars of the disc, from 0.1 to 100 Msun",
        formula="dN/dm = m^-2.3 from 1 Msun; below, m^-1 exp(-log10(m/0.079)^2 / (2 x 0.69^2)), "
        "continuous  [Msun]",
        certainty="from memory",
        imf="Chabrier",
        name="Chabrier",
        number=_chabrier,
        breaks=(1.0,),
    )
)


def imf_named(name: str) -> Imf:
    """Find a mass function by the name that records use.

    Raises
    ------
    KeyError
        If there is none.
    """
    for imf in IMFS:
        if imf.name == name:
            return imf
    raise KeyError(f"no initial mass function is called {name!r}")


def imf_factor(given: str, wanted: str) -> float:
    """Multiply a star-formation rate, or a stellar mass, of one mass function to have another.

    Parameters
    ----------
    given, wanted : str
        ``Kroupa``, ``Salpeter`` or ``Chabrier``.

    Returns
    -------
    float
        Exactly 1 where they are the same.
    """
    if given == wanted:
        return 1.0
    return imf_named(wanted).mass_per_massive_star / imf_named(given).mass_per_massive_star

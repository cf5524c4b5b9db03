"""Relations in which the pressure of the midplane decides how much gas is molecular."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final

import numpy as np

from kspipe.core.constants import HELIUM_FACTOR
from kspipe.relations.law import LAWS, Direction, Law, Outcome
from kspipe.relations.parameters import RATE_CHOICES, Parameter
from kspipe.relations.vertical import elmegreen_pressure, stellar_dispersion

__all__ = ["blitz_pressure"]


def blitz_pressure(
    sigma_gas_msun_pc2: Any, sigma_star_msun_pc2: Any, dispersion_kms: float, height_pc: float
) -> Any:
    """Pressure P/k [K cm^-3] where stars outweigh gas: 272 Sigma Sigma_*^0.5 v h_*^-0.5.

    References
    ----------
    .. [1] blitz2006 (coefficient from memory; 0.84 G^0.5 in these units is 270).
    """
    factor = 272.0 * dispersion_kms / height_pc**0.5
    return factor * sigma_gas_msun_pc2 * np.sqrt(sigma_star_msun_pc2)


def _from_pressure(pressure: Any, given: Mapping[str, float]) -> Outcome:
    """F = R / (1 + R), R = (P / P0)^exponent."""
    return Outcome(1.0 / (1.0 + np.exp(np.log(pressure / given["p0"]) * -given["exponent"])))


def _blitz2006(own: Mapping[str, Any], given: Mapping[str, float]) -> Outcome:
    pressure = blitz_pressure(
        own["sigma_gas"], own["sigma_star"], given["gas_dispersion"], given["scale_height"]
    )
    return _from_pressure(pressure, given)


def _leroy2008(own: Mapping[str, Any], given: Mapping[str, float]) -> Outcome:
    stars = own["sigma_star"]
    dispersion = stellar_dispersion(stars, 1e3 * given["scale_length"])
    pressure = elmegreen_pressure(own["sigma_gas"], stars, given["gas_dispersion"], dispersion)
    return _from_pressure(pressure, given)


def _gas_dispersion(default: float) -> Parameter:
    return Parameter("gas_dispersion", "velocity dispersion of gas, km/s", default, 2.0, 50.0)


_SHARED: Final = {
    "certainty": "verified",
    "needs": ("sigma_gas", "sigma_star"),
    "one_of": ("depletion_time", "efficiency"),
    "helium_factor": HELIUM_FACTOR,
    "metallicity_anchor": "none: metallicity does not enter",
    "monotonic": {"sigma_gas": Direction(1), "sigma_star": Direction(1)},
    "statistic": "median",
}

LAWS.add(
    Law(
        key="blitz2006",
        label="Blitz & Rosolowsky 2006",
        cite="blitz2006",
        where="the fit of R_mol against pressure (equation number from memory)",
        formula="f_H2 = R/(1 + R), R = (P/P0)^0.92, P0/k = 4.3e4 K cm^-3, "
        "P/k = 272 Sigma_gas Sigma_star^0.5 v_g h_star^-0.5",
        function=_blitz2006,
        parameters=(
            Parameter("scale_height", "of the stars, in pc", None, 20.0, 3000.0),
            _gas_dispersion(8.0),
            Parameter("p0", "pressure at which H2 equals HI, P/k in K cm^-3", 4.3e4, 1e3, 1e6),
            Parameter("exponent", "of R against pressure", 0.92, 0.1, 3.0),
            *RATE_CHOICES,
        ),
        note="P0/k = (4.3 +- 0.6)e4; 3.5e4, of an earlier fit, is also in use: type p0. The 272 of "
        "the pressure is from memory and 0.7 % above its derivation.",
        **_SHARED,  # type: ignore[arg-type]
    )
)
LAWS.add(
    Law(
        key="leroy2008_pressure",
        label="Leroy et al. 2008, pressure",
        cite="leroy2008",
        where="the fit of R_mol against pressure; pressure of elmegreen1989",
        formula="f_H2 = R/(1 + R), R = (P/P0)^0.8, P0/k = 1.7e4 K cm^-3, P = (pi/2) G Sigma_gas "
        "(Sigma_gas + (sigma_g/sigma_star) Sigma_star), sigma_star = (2 pi G Sigma_star l/7.3)^0.5",
        function=_leroy2008,
        parameters=(
            Parameter("scale_length", "exponential, of the stars, in kpc", None, 0.1, 30.0),
            _gas_dispersion(11.0),
            Parameter("p0", "pressure at which H2 equals HI, P/k in K cm^-3", 1.7e4, 1e3, 1e6),
            Parameter("exponent", "of R against pressure", 0.8, 0.1, 3.0),
            *RATE_CHOICES,
        ),
        note="The dispersion of gas of 11 km/s and the scale height l/7.3 are from memory.",
        **_SHARED,  # type: ignore[arg-type]
    )
)

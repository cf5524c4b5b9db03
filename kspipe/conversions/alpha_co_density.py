"""alpha_CO that also falls with the surface density of stars, or of everything."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.alpha_co import ALPHA_CO, AlphaCO, Inputs
from kspipe.conversions.metallicity import z_prime
from kspipe.conversions.record import Range
from kspipe.core.constants import HELIUM_FACTOR

Array = NDArray[np.float64]

# Msun/pc2, in both records: where the fall begins.
BREAK = 100.0


def _falling(sigma: Array, power: float) -> Array:
    return np.asarray((np.maximum(sigma, BREAK) / BREAK) ** -power)


def _log_slope(sigma: Array, power: float) -> Array:
    """Logarithmic slope of `_falling` per Msun/pc2; NaN stays NaN."""
    return np.where(sigma <= BREAK, 0.0, -power / np.maximum(sigma, BREAK))


def _bolatto2013(inputs: Inputs) -> Array:
    centre = 2.9 * np.exp(0.4 / z_prime(inputs["oh"]))
    return np.asarray(centre * _falling(inputs["sigma_total"], 0.5))


def _bolatto2013_log_slope(inputs: Inputs) -> Array:
    return _log_slope(inputs["sigma_total"], 0.5)


def _schinnerer2024(inputs: Inputs) -> Array:
    return np.asarray(4.35 * z_prime(inputs["oh"]) ** -1.5 * _falling(inputs["sigma_star"], 0.25))


def _schinnerer2024_log_slope(inputs: Inputs) -> Array:
    return _log_slope(inputs["sigma_star"], 0.25)


ALPHA_CO.add(
    AlphaCO(
        key="bolatto2013_eq31",
        label="Bolatto et al. 2013, Eq. 31",
        cite="bolatto2013",
        where="Eq. 31",
        formula="alpha_CO = 2.9 exp(0.4 / Z') (Sigma_total / 100)^-0.5 above Sigma_total = 100, "
        "2.9 exp(0.4 / Z') below  [Msun/pc2 per K km/s; Msun/pc2]",
        certainty="verified",
        ranges=(Range("Z'", 0.5, math.inf, "z_prime"),),
        helium_factor=HELIUM_FACTOR,
        note="Sigma_total is stars and all gas; the molecular gas in it is solved for. Clouds of "
        "100 Msun/pc2. Below Z' = 0.5 it is steep and untested. Where CO is negative alpha_CO is "
        "taken at zero CO and the pixel is flagged.",
        needs=("oh", "sigma_total"),
        log_slopes=(("sigma_total", _bolatto2013_log_slope),),
        function=_bolatto2013,
    )
)
ALPHA_CO.add(
    AlphaCO(
        key="schinnerer2024",
        label="Schinnerer & Leroy 2024",
        cite="schinnerer2024",
        where="Table 1",
        formula="alpha_CO = 4.35 Z'^-1.5 (max(Sigma_star, 100) / 100)^-0.25  "
        "[Msun/pc2 per K km/s; Msun/pc2]",
        certainty="from memory",
        ranges=(Range("Z'", 0.2, 2.0, "z_prime"),),
        helium_factor=HELIUM_FACTOR,
        note="Both exponents are from memory. The paper's CO(2-1) form divides it by a line ratio "
        "that rises with Sigma_SFR.",
        needs=("oh", "sigma_star"),
        log_slopes=(("sigma_star", _schinnerer2024_log_slope),),
        function=_schinnerer2024,
    )
)

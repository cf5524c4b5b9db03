"""Temperature of cold gas: dust photoelectric and cosmic-ray heating against C+ cooling."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.core.constants import C_CM_S, H_ERG_S, K_ERG_K
from kspipe.relations.state.record import STATE, StateRecord

__all__ = [
    "C_PLUS_FREQUENCY_GHZ",
    "C_PLUS_LEVEL_K",
    "C_PLUS_WAVELENGTH_UM",
    "Temperature",
    "cosmic_ray_temperature",
    "gas_temperature",
    "isobaric_temperature",
    "photoelectric_temperature",
]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

# All per H nucleus, krumholz2011.
PHOTOELECTRIC_ERG_S: Final = 4e-26
COSMIC_RAY_ERG_S: Final = 2e-27  # from memory
C_PLUS_LEVEL_K: Final = 91.0
# Collision rate [cm3/s] times abundance of C times energy of the level.
COOLING_ERG_CM3_S: Final = 8e-10 * 1.1e-4 * C_PLUS_LEVEL_K * K_ERG_K
# The fine-structure line itself (Cooksy, Blake & Saykally 1986, ApJ 305, L89; from memory).
C_PLUS_FREQUENCY_GHZ: Final = 1900.5369
C_PLUS_WAVELENGTH_UM: Final = C_CM_S / (C_PLUS_FREQUENCY_GHZ * 1e9) * 1e4
C_PLUS_LINE_K: Final = H_ERG_S * C_PLUS_FREQUENCY_GHZ * 1e9 / K_ERG_K

# Above it Lyman alpha and OI cool, below it CO does: C+ alone describes neither (krumholz2011).
HOTTEST_COLD_K: Final = 500.0
COLDEST_C_PLUS_K: Final = 15.0

# Newton's steps from the starting value below, whose error they bring below rounding.
_STEPS: Final = 5


@dataclass(frozen=True)
class Temperature:
    """A temperature with its derivatives.

    Attributes
    ----------
    kelvin : float64 array
        NaN where there is no cold solution.
    partials : dict of str to float64 array
        By the names of the arguments, ``density chi zeta_prime z_prime depth`` among them.
    no_cold_solution : bool array
        C+ cannot carry off the heat below 500 K.
    co_cooled : bool array
        Below 15 K, where CO cools and C+ is no longer the whole story.
    """

    kelvin: Array
    partials: dict[str, Array]
    no_cold_solution: Mask
    co_cooled: Mask


def gas_temperature(
    density_cm3: Array,
    chi: Array,
    zeta_prime: Array,
    z_prime: Array,
    depth: Array | float,
    density_clumping: float = 1.0,
    *,
    slopes: bool = True,
) -> Temperature:
    """Equilibrium temperature at a density, with both kinds of heating.

    Parameters
    ----------
    density_cm3 : float64 array
        H nuclei per cm3.
    chi : float64 array
        FUV field at the surface, solar neighbourhood = 1.
    zeta_prime : float64 array
        Cosmic-ray ionisation rate, solar neighbourhood = 1.
    z_prime : float64 array
        Dust and carbon to gas, solar neighbourhood = 1.
    depth : float64 array or float
        Optical depth of dust between the gas and the surface.
    density_clumping : float
        <n^2> / <n>^2 of what the density is the mean of.
    slopes : bool
        Whether derivatives are wanted.

    Returns
    -------
    Temperature

    References
    ----------
    .. [1] krumholz2011: heating 4e-26 chi Z' e^-tau + 2e-27 zeta' erg/s, cooling
       8e-10 e^(-91/T) x 1.1e-4 Z' x 91 k x C n erg/s.
    """
    photoelectric = PHOTOELECTRIC_ERG_S * z_prime * np.exp(-np.asarray(depth))
    heating = photoelectric * chi + COSMIC_RAY_ERG_S * zeta_prime
    kelvin, no_cold = _balance(
        COOLING_ERG_CM3_S * density_clumping * density_cm3 * z_prime, heating
    )
    partials: dict[str, Array] = {}
    if slopes:
        per_log = _per_log(kelvin)
        partials = {"density": per_log / density_cm3}
        partials |= _heat_partials(per_log, photoelectric, chi, heating, z_prime)
    return Temperature(kelvin, partials, no_cold, kelvin < COLDEST_C_PLUS_K)


def _heat_partials(
    per_log: Array, photoelectric: Array, chi: Array, heating: Array, z_prime: Array
) -> dict[str, Array]:
    """Derivatives by what heats, from that by the logarithm of cooling over heating."""
    share = photoelectric * chi / heating
    return {
        "chi": -per_log * photoelectric / heating,
        "zeta_prime": -per_log * COSMIC_RAY_ERG_S / heating,
        "z_prime": per_log * (1.0 - share) / z_prime,
        "depth": per_log * share,
    }


def photoelectric_temperature(
    density_cm3: Array, chi: Array, density_clumping: float = 1.0, *, slopes: bool = True
) -> Temperature:
    """Unshielded regime: FUV light alone heats; metallicity drops out.

    References
    ----------
    .. [1] krumholz2011: T = 91 K / ln[1.1056e-27 C n / (4e-26 chi)].
    """
    heating = PHOTOELECTRIC_ERG_S * np.asarray(chi)
    kelvin, no_cold = _balance(
        COOLING_ERG_CM3_S * density_clumping * np.asarray(density_cm3), heating
    )
    partials: dict[str, Array] = {}
    if slopes:
        per_log = _per_log(kelvin)
        partials = {"density": per_log / density_cm3, "chi": -per_log / chi}
    return Temperature(kelvin, partials, no_cold, kelvin < COLDEST_C_PLUS_K)


def cosmic_ray_temperature(
    density_cm3: Array,
    zeta_prime: Array,
    z_prime: Array,
    density_clumping: float = 1.0,
    *,
    slopes: bool = True,
) -> Temperature:
    """Shielded regime: cosmic rays alone heat.

    References
    ----------
    .. [1] krumholz2011: T = 91 K / ln[1.1056e-27 Z' C n / (2e-27 zeta')].
    """
    heating = COSMIC_RAY_ERG_S * np.asarray(zeta_prime)
    kelvin, no_cold = _balance(
        COOLING_ERG_CM3_S * density_clumping * density_cm3 * z_prime, heating
    )
    partials: dict[str, Array] = {}
    if slopes:
        per_log = _per_log(kelvin)
        partials = {
            "density": per_log / density_cm3,
            "zeta_prime": -per_log / zeta_prime,
            "z_prime": per_log / z_prime,
        }
    return Temperature(kelvin, partials, no_cold, kelvin < COLDEST_C_PLUS_K)


def _balance(cooling_erg_s: Array, heating_erg_s: Array) -> tuple[Array, Mask]:
    """Temperature, and where there is no cold solution; the cooling is that of infinite T."""
    with np.errstate(invalid="ignore", divide="ignore"):
        log_ratio = np.asarray(np.log(cooling_erg_s / heating_erg_s))
        hot = np.asarray(log_ratio < C_PLUS_LEVEL_K / HOTTEST_COLD_K)
        np.putmask(log_ratio, hot, np.nan)
        return np.asarray(C_PLUS_LEVEL_K / log_ratio), hot


def _per_log(kelvin: Array) -> Array:
    """Derivative of a temperature by the logarithm of cooling over heating, at a density."""
    return np.asarray(-(kelvin**2) / C_PLUS_LEVEL_K)


def isobaric_temperature(
    pressure_k_cm3: Array,
    chi: Array,
    zeta_prime: Array,
    z_prime: Array,
    depth: Array | float,
    density_clumping: float = 1.0,
    *,
    slopes: bool = True,
) -> Temperature:
    """Equilibrium temperature at a pressure: the density follows from it.

    Of the two solutions that C+ has at a pressure, the one below 91 K is stable and returned.

    Parameters
    ----------
    pressure_k_cm3 : float64 array
        Density of H nuclei times temperature; P/k is 1.1 of it in atomic gas with helium.
    chi, zeta_prime, z_prime, depth, density_clumping, slopes
        As in `gas_temperature`.

    Returns
    -------
    Temperature
        ``partials`` by ``pressure`` in place of ``density``; no cold solution where the pressure
        is below the least that C+ can hold.

    References
    ----------
    .. [1] krumholz2011, the rates of `gas_temperature`.

    Notes
    -----
    With u = 91 K / T, cooling over heating is 1 where u e^-u = 91 heating / (1.1056e-27 Z' C P):
    Newton's steps on u - ln u, whose start is the series at its minimum.
    """
    photoelectric = PHOTOELECTRIC_ERG_S * z_prime * np.exp(-np.asarray(depth))
    heating = photoelectric * chi + COSMIC_RAY_ERG_S * zeta_prime
    cooling = COOLING_ERG_CM3_S * z_prime * density_clumping * pressure_k_cm3 / C_PLUS_LEVEL_K
    with np.errstate(invalid="ignore", divide="ignore"):
        # u - ln u is least, 1, at u = 1: the excess over it decides.
        excess = np.log(cooling / heating) - 1.0
        no_cold = np.asarray(excess <= 0.0)
        excess = np.where(no_cold, np.nan, excess)
        u = 1.0 + np.sqrt(2.0 * excess) + 2.0 / 3.0 * excess
        for _ in range(_STEPS):
            u = u * (np.log(u) + excess) / (u - 1.0)
    kelvin = C_PLUS_LEVEL_K / u
    partials: dict[str, Array] = {}
    if slopes:
        per_log = -kelvin / (u - 1.0)
        partials = {"pressure": per_log / pressure_k_cm3}
        partials |= _heat_partials(per_log, photoelectric, chi, heating, z_prime)
    return Temperature(kelvin, partials, no_cold, kelvin < COLDEST_C_PLUS_K)


_RATES = (
    "heating 4e-26 chi Z' e^-tau + 2e-27 zeta' erg/s, cooling 1.1056e-27 Z' C n e^(-91/T) erg/s "
    "per H nucleus"
)
STATE.add(
    StateRecord(
        key="krumholz2011_temperature",
        label="temperature",
        cite="krumholz2011",
        where="its heating and cooling rates (equation numbers not confirmed)",
        formula=f"T = 91 K / ln(cooling / heating), from {_RATES}",
        certainty="from memory",
        unit="K",
        note="NaN and flagged no_cold_solution where it would exceed 500 K; below 15 K CO cools "
        "and the pixel is flagged outside_range. The cosmic-ray heating is from memory.",
    )
)
STATE.add(
    StateRecord(
        key="krumholz2011_isobaric",
        label="temperature at the pressure of unshielded gas",
        cite="krumholz2011",
        where="its heating and cooling rates (equation numbers not confirmed)",
        formula=f"the solution below 91 K at n T = that of unshielded gas, from {_RATES}",
        certainty="from memory",
        unit="K",
    )
)

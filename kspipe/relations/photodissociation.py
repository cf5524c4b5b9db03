"""Atomic layers of dusty clouds in a dissociating field.

The atomic column does not depend on the gas behind it, which is all molecular.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final

import numpy as np

from kspipe.core.constants import M_H_G, MSUN_PC2_IN_G_CM2
from kspipe.relations.law import LAWS, Direction, Law, Outcome
from kspipe.relations.parameters import ANCHOR, RATE_CHOICES, Parameter

__all__ = [
    "alpha_g_bialy2016",
    "alpha_g_sternberg2014",
    "alpha_g_two_phase",
    "beamed_column",
    "transition_column",
    "two_sided_density",
]

# Dust cross-section per hydrogen nucleus at Z' = 1 [cm2].
SIGMA_DUST_CM2: Final = 1.9e-21
# Hydrogen nuclei per cm2 in 1 Msun/pc2 of hydrogen.
NUCLEI_CM2_PER_MSUN_PC2: Final = MSUN_PC2_IN_G_CM2 / M_H_G


def alpha_g_sternberg2014(i_uv: Any, density_cm3: Any, z_prime: Any, dust: float) -> Any:
    """Dissociation over formation, times shielding: sternberg2014.

    Parameters
    ----------
    i_uv : float64 array or Dual
        Field in Draine units.
    density_cm3 : float
        Hydrogen nuclei.
    z_prime : float64 array or Dual
    dust : float
        Grain absorption over the usual one.
    """
    shield = 1.0 + np.sqrt(2.64 * dust * z_prime)
    return i_uv * (1.54 * 100.0 / density_cm3 * dust) / shield


def alpha_g_bialy2016(i_uv: Any, density_cm3: Any, z_prime: Any, dust: float) -> Any:
    """The same by bialy2016: 0.59 I_UV (100/n) [9.9 / (1 + 8.9 sigma_g)]^0.37."""
    return i_uv * (0.59 * 100.0 / density_cm3) * (9.9 / (1.0 + 8.9 * dust * z_prime)) ** 0.37


def alpha_g_two_phase(z_prime: Any, dust: float) -> Any:
    """The same for cold gas in two-phase balance, where the density follows the field."""
    shield = 1.0 + np.sqrt(2.64 * dust * z_prime)
    return 6.78 / 4.1 * dust * (1.0 + 3.1 * z_prime**0.365) / shield


def beamed_column(alpha_g: Any, z_prime: Any, dust: float) -> Any:
    """Atomic column [cm^-2] behind a beam from one side: ln(alphaG/2 + 1) / sigma_g."""
    return np.log1p(0.5 * alpha_g) / (SIGMA_DUST_CM2 * dust * z_prime)


def transition_column(alpha_g: Any, z_prime: Any, dust: float) -> Any:
    """Atomic column [cm^-2] where H2 takes over in a beamed field (bialy2016).

    Notes
    -----
    0.7 ln[(alphaG/2)^(1/0.7) + 1] / sigma_g.
    """
    depth = 0.7 * np.log1p((0.5 * alpha_g) ** (1.0 / 0.7))
    return depth / (SIGMA_DUST_CM2 * dust * z_prime)


def two_sided_density(alpha_g: Any, z_prime: Any, dust: float) -> Any:
    """Atomic gas [Msun/pc2, mass factor 1.4] of a slab in an isotropic field, both sides."""
    return np.log1p(alpha_g / 3.2) * (9.5 / dust) / z_prime


def _rest_is_molecular(sigma_gas: Any, sigma_atom: Any) -> Outcome:
    return Outcome(np.maximum(1.0 - sigma_atom / sigma_gas, 0.0))


def _beamed(alpha_g_of: Any) -> Any:
    def function(own: Mapping[str, Any], given: Mapping[str, float]) -> Outcome:
        z, dust = own["z_prime"], given["dust"]
        alpha_g = alpha_g_of(own["g0"], given["density"], z, dust)
        column = beamed_column(alpha_g, z, dust)
        return _rest_is_molecular(own["sigma_gas"], column / NUCLEI_CM2_PER_MSUN_PC2)

    return function


def _two_sided(alpha_g_of: Any) -> Any:
    def function(own: Mapping[str, Any], given: Mapping[str, float]) -> Outcome:
        z, dust = own["z_prime"], given["dust"]
        alpha_g = alpha_g_of(own["g0"], given["density"], z, dust)
        return _rest_is_molecular(own["sigma_gas"], two_sided_density(alpha_g, z, dust))

    return function


def _two_phase(own: Mapping[str, Any], given: Mapping[str, float]) -> Outcome:
    z, dust = own["z_prime"], given["dust"]
    return _rest_is_molecular(
        own["sigma_gas"], two_sided_density(alpha_g_two_phase(z, dust), z, dust)
    )


_DUST: Final = Parameter("dust", "absorption of grains over the usual one at Z' = 1", 1.0, 0.1, 10)
_DENSITY: Final = Parameter(
    "density", "hydrogen nuclei of the cold gas per cm3, a choice", None, 1.0, 1e5
)


def _add(
    key: str, label: str, cite: str, function: Any, formula: str, *, helium: float, g0: bool = True,
    note: str = "", ranges: Mapping[str, tuple[float, float]],
) -> None:  # fmt: skip
    def has_molecules(own: Mapping[str, Any], given: Mapping[str, float]) -> Any:
        return function(own, given).f_mol > 0

    shielded = "where the gas exceeds the atomic layer"
    signs = {"sigma_gas": 1, "oh": 1, **({"g0": -1} if g0 else {})}
    LAWS.add(
        Law(
            key=key,
            label=label,
            cite=cite,
            where="analytic column of HI (equation number from memory)",
            formula=f"f_H2 = max(1 - Sigma_HI/Sigma_gas, 0); {formula}",
            certainty="verified",
            function=function,
            needs=("sigma_gas", "oh", *(("g0",) if g0 else ())),
            parameters=(*((_DENSITY,) if g0 else ()), _DUST, ANCHOR, *RATE_CHOICES),
            one_of=("depletion_time", "efficiency"),
            helium_factor=helium,
            metallicity_anchor="dust to gas, solar neighbourhood = 1",
            field_unit="Draine" if g0 else None,
            ranges=ranges,
            monotonic={n: Direction(sign, shielded, has_molecules) for n, sign in signs.items()},
            kinks="the slope jumps where the gas equals the atomic layer; the fraction is 0 below",
            note=note,
        )
    )


_S14: Final = "alphaG = 1.54 I_UV (100/n) phi_g / (1 + (2.64 phi_g Z')^0.5)"
_BS16: Final = "alphaG = 0.59 I_UV (100/n) [9.9/(1 + 8.9 phi_g Z')]^0.37"
_BEAMED: Final = "Sigma_HI = m_H ln(alphaG/2 + 1)/(1.9e-21 phi_g Z' cm2) of hydrogen"
_SIDES: Final = "Sigma_HI = 9.5/(phi_g Z') ln(alphaG/3.2 + 1) with a mass factor of 1.4"
_WIDE: Final = {"z_prime": (0.05, 10.0)}
_NOTE: Final = "Several clouds on a line of sight each have an atomic layer: one is assumed."

_add(
    "sternberg2014_beamed", "Sternberg et al. 2014, beamed", "sternberg2014",
    _beamed(alpha_g_sternberg2014), f"{_BEAMED}; {_S14}", helium=1.0, note=_NOTE, ranges=_WIDE,
)  # fmt: skip
_add(
    "sternberg2014_two_sided", "Sternberg et al. 2014, two-sided", "sternberg2014",
    _two_sided(alpha_g_sternberg2014), f"{_SIDES}; {_S14}", helium=1.4, note=_NOTE, ranges=_WIDE,
)  # fmt: skip
_add(
    "sternberg2014_two_phase", "Sternberg et al. 2014, two-phase", "sternberg2014",
    _two_phase,
    f"{_SIDES}; alphaG = 6.78 (1 + 3.1 Z'^0.365)/4.1 phi_g/(1 + (2.64 phi_g Z')^0.5)",
    helium=1.4, g0=False, note=_NOTE + " The field drops out by two-phase balance.", ranges=_WIDE,
)  # fmt: skip
_add(
    "bialy2016_beamed", "Bialy & Sternberg 2016, beamed", "bialy2016",
    _beamed(alpha_g_bialy2016), f"{_BEAMED}; {_BS16}", helium=1.0, note=_NOTE, ranges=_WIDE,
)  # fmt: skip
_add(
    "bialy2016_two_sided", "Bialy & Sternberg 2016, two-sided", "bialy2016",
    _two_sided(alpha_g_bialy2016), f"{_SIDES}; {_BS16}", helium=1.4, note=_NOTE, ranges=_WIDE,
)  # fmt: skip

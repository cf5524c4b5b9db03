"""Relations in which dust and H2 self-shielding decide where gas is molecular.

The radiation field drops out by two-phase balance; `hydrostatic` adds a floor to the density.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from kspipe.core.constants import HELIUM_FACTOR, OH_SOLAR
from kspipe.kernels.dual import choose
from kspipe.relations.law import LAWS, Direction, Law, Outcome
from kspipe.relations.parameters import ANCHOR, CLUMPING, RATE_CHOICES, Parameter

__all__ = [
    "krumholz2009_fraction",
    "mckee2010_fraction",
    "shielding_demand",
    "shielding_reach",
    "two_phase_chi",
]


def krumholz2009_fraction(sigma_complex_msun_pc2: Any, z_prime: Any) -> Any:
    """Molecular mass fraction of an atomic-molecular complex.

    Parameters
    ----------
    sigma_complex_msun_pc2 : float64 array or Dual
        Surface density of the complex with helium; clumping factor times the smoothed one.
    z_prime : float64 array or Dual
        Metallicity relative to the solar neighbourhood.

    Returns
    -------
    float64 array or Dual

    References
    ----------
    .. [1] krumholz2009, Eq. 2; krumholz2009_fraction for its derivation.

    Notes
    -----
    f = 1 - [1 + (3/4 s / (1 + d))^-5]^(-1/5), d = 0.0712 (0.1/s + 0.675)^-2.8,
    s = ln(1 + 0.6 chi) / (0.04 Sigma Z'), chi = 0.77 (1 + 3.1 Z'^0.365).
    """
    chi = 0.77 * (1.0 + 3.1 * z_prime**0.365)
    s = np.log1p(0.6 * chi) / (0.04 * sigma_complex_msun_pc2 * z_prime)
    delta = 0.0712 * (0.1 / s + 0.675) ** -2.8
    q = 0.75 * s / (1.0 + delta)
    # In this form the tail at small fractions keeps its relative accuracy.
    return -np.expm1(-0.2 * np.log1p(q**-5.0))


def mckee2010_fraction(sigma_complex_msun_pc2: Any, z_prime: Any, chi: Any) -> Any:
    """Molecular mass fraction of a complex in a radiation field.

    Parameters
    ----------
    sigma_complex_msun_pc2, z_prime : float64 array or Dual
        As in `krumholz2009_fraction`.
    chi : float64 array or Dual
        Field over density in the units of the paper.

    Returns
    -------
    float64 array or Dual
        Exactly 0 where s > 2, which the complex does not reach.

    References
    ----------
    .. [1] mckee2010.

    Notes
    -----
    f = 1 - (3/4) s / (1 + s/4), s = ln(1 + 0.6 chi + 0.01 chi^2) / (0.6 tau), tau = 0.066 Sigma Z'.
    """
    s = shielding_demand(chi) / shielding_reach(sigma_complex_msun_pc2, z_prime)
    return choose(s < 2.0, (1.0 - 0.5 * s) / (1.0 + 0.25 * s), 0.0 * s)


def shielding_demand(chi: Any) -> Any:
    """Logarithm ln(1 + 0.6 chi + 0.01 chi^2) that shielding must make up for (mckee2010)."""
    return np.log1p(chi * (0.6 + 0.01 * chi))


def shielding_reach(sigma_complex_msun_pc2: Any, z_prime: Any) -> Any:
    """0.6 tau of a complex, tau = 0.066 Sigma Z' (mckee2010): s is the demand over it."""
    return sigma_complex_msun_pc2 * z_prime * (0.6 * 0.066)


def two_phase_chi(z_prime: Any) -> Any:
    """Field over density in two-phase balance (mckee2010): 3.1 (1 + 3.1 Z'^0.365) / 4.1."""
    return 0.756 * (1.0 + 3.1 * z_prime**0.365)


def _krumholz2009(own: Mapping[str, Any], given: Mapping[str, float]) -> Outcome:
    """Sigma_SFR = f_H2 Sigma / 2.6 Gyr x (Sigma / 85)^(-0.33 below 85, +0.33 above)."""
    sigma = own["sigma_gas"]
    f = krumholz2009_fraction(given["clumping"] * sigma, own["z_prime"])
    ratio = sigma / 85.0
    power = np.maximum(ratio, 1.0 / ratio) ** 0.33
    # Above 85 the rate rises with the power, below it rises too: the factor is at least 1.
    return Outcome(f_mol=f, sigma_sfr=f * sigma * power / 2.6e3)


def _mckee2010(own: Mapping[str, Any], given: Mapping[str, float]) -> Outcome:
    z = own["z_prime"]
    return Outcome(mckee2010_fraction(given["clumping"] * own["sigma_gas"], z, two_phase_chi(z)))


def _is_shielded(own: Mapping[str, Any], given: Mapping[str, float]) -> Any:
    z = own["z_prime"]
    return mckee2010_fraction(given["clumping"] * own["sigma_gas"], z, two_phase_chi(z)) > 0


LAW_RANGES = {"z_prime": (0.05, 10.0)}

LAWS.add(
    Law(
        key="krumholz2009",
        label="Krumholz et al. 2009",
        cite="krumholz2009",
        where="Eqs. 2 and 10",
        formula="Sigma_SFR = f_H2(c Sigma_gas, Z') Sigma_gas / 2.6 Gyr x (Sigma_gas/85)^(-+0.33)",
        certainty="verified",
        function=_krumholz2009,
        needs=("sigma_gas", "oh"),
        parameters=(
            CLUMPING,
            Parameter(
                "anchor_oh",
                "12+log10(O/H) at which Z' = 1; the paper's own solar value is 8.76",
                OH_SOLAR,
                8.0,
                9.5,
            ),
        ),
        helium_factor=HELIUM_FACTOR,
        metallicity_anchor="metals, solar neighbourhood = 1 (paper: 12+log(O/H) = 8.76)",
        ranges=LAW_RANGES,
        monotonic={"sigma_gas": Direction(1), "oh": Direction(1)},
        kinks="the slope of Sigma_SFR jumps at Sigma_gas = 85 Msun/pc2",
        statistic="mean",
        note="The field drops out by two-phase balance. In the limit of large columns the atomic "
        "layer of a complex is 20 Msun/pc2 with helium at Z' = 1 (4 for clumping 5), not the "
        "rounded 10 of the abstract.",
    )
)
LAWS.add(
    Law(
        key="mckee2010",
        label="McKee & Krumholz 2010",
        cite="mckee2010",
        where="the closed form for two-phase gas (equation number from memory)",
        formula="f_H2 = 1 - (3/4) s/(1 + s/4) for s < 2, else 0; s = ln(1 + 0.6 chi + 0.01 chi^2)"
        "/(0.6 x 0.066 c Sigma_gas Z'), chi = 0.756 (1 + 3.1 Z'^0.365)",
        certainty="verified",
        function=_mckee2010,
        needs=("sigma_gas", "oh"),
        parameters=(CLUMPING, ANCHOR, *RATE_CHOICES),
        one_of=("depletion_time", "efficiency"),
        helium_factor=HELIUM_FACTOR,
        metallicity_anchor="metals, solar neighbourhood = 1",
        ranges=LAW_RANGES,
        monotonic={
            "sigma_gas": Direction(1, "where s < 2", _is_shielded),
            "oh": Direction(1, "where s < 2", _is_shielded),
        },
        kinks="the slope jumps at s = 2, below which the fraction is exactly 0",
        note="Predicts no molecular gas at all where s > 2: logarithms of its prediction do not "
        "exist there, and such pixels are counted.",
    )
)

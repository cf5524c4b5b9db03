"""Depths into a cloud, in optical depth of dust: of the complex, of H2, of the cosmic rays."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.core.constants import M_H_G, MSUN_PC2_IN_G_CM2
from kspipe.relations.state.record import STATE, StateRecord

__all__ = [
    "DUST_CROSS_SECTION_CM2",
    "MASS_PER_H",
    "alpha_g",
    "complex_depth",
    "takeover_depth",
    "transition_column",
]

Array = NDArray[np.float64]
Partials = dict[str, Array]

# Dust absorption at FUV wavelengths per H nucleus at Z' = 1: krumholz2009_fraction, krumholz2011.
DUST_CROSS_SECTION_CM2: Final = 1e-21
# The same at the Lyman and Werner bands: sternberg2014.
LYMAN_WERNER_CROSS_SECTION_CM2: Final = 1.9e-21
# Mean mass per H nucleus in m_H, helium included, as these papers take it.
MASS_PER_H: Final = 1.4
# Photoelectric over cosmic-ray heating of unshielded gas: 4e-26 over 2e-27 erg/s, krumholz2011.
HEATING_RATIO: Final = 20.0


def complex_depth(sigma_complex_msun_pc2: Array, z_prime: Array) -> tuple[Array, Partials]:
    """Optical depth of dust from the centre of a spherical complex to its surface.

    Parameters
    ----------
    sigma_complex_msun_pc2 : float64 array
        Surface density of the complex with helium: clumping factor times that of the beam.
        Not positive gives NaN.
    z_prime : float64 array
        Dust to gas relative to the solar neighbourhood.

    Returns
    -------
    depth : float64 array
    partials : dict of str to float64 array
        By ``sigma_complex`` and ``z_prime``.

    References
    ----------
    .. [1] krumholz2009_fraction: tau_c = (3/4) Sigma sigma_d / mu_H.
    """
    column = 0.75 * MSUN_PC2_IN_G_CM2 / (MASS_PER_H * M_H_G)
    positive = np.where(np.asarray(sigma_complex_msun_pc2) > 0, sigma_complex_msun_pc2, np.nan)
    per_column = column * DUST_CROSS_SECTION_CM2
    return np.asarray(per_column * positive * z_prime), {
        "sigma_complex": np.asarray(per_column * z_prime + 0.0 * positive),
        "z_prime": np.asarray(per_column * positive),
    }


def takeover_depth(chi: Array, zeta_prime: Array, z_prime: Array) -> tuple[Array, Partials]:
    """Optical depth at which cosmic rays heat as much as the FUV light that is left.

    At or below zero, cosmic rays heat more than FUV light even at the surface.

    Parameters
    ----------
    chi, zeta_prime : float64 array
        FUV field and cosmic-ray rate relative to the solar neighbourhood, positive.
    z_prime : float64 array

    References
    ----------
    .. [1] krumholz2011: 4e-26 chi Z' exp(-tau) = 2e-27 zeta'.
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        depth = np.log(HEATING_RATIO * chi * z_prime / zeta_prime)
        partials = {
            "chi": 1.0 / np.asarray(chi),
            "zeta_prime": -1.0 / np.asarray(zeta_prime),
            "z_prime": 1.0 / np.asarray(z_prime),
        }
    return np.where(np.isfinite(depth), depth, np.nan), partials


def alpha_g(
    chi: Array, density_cm3: Array, z_prime: Array, phi_g: float = 1.0
) -> tuple[Array, Partials]:
    """Ratio of shielded dissociation to H2 formation on dust.

    Parameters
    ----------
    chi : float64 array
        FUV field in units of Draine's, which is that of the solar neighbourhood.
    density_cm3 : float64 array
        H nuclei per cm3.
    z_prime : float64 array
    phi_g : float
        Dust cross-section over 1.9e-21 Z' cm2.

    References
    ----------
    .. [1] sternberg2014: 1.54 (I_UV / (n/100)) phi_g / (1 + (2.64 phi_g Z')^0.5).
    """
    root = np.sqrt(2.64 * phi_g * z_prime)
    value = np.asarray(154.0 * chi / density_cm3 * phi_g / (1.0 + root))
    return value, {
        "chi": value / chi,
        "density": -value / density_cm3,
        "z_prime": -value * 0.5 * root / ((1.0 + root) * z_prime),
    }


def transition_column(alpha: Array, z_prime: Array, phi_g: float = 1.0) -> tuple[Array, Partials]:
    """Column of H nuclei [cm-2] from the lit surface to where half of the gas is H2.

    Parameters
    ----------
    alpha : float64 array
        As `alpha_g` gives it.
    z_prime : float64 array
    phi_g : float

    Returns
    -------
    column_cm2 : float64 array
    partials : dict of str to float64 array
        By ``alpha`` and ``z_prime``.

    References
    ----------
    .. [1] bialy2016: N_tr = 0.7 ln[(alphaG/2)^(1/0.7) + 1] / (1.9e-21 phi_g Z').
    """
    sigma = LYMAN_WERNER_CROSS_SECTION_CM2 * phi_g * np.asarray(z_prime)
    raised = (np.asarray(alpha) / 2.0) ** (1.0 / 0.7)
    column = 0.7 * np.log1p(raised) / sigma
    return np.asarray(column), {
        "alpha": raised / (1.0 + raised) / (sigma * alpha),
        "z_prime": -column / z_prime,
    }


STATE.add(
    StateRecord(
        key="krumholz2009_depth",
        label="dust optical depth of the complex",
        cite="krumholz2009_fraction",
        where="tau_c of its derivation",
        formula="tau_c = (3/4) Sigma_complex 1e-21 Z' / (1.4 m_H), centre to surface of a sphere",
        certainty="verified",
        unit="",
    )
)
STATE.add(
    StateRecord(
        key="bialy2016_transition",
        label="depth of the HI-H2 transition",
        cite="bialy2016",
        where="the HI-to-H2 transition point (equation number from memory)",
        formula="N_tr = 0.7 ln[(alphaG/2)^(1/0.7) + 1] / (1.9e-21 Z') cm-2 of H nuclei, one side "
        "in a beamed field; alphaG = 1.54 chi (100/n) / (1 + (2.64 Z')^0.5); "
        "in optical depth: N_tr 1e-21 Z'",
        certainty="verified",
        unit="cm-2",
    )
)
STATE.add(
    StateRecord(
        key="krumholz2011_takeover",
        label="depth where cosmic rays take over",
        cite="krumholz2011",
        where="equality of its two heating rates",
        formula="tau = ln(20 chi Z' / zeta')",
        certainty="from memory",
        unit="",
        note="Its cosmic-ray heating, 2e-27 erg/s, is from memory.",
    )
)

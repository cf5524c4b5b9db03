"""Vertical balance of a gas layer: pressures in the midplane, shared by several relations."""

from __future__ import annotations

from typing import Any, Final

import numpy as np

from kspipe.core.constants import G_CGS, K_ERG_K, M_SUN_G, PC_CM

__all__ = [
    "G_PC_KMS2_MSUN",
    "PRESSURE_K_CM3",
    "dynamical_pressure",
    "elmegreen_pressure",
    "stellar_dispersion",
    "thermal_pressure",
]

# G in pc (km/s)^2 / Msun, and 1 Msun (km/s)^2 / pc^3 as P/k in K cm^-3.
G_PC_KMS2_MSUN: Final = G_CGS * M_SUN_G / PC_CM / 1e10
PRESSURE_K_CM3: Final = M_SUN_G * 1e10 / PC_CM**3 / K_ERG_K

# Of diffuse gas (krumholz2013 after ostriker2010): total over thermal pressure, the shape of the
# layer, the mass fraction of the warm medium and its sound speed [km/s].
PRESSURE_RATIO: Final = 5.0
SHAPE: Final = 0.33
WARM_FRACTION: Final = 0.5
WARM_SPEED_KMS: Final = 8.0


def thermal_pressure(diffuse_msun_pc2: Any, bound_msun_pc2: Any, rho_sd_msun_pc3: Any) -> Any:
    """Thermal pressure P/k [K cm^-3] of diffuse gas in vertical balance.

    Parameters
    ----------
    diffuse_msun_pc2, bound_msun_pc2 : float64 array or Dual
        Surface density of diffuse gas, and of gas in bound clouds that only adds weight.
    rho_sd_msun_pc3 : float64 array or Dual
        Stars and dark matter in the midplane.

    References
    ----------
    .. [1] ostriker2010; krumholz2013.

    Notes
    -----
    P = pi G S^2 / (4 a) {1 + 2R + [(1 + 2R)^2 + 32 zeta a f_w c_w^2 rho / (pi G S^2)]^(1/2)},
    R = bound / diffuse, written so that it stays finite without diffuse gas.
    """
    pi_g = np.pi * G_PC_KMS2_MSUN
    outer = 32.0 * SHAPE * PRESSURE_RATIO * WARM_FRACTION * WARM_SPEED_KMS**2 / pi_g
    inner = diffuse_msun_pc2 + 2.0 * bound_msun_pc2
    height = inner + np.sqrt(inner * inner + outer * rho_sd_msun_pc3)
    return diffuse_msun_pc2 * height * (pi_g / (4.0 * PRESSURE_RATIO) * PRESSURE_K_CM3)


def dynamical_pressure(
    sigma_gas_msun_pc2: Any, rho_sd_msun_pc3: Any, gas_dispersion_kms: float
) -> Any:
    """Weight of a gas layer P/k [K cm^-3]: pi G Sigma^2 / 2 + Sigma (2 G rho)^(1/2) sigma_z.

    References
    ----------
    .. [1] kim2011.
    """
    own = 0.5 * np.pi * G_PC_KMS2_MSUN * sigma_gas_msun_pc2 * sigma_gas_msun_pc2
    outer = np.sqrt(2.0 * G_PC_KMS2_MSUN * rho_sd_msun_pc3) * gas_dispersion_kms
    return (own + sigma_gas_msun_pc2 * outer) * PRESSURE_K_CM3


def elmegreen_pressure(
    sigma_gas_msun_pc2: Any,
    sigma_star_msun_pc2: Any,
    gas_dispersion_kms: float,
    star_dispersion_kms: Any,
) -> Any:
    """Midplane pressure P/k [K cm^-3]: (pi/2) G Sigma (Sigma + (sigma_g/sigma_*) Sigma_*).

    References
    ----------
    .. [1] elmegreen1989.
    """
    stars = sigma_star_msun_pc2 / star_dispersion_kms * gas_dispersion_kms
    pi_g = 0.5 * np.pi * G_PC_KMS2_MSUN * PRESSURE_K_CM3
    return pi_g * sigma_gas_msun_pc2 * (sigma_gas_msun_pc2 + stars)


def stellar_dispersion(sigma_star_msun_pc2: Any, scale_length_pc: float) -> Any:
    """Vertical velocity dispersion of stars [km/s]: (2 pi G Sigma_* l_* / 7.3)^(1/2).

    References
    ----------
    .. [1] leroy2008, appendix B: a scale height of l_* / 7.3.
    """
    return np.sqrt(2.0 * np.pi * G_PC_KMS2_MSUN * scale_length_pc / 7.3 * sigma_star_msun_pc2)

"""Density of the cold gas, where no map gives it: of two phases in balance, or of the midplane."""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.core.constants import G_CGS, K_ERG_K, M_SUN_G, PC_CM
from kspipe.relations.state.record import STATE, StateRecord

__all__ = [
    "hydrostatic_density",
    "hydrostatic_pressure_k_cm3",
    "two_phase_density",
]

Array = NDArray[np.float64]
Partials = dict[str, Array]

# krumholz2013: ratio of turbulent and magnetic to thermal pressure, shape of the vertical profile,
# share of the warm gas and its sound speed, hottest cold gas.
PRESSURE_RATIO: Final = 5.0
PROFILE: Final = 0.33
WARM_SHARE: Final = 0.5
WARM_SPEED_KMS: Final = 8.0
HOTTEST_K: Final = 243.0
PARTICLES_PER_H: Final = 1.1

_G_PC: Final = G_CGS * M_SUN_G / PC_CM * 1e-10
_K_CM3: Final = M_SUN_G / PC_CM**3 * 1e10 / K_ERG_K


def two_phase_density(chi: Array, z_prime: Array) -> tuple[Array, Partials]:
    """Density [H nuclei per cm3] of cold atomic gas that shares its pressure with warm gas.

    Parameters
    ----------
    chi : float64 array
        FUV field relative to the solar neighbourhood.
    z_prime : float64 array

    References
    ----------
    .. [1] krumholz2013: n = 23 G0' 4.1 / (1 + 3.1 Z'^0.365).
    """
    power = 3.1 * np.asarray(z_prime) ** 0.365
    per_field = 23.0 * 4.1 / (1.0 + power)
    density = np.asarray(per_field * chi)
    return density, {
        "chi": np.broadcast_to(per_field, density.shape),
        "z_prime": -density * 0.365 * power / ((1.0 + power) * z_prime),
    }


def hydrostatic_pressure_k_cm3(
    sigma_atom_msun_pc2: Array, sigma_mol_msun_pc2: Array, midplane_msun_pc3: Array | float
) -> tuple[Array, Partials]:
    """Thermal pressure P/k [K cm-3] that holds the atomic gas up.

    Parameters
    ----------
    sigma_atom_msun_pc2, sigma_mol_msun_pc2 : float64 array
        Face-on, with helium. Without atomic gas, or with less than none, NaN.
    midplane_msun_pc3 : float64 array or float
        Stars and dark matter in the midplane.

    Returns
    -------
    pressure : float64 array
    partials : dict of str to float64 array
        By ``sigma_atom`` and ``sigma_mol``.

    References
    ----------
    .. [1] krumholz2013: P = pi G S^2 / (4 a) {1 + 2 R + sqrt[(1 + 2 R)^2 + 32 zeta_d a f_w c_w^2
       rho / (pi G S^2)]}, R = Sigma_mol / S; written with S (S + 2 Sigma_mol), finite at any R.
    """
    atom = np.where(np.asarray(sigma_atom_msun_pc2) > 0, sigma_atom_msun_pc2, np.nan)
    mol = np.asarray(sigma_mol_msun_pc2)
    support = 32.0 * PROFILE * PRESSURE_RATIO * WARM_SHARE * WARM_SPEED_KMS**2
    pull = support * midplane_msun_pc3 / (math.pi * _G_PC)
    own = atom * (atom + 2.0 * mol)
    root = np.sqrt(own**2 + pull * atom**2)
    scale = _K_CM3 * math.pi * _G_PC / (4.0 * PRESSURE_RATIO)
    d_own = {"sigma_atom": 2.0 * (atom + mol), "sigma_mol": 2.0 * atom}
    d_pull = {"sigma_atom": pull * atom, "sigma_mol": np.zeros(())}
    return np.asarray(scale * (own + root)), {
        name: np.asarray(scale * (d_own[name] * (1.0 + own / root) + d_pull[name] / root))
        for name in d_own
    }


def hydrostatic_density(
    sigma_atom_msun_pc2: Array, sigma_mol_msun_pc2: Array, midplane_msun_pc3: Array | float
) -> tuple[Array, Partials]:
    """Least density [H nuclei per cm3] of cold gas at the pressure of the midplane.

    Parameters and derivatives as in `hydrostatic_pressure_k_cm3`.

    References
    ----------
    .. [1] krumholz2013: n = P / (1.1 k 243 K).
    """
    pressure, partials = hydrostatic_pressure_k_cm3(
        sigma_atom_msun_pc2, sigma_mol_msun_pc2, midplane_msun_pc3
    )
    per_pressure = 1.0 / (PARTICLES_PER_H * HOTTEST_K)
    return per_pressure * pressure, {k: per_pressure * slope for k, slope in partials.items()}


STATE.add(
    StateRecord(
        key="krumholz2013_two_phase",
        label="density of two-phase gas",
        cite="krumholz2013",
        where="n_CNM of two phases (equation number from memory)",
        formula="n = 23 chi 4.1 / (1 + 3.1 Z'^0.365) cm-3 of H nuclei",
        certainty="verified",
        unit="cm-3",
    )
)
STATE.add(
    StateRecord(
        key="krumholz2013_hydrostatic",
        label="density of the hydrostatic midplane",
        cite="krumholz2013",
        where="its hydrostatic floor (equation number from memory)",
        formula="n = P_th / (1.1 k 243 K), P_th = pi G S^2/20 {1 + 2R + sqrt[(1 + 2R)^2 + "
        "32 x 0.33 x 5 x 0.5 x (8 km/s)^2 rho/(pi G S^2)]}, S = Sigma_atom, R = Sigma_mol/S",
        certainty="verified",
        unit="cm-3",
    )
)

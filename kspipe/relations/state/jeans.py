"""Jeans and Bonnor-Ebert masses and lengths, each definition written out."""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.core.constants import G_CGS, K_ERG_K, M_H_G, M_SUN_G, PC_CM
from kspipe.relations.state.bonnor_ebert import critical_sphere
from kspipe.relations.state.depths import MASS_PER_H
from kspipe.relations.state.record import STATE, StateRecord

__all__ = [
    "LENGTHS",
    "MASSES",
    "MU_ATOMIC",
    "MU_MOLECULAR",
    "free_fall_time_myr",
    "jeans_length_pc",
    "jeans_mass_msun",
    "mass_density_g_cm3",
    "sound_speed_kms",
]

Array = NDArray[np.float64]
Number = Array | float

# Mean mass per particle in m_H: atomic gas with helium, and molecular gas (common practice).
MU_ATOMIC: Final = 1.27
MU_MOLECULAR: Final = 2.33
_SECONDS_PER_MYR: Final = 3.15576e13  # Julian years


def sound_speed_kms(temperature_k: Number, mu: float) -> Array:
    """Isothermal sound speed (k T / (mu m_H))^0.5 [km/s]."""
    return np.asarray(np.sqrt(K_ERG_K * temperature_k / (mu * M_H_G)) * 1e-5)


def mass_density_g_cm3(density_cm3: Number, mass_per_h: float = MASS_PER_H) -> Array:
    """Mass density of so many H nuclei per cm3, helium included."""
    return np.asarray(mass_per_h * M_H_G * density_cm3)


def jeans_mass_msun(
    temperature_k: Number,
    density_cm3: Number,
    *,
    definition: str,
    mu: float,
    mass_per_h: float = MASS_PER_H,
) -> Array:
    """Mass by one of the definitions in `MASSES` [Msun].

    Parameters
    ----------
    temperature_k : float64 array
    density_cm3 : float64 array
        H nuclei per cm3: of the medium, or for a Bonnor-Ebert sphere of its surface or its mean.
    definition : str
        Key of `MASSES`.
    mu : float
        Mass per particle in m_H, for the sound speed.
    mass_per_h : float
        Mass per H nucleus in m_H, for the density.

    Notes
    -----
    Each is a coefficient times c^3 / (G^1.5 rho^0.5): it goes as T^1.5 n^-0.5, and at a pressure
    as T^2 P^-0.5.
    """
    speed = 1e5 * sound_speed_kms(temperature_k, mu)
    rho = mass_density_g_cm3(density_cm3, mass_per_h)
    return np.asarray(MASSES[definition] * speed**3 / (G_CGS**1.5 * np.sqrt(rho)) / M_SUN_G)


def jeans_length_pc(
    temperature_k: Number,
    density_cm3: Number,
    *,
    definition: str = "jeans_length",
    mu: float,
    mass_per_h: float = MASS_PER_H,
) -> Array:
    """Length by one of the definitions in `LENGTHS` [pc]; it goes as (T / n)^0.5.

    Parameters are those of `jeans_mass_msun`.
    """
    speed = 1e5 * sound_speed_kms(temperature_k, mu)
    rho = mass_density_g_cm3(density_cm3, mass_per_h)
    return np.asarray(LENGTHS[definition] * speed / np.sqrt(G_CGS * rho) / PC_CM)


def free_fall_time_myr(density_cm3: Number, mass_per_h: float = MASS_PER_H) -> Array:
    """Free-fall time (3 pi / (32 G rho))^0.5 of a uniform sphere [Myr]."""
    rho = mass_density_g_cm3(density_cm3, mass_per_h)
    return np.asarray(np.sqrt(3.0 * math.pi / (32.0 * G_CGS * rho)) / _SECONDS_PER_MYR)


_SPHERE = critical_sphere()
_MEAN = math.sqrt(_SPHERE.mean_over_surface)
_BY_SPEED = "c = (k T / (mu m_H))^0.5, rho = 1.4 m_H n"

MASSES: Final[dict[str, float]] = {}
LENGTHS: Final[dict[str, float]] = {}


def _define(
    shelf: dict[str, float], key: str, label: str, cite: str, formula: str, coefficient: float
) -> None:
    """Put a definition on the shelf of records and its coefficient on that of its kind."""
    is_mass = shelf is MASSES
    unit = "c^3 / (G^1.5 rho^0.5)" if is_mass else "c / (G rho)^0.5"
    STATE.add(
        StateRecord(
            key=key,
            label=label,
            cite=cite,
            where="definition; integrated here" if "bonnor" in key else "definition",
            formula=f"{formula} = {coefficient:.5g} {unit}; {_BY_SPEED}",
            certainty="verified",
            unit="solMass" if is_mass else "pc",
            coefficient=coefficient,
        )
    )
    shelf[key] = coefficient


_LENGTH = "lambda_J = pi^0.5 c / (G rho)^0.5"
for _key, _label, _cite, _formula, _coefficient in (
    ("jeans_cube", "Jeans mass, cube", "jeans1902", f"rho lambda_J^3, {_LENGTH}", math.pi**1.5),
    (
        "jeans_virial",
        "Jeans mass, virial",
        "krumholz2011",
        "(5 k T / (G mu m_H))^1.5 (3 / (4 pi rho))^0.5",
        5.0**1.5 * math.sqrt(3.0 / (4.0 * math.pi)),
    ),
    (
        "jeans_sphere",
        "Jeans mass, sphere of diameter lambda_J",
        "jeans1902",
        f"(pi/6) rho lambda_J^3, {_LENGTH}",
        math.pi**2.5 / 6.0,
    ),
    (
        "bonnor_ebert_surface",
        "Bonnor-Ebert mass, surface density",
        "bonnor1956",
        "critical mass at the density of the surface",
        _SPHERE.mass,
    ),
    (
        "bonnor_ebert_mean",
        "Bonnor-Ebert mass, mean density",
        "bonnor1956",
        "critical mass at the mean density of the sphere",
        _SPHERE.mass * _MEAN,
    ),
):
    _define(MASSES, _key, _label, _cite, _formula, _coefficient)
for _key, _label, _cite, _formula, _coefficient in (
    ("jeans_length", "Jeans length", "jeans1902", "lambda_J", math.sqrt(math.pi)),
    (
        "bonnor_ebert_radius_surface",
        "Bonnor-Ebert radius, surface density",
        "bonnor1956",
        "critical radius at the density of the surface",
        _SPHERE.radius,
    ),
    (
        "bonnor_ebert_radius_mean",
        "Bonnor-Ebert radius, mean density",
        "bonnor1956",
        "critical radius at the mean density of the sphere",
        _SPHERE.radius * _MEAN,
    ),
):
    _define(LENGTHS, _key, _label, _cite, _formula, _coefficient)

STATE.add(
    StateRecord(
        key="free_fall_time",
        label="free-fall time",
        cite="krumholz2005",
        where="definition",
        formula="t_ff = (3 pi / (32 G rho))^0.5, rho = 1.4 m_H n",
        certainty="verified",
        unit="Myr",
    )
)

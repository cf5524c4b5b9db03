"""The state of the gas on arrays: every quantity, with its derivatives and its losses."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.core.constants import K_ERG_K, M_H_G
from kspipe.relations.state.clouds import LINEWIDTH_SIZE, linewidth_kms, virial_parameter
from kspipe.relations.state.conditions import SOLAR_SIGMA_SFR, Conditions
from kspipe.relations.state.density import hydrostatic_density, two_phase_density
from kspipe.relations.state.depths import (
    DUST_CROSS_SECTION_CM2,
    alpha_g,
    complex_depth,
    takeover_depth,
    transition_column,
)
from kspipe.relations.state.jeans import free_fall_time_myr, jeans_length_pc, jeans_mass_msun
from kspipe.relations.state.mach import Mach1D
from kspipe.relations.state.record import Z_PRIME_RANGE
from kspipe.relations.state.thermal import (
    Temperature,
    cosmic_ray_temperature,
    gas_temperature,
    isobaric_temperature,
    photoelectric_temperature,
)
from kspipe.relations.state.traced import Traced, chain
from kspipe.relations.state.turbulence_models import TURBULENCE

__all__ = ["gas_state"]

Array = NDArray[np.float64]
_KMS_PER_ROOT_KELVIN: Final = float(np.sqrt(K_ERG_K / M_H_G)) * 1e-5


def gas_state(inputs: Mapping[str, Array], conditions: Conditions) -> dict[str, Traced]:
    """Everything in `QUANTITIES` that the inputs and the choices allow.

    Parameters
    ----------
    inputs : mapping of str to float64 array
        ``sigma_gas`` [Msun/pc2, helium included] and ``z_prime``; where the choices need them
        ``sigma_atom``, ``sigma_mol`` and ``sigma_sfr`` [Msun/yr/kpc2]; ``linewidth`` [km/s]
        where a map gives it. Shapes that broadcast. A surface density that is not positive gives
        NaN in everything made of it.
    conditions : Conditions

    Returns
    -------
    dict of str to Traced
        Derivatives with respect to the surface densities and the linewidth.

    Raises
    ------
    ValueError
        If the hydrostatic density is chosen without the density of stars.
    """
    shape = np.broadcast_shapes(*(np.shape(value) for value in inputs.values()))
    given = {n: Traced.given(n, np.broadcast_to(v, shape)) for n, v in inputs.items()}
    z = given["z_prime"].value
    low, high = Z_PRIME_RANGE
    metallicity = Traced(z, outside=np.asarray((z < low) | (z > high)))
    chi = _field(given, conditions, shape)
    zeta = chi if conditions.zeta_prime == "field" else _constant(conditions.zeta_prime, shape)
    density = _density(given, chi, metallicity, conditions, shape)
    c = conditions.clumping
    gas = given["sigma_gas"]
    complex_ = chain(np.asarray(c * gas.value), (gas, c))
    depth = _apply(
        complex_depth(complex_.value, z), {"sigma_complex": complex_, "z_prime": metallicity}
    )
    shielded = depth
    if conditions.shielded_depth is not None:
        shielded = _constant(conditions.shielded_depth, shape)
    state = {"density": density, "depth_complex": depth}
    state |= _depths(chi, zeta, density, metallicity)
    state |= _temperatures(chi, zeta, density, metallicity, shielded, conditions)
    state |= _fragments(state, density, conditions)
    free_fall = free_fall_time_myr(density.value)
    state["free_fall_time"] = chain(free_fall, (density, -0.5 * free_fall / density.value))
    if conditions.cloud_radius_pc is not None:
        state |= _motions(state, given, complex_, conditions, shape)
    return state


def _constant(value: float | str, shape: tuple[int, ...]) -> Traced:
    return Traced(np.full(shape, float(value)))


def _apply(made: tuple[Array, dict[str, Array]], parts: Mapping[str, Traced]) -> Traced:
    value, partials = made
    return chain(value, *((part, partials[name]) for name, part in parts.items()))


def _field(given: Mapping[str, Traced], conditions: Conditions, shape: tuple[int, ...]) -> Traced:
    if conditions.chi != "star formation":
        return _constant(conditions.chi, shape)
    sfr = given["sigma_sfr"]
    positive = np.where(sfr.value > 0, sfr.value, np.nan)
    return chain(positive / SOLAR_SIGMA_SFR, (sfr, 1.0 / SOLAR_SIGMA_SFR))


def _density(
    given: Mapping[str, Traced],
    chi: Traced,
    z: Traced,
    conditions: Conditions,
    shape: tuple[int, ...],
) -> Traced:
    """Density as chosen, times the factor that shows its effect."""
    chosen = conditions.density
    if not isinstance(chosen, str):
        return _constant(conditions.density_factor * chosen, shape)
    two_phase = _apply(two_phase_density(chi.value, z.value), {"chi": chi, "z_prime": z})
    if chosen == "two-phase":
        found = two_phase
    else:
        if conditions.midplane_msun_pc3 is None:
            raise ValueError("the hydrostatic density needs midplane_msun_pc3")
        atom = given["sigma_atom"]
        mol = given.get("sigma_mol", Traced(np.zeros(shape)))
        found = _apply(
            hydrostatic_density(atom.value, mol.value, conditions.midplane_msun_pc3),
            {"sigma_atom": atom, "sigma_mol": mol},
        )
        if chosen == "larger":
            wins = two_phase.value >= found.value
            found = chain(
                np.where(wins, two_phase.value, found.value),
                (two_phase, np.where(wins, 1.0, 0.0)),
                (found, np.where(wins, 0.0, 1.0)),
            )
    factor = conditions.density_factor
    return chain(factor * found.value, (found, factor))


def _depths(chi: Traced, zeta: Traced, density: Traced, z: Traced) -> dict[str, Traced]:
    alpha = _apply(
        alpha_g(chi.value, density.value, z.value), {"chi": chi, "density": density, "z_prime": z}
    )
    column = _apply(transition_column(alpha.value, z.value), {"alpha": alpha, "z_prime": z})
    return {
        "column_transition": column,
        "depth_transition": column * chain(DUST_CROSS_SECTION_CM2 * z.value, (z, 0.0)),
        "depth_takeover": _apply(
            takeover_depth(chi.value, zeta.value, z.value),
            {"chi": chi, "zeta_prime": zeta, "z_prime": z},
        ),
    }


def _temperatures(
    chi: Traced, zeta: Traced, n: Traced, z: Traced, depth: Traced, conditions: Conditions
) -> dict[str, Traced]:
    clumping = conditions.density_clumping

    def traced(found: Temperature, **parts: Traced) -> Traced:
        return chain(
            found.kelvin,
            *((part, found.partials[name]) for name, part in parts.items()),
            no_cold=found.no_cold_solution,
            outside=found.co_cooled,
        )

    def full(depth: Traced) -> Traced:
        return traced(
            gas_temperature(n.value, chi.value, zeta.value, z.value, depth.value, clumping),
            density=n,
            chi=chi,
            zeta_prime=zeta,
            z_prime=z,
            depth=depth,
        )

    unshielded = full(Traced(np.zeros(np.shape(n.value))))
    pressure = n * unshielded
    return {
        "temperature_unshielded": unshielded,
        "temperature_shielded": full(depth),
        "temperature_fuv": traced(
            photoelectric_temperature(n.value, chi.value, clumping), density=n, chi=chi
        ),
        "temperature_cosmic_rays": traced(
            cosmic_ray_temperature(n.value, zeta.value, z.value, clumping),
            density=n,
            zeta_prime=zeta,
            z_prime=z,
        ),
        "temperature_isobaric": traced(
            isobaric_temperature(
                pressure.value, chi.value, zeta.value, z.value, depth.value, clumping
            ),
            pressure=pressure,
            chi=chi,
            zeta_prime=zeta,
            z_prime=z,
            depth=depth,
        ),
    }


def _fragments(
    state: Mapping[str, Traced], density: Traced, conditions: Conditions
) -> dict[str, Traced]:
    """Jeans and Bonnor-Ebert masses and lengths of the gas in three states."""
    warm, cold = state["temperature_unshielded"], state["temperature_shielded"]
    mu_warm, mu_cold = conditions.mu_unshielded, conditions.mu_shielded
    # Equal rho c^2; the temperature is held at that of the equal density.
    compressed = density * (warm / cold).power(1.0, mu_cold / mu_warm)
    found: dict[str, Traced] = {}
    for name, temperature, n, mu in (
        ("unshielded", warm, density, mu_warm),
        ("shielded", cold, density, mu_cold),
        ("equal_pressure", cold, compressed, mu_cold),
    ):
        for quantity, definition in (
            ("jeans_mass", f"jeans_{conditions.jeans}"),
            ("bonnor_ebert_mass", f"bonnor_ebert_{conditions.bonnor_ebert}"),
        ):
            unit = float(jeans_mass_msun(1.0, 1.0, definition=definition, mu=mu))
            found[f"{quantity}_{name}"] = temperature.power(1.5, unit) * n.power(-0.5)
        for quantity, definition in (
            ("jeans_length", "jeans_length"),
            ("bonnor_ebert_radius", f"bonnor_ebert_radius_{conditions.bonnor_ebert}"),
        ):
            unit = float(jeans_length_pc(1.0, 1.0, definition=definition, mu=mu))
            found[f"{quantity}_{name}"] = (temperature / n).power(0.5, unit)
    return found


def _motions(
    state: Mapping[str, Traced],
    given: Mapping[str, Traced],
    complex_: Traced,
    conditions: Conditions,
    shape: tuple[int, ...],
) -> dict[str, Traced]:
    """Mach number, virial parameter, sonic length and efficiencies of the cloud."""
    radius = float(conditions.cloud_radius_pc or np.nan)
    if conditions.linewidth_size is not None:
        relation = LINEWIDTH_SIZE.get(conditions.linewidth_size)
        size = radius if relation.size == "radius" else 2.0 * radius
        exponent = relation.exponent
        linewidth = _constant(float(linewidth_kms(size, relation.norm_kms, exponent)), shape)
    else:
        size, exponent = 2.0 * radius, conditions.sonic_exponent
        measured = given["linewidth"]
        linewidth = chain(np.where(measured.value > 0, measured.value, np.nan), (measured, 1.0))
    per_root = _KMS_PER_ROOT_KELVIN / np.sqrt(conditions.mu_shielded)
    sound = state["temperature_shielded"].power(0.5, per_root)
    mach = linewidth / sound
    positive = np.where(complex_.value > 0, complex_.value, np.nan)
    alpha_value = virial_parameter(linewidth.value, radius, np.pi * radius**2 * positive)
    alpha = chain(
        alpha_value,
        (linewidth, 2.0 * alpha_value / linewidth.value),
        (complex_, -alpha_value / positive),
    )
    found = {
        "linewidth": linewidth,
        "mach": mach,
        "virial_parameter": alpha,
        "sonic_length": (sound / linewidth).power(1.0 / exponent, size),
    }
    for key in conditions.turbulence:
        got = TURBULENCE.get(key).efficiency(alpha.value, Mach1D(mach.value), conditions.forcing)
        found[f"eps_ff_{key}"] = chain(got.value, (alpha, got.by_alpha), (mach, got.by_mach))
    return found

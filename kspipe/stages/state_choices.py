"""From the recipe's table to the named choices of the state of the gas, and to words."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from kspipe.recipe.gas_state import GasStateTable
from kspipe.recipe.quantity import Measured
from kspipe.relations.state import LINEWIDTH_SIZE, STATE, Conditions, Forcing

__all__ = ["choices_in_words", "conditions_of"]

Array = NDArray[np.float64]


def conditions_of(table: GasStateTable, clumping: Array | float, beam_pc: float) -> Conditions:
    """Choices of a recipe as the relations take them.

    Parameters
    ----------
    table : GasStateTable
    clumping : float64 array or float
    beam_pc : float
        Half of it is the radius of the cloud where a map gives linewidths and no radius is typed.
    """
    radius = table.cloud_radius.value if table.cloud_radius else None
    if radius is None and table.linewidth is not None:
        radius = 0.5 * beam_pc
    density: Any = table.density
    chi: Any = table.field
    zeta: Any = table.cosmic_rays
    depth = table.shielded_depth
    return Conditions(
        density=density.value if isinstance(density, Measured) else density,
        chi=chi,
        zeta_prime=zeta,
        clumping=clumping,
        density_clumping=table.density_clumping,
        midplane_msun_pc3=table.midplane_density.value if table.midplane_density else None,
        shielded_depth=None if isinstance(depth, str) else depth,
        mu_unshielded=table.mu_unshielded,
        mu_shielded=table.mu_shielded,
        jeans=table.jeans,
        bonnor_ebert=table.bonnor_ebert,
        linewidth_size=table.linewidth if isinstance(table.linewidth, str) else None,
        sonic_exponent=table.sonic_exponent,
        cloud_radius_pc=radius,
        turbulence=table.turbulence if table.linewidth is not None else (),
        forcing=Forcing(table.forcing, table.plasma_beta, table.core_efficiency),
    )


def choices_in_words(
    table: GasStateTable, conditions: Conditions, beam_pc: float, *, has_molecular: bool
) -> dict[str, str]:
    """Every choice with its origin, in words.

    Parameters
    ----------
    table : GasStateTable
    conditions : Conditions
    beam_pc : float
    has_molecular : bool
        Without a CO map the midplane holds up atoms alone.
    """
    two_phase, hydrostatic = (
        STATE.get(f"krumholz2013_{name}").sentence for name in ("two_phase", "hydrostatic")
    )
    density = {
        "two-phase": two_phase,
        "hydrostatic": hydrostatic,
        "larger": f"the larger of {two_phase}; and {hydrostatic}",
    }

    def typed(key: str) -> str:
        is_default = getattr(table, key) == type(table).model_fields[key].default
        return "the default" if is_default else "typed"

    words = {
        "density": density[table.density]
        if isinstance(table.density, str)
        else f"{table.density} of H nuclei, typed",
        "field": STATE.get("krumholz2013_field").sentence
        if table.field == "star formation"
        else f"chi = {table.field:g} of the solar neighbourhood, typed",
        "cosmic rays": "zeta' = chi (common practice: both come from young stars)"
        if table.cosmic_rays == "field"
        else f"zeta' = {table.cosmic_rays:g} of the solar neighbourhood, typed",
        "clumping": {
            "beam": f"{np.asarray(conditions.clumping).flat[0]:.4g} for a beam of {beam_pc:.4g} pc:"
            " 1 to 100 pc, 5 from 1 kpc (krumholz2009), a power law between (common practice)",
            "finer map": "by pixel, from a finer map",
        }.get(str(table.clumping), f"{table.clumping}, typed"),
        "density clumping": f"{table.density_clumping:g}, {typed('density_clumping')}",
        "shielded gas": "at the centre of the complex"
        if conditions.shielded_depth is None
        else f"at optical depth {conditions.shielded_depth:g}, typed",
        "mass per particle": f"{table.mu_unshielded:g} m_H unshielded "
        f"({typed('mu_unshielded')}), {table.mu_shielded:g} shielded ({typed('mu_shielded')})",
        "metallicity": "Z' = 1 at 12+log10(O/H) = 8.69",
    }
    if table.midplane_density is not None:
        words["midplane density"] = f"{table.midplane_density}, typed"
    if table.density in ("hydrostatic", "larger") and not has_molecular:
        words["molecular gas"] = "none in the hydrostatic density: the recipe has no CO map"
    if table.linewidth is not None:
        motions = (
            LINEWIDTH_SIZE.get(table.linewidth).sentence
            if isinstance(table.linewidth, str)
            else "from a map"
        )
        origin = "typed" if table.cloud_radius else "half of the beam"
        words["linewidth"] = motions
        words["cloud radius"] = f"{conditions.cloud_radius_pc:.4g} pc, {origin}"
        words["turbulence"] = (
            f"b = {table.forcing:g} ({typed('forcing')}), beta = {table.plasma_beta:g} "
            f"({typed('plasma_beta')}), efficiency over phi_t = {table.core_efficiency:g} "
            f"({typed('core_efficiency')})"
        )
    return words

"""What a relation and the observation it is held against have in common."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from kspipe.conversions import ALPHA_CO, AlphaCO, Surface
from kspipe.recipe import Recipe
from kspipe.relations import LAW_INPUTS, LAWS

__all__ = ["Shared", "shared_with_observed"]

# Bands whose light is emitted by dust.
_DUST_BANDS = ("22um", "24um")


@dataclass(frozen=True)
class Shared:
    """One thing that stands on both sides of a comparison.

    Attributes
    ----------
    what : str
        The map or the assumption.
    observed, predicted : str
        Where it enters on either side.
    is_carried : bool
        Whether its random error is in the covariance of the two; an assumption has none.
    """

    what: str
    observed: str
    predicted: str
    is_carried: bool

    def __str__(self) -> str:
        carried = "random error carried as covariance" if self.is_carried else "not a random error"
        return f"{self.what}: in the observed {self.observed} and the {self.predicted} ({carried})"


def shared_with_observed(
    recipe: Recipe, name: str, surfaces: Mapping[str, Surface]
) -> tuple[Shared, ...]:
    """List shared data and assumptions of one relation of a recipe.

    Parameters
    ----------
    recipe : Recipe
    name : str
        The recipe's name of the relation.
    surfaces : mapping of str to Surface
        As observed; their slopes say which maps each was made of.

    Returns
    -------
    tuple of Shared
        Maps first, then assumptions.
    """
    law = LAWS.get(recipe.relations[name].law)
    made_of = _maps_of_inputs(recipe, surfaces)
    found = []
    for need in law.needs:
        both = [t for t in surfaces["sigma_sfr"].slopes if t in made_of.get(need, {})]
        for tracer in both:
            through = LAW_INPUTS[need].symbol
            if need in ("sigma_gas", "sigma_mol") and tracer in _DUST_BANDS:
                through += ", where the light of dust also stands for gas"
            if need == "g0":
                through += ", taken from the same star formation"
            found.append(Shared(f"{tracer} map", "Sigma_SFR", f"predicted {through}", True))
    gas = None if isinstance(recipe.gas, str) else recipe.gas
    if gas is None:
        return tuple(found)
    # A quantity that the recipe gives itself, a number or a map, is no record and takes nothing.
    record = ALPHA_CO.get(gas.alpha_co) if isinstance(gas.alpha_co, str | AlphaCO) else None
    alpha_co = f"alpha_CO ({record.key if record else 'of the recipe'})"
    takes_all_gas = law.gas == "sigma_gas"
    if law.has_fraction or not takes_all_gas:
        side = "f_mol" if takes_all_gas else "depletion time of molecular gas"
        found.append(Shared(alpha_co, side, f"input {law.gas} of the prediction", False))
    if record is not None and "oh" in law.needs and "oh" in record.needs:
        found.append(
            Shared(
                "metallicity",
                f"molecular gas through {alpha_co}, itself a matter of dust shielding",
                "prediction through Z'",
                False,
            )
        )
    return tuple(found)


def _maps_of_inputs(
    recipe: Recipe, surfaces: Mapping[str, Surface]
) -> dict[str, Mapping[str, object]]:
    """Maps that each input of a relation is made of."""
    made_of: dict[str, Mapping[str, object]] = {
        name: surface.slopes for name, surface in surfaces.items() if name != "sigma_sfr"
    }
    if recipe.midplane is not None and recipe.midplane.density is None:
        made_of["rho_sd"] = surfaces["sigma_star"].slopes
    if recipe.radiation_field is not None and recipe.radiation_field.origin is not None:
        made_of["g0"] = surfaces["sigma_sfr"].slopes
    return made_of

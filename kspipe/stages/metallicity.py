"""12 + log10(O/H) on the grid, by whichever of its ways the recipe gives it."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions import (
    MASS_METALLICITY,
    STRONG_LINES,
    USUAL_SHIFT_DEX,
    AlphaCO,
    Field,
    anchor_shift_dex,
    combine,
    oh_from_gradient,
    oh_of_z_prime,
    scale_shift_dex,
)
from kspipe.core.constants import OH_SOLAR
from kspipe.core.errors import Fault, RecipeError
from kspipe.recipe import Recipe
from kspipe.recipe.metallicity_table import MetallicityTable
from kspipe.recipe.quantity import Measured
from kspipe.recipe.varying import constant_of
from kspipe.stages.place import Place, spread

__all__ = ["metallicity_of", "metallicity_warnings"]

Array = NDArray[np.float64]

WHERE: Final = "metallicity"


def metallicity_of(recipe: Recipe, place: Place) -> Field:
    """12 + log10(O/H) on the grid with its errors.

    Raises
    ------
    GridError
        If a map cannot be read or does not reach the galaxy.
    """
    table = recipe.metallicity
    if table.calibration is not None:
        made = _from_lines(table, place)
    elif table.relation is not None:
        made = _from_mass(recipe, place)
    elif table.z_prime is not None:
        anchor = str(table.solar)
        given = spread(table.z_prime, place, f"{WHERE}.z_prime")
        made = combine(lambda values: oh_of_z_prime(values["z"], anchor), {"z": given})
        made = _noted(
            made,
            f"Z' = 1 at {anchor}, so 12+log10(O/H) = {OH_SOLAR:g} has Z' = "
            f"{10 ** -anchor_shift_dex(anchor):.4g} on that anchor",
        )
    else:
        key = "map" if table.map is not None else "oh"
        quantity = table.abundance
        if quantity is None:
            raise RecipeError(Fault(WHERE, "gives no metallicity"))
        made = spread(quantity, place, WHERE if key == "map" else f"{WHERE}.oh")
        made = _with_gradient(made, recipe, place, 0.0)
    # On the grid, also where one number holds everywhere.
    return replace(made, value=np.broadcast_to(made.value, place.grid.shape).copy())


def _noted(field: Field, note: str) -> Field:
    return replace(field, notes=(*field.notes, f"{WHERE}: {note}"))


def _with_gradient(centre: Field, recipe: Recipe, place: Place, from_kpc: float) -> Field:
    slope, per = recipe.metallicity.slope
    if slope == 0.0:
        return centre
    slope /= recipe.galaxy.kpc_per(per)
    value = oh_from_gradient(place.radius_kpc - from_kpc, 0.0, slope)
    return replace(centre, value=np.asarray(centre.value + value))


def _from_lines(table: MetallicityTable, place: Place) -> Field:
    record = STRONG_LINES.get(table.calibration or "")
    lines = {
        name: spread(quantity, place, f"{WHERE}.lines.{name}")
        for name, quantity in (table.lines or {}).items()
    }
    made = combine(record, lines)
    outside = record.outside({name: field.value for name, field in lines.items()})
    if made.outside is not None:
        outside = outside | made.outside
    n = int(np.sum(outside))
    told = f"; {n} pixels outside its range, flagged outside_range" if n else ""
    return _noted(replace(made, outside=outside), record.sentence + told)


def _from_mass(recipe: Recipe, place: Place) -> Field:
    table = recipe.metallicity
    record = MASS_METALLICITY.get(table.relation or "")
    mass = table.stellar_mass or Measured(math.nan, 0.0, "")
    made = combine(
        lambda values: record(np.log10(values["mass"])),
        {"mass": spread(mass, place, f"{WHERE}.stellar_mass")},
    )
    at_r_e = record.place == "effective radius" and table.gradient is not None
    from_kpc = recipe.galaxy.kpc_per("r_e") if at_r_e else 0.0
    made = _with_gradient(made, recipe, place, from_kpc)
    return _noted(made, f"by the galaxy's stellar mass {mass}, {record.place}: {record.sentence}")


def metallicity_warnings(recipe: Recipe, alpha_co: AlphaCO | None) -> list[str]:
    """What to beware of: another scale or anchor than alpha_CO wants, or a fallback."""
    table, told = recipe.metallicity, []
    if table.relation is not None:
        told.append(
            f"metallicity.relation {table.relation}: one number for the whole galaxy from its "
            "stellar mass, a fallback; galaxies of one mass scatter by about 0.1 dex (common "
            "practice)"
        )
    shift = anchor_shift_dex(table.solar) if table.solar else 0.0
    if shift:
        told.append(
            f'metallicity.solar "{table.solar}": Z\' is taken to the anchor {OH_SOLAR:g} of the '
            f"records, log10 Z' shifts by {shift:+.3f} dex"
        )
    given = table.oh_scale
    if alpha_co is None or alpha_co.oh_scale is None or given in (alpha_co.oh_scale, "not stated"):
        return told
    oh = constant_of(table.oh) or OH_SOLAR
    size = scale_shift_dex(given, alpha_co.oh_scale, oh)
    words = (
        f"{size:+.2f} dex at {oh:g}"
        if size is not None
        else "usually {:g} to {:g} dex (common practice)".format(*USUAL_SHIFT_DEX)
    )
    told.append(
        f'metallicity.scale "{given}": "{alpha_co.key}" is tied to {alpha_co.oh_scale}, a shift of '
        f"{words}; 12+log10(O/H) is used as it is"
    )
    return told

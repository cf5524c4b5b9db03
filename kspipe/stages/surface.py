"""From matched maps to everything that is known of each pixel."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions import (
    NITROGEN,
    Field,
    Parameters,
    Surface,
    bend_errors,
    carry_noise,
    convert,
    parameter_shifts,
)
from kspipe.core.tracers import CO_LINES
from kspipe.kernels.diffuse import smooth_part
from kspipe.maps.header import pixel_jacobian
from kspipe.maps.skymap import Flag, NoiseTerm, SkyMap
from kspipe.matching import Grid
from kspipe.recipe import Recipe
from kspipe.recipe.map_table import Filter
from kspipe.recipe.quantity import Measured
from kspipe.recipe.varying import ByRegion, OnMap, Profile
from kspipe.stages.metallicity import metallicity_of
from kspipe.stages.place import Place, spread
from kspipe.stages.plan import choices_of

__all__ = ["Disc", "fields_of", "parameters_of", "surfaces_of", "used_maps"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Disc:
    """The galaxy on the common grid.

    Attributes
    ----------
    surfaces : dict of str to Surface
        ``sigma_atom sigma_gas sigma_sfr`` and, with CO, ``sigma_mol f_mol t_dep``.
    coverage : dict of str to (ny, nx) float64 array
        By product: least coverage of the maps that it needs.
    flags : (ny, nx) int32 array
    oh : (ny, nx) float64 array
        12 + log10(O/H).
    radius_kpc : (ny, nx) float64 array
        In the disc.
    intensity : dict of str to SkyMap
        Matched maps by tracer.
    shifts : dict of str to list of (ny, nx) float64 array
        By product: its change for 1 sigma of each typed number that pixels share.
    fields : dict of str to Field
        Quantities of the recipe that may vary, by their names in `Parameters`.
    drawn : dict of str to int
        By product: pixels whose random error is that of draws, not of first order.
    for_relations : dict of str to Field
        Quantities that only relations take, in the recipe's units.
    """

    surfaces: dict[str, Surface]
    coverage: dict[str, Array]
    flags: NDArray[np.int32]
    oh: Array
    radius_kpc: Array
    intensity: dict[str, SkyMap]
    shifts: dict[str, list[Array]]
    fields: dict[str, Field]
    drawn: dict[str, int]
    for_relations: dict[str, Field]


def surfaces_of(recipe: Recipe, matched: dict[str, SkyMap], grid: Grid) -> Disc:
    """Convert matched maps by the recipe's records.

    Parameters
    ----------
    recipe : Recipe
    matched : dict of str to SkyMap
        By the recipe's names.
    grid : Grid

    Returns
    -------
    Disc
    """
    place = Place.of(recipe, grid)
    fields = fields_of(recipe, place)
    used = used_maps(recipe, matched)
    intensity = {tracer: sky.value for tracer, sky in used.items()}
    choices, parameters = choices_of(recipe), parameters_of(recipe, fields)
    converted = convert(intensity, choices, parameters)
    shifts = parameter_shifts(converted, intensity, choices, parameters, fields)
    noise = {tracer: sky.noise for tracer, sky in used.items()}
    beam = next(iter(used.values())).beam_arcsec2
    noise |= {
        name: (NoiseTerm(f"parameter {name}", np.broadcast_to(field.random, grid.shape), beam),)
        for name, field in fields.items()
        if field.random is not None
    }
    straight = carry_noise(shifts.converted, noise)
    surfaces = bend_errors(straight, converted, intensity, noise, choices, parameters)
    drawn = {
        name: int(np.sum(np.nan_to_num(surface.error) != np.nan_to_num(straight[name].error)))
        for name, surface in surfaces.items()
        if surface is not straight[name]
    }
    coverage = {
        name: np.min([used[t].coverage for t in surface.slopes if t in used], axis=0)
        for name, surface in surfaces.items()
    }
    outside = [f.outside for f in fields.values() if f.outside is not None]
    told = dict(converted.flags)
    told["outside_range"] = np.logical_or.reduce(
        np.broadcast_arrays(np.zeros(grid.shape, bool), *outside, told.get("outside_range", False))
    )
    flags = _flags(recipe, surfaces, list(used.values()), told)
    return Disc(
        surfaces=surfaces,
        coverage=coverage,
        flags=flags,
        oh=fields["oh"].value,
        radius_kpc=place.radius_kpc,
        intensity=used,
        shifts=shifts.common,
        fields=fields,
        drawn=drawn,
        for_relations=relation_fields(recipe, place),
    )


def used_maps(recipe: Recipe, matched: dict[str, SkyMap]) -> dict[str, SkyMap]:
    """Maps that a surface density is made of, by tracer."""
    wanted = {*recipe.star_formation.maps, *({recipe.stars.map} if recipe.stars else ())}
    gas = {"HI", "Sigma_HI", "Sigma_star"}
    if recipe.has_molecular:
        of_dust = not isinstance(recipe.gas, str) and recipe.gas.gas_to_dust is not None
        gas |= {"Sigma_dust"} if of_dust else {*CO_LINES, "Sigma_mol"}
    return {
        sky.tracer: _without_diffuse(sky, recipe)
        for name, sky in matched.items()
        if sky.tracer in gas or name in wanted
    }


def _without_diffuse(sky: SkyMap, recipe: Recipe) -> SkyMap:
    """Take off what is smoother than a stated length, where the recipe says so."""
    stated = recipe.maps[sky.name].diffuse
    if not isinstance(stated, Filter) or sky.name not in recipe.star_formation.maps:
        return sky
    ny, nx = sky.value.shape
    pixel_arcsec = math.sqrt(abs(float(np.linalg.det(pixel_jacobian(sky.wcs, nx / 2, ny / 2)))))
    fwhm_pix = stated.kpc * 1e3 / recipe.galaxy.pc_per_arcsec / pixel_arcsec
    smooth = smooth_part(sky.value, sky.error, fwhm_pix)
    share = float(np.nansum(smooth) / np.nansum(sky.value))
    step = f"diffuse emission taken off: smoother than {stated}, {share:.3g} of the flux"
    return sky.with_step(step, value=sky.value - smooth)


def fields_of(recipe: Recipe, place: Place) -> dict[str, Field]:
    """Quantities of a recipe that may vary over the disc, by their names in `Parameters`."""
    gas = None if isinstance(recipe.gas, str) else recipe.gas
    typed: dict[str, tuple[str, object]] = {
        "ebv": ("foreground.ebv", recipe.foreground.ebv),
        "alpha_co": ("gas.alpha_co", gas and gas.alpha_co),
        "line_ratio": ("gas.line_ratio", gas and gas.line_ratio),
        "hi_opacity": ("gas.hi_opacity", gas and gas.hi_opacity),
        "ms_offset_dex": ("gas.ms_offset", gas and gas.ms_offset),
        "g0_over_n": ("gas.g0_over_n", gas and gas.g0_over_n),
        "mass_to_light": ("stars.mass_to_light", recipe.stars and recipe.stars.mass_to_light),
    }
    for name in recipe.star_formation.maps:
        table = recipe.maps[name]
        where = f"maps.{name}"
        mine = {
            "nii_ratio": (f"{where}.nii_ratio", table.nii_ratio),
            "as_24um": (f"{where}.as_24um", table.as_24um),
            "thermal_fraction": (f"{where}.thermal_fraction", table.thermal_fraction),
            f"diffuse.{table.tracer}": (f"{where}.diffuse", table.diffuse),
        }
        if table.nii_relation is not None and recipe.galaxy.m_b is not None:
            ratio = NITROGEN.get(table.nii_relation)(recipe.galaxy.m_b.value)
            mine["nii_ratio"] = (where, Measured(ratio, 0.0, f"{ratio:.5g}"))
        typed |= {key: entry for key, entry in mine.items() if entry[1] is not None}
    fields = {
        name: spread(quantity, place, where)
        for name, (where, quantity) in typed.items()
        if isinstance(quantity, Measured | OnMap | Profile | ByRegion)
    }
    return {"oh": metallicity_of(recipe, place), **fields}


def relation_fields(recipe: Recipe, place: Place) -> dict[str, Field]:
    """Quantities that only relations take, by the names of their inputs, in the recipe's units."""
    table = recipe.radiation_field
    if table is None or table.field is None:
        return {}
    return {"g0": spread(table.field, place, "radiation_field.field")}


def parameters_of(recipe: Recipe, fields: Mapping[str, Field]) -> Parameters:
    """The numbers of a recipe that are not records."""
    parameters = Parameters(cos_i=recipe.galaxy.cos_i)
    for name, field in fields.items():
        parameters = parameters.changed(name, field.value)
    return parameters


def _flags(
    recipe: Recipe,
    surfaces: dict[str, Surface],
    maps: list[SkyMap],
    converted: dict[str, NDArray[np.bool_]],
) -> NDArray[np.int32]:
    """Bits that say what to beware of in a pixel."""
    gas, sfr = surfaces["sigma_gas"], surfaces["sigma_sfr"]
    limit = recipe.comparison.low_snr
    bits = {
        Flag.NONPOSITIVE_SFR: sfr.value <= 0,
        Flag.NONPOSITIVE_GAS: gas.value <= 0,
        Flag.LOW_SNR: (gas.value < limit * gas.error) | (sfr.value < limit * sfr.error),
        **{Flag[name.upper()]: where for name, where in converted.items()},
    }
    flags = np.bitwise_or.reduce([sky.flags for sky in maps]).astype(np.int32)
    for flag, where in bits.items():
        flags |= np.where(where, int(flag), 0).astype(np.int32)
    return np.asarray(flags)

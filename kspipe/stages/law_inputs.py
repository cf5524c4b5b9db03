"""Everything that relations may ask for, on the grid and with its noise."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kspipe.comparison import Known
from kspipe.conversions import midplane_density_msun_pc3
from kspipe.core.radiation import field_in
from kspipe.kernels.noise import NoiseTerm, propagate
from kspipe.recipe import Recipe
from kspipe.recipe.disc_tables import MidplaneTable, RadiationFieldTable, RotationTable
from kspipe.relations import SOLAR_SFR_MSUN_YR_KPC2
from kspipe.stages.surface import Disc

__all__ = ["LawField", "law_inputs", "rotation_of"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class LawField:
    """One input of relations.

    Attributes
    ----------
    value : float64 array
        Broadcasts with the grid.
    noise : tuple of NoiseTerm
    origin : str
        How it was come by, for the history.
    """

    value: Array
    noise: tuple[NoiseTerm, ...] = ()
    origin: str = ""


def law_inputs(recipe: Recipe, disc: Disc) -> dict[str, Known]:
    """Collect the inputs of relations by the names of `LAW_INPUTS`.

    Parameters
    ----------
    recipe : Recipe
    disc : Disc

    Returns
    -------
    dict
        Errors typed in the recipe are common to all pixels and stay out of the noise.
    """
    inputs: dict[str, Known] = {
        name: disc.surfaces[name]
        for name in ("sigma_gas", "sigma_mol", "sigma_star")
        if name in disc.surfaces
    }
    inputs["oh"] = LawField(disc.oh, origin="metallicity")
    if recipe.midplane is not None:
        inputs["rho_sd"] = _midplane(recipe.midplane, inputs)
    if recipe.radiation_field is not None:
        inputs["g0"] = _radiation_field(recipe.radiation_field, disc)
    if recipe.rotation is not None:
        omega, beta = rotation_of(recipe.rotation, disc.radius_kpc)
        inputs["omega"] = LawField(omega, origin="rotation: velocity over radius")
        inputs["beta"] = LawField(beta, origin="rotation: slope of the curve")
    return inputs


def _midplane(table: MidplaneTable, inputs: Mapping[str, Known]) -> LawField:
    if table.density is not None:
        return LawField(
            np.asarray(table.density.value), origin=f"midplane density {table.density}, everywhere"
        )
    if table.scale_height is None or table.definition is None or table.dark_matter is None:
        raise ValueError("a checked table [midplane] is complete")
    stars, height = inputs["sigma_star"], table.scale_height.value
    slope = midplane_density_msun_pc3(np.asarray(1.0), height, table.definition)
    density = slope * stars.value + table.dark_matter.value
    origin = (
        f"midplane density of stars with scale height {table.scale_height} ({table.definition}), "
        f"and dark matter {table.dark_matter}"
    )
    return LawField(density, propagate({"stars": stars.noise}, {"stars": slope}), origin)


def _radiation_field(table: RadiationFieldTable, disc: Disc) -> LawField:
    if table.field is not None and table.unit is not None:
        given = disc.for_relations["g0"]
        factor = float(field_in(1.0, table.unit, "solar neighbourhood"))
        noise: tuple[NoiseTerm, ...] = ()
        if given.random is not None:
            beam = next(iter(disc.intensity.values())).beam_arcsec2
            sigma = np.broadcast_to(factor * given.random, disc.oh.shape)
            noise = (NoiseTerm("parameter g0", sigma, beam),)
        what = "; ".join(given.notes) or f"radiation field {table.field}, everywhere"
        middle = float(np.nanmedian(factor * given.value))
        origin = f"{what}, in units {table.unit!r}: {middle:.4g} of the solar neighbourhood"
        return LawField(factor * given.value, noise, origin + (" (median)" if given.notes else ""))
    sfr = disc.surfaces["sigma_sfr"]
    slope = 1.0 / SOLAR_SFR_MSUN_YR_KPC2
    return LawField(
        slope * sfr.value,
        propagate({"sfr": sfr.noise}, {"sfr": slope}),
        f"radiation field: observed Sigma_SFR / {SOLAR_SFR_MSUN_YR_KPC2:g} Msun/yr/kpc2",
    )


def rotation_of(table: RotationTable, radius_kpc: Array) -> tuple[Array, Array]:
    """Angular velocity [km/s/kpc] and logarithmic slope of a rotation curve.

    Parameters
    ----------
    table : RotationTable
    radius_kpc : float64 array

    Returns
    -------
    omega, beta : float64 array
        NaN inside the first and outside the last radius of the table. The slope is that of the
        straight line in logarithms between the two radii around.
    """
    ln_r, ln_v = np.log(table.radius_kpc), np.log(table.velocity_km_s)
    with np.errstate(divide="ignore"):
        at = np.log(radius_kpc)
    inside = (at >= ln_r[0]) & (at <= ln_r[-1])
    velocity = np.exp(np.interp(at, ln_r, ln_v))
    step = np.clip(np.searchsorted(ln_r, at, side="right") - 1, 0, ln_r.size - 2)
    slopes = np.diff(ln_v) / np.diff(ln_r)
    with np.errstate(divide="ignore"):
        omega = np.where(inside, velocity / radius_kpc, np.nan)
    return omega, np.where(inside, slopes[step], np.nan)

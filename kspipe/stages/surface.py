"""From matched maps to everything that is known of each pixel."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS
from numpy.typing import NDArray

from kspipe.conversions import (
    Parameters,
    Surface,
    carry_noise,
    convert,
    oh_from_gradient,
)
from kspipe.core.errors import Fault, GridError
from kspipe.core.tracers import CO_LINES
from kspipe.kernels.geometry import disc_radius
from kspipe.maps.header import celestial_wcs
from kspipe.maps.skymap import Flag, SkyMap
from kspipe.maps.source import StoredImage
from kspipe.matching import Grid
from kspipe.recipe import Recipe
from kspipe.recipe.quantity import Measured
from kspipe.stages.plan import choices_of

__all__ = ["Disc", "parameters_of", "surfaces_of"]

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
    """

    surfaces: dict[str, Surface]
    coverage: dict[str, Array]
    flags: NDArray[np.int32]
    oh: Array
    radius_kpc: Array
    intensity: dict[str, SkyMap]


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
    galaxy = recipe.galaxy
    radius_kpc = (
        disc_radius(
            *grid.offsets_arcsec(),
            inclination_deg=galaxy.inclination.value,
            pa_deg=galaxy.position_angle.value,
        )
        * galaxy.pc_per_arcsec
        / 1e3
    )
    oh = metallicity_of(recipe, grid, radius_kpc)
    used = _used_maps(recipe, matched)
    converted = convert(
        {tracer: sky.value for tracer, sky in used.items()},
        choices_of(recipe),
        parameters_of(recipe, oh),
    )
    surfaces = carry_noise(converted, {tracer: sky.noise for tracer, sky in used.items()})
    coverage = {
        name: np.min([used[tracer].coverage for tracer in surface.slopes], axis=0)
        for name, surface in surfaces.items()
    }
    flags = _flags(recipe, surfaces, list(used.values()), converted.flags)
    return Disc(surfaces, coverage, flags, oh, radius_kpc, used)


def _used_maps(recipe: Recipe, matched: dict[str, SkyMap]) -> dict[str, SkyMap]:
    """Maps that a surface density is made of, by tracer."""
    wanted = {*recipe.star_formation.maps, *({recipe.stars.map} if recipe.stars else ())}
    gas = {"HI", *(CO_LINES if recipe.has_molecular else ())}
    return {sky.tracer: sky for name, sky in matched.items() if sky.tracer in gas or name in wanted}


def parameters_of(recipe: Recipe, oh: Array) -> Parameters:
    """The numbers of a recipe that are not records, with 12 + log10(O/H) on the grid."""
    gas = None if isinstance(recipe.gas, str) else recipe.gas
    ratio = gas.line_ratio if gas else None
    tables = [recipe.maps[name] for name in recipe.star_formation.maps]
    nii = next((t.nii_ratio for t in tables if t.nii_ratio is not None), None)
    as_24um = next((t.as_24um for t in tables if t.as_24um is not None), None)
    return Parameters(
        cos_i=recipe.galaxy.cos_i,
        oh=oh,
        line_ratio=ratio.value if isinstance(ratio, Measured) else 1.0,
        ebv=recipe.foreground.ebv.value,
        nii_ratio=nii.value if nii else 0.0,
        as_24um=as_24um.value if as_24um else 1.0,
        hi_opacity=gas.hi_opacity.value if gas and gas.hi_opacity else 1.0,
        mass_to_light=recipe.stars.mass_to_light.value if recipe.stars else 0.5,
        ms_offset_dex=gas.ms_offset.value if gas and gas.ms_offset else None,
        g0_over_n=gas.g0_over_n.value if gas and gas.g0_over_n else None,
    )


def metallicity_of(recipe: Recipe, grid: Grid, radius_kpc: Array) -> Array:
    """12 + log10(O/H) on the grid, from a gradient or from a map.

    Raises
    ------
    GridError
        If a metallicity map cannot be read or does not reach the galaxy.
    """
    table = recipe.metallicity
    if table.map is not None:
        return _metallicity_map(table.map, grid)
    slope, per = table.slope
    if per == "r25" and recipe.galaxy.r25 is not None:
        slope /= recipe.galaxy.r25.value * recipe.galaxy.pc_per_arcsec / 1e3
    centre = table.oh.value if table.oh is not None else np.nan
    return oh_from_gradient(radius_kpc, centre, slope)


def _metallicity_map(path: Path, grid: Grid) -> Array:
    """Interpolate a map of 12 + log10(O/H) linearly; it is not smoothed."""
    # Its imports cost a second, and few recipes need it.
    from reproject import reproject_interp  # noqa: PLC0415

    image = StoredImage.find(path, None)
    wcs: WCS = celestial_wcs(image.header, f"metallicity.map, {image}")
    hdu = fits.PrimaryHDU(image.read(), wcs.to_header())
    oh, _ = reproject_interp(hdu, grid.wcs, shape_out=grid.shape, order="bilinear")
    if not np.isfinite(oh).any():
        raise GridError(Fault("metallicity.map", f"{image} does not reach the galaxy"))
    return np.asarray(oh, dtype=float)


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

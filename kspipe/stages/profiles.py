"""Deprojected profiles and named regions: means and sums with errors of correlated pixels."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
from astropy.table import Column, Table
from numpy.typing import NDArray

from kspipe.comparison import independent_beams
from kspipe.conversions import Surface
from kspipe.kernels.geometry import beam_axes
from kspipe.kernels.region_sums import region_covariance, upper_limit
from kspipe.matching import Grid
from kspipe.recipe import Recipe
from kspipe.stages.summary import DETECTED_SIGMA, common_errors
from kspipe.stages.surface import Disc

__all__ = ["PROFILES_FILE", "Region", "profile_table", "rings_of", "write_profiles"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

PROFILES_FILE: Final = "profiles.ecsv"

_UNITS: Final = {
    "sigma_star": "solMass / pc2",
    "sigma_atom": "solMass / pc2",
    "sigma_mol": "solMass / pc2",
    "sigma_gas": "solMass / pc2",
    "sigma_sfr": "solMass / (yr kpc2)",
}
# Ratios of sums: top, bottom, factor to the unit, unit.
_RATIOS: Final = {
    "f_mol": ("sigma_mol", "sigma_gas", 1.0, None),
    "t_dep": ("sigma_mol", "sigma_sfr", 1e-3, "Gyr"),
    "t_dep_gas": ("sigma_gas", "sigma_sfr", 1e-3, "Gyr"),
}


@dataclass(frozen=True)
class Region:
    """A part of the disc.

    Attributes
    ----------
    name : str
    inside : (ny, nx) bool array
        Pixels of the grid in it, covered or not.
    inner_kpc, outer_kpc : float
        Bounds in deprojected radius; NaN where it has none.
    """

    name: str
    inside: Mask
    inner_kpc: float = math.nan
    outer_kpc: float = math.nan


def rings_of(radius_kpc: Array, covered: Mask, beam_kpc: float) -> list[Region]:
    """Cut the disc into rings one beam wide, out to the last covered pixel.

    Parameters
    ----------
    radius_kpc : (ny, nx) float64 array
        Deprojected.
    covered : (ny, nx) bool array
    beam_kpc : float
        FWHM along the major axis: the minor axis is seen with a beam wider by 1 / cos i.
    """
    outermost = float(radius_kpc[covered].max())
    edges = beam_kpc * np.arange(math.floor(outermost / beam_kpc) + 2)
    rings = []
    for inner, outer in zip(edges[:-1].tolist(), edges[1:].tolist(), strict=True):
        inside = (radius_kpc >= inner) & (radius_kpc < outer)
        if (inside & covered).any():
            rings.append(Region(f"{inner:.3g} to {outer:.3g} kpc", inside, inner, outer))
    return rings


def profile_table(
    recipe: Recipe,
    disc: Disc,
    covered: Mask,
    grid: Grid,
    beam_arcsec2: Array,
    regions: Mapping[str, Mask],
) -> Table:
    """Make the table of profiles: a row for each ring, for each named region, and for all.

    Parameters
    ----------
    recipe : Recipe
    disc : Disc
    covered : (ny, nx) bool array
        Pixels with gas and star formation, of any sign.
    grid : Grid
    beam_arcsec2 : (2, 2) float64 array
    regions : mapping of str to (ny, nx) bool array
        Named regions besides the rings.

    Returns
    -------
    astropy.table.Table
        Means over the covered pixels of each region, face-on; ``_err`` is the random error of the
        mean with the noise's correlation, ``_common_err`` that of flux scales and zero levels,
        ``_limit`` the 3-sigma upper limit by the region's own error where the mean is fainter
        than 3 of them, ``_next_corr`` the correlation of the random error with the next row's.
    """
    beam_kpc = beam_axes(beam_arcsec2)[0] * recipe.galaxy.pc_per_arcsec / 1e3
    groups = [rings_of(disc.radius_kpc, covered, beam_kpc)]
    groups += [[Region(name, mask)] for name, mask in regions.items() if (mask & covered).any()]
    groups.append([Region("all", np.ones(grid.shape, dtype=bool))])
    rows = [row for group in groups for row in group]
    areas = grid.areas_arcsec2()
    on_sky = np.array([float(areas[row.inside & covered].sum()) for row in rows])
    face_on_kpc2 = on_sky * recipe.galaxy.pc_per_arcsec**2 / recipe.galaxy.cos_i * 1e-6
    count = np.array([int((row.inside & covered).sum()) for row in rows])
    pixel_area = grid.pixel_arcsec**2

    table = Table(
        meta={
            "galaxy": recipe.galaxy.name,
            "means": "over covered pixels of the region, face-on, helium included",
            "beam_kpc": beam_kpc,
            "detected": f"{DETECTED_SIGMA:g} sigma of the region's own random error",
        }
    )

    def add(name: str, values: Any, unit: str | None, description: str) -> None:
        table.add_column(Column(values, name=name, unit=unit, description=description))

    add("region", [row.name for row in rows], None, "ring, named region, or all covered sky")
    add("inner_kpc", [row.inner_kpc for row in rows], "kpc", "inner radius, in the disc")
    add("outer_kpc", [row.outer_kpc for row in rows], "kpc", "outer radius, in the disc")
    add("n_pixels", count, None, "covered pixels")
    independent = [independent_beams(int(n), pixel_area, beam_arcsec2) for n in count]
    add("n_independent", independent, None, "effective number for a mean: area / (2 beam areas)")
    share = count / [int(row.inside.sum()) for row in rows]
    add("covered_share", share, None, "covered share of the region's pixels on the grid")
    add("area_kpc2", face_on_kpc2, "kpc2", "covered area, in the plane of the disc")

    here = {name: disc.surfaces[name] for name in _UNITS if name in disc.surfaces}
    ratios = {name: r for name, r in _RATIOS.items() if r[0] in here and r[1] in here}
    pairs = [(name, name) for name in here] + [(top, bottom) for top, bottom, *_ in ratios.values()]
    covariances = _covariances(here, pairs, groups, covered, areas, on_sky, grid)
    means = {}
    for name, surface in here.items():
        unit = _UNITS[name]
        variance, with_next = covariances[name, name]
        error = np.sqrt(np.maximum(variance, 0.0))
        means[name] = mean = np.array(
            [
                float(np.sum((surface.value * areas)[row.inside & covered])) / sky
                for row, sky in zip(rows, on_sky, strict=True)
            ]
        )
        add(name, mean, unit, f"mean {name}")
        add(f"{name}_err", error, unit, f"random 1-sigma error of the mean {name}")
        add(
            f"{name}_common_err",
            [
                math.hypot(*common_errors(disc, name, row.inside & covered, areas / sky).values())
                for row, sky in zip(rows, on_sky, strict=True)
            ],
            unit,
            "error by flux scales, zero levels and matching, shared by all pixels",
        )
        faint = mean < DETECTED_SIGMA * error
        limit = np.where(faint, upper_limit(mean, error, DETECTED_SIGMA), np.nan)
        add(f"{name}_limit", limit, unit, "upper limit where the mean is not detected")
        with np.errstate(invalid="ignore", divide="ignore"):
            beside = with_next / (error * np.append(error[1:], np.nan))
        add(f"{name}_next_corr", beside, None, "of the random errors of this ring and the next")
    for name, (top, bottom, factor, ratio_unit) in ratios.items():
        # A ratio with an undetected denominator is anything: it is left blank.
        error = np.sqrt(np.maximum(covariances[bottom, bottom][0], 0.0))
        below = np.where(means[bottom] > DETECTED_SIGMA * error, means[bottom], np.nan)
        ratio = means[top] / below
        variance = (
            covariances[top, top][0]
            + ratio**2 * covariances[bottom, bottom][0]
            - 2.0 * ratio * covariances[top, bottom][0]
        )
        what = f"ratio of the means of {top} and {bottom}, where the latter is detected"
        add(name, factor * ratio, ratio_unit, what)
        spread = factor * np.sqrt(np.maximum(variance, 0.0)) / below
        add(f"{name}_err", spread, ratio_unit, f"random 1-sigma error of {name}")
    return table


def _covariances(
    surfaces: Mapping[str, Surface],
    pairs: list[tuple[str, str]],
    groups: list[list[Region]],
    covered: Mask,
    areas: Array,
    on_sky: Array,
    grid: Grid,
) -> dict[tuple[str, str], tuple[Array, Array]]:
    """Covariance of the means of each pair of products: of each row, and with the next row.

    Regions of one group do not overlap; the last of a group has no next.
    """
    noise = [(surfaces[a].noise, surfaces[b].noise) for a, b in pairs]
    found: list[list[tuple[Array, Array]]] = []
    start = 0
    for group in groups:
        labels = np.full(grid.shape, -1)
        for i, region in enumerate(group):
            labels[region.inside & covered] = i
        sky = on_sky[start : start + len(group)]
        weights = areas / np.where(labels >= 0, sky[labels], 1.0)
        found.append(region_covariance(noise, labels, weights, grid.jacobian_arcsec()))
        start += len(group)
    return {
        pair: (
            np.concatenate([part[i][0] for part in found]),
            np.concatenate([np.append(part[i][1], np.nan) for part in found]),
        )
        for i, pair in enumerate(pairs)
    }


def write_profiles(table: Table, folder: Path) -> None:
    """Write the table into a folder as ECSV, every number in full."""
    table.write(folder / PROFILES_FILE, format="ascii.ecsv")

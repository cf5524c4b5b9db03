"""The product folder read back for drawing; the maps that went into it are never opened."""

from __future__ import annotations

import json
import math
import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
from astropy.table import Table
from astropy.wcs import WCS
from numpy.typing import NDArray

from kspipe.core.constants import DEG_ARCSEC
from kspipe.kernels.geometry import beam_covariance
from kspipe.maps.header import celestial_wcs
from kspipe.maps.product import read_image
from kspipe.maps.skymap import Flag
from kspipe.recipe import Recipe, load_recipe

__all__ = ["Density", "Products", "Residual", "read_products", "read_recipe"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

# Bins of a running quantile hold at least this many independent values.
LEAST_INDEPENDENT: Final = 3.0

_DENSITIES: Final = ("sigma_atom", "sigma_mol", "sigma_gas", "sigma_sfr")


@dataclass(frozen=True)
class Density:
    """One surface density with its random 1-sigma error, both (ny, nx) in the product's unit."""

    value: Array
    error: Array

    @property
    def snr(self) -> Array:
        """Value over error."""
        with np.errstate(invalid="ignore", divide="ignore"):
            return self.value / self.error


@dataclass(frozen=True)
class Residual:
    """One relation held against the galaxy; arrays are (ny, nx).

    Attributes
    ----------
    ratio_dex : float64 array
        log10(observed / predicted), NaN where it has no argument.
    predicted : float64 array
        [Msun/yr/kpc2].
    normalised : float64 array
        Difference over its random error.
    """

    ratio_dex: Array
    predicted: Array
    normalised: Array


@dataclass(frozen=True)
class Products:
    """What a product folder holds; arrays are (ny, nx).

    Attributes
    ----------
    recipe : Recipe
    summary : dict
    wcs : astropy.wcs.WCS
    beam_arcsec2 : (2, 2) float64 array
    densities : dict of str to Density
        ``sigma_mol`` only where the recipe has molecular gas.
    oh, radius_kpc : float64 array
    flags : int32 array
        Of the surface densities.
    covered, independent : bool array
        Rows of the pixel table, and the independent samples among them.
    residuals : dict of str to Residual
        By the recipe's name of the relation.
    """

    recipe: Recipe
    summary: dict[str, Any]
    wcs: WCS
    beam_arcsec2: Array
    densities: dict[str, Density]
    oh: Array
    radius_kpc: Array
    flags: NDArray[np.int32]
    covered: Mask
    independent: Mask
    residuals: dict[str, Residual]

    @property
    def is_faint(self) -> Mask:
        """Pixels in which gas or star formation is below the recipe's limit of S/N."""
        return np.asarray((self.flags & int(Flag.LOW_SNR)) != 0)

    @property
    def r25_kpc(self) -> float:
        """Optical radius; NaN where the recipe has none."""
        galaxy = self.recipe.galaxy
        return math.nan if galaxy.r25 is None else galaxy.r25.value * galaxy.pc_per_arcsec / 1e3

    @property
    def least_pixels(self) -> int:
        """Pixels that hold as many independent values as a running quantile needs."""
        n_independent = float(self.summary["n_independent"])
        per_value = int(self.covered.sum()) / n_independent if n_independent > 0 else 1.0
        return math.ceil(LEAST_INDEPENDENT * per_value)

    @property
    def galaxy_text(self) -> str:
        """The galaxy's name, safe from being read as mathematics."""
        return self.recipe.galaxy.name.replace("$", r"\$")

    @property
    def beam_text(self) -> str:
        """The beam in arcsec and pc."""
        return f"{self.summary['beam_arcsec']:.3g}″ = {self.summary['beam_pc']:.3g} pc"

    @property
    def size_text(self) -> str:
        """Pixels and independent values, side by side."""
        return (
            rf"N$_\mathrm{{pixels}}$ = {self.summary['n_pixels']}, "
            rf"N$_\mathrm{{independent}}$ = {self.summary['n_independent']:.0f}"
        )


def read_recipe(folder: Path) -> Recipe:
    """Read DIR/recipe.toml without asking whether the maps it lists are still there."""
    path = folder / "recipe.toml"
    try:
        maps = tomllib.loads(path.read_text(encoding="utf-8")).get("maps", {})
    except ValueError:
        maps = {}  # the reader of recipes says what is wrong
    return load_recipe(path, in_memory=frozenset(maps))


def read_products(folder: Path, recipe: Recipe) -> Products:
    """Read all that the figures show.

    Parameters
    ----------
    folder : Path
        A product folder with its comparison.
    recipe : Recipe
        Its recipe.

    Returns
    -------
    Products
    """
    maps = folder / "maps"
    gas, header = read_image(maps / "sigma_gas.fits")
    covered, independent = _rows(folder / "pixels.ecsv", (gas.shape[0], gas.shape[1]))
    return Products(
        recipe=recipe,
        summary=json.loads((folder / "summary.json").read_text(encoding="utf-8")),
        wcs=celestial_wcs(header, "maps/sigma_gas.fits"),
        beam_arcsec2=beam_covariance(
            header["BMAJ"] * DEG_ARCSEC, header["BMIN"] * DEG_ARCSEC, header["BPA"]
        ),
        densities={
            name: _density(maps / f"{name}.fits")
            for name in _DENSITIES
            if (maps / f"{name}.fits").is_file()
        },
        oh=read_image(maps / "metallicity.fits")[0],
        radius_kpc=read_image(maps / "radius.fits")[0],
        flags=read_image(maps / "sigma_gas.fits", "FLAGS")[0].astype(np.int32),
        covered=covered,
        independent=independent,
        residuals={
            name: _residual(folder / "residuals" / f"{name}.fits") for name in recipe.relations
        },
    )


def _density(path: Path) -> Density:
    return Density(read_image(path)[0], read_image(path, "ERROR")[0])


def _residual(path: Path) -> Residual:
    return Residual(
        ratio_dex=read_image(path)[0],
        predicted=read_image(path, "PREDICTED")[0],
        normalised=read_image(path, "NORMALISED")[0],
    )


def _rows(path: Path, shape: tuple[int, int]) -> tuple[Mask, Mask]:
    """Put the rows of the pixel table back on the grid: covered, and independent."""
    # The plain fast reader takes three of the columns and passes over the ECSV header; on a map
    # of a million pixels that is seconds against a minute.
    table = Table.read(
        path, format="ascii.fast_basic", comment="#", include_names=["x", "y", "independent"]
    )
    covered, independent = np.zeros(shape, dtype=bool), np.zeros(shape, dtype=bool)
    covered[table["y"], table["x"]] = True
    independent[table["y"], table["x"]] = table["independent"] == "True"
    return covered, independent

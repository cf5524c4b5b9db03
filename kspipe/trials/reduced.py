"""A reduced folder read back as the start of a trial; the maps that went into it stay closed."""

from __future__ import annotations

import tomllib
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from kspipe.comparison import independent_samples
from kspipe.comparison.samples import LinearSamples
from kspipe.core.errors import Fault, OutputError
from kspipe.kernels.geometry import beam_axes
from kspipe.kernels.noise import covariance
from kspipe.maps.product import read_matched
from kspipe.maps.skymap import SkyMap
from kspipe.matching import Grid
from kspipe.recipe import Recipe, load_recipe
from kspipe.stages.folder import ProductFolder
from kspipe.stages.plan import convert_print
from kspipe.stages.surface import Disc, surfaces_of

__all__ = ["Reduced", "line_samples", "open_reduced"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]


@dataclass(frozen=True)
class Reduced:
    """A reduction, with what the comparison makes of it.

    Attributes
    ----------
    folder : ProductFolder
    recipe : Recipe
    matched : dict of str to SkyMap
        By the recipe's names.
    grid : Grid
    disc : Disc
    used : (ny, nx) bool array
        Pixels with gas and star formation, of any sign.
    print_ : str
        Fingerprint of the reduction.
    """

    folder: ProductFolder
    recipe: Recipe
    matched: dict[str, SkyMap]
    grid: Grid
    disc: Disc
    used: Mask
    print_: str

    @property
    def beam_arcsec2(self) -> Array:
        """The common beam."""
        return next(iter(self.matched.values())).beam_arcsec2

    def lattice(self, fwhm_arcsec: float | None = None) -> Mask:
        """Independent samples among the covered pixels, for the common beam or a wider one."""
        fwhm = beam_axes(self.beam_arcsec2)[0] if fwhm_arcsec is None else fwhm_arcsec
        lattice = independent_samples(
            self.grid.shape, self.grid.centre_pixel, fwhm / self.grid.pixel_arcsec
        )
        return np.asarray(lattice & self.used)

    def with_maps(self, matched: dict[str, SkyMap]) -> Reduced:
        """Return the same galaxy from other matched maps on the same grid.

        Raises
        ------
        OutputError
            If no pixel is covered by all of them.
        """
        disc = surfaces_of(self.recipe, matched, self.grid)
        used = covered_by_all(disc, self.folder.path)
        return replace(self, matched=matched, disc=disc, used=used)


def covered_by_all(disc: Disc, where: Path) -> Mask:
    """Pixels with gas and star formation, of any sign.

    Raises
    ------
    OutputError
        If there are none.
    """
    gas, sfr = disc.surfaces["sigma_gas"], disc.surfaces["sigma_sfr"]
    used = np.isfinite(gas.value) & np.isfinite(sfr.value)
    if not used.any():
        raise OutputError(
            Fault(str(where), "no pixel is covered by all maps", "check coverage in DIR/matched")
        )
    return np.asarray(used)


def open_reduced(out: Path) -> Reduced:
    """Open a product folder that holds a reduction.

    Raises
    ------
    OutputError
        If it holds none, or files or recipe were changed since.
    """
    folder = ProductFolder.open(out)
    path = out / "recipe.toml"
    if "convert" not in folder.stages or not path.is_file():
        raise OutputError(
            Fault(str(out), "holds no reduction", "run: kspipe reduce RECIPE --out DIR")
        )
    try:
        names = frozenset(tomllib.loads(path.read_text(encoding="utf-8")).get("maps", {}))
    except ValueError:
        names = frozenset()  # the reader of recipes says what is wrong
    recipe = load_recipe(path, in_memory=names)
    stages = folder.stages
    prints = {stage: stages[stage]["fingerprint"] for stage in stages if stage != "convert"}
    print_ = convert_print(recipe, prints)
    touched = [
        stage
        for stage, record in stages.items()
        if stage.startswith("match.") and not folder.is_current(stage, record["fingerprint"])
    ]
    if touched or print_ != stages["convert"]["fingerprint"]:
        what = f"files were changed by hand ({', '.join(touched)})" if touched else "recipe.toml"
        raise OutputError(
            Fault(
                str(out),
                f"the reduction is stale: {what} changed since",
                "run again: kspipe reduce RECIPE --out DIR --overwrite",
            )
        )
    matched = {name: read_matched(out / "matched" / f"{name}.fits") for name in recipe.maps}
    first = next(iter(matched.values()))
    shape = (first.value.shape[0], first.value.shape[1])
    grid = Grid.like(first.wcs, shape, recipe.galaxy.centre.degrees, f"{out}/matched")
    disc = surfaces_of(recipe, matched, grid)
    return Reduced(folder, recipe, matched, grid, disc, covered_by_all(disc, out), print_)


def line_samples(disc: Disc, chosen: Mask) -> LinearSamples:
    """Sigma_gas and Sigma_SFR of chosen pixels, with their random errors."""
    gas, sfr = disc.surfaces["sigma_gas"], disc.surfaces["sigma_sfr"]
    shared = np.broadcast_to(covariance(gas.noise, sfr.noise), gas.value.shape)
    return LinearSamples(
        x=gas.value[chosen],
        y=sfr.value[chosen],
        var_x=gas.error[chosen] ** 2,
        var_y=sfr.error[chosen] ** 2,
        cov=shared[chosen],
    )

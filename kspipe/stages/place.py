"""Where each pixel of the grid lies in the galaxy, and quantities that vary with that."""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS
from numpy.typing import NDArray

from kspipe.conversions import Field
from kspipe.core.errors import Fault, GridError
from kspipe.kernels.geometry import disc_radius, position_offsets
from kspipe.maps.header import celestial_wcs
from kspipe.maps.stored import StoredImage
from kspipe.matching import Grid
from kspipe.recipe import Recipe
from kspipe.recipe.quantity import Measured
from kspipe.recipe.regions import RegionTable, radius_value
from kspipe.recipe.varying import ByRegion, OnMap, Profile, Varying

__all__ = ["Place", "spread"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]


@dataclass(frozen=True)
class Place:
    """The grid, seen in the galaxy.

    Attributes
    ----------
    recipe : Recipe
    grid : Grid
    radius_kpc : (ny, nx) float64 array
        In the disc.
    """

    recipe: Recipe
    grid: Grid
    radius_kpc: Array

    @classmethod
    def of(cls, recipe: Recipe, grid: Grid) -> Place:
        """Work out the radii."""
        galaxy = recipe.galaxy
        radius = disc_radius(
            *grid.offsets_arcsec(),
            inclination_deg=galaxy.inclination.value,
            pa_deg=galaxy.position_angle.value,
        )
        return cls(recipe, grid, radius * galaxy.pc_per_arcsec / 1e3)

    def radius_in(self, unit: str) -> Array:
        """Radius in the disc in one of `kspipe.recipe.varying.RADIUS_UNITS`."""
        return self.radius_kpc / self.recipe.galaxy.kpc_per(unit)

    def region(self, name: str) -> Mask:
        """Pixels whose centres lie in a region of the recipe.

        Raises
        ------
        GridError
            If the region holds no pixel.
        """
        table = self.recipe.regions[name]
        inside = {"ring": self._ring, "ellipse": self._ellipse, "mask": self._mask}[table.shape](
            table, name
        )
        if not inside.any():
            raise GridError(Fault(f"regions.{name}", "no pixel of the grid lies in the region"))
        return inside

    def _ring(self, table: RegionTable, _name: str) -> Mask:
        bounds = [("inner", "0 kpc"), ("outer", "")]
        inside = np.ones(self.grid.shape, dtype=bool)
        for key, default in bounds:
            typed = getattr(table, key) or default
            if typed:
                value, unit = radius_value(typed)
                radius = self.radius_in(unit)
                inside &= radius >= value if key == "inner" else radius < value
        return inside

    def _ellipse(self, table: RegionTable, _name: str) -> Mask:
        centre = table.centre or self.recipe.galaxy.centre
        east, north = position_offsets(*self.grid.sky(), *centre.degrees)
        angle = math.radians(table.position_angle.value if table.position_angle else 0.0)
        along = east * math.sin(angle) + north * math.cos(angle)
        across = -east * math.cos(angle) + north * math.sin(angle)
        major = table.semi_major.value if table.semi_major else 1.0
        minor = table.semi_minor.value if table.semi_minor else 1.0
        return np.asarray(np.hypot(along / major, across / minor) <= 1.0)

    def _mask(self, table: RegionTable, name: str) -> Mask:
        path = table.mask or Path()
        mask = self.image(path, f"regions.{name}.mask", order="nearest-neighbor")
        return np.asarray(np.isfinite(mask) & (mask != 0))

    def image(self, path: Path, where: str, order: str = "bilinear") -> Array:
        """Interpolate an image on the grid; it is not smoothed.

        Raises
        ------
        GridError
            If it does not reach the galaxy.
        """
        # Its imports cost a second, and few recipes need it.
        from reproject import reproject_interp  # noqa: PLC0415

        image = StoredImage.find(path, None)
        wcs: WCS = celestial_wcs(image.header, f"{where}, {image}")
        hdu = fits.PrimaryHDU(image.read(), wcs.to_header())
        value, _ = reproject_interp(hdu, self.grid.wcs, shape_out=self.grid.shape, order=order)
        if not np.isfinite(value).any():
            raise GridError(Fault(where, f"{image} does not reach the galaxy"))
        return np.asarray(value, dtype=float)


def spread(quantity: Varying, place: Place, where: str) -> Field:
    """Put a quantity of the recipe on the grid.

    Parameters
    ----------
    quantity : Varying
    place : Place
    where : str
        Its full key.

    Returns
    -------
    Field
        A number stays one number. Beyond the rows of a table its last value holds, and pixels
        there are outside; so are those where a map is not possible, which become NaN.

    Raises
    ------
    GridError
        If a map or region does not reach the galaxy, or two regions overlap.
    """
    if isinstance(quantity, Measured):
        common = (np.asarray(quantity.error),) if quantity.error > 0 else ()
        return Field(np.asarray(quantity.value), common=common)
    if isinstance(quantity, OnMap):
        return _of_map(quantity, place, where)
    if isinstance(quantity, Profile):
        return _of_profile(quantity, place, where)
    return _of_regions(quantity, place, where)


def _of_map(quantity: OnMap, place: Place, where: str) -> Field:
    value = place.image(quantity.map, f"{where}.map")
    blank = ~np.isfinite(value)
    wrong = ~blank & ~quantity.kind.is_possible(value)
    if wrong.sum() == (~blank).sum():
        worst = float(np.median(value[~blank]))
        raise GridError(
            Fault(
                f"{where}.map",
                f"no pixel of {quantity.map} holds {quantity.kind.what} (median {worst:g})",
            )
        )
    value = np.where(blank | wrong, np.nan, value)
    notes = [f"{where}: map {quantity.map.name}, interpolated, not smoothed"]
    if wrong.any():
        notes.append(f"{where}: {int(wrong.sum())} pixels are not {quantity.kind.what}: blank")
    random: Array | None = None
    common: tuple[Array, ...] = ()
    if quantity.error is not None:
        error = place.image(quantity.error, f"{where}.error")
        if np.any(error < 0):
            raise GridError(Fault(f"{where}.error", f"{quantity.error} holds negative errors"))
        random = np.where(np.isfinite(error), error, np.where(np.isnan(value), 0.0, np.nan))
    if quantity.elsewhere is not None:
        filled = np.isnan(value)
        value = np.where(filled, quantity.elsewhere.value, value)
        notes.append(f"{where}: {quantity.elsewhere} in {int(filled.sum())} blank pixels")
        if random is not None:
            random = np.where(filled, 0.0, random)
        if quantity.elsewhere.error > 0:
            common = (np.where(filled, quantity.elsewhere.error, 0.0),)
    return Field(value, random, common, wrong, tuple(notes))


def _of_profile(quantity: Profile, place: Place, where: str) -> Field:
    radius = place.radius_in(quantity.per)
    rows = np.asarray(quantity.radius)
    value = np.interp(radius, rows, quantity.value)
    # Between two rows the value leans on both: the error of a row moves the pixels around it.
    common = tuple(
        np.interp(radius, rows, np.where(np.arange(rows.size) == i, error, 0.0))
        for i, error in enumerate(quantity.error)
        if error > 0
    )
    beyond = (radius < rows[0]) | (radius > rows[-1])
    note = f"{where}: table of {rows.size} radii in {quantity.per}"
    if beyond.any():
        note += f"; its end values in {int(beyond.sum())} pixels beyond it"
    return Field(value, None, common, beyond, (note,))


def _of_regions(quantity: ByRegion, place: Place, where: str) -> Field:
    start = quantity.elsewhere.value if quantity.elsewhere else np.nan
    value = np.full(place.grid.shape, start)
    free = np.ones(place.grid.shape, dtype=bool)
    common = []
    for name, number in quantity.regions.items():
        inside = place.region(name)
        twice = int(np.sum(inside & ~free))
        if twice:
            raise GridError(
                Fault(
                    f"{where}.regions",
                    f"{twice} pixels of {name} lie in a region before it, too",
                    "make the regions apart, or leave one out",
                )
            )
        free &= ~inside
        value[inside] = number.value
        if number.error > 0:
            common.append(np.where(inside, number.error, 0.0))
    if quantity.elsewhere and quantity.elsewhere.error > 0:
        common.append(np.where(free, quantity.elsewhere.error, 0.0))
    listed = ", ".join(f"{name} {number}" for name, number in quantity.regions.items())
    rest = f"{quantity.elsewhere} elsewhere" if quantity.elsewhere else "blank elsewhere"
    return Field(value, None, tuple(common), None, (f"{where}: {listed}; {rest}",))

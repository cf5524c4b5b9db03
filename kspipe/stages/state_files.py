"""The files that only the state of the gas reads: a map of linewidths and a finer map of gas."""

from __future__ import annotations

from dataclasses import asdict, replace
from typing import Any

import astropy.units as u
import numpy as np
from astropy.io import fits
from numpy.typing import NDArray

from kspipe.core.constants import FWHM_PER_SIGMA
from kspipe.core.errors import Fault, GridError, MapError, UnitError
from kspipe.kernels.geometry import beam_axes
from kspipe.maps import MapSource
from kspipe.maps.header import celestial_wcs
from kspipe.maps.read import load_map
from kspipe.maps.stored import StoredImage
from kspipe.matching import Grid, match_map
from kspipe.recipe import Recipe
from kspipe.recipe.gas_state import GasStateTable, LinewidthMap
from kspipe.relations.inside_beam import clumping_of_moments
from kspipe.relations.state import LINEWIDTH_SIZE, STATE, TURBULENCE
from kspipe.stages.folder import file_checksum, fingerprint

__all__ = ["finer_clumping", "linewidth_map", "state_files_print", "state_values"]

Array = NDArray[np.float64]


def state_files_print(recipe: Recipe) -> dict[str, str]:
    """Check the headers of both files and return checksums of their contents.

    Raises
    ------
    MapError
        If one of them cannot be used.
    """
    state = recipe.gas_state
    prints: dict[str, str] = {}
    if state is None:
        return prints
    if isinstance(state.linewidth, LinewidthMap):
        _linewidth_image(state.linewidth)
        prints["linewidth"] = file_checksum(state.linewidth.map)
    if state.finer_map is not None:
        source = _finer_source(recipe)
        request: dict[str, Any] = asdict(source.request)
        # Contents count, not where they lie.
        del request["file"], request["noise"]["file"]
        prints["how it is read"] = fingerprint(request)
        prints["finer map"] = file_checksum(source.request.file)
        if source.request.noise.file is not None:
            prints["noise of it"] = file_checksum(source.request.noise.file)
    return prints


def state_values(table: GasStateTable) -> dict[str, Any]:
    """Choices and formulas for a fingerprint; the files are in that of the reduction."""
    values = {
        key: getattr(table, key)
        for key in type(table).model_fields
        if key not in ("finer_map", "linewidth")
    }
    width = table.linewidth
    values["linewidth"] = [width.is_, width.error] if isinstance(width, LinewidthMap) else width
    values["records"] = [
        f"{record.key}: {record.formula}" for record in [*STATE, *TURBULENCE, *LINEWIDTH_SIZE]
    ]
    return values


def _linewidth_image(table: LinewidthMap) -> tuple[StoredImage, float]:
    """Find the image and its unit in km/s."""
    image = StoredImage.find(table.map, None)
    unit = str(image.header.get("BUNIT", ""))
    try:
        return image, float(u.Unit(unit).to(u.km / u.s))
    except (ValueError, TypeError, u.UnitConversionError):
        raise UnitError(
            Fault(
                f"gas_state.linewidth.map, {image}",
                f'its BUNIT is "{unit}"; expected a velocity',
                "write BUNIT = 'km/s' or 'm/s' into the header",
            )
        ) from None


def linewidth_map(table: LinewidthMap, grid: Grid) -> tuple[Array, list[str]]:
    """One-dimensional velocity dispersion on the grid [km/s], and how it came there.

    Interpolated linearly and not smoothed: a mean of linewidths is no linewidth of the mean.

    Raises
    ------
    GridError
        If the map does not reach the galaxy.
    """
    # Its imports cost a second, and few recipes need it.
    from reproject import reproject_interp  # noqa: PLC0415

    image, to_kms = _linewidth_image(table)
    where = f"gas_state.linewidth.map, {image}"
    hdu = fits.PrimaryHDU(image.read(), celestial_wcs(image.header, where).to_header())
    value, _ = reproject_interp(hdu, grid.wcs, shape_out=grid.shape, order="bilinear")
    if not np.isfinite(value).any():
        raise GridError(Fault("gas_state.linewidth.map", f"{image} does not reach the galaxy"))
    per_sigma = FWHM_PER_SIGMA if table.is_ == "fwhm" else 1.0
    story = f"linewidth: {image.file.name}, read as {table.is_}, interpolated, not smoothed"
    return np.asarray(value, dtype=float) * to_kms / per_sigma, [story]


def _finer_source(recipe: Recipe) -> MapSource:
    state, galaxy = recipe.gas_state, recipe.galaxy
    if state is None or state.finer_map is None:
        raise ValueError("the recipe has no finer map")
    try:
        return MapSource.open(
            state.finer_map.request("finer_map"),
            centre_deg=galaxy.centre.degrees,
            velocity_kms=galaxy.velocity.value if galaxy.velocity else None,
            velocity_convention=galaxy.velocity_convention,
        )
    except MapError as error:
        raise _at_its_key(error) from None


def _at_its_key(error: MapError) -> MapError:
    def moved(text: str) -> str:
        return text.replace("maps.finer_map", "gas_state.finer_map")

    return type(error)(
        *(Fault(moved(fault.where), moved(fault.what), moved(fault.do)) for fault in error.faults)
    )


def finer_clumping(recipe: Recipe, target_arcsec2: Array, grid: Grid) -> tuple[Array, list[str]]:
    """Clumping of a finer map inside the final beam, and how it came about.

    Parameters
    ----------
    recipe : Recipe
        With ``[gas_state.finer_map]``.
    target_arcsec2 : (2, 2) float64 array
        Covariance of the final beam.
    grid : Grid

    Returns
    -------
    clumping : (ny, nx) float64 array
        (<S^2> - <sigma^2>) / <S>^2; NaN where not covered or where the mean is not positive.
    history : list of str

    Raises
    ------
    MapError
        If the map cannot be used, or is not finer than the final beam.
    """
    source = _finer_source(recipe)
    try:
        sky = load_map(source)
        square = replace(sky, value=sky.value**2 - sky.error**2, noise=())
        mean, mean_square = (
            match_map(
                each, target_arcsec2, grid, minimum_coverage=recipe.grid.minimum_coverage
            ).value
            for each in (replace(sky, noise=()), square)
        )
    except MapError as error:
        raise _at_its_key(error) from None
    fwhm = beam_axes(sky.beam_arcsec2)[0]
    story = (
        f"clumping: (<S^2> - <sigma^2>)/<S>^2 over the final beam, from {source.image.file.name} "
        f"({sky.tracer}, {fwhm:.3g} arcsec = {fwhm * recipe.galaxy.pc_per_arcsec:.3g} pc); what is "
        "smaller than its beam is not seen"
    )
    return clumping_of_moments(mean, mean_square, 0.0), [story]

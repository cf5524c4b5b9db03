"""One map to the target beam and the common grid: smooth first, regrid second."""

from __future__ import annotations

from dataclasses import replace
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from kspipe.core.errors import Fault, GridError
from kspipe.kernels.geometry import beam_axes, transform_covariance
from kspipe.kernels.regrid import interpolation_noise_gain
from kspipe.maps.skymap import Flag, SkyMap
from kspipe.matching.flux import flux_on_grid, flux_within
from kspipe.matching.grid import Grid
from kspipe.matching.resample import smooth_and_average, smooth_and_sample
from kspipe.matching.smoothing import Smoothing, choose_smoothing

__all__ = ["match_map"]

Array = NDArray[np.float64]
Regrid = Literal["spline", "area"]

# Fewer pixels per FWHM of the final beam cannot be interpolated faithfully.
LEAST_PIXELS_PER_BEAM: Final = 2.5
# From here on a cubic spline through the pixels is good to a part in a thousand.
WELL_SAMPLED: Final = 4.0
# Coverage below this, though above the limit, is flagged.
FULL_COVERAGE: Final = 0.95


def match_map(
    sky: SkyMap,
    target_arcsec2: Array,
    grid: Grid,
    *,
    minimum_coverage: float = 0.5,
    regrid: Regrid | None = None,
    workers: int = 1,
) -> SkyMap:
    """Bring a map and its noise to the target beam on the common grid.

    Blanks and edges are treated by normalised convolution: value times weight and weight are
    smoothed alike, both are interpolated, and their ratio is the result. Nothing is returned
    where less than `minimum_coverage` of the beam fell on observed sky.

    Parameters
    ----------
    sky : SkyMap
        On its own pixels, with its noise terms.
    target_arcsec2 : (2, 2) float64 array
        Covariance of the target beam (east, north).
    grid : Grid
    minimum_coverage : float
    regrid : {"spline", "area"}, optional
        How to go from the map's pixels to the grid's; by default a cubic spline where the target
        beam spans at least two of the map's pixels, else area-weighted means.
    workers : int
        Tiles worked on at a time; the result does not depend on it.

    Returns
    -------
    SkyMap
        Intensities at the pixel centres of the grid; noise terms with the correlation that they
        now have.

    Raises
    ------
    BeamError
        If the target is sharper than the map's beam, or than its PSF image.
    GridError
        If a spline is asked for where the target beam spans too few of the map's pixels.
    """
    x, y, coordinate_error = grid.pixels_in(sky.wcs)
    # At the galaxy's centre, where the target was found legal.
    centre = (float(p) for p in grid.positions_in(sky.wcs, *map(np.asarray, grid.centre_pixel)))
    smoothing = choose_smoothing(sky, target_arcsec2, *centre)
    method = _choose_regrid(sky, smoothing, target_arcsec2, regrid)
    # A map that its final beam spans narrowly is sampled more finely before the spline.
    fine = 2 if _fwhm_pix(target_arcsec2, smoothing) < WELL_SAMPLED else 1
    if method == "area":
        smoothed = smooth_and_average(sky, smoothing, grid, x, y)
    else:
        smoothed = smooth_and_sample(sky, smoothing, target_arcsec2, x, y, fine, workers)

    coverage = np.clip(smoothed.weight, 0.0, 1.0)
    kept = coverage >= minimum_coverage
    with np.errstate(invalid="ignore", divide="ignore"):
        # Not by the coverage: a kernel with negative lobes weighs more than one beside a hole.
        value = np.where(kept, smoothed.value / smoothed.weight, np.nan)
    terms = []
    for term, variance in zip(sky.noise, smoothed.variances, strict=True):
        after = smoothing.after(term, fine=fine)
        gain: Array | float = 1.0
        if method == "spline" and fine == 1:
            as_smooth = transform_covariance(after.correlation_arcsec2, smoothing.jacobian)
            gain = interpolation_noise_gain(x, y, as_smooth)
        with np.errstate(invalid="ignore", divide="ignore"):
            sigma = np.sqrt(variance * gain) / smoothed.weight
        terms.append(after.with_sigma(np.where(kept, sigma, np.nan)))

    bridged = kept & smoothed.on_blank
    flags = np.where(kept & (coverage < FULL_COVERAGE), int(Flag.LOW_COVERAGE), 0)
    flags |= np.where(bridged, int(Flag.BRIDGED), 0)
    fluxes = flux_within(sky.value, sky.wcs, grid), flux_on_grid(value, grid)
    how = (
        "by cubic spline, coordinates "
        + (f"splined, off by {coordinate_error:.0e} pixel" if coordinate_error else "in full")
        if method == "spline"
        else "by area-weighted means: the map's and the grid's pixels widen the beam"
    )
    filled = f"{int((~kept).sum())} of {kept.size} pixels blank, {int(bridged.sum())} bridged"
    rows, columns = grid.shape
    steps = (
        smoothing.story,
        f"regridded to {columns} x {rows} pixels of {grid.pixel_arcsec:.4g} arcsec",
        f"{how} ({'recipe' if regrid else 'chosen by its sampling'})",
        f"coverage limit {minimum_coverage:g}: {filled}",
        f"flux on the grid's sky {fluxes[0]:.6g}, after matching {fluxes[1]:.6g} ({sky.unit} sr)",
    )
    return replace(
        sky,
        value=value,
        noise=tuple(terms),
        coverage=coverage,
        flags=flags.astype(np.int32),
        wcs=grid.wcs,
        beam_arcsec2=target_arcsec2,
        averages_pixels=False,
        psf=None,
        history=(*sky.history, *steps),
        facts={
            **sky.facts,
            **smoothing.facts,
            "flux_before": fluxes[0],
            "flux_after": fluxes[1],
        },
    )


def _choose_regrid(
    sky: SkyMap, smoothing: Smoothing, target_arcsec2: Array, wanted: Regrid | None
) -> Regrid:
    """Interpolate what is sampled well enough, average what is not."""
    fwhm_pix = _fwhm_pix(target_arcsec2, smoothing)
    is_sampled = fwhm_pix >= LEAST_PIXELS_PER_BEAM
    if wanted == "spline" and not is_sampled:
        raise GridError(
            Fault(
                f"maps.{sky.name}.regrid",
                f"the target beam spans {fwhm_pix:.2f} pixels of the map; at least "
                f"{LEAST_PIXELS_PER_BEAM:g} are needed to interpolate it",
                'type regrid = "area" or a wider grid.beam',
            )
        )
    return wanted or ("spline" if is_sampled else "area")


def _fwhm_pix(target_arcsec2: Array, smoothing: Smoothing) -> float:
    """Narrowest width of the target beam in the map's pixels."""
    return beam_axes(transform_covariance(target_arcsec2, smoothing.jacobian))[1]

"""One map to the target beam and the common grid: smooth first, regrid second."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.core.constants import ARCSEC2_SR
from kspipe.core.errors import BeamError, Fault, GridError
from kspipe.kernels.fourier import (
    Padded,
    correlated_noise_gain,
    gaussian_smooth,
    white_noise_gain,
)
from kspipe.kernels.geometry import (
    beam_axes,
    pixel_covariance,
    subtract_covariance,
    transform_covariance,
)
from kspipe.kernels.regrid import interpolation_noise_gain, sample_cubic, sample_linear
from kspipe.maps.header import pixel_areas_arcsec2, pixel_jacobian, sky_of_pixels
from kspipe.maps.skymap import Flag, NoiseTerm, SkyMap
from kspipe.matching.grid import Grid

__all__ = ["match_map"]

Array = NDArray[np.float64]

# Fewer pixels per FWHM of the final beam cannot be interpolated faithfully.
LEAST_PIXELS_PER_BEAM: Final = 2.0
# Coverage below this, though above the limit, is flagged.
FULL_COVERAGE: Final = 0.95


def match_map(
    sky: SkyMap,
    target_arcsec2: Array,
    grid: Grid,
    *,
    minimum_coverage: float = 0.5,
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
    workers : int
        Threads of the FFT; the result does not depend on them.

    Returns
    -------
    SkyMap
        Intensities at the pixel centres of the grid; noise terms with the correlation that they
        now have.

    Raises
    ------
    BeamError
        If the map's beam is wider than the target.
    GridError
        If the target beam spans too few of the map's pixels to be interpolated.
    """
    x, y = grid.pixels_in(sky.wcs)
    kernel = _kernel(sky, target_arcsec2, float(np.median(x)), float(np.median(y)))

    observed = np.isfinite(sky.value)
    filled = np.where(observed, sky.value, 0.0)
    smooth_value = gaussian_smooth(filled, kernel.pix2, workers=workers)
    smooth_weight = gaussian_smooth(observed.astype(float), kernel.pix2, workers=workers)
    coverage = np.clip(_sample(smooth_weight, x, y), 0.0, 1.0)
    kept = coverage >= minimum_coverage
    with np.errstate(invalid="ignore", divide="ignore"):
        value = np.where(kept, _sample(smooth_value, x, y) / coverage, np.nan)

    terms = []
    for term in sky.noise:
        variance, correlation = _smooth_noise(term, observed, kernel, workers)
        gain = interpolation_noise_gain(x, y, transform_covariance(correlation, kernel.jacobian))
        with np.errstate(invalid="ignore", divide="ignore"):
            sigma = np.sqrt(_sample_variance(variance, x, y) * gain) / coverage
        terms.append(NoiseTerm(term.source, np.where(kept, sigma, np.nan), correlation))

    flags = np.where(kept & (coverage < FULL_COVERAGE), int(Flag.LOW_COVERAGE), 0)
    before, after = _fluxes(sky, value, grid)
    return replace(
        sky,
        value=value,
        noise=tuple(terms),
        coverage=coverage,
        flags=flags.astype(np.int32),
        wcs=grid.wcs,
        beam_arcsec2=target_arcsec2,
        averages_pixels=False,
        history=(*sky.history, *_steps(sky, kernel, grid, minimum_coverage, kept, before, after)),
        facts={**sky.facts, "flux_before": before, "flux_after": after},
    )


@dataclass(frozen=True)
class _Kernel:
    """What turns a map's beam into the target, on the sky and on the map's pixels."""

    arcsec2: Array
    pix2: Array
    jacobian: Array


def _kernel(sky: SkyMap, target_arcsec2: Array, x: float, y: float) -> _Kernel:
    """Work out the kernel at one pixel of the map; refuse what cannot be done."""
    where = f"maps.{sky.name}"
    jacobian = pixel_jacobian(sky.wcs, x, y)
    beam = sky.beam_arcsec2 + (pixel_covariance(jacobian) if sky.averages_pixels else 0.0)
    kernel = subtract_covariance(target_arcsec2, beam)
    if kernel is None:
        raise BeamError(Fault(where, "the map's beam is wider than the target beam"))
    fwhm_pix = beam_axes(transform_covariance(target_arcsec2, jacobian))[1]
    if fwhm_pix < LEAST_PIXELS_PER_BEAM:
        raise GridError(
            Fault(
                where,
                f"the target beam spans {fwhm_pix:.2f} pixels of the map; at least "
                f"{LEAST_PIXELS_PER_BEAM:g} are needed to interpolate it",
                "type a wider grid.beam",
            )
        )
    return _Kernel(kernel, transform_covariance(kernel, jacobian), jacobian)


def _steps(
    sky: SkyMap,
    kernel: _Kernel,
    grid: Grid,
    minimum_coverage: float,
    kept: NDArray[np.bool_],
    before: float,
    after: float,
) -> tuple[str, ...]:
    """Say what was done, for the history."""
    major, minor, pa = beam_axes(kernel.arcsec2)
    smoothed = f"smoothed with a Gaussian of {major:.4f} x {minor:.4f} arcsec FWHM, pa {pa:.2f} deg"
    if sky.averages_pixels:
        smoothed += ", detector pixel counted in the beam"
    rows, columns = grid.shape
    blank = int((~kept).sum())
    return (
        smoothed,
        f"interpolated (cubic) to {columns} x {rows} pixels of {grid.pixel_arcsec:.4g} arcsec",
        f"coverage limit {minimum_coverage:g}: {blank} of {kept.size} pixels blank",
        f"flux on the grid's sky {before:.6g}, after matching {after:.6g} ({sky.unit} sr)",
    )


def _sample(padded: Padded, x: Array, y: Array) -> Array:
    return sample_cubic(padded.array, x + padded.margin, y + padded.margin)


def _sample_variance(padded: Padded, x: Array, y: Array) -> Array:
    """Interpolate a variance linearly: it stays positive."""
    return np.maximum(sample_linear(padded.array, x + padded.margin, y + padded.margin), 0.0)


def _smooth_noise(
    term: NoiseTerm, observed: NDArray[np.bool_], kernel: _Kernel, workers: int
) -> tuple[Padded, Array]:
    """Variance of a smoothed noise term (before division by coverage^2), and its correlation.

    A Gaussian kernel of covariance K applied to noise exp(-d^T C^-1 d / 4) of slowly varying
    sigma gives the variance sqrt(det C / det(C + K)) times sigma^2 averaged with a Gaussian of
    covariance K/2: the square of the kernel. White noise has its own gain, the sum of the
    squared kernel.
    """
    correlation = term.correlation_arcsec2
    variance = np.where(observed, term.sigma**2, 0.0)
    if not np.any(kernel.arcsec2):
        return gaussian_smooth(variance, kernel.pix2), correlation
    gain = (
        correlated_noise_gain(correlation, kernel.arcsec2)
        if np.any(correlation)
        else white_noise_gain(kernel.pix2)
    )
    spread = gaussian_smooth(gain * variance, kernel.pix2 / 2.0, workers=workers)
    return spread, correlation + kernel.arcsec2


def _fluxes(sky: SkyMap, value: Array, grid: Grid) -> tuple[float, float]:
    """Integral over the grid's sky before and after, [unit sr]."""
    y, x = np.indices(sky.value.shape, dtype=float)
    lon, lat = sky_of_pixels(sky.wcs, x, y)
    gx, gy = grid.wcs.all_world2pix(lon, lat, 0)
    inside = (gx >= -0.5) & (gx < grid.shape[1] - 0.5) & (gy >= -0.5) & (gy < grid.shape[0] - 0.5)
    areas = pixel_areas_arcsec2(sky.wcs, sky.value.shape)
    before = float(np.nansum(np.where(inside, sky.value * areas, 0.0))) * ARCSEC2_SR
    after = float(np.nansum(value * grid.areas_arcsec2())) * ARCSEC2_SR
    return before, after

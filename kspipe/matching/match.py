"""One map to the target beam and the common grid: smooth first, regrid second."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import partial
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from kspipe.core.errors import BeamError, Fault, GridError
from kspipe.kernels.fourier import (
    correlated_noise_gain,
    gaussian_reach,
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
from kspipe.kernels.tiles import cut_tiles
from kspipe.maps.header import pixel_jacobian
from kspipe.maps.skymap import Flag, NoiseTerm, SkyMap
from kspipe.matching.area import area_weighted
from kspipe.matching.flux import flux_on_grid, flux_within
from kspipe.matching.grid import Grid

__all__ = ["match_map"]

Array = NDArray[np.float64]
Regrid = Literal["spline", "area"]

# Fewer pixels per FWHM of the final beam cannot be interpolated faithfully.
LEAST_PIXELS_PER_BEAM: Final = 2.0
# The cubic B-spline's prefilter forgets a pixel by 0.27 for each pixel of distance.
SPLINE_MARGIN: Final = 14
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
        If a spline is asked for where the target beam spans too few of the map's pixels.
    """
    x, y, coordinate_error = grid.pixels_in(sky.wcs)
    kernel = _kernel(sky, target_arcsec2, float(np.nanmedian(x)), float(np.nanmedian(y)))
    method = _choose_regrid(sky, kernel, target_arcsec2, regrid)
    if method == "area":
        smoothed = _smooth_and_average(sky, kernel, grid, x, y)
    else:
        smoothed = _smooth_and_sample(sky, kernel, x, y, workers)

    coverage = np.clip(smoothed.weight, 0.0, 1.0)
    kept = coverage >= minimum_coverage
    with np.errstate(invalid="ignore", divide="ignore"):
        value = np.where(kept, smoothed.value / coverage, np.nan)
    terms = []
    for term, variance in zip(sky.noise, smoothed.variances, strict=True):
        after = _after(term, kernel)
        gain: Array | float = 1.0
        if method == "spline":
            gain = interpolation_noise_gain(x, y, _smoothness_pix2(after, kernel))
        with np.errstate(invalid="ignore", divide="ignore"):
            sigma = np.sqrt(variance * gain) / coverage
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
    steps = (
        *_steps(sky, kernel, grid),
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
        history=(*sky.history, *steps),
        facts={**sky.facts, "flux_before": fluxes[0], "flux_after": fluxes[1]},
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
    return _Kernel(kernel, transform_covariance(kernel, jacobian), jacobian)


def _choose_regrid(
    sky: SkyMap, kernel: _Kernel, target_arcsec2: Array, wanted: Regrid | None
) -> Regrid:
    """Interpolate what is sampled well enough, average what is not."""
    fwhm_pix = beam_axes(transform_covariance(target_arcsec2, kernel.jacobian))[1]
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


def _steps(sky: SkyMap, kernel: _Kernel, grid: Grid) -> tuple[str, ...]:
    """Say how the map was smoothed and where it was put, for the history."""
    major, minor, pa = beam_axes(kernel.arcsec2)
    smoothed = f"smoothed with a Gaussian of {major:.4f} x {minor:.4f} arcsec FWHM, pa {pa:.2f} deg"
    if sky.averages_pixels:
        smoothed += ", detector pixel counted in the beam"
    rows, columns = grid.shape
    put = f"regridded to {columns} x {rows} pixels of {grid.pixel_arcsec:.4g} arcsec"
    return smoothed, put


@dataclass(frozen=True)
class _Smoothed:
    """Smoothed value times weight, weight, and variances, at the pixels of the grid.

    `on_blank` marks grid pixels whose centre is no observed pixel of the map.
    """

    value: Array
    weight: Array
    variances: tuple[Array, ...]
    on_blank: NDArray[np.bool_]


def _smooth_and_average(sky: SkyMap, kernel: _Kernel, grid: Grid, x: Array, y: Array) -> _Smoothed:
    """The way of an under-sampled map."""
    gains = [_noise_gain(term, kernel) for term in sky.noise]
    side = float(np.sqrt(abs(np.linalg.det(kernel.jacobian))))
    value, weight, variances = area_weighted(sky, kernel.pix2, gains, grid, side)
    ny, nx = sky.value.shape
    row, column = np.rint(y).astype(int), np.rint(x).astype(int)
    inside = (row >= 0) & (row < ny) & (column >= 0) & (column < nx)
    seen = np.isfinite(sky.value)[np.where(inside, row, 0), np.where(inside, column, 0)]
    return _Smoothed(value, weight, variances, ~(inside & seen))


def _smooth_and_sample(sky: SkyMap, kernel: _Kernel, x: Array, y: Array, workers: int) -> _Smoothed:
    """Smooth a map tile by tile and interpolate each tile where the grid's pixels fall on it.

    A tile is read with a margin of the kernel's reach and of the spline's, so that tiles give
    what the whole map would, and only what the grid needs is smoothed. Where a tile is observed
    in full its coverage is one without any smoothing.
    """
    out = _Smoothed(
        value=np.zeros(x.shape),
        weight=np.zeros(x.shape),
        variances=tuple(np.zeros(x.shape) for _ in sky.noise),
        on_blank=np.ones(x.shape, dtype=bool),
    )
    margin = gaussian_reach(kernel.pix2) + SPLINE_MARGIN
    ny, nx = sky.value.shape
    # Beyond the kernel's reach from the map's edge there is nothing to sample.
    near = (x > -margin) & (x < nx - 1 + margin) & (y > -margin) & (y < ny - 1 + margin)
    if not near.any():
        return out
    wanted = tuple(
        slice(int(np.floor(p[near].min())), int(np.floor(p[near].max())) + 1) for p in (y, x)
    )
    gains = [_noise_gain(term, kernel) for term in sky.noise]
    for tile in cut_tiles((ny, nx), margin, (wanted[0], wanted[1])):
        rows, columns = tile.core
        here = (
            near & (y >= rows.start) & (y < rows.stop) & (x >= columns.start) & (x < columns.stop)
        )
        if not here.any():
            continue
        tx, ty = x[here] - tile.origin[1], y[here] - tile.origin[0]
        value = tile.cut(sky.value)
        observed = tile.cut(np.isfinite(sky.value[tile.section]), is_section=True) > 0
        out.on_blank[here] = ~observed[np.rint(ty).astype(int), np.rint(tx).astype(int)]
        smooth = partial(gaussian_smooth, margin=0, workers=workers)
        spline = smooth(np.where(observed, value, 0.0), kernel.pix2, as_spline=True)
        out.value[here] = sample_cubic(spline.array, tx, ty, is_spline=True)
        if observed.all():
            out.weight[here] = 1.0
        else:
            spline = smooth(observed.astype(float), kernel.pix2, as_spline=True)
            out.weight[here] = sample_cubic(spline.array, tx, ty, is_spline=True)
        for term, gain, variance in zip(sky.noise, gains, out.variances, strict=True):
            squared = np.where(observed, tile.cut(term.sigma) ** 2, 0.0) * gain
            spread = smooth(squared, kernel.pix2 / 2.0).array
            variance[here] = np.maximum(sample_linear(spread, tx, ty), 0.0)
    return out


def _noise_gain(term: NoiseTerm, kernel: _Kernel) -> float:
    """Share of a noise term's variance that smoothing leaves, before coverage.

    A Gaussian kernel of covariance K applied to noise exp(-d^T C^-1 d / 4) of slowly varying
    sigma gives the variance sqrt(det C / det(C + K)) times sigma^2 averaged with a Gaussian of
    covariance K/2: the square of the kernel. White noise has its own gain, the sum of the
    squared kernel.
    """
    if not np.any(kernel.arcsec2):
        return 1.0
    if term.sampled is not None:
        return term.sampled.smoothed(kernel.pix2)[0]
    if np.any(term.correlation_arcsec2):
        return correlated_noise_gain(term.correlation_arcsec2, kernel.arcsec2)
    return white_noise_gain(kernel.pix2)


def _after(term: NoiseTerm, kernel: _Kernel) -> NoiseTerm:
    """The term's correlation after smoothing."""
    sampled = term.sampled.smoothed(kernel.pix2)[1] if term.sampled is not None else None
    return replace(
        term, correlation_arcsec2=term.correlation_arcsec2 + kernel.arcsec2, sampled=sampled
    )


def _smoothness_pix2(term: NoiseTerm, kernel: _Kernel) -> Array:
    """Covariance, in the map's pixels, of the Gaussian that the noise is as smooth as."""
    return transform_covariance(term.correlation_arcsec2, kernel.jacobian)

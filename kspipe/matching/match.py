"""One map to the target beam and the common grid: smooth first, regrid second."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import partial
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from kspipe.core.errors import Fault, GridError
from kspipe.kernels.geometry import beam_axes, transform_covariance
from kspipe.kernels.regrid import interpolation_noise_gain, sample_cubic, sample_linear
from kspipe.kernels.tiles import TILE, cut_tiles
from kspipe.maps.header import pixel_jacobian
from kspipe.maps.skymap import Flag, SkyMap
from kspipe.matching.area import area_weighted
from kspipe.matching.flux import flux_on_grid, flux_within
from kspipe.matching.grid import Grid
from kspipe.matching.smoothing import Smoothing, choose_smoothing

__all__ = ["match_map"]

Array = NDArray[np.float64]
Regrid = Literal["spline", "area"]

# Fewer pixels per FWHM of the final beam cannot be interpolated faithfully.
LEAST_PIXELS_PER_BEAM: Final = 2.5
# From here on a cubic spline through the pixels is good to a part in a thousand.
WELL_SAMPLED: Final = 4.0
# A pixel's size on the sky may change by this much before a map gets more than one kernel.
STEADY_SCALE: Final = 1e-4
# Beyond this no tile is small enough: the kernel at the galaxy's centre serves all of the map.
BENT_SCALE: Final = 0.02
# The cubic B-spline's prefilter forgets a pixel by 0.27 for each pixel of distance.
SPLINE_MARGIN: Final = 14
# A kernel narrower than a pixel would ring from the edge of a tile, which therefore fades out.
FADE: Final = 32
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
        smoothed = _smooth_and_average(sky, smoothing, grid, x, y)
    else:
        smoothed = _smooth_and_sample(sky, smoothing, target_arcsec2, x, y, fine, workers)

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


def _tile_size(sky: SkyMap, smoothing: Smoothing, wanted: tuple[slice, slice]) -> int:
    """Side of the tiles: such that a pixel's size on the sky is one number within each."""
    rows, columns = wanted
    # Lengths and angles between a pixel's sides; that north turns over the field is no change.
    form = smoothing.jacobian.T @ smoothing.jacobian
    change = 0.0
    for x in (columns.start, columns.stop):
        for y in (rows.start, rows.stop):
            corner = pixel_jacobian(sky.wcs, x, y)
            if not np.isfinite(corner).all():
                return TILE
            difference = float(np.linalg.norm(corner.T @ corner - form))
            change = max(change, 0.5 * difference / float(np.linalg.norm(form)))
    if sky.psf is not None or not STEADY_SCALE < change < BENT_SCALE:
        return TILE
    widest = max(rows.stop - rows.start, columns.stop - columns.start)
    # The scale changes with the square of the distance from the tangent point.
    parts = min(12, math.ceil(2 * math.sqrt(change / STEADY_SCALE)))
    return int(max(32, widest // parts))


def _fwhm_pix(target_arcsec2: Array, smoothing: Smoothing) -> float:
    """Narrowest width of the target beam in the map's pixels."""
    return beam_axes(transform_covariance(target_arcsec2, smoothing.jacobian))[1]


@dataclass(frozen=True)
class _Smoothed:
    """Smoothed value times weight, weight, and variances, at the pixels of the grid.

    `on_blank` marks grid pixels whose centre is no observed pixel of the map.
    """

    value: Array
    weight: Array
    variances: tuple[Array, ...]
    on_blank: NDArray[np.bool_]


def _smooth_and_average(
    sky: SkyMap, smoothing: Smoothing, grid: Grid, x: Array, y: Array
) -> _Smoothed:
    """The way of an under-sampled map."""
    value, weight, variances = area_weighted(sky, smoothing, grid)
    ny, nx = sky.value.shape
    row, column = np.rint(y).astype(int), np.rint(x).astype(int)
    inside = (row >= 0) & (row < ny) & (column >= 0) & (column < nx)
    seen = np.isfinite(sky.value)[np.where(inside, row, 0), np.where(inside, column, 0)]
    return _Smoothed(value, weight, variances, ~(inside & seen))


def _smooth_and_sample(
    sky: SkyMap,
    smoothing: Smoothing,
    target_arcsec2: Array,
    x: Array,
    y: Array,
    fine: int,
    workers: int,
) -> _Smoothed:
    """Smooth a map tile by tile and interpolate each tile where the grid's pixels fall on it.

    A tile is read with a margin of the kernel's reach and of the spline's, so that tiles give
    what the whole map would, and only what the grid needs is smoothed. Where a tile is observed
    in full its coverage is one without any smoothing. Over a field of degrees pixels change
    their size on the sky: tiles are then small, and each has a kernel of its own.
    """
    out = _Smoothed(
        value=np.zeros(x.shape),
        weight=np.zeros(x.shape),
        variances=tuple(np.zeros(x.shape) for _ in sky.noise),
        on_blank=np.ones(x.shape, dtype=bool),
    )
    margin = smoothing.reach + SPLINE_MARGIN + (FADE if fine > 1 else 0)
    ny, nx = sky.value.shape
    # Beyond the kernel's reach from the map's edge there is nothing to sample.
    near = (x > -margin) & (x < nx - 1 + margin) & (y > -margin) & (y < ny - 1 + margin)
    if not near.any():
        return out
    wanted = tuple(
        slice(int(np.floor(p[near].min())), int(np.floor(p[near].max())) + 1) for p in (y, x)
    )
    size = _tile_size(sky, smoothing, (wanted[0], wanted[1]))
    for tile in cut_tiles((ny, nx), margin, (wanted[0], wanted[1]), size):
        rows, columns = tile.core
        if size < TILE:
            middle = ((c.start + c.stop - 1) / 2 for c in (columns, rows))
            smoothing = choose_smoothing(sky, target_arcsec2, *middle, was_legal=True)
        here = (
            near & (y >= rows.start) & (y < rows.stop) & (x >= columns.start) & (x < columns.stop)
        )
        if not here.any():
            continue
        tx, ty = x[here] - tile.origin[1], y[here] - tile.origin[0]
        value = tile.cut(sky.value)
        observed = tile.cut(np.isfinite(sky.value[tile.section]), is_section=True) > 0
        out.on_blank[here] = ~observed[np.rint(ty).astype(int), np.rint(tx).astype(int)]
        fade: Array | float = _fade(value.shape) if fine > 1 else 1.0
        seen = np.where(observed, value, 0.0) * fade
        smooth = partial(smoothing.smooth, workers=workers, as_spline=True, fine=fine)
        out.value[here] = sample_cubic(smooth(seen), tx * fine, ty * fine, is_spline=True)
        if observed.all():
            out.weight[here] = 1.0
        else:
            weight = smooth(np.where(observed, fade, 0.0))
            out.weight[here] = sample_cubic(weight, tx * fine, ty * fine, is_spline=True)
        for term, variance in zip(sky.noise, out.variances, strict=True):
            sigma = np.where(observed, tile.cut(term.sigma), 0.0)
            spread = smoothing.variance(term, sigma, workers=workers)
            variance[here] = np.maximum(sample_linear(spread, tx, ty), 0.0)
    return out


def _fade(shape: tuple[int, ...]) -> Array:
    """One inside, falling to zero over the outermost pixels; value and weight fade alike."""
    along = []
    for n in shape:
        from_edge = np.minimum(np.arange(n), np.arange(n)[::-1]) + 0.5
        along.append(0.5 - 0.5 * np.cos(np.pi * np.clip(from_edge / FADE, 0.0, 1.0)))
    return np.asarray(along[0][:, None] * along[1][None, :])

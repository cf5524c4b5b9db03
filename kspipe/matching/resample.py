"""Smoothing a map and taking it to the pixels of the grid, tile by tile or averaged over areas."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import partial
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.kernels.regrid import sample_cubic, sample_linear
from kspipe.kernels.tiles import Tile, cut_tiles
from kspipe.maps.skymap import SkyMap
from kspipe.matching.area import area_weighted
from kspipe.matching.bending import Bend, bend_of
from kspipe.matching.grid import Grid
from kspipe.matching.smoothing import GaussianSmoothing, Smoothing

__all__ = ["Smoothed", "smooth_and_average", "smooth_and_sample"]

Array = NDArray[np.float64]
Indices = NDArray[np.intp]

# The cubic B-spline's prefilter forgets a pixel by 0.27 for each pixel of distance.
SPLINE_MARGIN: Final = 14
# A kernel narrower than a pixel would ring from the edge of a tile, which therefore fades out.
FADE: Final = 32


@dataclass(frozen=True)
class Smoothed:
    """Smoothed value times weight, weight, and variances, at the pixels of the grid.

    `on_blank` marks grid pixels whose centre is no observed pixel of the map.
    """

    value: Array
    weight: Array
    variances: tuple[Array, ...]
    on_blank: NDArray[np.bool_]


def smooth_and_average(
    sky: SkyMap, smoothing: Smoothing, grid: Grid, x: Array, y: Array
) -> Smoothed:
    """The way of an under-sampled map."""
    value, weight, variances = area_weighted(sky, smoothing, grid)
    ny, nx = sky.value.shape
    row, column = np.rint(y).astype(int), np.rint(x).astype(int)
    inside = (row >= 0) & (row < ny) & (column >= 0) & (column < nx)
    seen = np.isfinite(sky.value)[np.where(inside, row, 0), np.where(inside, column, 0)]
    return Smoothed(value, weight, variances, ~(inside & seen))


def smooth_and_sample(
    sky: SkyMap,
    smoothing: Smoothing,
    target_arcsec2: Array,
    x: Array,
    y: Array,
    fine: int,
    workers: int,
) -> Smoothed:
    """Smooth a map tile by tile and interpolate each tile where the grid's pixels fall on it.

    A tile is read with a margin of the kernel's reach and of the spline's, so that tiles give
    what the whole map would, and only what the grid needs is smoothed. Where a tile is observed
    in full its coverage is one without any smoothing. Over a field of degrees pixels change
    their size on the sky: each tile then has a kernel of its own, and each pixel what its kernel
    differs from that by (`matching.bending`).
    """
    out = Smoothed(
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
    bending = bend_of(sky, target_arcsec2, smoothing, (wanted[0], wanted[1]))
    tiles = list(cut_tiles((ny, nx), margin, (wanted[0], wanted[1]), bending.tile))

    def fill(tile: Tile, here: Indices) -> None:
        if not here.size:
            return
        tx, ty = x.ravel()[here] - tile.origin[1], y.ravel()[here] - tile.origin[0]
        value = tile.cut(sky.value, np.nan)
        observed = np.isfinite(value)
        is_full = bool(observed.all())
        out.on_blank.flat[here] = ~observed[np.rint(ty).astype(int), np.rint(tx).astype(int)]
        kernel, bend = bending.at(tile.core, x.ravel()[here], y.ravel()[here])
        sample = partial(_sampled, kernel, bend, tx, ty, fine=fine)
        fade = _fade(observed.shape) if fine > 1 else None
        seen = value if is_full else np.where(observed, value, 0.0)
        out.value.flat[here] = sample(seen if fade is None else seen * fade)
        if is_full:
            out.weight.flat[here] = 1.0
        else:
            weight = observed.astype(float)
            out.weight.flat[here] = sample(weight if fade is None else weight * fade)
        for term, variance in zip(sky.noise, out.variances, strict=True):
            sigma = tile.cut(term.sigma)
            if not is_full:
                sigma = np.where(observed, sigma, 0.0)
            spread = sample_linear(kernel.variance(term, sigma), tx, ty)
            if bend is not None and not np.any(term.correlation_arcsec2):
                spread *= bend.gain
            variance.flat[here] = np.maximum(spread, 0.0)

    # Tiles write to pixels of their own: the result does not depend on the threads.
    with ThreadPoolExecutor(max(1, workers)) as pool:
        for _ in pool.map(fill, tiles, _members(tiles, x, y, near)):
            pass
    return out


def _members(tiles: list[Tile], x: Array, y: Array, near: NDArray[np.bool_]) -> list[Indices]:
    """Flat indices of the grid pixels that fall on each tile, which come row by row."""
    bottoms = np.unique([tile.core[0].stop for tile in tiles])
    sides = np.unique([tile.core[1].stop for tile in tiles])
    which = np.searchsorted(bottoms, y[near], side="right") * sides.size
    which += np.searchsorted(sides, x[near], side="right")
    order = np.argsort(which, kind="stable")
    cuts = np.searchsorted(which[order], np.arange(1, len(tiles)))
    return np.split(np.flatnonzero(near)[order], cuts)


def _sampled(
    kernel: Smoothing,
    bend: Bend | None,
    x: Array,
    y: Array,
    array: Array,
    *,
    fine: int,
) -> Array:
    """Smooth a tile and interpolate it, each position under its own kernel."""
    smooth = partial(kernel.smooth, array, as_spline=True, fine=fine)
    if bend is None or not isinstance(kernel, GaussianSmoothing):
        return sample_cubic(smooth(), x * fine, y * fine, is_spline=True)
    at = (x + bend.shift_pix[0]) * fine, (y + bend.shift_pix[1]) * fine
    total = sample_cubic(smooth(), *at, is_spline=True)
    for orders, factor in bend.terms.items():
        derived = kernel.smooth(array, as_spline=True, fine=fine, derivative=orders)
        total += factor * sample_cubic(derived, *at, is_spline=True)
    return total


def _fade(shape: tuple[int, ...]) -> Array:
    """One inside, falling to zero over the outermost pixels; value and weight fade alike."""
    along = []
    for n in shape:
        from_edge = np.minimum(np.arange(n), np.arange(n)[::-1]) + 0.5
        along.append(0.5 - 0.5 * np.cos(np.pi * np.clip(from_edge / FADE, 0.0, 1.0)))
    return np.asarray(along[0][:, None] * along[1][None, :])

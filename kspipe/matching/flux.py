"""Flux of a map over the sky of the grid, before and after matching."""

from __future__ import annotations

from typing import Final

import numpy as np
from astropy.wcs import WCS
from numpy.polynomial.legendre import legvander
from numpy.typing import NDArray

from kspipe.core.constants import ARCSEC2_SR
from kspipe.maps.header import pixel_area_at
from kspipe.matching.grid import Grid

__all__ = ["flux_on_grid", "flux_within", "pixels_within"]

Array = NDArray[np.float64]

DEGREE: Final = 4


def flux_on_grid(value: Array, grid: Grid) -> float:
    """Integral of a matched map [unit sr], blanks counting nothing."""
    return float(np.nansum(value * grid.areas_arcsec2())) * ARCSEC2_SR


def flux_within(value: Array, wcs: WCS, grid: Grid) -> float:
    """Integral of a map over the sky that the grid covers [unit sr], blanks counting nothing.

    The grid's outline is drawn on the map's pixels; a pixel belongs to it if its centre does.
    """
    x, y = _outline(grid, wcs)
    if not (np.isfinite(x).all() and np.isfinite(y).all()):
        return float("nan")
    first, last = _spans(x, y, value.shape)
    in_x, in_y, coefficients = _area_polynomial(wcs, value.shape)
    total = 0.0
    for row in np.flatnonzero(last > first):
        columns = slice(int(first[row]), int(last[row]))
        moments = np.nan_to_num(value[row, columns]) @ in_x[columns]
        total += float(in_y[row] @ coefficients @ moments)
    return total * ARCSEC2_SR


def pixels_within(shape: tuple[int, int], wcs: WCS, grid: Grid) -> NDArray[np.bool_]:
    """Pixels of a map whose centres lie on the sky that the grid covers."""
    x, y = _outline(grid, wcs)
    if not (np.isfinite(x).all() and np.isfinite(y).all()):
        return np.zeros(shape, dtype=bool)
    first, last = _spans(x, y, shape)
    columns = np.arange(shape[1])
    return (columns >= first[:, None]) & (columns < last[:, None])


def _outline(grid: Grid, wcs: WCS) -> tuple[Array, Array]:
    """Outer edge of the grid on the map's pixels, in order."""
    ny, nx = grid.shape
    along = np.linspace(0.0, 1.0, 65)[:-1]
    zero, one = np.zeros(along.size), np.ones(along.size)
    x = np.concatenate([along, one, one - along, zero]) * nx - 0.5
    y = np.concatenate([zero, along, one, one - along]) * ny - 0.5
    return grid.positions_in(wcs, x, y)


def _spans(x: Array, y: Array, shape: tuple[int, ...]) -> tuple[NDArray[np.int_], NDArray[np.int_]]:
    """First and one past the last pixel inside a convex outline, for each row."""
    ny, nx = shape
    low, high = np.full(ny, np.inf), np.full(ny, -np.inf)
    for x0, y0, x1, y1 in zip(x, y, np.roll(x, -1), np.roll(y, -1), strict=True):
        if y0 == y1:
            continue
        bottom, top = sorted((y0, y1))
        rows = np.arange(max(0, int(np.ceil(bottom))), min(ny - 1, int(np.floor(top))) + 1)
        crossing = x0 + (rows - y0) * (x1 - x0) / (y1 - y0)
        low[rows] = np.minimum(low[rows], crossing)
        high[rows] = np.maximum(high[rows], crossing)
    seen = high >= low
    first = np.where(seen, np.clip(np.ceil(np.where(seen, low, 0)), 0, nx), 0).astype(int)
    last = np.where(seen, np.clip(np.floor(np.where(seen, high, -1)) + 1, 0, nx), 0).astype(int)
    return first, last


def _area_polynomial(wcs: WCS, shape: tuple[int, ...]) -> tuple[Array, Array, Array]:
    """Pixel area as a polynomial of degree 4 in x and in y.

    A row's flux then needs the row's moments only, not the area of each of its pixels. Areas of
    usual projections bend so little that this is exact to a millionth over ten degrees.

    Returns
    -------
    in_x, in_y : (n, 5) float64 array
        Legendre polynomials of the column and of the row.
    coefficients : (5, 5) float64 array
        Area = in_y @ coefficients @ in_x.T [arcsec2].
    """

    def basis(n: int, positions: Array) -> Array:
        return np.asarray(legvander(2.0 * positions / max(n - 1, 1) - 1.0, DEGREE))

    ny, nx = shape
    nodes_y, nodes_x = np.linspace(0, ny - 1, 9), np.linspace(0, nx - 1, 9)
    areas = pixel_area_at(wcs, *np.meshgrid(nodes_x, nodes_y))
    coefficients = np.linalg.pinv(basis(ny, nodes_y)) @ areas @ np.linalg.pinv(basis(nx, nodes_x)).T
    in_x, in_y = basis(nx, np.arange(nx, dtype=float)), basis(ny, np.arange(ny, dtype=float))
    return in_x, in_y, coefficients

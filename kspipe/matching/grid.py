"""The common grid: north up, centred on the galaxy, over the sky that all maps share."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from astropy.coordinates import SkyCoord
from astropy.wcs import WCS
from astropy.wcs.utils import pixel_to_skycoord, skycoord_to_pixel
from numpy.typing import NDArray

from kspipe.core.errors import Fault, GridError
from kspipe.kernels.coarse import evaluate_smoothly
from kspipe.kernels.geometry import position_offsets
from kspipe.maps import MapSource
from kspipe.maps.header import pixel_areas_arcsec2, pixel_jacobian, sky_of_pixels

__all__ = ["Grid"]

Array = NDArray[np.float64]

# Splined coordinates farther off than this are refined, at last computed in full.
COORDINATE_TOLERANCE_PIX: Final = 0.001


@dataclass(frozen=True)
class Grid:
    """Pixels on the sky that all matched maps share.

    Attributes
    ----------
    wcs : astropy.wcs.WCS
        TAN, ICRS, north up; or that of a map whose pixels were taken over.
    shape : (int, int)
        Rows and columns.
    pixel_arcsec : float
    centre_deg : (float, float)
        The galaxy's centre, ICRS; on the centre of a pixel of kspipe's own grid.
    """

    wcs: WCS
    shape: tuple[int, int]
    pixel_arcsec: float
    centre_deg: tuple[float, float]

    @property
    def centre_pixel(self) -> tuple[float, float]:
        """Pixel (x, y) of the galaxy's centre, zero-based."""
        x, y = skycoord_to_pixel(SkyCoord(*self.centre_deg, unit="deg"), self.wcs, origin=0)
        return float(x), float(y)

    @classmethod
    def around(
        cls,
        centre_deg: tuple[float, float],
        pixel_arcsec: float,
        sources: list[MapSource],
        size_arcsec: float | None = None,
    ) -> Grid:
        """Lay the grid over the overlap of all maps, or over a square of a given size.

        Raises
        ------
        GridError
            If the maps do not overlap, or the galaxy's centre is outside one of them.
        """
        wcs = _tangent(centre_deg, pixel_arcsec)
        edges = [_outline(source, wcs) for source in sources]
        faults = [
            fault
            for source, edge in zip(sources, edges, strict=True)
            if (fault := _elsewhere(source.request.name, edge, pixel_arcsec)) is not None
        ]
        if faults:
            raise GridError(*faults)
        low = np.max([edge.min(axis=0) for edge in edges], axis=0)
        high = np.min([edge.max(axis=0) for edge in edges], axis=0)
        if size_arcsec is not None:
            half = size_arcsec / 2 / pixel_arcsec
            low, high = np.maximum(low, -half), np.minimum(high, half)
        first, last = np.ceil(low - 1e-6).astype(int), np.floor(high + 1e-6).astype(int)
        wcs.wcs.crpix = [1.0 - first[0], 1.0 - first[1]]
        columns, rows = last - first + 1
        return cls(wcs, (int(rows), int(columns)), pixel_arcsec, centre_deg)

    @classmethod
    def like(
        cls, wcs: WCS, shape: tuple[int, int], centre_deg: tuple[float, float], where: str
    ) -> Grid:
        """Take over the pixels of a map, in any frame and projection.

        Raises
        ------
        GridError
            If the galaxy's centre is not on them.
        """
        grid = cls(wcs, shape, 1.0, centre_deg)
        x, y = grid.centre_pixel
        if not (-0.5 <= x <= shape[1] - 0.5 and -0.5 <= y <= shape[0] - 0.5):
            raise GridError(
                Fault("grid.like", f"the galaxy's centre is not on the pixels of {where}")
            )
        area = abs(float(np.linalg.det(pixel_jacobian(wcs, x, y))))
        return cls(wcs, shape, math.sqrt(area), centre_deg)

    def sky(self) -> tuple[Array, Array]:
        """ICRS longitude and latitude of each pixel's centre [deg]."""
        y, x = np.indices(self.shape, dtype=float)
        return sky_of_pixels(self.wcs, x, y)

    def offsets_arcsec(self) -> tuple[Array, Array]:
        """Offsets east and north of the galaxy's centre [arcsec]."""
        return position_offsets(*self.sky(), *self.centre_deg)

    def areas_arcsec2(self) -> Array:
        """Area of each pixel from the local Jacobian [arcsec2]."""
        return pixel_areas_arcsec2(self.wcs, self.shape)

    def jacobian_arcsec(self) -> Array:
        """Sky offset per pixel step at the galaxy's centre."""
        return pixel_jacobian(self.wcs, *self.centre_pixel)

    def pixels_in(self, wcs: WCS) -> tuple[Array, Array, float]:
        """Positions of this grid's pixels on another map's pixels.

        Returns
        -------
        x, y : (ny, nx) float64 array
            Zero-based.
        error_pix : float
            Largest error of the splined coordinates, below 0.001 pixel.
        """
        (x, y), error = evaluate_smoothly(
            lambda x, y: self.positions_in(wcs, x, y), self.shape, COORDINATE_TOLERANCE_PIX
        )
        return x, y, error

    def positions_in(self, wcs: WCS, x: Array, y: Array) -> tuple[Array, Array]:
        """Positions on this grid as positions on another map's pixels, in full."""
        sky = pixel_to_skycoord(x, y, self.wcs, origin=0, mode="all")
        there = skycoord_to_pixel(sky, wcs, origin=0, mode="all")
        return np.asarray(there[0], dtype=float), np.asarray(there[1], dtype=float)


def _tangent(centre_deg: tuple[float, float], pixel_arcsec: float) -> WCS:
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
    wcs.wcs.cunit = ["deg", "deg"]
    wcs.wcs.crval = list(centre_deg)
    wcs.wcs.crpix = [1.0, 1.0]
    wcs.wcs.cdelt = [-pixel_arcsec / 3600.0, pixel_arcsec / 3600.0]
    wcs.wcs.radesys = "ICRS"
    wcs.wcs.set()
    return wcs


def _outline(source: MapSource, wcs: WCS) -> Array:
    """Outer edge of a map as (x, y) pixel offsets on the grid, (n, 2)."""
    ny, nx = source.image.shape
    along_x, along_y = np.linspace(-0.5, nx - 0.5, 33), np.linspace(-0.5, ny - 0.5, 33)
    x = np.concatenate([along_x, along_x, np.full(33, -0.5), np.full(33, nx - 0.5)])
    y = np.concatenate([np.full(33, -0.5), np.full(33, ny - 0.5), along_y, along_y])
    lon, lat = sky_of_pixels(source.wcs, x, y)
    seen = np.isfinite(lon) & np.isfinite(lat)
    px, py = wcs.all_world2pix(lon[seen], lat[seen], 0)
    edge = np.column_stack([px, py])
    return np.asarray(edge[np.isfinite(edge).all(axis=1)])


def _elsewhere(name: str, edge: Array, pixel_arcsec: float) -> Fault | None:
    """Say where a map lies whose box does not hold the galaxy's centre; None where it does."""
    if not len(edge):
        away = "more than 90 degrees"
    elif np.all(edge.min(axis=0) <= 0) and np.all(edge.max(axis=0) >= 0):
        return None
    else:
        away = f"{np.hypot(*edge.mean(axis=0)) * pixel_arcsec / 60:.4g} arcmin"
    return Fault(
        f"maps.{name}",
        f"the map does not reach the galaxy's centre: its middle is {away} away, so the maps do "
        "not overlap there",
        "check galaxy.centre and the file",
    )

"""The common grid: where it lies, and what is said of maps that do not overlap."""

from __future__ import annotations

import math

import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from helpers import CENTRE, make_hdu, make_wcs, open_source, read_map, round_beam

from kspipe.core.errors import GridError
from kspipe.maps import MapSource
from kspipe.matching import Grid, match_map


def source_at(
    centre=CENTRE, *, name="probe", side=60, pixel=3.0, wanted=CENTRE, **geometry
) -> MapSource:
    wcs = make_wcs((side, side), pixel, centre=centre, **geometry)
    hdu = make_hdu(np.ones((side, side)), wcs=wcs, beam_arcsec=3.5 * pixel)
    return open_source(hdu, centre=wanted, name=name)


@pytest.mark.parametrize("rotation", [0.0, 30.0])
def test_the_centre_is_a_pixel_and_north_is_up(rotation) -> None:
    grid = Grid.around(CENTRE, 4.0, [source_at(rotation_deg=rotation)])
    x, y = grid.centre_pixel
    assert (x, y) == pytest.approx((round(x), round(y)), abs=1e-9)
    lon, lat = grid.wcs.all_pix2world(x, y, 0)
    assert (float(lon), float(lat)) == pytest.approx(CENTRE, abs=1e-12)
    # FITS convention: x grows to the west, y to the north.
    east = SkyCoord(*grid.wcs.all_pix2world(x - 1, y, 0), unit="deg")
    north = SkyCoord(*grid.wcs.all_pix2world(x, y + 1, 0), unit="deg")
    middle = SkyCoord(*CENTRE, unit="deg")
    assert middle.position_angle(east).deg == pytest.approx(90.0, abs=0.01)
    assert middle.position_angle(north).deg == pytest.approx(0.0, abs=0.01)
    assert middle.separation(north).arcsec == pytest.approx(4.0, rel=1e-6)


def test_the_grid_covers_what_all_maps_share() -> None:
    # Two squares of 180 arcsec, the second 60 arcsec to the north and 30 to the west.
    dec = CENTRE[1] + 60 / 3600
    ra = CENTRE[0] - 30 / 3600 / math.cos(math.radians(dec))
    sources = [source_at(), source_at((ra, dec), name="other")]
    grid = Grid.around(CENTRE, 5.0, sources)
    x, y = grid.centre_pixel
    ny, nx = grid.shape
    # From the centre: west +-90 and -60..120; south -90 and -30: pixels of 5 arcsec whose centre
    # is inside.
    assert (x, y) == pytest.approx((12, 6), abs=1e-9)
    assert (nx - 1 - x, ny - 1 - y) == pytest.approx((18, 18), abs=1e-9)
    turned = Grid.around(CENTRE, 5.0, sources[::-1])
    assert turned.shape == grid.shape
    np.testing.assert_array_equal(turned.sky(), grid.sky())


def test_a_size_cuts_the_grid() -> None:
    grid = Grid.around(CENTRE, 5.0, [source_at()], size_arcsec=100.0)
    assert grid.shape == (21, 21)
    assert grid.centre_pixel == pytest.approx((10.0, 10.0), abs=1e-9)


def test_offsets_and_areas_are_those_of_the_sky() -> None:
    grid = Grid.around(CENTRE, 5.0, [source_at()])
    east, north = grid.offsets_arcsec()
    sky = SkyCoord(*grid.sky(), unit="deg")
    middle = SkyCoord(*CENTRE, unit="deg")
    np.testing.assert_allclose(np.hypot(east, north), middle.separation(sky).arcsec, atol=1e-6)
    angle = middle.position_angle(sky).rad
    far = np.hypot(east, north) > 1
    turn = np.sin(np.arctan2(east, north) - angle)[far]
    np.testing.assert_allclose(turn, 0, atol=1e-9)
    np.testing.assert_allclose(grid.areas_arcsec2(), 25.0, rtol=1e-6)


@pytest.mark.parametrize(
    ("east_deg", "north_deg"), [(0.5, 0.0), (-0.5, 0.0), (0.0, 0.5), (0.0, -0.5), (170.0, 40.0)]
)
def test_a_map_elsewhere_is_named(east_deg, north_deg) -> None:
    away = (
        (CENTRE[0] + east_deg / math.cos(math.radians(CENTRE[1]))) % 360,
        CENTRE[1] + north_deg,
    )
    with pytest.raises(GridError, match=r"maps\.far.*does not reach the galaxy's centre") as caught:
        Grid.around(CENTRE, 5.0, [source_at(name="near"), source_at(away, name="far")])
    assert "maps.near" not in str(caught.value)
    assert "galaxy.centre" in str(caught.value)
    if abs(east_deg) + abs(north_deg) == 0.5:
        assert "30 arcmin" in str(caught.value).replace("30.0", "30")


def test_a_centre_outside_all_maps_names_them_all() -> None:
    with pytest.raises(GridError, match=r"(?s)maps\.one.*maps\.two"):
        Grid.around((200.0, 40.0), 5.0, [source_at(name="one"), source_at(name="two")])


def test_a_galaxy_at_the_seam_of_right_ascension() -> None:
    centre = (0.0005, 12.0)
    grid = Grid.around(centre, 5.0, [source_at(centre, wanted=centre)])
    assert grid.shape == (37, 37)
    lon, _ = grid.sky()
    assert lon.max() > 359.9
    assert lon.min() < 0.1


def test_an_all_sky_map_serves_a_small_galaxy() -> None:
    """A survey of the whole sky in plate carree: only the part around the galaxy counts."""
    shape, pixel = (180, 360), 3600.0
    wcs = make_wcs(shape, pixel, centre=(180.0, 0.0), projection="CAR")
    lat = np.arange(180) - 89.5
    value = np.broadcast_to(lat[:, None], shape).copy()
    hdu = make_hdu(value, wcs=wcs, beam_arcsec=3.0 * pixel)
    wide = open_source(hdu)
    small = source_at(side=80, pixel=600.0)
    grid = Grid.around(CENTRE, 3600.0, [small, wide])
    assert max(grid.shape) <= 15
    matched = match_map(read_map(hdu), round_beam(4.0 * pixel), grid)
    # A linear slope survives smoothing: the value is the latitude.
    _, dec = grid.sky()
    np.testing.assert_allclose(matched.value, dec, atol=0.05)

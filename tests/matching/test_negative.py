"""Negative regions: planted ones are found with their numbers, noise shows none."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from helpers import ARCSEC2_SR, CENTRE, make_sky, make_wcs, round_beam
from scipy import ndimage

from kspipe.maps.skymap import Flag, NoiseTerm, SkyMap
from kspipe.matching import Grid
from kspipe.matching.negative import find_negative, mask_regions

PIXEL, FWHM = 5.0, 15.0
SIGMA_PIX = FWHM / PIXEL / np.sqrt(8 * np.log(2))


def grid_of(shape: tuple[int, int]) -> Grid:
    return Grid(make_wcs(shape, PIXEL), shape, PIXEL, CENTRE)


def sky_of(value: np.ndarray, sigma: float, grid: Grid) -> SkyMap:
    term = NoiseTerm("probe", np.full(value.shape, sigma), round_beam(FWHM))
    return make_sky(value, wcs=grid.wcs, beam_arcsec2=round_beam(FWHM), noise=(term,))


def beam_noise(rng: np.random.Generator, shape: tuple[int, int]) -> np.ndarray:
    """Unit noise with the correlation of the beam, smoothed in real space."""
    white = rng.normal(size=(shape[0] + 20, shape[1] + 20))
    smooth = ndimage.gaussian_filter(white, SIGMA_PIX, truncate=6)[10:-10, 10:-10]
    return smooth * np.sqrt(4 * np.pi) * SIGMA_PIX


@pytest.fixture
def hollow() -> tuple[SkyMap, Grid, np.ndarray]:
    """A flat map with two hollows, a deep narrow pixel and a shallow bowl."""
    grid = grid_of((50, 60))
    value = np.full(grid.shape, 0.1)
    hollows = np.zeros(grid.shape, dtype=bool)
    hollows[10:14, 20:25] = True
    # Connected by one corner only.
    hollows[14:16, 25:28] = True
    hollows[35:38, 40:43] = True
    value[hollows] = -1.5
    value[36, 41] = -2.5
    value[20, 5] = -9.0
    value[22:30, 8:16] = -0.6
    return sky_of(value, 0.3, grid), grid, hollows


def test_planted_regions_come_out_with_their_numbers(hollow) -> None:
    sky, grid, hollows = hollow
    regions, where = find_negative(sky, grid)
    np.testing.assert_array_equal(where, hollows)
    assert (regions.count, regions.n_pixels) == (2, int(hollows.sum()))
    # A tangent plane near its centre: every pixel has the area of the middle one.
    assert regions.area_arcsec2 == pytest.approx(hollows.sum() * PIXEL**2, rel=1e-4)
    expected = float(sky.value[hollows].sum()) * PIXEL**2 * ARCSEC2_SR
    assert regions.flux == pytest.approx(expected, rel=1e-4)
    assert regions.worst_snr == pytest.approx(-2.5 / 0.3)
    lon, lat = grid.wcs.all_pix2world([[41, 36]], 0)[0]
    assert (regions.worst_ra_deg, regions.worst_dec_deg) == pytest.approx((lon, lat))
    assert str(regions).startswith("2 regions below -4 sigma: 35 pixels")


def test_less_than_half_a_beam_is_no_region() -> None:
    # Half a beam of 15 arcsec on pixels of 5 arcsec is pi 9 / (8 ln 2) = 5.1 pixels.
    grid = grid_of((30, 30))
    for n, count in ((5, 0), (6, 1)):
        value = np.zeros(grid.shape)
        value[10, 10 : 10 + n] = -5.0
        assert find_negative(sky_of(value, 1.0, grid), grid)[0].count == count


def test_blanks_are_no_regions_and_do_not_hide_them(hollow) -> None:
    sky, grid, hollows = hollow
    value = sky.value.copy()
    value[:, 35:] = np.nan
    regions, _ = find_negative(replace(sky, value=value), grid)
    assert (regions.count, regions.n_pixels) == (1, int(hollows[:, :35].sum()))
    nothing, where = find_negative(replace(sky, value=np.full(grid.shape, np.nan)), grid)
    assert nothing.count == 0
    assert not where.any()
    assert str(nothing) == "no region below -4 sigma"


def test_masked_pixels_are_not_observed(hollow) -> None:
    sky, grid, hollows = hollow
    masked = mask_regions(sky, find_negative(sky, grid)[1])
    np.testing.assert_array_equal(np.isnan(masked.value), hollows)
    np.testing.assert_array_equal(np.isnan(masked.error), hollows)
    np.testing.assert_array_equal(masked.coverage == 0, hollows)
    np.testing.assert_array_equal((masked.flags & Flag.USER_MASK) != 0, hollows)
    np.testing.assert_array_equal(masked.value[~hollows], sky.value[~hollows])
    assert find_negative(masked, grid)[0].count == 0


def false_alarms(n_maps: int, side: int, seed: int) -> tuple[int, float]:
    """Regions found in maps of nothing but noise, and the number of beams searched."""
    grid, rng = grid_of((side, side)), np.random.default_rng(seed)
    found = sum(
        find_negative(sky_of(beam_noise(rng, grid.shape), 1.0, grid), grid)[0].count
        for _ in range(n_maps)
    )
    beam_pix = np.pi * (FWHM / PIXEL) ** 2 / (4 * np.log(2))
    return found, n_maps * side**2 / beam_pix


def test_noise_alone_shows_hardly_a_region() -> None:
    # At two in a million beams a tenth of a region is expected here: three would be one in 6000.
    found, beams = false_alarms(20, 150, 1)
    assert beams > 40_000
    assert found <= 2


@pytest.mark.slow
def test_false_alarms_are_two_in_a_million_beams() -> None:
    found, beams = false_alarms(300, 400, 2)
    assert 0.5e-6 < found / beams < 5e-6

"""Kernels that follow the pixels of a projection, against Gaussians in angle on the sphere."""

from __future__ import annotations

import math

import astropy.units as u
import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from astropy.wcs import WCS
from helpers import make_sky, round_beam

from kspipe.kernels.geometry import offset_positions, position_offsets
from kspipe.kernels.noise import NoiseTerm
from kspipe.matching import Grid, match_map
from kspipe.matching.bending import STEADY_SKEWNESS, STEADY_VARIANCE, bend_of, seen_on_pixels
from kspipe.matching.smoothing import choose_smoothing

TANGENT = SkyCoord(80.0, -69.0, unit="deg")
PIXEL, FWHM, TARGET = 120.0, 480.0, 3600.0


def field(projection: str, side: int, pixel_arcsec: float = PIXEL) -> WCS:
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = [f"RA---{projection}", f"DEC--{projection}"]
    wcs.wcs.crval = [TANGENT.ra.deg, TANGENT.dec.deg]
    wcs.wcs.crpix = [(side + 1) / 2] * 2
    wcs.wcs.cdelt = [-pixel_arcsec / 3600, pixel_arcsec / 3600]
    return wcs


def source_at(separation_deg: float) -> SkyCoord:
    return TANGENT.directional_offset_by(63.0 * u.deg, separation_deg * u.deg)


@pytest.mark.parametrize(
    ("projection", "separation"),
    [("TAN", 0.0), ("TAN", 2.0), ("TAN", 4.0), ("SIN", 4.0), ("STG", 2.0), ("ZEA", 4.0)],
)
def test_a_source_far_from_the_tangent_point(projection, separation) -> None:
    """To 3e-4 of its peak, and to 0.2 % of itself where it has fallen to a hundredth.

    The truth is a Gaussian in angle, as in a plane. What the sky's curvature changes that by, and
    the fourth moment of a kernel on the pixels, are the square of the beam's sigma in radians
    (5.5e-5) times a few.
    """
    side = 401
    wcs, source = field(projection, side), source_at(separation)
    y, x = np.indices((side, side), dtype=float)
    angle = wcs.pixel_to_world(x, y).separation(source).arcsec
    value = np.exp(-4 * math.log(2) * (angle / FWHM) ** 2)
    sky = make_sky(value, wcs=wcs, beam_arcsec2=round_beam(FWHM))
    centre = (TANGENT.ra.deg, TANGENT.dec.deg)
    grid = Grid(field("TAN", 31, 1200.0), (31, 31), 1200.0, centre)
    matched = match_map(sky, round_beam(TARGET), grid)
    there = SkyCoord(*grid.sky(), unit="deg").separation(source).arcsec
    truth = (FWHM / TARGET) ** 2 * np.exp(-4 * math.log(2) * (there / TARGET) ** 2)
    peak = truth.max()
    seen = (matched.coverage > 0.9999) & (there < 3 * TARGET)
    assert seen.sum() > 50
    assert np.abs(matched.value - truth)[seen].max() < 3e-4 * peak
    bright = seen & (truth > 0.01 * peak)
    np.testing.assert_allclose(matched.value[bright], truth[bright], rtol=2e-3)


def test_moments_at_the_tangent_point_are_those_of_the_kernel() -> None:
    sky = make_sky(np.zeros((101, 101)), wcs=field("TAN", 101), beam_arcsec2=round_beam(FWHM))
    moments = seen_on_pixels(sky, round_beam(TARGET), np.array([50.0]), np.array([50.0]))
    kernel = choose_smoothing(sky, round_beam(TARGET), 50.0, 50.0)
    sigma = math.sqrt(kernel.pix2[0, 0])
    # With x tan(r) / r = x + x r^2 / 3 the variance gains 2/3 <x^2 r^2> = 8/3 sigma^4 (radians).
    wider = 1 + 8 / 3 * math.radians(sigma * PIXEL / 3600) ** 2
    expected = sigma**2 * wider * np.array([[1.0], [0.0], [1.0]])
    np.testing.assert_allclose(moments.covariance, expected, rtol=0.01 * (wider - 1), atol=1e-9)
    np.testing.assert_allclose(moments.mean, 0.0, atol=1e-6)
    np.testing.assert_allclose(moments.skewness, 0.0, atol=1e-3)


def test_the_mean_moves_as_the_projection_curves() -> None:
    """For TAN by tan(theta) sigma^2 outwards: half the Laplacian of the coordinate on the sphere.

    Twice the mean of a Gaussian's displacement is the Laplace-Beltrami operator of the coordinate
    times sigma^2; for tan(theta) it is 2 sec^2(theta) tan(theta) + cot(theta) sec^2(theta) minus
    the angular part, 1 / (sin(theta) cos(theta)), along the radius.
    """
    side = 401
    sky = make_sky(np.zeros((side, side)), wcs=field("TAN", side), beam_arcsec2=round_beam(FWHM))
    theta = math.radians(4.0)
    x = np.array([(side - 1) / 2 + math.degrees(math.tan(theta)) * 3600 / PIXEL])
    moments = seen_on_pixels(sky, round_beam(TARGET), x, np.array([(side - 1) / 2]))
    sigma = math.radians(math.sqrt(TARGET**2 - FWHM**2) / 2.354820045 / 3600)
    sec2 = 1 / math.cos(theta) ** 2
    laplacian = (
        2 * sec2 * math.tan(theta)
        + sec2 / math.tan(theta)
        - 1 / (math.sin(theta) * math.cos(theta))
    )
    outwards = 0.5 * sigma**2 * laplacian / math.radians(PIXEL / 3600)
    np.testing.assert_allclose(moments.mean[:, 0], [outwards, 0.0], rtol=1e-3, atol=1e-6)


def test_narrow_fields_and_equal_beams_need_no_bending() -> None:
    sky = make_sky(np.zeros((101, 101)), wcs=field("TAN", 101, 4.0), beam_arcsec2=round_beam(12.0))
    everything = (slice(0, 101), slice(0, 101))
    for target in (round_beam(12.0), round_beam(15.0)):
        smoothing = choose_smoothing(sky, target, 50.0, 50.0)
        assert bend_of(sky, target, smoothing, everything).change == 0
    assert STEADY_VARIANCE < 1e-3
    assert STEADY_SKEWNESS < 1e-3


def test_noise_follows_the_pixels() -> None:
    """White noise falls with the pixels under a beam: sigma as 1 over their number's root."""
    side = 401
    wcs = field("TAN", side)
    term = NoiseTerm("n", np.ones((side, side)), np.zeros((2, 2)))
    sky = make_sky(np.zeros((side, side)), wcs=wcs, beam_arcsec2=round_beam(FWHM), noise=(term,))
    centre = (TANGENT.ra.deg, TANGENT.dec.deg)
    grid = Grid(field("TAN", 31, 1200.0), (31, 31), 1200.0, centre)
    matched = match_map(sky, round_beam(TARGET), grid)
    theta = SkyCoord(*grid.sky(), unit="deg").separation(TANGENT).rad
    seen = matched.coverage > 0.9999
    area = (PIXEL * np.cos(theta) ** 1.5) ** 2
    kernel_arcsec = math.sqrt(TARGET**2 - FWHM**2) / 2.354820045
    expected = np.sqrt(area / (4 * math.pi)) / kernel_arcsec
    np.testing.assert_allclose(matched.error[seen], expected[seen], rtol=1e-3)


def test_offsets_undo_offsets() -> None:
    rng = np.random.default_rng(2)
    east, north = rng.uniform(-3e4, 3e4, (2, 50))
    lon, lat = offset_positions(np.array(80.0), np.array(-69.0), east, north)
    back = position_offsets(lon, lat, 80.0, -69.0)
    np.testing.assert_allclose(back, [east, north], atol=1e-6)
    # The reference is astropy's SkyCoord.
    there = SkyCoord(80, -69, unit="deg").separation(SkyCoord(lon, lat, unit="deg")).arcsec
    np.testing.assert_allclose(there, np.hypot(east, north), rtol=1e-9)

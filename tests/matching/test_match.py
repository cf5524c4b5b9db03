"""One map to the target beam and the common grid, against closed forms and real-space sums."""

from __future__ import annotations

import math
from itertools import pairwise
from typing import Any

import astropy.units as u
import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from demo import load_demo
from helpers import (
    ARCSEC2_SR,
    C_KM_S,
    CENTRE,
    SIGMA_PER_FWHM,
    assert_maps_close,
    elliptical_beam,
    make_hdu,
    make_sky,
    make_wcs,
    open_source,
    read_map,
    round_beam,
)
from scipy import ndimage, special
from scipy.optimize import least_squares

from kspipe.core.errors import BeamError, GridError
from kspipe.maps.skymap import Flag, SkyMap
from kspipe.matching import Grid, match_map


def grid_of(source, fwhm_arcsec: float, pixels_per_beam: float = 3.0, **kwargs: Any) -> Grid:
    return Grid.around(CENTRE, fwhm_arcsec / pixels_per_beam, [source], **kwargs)


def plain_grid(shape: tuple[int, int], pixel_arcsec: float) -> Grid:
    """Grid of odd sides about CENTRE, made without a source."""
    return Grid(make_wcs(shape, pixel_arcsec), shape, pixel_arcsec, CENTRE)


# --- A point source ----------------------------------------------------------------------------


def offsets(wcs, shape, position) -> tuple[np.ndarray, np.ndarray]:
    """East and north of a position [arcsec]."""
    y, x = np.indices(shape, dtype=float)
    sky = wcs.pixel_to_world(x, y).icrs
    east, north = SkyCoord(*position, unit="deg").spherical_offsets_to(sky)
    return east.arcsec, north.arcsec


def gaussian(east, north, covariance) -> np.ndarray:
    step = np.stack([east, north], axis=-1)
    return np.exp(-0.5 * np.einsum("...i,ij,...j", step, np.linalg.inv(covariance), step))


def pixel_mean(wcs, shape, position, covariance) -> np.ndarray:
    """Mean over each pixel of a Gaussian, by 5 x 5 Gauss-Legendre points."""
    nodes, weights = np.polynomial.legendre.leggauss(5)
    total = np.zeros(shape)
    for i, j in np.ndindex(5, 5):
        shifted = wcs.deepcopy()
        shifted.wcs.crpix = wcs.wcs.crpix - np.array([nodes[i], nodes[j]]) / 2
        east, north = offsets(shifted, shape, position)
        total += weights[i] * weights[j] / 4 * gaussian(east, north, covariance)
    return total


def fitted_fwhm(sky: SkyMap, position) -> tuple[float, float]:
    """Major and minor axis of a two-dimensional Gaussian fitted on the sky [arcsec]."""
    east, north = offsets(sky.wcs, sky.value.shape, position)
    peak = np.nanmax(sky.value)
    near = np.isfinite(sky.value) & (sky.value > 1e-3 * peak)
    image, grid_step = sky.value[near] / peak, sky.wcs.wcs.cdelt[1] * 3600

    def misfit(parameters) -> np.ndarray:
        height, e0, n0, a, b, c = parameters
        x, y = east[near] - e0, north[near] - n0
        return height * np.exp(-0.5 * (a * x**2 + 2 * b * x * y + c * y**2)) - image

    guess = np.log(1e3) * 2 * math.pi / (near.sum() * grid_step**2)
    best = least_squares(misfit, (1.0, 0.0, 0.0, guess, 0.0, guess), xtol=1e-12).x
    covariance = np.linalg.inv([[best[3], best[4]], [best[4], best[5]]])
    minor, major = np.sqrt(np.linalg.eigvalsh(covariance)) / SIGMA_PER_FWHM
    return float(major), float(minor)


# 13 x 10 arcsec beams; a fraction of a pixel off the pixel centres.
POSITION = (CENTRE[0] + 0.0007, CENTRE[1] - 0.0004)
BEAM = (13.0, 10.0, 30.0)


@pytest.mark.parametrize(
    ("pixel", "target", "geometry"),
    [
        (2.5, 20.0, {}),
        (2.5, 20.0, {"rotation_deg": 33.0}),
        (2.5, 20.0, {"flip": True, "rotation_deg": -70.0}),
        (4.5, 14.0, {}),  # 3.1 pixels per beam
        (4.5, 13.1, {"rotation_deg": 33.0}),  # hardly any kernel along the major axis
        (2.5, 60.0, {"projection": "SIN"}),
        (5.2, 13.2, {"rotation_deg": 33.0}),  # 2.54 pixels per beam: the fewest accepted
    ],
    ids=["plain", "turned", "mirrored", "coarse", "narrow kernel", "wide kernel", "fewest pixels"],
)
@pytest.mark.parametrize("tracer", ["24um", "HI"])
def test_point_source_keeps_its_flux_and_gets_the_beam(pixel, target, geometry, tracer) -> None:
    # 1 Jy in, 1.000 +- 0.002 Jy out, FWHM within 1 %.
    side = 2 * round((60 + 1.7 * target) / pixel) + 1
    wcs = make_wcs((side, side), pixel, **geometry)
    image = gaussian(*offsets(wcs, (side, side), POSITION), elliptical_beam(*BEAM))
    unit = "Jy/beam" if tracer == "24um" else "Jy/beam km/s"
    hdu = make_hdu(image, wcs=wcs, unit=unit, beam_arcsec=BEAM)
    # Far from the source a Gaussian underflows to exact zero.
    read = {"tracer": tracer, "velocity_kms": 640.0, "zeros": "flux"}
    grid = grid_of(open_source(hdu, **read), target)
    matched = match_map(read_map(hdu, **read), round_beam(target), grid)
    total = np.nansum(matched.value * matched_areas(matched)) * ARCSEC2_SR
    if tracer == "24um":
        total_jy = total * 1e6
    else:
        # Rayleigh-Jeans by hand: 2 k nu^2 / c^2 in Jy/sr per K, at the observed frequency.
        nu = 1.420405751768e9 / (1 + 640.0 / C_KM_S)
        total_jy = total * 2 * 1.380649e-16 * (nu / 2.99792458e10) ** 2 / 1e-23
    assert total_jy == pytest.approx(1.0, abs=0.002)
    assert fitted_fwhm(matched, POSITION) == pytest.approx((target, target), rel=0.01)


def matched_areas(sky: SkyMap) -> np.ndarray:
    """Solid angle of gnomonic pixels by hand: cos^3 of the distance from the tangent point."""
    y, x = np.indices(sky.value.shape)
    here = SkyCoord(*sky.wcs.all_pix2world(x, y, 0), unit="deg")
    theta = here.separation(SkyCoord(*sky.wcs.wcs.crval, unit="deg")).rad
    return (sky.wcs.wcs.cdelt[1] * 3600) ** 2 * np.cos(theta) ** 3


@pytest.mark.parametrize(("pixel", "fwhm"), [(2.0, 6.0), (4.0, 9.0)])
def test_detector_pixels_are_part_of_the_beam(pixel, fwhm) -> None:
    """Means over pixels widen the beam: the result is the target all the same."""
    beam, target = round_beam(fwhm), 12.0
    side = 2 * round(60 / pixel) + 1
    wcs = make_wcs((side, side), pixel, rotation_deg=25.0)
    image = pixel_mean(wcs, (side, side), POSITION, beam)
    sky = make_sky(image, wcs=wcs, beam_arcsec2=beam, averages_pixels=True)
    grid = plain_grid((25, 25), 3.0)
    matched = match_map(sky, round_beam(target), grid)
    assert not matched.averages_pixels
    peak = (fwhm / target) ** 2
    truth = peak * gaussian(*offsets(grid.wcs, grid.shape, POSITION), round_beam(target))
    # A box differs from its Gaussian by 1 / (480 s^4) at the peak of a Gaussian of s pixels; the
    # interpolation adds less than 2e-3 (kernels/test_fourier.py measures it).
    s = target * SIGMA_PER_FWHM / pixel
    assert_maps_close(matched.value, truth, rtol=0, atol=peak * (1 / 480 / s**4 + 2e-3))
    assert fitted_fwhm(matched, POSITION) == pytest.approx((target, target), rel=0.01)
    # Taken for samples at points the result is too wide by the variance 1/12 of the pixel.
    wrong = make_sky(image, wcs=wcs, beam_arcsec2=beam)
    excess = fitted_fwhm(match_map(wrong, round_beam(target), grid), POSITION)[0] / target - 1
    assert excess == pytest.approx(1 / 24 / s**2, rel=0.15)


# --- Blanks and edges --------------------------------------------------------------------------


def holed(shape=(81, 81)) -> np.ndarray:
    """Seven, with a blank border and a blank disc."""
    value = np.full(shape, 7.0)
    value[:6], value[-4:], value[:, :5], value[:, -8:] = (np.nan,) * 4
    y, x = np.indices(shape)
    value[np.hypot(x - 30, y - 45) < 6] = np.nan
    return value


@pytest.mark.parametrize(("geometry", "minimum"), [({}, 0.5), ({"rotation_deg": 40.0}, 0.9)])
def test_flat_map_with_blanks_stays_flat(geometry, minimum) -> None:
    # Constant to 1e-4 and nothing outside the footprint.
    value = holed()
    wcs = make_wcs(value.shape, 3.0, **geometry)
    sky = make_sky(value, wcs=wcs, beam_arcsec2=round_beam(8.0))
    grid = plain_grid((71, 71), 5.0)
    matched = match_map(sky, round_beam(15.0), grid, minimum_coverage=minimum)
    seen = np.isfinite(matched.value)
    np.testing.assert_allclose(matched.value[seen], 7.0, rtol=1e-4)
    # Coverage by a real-space sum over the observed pixels, Gaussian of 15^2 - 8^2.
    sigma = math.sqrt(15.0**2 - 8.0**2) * SIGMA_PER_FWHM
    y, x = np.indices(value.shape, dtype=float)
    px, py = grid.wcs.world_to_pixel(wcs.pixel_to_world(x, y))
    gy, gx = np.indices(grid.shape)
    expected = np.zeros(grid.shape)
    for i in range(grid.shape[0]):
        ky = np.exp(-0.5 * ((py[None] - gy[i][:, None, None]) * 5 / sigma) ** 2)
        kx = np.exp(-0.5 * ((px[None] - gx[i][:, None, None]) * 5 / sigma) ** 2)
        expected[i] = (kx * ky * np.isfinite(value)).sum((1, 2)) * 9 / (2 * math.pi * sigma**2)
    np.testing.assert_allclose(matched.coverage, expected, atol=1e-3)
    clear = np.abs(expected - minimum) > 1e-3
    np.testing.assert_array_equal(seen[clear], (expected >= minimum)[clear])
    assert seen.any()
    assert not seen.all()
    # Half of the beam at a straight edge: beyond the footprint there is nothing.
    inside = ndimage.binary_dilation(np.isfinite(value))
    px, py = wcs.world_to_pixel(SkyCoord(*grid.sky(), unit="deg"))
    column, row = (np.clip(np.rint(p).astype(int), 0, 80) for p in (px, py))
    assert not (seen & ~inside[row, column]).any()
    partly = seen & (expected < 0.949)
    assert (matched.flags[partly] & Flag.LOW_COVERAGE).all()
    assert not matched.flags[expected > 0.951].any()


@pytest.mark.parametrize("target", [8.0, 8.05, 8.5, 10.0])
@pytest.mark.parametrize("geometry", [{}, {"rotation_deg": 40.0}], ids=["aligned", "turned"])
def test_flat_map_stays_flat_however_narrow_the_kernel(geometry, target) -> None:
    """Also next to blanks, and also where the beam needs no smoothing at all."""
    value = holed()
    wcs = make_wcs(value.shape, 3.0, **geometry)
    sky = make_sky(value, wcs=wcs, beam_arcsec2=round_beam(8.0))
    matched = match_map(sky, round_beam(target), plain_grid((71, 71), 2.7))
    seen = np.isfinite(matched.value)
    assert 0.8 < seen.mean() < 1
    np.testing.assert_allclose(matched.value[seen], 7.0, rtol=1e-4)
    assert matched.coverage.max() <= 1.0


def test_coverage_at_a_straight_edge() -> None:
    # Closed form: a Gaussian of sigma s at a distance d inside a half plane holds
    # (1 + erf(d / (s sqrt 2))) / 2 of its weight.
    value = np.ones((101, 101))
    value[:, :50] = np.nan
    sky = make_sky(value, wcs=make_wcs((101, 101), 2.0), beam_arcsec2=round_beam(9.0))
    grid = plain_grid((41, 41), 2.0)
    matched = match_map(sky, round_beam(15.0), grid, minimum_coverage=1e-6)
    sigma = 12.0 * SIGMA_PER_FWHM
    # Observed from column 50 on, which is column 20 of the grid; its edge lies half a pixel out.
    distance = (np.arange(41) - 20 + 0.5) * 2.0
    expected = 0.5 * (1 + special.erf(distance / sigma / math.sqrt(2)))
    np.testing.assert_allclose(matched.coverage[20], expected, atol=2e-3)


def test_blanks_do_not_leak_from_a_bright_neighbour() -> None:
    """What is blank has no value: whatever stands behind a NaN cannot matter."""
    rng = np.random.default_rng(4)
    value = rng.normal(size=(61, 61))
    value[20:30, 20:40] = np.nan
    sky = make_sky(value, wcs=make_wcs((61, 61), 3.0), beam_arcsec2=round_beam(8.0))
    grid = plain_grid((41, 41), 4.0)
    matched = match_map(sky, round_beam(13.0), grid)
    # Weighted mean over the observed pixels, written out with the closed-form kernel.
    sigma = math.sqrt(13.0**2 - 8.0**2) * SIGMA_PER_FWHM / 3.0
    y, x = np.indices(value.shape)
    for gy, gx in ((20, 20), (12, 18), (17, 22), (25, 9)):
        px, py = (gx - 20) * 4 / 3 + 30, (gy - 20) * 4 / 3 + 30
        weight = np.exp(-0.5 * ((x - px) ** 2 + (y - py) ** 2) / sigma**2) * np.isfinite(value)
        expected = np.nansum(weight * value) / weight.sum()
        if math.isnan(matched.value[gy, gx]):
            assert weight.sum() / (2 * math.pi * sigma**2) < 0.51
        else:
            assert matched.value[gy, gx] == pytest.approx(expected, abs=3e-3)


# --- Beams -------------------------------------------------------------------------------------


def test_equal_beams_on_equal_pixels_change_nothing() -> None:
    value = np.random.default_rng(2).normal(size=(41, 41))
    value[5:9, 5:9] = np.nan
    sky = make_sky(value, wcs=make_wcs((41, 41), 3.0), beam_arcsec2=round_beam(9.0))
    matched = match_map(sky, round_beam(9.0), plain_grid((41, 41), 3.0))
    np.testing.assert_allclose(matched.value[12:, 12:], value[12:, 12:], atol=1e-9)


@pytest.mark.parametrize("target", [8.99, 12.0, 12.99])
def test_a_map_is_never_sharpened(target) -> None:
    sky = make_sky(
        np.ones((41, 41)), wcs=make_wcs((41, 41), 3.0), beam_arcsec2=elliptical_beam(13, 9, 50)
    )
    with pytest.raises(BeamError, match=r"maps\.probe.*wider than the target"):
        match_map(sky, round_beam(target), plain_grid((21, 21), 4.0))


def test_too_few_pixels_per_beam_are_not_interpolated() -> None:
    """15 arcsec on pixels of 9: averaged over areas, or refused where a spline is asked for."""
    side = 61
    wcs = make_wcs((side, side), 9.0, rotation_deg=20.0)
    flat = make_sky(np.full((side, side), 3.0), wcs=wcs, beam_arcsec2=round_beam(12.0))
    grid = plain_grid((61, 61), 5.0)
    with pytest.raises(GridError, match=r"maps\.probe\.regrid.*1\.67 pixels"):
        match_map(flat, round_beam(15.0), grid, regrid="spline")
    matched = match_map(flat, round_beam(15.0), grid)
    np.testing.assert_allclose(matched.value, 3.0, rtol=1e-4)
    assert any("area" in step for step in matched.history)
    # The flux of a point source survives, whatever becomes of its shape.
    image = pixel_mean(wcs, (side, side), POSITION, round_beam(12.0))
    source = make_sky(image, wcs=wcs, beam_arcsec2=round_beam(12.0), averages_pixels=True)
    matched = match_map(source, round_beam(17.9), grid)
    total = np.nansum(matched.value * matched_areas(matched))
    expected = math.pi / (4 * math.log(2)) * 12.0**2
    assert total == pytest.approx(expected, rel=0.002)


# --- One sky, many grids -----------------------------------------------------------------------

GAL = SkyCoord(*CENTRE, unit="deg").galactic
FK4 = SkyCoord(*CENTRE, unit="deg").transform_to("fk4")
GRIDS: dict[str, dict[str, Any]] = {
    "plain": {},
    "turned 90": {"rotation_deg": 90.0},
    "turned": {"rotation_deg": 23.0},
    "mirrored": {"flip": True},
    "shifted": {"crpix": (93.37, 104.81)},
    "galactic": {"centre": (GAL.l.deg, GAL.b.deg), "axes": ("GLON", "GLAT")},
    "SIN": {"projection": "SIN"},
    "CAR": {"projection": "CAR"},
    "B1950": {"centre": (FK4.ra.deg, FK4.dec.deg), "equinox": 1950.0},
}
BEAM_PA = 35.0


def demo_sky(kind: str) -> SkyMap:
    """The painter's CO sky seen with a beam of 9 x 7 arcsec on one of the grids.

    The beam's angle is that of the sky, so that it has another value in the galactic frame.
    """
    geometry = dict(GRIDS[kind])
    equinox = geometry.pop("equinox", None)
    wcs = make_wcs((200, 200), 2.5, **geometry)
    if equinox is not None:
        wcs.wcs.radesys, wcs.wcs.equinox = "FK4", equinox
        wcs.wcs.set()
    y, x = np.indices((200, 200), dtype=float)
    sky = wcs.pixel_to_world(x, y).icrs
    beam = elliptical_beam(9.0, 7.0, BEAM_PA)
    value = load_demo().true_intensity("CO(2-1)", sky.ra.deg, sky.dec.deg, beam)
    return make_sky(value, wcs=wcs, beam_arcsec2=beam, unit="K km/s")


@pytest.fixture(scope="module")
def demo_grid() -> Grid:
    return plain_grid((85, 85), 5.0)


@pytest.fixture(scope="module")
def demo_truth(demo_grid) -> np.ndarray:
    return load_demo().true_intensity("CO(2-1)", *demo_grid.sky(), round_beam(15.0))


@pytest.mark.parametrize("kind", GRIDS)
def test_the_same_sky_on_other_grids(kind, demo_grid, demo_truth) -> None:
    # Truth: the painter's analytic Gaussians under 15 arcsec.
    matched = match_map(demo_sky(kind), round_beam(15.0), demo_grid)
    inside = matched.coverage > 0.999
    assert inside.mean() > 0.7
    peak = demo_truth.max()
    np.testing.assert_allclose(matched.value[inside], demo_truth[inside], rtol=0, atol=2e-4 * peak)
    flux = np.sum((matched.value * demo_grid.areas_arcsec2())[inside])
    expected = np.sum((demo_truth * demo_grid.areas_arcsec2())[inside])
    assert flux == pytest.approx(expected, rel=1e-3)
    for got, want in zip(
        profile(matched.value, demo_grid), profile(demo_truth, demo_grid), strict=True
    ):
        assert got == pytest.approx(want, rel=0.01)


def profile(value: np.ndarray, grid: Grid) -> list[float]:
    """Mean in rings of the tilted disc, radius written out by hand."""
    demo = load_demo()
    east, north = offsets(grid.wcs, grid.shape, CENTRE)
    pa = math.radians(demo.POSITION_ANGLE_DEG)
    along = east * math.sin(pa) + north * math.cos(pa)
    across = (east * math.cos(pa) - north * math.sin(pa)) / demo.COS_I
    radius = np.hypot(along, across)
    rings = pairwise(range(0, 151, 15))
    return [float(np.mean(value[(radius >= low) & (radius < high)])) for low, high in rings]


# --- Fields of degrees -------------------------------------------------------------------------


@pytest.mark.parametrize("projection", ["TAN", "SIN", "ARC"])
def test_far_from_the_tangent_point_a_source_is_still_itself(projection) -> None:
    """At 4.5 deg gnomonic pixels are smaller by 0.6 % along the radius, 0.3 % across."""
    side, pixel, fwhm, target = 601, 72.0, 1200.0, 1800.0
    wcs = make_wcs((side, side), pixel, projection=projection)
    middle = SkyCoord(*CENTRE, unit="deg")
    sources = [
        middle.directional_offset_by(angle * u.deg, distance * u.deg)
        for angle, distance in ((0, 0.0), (20, 2.5), (110, 3.5), (200, 4.0), (290, 4.5))
    ]
    y, x = np.indices((side, side), dtype=float)
    here = wcs.pixel_to_world(x, y)
    image = sum(on_sphere(here, source, fwhm) for source in sources)
    sky = make_sky(image, wcs=wcs, beam_arcsec2=round_beam(fwhm))
    grid = plain_grid((71, 71), 450.0)
    matched = match_map(sky, round_beam(target), grid)
    at = SkyCoord(*grid.sky(), unit="deg")
    peak = (fwhm / target) ** 2
    truth = peak * sum(on_sphere(at, source, target) for source in sources)
    inside = matched.coverage > 0.999
    assert inside.mean() > 0.9
    np.testing.assert_allclose(matched.value[inside], truth[inside], rtol=0, atol=0.003 * peak)
    for source in sources:
        near = at.separation(source).arcsec < 1.5 * target
        ratio = np.sum(matched.value[near]) / np.sum(truth[near])
        assert ratio == pytest.approx(1.0, abs=0.002)


def on_sphere(at: SkyCoord, source: SkyCoord, fwhm: float) -> np.ndarray:
    """Gaussian of unit peak in true angular distance."""
    return np.exp(-4 * math.log(2) * (at.separation(source).arcsec / fwhm) ** 2)


# --- Large maps, threads -----------------------------------------------------------------------


def test_a_map_of_many_tiles_equals_an_independent_smoothing() -> None:
    """1500 pixels a side, worked in pieces; against scipy's truncated kernel in real space."""
    # A field of 5 arcmin, over which no projection bends: one kernel serves.
    side, pixel = 1503, 0.2
    rng = np.random.default_rng(7)
    value = ndimage.gaussian_filter(rng.normal(size=(side, side)), 2.0) * 7
    value[1000:1040, 200:1300] = np.nan
    sky = make_sky(value, wcs=make_wcs((side, side), pixel), beam_arcsec2=round_beam(0.9))
    sigma = math.sqrt(1.8**2 - 0.9**2) * SIGMA_PER_FWHM / pixel
    observed = np.isfinite(value).astype(float)
    filtered = (
        ndimage.gaussian_filter(np.nan_to_num(value), sigma, mode="constant", truncate=7.0),
        ndimage.gaussian_filter(observed, sigma, mode="constant", truncate=7.0),
    )
    # Every third pixel of the map is a pixel of the grid.
    grid = plain_grid((501, 501), 3 * pixel)
    matched = match_map(sky, round_beam(1.8), grid)
    expected = (filtered[0] / filtered[1])[1::3, 1::3]
    seen = np.isfinite(matched.value)
    assert seen.mean() > 0.96
    # scipy samples a kernel of sigma = 3.3 pixels: exact to 1e-6 there.
    np.testing.assert_allclose(matched.value[seen], expected[seen], atol=3e-5)
    np.testing.assert_allclose(matched.coverage, filtered[1][1::3, 1::3], atol=3e-5)


def test_threads_change_no_bit() -> None:
    sky = demo_sky("turned")
    grid = plain_grid((85, 85), 5.0)
    one, two = (match_map(sky, round_beam(15.0), grid, workers=n) for n in (1, 2))
    assert one.value.tobytes() == two.value.tobytes()
    assert one.coverage.tobytes() == two.coverage.tobytes()


def test_matching_leaves_its_input_alone() -> None:
    sky = demo_sky("plain")
    before = sky.value.copy()
    match_map(sky, round_beam(15.0), plain_grid((85, 85), 5.0))
    np.testing.assert_array_equal(sky.value, before)


@pytest.mark.parametrize("kind", ["plain", "turned", "galactic"])
def test_flux_before_and_after_is_told(kind, demo_grid, demo_truth) -> None:
    sky = demo_sky(kind)
    matched = match_map(sky, round_beam(15.0), demo_grid)
    # By hand: pixels of the map whose centre lies on the grid.
    y, x = np.indices((200, 200), dtype=float)
    px, py = demo_grid.wcs.world_to_pixel(sky.wcs.pixel_to_world(x, y))
    inside = (np.abs(px - 42) <= 42.5) & (np.abs(py - 42) <= 42.5)
    expected = np.sum(sky.value[inside]) * 2.5**2 * ARCSEC2_SR
    assert matched.facts["flux_before"] == pytest.approx(expected, rel=2e-3)
    after = np.nansum(matched.value * demo_grid.areas_arcsec2()) * ARCSEC2_SR
    assert matched.facts["flux_after"] == pytest.approx(after, rel=1e-6)
    assert any("flux on the grid's sky" in step for step in matched.history)

"""Beams, tilted discs and the sampling lattice.

Codes such as C115 number the worked check values of the project's reference sheet.
"""

import itertools
import math

import astropy.units as u
import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from hypothesis import example, given, settings
from hypothesis import strategies as st
from radio_beam import Beam
from scipy.spatial import cKDTree

from kspipe.core.constants import ARCSEC_RAD
from kspipe.kernels.geometry import (
    beam_area,
    beam_axes,
    beam_covariance,
    disc_azimuth,
    disc_radius,
    hexagonal_lattice,
    pixel_covariance,
    position_offsets,
    subtract_covariance,
    transform_covariance,
)

fixed = settings(derandomize=True, deadline=None, max_examples=60)
fwhm = st.floats(0.05, 500.0)
angle = st.floats(-360.0, 360.0)


def reference_beam(major: float, minor: float, pa: float) -> Beam:
    return Beam(major * u.arcsec, minor * u.arcsec, pa * u.deg)


def covariance_of(beam: Beam) -> np.ndarray:
    return beam_covariance(
        beam.major.to_value("arcsec"), beam.minor.to_value("arcsec"), beam.pa.to_value("deg")
    )


@fixed
@given(major=fwhm, ratio=st.floats(0.05, 0.999), pa=angle)
@example(major=10.0, ratio=0.5, pa=-1e-14)
def test_axes_of_a_beam_survive_the_covariance(major: float, ratio: float, pa: float) -> None:
    got_major, got_minor, got_pa = beam_axes(beam_covariance(major, ratio * major, pa))
    # An eigenvalue is exact to rounding of the larger one, 1/ratio^2 = 400 times more of the
    # smaller; the angle to rounding over 1 - ratio^2 = 2e-3.
    assert got_major == pytest.approx(major, rel=1e-12)
    assert got_minor == pytest.approx(ratio * major, rel=1e-11)
    assert 0.0 <= got_pa < 180.0
    assert math.sin(math.radians(got_pa - pa)) == pytest.approx(0.0, abs=1e-11)


def test_a_position_angle_runs_from_north_through_east() -> None:
    # Definition: pa 0 is long in north, 90 in east, 45 along east = north.
    assert np.diff(np.diag(beam_covariance(10, 5, 0)))[0] > 0
    assert np.diff(np.diag(beam_covariance(10, 5, 90)))[0] < 0
    assert beam_covariance(10, 5, 45)[0, 1] > 0
    assert beam_covariance(10, 5, 135)[0, 1] < 0


@fixed
@given(width=fwhm, pa=angle)
def test_a_round_beam_has_no_angle(width: float, pa: float) -> None:
    assert beam_axes(beam_covariance(width, width, pa)) == pytest.approx((width, width, 0.0))


def test_the_area_of_a_gaussian_beam() -> None:
    # pi/(4 ln 2) bmaj bmin = 1.13309 bmaj bmin (common practice); C115 for 10" x 8".
    assert beam_area(beam_covariance(10, 8, 33)) == pytest.approx(90.647, rel=5e-5)
    assert beam_area(beam_covariance(1, 1, 0)) == pytest.approx(1.13309, abs=0.5e-5)
    # C908: a 10" beam in pixels of 2".
    assert beam_area(beam_covariance(10, 10, 0)) / 4 == pytest.approx(28.327, rel=5e-5)


@fixed
@given(major=fwhm, ratio=st.floats(0.05, 1.0), pa=angle)
def test_the_area_against_radio_beam(major: float, ratio: float, pa: float) -> None:
    expected = reference_beam(major, ratio * major, pa).sr.to_value("arcsec2")
    assert beam_area(beam_covariance(major, ratio * major, pa)) == pytest.approx(expected, rel=1e-9)


BEAMS = [(10.0, 6.0, 20.0), (8.0, 7.5, 115.0), (3.0, 1.0, 170.0), (12.0, 12.0, 0.0)]


@pytest.mark.parametrize(("first", "second"), list(itertools.product(BEAMS, BEAMS)))
def test_convolved_beams_add_as_radio_beam_says(first: tuple, second: tuple) -> None:
    together = reference_beam(*first).convolve(reference_beam(*second))
    added = beam_covariance(*first) + beam_covariance(*second)
    # radio-beam works on squared axes: half the digits are safe where they are nearly equal.
    np.testing.assert_allclose(covariance_of(together), added, atol=1e-7 * np.trace(added))


@pytest.mark.parametrize("source", BEAMS)
@pytest.mark.parametrize("target", [(20.0, 15.0, 60.0), (15.0, 15.0, 0.0), (25.0, 14.0, 100.0)])
def test_kernels_between_beams_as_radio_beam_says(target: tuple, source: tuple) -> None:
    kernel = subtract_covariance(beam_covariance(*target), beam_covariance(*source))
    expected = covariance_of(reference_beam(*target).deconvolve(reference_beam(*source)))
    np.testing.assert_allclose(kernel, expected, atol=1e-7 * np.trace(expected))


@fixed
@given(
    source=st.tuples(fwhm, st.floats(0.1, 1.0), angle),
    kernel=st.tuples(fwhm, st.floats(0.1, 1.0), angle),
)
def test_a_kernel_is_found_again(source: tuple, kernel: tuple) -> None:
    a = beam_covariance(source[0], source[0] * source[1], source[2])
    k = beam_covariance(kernel[0], kernel[0] * kernel[1], kernel[2])
    found = subtract_covariance(a + k, a)
    assert found is not None
    np.testing.assert_allclose(found, k, atol=1e-12 * np.trace(a + k))


@fixed
@given(major=fwhm, ratio=st.floats(0.05, 1.0), pa=angle)
def test_equal_beams_leave_no_kernel(major: float, ratio: float, pa: float) -> None:
    beam = beam_covariance(major, ratio * major, pa)
    assert np.array_equal(subtract_covariance(beam, beam), np.zeros((2, 2)))
    # A beam that was turned by 180 degrees, or written with six digits, is still the same beam.
    for other in (
        beam_covariance(major, ratio * major, pa + 180.0),
        beam_covariance(major * (1 + 4e-7), ratio * major, pa),
    ):
        kernel = subtract_covariance(beam, other)
        assert kernel is not None
        assert np.abs(kernel).max() <= 1e-13 * np.trace(beam)


@pytest.mark.parametrize(
    ("target", "source"),
    [
        ((10.0, 10.0, 0.0), (10.001, 10.0, 0.0)),  # 0.01 % wider on one axis only
        ((10.0, 10.0, 0.0), (12.0, 4.0, 30.0)),  # narrower in area, wider along its major axis
        ((10.0, 5.0, 0.0), (9.0, 4.5, 90.0)),  # both axes narrower, but turned
        ((10.0, 10.0, 0.0), (20.0, 20.0, 0.0)),
    ],
)
def test_a_source_wider_along_any_axis_has_no_kernel(target: tuple, source: tuple) -> None:
    assert subtract_covariance(beam_covariance(*target), beam_covariance(*source)) is None


def test_a_pixel_averages_over_a_box() -> None:
    # A box of unit width has variance 1/12 (definition): here by adding up 1000 sub-pixels.
    step = (np.arange(1000) + 0.5) / 1000 - 0.5
    jacobian = np.array([[-1.2, 0.3], [0.4, 1.5]])
    x, y = np.meshgrid(step, step)
    east, north = np.einsum("ij,jk->ik", jacobian, np.stack([x.ravel(), y.ravel()]))
    # The sum over sub-pixels lacks their own variance, 1e-6 of the whole.
    np.testing.assert_allclose(
        pixel_covariance(jacobian), np.cov(east, north, bias=True), rtol=3e-6
    )


@fixed
@given(x=st.floats(-3, 3), y=st.floats(-3, 3), pa=angle)
def test_a_covariance_means_the_same_on_pixels(x: float, y: float, pa: float) -> None:
    jacobian = np.array([[-2.0, 0.1], [0.3, 1.7]])
    beam = beam_covariance(7.0, 4.0, pa)
    pixels = transform_covariance(beam, jacobian)
    step = np.array([x, y])
    sky = jacobian @ step
    # The exponent of the Gaussian does not depend on the axes.
    assert step @ np.linalg.solve(pixels, step) == pytest.approx(
        sky @ np.linalg.solve(beam, sky), rel=1e-10, abs=1e-12
    )
    assert beam_area(pixels) * abs(np.linalg.det(jacobian)) == pytest.approx(beam_area(beam))


# --- the plane of the galaxy ---------------------------------------------------------------------


@pytest.mark.parametrize(
    ("pa", "inclination", "radius"),
    [
        (30.0, 60.0, 51.062),  # C601: R^2 = x_maj^2 + (x_min / cos i)^2
        (36.869898, 0.0, 50.0),  # C602: on the major axis, at any inclination
        (36.869898, 60.0, 50.0),
        (36.869898, 80.0, 50.0),
        (36.869898 + 180.0, 60.0, 50.0),  # the receding side does not matter
        (36.869898 + 90.0, 60.0, 100.0),  # on the minor axis: 50 / cos 60
    ],
)
def test_radius_in_the_disc(pa: float, inclination: float, radius: float) -> None:
    got = disc_radius(np.array([30.0]), np.array([40.0]), inclination_deg=inclination, pa_deg=pa)
    assert got[0] == pytest.approx(radius, rel=5e-5)


@fixed
@given(
    radius=st.floats(1.0, 1e4),
    azimuth=angle,
    inclination=st.floats(0.0, 85.0),
    pa=st.floats(-180.0, 360.0),
)
def test_a_circle_in_the_disc_is_found_again(
    radius: float, azimuth: float, inclination: float, pa: float
) -> None:
    # A point of the disc seen on the sky: the minor axis is foreshortened by cos i, then turned.
    along = radius * math.cos(math.radians(azimuth))
    across = radius * math.sin(math.radians(azimuth)) * math.cos(math.radians(inclination))
    east = along * math.sin(math.radians(pa)) - across * math.cos(math.radians(pa))
    north = along * math.cos(math.radians(pa)) + across * math.sin(math.radians(pa))
    got = disc_radius(np.array(east), np.array(north), inclination_deg=inclination, pa_deg=pa)
    # Rounding on the minor axis is stretched by 1 / cos 85 = 11.
    assert float(got) == pytest.approx(radius, rel=1e-11)


def test_arcsec_at_a_distance() -> None:
    # C604: 48.481 pc for 1" at 10 Mpc.
    radius = disc_radius(np.array([1.0]), np.array([0.0]), inclination_deg=0, pa_deg=0)
    assert radius[0] * ARCSEC_RAD * 10e6 == pytest.approx(48.481, rel=5e-5)


@pytest.mark.parametrize("offset_deg", [1e-4, 0.01, 1.0, 8.0])
@pytest.mark.parametrize(
    "centre", [(0.01, 0.0), (202.4696, 47.1952), (10.6847, 41.2690), (13.1867, -72.8286), (180, 89)]
)
def test_offsets_keep_distance_and_angle(centre: tuple[float, float], offset_deg: float) -> None:
    middle = SkyCoord(*centre, unit="deg")
    angles = np.arange(5.0, 365.0, 30.0)
    points = middle.directional_offset_by(angles * u.deg, offset_deg * u.deg)
    east, north = position_offsets(points.ra.deg, points.dec.deg, *centre)
    # Coordinates in degrees round at 360 x 1e-16: some 1e-9 of the smallest offset.
    rel = 1e-11 + 1e-12 / offset_deg
    distance = middle.separation(points).to_value("arcsec")
    np.testing.assert_allclose(np.hypot(east, north), distance, rtol=rel)
    np.testing.assert_allclose(np.hypot(east, north), offset_deg * 3600, rtol=rel)
    turned = np.degrees(np.arctan2(east, north)) - middle.position_angle(points).to_value("deg")
    np.testing.assert_allclose(np.sin(np.radians(turned)), 0.0, atol=rel)
    assert np.all(np.cos(np.radians(turned)) > 0)


def test_an_offset_in_right_ascension_shrinks_with_declination() -> None:
    # At declination 60 a step in right ascension is half as long on the sky (cos 60).
    east, north = position_offsets(np.array([10.001]), np.array([60.0]), 10.0, 60.0)
    assert east[0] == pytest.approx(1.8, rel=1e-6)
    assert north[0] == pytest.approx(0.0, abs=1e-4)


def test_the_centre_and_blanks() -> None:
    east, north = position_offsets(np.array([10.0, np.nan]), np.array([20.0, 20.0]), 10.0, 20.0)
    assert east[0] == 0.0
    assert north[0] == 0.0
    assert np.isnan(east[1])
    assert np.isnan(north[1])


# --- the sampling lattice ------------------------------------------------------------------------


@settings(fixed, max_examples=200)
@given(spacing=st.floats(1.0, 25.0), cx=st.floats(-5.0, 90.0), cy=st.floats(-5.0, 90.0))
@example(spacing=2.1, cx=0.0, cy=0.0)
def test_no_two_samples_are_nearer_than_the_spacing(spacing: float, cx: float, cy: float) -> None:
    y, x = np.nonzero(hexagonal_lattice((80, 90), (cx, cy), spacing))
    nearest, _ = cKDTree(np.column_stack([x, y])).query(np.column_stack([x, y]), k=2)
    assert nearest[:, 1].min() >= spacing * (1 - 1e-12)


@pytest.mark.parametrize("spacing", [1.0, 1.5, 2.0, 2.5, 3.0, 4.5, 6.0, 7.3, 9.0, 15.0, 20.0])
def test_the_lattice_is_nearly_as_dense_as_can_be(spacing: float) -> None:
    shape = (300, 320)
    n = np.count_nonzero(hexagonal_lattice(shape, (150.0, 140.0), spacing))
    ideal = shape[0] * shape[1] / (math.sqrt(3) / 2 * spacing**2)
    # No arrangement is denser than the ideal hexagonal one (Thue's theorem). Whole pixels cost at
    # most a step of 2 in each row and of 1 between rows. Along the edge the count may be off by
    # one sample in each row and one row.
    loss = (1 + 2 / spacing) * (1 + 2 / math.sqrt(3) / spacing)
    edge = (1 + 2 * spacing / shape[0]) * (1 + 2 * spacing / shape[1])
    assert ideal / loss / edge <= n <= ideal * edge


@pytest.mark.parametrize(("cx", "cy"), [(20.0, 31.0), (20.4, 30.6), (0.0, 0.0)])
def test_the_lattice_goes_through_its_centre(cx: float, cy: float) -> None:
    lattice = hexagonal_lattice((60, 50), (cx, cy), 6.0)
    x, y = round(cx), round(cy)
    assert lattice[y, x]
    # The six neighbours: two in the row, four half a step aside in the rows above and below.
    distance = np.hypot(*(np.indices(lattice.shape) - np.array([y, x])[:, None, None]))
    if min(x, y) > 10:
        assert np.count_nonzero(lattice & (distance < 1.2 * 6.0)) == 7


def test_azimuth_and_radius_are_polar_coordinates_of_the_disc():
    # A point at angle t in the plane, turned by the inclination about the major axis, is at
    # (cos t, sin t cos i) along and across it on the sky.
    angle, inclination, pa = 70.0, 55.0, 30.0
    along = math.cos(math.radians(angle))
    across = math.sin(math.radians(angle)) * math.cos(math.radians(inclination))
    sine, cosine = math.sin(math.radians(pa)), math.cos(math.radians(pa))
    east, north = np.array(along * sine + across * cosine), np.array(along * cosine - across * sine)
    disc = {"inclination_deg": inclination, "pa_deg": pa}
    assert disc_azimuth(east, north, **disc) == pytest.approx(angle)
    assert disc_radius(east, north, **disc) == pytest.approx(1.0)
    assert disc_azimuth(np.array(1.0), np.array(0.0), inclination_deg=0.0, pa_deg=0.0) == 90.0

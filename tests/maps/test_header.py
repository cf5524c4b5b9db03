"""Sky coordinates, pixel areas and observed frequency off a header."""

from __future__ import annotations

import math

import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from astropy.io import fits
from helpers import C_KM_S, CENTRE, make_hdu, make_wcs, open_source

from kspipe.core.errors import GridError, MapError
from kspipe.core.tracers import TRACERS
from kspipe.maps.header import (
    celestial_wcs,
    header_frequency_ghz,
    observed_frequency_ghz,
    pixel_areas_arcsec2,
    pixel_jacobian,
    sky_of_pixels,
)

HI = TRACERS["HI"]
NU_HI = 1.420405751768  # GHz, reference sheet 1.3 (common practice)
SR_ARCSEC2 = math.degrees(1) ** 2 * 3600**2


# --- Sky coordinates ---------------------------------------------------------------------------


def header_with(cards: dict[str, object], drop: tuple[str, ...] = ()) -> fits.Header:
    header = make_hdu(np.ones((40, 50))).header
    for key in list(header):
        if key.startswith(drop) and drop:
            del header[key]
    header.update(cards)
    return header


PIXEL_CARDS = ("CDELT", "PC", "CD1", "CD2")


@pytest.mark.parametrize(
    ("cards", "drop", "why"),
    [
        # Without CDELT the standard makes pixels of one degree: nobody meant that.
        ({}, PIXEL_CARDS, "pixel size"),
        ({"CROTA2": 30.0}, PIXEL_CARDS, "pixel size"),
        ({"PC1_1": 1.0, "PC2_2": 1.0}, PIXEL_CARDS, "pixel size"),
        ({"CDELT1": -1e-8, "CDELT2": 1e-8}, PIXEL_CARDS, "pixels of 3.6e-05 arcsec"),
        # Arcseconds typed where degrees count.
        ({"CDELT1": -4.0, "CDELT2": 4.0}, PIXEL_CARDS, "pixels of 1.44e.04 arcsec"),
        ({"CDELT1": 0.0, "CDELT2": 0.0}, PIXEL_CARDS, "cannot be read"),
        # One of two: the other is a degree by default.
        ({"CDELT2": 2 / 3600}, PIXEL_CARDS, "pixel"),
        ({"CDELT1": "small", "CDELT2": 2 / 3600}, PIXEL_CARDS, "pixel"),
        # Two sizes: no reader can know which is meant.
        (
            {"CD1_1": -2 / 3600, "CD2_2": 2 / 3600, "CDELT1": -4 / 3600, "CDELT2": 4 / 3600},
            PIXEL_CARDS,
            "CD matrix gives pixels of 2 arcsec, CDELT of 4 arcsec",
        ),
        ({"CTYPE2": "DEC---TAN"}, (), "sky coordinates"),  # malformed, as in a real header
        ({"CTYPE1": "RA---TAN", "CTYPE2": "GLAT-TAN"}, (), "sky coordinates"),
        ({"CTYPE1": "RA---XXX", "CTYPE2": "DEC--XXX"}, (), "sky coordinates"),
        ({}, ("CTYPE",), "no sky coordinates"),
        ({"CTYPE1": "LINEAR", "CTYPE2": "LINEAR"}, (), "'LINEAR' and 'LINEAR'"),
    ],
)
def test_unusable_coordinates_are_refused(cards, drop, why) -> None:
    with pytest.raises(GridError, match=why) as caught:
        celestial_wcs(header_with(cards, drop), "maps.probe")
    assert "[maps.probe]" in str(caught.value)


@pytest.mark.parametrize(
    "cards",
    [
        {"CDELT1": -2 / 3600, "CDELT2": 2 / 3600},
        {"CDELT1": -2 / 3600, "CDELT2": 2 / 3600, "CROTA2": 0.0},
        {"CD1_1": -2 / 3600, "CD2_2": 2 / 3600},
        {"CD1_1": -2 / 3600, "CD2_2": 2 / 3600, "CDELT1": 1.0, "CDELT2": 1.0},
        {"CDELT1": -2.0, "CDELT2": 2.0, "CUNIT1": "arcsec", "CUNIT2": "arcsec"},
    ],
    ids=["CDELT", "CROTA2", "CD", "CD and default CDELT", "CUNIT arcsec"],
)
def test_ways_to_write_a_pixel_size(cards) -> None:
    if "CUNIT1" in cards:
        cards |= {"CRVAL1": CENTRE[0] * 3600, "CRVAL2": CENTRE[1] * 3600}
    wcs = celestial_wcs(header_with(cards, PIXEL_CARDS), "maps.probe")
    steps = pixel_jacobian(wcs, 24.5, 19.5)
    np.testing.assert_allclose(steps, [[-2, 0], [0, 2]], atol=1e-6)


def test_a_map_in_an_unknown_frame_is_refused() -> None:
    """Helioprojective coordinates are celestial to the WCS library, but no sky of galaxies."""
    header = header_with({"CTYPE1": "HPLN-TAN", "CTYPE2": "HPLT-TAN"}, ("RADESYS",))
    with pytest.raises(MapError):
        open_source(fits.PrimaryHDU(np.ones((40, 50)), header))


# --- Steps and areas ---------------------------------------------------------------------------


@pytest.mark.parametrize("flip", [False, True])
@pytest.mark.parametrize("rotation", [0.0, 30.0, -100.0, 180.0])
@pytest.mark.parametrize("centre", [CENTRE, (0.0, 60.0)], ids=["plain", "RA wraps"])
def test_jacobian_of_turned_and_flipped_grids(rotation, flip, centre) -> None:
    wcs = make_wcs((40, 50), 2.0, centre=centre, rotation_deg=rotation, flip=flip)
    # At the reference point of a zenithal projection the steps are the CD matrix (Calabretta &
    # Greisen 2002, A&A 395, 1077, section 2).
    np.testing.assert_allclose(
        pixel_jacobian(wcs, 24.5, 19.5), wcs.pixel_scale_matrix * 3600, atol=1e-6
    )
    # Elsewhere: great-circle distance and position angle between neighbouring pixels.
    x, y = 3.0, 35.0
    for axis, (dx, dy) in enumerate([(0.5, 0.0), (0.0, 0.5)]):
        first, second = (wcs.pixel_to_world(x + s * dx, y + s * dy) for s in (-1, 1))
        step, angle = first.separation(second).arcsec, first.position_angle(second).rad
        expected = step * math.sin(angle), step * math.cos(angle)
        np.testing.assert_allclose(pixel_jacobian(wcs, x, y)[:, axis], expected, atol=1e-4)
    assert np.linalg.det(pixel_jacobian(wcs, x, y)) * (1 if flip else -1) > 0


def test_jacobian_of_a_galactic_grid_turns_with_the_frame() -> None:
    centre = SkyCoord(*CENTRE, unit="deg")
    gal = centre.galactic
    wcs = make_wcs((40, 50), 2.0, centre=(gal.l.deg, gal.b.deg), axes=("GLON", "GLAT"))
    np.testing.assert_allclose(
        pixel_jacobian(wcs, 24.5, 19.5, icrs=False), [[-2, 0], [0, 2]], atol=1e-6
    )
    north = SkyCoord(l=gal.l, b=gal.b + 0.01 * gal.b.unit, frame="galactic").icrs
    angle = centre.position_angle(north).rad
    step_y = 2 * np.array([math.sin(angle), math.cos(angle)])
    np.testing.assert_allclose(pixel_jacobian(wcs, 24.5, 19.5)[:, 1], step_y, atol=2e-4)


def test_icrs_of_a_galactic_pixel() -> None:
    # North galactic pole: RA 192.85948, Dec +27.12825 (J2000; Hipparcos catalogue, 1997).
    wcs = make_wcs((11, 11), 60.0, centre=(0.0, 90.0), axes=("GLON", "GLAT"), projection="ZEA")
    lon, lat = sky_of_pixels(wcs, np.array([5.0]), np.array([5.0]))
    assert lon[0] == pytest.approx(192.85948, abs=2e-5)
    assert lat[0] == pytest.approx(27.12825, abs=2e-5)


# Solid angle per unit area of the projection plane at angular distance theta from the reference
# point (Calabretta & Greisen 2002, A&A 395, 1077, section 5.1, differentiated by hand).
ZENITHAL = {
    "TAN": lambda t: np.cos(t) ** 3,
    "SIN": lambda t: 1 / np.cos(t),
    "ZEA": np.ones_like,
    "ARC": lambda t: np.sinc(t / math.pi),
    "STG": lambda t: np.cos(t / 2) ** 4,
}


@pytest.mark.parametrize("projection", ZENITHAL)
@pytest.mark.parametrize("rotation", [0.0, 37.0])
def test_pixel_areas_of_zenithal_projections(projection, rotation) -> None:
    # 12 degrees across with 6 arcmin pixels, as a nearby galaxy needs them.
    shape, pixel = (120, 120), 360.0
    wcs = make_wcs(shape, pixel, projection=projection, rotation_deg=rotation)
    y, x = np.indices(shape)
    sky = SkyCoord(*wcs.all_pix2world(x, y, 0), unit="deg")
    theta = sky.separation(SkyCoord(*CENTRE, unit="deg")).rad
    expected = pixel**2 * ZENITHAL[projection](theta)
    # Exact to the square of a pixel in radians: 3e-6.
    np.testing.assert_allclose(pixel_areas_arcsec2(wcs, shape), expected, rtol=5e-6)
    assert np.ptp(expected) > 0.01 * pixel**2 or projection in ("ZEA", "ARC")


def test_pixel_areas_of_a_cylindrical_map() -> None:
    # Plate carree: a cell between two parallels covers d(lon) (sin b2 - sin b1).
    shape, pixel = (180, 360), 3600.0
    wcs = make_wcs(shape, pixel, centre=(180.0, 0.0), projection="CAR")
    edges = np.radians(np.arange(181) - 90.0)
    expected = math.radians(1) * np.diff(np.sin(edges)) * SR_ARCSEC2
    areas = pixel_areas_arcsec2(wcs, shape)
    np.testing.assert_allclose(areas[:, 100], expected, rtol=3e-4)
    # The whole sky: 4 pi sr.
    assert areas.sum() == pytest.approx(4 * math.pi * SR_ARCSEC2, rel=3e-4)


# --- Observed frequency ------------------------------------------------------------------------


def test_conventions_of_velocity() -> None:
    # C117 and C118: v_opt = 1000 km/s is v_rad = 996.68, 5000 is 4918.0.
    for optical, radio in ((1000.0, 996.68), (5000.0, 4918.0)):
        by_optical, origin = observed_frequency_ghz(HI, fits.Header(), optical, "optical", "m")
        by_radio, _ = observed_frequency_ghz(HI, fits.Header(), radio, "radio", "m")
        assert by_optical == pytest.approx(NU_HI / (1 + optical / C_KM_S), rel=1e-12)
        assert by_radio == pytest.approx(NU_HI * (1 - radio / C_KM_S), rel=1e-12)
        # Half a unit of the last digit of v_rad.
        assert by_optical == pytest.approx(by_radio, rel=0.05 / C_KM_S)
        assert "optical" in origin
    # Taken for each other at 5000 km/s they differ by 82 km/s, 2.7e-4 in frequency.
    wrong, _ = observed_frequency_ghz(HI, fits.Header(), 5000.0, "radio", "m")
    assert abs(wrong / by_optical - 1) > 2e-4


def freq_header(**cards: object) -> fits.Header:
    base = {"CTYPE3": "FREQ", "CRVAL3": 1.4174e9, "CRPIX3": 1.0, "CDELT3": 1e4, "NAXIS": 3}
    header = fits.Header()
    header.update(base | cards)
    return header


@pytest.mark.parametrize(
    ("cards", "ghz"),
    [
        ({}, 1.4174),
        ({"CUNIT3": "Hz"}, 1.4174),
        ({"CUNIT3": "MHz", "CRVAL3": 1417.4, "CDELT3": 0.01}, 1.4174),
        ({"CUNIT3": "GHz", "CRVAL3": 1.4174, "CDELT3": 1e-5}, 1.4174),
        # The one channel is number 1, the reference may be another: 1 + (1 - 41) x 10 kHz.
        ({"CRPIX3": 41.0}, 1.4170),
        ({"CTYPE3": "VRAD"}, None),
        ({"CUNIT3": "furlong"}, None),
        ({"CRVAL3": "high"}, None),
        ({"CRVAL3": -1.0}, None),
    ],
)
def test_frequency_axis(cards, ghz) -> None:
    found = header_frequency_ghz(freq_header(**cards))
    assert found == (ghz and pytest.approx(ghz, rel=1e-12))


def test_header_and_recipe_must_agree() -> None:
    # 640 km/s optical is 1.41738 GHz: the header above agrees within a rotation curve.
    frequency, _ = observed_frequency_ghz(HI, freq_header(), 640.0, "optical", "m")
    assert frequency == pytest.approx(NU_HI / (1 + 640 / C_KM_S), rel=1e-12)
    alone, origin = observed_frequency_ghz(HI, freq_header(), None, "optical", "m")
    assert (alone, origin) == (pytest.approx(1.4174), "header FREQ axis")
    with pytest.raises(GridError, match=r"1\.4174 GHz.*galaxy\.velocity"):
        observed_frequency_ghz(HI, freq_header(), 3000.0, "optical", "maps.hi")
    with pytest.raises(GridError, match=r"maps\.hi.*galaxy\.velocity = "):
        observed_frequency_ghz(HI, fits.Header(), None, "optical", "maps.hi")
    with pytest.raises(GridError, match=r"115\."):
        # The right velocity with the wrong line.
        observed_frequency_ghz(TRACERS["CO(1-0)"], freq_header(), 640.0, "optical", "maps.co")

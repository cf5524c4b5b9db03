"""The recipe's shift: added to the sky positions of a map, in any frame and projection."""

from __future__ import annotations

import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from helpers import CENTRE, make_hdu, make_wcs, open_source

from kspipe.maps.header import shifted_wcs, sky_of_pixels

SHIFT = (7.5, -4.0)
GALACTIC = SkyCoord(*CENTRE, unit="deg").galactic
WCS_KINDS = {
    "tangent": {},
    "turned and mirrored": {"rotation_deg": 40.0, "flip": True, "projection": "SIN"},
    "galactic": {
        "axes": ("GLON", "GLAT"),
        "centre": (float(GALACTIC.l.deg), float(GALACTIC.b.deg)),
    },
    # The reference value is ninety degrees away, where a turn about it would move nothing.
    "all-sky": {"projection": "CAR", "centre": (CENTRE[0] + 90, 0.0)},
}


def wcs_of(kind: str):
    wcs = make_wcs((40, 50), 2.0, **WCS_KINDS[kind])
    if kind == "all-sky":
        wcs.wcs.crpix = [25.5 - 90 * 1800, 20.5 + 27.31 * 1800]
        wcs.wcs.set()
    return wcs


@pytest.mark.parametrize("kind", WCS_KINDS)
def test_a_shift_is_added_to_the_sky_positions(kind) -> None:
    # Offsets by astropy.coordinates.
    wcs = wcs_of(kind)
    moved = shifted_wcs(wcs, SHIFT, CENTRE)
    x, y = np.array([24.0, 10.0, 40.0]), np.array([19.0, 30.0, 5.0])
    before = SkyCoord(*sky_of_pixels(wcs, x, y), unit="deg")
    assert before.separation(SkyCoord(*CENTRE, unit="deg")).max().arcsec < 80
    after = SkyCoord(*sky_of_pixels(moved, x, y), unit="deg")
    east, north = before.spherical_offsets_to(after)
    np.testing.assert_allclose(east.arcsec, SHIFT[0], atol=0.01)
    np.testing.assert_allclose(north.arcsec, SHIFT[1], atol=0.01)


def test_a_distorted_map_is_shifted_as_well() -> None:
    header = wcs_of("tangent").to_header()
    header["CTYPE1"], header["CTYPE2"] = "RA---TAN-SIP", "DEC--TAN-SIP"
    header.update({"A_ORDER": 2, "B_ORDER": 2, "A_2_0": 1e-3, "B_0_2": -8e-4, "B_1_1": 5e-4})
    hdu = make_hdu(np.ones((40, 50)), cards=dict(header))
    plain, moved = open_source(hdu), open_source(hdu, shift_arcsec=SHIFT)
    assert plain.wcs.sip is not None
    x, y = np.array([24.0, 12.0]), np.array([19.0, 28.0])
    before = SkyCoord(*sky_of_pixels(plain.wcs, x, y), unit="deg")
    after = SkyCoord(*sky_of_pixels(moved.wcs, x, y), unit="deg")
    east, north = before.spherical_offsets_to(after)
    np.testing.assert_allclose(east.arcsec, SHIFT[0], atol=0.01)
    np.testing.assert_allclose(north.arcsec, SHIFT[1], atol=0.01)


def test_nothing_typed_nothing_moved() -> None:
    hdu = make_hdu(np.ones((40, 50)))
    np.testing.assert_array_equal(
        open_source(hdu).wcs.wcs.crpix, [hdu.header["CRPIX1"], hdu.header["CRPIX2"]]
    )

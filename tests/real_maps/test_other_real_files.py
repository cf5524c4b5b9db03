"""Real files with odd headers: a map, or a message that says what to type.

Facts are quoted from SOURCES.md, which lies with the files (see `test_lmc`).
"""

from __future__ import annotations

import math
import os
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from helpers import ARCSEC2_SR, open_source

from kspipe.core.errors import BeamError, GridError, MapError, ShapeError, UnitError
from kspipe.maps import NoiseRequest
from kspipe.maps.read import load_map

FOLDER = Path(
    os.environ.get("KSPIPE_REAL_MAPS")
    or Path(__file__).resolve().parents[3] / "shared" / "real_maps"
)
pytestmark = pytest.mark.skipif(
    not (FOLDER / "headers").is_dir(),
    reason=f"no real maps in {FOLDER}: set KSPIPE_REAL_MAPS to their folder",
)

ARP220 = FOLDER / "arp220" / "arp220_herschel_spire_14asec.fits.gz"
FUV = FOLDER / "m31" / "galex_fuv.fits"
HEADERS = FOLDER / "headers"
BEAM = {"beam": (4.0, 4.0, 0.0)}


@pytest.mark.parametrize("tracer", ["HI", "24um", "FUV", "Halpha"])
@pytest.mark.parametrize("file", sorted(FOLDER.rglob("*fits*")), ids=lambda file: file.name)
def test_every_file_is_read_or_refused(file, tracer) -> None:
    for changes in ({}, {"beam": (60.0, 60.0, 0.0)}):
        try:
            sky = load_map(open_source(file, tracer=tracer, velocity_kms=500.0, **changes))
        except MapError as error:
            message = str(error)
        else:
            message = f"[read] {np.isfinite(sky.value).sum()} pixels"
        assert message.startswith("[")
        assert len(message) > 15


def test_a_cube_is_refused_as_a_cube() -> None:
    # SOURCES.md: (113, 89, 70) voxels.
    with pytest.raises(ShapeError, match=r"(?s)NGC_2903\.fits.*70, 89, 113.*cube"):
        open_source(FOLDER / "ngc2903" / "NGC_2903.fits", tracer="HI", velocity_kms=550.0)


def test_several_images_are_listed() -> None:
    # SOURCES.md: gzip, empty primary HDU, data in 1, error in 2, coverage in 3, MJy/sr.
    with pytest.raises(MapError, match=r"(?i)1 image, 2 error, 3 coverage.*hdu = N"):
        open_source(ARP220, tracer="24um")
    centre = (233.737, 23.507)
    noise = NoiseRequest("file", file=ARP220, hdu=2, stated="sigma")
    source = open_source(
        ARP220, tracer="24um", hdu=1, beam=(36.0, 36.0, 0.0), noise=noise, centre=centre
    )
    assert source.door.factor == 1.0
    assert source.pixel_arcsec == pytest.approx(14.0, rel=1e-5)
    sky = load_map(source)
    # SOURCES.md does not say; measured on the file: 26 % blank.
    assert np.isnan(sky.value).mean() == pytest.approx(0.263, abs=0.02)
    assert (sky.error[np.isfinite(sky.value)] > 0).all()


def test_a_map_without_unit_and_beam_asks_for_them() -> None:
    # SOURCES.md: no BUNIT; erg/s/cm2/A per pixel.
    with pytest.raises(UnitError, match=r"galex_fuv\.fits.*no unit.*unit = "):
        open_source(FUV, tracer="FUV")
    with pytest.raises(BeamError, match=r"galex_fuv\.fits.*no beam"):
        open_source(FUV, tracer="FUV", unit="MJy/sr")


def test_a_turned_grid_of_old_cards() -> None:
    # SOURCES.md: pixels of 23.747 arcsec, CDELT with CROTA2 = 330.85.
    centre = (11.324, 41.743)
    source = open_source(FUV, tracer="FUV", unit="MJy/sr", beam=(60.0, 60.0, 0.0), centre=centre)
    assert source.pixel_arcsec == pytest.approx(23.747, abs=2e-3)
    (east, _), (north, _) = source.jacobian_arcsec
    # FITS paper II: x = CDELT1 cos(rho), y = CDELT1 sin(rho) per step along the first axis.
    rho = math.radians(330.850230383)
    assert east == pytest.approx(-23.747 * math.cos(rho), abs=0.02)
    assert north == pytest.approx(-23.747 * math.sin(rho), abs=0.02)


def test_flux_per_wavelength_and_pixel_with_the_unit_typed() -> None:
    # SOURCES.md: sum(galex_fuv) = 5.40e-12 erg/s/cm2/A, on the pixels where sfr100 is finite
    # (measured). Per frequency: lambda^2 / c at 1528 A.
    unit, centre = "erg/s/cm2/A/pixel", (11.324, 41.743)
    source = open_source(FUV, tracer="FUV", unit=unit, beam=(60.0, 60.0, 0.0), centre=centre)
    sky = load_map(source)
    observed = np.isfinite(fits.getdata(FUV.with_name("sfr100.fits")))
    flux_jy = np.nansum(sky.value[observed]) * 23.747**2 * ARCSEC2_SR * 1e6
    expected = 5.40e-12 * 1528.0**2 / 2.99792458e18 * 1e23
    # The pixels of this small field differ by 1e-4 in area; the sum is given to 3 digits.
    assert flux_jy == pytest.approx(expected, rel=2e-3)


@pytest.mark.parametrize(
    ("name", "typed", "kind", "message"),
    [
        ("NGC7321.vel_map.fits", {}, GridError, r"(?s)NGC7321.*sky coordinates.*CTYPE2"),
        ("midas_nocdelt.fits", {}, MapError, r"midas_nocdelt\.fits"),
        ("m13_rice.fits", BEAM, UnitError, r"m13_rice\.fits\[1\].*no unit"),
        ("sip-wcs.fits", BEAM, UnitError, r"sip-wcs\.fits.*'adu'"),
        ("first_J105007_image.fits", {}, UnitError, r"first_J105007_image\.fits.*'JY/BEAM'"),
        ("nvas_W51_image.imfits", {}, MapError, r"nvas_W51_image\.imfits"),
    ],
)
def test_odd_headers_are_refused_for_what_is_odd(name, typed, kind, message) -> None:
    with pytest.raises(kind, match=message):
        open_source(HEADERS / name, tracer="HI", velocity_kms=0.0, **typed)


def test_a_radio_cutout_is_read() -> None:
    # SOURCES.md: JY/BEAM, BMAJ 5.4 arcsec, 33 x 33. As a continuum band, as kspipe has no other.
    source = open_source(HEADERS / "first_J105007_image.fits", tracer="24um")
    assert source.image.shape == (33, 33)
    assert source.beam.major_arcsec == pytest.approx(5.4)
    omega = math.pi / (4 * math.log(2)) * 5.4**2 * ARCSEC2_SR
    assert source.door.factor == pytest.approx(1e-6 / omega, rel=1e-6)
    assert source.pixel_arcsec == pytest.approx(1.8, rel=1e-3)


def test_a_four_axis_radio_map_is_read_with_its_beam_typed() -> None:
    # SOURCES.md: (1,1,124,114), FREQ and STOKES axes, JY/BEAM, 20 % NaN.
    file = HEADERS / "nvas_W51_image.imfits"
    source = open_source(file, tracer="24um", centre=(290.92, 14.51), **BEAM)
    assert source.image.shape == (124, 114)
    assert np.isnan(load_map(source).value).mean() == pytest.approx(0.20, abs=0.005)


def test_a_distorted_map_keeps_its_distortion() -> None:
    # SOURCES.md: SIP distortion. The library's own transformation as the reference.
    source = open_source(
        HEADERS / "sip-wcs.fits", tracer="24um", unit="MJy/sr", beam=(3.0, 3.0, 0.0)
    )
    first, second = (source.wcs.pixel_to_world(x, 25.0) for x in (90.0, 91.0))
    linear = source.wcs.deepcopy()
    linear.sip = None
    assert first.separation(linear.pixel_to_world(90.0, 25.0)).arcsec > 1e-3
    assert first.separation(second).arcsec == pytest.approx(source.pixel_arcsec, rel=0.02)

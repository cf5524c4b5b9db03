"""Finding the one image of a file, and its beam, before any pixel is read."""

from __future__ import annotations

import gzip
from pathlib import Path

import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from astropy.io import fits
from astropy.wcs import WCS
from helpers import (
    CENTRE,
    assert_maps_close,
    elliptical_beam,
    make_hdu,
    make_wcs,
    open_source,
    read_map,
    round_beam,
)

from kspipe.core.errors import BeamError, GridError, MapError, ShapeError

SHAPE = (40, 50)


@pytest.fixture(scope="module")
def data() -> np.ndarray:
    return np.random.default_rng(1).normal(5.0, 1.0, SHAPE)


@pytest.fixture
def hdu(data: np.ndarray) -> fits.PrimaryHDU:
    return make_hdu(data)


def line_cards(*axes: tuple[str, float, float]) -> dict[str, object]:
    """Cards of further axes: kind, value, step."""
    cards: dict[str, object] = {}
    for i, (kind, value, step) in enumerate(axes, 3):
        cards |= {f"CTYPE{i}": kind, f"CRVAL{i}": value, f"CDELT{i}": step, f"CRPIX{i}": 1.0}
    return cards


# --- Which image -------------------------------------------------------------------------------


FREQ_STOKES = line_cards(("FREQ", 1.42e9, 1e4), ("STOKES", 1.0, 1.0))


@pytest.mark.parametrize(
    ("shape", "cards"),
    [
        ((1, *SHAPE), line_cards(("VRAD", 640.0, 5.0))),
        ((1, 1, *SHAPE), FREQ_STOKES),
        (SHAPE, FREQ_STOKES),  # a four-axis header on two-dimensional data
    ],
    ids=["3 axes", "4 axes", "4-axis header"],
)
def test_degenerate_axes_are_dropped(data, shape, cards) -> None:
    # A header of 4 axes is no obstacle.
    plain = read_map(make_hdu(data))
    sky = read_map(make_hdu(data.reshape(shape), cards=cards))
    assert sky.wcs.naxis == 2
    assert_maps_close(sky.value, plain.value, rtol=0)
    world = sky.wcs.all_pix2world([[3.0, 7.0]], 0), plain.wcs.all_pix2world([[3.0, 7.0]], 0)
    np.testing.assert_allclose(*world, rtol=1e-12)


@pytest.mark.parametrize(("shape", "why"), [((7, *SHAPE), "cube"), ((40, 50, 1), "axes")])
def test_an_image_on_other_axes_is_refused(shape, why) -> None:
    hdu = make_hdu(np.ones(shape), wcs=make_wcs(SHAPE), cards=line_cards(("FREQ", 1.4e9, 1e4)))
    with pytest.raises(ShapeError, match=why):
        open_source(hdu)


def test_a_position_velocity_map_is_refused() -> None:
    """Sky on axes 1 and 3, velocity on axis 2: two long axes that are not the sky's."""
    hdu = fits.PrimaryHDU(np.ones((1, *SHAPE)))
    axes = (("RA---TAN", 48.1, -2 / 3600), ("VRAD", 0.0, 5e3), ("DEC--TAN", -27.31, 2 / 3600))
    for i, (kind, value, step) in enumerate(axes, 1):
        hdu.header[f"CTYPE{i}"], hdu.header[f"CRVAL{i}"] = kind, value
        hdu.header[f"CDELT{i}"], hdu.header[f"CRPIX{i}"] = step, 1.0
    hdu.header.update({"BUNIT": "K km/s", "BMAJ": 8 / 3600})
    with pytest.raises(MapError, match="ax"):
        open_source(hdu)


def test_a_file_with_one_image_is_unambiguous(tmp_path, hdu, data) -> None:
    table = fits.BinTableHDU.from_columns([fits.Column("a", "E", array=np.ones(3))])
    image = fits.ImageHDU(data, hdu.header, "SCI")
    fits.HDUList([fits.PrimaryHDU(), table, image]).writeto(tmp_path / "empty_primary.fits")
    source = open_source(tmp_path / "empty_primary.fits")
    assert source.image.index == 2
    assert_maps_close(read_map(tmp_path / "empty_primary.fits").value, data, rtol=0)


def test_several_images_are_listed_and_one_is_taken_on_request(tmp_path, hdu, data) -> None:
    file = tmp_path / "several.fits"
    images = [fits.ImageHDU(k * data, hdu.header, f"PLANE{k}") for k in (1, 2, 3)]
    fits.HDUList([fits.PrimaryHDU(), *images]).writeto(file)
    with pytest.raises(MapError, match=r"1 PLANE1, 2 PLANE2, 3 PLANE3.*hdu = N"):
        open_source(file)
    assert_maps_close(read_map(file, hdu=2).value, 2 * data, rtol=0)
    for wrong in (0, 4, -1):
        with pytest.raises(MapError, match=f"HDU {wrong} holds no image.*1 PLANE1"):
            open_source(file, hdu=wrong)


def test_a_file_without_image_is_refused(tmp_path) -> None:
    fits.HDUList([fits.PrimaryHDU()]).writeto(tmp_path / "none.fits")
    with pytest.raises(MapError, match=r"none\.fits.*no image"):
        open_source(tmp_path / "none.fits")


@pytest.mark.parametrize("form", ["gzip", "tile-compressed"])
def test_compressed_files_hold_the_same_pixels(tmp_path, hdu, data, form) -> None:
    hdu.writeto(tmp_path / "plain.fits")
    file = tmp_path / "packed.fits.gz"
    if form == "gzip":
        file.write_bytes(gzip.compress((tmp_path / "plain.fits").read_bytes()))
    else:
        file = tmp_path / "packed.fits"
        packed = fits.CompImageHDU(data, hdu.header, compression_type="GZIP_2", quantize_level=0)
        fits.HDUList([fits.PrimaryHDU(), packed]).writeto(file)
    assert_maps_close(read_map(file).value, read_map(tmp_path / "plain.fits").value, rtol=0)


def test_integer_blank_is_not_observed(tmp_path) -> None:
    # FITS standard 4.0, section 5.3: BLANK marks undefined integers, before BSCALE and BZERO.
    stored = np.arange(2000, dtype=np.int16).reshape(SHAPE)
    stored[3:6, 10] = -32768
    expected = np.where(stored == -32768, np.nan, stored * 0.5 + 10.0)
    file = tmp_path / "blank.fits"
    make_hdu(stored, cards={"BLANK": -32768}).writeto(file)
    # Set on the file, where the pixels stay as stored.
    fits.setval(file, "BSCALE", value=0.5)
    fits.setval(file, "BZERO", value=10.0)
    assert fits.getval(file, "BITPIX") == 16
    assert_maps_close(read_map(file).value, expected, rtol=0)


@pytest.mark.parametrize("how", ["missing", "text", "empty", "half a header", "folder"])
def test_what_is_not_fits_gives_one_message(tmp_path, hdu, how) -> None:
    file = tmp_path / "some map.fits"
    hdu.writeto(file)
    whole = file.read_bytes()
    if how in ("missing", "folder"):
        file.unlink()
    if how == "folder":
        file.mkdir()
    content = {"text": b"RA DEC flux\n" * 400, "empty": b"", "half a header": whole[:2000]}
    if how in content:
        file.write_bytes(content[how])
    with pytest.raises(MapError, match=r"some map\.fits"):
        open_source(file)


@pytest.mark.parametrize("kept", [2880, 8000, 17280])
def test_a_truncated_file_gives_one_message(tmp_path, hdu, kept) -> None:
    file = tmp_path / "cut.fits"
    hdu.writeto(file)
    assert file.stat().st_size > kept
    file.write_bytes(file.read_bytes()[:kept])
    with pytest.raises(MapError, match=r"cut\.fits"):
        read_map(file)


# --- The beam ----------------------------------------------------------------------------------


def test_beam_off_the_header(data) -> None:
    # FITS convention: BMAJ, BMIN in degrees, BPA from north through east (common practice).
    source = open_source(make_hdu(data, beam_arcsec=(12.0, 8.0, 30.0)))
    np.testing.assert_allclose(source.beam_arcsec2, elliptical_beam(12, 8, 30), rtol=1e-6)
    assert source.beam.origin == "header BMAJ, BMIN, BPA"


@pytest.mark.parametrize(
    ("cards", "expected"),
    [
        ({"BMIN": None, "BPA": None}, round_beam(12.0)),
        ({"BPA": 210.0}, elliptical_beam(12, 8, 30)),
        # A minor axis that is the longer one lies a quarter turn away.
        ({"BMAJ": 8 / 3600, "BMIN": 12 / 3600}, elliptical_beam(12, 8, 120)),
    ],
    ids=["round", "half a turn", "exchanged"],
)
def test_incomplete_beam_cards(data, cards, expected) -> None:
    source = open_source(make_hdu(data, beam_arcsec=(12.0, 8.0, 30.0), cards=cards))
    np.testing.assert_allclose(source.beam_arcsec2, expected, rtol=1e-6, atol=1e-9)


def test_what_was_not_said_is_said(data) -> None:
    source = open_source(make_hdu(data, beam_arcsec=12.0, cards={"BMIN": None, "BPA": None}))
    assert source.beam.origin == "header BMAJ (no BMIN: taken as round)"
    # A detector's pixel may be wider than its beam: it counts in the final beam.
    open_source(make_hdu(data, beam_arcsec=1.5), averages_pixels=True, tracer="24um", unit="MJy/sr")


def test_the_recipe_overrides_the_header(hdu) -> None:
    source = open_source(hdu, beam=(9.0, 7.0, 60.0))
    np.testing.assert_allclose(source.beam_arcsec2, elliptical_beam(9, 7, 60), rtol=1e-6)
    assert source.beam.origin == "recipe"


@pytest.mark.parametrize(
    ("cards", "why"),
    [
        ({"BMAJ": None}, "no beam"),
        ({"BMAJ": 8.0, "BMIN": 8.0}, "degrees"),  # arcsec in a card that counts degrees
        ({"BMAJ": "wide"}, "wide"),
        ({"BMAJ": "8 arcsec"}, "8 arcsec"),
        ({"BMIN": "wide"}, "wide"),
        ({"BPA": "north"}, "north"),
        ({"BMAJ": 0.0}, "positive"),
        ({"BMAJ": -8 / 3600}, "positive"),
        ({"BMIN": 0.0}, "positive"),
        ({"BMAJ": 1.9 / 3600, "BMIN": 1.9 / 3600}, "narrower than the pixels"),  # 2 arcsec
        ({"BMAJ": 12 / 3600, "BPA": None}, "no BPA"),
    ],
)
def test_a_beam_that_cannot_be_is_refused(data, cards, why) -> None:
    with pytest.raises(BeamError, match=why) as caught:
        open_source(make_hdu(data, beam_arcsec=(8.0, 8.0, 0.0), cards=cards))
    # The message names the map and what to type.
    assert "maps.probe" in str(caught.value)
    assert 'beam = "' in str(caught.value)


def test_beam_angle_counts_in_the_frame_of_the_map() -> None:
    """BPA from galactic north: on the sky it is turned by the angle between the two norths."""
    centre = SkyCoord(*CENTRE, unit="deg")
    gal = centre.galactic
    wcs = make_wcs(SHAPE, centre=(gal.l.deg, gal.b.deg), axes=("GLON", "GLAT"))
    source = open_source(make_hdu(np.ones(SHAPE), wcs=wcs, beam_arcsec=(12.0, 8.0, 30.0)))
    # Independent: the angle towards a point a little farther to the galactic north.
    north = SkyCoord(l=gal.l, b=gal.b + 0.01 * gal.b.unit, frame="galactic").icrs
    turn = centre.position_angle(north).deg
    assert abs(turn % 180) > 10
    expected = elliptical_beam(12, 8, 30 + turn)
    np.testing.assert_allclose(source.beam_arcsec2, expected, rtol=2e-4, atol=2e-4)


def test_exchanged_axes_are_understood_or_refused() -> None:
    """CTYPE1 the latitude: nothing may pass with longitude and latitude mistaken.

    Swapped axes never pass silently.
    """
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["DEC--TAN", "RA---TAN"]
    wcs.wcs.cunit = ["deg", "deg"]
    wcs.wcs.crval = [CENTRE[1], CENTRE[0]]
    wcs.wcs.crpix = [25.5, 20.5]
    wcs.wcs.cdelt = [2 / 3600, -2 / 3600]
    hdu = make_hdu(np.ones(SHAPE), wcs=wcs, beam_arcsec=(12.0, 8.0, 30.0))
    try:
        source = open_source(hdu)
    except GridError:
        return
    np.testing.assert_allclose(source.beam_arcsec2, elliptical_beam(12, 8, 30), rtol=1e-4)
    # Column 0 is the step along x: 2 arcsec north.
    np.testing.assert_allclose(source.jacobian_arcsec, [[0, -2], [2, 0]], atol=1e-4)
    areas = read_map(make_hdu(np.ones(SHAPE), wcs=wcs, unit="Jy/pixel"), tracer="24um").value
    np.testing.assert_allclose(areas, areas[20, 25], rtol=1e-6)


def test_memory_and_file_are_the_same_source(tmp_path, hdu) -> None:
    file: Path = tmp_path / "map.fits"
    hdu.writeto(file)
    from_file, in_memory = open_source(file), open_source(fits.open(file)[0])
    assert from_file.image.shape == in_memory.image.shape == SHAPE
    assert from_file.door == in_memory.door
    np.testing.assert_array_equal(from_file.beam_arcsec2, in_memory.beam_arcsec2)
    assert_maps_close(read_map(file).value, read_map(hdu).value, rtol=0)

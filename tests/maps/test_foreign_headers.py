"""Headers that other people wrote, and headers gone wrong: a map, or one message, never a crash.

The files are those that astropy, reproject, radio_beam and photutils install for their own tests.
Many are no maps at all; real maps among them are named in `MAPS`.
"""

from __future__ import annotations

import contextlib
import warnings
from functools import cache
from importlib.util import find_spec
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from astropy.wcs import WCS
from astropy.wcs.utils import proj_plane_pixel_scales
from helpers import CENTRE, make_hdu, open_source
from hypothesis import given, settings
from hypothesis import strategies as st

from kspipe.core.errors import InputError, MapError
from kspipe.maps import MapSource
from kspipe.maps.header import sky_of_pixels
from kspipe.maps.read import load_map
from kspipe.maps.skymap import SkyMap
from kspipe.matching import Grid, choose_beam, match_map

FOLDERS = (
    ("astropy", "wcs/tests/data"),
    ("astropy", "io/fits/tests/data"),
    ("astropy", "nddata/tests/data"),
    ("reproject", "tests/data"),
    ("radio_beam", "tests/data"),
    ("photutils", "psf/tests/data"),
    ("photutils", "isophote/tests/data"),
)
# Celestial images and moment maps, by package, with the side of a pixel that their headers state.
MAPS = {
    "astropy/wcs/tests/data/dss.14.29.56-62.41.05.fits.gz": 1.70,  # astropy: a survey plate
    "astropy/wcs/tests/data/irac_sip.hdr": 1.22,  # astropy: SIP distortion
    "astropy/wcs/tests/data/sip.fits": 1.21,  # astropy
    "astropy/io/fits/tests/data/test0.fits": 0.199,  # astropy: several images
    "astropy/nddata/tests/data/sip-wcs.fits": 0.558,  # astropy
    "reproject/tests/data/galactic_2d.fits": 7.2,  # reproject: galactic frame
    "reproject/tests/data/gc_ga.hdr": 24.0,  # reproject
    "radio_beam/tests/data/NGC0925.bima.mmom0.fits.gz": 1.0,  # radio_beam: CO moment map
    "radio_beam/tests/data/ngc0925_na.fits.gz": 1.5,  # radio_beam: HI moment map
    "radio_beam/tests/data/m83.moment0.fits.gz": 0.25,  # radio_beam
}
LONGEST = 24


def root(package: str) -> Path | None:
    spec = find_spec(package)
    return Path(spec.origin).parent if spec and spec.origin else None


def listed() -> list[str]:
    """Every FITS file and stored header, as ``package/path``."""
    found = []
    for package, folder in FOLDERS:
        if (base := root(package)) is not None:
            files = sorted((base / folder).rglob("*"))
            names = [f"{package}/{f.relative_to(base).as_posix()}" for f in files]
            found += [n for n in names if n.endswith((".fits", ".fits.gz", ".hdr"))]
    return found


FILES = listed()


@cache
def headers(name: str) -> list[fits.Header]:
    """Image headers of a file; stored headers are a block of cards or lines of text."""
    package, _, path = name.partition("/")
    file = root(package) / path
    if file.suffix == ".hdr":
        text = file.read_bytes().decode("latin1")
        return [fits.Header.fromstring(text, sep="\n" if text.count("\n") > 3 else "")]
    with fits.open(file) as hdus:
        return [hdu.header.copy() for hdu in hdus if hdu.is_image]


def stand_in(header: fits.Header) -> fits.PrimaryHDU | None:
    """Pixels of one under a foreign header; None where the library itself cannot place it."""
    lengths = [int(header.get(f"NAXIS{i}") or 2) for i in range(1, header.get("NAXIS", 0) + 1)]
    shape = [min(n, LONGEST) for n in lengths or [LONGEST, LONGEST]][::-1]
    try:
        return fits.PrimaryHDU(np.ones(shape), header.copy(strip=True))
    except (ValueError, fits.VerifyError):
        return None


def matched(hdu: fits.PrimaryHDU) -> tuple[MapSource, SkyMap]:
    """Take a map through the whole matching, about its own middle."""
    beam = 10.0
    with contextlib.suppress(Exception):  # whatever is wrong, kspipe has to say it
        scales = proj_plane_pixel_scales(WCS(hdu.header, naxis=2).celestial)
        beam = 3 * 3600 * float(max(scales))
    source = open_source(hdu, tracer="24um", unit="MJy/sr", beam=(beam, beam, 0.0))
    sky = load_map(source)
    ny, nx = sky.value.shape
    lon, lat = sky_of_pixels(sky.wcs, np.array([(nx - 1) // 2]), np.array([(ny - 1) // 2]))
    middle = (float(lon[0]), float(lat[0])) if np.isfinite(lon + lat) else CENTRE
    grid = Grid.around(middle, beam, [source])
    return source, match_map(sky, choose_beam([source], 2 * beam), grid)


@pytest.mark.parametrize("name", FILES)
@pytest.mark.filterwarnings("ignore::Warning", "error::kspipe.core.errors.KspipeWarning")
def test_a_foreign_header_is_read_or_refused(name) -> None:
    opened, messages = [], []
    for header in headers(name):
        hdu = stand_in(header)
        if hdu is None:
            continue
        for changes in ({}, {"unit": "MJy/sr"}):
            with contextlib.suppress(MapError):
                open_source(hdu, tracer="24um", **changes)
        if "/maps/1904-66" in name:
            continue  # matched in full by matching/test_projections.py
        try:
            source, result = matched(hdu)
        except MapError as error:
            messages.append(str(error))
            continue
        opened.append(source.pixel_arcsec)
        # A constant sky stays constant.
        seen = result.value[np.isfinite(result.value)]
        assert seen.size
        np.testing.assert_allclose(seen, 1.0, rtol=1e-6)
    # [where] what is wrong, in words of its own.
    assert all(message.startswith("[") and "] " in message for message in messages)
    if name in MAPS:
        assert min(abs(pixel / MAPS[name] - 1) for pixel in opened) < 0.01


def test_enough_foreign_headers_were_found() -> None:
    missing = [name for name in MAPS if name not in FILES and root(name.split("/")[0]) is not None]
    assert missing == []
    assert len(FILES) > 60


@pytest.mark.filterwarnings("ignore::Warning", "error::kspipe.core.errors.KspipeWarning")
@pytest.mark.parametrize("name", [name for name in MAPS if name.startswith("radio_beam")])
def test_files_without_pixels_are_refused(name) -> None:
    # radio_beam installs these with the headers only.
    package, _, path = name.partition("/")
    if root(package) is None:
        pytest.skip("radio_beam is not installed")
    with pytest.raises(MapError, match="no image"):
        open_source(root(package) / path, tracer="24um", unit="MJy/sr")


# --- One card gone wrong -----------------------------------------------------------------------

KEYS = (
    *("CTYPE1", "CTYPE2", "CRVAL1", "CRVAL2", "CRPIX1", "CRPIX2", "CDELT1", "CDELT2"),
    *("PC1_1", "PC1_2", "PC2_1", "PC2_2", "CUNIT1", "CUNIT2", "LONPOLE", "LATPOLE", "RADESYS"),
    *("EQUINOX", "BMAJ", "BMIN", "BPA", "BUNIT", "WCSAXES", "CTYPE3", "CRVAL3", "CUNIT3"),
    *("CRPIX3", "CDELT3", "CROTA2", "CD1_1", "PV2_1", "A_ORDER", "SPECSYS", "RESTFRQ"),
)
VALUES = st.one_of(
    st.sampled_from(["", " ", "RA---TAN", "DEC--TAN", "GLON-CAR", "FREQ", "deg", "Hz", "FK4"]),
    st.sampled_from([0, 1, -1, 2, 3, 90.0, -90.0, 1e-30, 1e30, -1e300, 1e9, 360, 1e-3]),
    st.booleans(),
    st.none(),
    st.text("abcXYZ-/ 019", max_size=8),
    st.floats(allow_nan=False, allow_infinity=False),
)


@settings(derandomize=True, deadline=None, max_examples=80)
@given(st.dictionaries(st.sampled_from(KEYS), VALUES, min_size=1, max_size=3))
def test_broken_cards_give_a_map_or_a_message(cards) -> None:
    hdu = make_hdu(np.ones((20, 20)), unit="Jy/beam km/s", pixel_arcsec=4.0, beam_arcsec=12.0)
    hdu.header.update({"CTYPE3": "FREQ", "CRVAL3": 1.42e9, "CRPIX3": 1.0, "CDELT3": 1e4})
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            for key, value in cards.items():
                hdu.header[key] = value
            str(hdu.header)
        except ValueError:
            return  # no FITS file can hold this card
        try:
            source = open_source(hdu)
            sky = load_map(source)
            Grid.around(CENTRE, 6.0, [source])
        except InputError:
            return  # a message
    assert np.isfinite(source.pixel_arcsec)
    assert source.pixel_arcsec > 0
    assert np.isfinite(source.beam_arcsec2).all()
    assert np.isfinite(sky.value).any()

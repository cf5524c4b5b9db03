"""One source through 28 projections of one field, as astropy installs their headers.

The headers (``astropy/wcs/tests/data/maps/1904-66_*.hdr``) are those of the WCS papers' test set:
one field of the southern sky in every projection of Calabretta & Greisen 2002, A&A 395, 1077.
"""

from __future__ import annotations

from importlib.util import find_spec
from pathlib import Path

import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from astropy.io import fits
from helpers import ARCSEC2_SR, open_source, round_beam

from kspipe.maps.read import load_map
from kspipe.matching import Grid, match_map

FOLDER = Path(find_spec("astropy").origin).parent / "wcs" / "tests" / "data" / "maps"
FILES = sorted(FOLDER.glob("1904-66_*.hdr"))
# One of each family always, the others with -m slow.
ALWAYS = ("TAN", "SIN", "NCP", "CAR", "AIT", "MOL", "HPX", "CSC")
every_projection = pytest.mark.parametrize(
    "file",
    [
        pytest.param(file, id=kind, marks=() if kind in ALWAYS else pytest.mark.slow)
        for kind, file in ((file.stem.removeprefix("1904-66_"), file) for file in FILES)
    ],
)
SOURCE = SkyCoord(286.0, -66.3, unit="deg")
FWHM, TARGET = 1500.0, 2100.0
PEAK = (FWHM / TARGET) ** 2
# The sky of CSC is an approximation in the standard itself (its inverse is off by 0.02 pixel
# here), ZPN's is a polynomial that is inverted step by step.
CRUDE = {"CSC": 0.01, "ZPN": 2e-3}


def round_gaussian(sky: SkyCoord, fwhm: float) -> np.ndarray:
    return np.exp(-4 * np.log(2) * (sky.separation(SOURCE).arcsec / fwhm) ** 2)


@pytest.mark.skipif(not FILES, reason="astropy is installed without its test data")
def test_all_projections_are_there() -> None:
    assert len(FILES) >= 25


@pytest.mark.filterwarnings("ignore::Warning", "error::kspipe.core.errors.KspipeWarning")
@every_projection
def test_a_source_keeps_flux_place_and_width(file) -> None:
    header = fits.Header.fromstring(file.read_bytes().decode("ascii"))
    hdu = fits.PrimaryHDU(np.zeros((192, 192)), header)
    hdu.header.update({"BUNIT": "MJy/sr", "BMAJ": FWHM / 3600, "BMIN": FWHM / 3600})
    centre = (SOURCE.ra.deg, SOURCE.dec.deg)
    source = open_source(hdu, tracer="24um", centre=centre, zeros="flux")
    y, x = np.indices((192, 192), dtype=float)
    sky = source.wcs.pixel_to_world(x, y).icrs
    seen = np.isfinite(sky.ra.deg)
    hdu.data[~seen] = np.nan
    hdu.data[seen] = round_gaussian(sky[seen], FWHM)
    loaded = load_map(open_source(hdu, tracer="24um", centre=centre, zeros="flux"))
    grid = Grid.around(centre, TARGET / 6, [source], size_arcsec=6 * TARGET)
    matched = match_map(loaded, round_beam(TARGET), grid)
    truth = PEAK * round_gaussian(SkyCoord(*grid.sky(), unit="deg"), TARGET)
    inside = matched.coverage > 0.999
    assert inside.mean() > 0.95
    off = CRUDE.get(file.stem.removeprefix("1904-66_"), 5e-4)
    np.testing.assert_allclose(matched.value[inside], truth[inside], atol=off * PEAK)
    flux = np.sum((matched.value * grid.areas_arcsec2())[inside]) * ARCSEC2_SR
    expected = np.sum((truth * grid.areas_arcsec2())[inside]) * ARCSEC2_SR
    assert flux == pytest.approx(expected, rel=0.2 * off)

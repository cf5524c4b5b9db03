"""A whole galaxy from real maps: the Large Magellanic Cloud in H I, H-alpha and 24 um.

The maps are no part of the project. They are looked for in the folder that the environment
variable KSPIPE_REAL_MAPS names, else beside the checkout; without them these tests are skipped.
Facts are quoted from SOURCES.md, which lies with the maps: totals there were integrated by hand.
"""

from __future__ import annotations

import json
import math
import os
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from astropy.io import fits
from astropy.table import Table
from helpers import ARCSEC2_SR, SIGMA_PER_FWHM
from scipy.interpolate import RectBivariateSpline

from kspipe.core.errors import BeamError, MapError
from kspipe.maps.product import read_matched
from kspipe.maps.read import load_map
from kspipe.maps.skymap import SkyMap
from kspipe.recipe import parse_recipe
from kspipe.stages.compare import compare_relations
from kspipe.stages.plan import make_plan
from kspipe.stages.reduce import reduce_maps

FOLDER = Path(
    os.environ.get("KSPIPE_REAL_MAPS")
    or Path(__file__).resolve().parents[3] / "shared" / "real_maps"
)
LMC = FOLDER / "lmc"
pytestmark = pytest.mark.skipif(
    not (LMC / "nhi.fits").is_file(),
    reason=f"no real maps in {FOLDER}: set KSPIPE_REAL_MAPS to their folder",
)

# SOURCES.md: centre, distance, inclination, position angle.
CENTRE = SkyCoord(80.05, -69.30, unit="deg")
DISTANCE_PC, INCLINATION = 50e3, 30.0
BEAM_ARCSEC = 1.11 * 3600
# SOURCES.md: N_HI [cm-2 sr], F(H-alpha) [erg/s/cm2], F(24 um) [Jy] by radius [deg].
FLUXES = {
    2: {"hi": 5.330e18, "ha": 5.627e-8, "ir": 4146.0},
    3: {"hi": 1.209e19, "ha": 7.537e-8, "ir": 5635.0},
    4: {"hi": 1.668e19, "ha": 8.670e-8, "ir": 6244.0},
}


def recipe_tables() -> dict[str, Any]:
    """The recipe; noise levels are orders of magnitude, no reddening and no [NII] taken off."""
    return {
        "seed": 1,
        "gas": "atomic only",
        "galaxy": {
            "name": "LMC",
            "centre": "80.05 -69.30 deg",
            "distance": "50 kpc",
            "inclination": "30 deg",
            "position_angle": "145 deg",
        },
        "grid": {"beam": "1.11 deg"},
        "maps": {
            "hi": {"tracer": "HI", "file": "nhi.fits", "noise": "1e19 cm-2"},
            "ha": {
                "tracer": "Halpha",
                "file": "ha.fits",
                "unit": "0.1 Rayleigh",
                "beam": "1 arcmin",
                "noise": "2 Rayleigh",
                "nii_ratio": 0.0,
            },
            "ir": {
                "tracer": "24um",
                "file": "smoothed_24um.fits",
                "unit": "MJy/sr",
                "beam": "1 arcmin",
                "noise": "0.03 MJy/sr",
            },
        },
        "metallicity": {"oh": 8.35},
        "foreground": {"ebv": 0.0},
        "star_formation": {"calibration": "leroy2012_halpha_24um", "maps": ["ha", "ir"]},
        "relations": {"shielding": {"law": "krumholz2009", "clumping": 5}},
    }


@pytest.fixture(scope="module")
def plan():
    return make_plan(parse_recipe(recipe_tables(), folder=LMC))


@pytest.fixture(scope="module")
def loaded(plan) -> dict[str, SkyMap]:
    return {name: load_map(source) for name, source in plan.sources.items()}


@pytest.fixture(scope="module")
def out(tmp_path_factory) -> Path:
    folder = tmp_path_factory.mktemp("lmc") / "out"
    reduce_maps(parse_recipe(recipe_tables(), folder=LMC), folder)
    compare_relations(folder)
    return folder


# --- Wrong cards -------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["ha", "ir"])
def test_a_wrong_unit_card_is_refused(name) -> None:
    # SOURCES.md: BUNIT says M_sol pc^-2, the files hold 0.1 R and MJy/sr.
    raw = recipe_tables()
    del raw["maps"][name]["unit"]
    with pytest.raises(MapError, match=rf"maps\.{name}.*M_sol pc\^-2.*not an intensity"):
        make_plan(parse_recipe(raw, folder=LMC))


def test_missing_beams_are_asked_for_together() -> None:
    raw = recipe_tables()
    del raw["maps"]["ha"]["beam"], raw["maps"]["ir"]["beam"]
    with pytest.raises(MapError, match=r"(?s)maps\.ha.*no beam.*maps\.ir.*no beam"):
        make_plan(parse_recipe(raw, folder=LMC))


def test_a_sharper_beam_names_the_map_that_forbids_it() -> None:
    raw = recipe_tables()
    raw["grid"]["beam"] = "30 arcmin"
    with pytest.raises(BeamError, match=r"maps\.hi.*nhi\.fits"):
        make_plan(parse_recipe(raw, folder=LMC))


@pytest.mark.parametrize("typed", ["3996 arcsec", "66.6 arcmin", "1.11 deg"])
def test_a_beam_in_any_angle(plan, typed) -> None:
    raw = recipe_tables()
    raw["grid"]["beam"] = typed
    assert make_plan(parse_recipe(raw, folder=LMC)).fwhm_arcsec == pytest.approx(BEAM_ARCSEC)


# --- Fluxes as read ----------------------------------------------------------------------------


def positions(wcs, shape) -> SkyCoord:
    y, x = np.indices(shape, dtype=float)
    return SkyCoord(*wcs.all_pix2world(x, y, 0), unit="deg")


def areas_sr(wcs, sky: SkyCoord) -> np.ndarray:
    """Gnomonic pixels: nominal area times cos^3 of the distance from the tangent point."""
    nominal = abs(np.linalg.det(wcs.pixel_scale_matrix)) * math.radians(1) ** 2
    return nominal * np.cos(sky.separation(SkyCoord(*wcs.wcs.crval, unit="deg")).rad) ** 3


# From K km/s, erg/s/cm2/sr and MJy/sr: 1.823e18 H atoms per cm2 for 1 K km/s; 1 MJy is 1e6 Jy.
TO_TABLE = {"hi": 1.823e18, "ha": 1.0, "ir": 1e6}


@pytest.mark.parametrize("radius", FLUXES)
@pytest.mark.parametrize("name", TO_TABLE)
def test_fluxes_as_read(loaded, name, radius) -> None:
    sky = loaded[name]
    here = positions(sky.wcs, sky.value.shape)
    inside = here.separation(CENTRE).deg < radius
    flux = np.nansum((sky.value * areas_sr(sky.wcs, here))[inside]) * TO_TABLE[name]
    assert flux == pytest.approx(FLUXES[radius][name], rel=0.01)


# --- Matched maps ------------------------------------------------------------------------------


def convolved(sky: SkyMap, at: SkyCoord, sigma_rad: float) -> np.ndarray:
    """Weighted mean of the observed pixels about each position, on the sphere, in real space."""
    here = positions(sky.wcs, sky.value.shape)
    observed = np.isfinite(sky.value)
    weights = areas_sr(sky.wcs, here)[observed]
    unit = here[observed].cartesian.xyz.value.T
    values, result = sky.value[observed], np.empty(at.size)
    for i, direction in enumerate(at.cartesian.xyz.value.T):
        chord = unit - direction
        angle = 2 * np.arcsin(0.5 * np.sqrt(np.einsum("ij,ij->i", chord, chord)))
        kernel = weights * np.exp(-0.5 * (angle / sigma_rad) ** 2)
        result[i] = kernel @ values / kernel.sum()
    return result


def checked_pixels(matched: SkyMap, radius: float) -> tuple[np.ndarray, SkyCoord]:
    """Every third pixel within a radius, where the sky was observed."""
    here = positions(matched.wcs, matched.value.shape)
    y, x = np.indices(matched.value.shape)
    chosen = (here.separation(CENTRE).deg < radius) & ((x + y) % 3 == 0)
    chosen &= matched.coverage > 0.95
    assert chosen.sum() > 60
    return chosen, here[chosen]


def assert_equal_on_the_sky(matched: SkyMap, expected: np.ndarray, chosen, at) -> None:
    """Sums inside 3 and 4 degrees, and every pixel, to 0.3 %.

    Where the sky is near zero a pixel is held to 0.3 % of one percent of the peak.
    """
    size = np.maximum(np.abs(expected), 0.01 * np.nanmax(matched.value))
    ours = matched.value[chosen]
    off = np.abs(ours - expected) / size
    for radius in (3.0, 4.0):
        inside = at.separation(CENTRE).deg < radius
        assert ours[inside].sum() == pytest.approx(expected[inside].sum(), rel=0.003)
        assert off[inside].max() < 0.003, f"within {radius} deg"


@pytest.mark.parametrize("name", ["ha", "ir"])
def test_matched_maps_equal_a_plain_convolution_on_the_sphere(loaded, out, name) -> None:
    matched = read_matched(out / "matched" / f"{name}.fits")
    # Beam and pixel (a box of 56 arcsec) are in the map already.
    beam2 = (BEAM_ARCSEC**2 - 60.0**2) * SIGMA_PER_FWHM**2 - 56.0**2 / 12
    chosen, at = checked_pixels(matched, 4.0)
    expected = convolved(loaded[name], at, math.sqrt(beam2 * ARCSEC2_SR))
    assert_equal_on_the_sky(matched, expected, chosen, at)


def test_matched_hi_is_the_map_itself(loaded, out) -> None:
    """The target is the beam of the map: nothing is smoothed, the grid is only another one."""
    sky, matched = loaded["hi"], read_matched(out / "matched" / "hi.fits")
    chosen, at = checked_pixels(matched, 4.0)
    x, y = sky.wcs.world_to_pixel(at)
    ny, nx = sky.value.shape
    spline = RectBivariateSpline(np.arange(ny), np.arange(nx), sky.value)(y, x, grid=False)
    assert_equal_on_the_sky(matched, spline, chosen, at)


def test_errors_of_matched_maps_are_small_and_finite(out) -> None:
    for name in ("hi", "ha", "ir"):
        matched = read_matched(out / "matched" / f"{name}.fits")
        seen = np.isfinite(matched.value)
        assert np.isfinite(matched.error[seen]).all()
        assert (matched.error[seen] > 0).all()
        assert np.median(np.abs(matched.value / matched.error)[seen]) > 10


# --- The whole run -----------------------------------------------------------------------------


def test_products_hold_no_molecular_gas(out) -> None:
    names = {file.stem for file in (out / "maps").glob("*.fits")}
    assert {"sigma_atom", "sigma_gas", "sigma_sfr", "metallicity", "radius"} <= names
    assert not names & {"sigma_mol", "f_mol", "t_dep"}
    pixels = Table.read(out / "pixels.ecsv")
    assert {"sigma_atom", "sigma_gas", "sigma_sfr", "residual_shielding"} <= set(pixels.colnames)
    # What a relation predicts may be molecular; what is measured may not.
    measured = [name for name in pixels.colnames if not name.startswith("predicted_")]
    assert not [name for name in measured if "mol" in name or name.startswith("t_dep")]
    # All gas is atomic.
    np.testing.assert_array_equal(pixels["sigma_gas"], pixels["sigma_atom"])
    summary = json.loads((out / "summary.json").read_text(encoding="utf-8"))
    assert summary["gas"] == "atomic only"
    assert "mass_mol" not in summary["totals"]
    assert "f_mol" not in summary["totals"]


def test_residual_maps_exist_and_hold_pixels(out) -> None:
    with fits.open(out / "residuals" / "shielding.fits") as hdus:
        for name in ("PRIMARY", "PREDICTED", "DIFFERENCE", "NORMALISED"):
            assert np.isfinite(hdus[name].data).sum() > 100
        predicted, difference = hdus["PREDICTED"].data, hdus["DIFFERENCE"].data
        both = np.isfinite(predicted) & np.isfinite(difference) & (predicted > 0)
        observed = (predicted + difference)[both]
        ratio = hdus["PRIMARY"].data[both]
        seen = np.isfinite(ratio)
        expected = np.log10(observed[seen] / predicted[both][seen])
        np.testing.assert_allclose(ratio[seen], expected, atol=1e-3)


def within(out: Path, product: str, radius_deg: float) -> float:
    """Sum of a face-on surface density over the disc plane [unit pc2], by hand.

    The circle cuts through pixels of 0.37 deg: each is taken in 10 x 10 parts, splined.
    """
    value = fits.getdata(out / "maps" / f"{product}.fits").astype(float)
    wcs = read_matched(out / "matched" / "hi.fits").wcs
    ny, nx = value.shape
    x, y = np.meshgrid(*((np.arange(10 * n) - 4.5) / 10 for n in (nx, ny)))
    here = SkyCoord(*wcs.all_pix2world(x, y, 0), unit="deg")
    inside = here.separation(CENTRE).deg < radius_deg
    whole_pixels = np.zeros(value.shape, dtype=bool)
    whole_pixels[np.rint(y[inside]).astype(int), np.rint(x[inside]).astype(int)] = True
    assert np.isfinite(value[whole_pixels]).all()
    spline = RectBivariateSpline(np.arange(ny), np.arange(nx), np.nan_to_num(value))
    pc2 = areas_sr(wcs, here) / 100 * DISTANCE_PC**2 / math.cos(math.radians(INCLINATION))
    return float(np.sum((spline(y, x, grid=False) * pc2)[inside]))


def test_atomic_mass_and_star_formation_within_three_degrees(out, record_property) -> None:
    # SOURCES.md: M_HI = 2.42e8 Msun (hydrogen) and SFR = 0.144 to 0.154 Msun/yr within 3 deg, as
    # read. The beam of 1.11 deg then carries a percent or two over the edge of that circle.
    hydrogen = within(out, "sigma_atom", 3.0) / 1.36
    sfr = within(out, "sigma_sfr", 3.0) * 1e-6
    record_property("M_HI within 3 deg [Msun]", hydrogen)
    record_property("SFR within 3 deg [Msun/yr]", sfr)
    print(f"M_HI {hydrogen:.4g} Msun, SFR {sfr:.4g} Msun/yr within 3 deg")
    assert hydrogen == pytest.approx(2.42e8, rel=0.015)
    assert 0.144 * 0.98 < sfr < 0.154 * 1.02


def test_input_is_read_only(out) -> None:
    """Nothing was written beside the maps."""
    assert sorted(file.name for file in LMC.iterdir()) == [
        "ha.fits",
        "nhi.fits",
        "smoothed_24um.fits",
    ]

"""The traps that cost observers factors of 4, 10 or 1000 on maps: none passes silently.

One test for each, end to end where it can be; finer cases are in the rooms' own tests. The size
of each error is what the usual mistake would give (common practice where no source is named).
"""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from astropy.io import fits
from helpers import (
    ARCSEC2_SR,
    CENTRE,
    elliptical_beam,
    make_hdu,
    make_request,
    make_sky,
    make_wcs,
    open_source,
    read_map,
    round_beam,
)
from scipy import ndimage

from kspipe.core.errors import BeamError, GridError, MapError
from kspipe.kernels.noise import NoiseTerm
from kspipe.maps import NoiseRequest
from kspipe.matching import Grid, match_map, measure_noise

SIDE = 81
SHAPE = (SIDE, SIDE)
Y, X = np.indices(SHAPE) - (SIDE - 1) / 2


def source(fwhm_pix: float, x: float = 0.3, y: float = -0.4) -> np.ndarray:
    """A round Gaussian of unit peak, off the centre of a pixel."""
    return np.exp(-4 * math.log(2) * ((X - x) ** 2 + (Y - y) ** 2) / fwhm_pix**2)


def grid(n: int, pixel: float) -> Grid:
    return Grid(make_wcs((n, n), pixel), (n, n), pixel, CENTRE)


def total(sky) -> float:
    """Sum over sky area [unit sr]; one arcsecond is the same everywhere on these small fields."""
    return (
        float(np.nansum(sky.value))
        * abs(np.linalg.det(sky.wcs.pixel_scale_matrix))
        * (math.radians(1) ** 2)
    )


def refused(hdu, why: str, kind: type[MapError] = MapError, **changes) -> None:
    """The message says which map, what, and what to type or do."""
    with pytest.raises(kind, match=rf"(?s)maps\.probe.*{why}"):
        read_map(hdu, **changes)


# --- Units ---------------------------------------------------------------------------------------


def test_a_slash_before_two_units() -> None:
    """`Jy/beam km/s` is (Jy/beam) km/s: the generic parser puts the velocity below the line."""
    image = source(6.0)
    here = {"velocity_kms": 640.0, "zeros": "flux"}
    kelvin = read_map(make_hdu(image, unit="K km/s"), **here)
    jansky = read_map(make_hdu(image, unit="Jy/beam km/s", beam_arcsec=8.0), **here)
    # T = 1.22212e6 S / (nu^2 theta^2) (Rayleigh-Jeans; GHz, arcsec, Jy/beam).
    nu = 1.420405751768 / (1 + 640.0 / 299792.458)
    np.testing.assert_allclose(jansky.value / kelvin.value, 1.22212e6 / (nu**2 * 64), rtol=2e-6)


@pytest.mark.parametrize("unit", [None, "", "K", "counts", "DN", "furlong"])
def test_a_unit_that_does_not_say_enough(unit) -> None:
    refused(make_hdu(source(6.0), unit=unit), "unit", zeros="flux")


def test_metres_per_second_are_a_thousandth() -> None:
    here = {"velocity_kms": 640.0, "zeros": "flux"}
    kilo = read_map(make_hdu(source(6.0), unit="Jy/beam km/s"), **here)
    metres = read_map(make_hdu(1000 * source(6.0), unit="JY/BEAM*M/S"), **here)
    np.testing.assert_allclose(metres.value, kilo.value, rtol=1e-12)


def test_flux_per_beam_survives_another_beam() -> None:
    """Kept per beam it would be a factor of 4 low after 8 to 16 arcsec."""
    hdu = make_hdu(source(4.0), unit="Jy/beam", beam_arcsec=8.0)
    sky = read_map(hdu, tracer="24um", zeros="flux")
    matched = match_map(sky, round_beam(16.0), grid(41, 4.0))
    assert total(matched) * 1e6 == pytest.approx(1.0, rel=1e-3)  # 1 Jy, in MJy


def test_a_beam_is_not_the_square_of_its_width() -> None:
    """1 Jy/beam everywhere is 1 / (1.13309 FWHM^2) Jy per arcsec2, not 1 / FWHM^2."""
    sky = read_map(make_hdu(np.ones(SHAPE), unit="Jy/beam"), tracer="24um")
    beam_sr = math.pi / (4 * math.log(2)) * 64 * ARCSEC2_SR
    np.testing.assert_allclose(sky.value, 1e-6 / beam_sr, rtol=1e-9)


def test_flux_per_pixel_is_no_surface_brightness() -> None:
    """Regridded as it is, 2 to 6 arcsec pixels would lose a factor of 9."""
    hdu = make_hdu(source(4.0) / source(4.0).sum(), unit="Jy/pixel", beam_arcsec=8.0)
    matched = match_map(read_map(hdu, tracer="24um", zeros="flux"), round_beam(18.0), grid(27, 6.0))
    assert total(matched) * 1e6 == pytest.approx(1.0, rel=1e-3)


# --- Noise ---------------------------------------------------------------------------------------


def test_an_error_map_is_no_map() -> None:
    """White noise of one, smoothed: smoothing the error map itself would leave it at one."""
    draws = []
    rng = np.random.default_rng(1)
    term = NoiseTerm("probe", np.ones(SHAPE), np.zeros((2, 2)))
    for _ in range(40):
        sky = make_sky(
            rng.normal(size=SHAPE),
            wcs=make_wcs(SHAPE, 2.0),
            beam_arcsec2=round_beam(8.0),
            noise=(term,),
        )
        draws.append(match_map(sky, round_beam(16.0), grid(15, 8.0)))
    scatter = np.std([one.value for one in draws])
    stated = float(np.mean(draws[0].error))
    assert stated == pytest.approx(scatter, rel=0.03)
    assert stated < 0.2


def test_a_variance_is_no_error() -> None:
    """Stated as what it is, it gives the same error; taken for sigma it would be 4 for 2."""
    variance = fits.PrimaryHDU(np.full(SHAPE, 4.0), make_hdu(np.ones(SHAPE)).header)
    noise = NoiseRequest("file", file=Path("noise.fits"), stated="variance")
    sky = read_map(make_hdu(np.ones(SHAPE)), noise=noise, noise_hdu=variance)
    np.testing.assert_allclose(sky.error, 2.0)


@pytest.mark.parametrize("bad", [0.0, -1.0])
def test_a_sigma_that_cannot_be(bad) -> None:
    sigma = np.ones(SHAPE)
    sigma[3, 3] = bad
    hdu = fits.PrimaryHDU(sigma, make_hdu(np.ones(SHAPE)).header)
    with pytest.raises(MapError, match=r"maps\.probe\.noise"):
        read_map(
            make_hdu(np.ones(SHAPE)),
            noise=NoiseRequest("file", file=Path("noise.fits"), stated="sigma"),
            noise_hdu=hdu,
        )


# --- Smoothing and regridding ----------------------------------------------------------------


def test_blanks_and_edges_are_no_zeros() -> None:
    """A flat sky stays flat to its edge; filled with zeros it would be half there."""
    value = np.full(SHAPE, 3.0)
    value[:, :30] = np.nan
    value[50:56, 50:56] = np.nan
    sky = make_sky(value, wcs=make_wcs(SHAPE, 2.0), beam_arcsec2=round_beam(8.0))
    matched = match_map(sky, round_beam(16.0), grid(41, 4.0))
    seen = np.isfinite(matched.value)
    np.testing.assert_allclose(matched.value[seen], 3.0, rtol=1e-6)
    assert matched.coverage[seen].min() >= 0.5
    assert not seen[:, :10].any()


def test_a_compact_source_on_coarse_pixels() -> None:
    """Three pixels wide onto pixels four times as coarse: interpolation gives 0.74 to 1.30."""
    for at in ((0.3, -0.4), (1.7, 0.9), (-1.2, 1.9)):
        sky = make_sky(source(3.0, *at), wcs=make_wcs(SHAPE, 2.0), beam_arcsec2=round_beam(6.0))
        matched = match_map(sky, round_beam(24.0), grid(21, 8.0))
        assert total(matched) == pytest.approx(total(sky), rel=1e-3)


def test_a_kernel_narrower_than_a_pixel() -> None:
    """13.4 to 15 arcsec on 4 arcsec pixels: a sampled kernel scatters by 1.2 %."""
    sky = make_sky(source(13.4 / 4), wcs=make_wcs(SHAPE, 4.0), beam_arcsec2=round_beam(13.4))
    matched = match_map(sky, round_beam(15.0), grid(25, 5.0))
    y, x = np.indices((25, 25)) - 12.0
    r2 = (5 * x - 4 * 0.3) ** 2 + (5 * y + 4 * 0.4) ** 2
    truth = (13.4 / 15) ** 2 * np.exp(-4 * math.log(2) * r2 / 15.0**2)
    np.testing.assert_allclose(matched.value, truth, atol=1e-3 * truth.max())


def test_a_beam_is_never_sharpened() -> None:
    sky = make_sky(source(5.0), wcs=make_wcs(SHAPE, 2.0), beam_arcsec2=round_beam(10.0))
    with pytest.raises(BeamError, match=r"maps\.probe.*wider than the target"):
        match_map(sky, round_beam(9.0), grid(21, 4.0))


# --- Beams ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("cards", "why"),
    [
        ({"BMAJ": 8.0, "BMIN": 8.0}, "BMAJ"),  # arcseconds where degrees count
        ({"BMAJ": None, "BMIN": None, "BPA": None}, "no beam|no BMAJ"),
        ({"BMAJ": -8 / 3600}, "BMAJ"),
        ({"BMAJ": 0.5 / 3600, "BMIN": 0.5 / 3600}, "pixel"),  # a quarter of a pixel
    ],
)
def test_beam_cards_that_cannot_be(cards, why) -> None:
    refused(make_hdu(np.ones(SHAPE), beam_arcsec=8.0, cards=cards), why)


def test_beam_cards_that_contradict_history() -> None:
    hdu = make_hdu(np.ones(SHAPE), beam_arcsec=8.0)
    hdu.header.add_history("AIPS   CLEAN BMAJ=  4.0000E-03 BMIN=  3.0000E-03 BPA=  10.00")
    refused(hdu, "HISTORY", BeamError)


def test_without_an_angle_a_long_beam_asks() -> None:
    """BPA = 0 by default would turn a beam by any angle; a round one needs none."""
    turned = make_hdu(np.ones(SHAPE), beam_arcsec=(12.0, 8.0, 30.0), cards={"BPA": None})
    refused(turned, "BPA", BeamError)
    read_map(make_hdu(np.ones(SHAPE), beam_arcsec=8.0, cards={"BPA": None}))


# --- Coordinates -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("cards", "drop", "why"),
    [
        ({}, ("CDELT1", "CDELT2"), "pixel size"),  # pixels of a degree by the standard's default
        ({"CDELT1": -2.0, "CDELT2": 2.0}, (), "7200|7.2e.03"),  # arcseconds: 3600 times too large
        (
            {"CD1_1": -2 / 3600, "CD1_2": 0.0, "CD2_1": 0.0, "CD2_2": 2 / 3600}
            | {"CDELT1": -5 / 3600, "CDELT2": 5 / 3600},
            ("PC1_1", "PC2_2"),
            "CD matrix",
        ),
        ({"CTYPE1": "DEC--TAN", "CTYPE2": "RA---TAN"}, (), "axes"),
        ({}, ("CTYPE1", "CTYPE2"), "sky coordinates"),
    ],
    ids=["no CDELT", "CUNIT", "CD against CDELT", "axes", "no CTYPE"],
)
def test_coordinates_that_mislead(cards, drop, why) -> None:
    hdu = make_hdu(np.ones(SHAPE))
    for key in drop:
        hdu.header.remove(key, ignore_missing=True)
    hdu.header.update(cards)
    refused(hdu, why, GridError)


@pytest.mark.parametrize("frame", ["FK4", "Galactic", "mirrored"])
def test_another_frame_or_parity_is_the_same_sky(frame) -> None:
    """A source stays where it is: B1950 taken for J2000 would move it by half a degree."""

    at = SkyCoord(*CENTRE, unit="deg")
    if frame == "FK4":
        there = at.transform_to("fk4")
        wcs = make_wcs(SHAPE, 2.0, centre=(there.ra.deg, there.dec.deg))
        wcs.wcs.radesys, wcs.wcs.equinox = "FK4", 1950.0
    elif frame == "Galactic":
        wcs = make_wcs(
            SHAPE, 2.0, centre=(at.galactic.l.deg, at.galactic.b.deg), axes=("GLON", "GLAT")
        )
    else:
        wcs = make_wcs(SHAPE, 2.0, flip=True)
    hdu = make_hdu(source(5.0, 0.0, 0.0), wcs=wcs, beam_arcsec=10.0)
    matched = match_map(read_map(hdu, zeros="flux"), round_beam(16.0), grid(21, 4.0))
    peak = np.unravel_index(np.nanargmax(matched.value), (21, 21))
    assert peak == (10, 10)


# --- Files ---------------------------------------------------------------------------------------


def test_four_axes_on_two(tmp_path) -> None:
    """A header of four axes on two-dimensional data is read by its celestial part."""
    hdu = make_hdu(source(5.0))
    hdu.header["WCSAXES"] = 4
    hdu.header.update({"CTYPE3": "FREQ", "CRVAL3": 1.42e9, "CTYPE4": "STOKES", "CRVAL4": 1.0})
    assert read_map(hdu, zeros="flux").value.shape == SHAPE
    cube = make_hdu(np.ones((1, 1, *SHAPE)), wcs=make_wcs(SHAPE, 2.0))
    assert read_map(cube).value.shape == SHAPE


def test_an_empty_primary_and_several_images(tmp_path) -> None:
    header = make_hdu(np.ones(SHAPE)).header
    one = fits.HDUList([fits.PrimaryHDU(), fits.ImageHDU(2 * np.ones(SHAPE), header)])
    one.writeto(tmp_path / "one.fits")
    np.testing.assert_allclose(read_map(tmp_path / "one.fits").value, 2.0)
    several = [fits.ImageHDU(k * np.ones(SHAPE), header, name=f"P{k}") for k in (1, 2)]
    fits.HDUList([fits.PrimaryHDU(), *several]).writeto(tmp_path / "several.fits")
    with pytest.raises(MapError, match=r"several\.fits.*P1.*P2.*hdu = "):
        read_map(tmp_path / "several.fits")


def test_zeros_that_may_be_blanks() -> None:
    value = np.ones(SHAPE)
    value[:20] = 0.0
    refused(make_hdu(value), 'zeros = "blank" or "flux"')


def test_integer_blanks(tmp_path) -> None:
    value = np.ones(SHAPE, dtype=np.int16)
    value[:20] = -32768
    hdu = make_hdu(value)
    hdu.header["BLANK"] = -32768
    hdu.writeto(tmp_path / "integer.fits")
    assert np.isnan(read_map(tmp_path / "integer.fits").value[:20]).all()


def test_a_masked_map_shows_no_noise() -> None:
    """Moment maps clipped to zero: the scatter of their blank sky is nothing."""

    value = np.where(source(20.0) > 0.1, source(20.0), 0.0)
    sky = read_map(make_hdu(value), zeros="flux")
    with pytest.raises(MapError, match="exactly zero"):
        measure_noise(sky, np.hypot(X, Y) > 25, correlated=True)


def test_a_noise_that_varies_is_not_one_number() -> None:
    """Noise of a primary beam, as it is shaped, through smoothing."""
    rng = np.random.default_rng(4)
    sigma = 1 + np.hypot(X, Y) / 20
    white = ndimage.gaussian_filter(rng.normal(size=SHAPE), 0) * sigma
    term = NoiseTerm("probe", sigma, np.zeros((2, 2)))
    sky = make_sky(
        white, wcs=make_wcs(SHAPE, 2.0), beam_arcsec2=elliptical_beam(8, 6, 20), noise=(term,)
    )
    error = match_map(sky, round_beam(16.0), grid(15, 8.0)).error
    assert error[7, 0] > 2 * error[7, 7]


def test_requests_name_their_map() -> None:
    assert make_request().name == "probe"
    with pytest.raises(MapError, match=r"maps\.probe"):
        open_source(make_hdu(np.ones(SHAPE), unit="furlong"))

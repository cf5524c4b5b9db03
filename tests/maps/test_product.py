"""Product files: what is written comes back, and other programs can read it."""

from __future__ import annotations

import warnings
from pathlib import Path

import astropy.units as u
import numpy as np
import pytest
from astropy.io import fits
from astropy.nddata import CCDData
from astropy.wcs import WCS
from helpers import assert_maps_close, elliptical_beam, make_sky, make_wcs
from radio_beam import Beam

from kspipe.maps.product import FITS_UNITS, read_image, read_matched, write_matched, write_product
from kspipe.maps.skymap import CommonError, Flag, NoiseTerm, SkyMap
from kspipe.stages.reduce import PRODUCT_UNITS

SHAPE = (30, 40)
BEAM = elliptical_beam(15.0, 12.0, 40.0)


@pytest.fixture(scope="module")
def sky() -> SkyMap:
    rng = np.random.default_rng(8)
    value = rng.normal(1.0, 0.3, SHAPE)
    value[:4] = np.nan
    terms = (
        NoiseTerm("hi", rng.uniform(0.1, 0.2, SHAPE), elliptical_beam(13, 10, 20)),
        # Signed: a derivative may be negative.
        NoiseTerm("sky", rng.uniform(-0.2, 0.2, SHAPE), np.zeros((2, 2))),
    )
    plain = make_sky(
        value, wcs=make_wcs(SHAPE, 5.0), beam_arcsec2=BEAM, unit="K km/s", noise=terms, name="hi"
    )
    flags = np.where(np.indices(SHAPE)[1] < 5, int(Flag.LOW_COVERAGE), 0).astype(np.int32)
    return plain.with_step(
        "one step",
        tracer="HI",
        flags=flags,
        common=CommonError(0.05, 0.02),
        coverage=rng.uniform(0.5, 1.0, SHAPE),
    )


@pytest.fixture(scope="module")
def file(sky, tmp_path_factory) -> Path:
    path = tmp_path_factory.mktemp("matched") / "hi.fits"
    write_matched(path, sky)
    return path


def test_a_matched_map_survives_the_file(sky, file) -> None:
    back = read_matched(file)
    single = 2.0**-24  # rounding to 24 bits
    assert (back.name, back.tracer, back.unit) == ("hi", "HI", "K km/s")
    assert_maps_close(back.value, sky.value, rtol=single)
    assert_maps_close(back.coverage, sky.coverage, rtol=single)
    np.testing.assert_array_equal(back.flags, sky.flags)
    assert back.flags.dtype.kind == "i"
    np.testing.assert_allclose(back.beam_arcsec2, BEAM, rtol=1e-9)
    assert [term.source for term in back.noise] == ["hi", "sky"]
    for mine, theirs in zip(back.noise, sky.noise, strict=True):
        assert_maps_close(mine.sigma, theirs.sigma, rtol=single)
        np.testing.assert_allclose(
            mine.correlation_arcsec2, theirs.correlation_arcsec2, rtol=1e-9, atol=1e-12
        )
    assert back.common == sky.common
    grid = np.array([[0.0, 0.0], [39.0, 29.0]])
    np.testing.assert_allclose(
        back.wcs.all_pix2world(grid, 0), sky.wcs.all_pix2world(grid, 0), rtol=1e-12
    )


def test_writing_twice_gives_the_same_bytes(sky, file, tmp_path) -> None:
    write_matched(tmp_path / "again.fits", sky)
    assert (tmp_path / "again.fits").read_bytes() == file.read_bytes()


def test_writing_again_what_was_read_gives_the_same_numbers(file, tmp_path) -> None:
    write_matched(tmp_path / "copy.fits", read_matched(file))
    first, second = read_matched(file), read_matched(tmp_path / "copy.fits")
    assert_maps_close(second.value, first.value, rtol=0)
    assert_maps_close(second.error, first.error, rtol=0)


def test_other_readers_agree(sky, file) -> None:
    """Beam by radio_beam, unit and coordinates by astropy's CCDData, all extensions placed."""
    header = fits.getheader(file)
    beam = Beam.from_fits_header(header)
    assert beam.major.to_value("arcsec") == pytest.approx(15.0)
    assert beam.minor.to_value("arcsec") == pytest.approx(12.0)
    assert beam.pa.to_value("deg") == pytest.approx(40.0)
    image = CCDData.read(file)
    assert image.unit == u.K * u.km / u.s
    with fits.open(file) as hdus:
        assert [hdu.name for hdu in hdus[1:]] == ["NOISE1", "NOISE2", "COVERAGE", "FLAGS"]
        for hdu in hdus[1:]:
            np.testing.assert_allclose(WCS(hdu.header).wcs.crval, sky.wcs.wcs.crval)
            assert hdu.shape == SHAPE


def test_the_file_passes_the_standard(file) -> None:
    # FITS standard 4.0, as far as astropy verifies it.
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        with fits.open(file) as hdus:
            hdus.verify("exception")


def test_bits_of_flags_carry_their_meaning(file) -> None:
    header = fits.getheader(file, "FLAGS")
    meanings = {header[key]: int(key.removeprefix("FLAG")) for key in header["FLAG*"]}
    assert meanings == Flag.meanings()
    # Powers of two, in 32 bits.
    assert all(bit & (bit - 1) == 0 and bit < 2**31 for bit in meanings.values())


@pytest.mark.parametrize("unit", [*FITS_UNITS.values(), *PRODUCT_UNITS.values(), "kpc"])
def test_every_unit_is_valid_fits(unit) -> None:
    parsed = u.Unit(unit, format="fits")
    assert (parsed == u.dimensionless_unscaled) == (unit == "")


@pytest.mark.parametrize(("canonical", "unit"), FITS_UNITS.items())
def test_fits_units_mean_the_canonical_ones(canonical, unit) -> None:
    expected = {
        "K km/s": u.K * u.km / u.s,
        "MJy/sr": u.MJy / u.sr,
        "erg/s/cm2/sr": u.erg / u.s / u.cm**2 / u.sr,
        "Msun/pc2": u.Msun / u.pc**2,
        "Msun/yr/kpc2": u.Msun / u.yr / u.kpc**2,
    }[canonical]
    assert u.Unit(unit, format="fits") == expected


def test_no_clock_in_products(file) -> None:
    with fits.open(file) as hdus:
        for hdu in hdus:
            clocks = [key for key in hdu.header if "DATE" in key or "MJD" in key]
            assert clocks == []


def test_history_is_in_the_file_in_order(sky, tmp_path) -> None:
    steps = [f"step {k} " + "word " * 30 for k in range(3)]
    for step in steps:
        sky = sky.with_step(step)
    write_matched(tmp_path / "long.fits", sky)
    lines = [str(line) for line in fits.getheader(tmp_path / "long.fits")["HISTORY"]]
    joined = " ".join(" ".join(lines).split())
    assert joined == " ".join(" ".join(sky.history).split())
    assert max(map(len, lines)) <= 72


@pytest.mark.parametrize("entry", ["8.3 ± 0.4 Mpc", "/data/galaxié/µ.fits", "tab\tand\nline"])
def test_history_of_any_text_can_be_written(sky, tmp_path, entry) -> None:
    """A FITS card holds printable ASCII only: what a path or a recipe holds must not stop it."""
    write_matched(tmp_path / "text.fits", sky.with_step(f"read {entry}"))
    assert "read" in str(fits.getheader(tmp_path / "text.fits")["HISTORY"])


def test_a_path_of_one_long_word_can_be_written(sky, tmp_path) -> None:
    long = "/" + "x" * 300
    write_matched(tmp_path / "long.fits", sky.with_step(f"read {long}"))
    lines = fits.getheader(tmp_path / "long.fits")["HISTORY"]
    assert "x" * 300 in "".join(str(line).strip() for line in lines)


def test_one_image_of_a_product(tmp_path) -> None:
    value = np.random.default_rng(2).normal(size=SHAPE)
    write_product(
        tmp_path / "p.fits",
        value,
        "Gyr",
        make_wcs(SHAPE, 5.0),
        BEAM,
        extensions={"ERROR": (2 * value, "Gyr")},
        history=[],
        cards={"ANSWER": (42, "a card")},
    )
    primary, header = read_image(tmp_path / "p.fits")
    error, _ = read_image(tmp_path / "p.fits", "ERROR")
    assert_maps_close(primary, value, rtol=1e-7)
    assert_maps_close(error, 2 * value, rtol=1e-7)
    assert (header["BUNIT"], header["ANSWER"]) == ("Gyr", 42)


def test_an_existing_file_is_not_overwritten(file, sky) -> None:
    with pytest.raises(OSError, match="exists"):
        write_matched(file, sky)

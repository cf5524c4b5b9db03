"""The beam of a map: cards, HISTORY, tables and the recipe, against radio_beam on real headers."""

from __future__ import annotations

import math
import warnings
from pathlib import Path
from typing import Any

import astropy.units as u
import numpy as np
import pytest
import radio_beam
from astropy.io import fits
from helpers import elliptical_beam, make_hdu, open_source, read_map, round_beam
from hypothesis import given, settings
from hypothesis import strategies as st

from kspipe.core.errors import BeamError
from kspipe.maps.beams import Beam, beam_difference, beam_table, find_beam, table_beam
from kspipe.maps.product import write_product
from kspipe.recipe.map_table import MapTable

fixed = settings(derandomize=True, deadline=None, max_examples=80)
# Headers and tables as telescopes left them, which radio_beam ships with its tests.
DATA = Path(radio_beam.__file__).parent / "tests" / "data"


def real(name: str) -> Path:
    if not (DATA / name).exists():
        pytest.skip(f"radio_beam does not ship {name} here")
    return DATA / name


def found_in(header: fits.Header, table: Any = None, typed: Any = None) -> Beam | None:
    return find_beam(header, table, typed=typed, name="probe", where="maps.probe, map.fits")


def assert_is(beam: Beam | None, expected: radio_beam.Beam, rel: float = 1e-9) -> None:
    assert beam is not None
    major, minor = expected.major.to_value("arcsec"), expected.minor.to_value("arcsec")
    assert (beam.major_arcsec, beam.minor_arcsec) == pytest.approx((major, minor), rel=rel)
    turn = beam.pa_deg - expected.pa.to_value("deg")
    assert math.sin(math.radians(turn)) == pytest.approx(0.0, abs=rel + 1e-12)


# --- Real headers ------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("name", "origin"),
    [
        ("ngc0925_na.fits.gz", "header HISTORY"),  # CLEAN lines, in degrees
        ("m83.moment0.fits.gz", "header HISTORY"),  # three restorations, in arcsec
        ("NGC0925.bima.mmom0.fits.gz", "header BMAJ, BMIN, BPA"),  # and the same in HISTORY
    ],
)
def test_real_headers_are_read_as_radio_beam_reads_them(name, origin) -> None:
    header = fits.getheader(real(name))
    beam = found_in(header)
    assert_is(beam, radio_beam.Beam.from_fits_header(header))
    assert beam.origin == origin


def test_a_line_about_another_image_is_not_taken() -> None:
    """A real HISTORY where a line on a convolution holds BMAJ in arcsec, before CLEAN's degrees."""
    header = fits.Header.fromtextfile(real("header_aips.hdr"))
    lines = [str(line) for line in header["HISTORY"] if "BMAJ=" in str(line)]
    assert any("BMAJ=  2.9700" in line for line in lines)
    assert_is(found_in(header), radio_beam.Beam.from_fits_header(header))
    # Also where it comes last.
    header.add_history("CONVL BMAJ=  2.9700 BMIN=  1.6500 BPA= -15.1/Output beam")
    assert found_in(header).major_arcsec == pytest.approx(8.2477e-4 * 3600)


def test_a_real_table_of_many_channels() -> None:
    with fits.open(real("m33_beams_bintable.fits.gz")) as hdus:
        beam = found_in(fits.Header(), beam_table(hdus))
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            expected = radio_beam.Beam.from_fits_bintable(hdus[1])
    # Mean of covariances against mean of axes: they differ by the spread squared, 1e-7.
    assert_is(beam, expected, rel=1e-5)
    assert beam.origin == "table BEAMS, mean of 1178 rows"


def test_the_table_of_radio_beams_own_tests() -> None:
    # radio_beam 0.3.10, tests/test_beam.py, test_bintable: 0.19999751 x 0.10002226, 45.10050.
    rows = ([0.2, 0.2001, 0.1999, 0.19999], [0.1, 0.1001, 0.09999, 0.099999])
    beam = table_beam(rows_of(*rows, [45.1, 45.101, 45.102, 45.099]), "m")
    assert beam.major_arcsec == pytest.approx(0.19999751, rel=1e-5)
    assert beam.minor_arcsec == pytest.approx(0.10002226, rel=1e-5)
    assert beam.pa_deg == pytest.approx(45.1005, abs=1e-4)


# --- HISTORY -----------------------------------------------------------------------------------


def with_history(*lines: str, **cards: Any) -> fits.Header:
    header = fits.Header(cards)
    for line in lines:
        header.add_history(line)
    return header


@pytest.mark.parametrize(
    "line",
    [
        "TASK   CLEAN BMAJ=  1.2000E-03 BMIN=  9.0000E-04 BPA=  35.00",
        "IMAGE CLEAN BMAJ=1.2D-03 BMIN=9.0D-04 BPA=35.0 NITER= 1000",
        "CLEAN BMAJ = 0.0012 BMIN = .0009 BPA = -145.0",
        "> restoration: 4.32 by 3.24 (arcsec) at pa 35 (deg)",
        "RESTOR: Beam =  4.320E+00 x  3.240E+00 arcsec, pa =  3.500E+01 degrees",
    ],
)
def test_wordings_of_history(line) -> None:
    # 0.0012 deg = 4.32 arcsec, 0.0009 deg = 3.24 arcsec.
    assert_is(found_in(with_history("loaded", line, "written")), reference(4.32, 3.24, 35.0))


def test_the_last_of_history_counts() -> None:
    lines = [f"TASK CLEAN BMAJ= {a:.4E} BMIN= 9.0E-04 BPA= 0.0" for a in (2e-3, 3e-3, 1e-3)]
    assert found_in(with_history(*lines)).major_arcsec == pytest.approx(3.6)
    # An image that was not restored has zeros: they are no beam.
    zeros = "TASK CLEAN BMAJ= 0.0000E+00 BMIN= 0.0000E+00 BPA= 0.00"
    assert found_in(with_history(*lines, zeros)).major_arcsec == pytest.approx(3.6)
    assert found_in(with_history(zeros)) is None
    assert found_in(with_history("CLEAN BMAJ and BMIN not known", "BPA= 3")) is None
    assert found_in(fits.Header()) is None


def test_what_kspipe_writes_is_not_mistaken_for_a_restoring_beam(tmp_path) -> None:
    sky = read_map(
        make_hdu(np.ones((40, 50)), beam_arcsec=(12.0, 8.0, 30.0)), beam=(9.0, 7.0, 60.0)
    )
    file = tmp_path / "product.fits"
    write_product(
        file, sky.value, "K km s-1", sky.wcs, round_beam(15.0), extensions={}, history=sky.history
    )
    assert any("12 x 8" in str(line) for line in fits.getheader(file)["HISTORY"])
    assert open_source(file).beam.major_arcsec == pytest.approx(15.0)


# --- Tables ------------------------------------------------------------------------------------


def rows_of(major, minor, angle, units=("arcsec", "arcsec", "deg")) -> Any:
    """Table BEAMS as a file holds it, read back."""
    columns = [
        fits.Column(name, "E", unit=unit, array=np.atleast_1d(values).astype(np.float32))
        for name, unit, values in zip(
            ("BMAJ", "BMIN", "BPA"), units, (major, minor, angle), strict=True
        )
    ]
    return beam_table(fits.HDUList([fits.BinTableHDU.from_columns(columns, name="BEAMS")]))


def reference(major: float, minor: float, pa: float) -> radio_beam.Beam:
    return radio_beam.Beam(major * u.arcsec, minor * u.arcsec, pa * u.deg)


@pytest.mark.parametrize(
    ("factor", "units"),
    [
        (1.0, ("arcsec", "arcsec", "deg")),
        (1 / 3600, ("deg", "deg", "deg")),
        (1 / 3600, ("DEG", "deg", None)),
        (1 / 60, ("arcmin", "arcmin", "deg")),
    ],
)
def test_units_of_a_table(factor, units) -> None:
    beam = table_beam(rows_of(12.0 * factor, 8.0 * factor, 30.0, units), "m")
    assert_is(beam, reference(12.0, 8.0, 30.0), rel=1e-6)
    assert beam.origin == "table BEAMS"


@pytest.mark.parametrize(
    ("units", "why"),
    [((None, "arcsec", "deg"), "unit of BMAJ"), (("Jy", "arcsec", "deg"), "'Jy', not an angle")],
)
def test_a_table_without_units_is_refused(units, why) -> None:
    # 12 arcsec or 12 degrees: it is not guessed.
    with pytest.raises(BeamError, match=why) as caught:
        table_beam(rows_of(12.0, 8.0, 30.0, units), "maps.probe")
    assert 'beam = "' in str(caught.value)


def test_a_table_without_a_column_is_refused() -> None:
    table = dict(rows_of(12.0, 8.0, 30.0))
    del table["BMIN"]
    with pytest.raises(BeamError, match="no column BMIN"):
        table_beam(table, "maps.probe")


def test_channels_of_different_beams_are_refused() -> None:
    major = np.array([12.0, 12.1, 12.5])
    with pytest.raises(BeamError, match=r"3 beams from 12 x 8 .* to 12\.5 x 8 .*channels"):
        table_beam(rows_of(major, [8.0] * 3, [30.0] * 3), "maps.probe")
    # The same axes turned are another beam, too.
    with pytest.raises(BeamError, match="channels"):
        table_beam(rows_of([12.0] * 2, [8.0] * 2, [30.0, 40.0]), "maps.probe")
    # A spread of 1 % is one beam: its mean.
    mean = table_beam(rows_of([12.0, 12.1], [8.0] * 2, [30.0] * 2), "maps.probe")
    assert mean.major_arcsec == pytest.approx(12.05, rel=1e-4)


def test_channels_without_a_beam_are_left_out() -> None:
    rows = rows_of([0.0, 12.0, np.nan, 12.0], [0.0, 8.0, np.nan, 8.0], [0.0, 30.0, 0.0, 30.0])
    assert_is(table_beam(rows, "m"), reference(12.0, 8.0, 30.0), rel=1e-6)
    with pytest.raises(BeamError, match="holds no beam"):
        table_beam(rows_of([0.0], [0.0], [0.0]), "m")


def test_angles_on_both_sides_of_north_have_north_as_their_mean() -> None:
    beam = table_beam(rows_of([12.0] * 2, [10.0] * 2, [179.0, 1.0]), "m")
    assert math.sin(math.radians(beam.pa_deg)) == pytest.approx(0.0, abs=1e-6)


@pytest.mark.parametrize("compressed", [False, True])
def test_a_file_with_image_and_table(tmp_path, compressed) -> None:
    image = make_hdu(np.ones((40, 50)), beam_arcsec=None)
    columns = [
        fits.Column(name, "E", unit=unit, array=[value])
        for name, unit, value in (("BMAJ", "arcsec", 12), ("BMIN", "arcsec", 8), ("BPA", "deg", 30))
    ]
    table = fits.BinTableHDU.from_columns(columns, name="BEAMS")
    file = tmp_path / "cube_moment.fits"
    hdus = [image, table]
    if compressed:
        packed = fits.CompImageHDU(image.data, image.header, compression_type="GZIP_2")
        hdus = [fits.PrimaryHDU(), packed, table]
    fits.HDUList(hdus).writeto(file)
    source = open_source(file)
    np.testing.assert_allclose(source.beam_arcsec2, elliptical_beam(12, 8, 30), rtol=1e-5)
    assert source.beam.origin == "table BEAMS"
    assert "beam 12 x 8 arcsec, pa 30 deg from table BEAMS" in read_map(file).history


# --- Conflicts and the recipe ------------------------------------------------------------------

CARDS = {"BMAJ": 12 / 3600, "BMIN": 8 / 3600, "BPA": 30.0}


def clean(major: float, minor: float, pa: float) -> str:
    return f"CLEAN BMAJ= {major / 3600:.6E} BMIN= {minor / 3600:.6E} BPA= {pa:.3f}"


def as_typed(text: str) -> tuple[float, float, float]:
    """What the recipe makes of a beam that a message says to type."""
    table = MapTable(tracer="HI", file="map.fits", noise="measure", beam=text)
    beam = table.request("probe").beam
    assert beam is not None
    return beam


@pytest.mark.parametrize("other", [(12.3, 8.0, 30.0), (12.0, 7.8, 30.0), (12.0, 8.0, 36.0)])
@pytest.mark.parametrize("by", ["HISTORY", "table"])
def test_what_contradicts_itself_stops(other, by) -> None:
    header = with_history(*([clean(*other)] if by == "HISTORY" else []), **CARDS)
    table = rows_of(*other) if by == "table" else None
    with pytest.raises(BeamError) as caught:
        found_in(header, table)
    message = str(caught.value)
    assert "12 x 8 arcsec, pa 30 deg by header BMAJ, BMIN, BPA" in message
    assert by in message
    fix = message.split("type maps.probe.beam = ")[1]
    first, second = (text.strip('"') for text in fix.split(" or "))
    assert as_typed(first) == pytest.approx((12.0, 8.0, 30.0))
    assert as_typed(second) == pytest.approx(other)
    # Once typed it is used.
    assert found_in(header, table, typed=as_typed(second)).major_arcsec == pytest.approx(other[0])


def test_table_and_history_are_held_against_each_other() -> None:
    with pytest.raises(
        BeamError, match=r"12 x 8 .* by table BEAMS, but 6 arcsec by header HISTORY"
    ):
        found_in(with_history(clean(6, 6, 0)), rows_of(12.0, 8.0, 30.0))


@pytest.mark.parametrize("other", [(12.1, 8.0, 30.0), (12.0, 8.0, 30.4), (12.0, 8.0, -150.0)])
def test_what_agrees_to_one_per_cent_is_one_beam(other) -> None:
    beam = found_in(with_history(clean(*other), **CARDS), rows_of(*other))
    assert beam.origin == "header BMAJ, BMIN, BPA"
    assert beam.major_arcsec == pytest.approx(12.0)


def test_the_recipe_wins_and_the_history_says_over_what() -> None:
    hdu = make_hdu(np.ones((40, 50)), beam_arcsec=(12.0, 8.0, 30.0))
    hdu.header.add_history(clean(10.0, 8.0, 30.0))
    sky = read_map(hdu, beam=(9.0, 7.0, 60.0))
    np.testing.assert_allclose(sky.beam_arcsec2, elliptical_beam(9, 7, 60), rtol=1e-6)
    (line,) = (line for line in sky.history if line.startswith("beam "))
    assert line == (
        "beam 9 x 7 arcsec, pa 60 deg from recipe; not used: 12 x 8 arcsec, pa 30 deg by header "
        "BMAJ, BMIN, BPA, 10 x 8 arcsec, pa 30 deg by header HISTORY"
    )


def test_a_recipe_that_agrees_with_the_header_needs_no_word() -> None:
    hdu = make_hdu(np.ones((40, 50)), beam_arcsec=(12.0, 8.0, 30.0))
    sky = read_map(hdu, beam=(12.05, 8.0, 30.0))
    assert "beam 12.05 x 8 arcsec, pa 30 deg from recipe" in sky.history


@pytest.mark.parametrize("cards", [{"BMAJ": "wide"}, {"BMAJ": -1.0}, {"BMIN": 0.0}])
def test_a_recipe_helps_where_the_header_cannot_be_read(cards) -> None:
    source = open_source(make_hdu(np.ones((40, 50)), cards=cards), beam=(9.0, 7.0, 60.0))
    assert source.beam.major_arcsec == 9.0
    assert "not used: BMAJ, BMIN, BPA are" in source.beam.story


def test_a_map_without_a_beam_is_told_where_it_was_looked_for() -> None:
    with pytest.raises(BeamError, match=r"no BMAJ, no table BEAMS, none in HISTORY.*beam = "):
        open_source(make_hdu(np.ones((40, 50)), beam_arcsec=None))


# --- How much two beams differ -----------------------------------------------------------------

axes = st.tuples(st.floats(1.0, 30.0), st.floats(0.2, 1.0), st.floats(0.0, 180.0))


def beam_of(axes: tuple[float, float, float]) -> Beam:
    return Beam(axes[0], axes[0] * axes[1], axes[2], "drawn")


@fixed
@given(first=axes, second=axes)
def test_the_difference_is_that_of_the_widths_along_all_directions(first, second) -> None:
    one, other = beam_of(first), beam_of(second)
    angles = np.radians(np.arange(0.0, 180.0, 0.05))
    along = np.stack([np.sin(angles), np.cos(angles)])
    widths = [
        np.sqrt(np.einsum("ia,ij,ja->a", along, elliptical_beam(b[0], b[0] * b[1], b[2]), along))
        for b in (first, second)
    ]
    expected = np.max(np.abs(widths[0] / widths[1] - 1.0))
    # Directions 0.05 deg apart miss the extreme by its curvature only.
    assert beam_difference(one, other) == pytest.approx(expected, rel=1e-3, abs=1e-6)


def test_differences_by_hand() -> None:
    assert beam_difference(Beam(11, 11, 0, ""), Beam(10, 10, 0, "")) == pytest.approx(0.1)
    # A quarter turn: 10 against 5 along one axis.
    assert beam_difference(Beam(10, 5, 0, ""), Beam(10, 5, 90, "")) == pytest.approx(1.0)
    # The angle of a beam that is round to a thousandth means nothing.
    assert beam_difference(Beam(10, 9.99, 0, ""), Beam(10, 9.99, 90, "")) < 0.0011
    assert beam_difference(Beam(10, 5, 0, ""), Beam(10, 5, 180, "")) == pytest.approx(0.0, abs=1e-9)

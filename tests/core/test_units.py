"""Unit strings as archives write them, against astropy's own reading of a plain notation."""

from __future__ import annotations

import contextlib
from pathlib import Path

import astropy.units as u
import pytest

from kspipe.core.units import StoredUnit, UnitReadingError, read_unit

# The file says where its spellings come from.
TABLE = Path(__file__).with_name("unit_spellings.txt")
ROWS = [
    tuple(cell.strip() for cell in line.split("|"))
    for line in TABLE.read_text(encoding="utf-8").splitlines()
    if line.strip() and not line.startswith("#")
]
READ = [(text, meaning) for text, meaning, _ in ROWS if meaning != "refused"]
REFUSED = [(text, says) for text, meaning, says in ROWS if meaning == "refused"]


def assert_same(read: StoredUnit, expected: StoredUnit) -> None:
    assert type(read) is type(expected) or not isinstance(expected, u.MagUnit)
    if isinstance(expected, u.MagUnit):
        read, expected = read.physical_unit, expected.physical_unit
    # Rounding of a product of at most six scales.
    assert read.to(expected) == pytest.approx(1.0, rel=1e-14)


def test_the_table_is_long_and_says_nothing_twice() -> None:
    assert len(READ) >= 130
    assert len(REFUSED) >= 25
    assert len({row[0] for row in ROWS}) == len(ROWS)


@pytest.mark.parametrize(("text", "meaning"), READ)
def test_a_spelling_is_read_as_its_unit(text: str, meaning: str) -> None:
    assert_same(read_unit(text), u.Unit(meaning))


@pytest.mark.parametrize(("text", "says"), REFUSED)
def test_what_cannot_be_read_in_one_way_is_refused(text: str, says: str) -> None:
    with pytest.raises(UnitReadingError) as caught:
        read_unit(text)
    assert says in str(caught.value)


@pytest.mark.parametrize("text", ["", "   ", "''", "' '", "[]"])
def test_an_empty_string_is_refused(text: str) -> None:
    with pytest.raises(UnitReadingError, match="empty"):
        read_unit(text)


@pytest.mark.parametrize("dress", ["  {}  ", "'{}'", "'{}   '", '"{}"', "[{}]", "[ {} ]"])
def test_what_stands_around_a_unit_changes_nothing(dress: str) -> None:
    for text, meaning in READ:
        if text[0] not in "'\"[":
            assert_same(read_unit(dress.format(text)), u.Unit(meaning))


def test_capitals_are_read_only_where_they_have_one_meaning() -> None:
    # "MJY" is mega only per steradian, where milli is never used (common practice).
    mega = u.MJy / u.sr
    assert read_unit("MJY/SR").to(mega) == pytest.approx(1.0, rel=1e-14)
    assert read_unit("mJy/sr").to(mega) == pytest.approx(1e-9, rel=1e-14)


def test_a_string_that_lost_its_case_means_the_same_or_is_refused() -> None:
    same = 0
    for text, meaning in READ:
        for changed in {text.upper(), text.lower()} - {text}:
            if "mJy/sr" in text:  # the one prefix that upper case turns into another
                continue
            try:
                read = read_unit(changed)
            except UnitReadingError:
                continue
            assert_same(read, u.Unit(meaning))
            same += 1
    assert same > len(READ) / 2


@pytest.mark.parametrize(
    "unit",
    [
        u.Jy / u.beam * u.km / u.s, u.K * u.km / u.s, u.MJy / u.sr, u.uJy / u.pix,
        1e-17 * u.erg / u.s / u.cm**2 / u.arcsec**2, u.erg / u.s / u.cm**2 / u.AA / u.pix,
        u.W / u.m**2 / u.sr, 1e20 * u.cm**-2, u.count / u.s, u.DN / u.s, u.Msun / u.pc**2,
    ],
)  # fmt: skip
def test_the_standard_notations_are_read(unit: u.UnitBase | u.Quantity) -> None:
    # Written by astropy, in each notation that can hold the unit.
    unit = u.Unit(unit)
    written = set()
    for style in ("generic", "fits", "cds"):
        with contextlib.suppress(ValueError):
            written.add(unit.to_string(style))
    assert written
    for text in written:
        assert_same(read_unit(text), unit)

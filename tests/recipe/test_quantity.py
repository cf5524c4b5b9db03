"""Numbers with units and errors as one types them."""

from __future__ import annotations

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from kspipe.recipe.quantity import parse_centre, parse_measured, parse_percent

fixed = settings(derandomize=True, deadline=None, max_examples=200)


@pytest.mark.parametrize(
    ("typed", "unit", "value", "error"),
    [
        ("8.3 +- 0.4 Mpc", "Mpc", 8.3, 0.4),
        ("8.3 ± 0.4 Mpc", "Mpc", 8.3, 0.4),
        ("8.3 +/- 0.4 Mpc", "Mpc", 8.3, 0.4),
        ("8.3±0.4Mpc", "Mpc", 8.3, 0.4),
        ("8.3 Mpc", "Mpc", 8.3, 0.0),
        ("50 kpc", "Mpc", 0.05, 0.0),
        ("50 +- 1.3 kpc", "Mpc", 0.05, 0.0013),
        ("4.1 arcmin", "arcsec", 246.0, 0.0),
        ("1.11 deg", "arcsec", 3996.0, 0.0),
        ("15 arcsec", "arcsec", 15.0, 0.0),
        ("0.6 kpc", "pc", 600.0, 0.0),
        ("41 +- 3 deg", "deg", 41.0, 3.0),
        ("0.5 rad", "deg", math.degrees(0.5), 0.0),
        ("640 km/s", "km/s", 640.0, 0.0),
        ("640000 m/s", "km/s", 640.0, 0.0),
        ("-30 km/s", "km/s", -30.0, 0.0),
        (8.69, "", 8.69, 0.0),
        (0, "", 0.0, 0.0),
        ("8.69 +- 0.05", "", 8.69, 0.05),
        ("1e-3 +- 2E-4", "", 1e-3, 2e-4),
        (".5", "", 0.5, 0.0),
        ("5.", "", 5.0, 0.0),
    ],
)
def test_what_is_typed_is_read(typed, unit, value, error) -> None:
    # Definitions: 1 Mpc = 1000 kpc, 1 deg = 60 arcmin = 3600 arcsec, pi rad = 180 deg.
    measured = parse_measured(typed, unit, "x")
    assert (measured.value, measured.error) == pytest.approx((value, error), rel=1e-12)
    assert measured.text == str(typed)


@pytest.mark.parametrize(
    ("typed", "unit", "why"),
    [
        ("8.3", "Mpc", "no unit"),
        (8.3, "Mpc", "no unit"),
        ("8.3 arcmin", "Mpc", "kind Mpc"),
        ("41 Mpc", "deg", "kind deg"),
        ("15 pc", "arcsec", "kind arcsec"),
        ("600 arcsec", "pc", "kind pc"),
        ("640 Mpc", "km/s", "kind km/s"),
        ("8.3 parsecs of mine", "Mpc", "kind Mpc"),
        ("0.65 Mpc", "", "has the unit"),
        ("far", "Mpc", "cannot be read"),
        ("", "Mpc", "cannot be read"),
        ("Mpc", "Mpc", "cannot be read"),
        ("inf Mpc", "Mpc", "cannot be read"),
        ("nan", "", "cannot be read"),
        ("1e999 Mpc", "Mpc", "not finite"),
        (math.inf, "", "cannot be read"),
        ("8.3 +- 1e999 Mpc", "Mpc", "finite"),
        ("8.3 +- -0.4 Mpc", "Mpc", "negative error"),
        (True, "", "not a number"),
        (None, "", "not a number"),
        ([8.3], "Mpc", "not a number"),
        ({"value": 8.3}, "Mpc", "not a number"),
    ],
)
def test_what_has_another_meaning_is_refused(typed, unit, why) -> None:
    with pytest.raises(ValueError, match=why) as caught:
        parse_measured(typed, unit, '"8.3 +- 0.4 Mpc"')
    assert repr(typed) in str(caught.value)


@fixed
@given(st.text(max_size=25), st.sampled_from(["", "Mpc", "deg", "arcsec", "km/s"]))
def test_any_text_is_read_or_refused(typed, unit) -> None:
    try:
        measured = parse_measured(typed, unit, "x")
    except ValueError:
        return
    assert math.isfinite(measured.value)
    assert measured.error >= 0


@fixed
@given(
    st.floats(-1e6, 1e6, allow_subnormal=False),
    st.floats(0, 1e6, allow_subnormal=False),
    st.sampled_from(["+-", "±", "+/-"]),
)
def test_numbers_survive_being_typed(value, error, sign) -> None:
    measured = parse_measured(f"{value!r} {sign} {error!r} Mpc", "Mpc", "x")
    assert (measured.value, measured.error) == (value, error)


def test_percentages() -> None:
    assert parse_percent("5 %").value == 0.05
    assert parse_percent("0%").value == 0.0
    assert parse_percent("12.5 %").value == 0.125
    for typed in (5, 0.05, "5", "0.05", "-5 %", "% 5", "five %", None, "1e999 %"):
        with pytest.raises(ValueError, match="percentage"):
            parse_percent(typed)


@pytest.mark.parametrize(
    ("typed", "lon", "lat"),
    [
        # 1 h = 15 deg; 1 deg = 60 arcmin = 3600 arcsec.
        ("03h12m24.0s -27d18m36s", 48.1, -27.31),
        ("48.100 -27.310 deg", 48.1, -27.31),
        ("80.05 -69.30 deg", 80.05, -69.30),
        ("00h00m00s +00d30m00s", 0.0, 0.5),
        ("13h33m38.4s -00d30m00s", 203.41, -0.5),
    ],
)
def test_positions(typed, lon, lat) -> None:
    assert parse_centre(typed).degrees == pytest.approx((lon, lat), abs=1e-9)


@pytest.mark.parametrize(
    "typed",
    [
        "13 33 38 -21 46 12",  # hours or degrees?
        "13:33:38 -21:46:12",
        "203.4 -21.7",
        "203.4 deg",
        "48.1 -97.31 deg",
        "26h00m00s -21d46m12s",
        "03h12m24.0s",
        "M83",
        "",
        203.4,
        [203.4, -21.7],
        None,
    ],
)
def test_positions_with_two_meanings_are_refused(typed) -> None:
    with pytest.raises(ValueError, match="not a position") as caught:
        parse_centre(typed)
    assert "48.100 -27.310 deg" in str(caught.value)


@fixed
@given(st.text("0123456789hmsdeg+-.: ", max_size=25))
def test_any_position_is_read_or_refused(typed) -> None:
    try:
        position = parse_centre(typed)
    except ValueError:
        return
    assert 0 <= position.lon_deg <= 360
    assert -90 <= position.lat_deg <= 90

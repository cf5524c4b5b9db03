"""Foreground extinction: published values and a published curve written out.

Codes such as C401 number the worked check values of the project's reference sheet.
"""

import math

import numpy as np
import pytest

from kspipe.conversions import EXTINCTION, Choices, Parameters, convert
from kspipe.conversions.extinction import SF11_OVER_SFD

FIVE_DIGITS = 5e-5


def ccm89(wavelength_um: float, r_v: float = 3.1) -> float:
    """A / E(B-V) of Cardelli, Clayton & Mathis 1989, ApJ 345, 245, Eqs. 1, 3 and 4."""
    x = 1 / wavelength_um
    if 1.1 <= x <= 3.3:  # Eqs. 3a, 3b
        y = x - 1.82
        a = np.polyval([0.32999, -0.77530, 0.01979, 0.72085, -0.02427, -0.50447, 0.17699, 1.0], y)
        b = np.polyval([-2.09002, 5.30260, -0.62251, -5.38434, 1.07233, 2.28305, 1.41338, 0.0], y)
    else:  # Eqs. 4a, 4b for 3.3 <= x <= 8
        f_a = -0.04473 * (x - 5.9) ** 2 - 0.009779 * (x - 5.9) ** 3 if x >= 5.9 else 0.0
        f_b = 0.2130 * (x - 5.9) ** 2 + 0.1207 * (x - 5.9) ** 3 if x >= 5.9 else 0.0
        a = 1.752 - 0.316 * x - 0.104 / ((x - 4.67) ** 2 + 0.341) + f_a
        b = -3.090 + 1.825 * x + 1.206 / ((x - 4.62) ** 2 + 0.263) + f_b
    return float(a * r_v + b)  # Eq. 1: A / A_V = a + b / R_V


def correction(tracer: str, key: str, ebv: float) -> float:
    """By how much a foreground raises Sigma_SFR from one tracer."""
    calibration = "leroy2012_halpha_24um" if tracer == "Halpha" else "leroy2008_fuv_24um"
    maps = {tracer: np.ones(1), "24um": np.zeros(1)}
    choices = Choices(calibration, extinction={tracer: key})
    with_dust, without = (
        float(convert(maps, choices, Parameters(cos_i=1.0, ebv=e)).values["sigma_sfr"][0])
        for e in (ebv, 0.0)
    )
    return with_dust / without


def test_the_curve_in_this_file() -> None:
    # C401 to C404, recomputed there with a general extinction library.
    for wavelength, expected in (
        (0.1528, 8.1494), (0.2271, 9.1726), (0.65628, 2.5351), (0.486133, 3.6089),
    ):  # fmt: skip
        assert ccm89(wavelength) == pytest.approx(expected, rel=FIVE_DIGITS)


@pytest.mark.parametrize(
    ("tracer", "key", "ebv", "expected"),
    [
        pytest.param("FUV", "bianchi2017", 0.05, 1.4494, id="C405"),
        pytest.param("Halpha", "cardelli1989", 0.05, 1.1238, id="C406"),
        pytest.param("FUV", "bianchi2017", 0.1, 2.1009, id="C912"),
        # 10^(0.4 x 8.24 x 0.1), from the coefficient of Wyder et al. 2007 (from memory).
        pytest.param("FUV", "wyder2007", 0.1, 2.1360, id="wyder2007"),
    ],
)
def test_published_corrections(tracer: str, key: str, ebv: float, expected: float) -> None:
    assert correction(tracer, key, ebv) == pytest.approx(expected, rel=FIVE_DIGITS)


def test_cardelli1989_is_the_published_curve() -> None:
    record = EXTINCTION.get("cardelli1989")
    assert record.coefficients["Halpha"] == pytest.approx(ccm89(0.65628), rel=FIVE_DIGITS / 2)
    # A(Halpha) is 0.82 A_V (common practice, two digits).
    assert record.coefficients["Halpha"] / 3.1 == pytest.approx(0.82, abs=0.005)
    # Fitzpatrick 1999 finds 2.358, O'Donnell 1994 2.519: curves differ by 7 %, not by more.
    assert 2.358 < record.coefficients["Halpha"] < 2.358 * 1.08
    # C338, C339: Ha/Hb = 4 means E(B-V) = 0.33914 and A(Halpha) = 0.85972 with k = 2.535 and 3.609,
    # both rounded to four digits.
    a_halpha = 2.5 * math.log10(correction("Halpha", "cardelli1989", 0.33914))
    assert a_halpha == pytest.approx(0.85972, rel=0.0005 / 2.535)


def test_ultraviolet_bands_against_the_curve() -> None:
    bianchi = EXTINCTION.get("bianchi2017").coefficients
    wyder = EXTINCTION.get("wyder2007").coefficients
    # In the FUV the curve is smooth: band values lie within 1.2 % of the one at 1528 A.
    assert bianchi["FUV"] == pytest.approx(ccm89(0.1528), rel=0.012)
    assert wyder["FUV"] == pytest.approx(ccm89(0.1528), rel=0.012)
    # In the NUV the bump at 2175 A makes the value at 2271 A 12 to 15 percent larger than the band.
    assert 0.85 < bianchi["NUV"] / ccm89(0.2271) < 0.88
    # The third published set, 7.9 and 8.0 (Gil de Paz et al. 2007; from memory), within 2 %.
    assert bianchi["FUV"] == pytest.approx(7.9, rel=0.025)
    assert bianchi["NUV"] == pytest.approx(8.0, rel=0.01)
    assert "NUV" not in wyder


@pytest.mark.parametrize(
    ("tracer", "key"),
    [("FUV", "bianchi2017"), ("FUV", "wyder2007"), ("Halpha", "cardelli1989")],
)
def test_two_screens_are_one(tracer: str, key: str) -> None:
    # Magnitudes add; a negative reddening undoes a positive one; no dust changes nothing.
    together = correction(tracer, key, 0.3)
    assert correction(tracer, key, 0.1) * correction(tracer, key, 0.2) == pytest.approx(together)
    assert correction(tracer, key, -0.3) == pytest.approx(1 / together)
    assert correction(tracer, key, 0.0) == 1.0


def test_other_published_sets() -> None:
    # C401 and C403 to four digits; Fitzpatrick 1999 and O'Donnell 1994 from a general library.
    for key, tracer, expected in (
        ("cardelli1989_fuv", "FUV", 8.1494), ("fitzpatrick1999", "FUV", 7.965),
        ("fitzpatrick1999", "Halpha", 2.358), ("odonnell1994", "Halpha", 2.519),
        ("gildepaz2007", "FUV", 7.9), ("gildepaz2007", "NUV", 8.0),
    ):  # fmt: skip
        assert EXTINCTION.get(key).coefficients[tracer] == pytest.approx(expected, rel=FIVE_DIGITS)
    assert EXTINCTION.get("cardelli1989_fuv").coefficients["FUV"] == pytest.approx(
        ccm89(0.1528), rel=FIVE_DIGITS
    )
    # Curves differ by 2.5 % in the FUV and 7 % at H-alpha; the optical ones by less than 1 %.
    assert EXTINCTION.get("fitzpatrick1999").coefficients["FUV"] == pytest.approx(
        ccm89(0.1528), rel=0.025
    )
    assert EXTINCTION.get("odonnell1994").coefficients["Halpha"] == pytest.approx(
        ccm89(0.65628), rel=0.01
    )


def test_the_curved_form() -> None:
    # Wyder et al. 2007 (from memory): A_NUV = 8.24 E - 0.67 E^2; linear in thin dust, and within
    # 4 % of 7.95 E where E(B-V) is 0.3.
    record = EXTINCTION.get("wyder2007_uv")
    assert float(record.magnitudes("NUV", np.array(0.3))) == pytest.approx(8.24 * 0.3 - 0.67 * 0.09)
    assert float(record.magnitudes("NUV", np.array(1e-6))) / 1e-6 == pytest.approx(8.24, rel=1e-6)
    assert float(record.magnitudes("NUV", np.array(0.3))) == pytest.approx(7.95 * 0.3, rel=0.04)
    assert record.magnitudes("FUV", np.array(0.3)) == pytest.approx(8.24 * 0.3)


def test_the_scale_of_the_colour_excess() -> None:
    # Schlafly & Finkbeiner 2011 (from memory) print A_V = 2.742 E(SFD) for R_V = 3.1. It is no
    # second value of the factor: 2.742 / 0.86 = 3.19, because their V is a band over a star's
    # spectrum, 3 % more than the 3.1 of the curve at one wavelength.
    assert 1.0 < 2.742 / (3.1 * SF11_OVER_SFD) < 1.03
    maps = {"FUV": np.ones(1), "24um": np.zeros(1)}

    def with_scale(key: str, scale: str | None) -> float:
        choices = Choices("leroy2008_fuv_24um", extinction={"FUV": key}, ebv_scale=scale)
        return float(convert(maps, choices, Parameters(1.0, ebv=0.1)).values["sigma_sfr"][0])

    # Band coefficients belong to the older map, curves to the colour excess itself.
    assert with_scale("bianchi2017", "SFD") == with_scale("bianchi2017", None)
    assert with_scale("fitzpatrick1999", "SF11") == with_scale("fitzpatrick1999", None)
    ratio = with_scale("fitzpatrick1999", "SFD") / with_scale("fitzpatrick1999", None)
    assert ratio == pytest.approx(10 ** (0.4 * 7.965 * 0.1 * (0.86 - 1)), rel=1e-9)
    # On one scale the two agree within 15 %, mixed they are 25 % apart in magnitudes.
    mags = [
        2.5 * math.log10(with_scale(key, "SFD") / 0.081) for key in ("bianchi2017", "gildepaz2007")
    ]
    assert mags[0] == pytest.approx(mags[1], rel=0.025)

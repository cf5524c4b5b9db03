"""Star-formation calibrations: published values and their coefficients from luminosities.

Codes such as C318 number the worked check values of the project's reference sheet. A coefficient
printed with two digits is held to half of the last.
"""

import math

import numpy as np
import pytest

from kspipe.conversions import STAR_FORMATION, Choices, Parameters, convert

FIVE_DIGITS = 5e-5
C, KPC = 2.99792458e10, 3.0856776e21
# 1 MJy/sr is 1e-17 erg/s/cm2/Hz/sr; 4 pi kpc^2 turns it into a luminosity per kpc2 and Hz.
L_NU = 4 * math.pi * KPC**2 * 1e-17
# The same for a line intensity of 1 erg/s/cm2/sr.
L_LINE = 4 * math.pi * KPC**2
NU_24, NU_FUV = C / 23.68e-4, C / 1528e-8

FUV_24 = STAR_FORMATION.get("leroy2008_fuv_24um").coefficients
HALPHA_24 = STAR_FORMATION.get("leroy2012_halpha_24um").coefficients


def sigma_sfr(key: str, inclination_deg: float, given: dict[str, float], **more: float) -> float:
    maps = {tracer: np.array([value]) for tracer, value in given.items()}
    parameters = Parameters(cos_i=math.cos(math.radians(inclination_deg)), **more)
    return float(convert(maps, Choices(key), parameters).values["sigma_sfr"][0])


def test_luminosities_in_this_file() -> None:
    # C326, C327, C322, C324.
    for got, expected in (
        (L_NU, 1.1965e27), (L_LINE * 1e-5, 1.1965e39), (L_NU * NU_24, 1.5148e40),
        (L_NU * NU_FUV, 2.3475e42),
    ):  # fmt: skip
        assert got == pytest.approx(expected, rel=FIVE_DIGITS)


@pytest.mark.parametrize(
    ("key", "inclination", "given", "expected"),
    [
        pytest.param("leroy2008_fuv_24um", 40, {"FUV": 0.1, "24um": 2.0}, 0.011108, id="C318"),
        pytest.param(
            "leroy2012_halpha_24um", 0, {"Halpha": 1e-5, "24um": 1.0}, 0.0088400, id="C319"
        ),
        # C917: an FUV pedestal of 0.01 MJy/sr.
        pytest.param("leroy2008_fuv_24um", 0, {"FUV": 0.01, "24um": 0.0}, 8.1000e-4, id="C917"),
    ],
)
def test_published_values(key: str, inclination: float, given: dict, expected: float) -> None:
    assert sigma_sfr(key, inclination, given) == pytest.approx(expected, rel=FIVE_DIGITS)


def test_fuv_from_its_luminosity() -> None:
    # SFR = 0.68e-28 L_nu(FUV) (Salim et al. 2007, as used by Leroy et al. 2008; from memory): C316.
    expected = 0.68e-28 * L_NU
    assert expected == pytest.approx(0.081362, rel=FIVE_DIGITS)
    assert FUV_24["FUV"] == pytest.approx(expected, abs=0.0005)
    # Kennicutt & Evans 2012, Table 1, log C = 43.35, is the other family: 1.2888 higher (C321).
    other = 10**-43.35 * NU_FUV * L_NU
    assert other / FUV_24["FUV"] == pytest.approx(1.2888, rel=0.0005 / 0.081)


def test_24um_from_its_luminosity() -> None:
    # Calzetti et al. 2007: SFR = 5.3e-42 [L(Ha) + 0.031 nu L_nu(24)], times 1.3 with FUV: C317.
    alone = 5.3e-42 * 0.031 * NU_24 * L_NU
    assert 1.3 * alone == pytest.approx(0.0032354, rel=FIVE_DIGITS)
    assert FUV_24["24um"] == pytest.approx(1.3 * alone, abs=0.00005)
    assert HALPHA_24["24um"] == pytest.approx(alone, abs=0.00005)


def test_obscured_star_formation_against_another_calibration() -> None:
    # Where all light is reprocessed the 24 um term stands alone: Rieke et al. 2009 find
    # log C = 42.69 (Kennicutt & Evans 2012, Table 1). Such fits scatter by 0.12 to 0.13 dex.
    expected = 10**-42.69 * NU_24 * L_NU
    for coefficients in (FUV_24, HALPHA_24):
        assert abs(math.log10(coefficients["24um"] / expected)) < 0.12
    # How much dust counts beside FUV: nu L_nu ratio 3.89 (Hao et al. 2011) to 6.31 (Zhu et al.
    # 2008); here (3.2e-3 / 8.1e-2) nu_FUV / nu_24 = 6.12.
    weight = FUV_24["24um"] / FUV_24["FUV"] * NU_FUV / NU_24
    assert weight == pytest.approx(6.12, abs=0.005)
    assert 3.89 < weight < 6.31


def test_halpha_from_its_luminosity() -> None:
    # 5.3e-42 L(Ha) (Calzetti et al. 2007; from memory) gives 634.14 per erg/s/cm2/sr.
    expected = 5.3e-42 * L_LINE
    assert expected == pytest.approx(634.14, rel=FIVE_DIGITS)
    assert HALPHA_24["Halpha"] == pytest.approx(expected, abs=0.5)
    # Kennicutt & Evans 2012, Table 1, log C = 41.27: the digits of both, 0.005 dex and 1 %.
    other = 10**-41.27 * L_LINE
    assert abs(math.log10(HALPHA_24["Halpha"] / other)) < 0.005 + math.log10(1 + 0.05 / 5.3)


def test_salpeter_stars_would_be_more() -> None:
    # Kennicutt 1998: 7.9e-42 L(Ha) for a Salpeter IMF, 0.68 of it for Kroupa (K&E 2012, Table 1).
    record = STAR_FORMATION.get("leroy2012_halpha_24um")
    assert HALPHA_24["Halpha"] / (7.9e-42 * L_LINE) == pytest.approx(0.68, abs=0.015)
    assert record.imf == "Kroupa"
    assert STAR_FORMATION.get("leroy2008_fuv_24um").imf == "Kroupa"


@pytest.mark.parametrize(
    ("nii_ratio", "factor"),
    [
        # [NII]6548 = [NII]6583 / 3.05 (from memory).
        pytest.param(0.3, 0.71512, id="C337"),
        pytest.param(0.4, 1 / 1.5311, id="C915"),
        pytest.param(0.0, 1.0, id="none"),
    ],
)
def test_nitrogen_is_taken_out(nii_ratio: float, factor: float) -> None:
    given = {"Halpha": 1e-5, "24um": 0.0}
    clean = sigma_sfr("leroy2012_halpha_24um", 0, given)
    blend = sigma_sfr("leroy2012_halpha_24um", 0, given, nii_ratio=nii_ratio)
    assert blend / clean == pytest.approx(factor, rel=FIVE_DIGITS)

"""Star-formation calibrations: published values and their coefficients from luminosities.

Codes such as C318 number the worked check values of the project's reference sheet. A coefficient
printed with two digits is held to half of the last.
"""

import math

import numpy as np
import pytest

from kspipe.conversions import STAR_FORMATION, Choices, Parameters, convert
from kspipe.conversions.star_formation import hybrid

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


def rate(key: str, **luminosities: float) -> float:
    given = {f"{name[1:]}um" if name[0] == "l" else name: v for name, v in luminosities.items()}
    return float(STAR_FORMATION.get(key).rate({t: np.array(v) for t, v in given.items()}))


@pytest.mark.parametrize(
    ("key", "luminosities", "expected"),
    [
        # Kennicutt & Evans 2012, Table 1.
        pytest.param("kennicutt2012_fuv", {"FUV": 1e43}, 0.44668, id="C301"),
        pytest.param("kennicutt2012_nuv", {"NUV": 1e43}, 0.67608, id="C302"),
        pytest.param("kennicutt2012_halpha", {"Halpha": 1e41}, 0.53703, id="C303"),
        pytest.param("kennicutt2012_24um", {"l24": 1e42}, 0.20417, id="C305"),
        # Kennicutt 1998, for a Salpeter IMF.
        pytest.param("kennicutt1998_halpha", {"Halpha": 1e41}, 0.79000, id="C308"),
        # Murphy et al. 2011.
        pytest.param("murphy2011_halpha", {"Halpha": 1e41}, 0.53700, id="C309"),
        # Calzetti et al. 2007 (from memory).
        pytest.param(
            "calzetti2007_halpha_24um", {"Halpha": 1e40, "l24": 1e41}, 0.069430, id="C310"
        ),
        pytest.param("calzetti2007_24um", {"l24": 1e42}, 0.18785, id="C311"),
        # Rieke et al. 2009: L_24 = 1e9 L_sun.
        pytest.param("rieke2009_24um", {"l24": 1e9 * 3.828e33}, 0.78000, id="C312"),
        # Hao et al. 2011 and Kennicutt et al. 2009 in Kennicutt & Evans 2012, Table 2.
        pytest.param("hao2011_fuv_24um", {"FUV": 1e43, "l24": 5e42}, 1.3155, id="C313"),
        pytest.param("kennicutt2009_halpha_24um", {"Halpha": 1e41, "l24": 1e43}, 1.6111, id="C315"),
    ],
)
def test_published_rates(key: str, luminosities: dict[str, float], expected: float) -> None:
    assert rate(key, **luminosities) == pytest.approx(expected, rel=FIVE_DIGITS)


def test_the_surface_form_is_the_luminosity_form() -> None:
    # A face-on square kiloparsec of uniform brightness has the luminosity 4 pi I kpc^2 (C322 to
    # C327 are these luminosities).
    per_unit = {"FUV": NU_FUV * L_NU, "24um": NU_24 * L_NU, "Halpha": L_LINE}
    per_unit |= {"NUV": C / 2271e-8 * L_NU, "70um": C / 70e-4 * L_NU, "TIR": L_LINE}
    # The radio continuum is counted per frequency.
    per_unit["1.4GHz"] = L_NU
    for record in STAR_FORMATION:
        if record.luminosity and record.is_linear:
            whole = record.rate({t: np.array(per_unit[t]) for t in record.tracers})
            surface = sum(record.coefficients.values())
            assert surface == pytest.approx(float(whole), rel=1e-6)


def test_families_against_each_other() -> None:
    # C320, C321: the FUV constants differ by 0.11 dex.
    ours = STAR_FORMATION.get("kennicutt2012_fuv")
    assert ours.luminosity["FUV"] * NU_FUV == pytest.approx(8.7639e-29, rel=FIVE_DIGITS)
    assert ours.luminosity["FUV"] * NU_FUV / 0.68e-28 == pytest.approx(1.2888, rel=FIVE_DIGITS)
    # Kennicutt & Evans 2012, Table 1 prints the ratios to Kennicutt 1998: 0.63, 0.64, 0.68.
    for name, tracer, ratio in (
        ("fuv", "FUV", 0.63), ("nuv", "NUV", 0.64), ("halpha", "Halpha", 0.68),
    ):  # fmt: skip
        new, old = (STAR_FORMATION.get(f"kennicutt{year}_{name}") for year in (2012, 1998))
        # The 1998 constant is for 1500 to 2800 A; two digits.
        assert new.luminosity[tracer] / old.luminosity[tracer] == pytest.approx(ratio, abs=0.006)
    # Murphy et al. 2011 has the same constants to the digits printed.
    for name, tracer in (("fuv", "FUV"), ("halpha", "Halpha")):
        other = STAR_FORMATION.get(f"murphy2011_{name}").luminosity[tracer]
        assert math.log10(other) == pytest.approx(
            math.log10(STAR_FORMATION.get(f"kennicutt2012_{name}").luminosity[tracer]), abs=0.006
        )
    # Rieke et al. 2009 is log C = 42.69 in Kennicutt & Evans 2012.
    constant = STAR_FORMATION.get("rieke2009_24um").luminosity["24um"]
    assert -math.log10(constant) == pytest.approx(42.69, abs=0.005)
    # Surface form of Calzetti et al. 2007 in Leroy et al. 2012: 634 and 0.0025.
    rounded = HALPHA_24
    exact = STAR_FORMATION.get("calzetti2007_halpha_24um").coefficients
    assert exact["Halpha"] == pytest.approx(rounded["Halpha"], abs=0.5)
    assert exact["24um"] == pytest.approx(rounded["24um"], abs=0.00005)


def test_hybrids_without_dust_and_with_nothing_else() -> None:
    # No 24 um: the single tracer. No FUV: within the scatter of Rieke et al. 2009.
    for hybrid_key, single, tracer in (
        ("hao2011_fuv_24um", "kennicutt2012_fuv", "FUV"),
        ("hao2011_nuv_24um", "kennicutt2012_nuv", "NUV"),
        ("kennicutt2009_halpha_24um", "kennicutt2012_halpha", "Halpha"),
    ):
        both = STAR_FORMATION.get(hybrid_key)
        alone = STAR_FORMATION.get(single)
        assert both.coefficients[tracer] == alone.coefficients[tracer]
        dust = STAR_FORMATION.get("kennicutt2012_24um").coefficients["24um"]
        # Old stars and the light that escapes: the hybrid's weight is 0.52 to 0.85 of 24 um alone.
        assert 0.5 < both.coefficients["24um"] / dust < 0.9


def test_two_families_in_one_hybrid_are_refused() -> None:
    base = STAR_FORMATION.get("kennicutt1998_fuv")
    given = {"cite": "hao2011", "where": "x", "certainty": "verified"}
    with pytest.raises(ValueError, match=r"Kennicutt 1998.*Kennicutt & Evans 2012.*two"):
        hybrid("mix2000", base, "24um", 3.89, "x", family="Kennicutt & Evans 2012", **given)
    both = STAR_FORMATION.get("hao2011_fuv_24um")
    with pytest.raises(ValueError, match="single tracer"):
        hybrid("mix2000", both, "24um", 3.89, "x", family=both.family, **given)
    # One of the shelf, made by hand, is itself.
    made = hybrid(
        "hao2011_again",
        STAR_FORMATION.get("kennicutt2012_fuv"),
        "24um",
        3.89,
        "x",
        family="Kennicutt & Evans 2012",
        **given,
    )
    assert made.coefficients == STAR_FORMATION.get("hao2011_fuv_24um").coefficients


# --- a power law --------------------------------------------------------------------------------

POWER_LAW = STAR_FORMATION.get("calzetti2007_24um")


def test_a_power_law_in_surface_brightness() -> None:
    # Calzetti et al. 2007 (from memory): 1.56e-35 S^0.8104; at S = 1e40 erg/s/kpc2 within a factor
    # of 2.5 of the straight line of Rieke et al. 2009, and steeper than no line.
    surface = 1e40
    intensity = surface / (NU_24 * L_NU)
    got = sigma_sfr("calzetti2007_24um", 0, {"24um": intensity})
    assert got == pytest.approx(1.56e-35 * surface**0.8104, rel=1e-6)
    assert 1 < got / (10**-42.69 * surface) < 2.5
    # Face-on first, then the power: a disc at 60 degrees has half the surface brightness.
    tilted = sigma_sfr("calzetti2007_24um", 60, {"24um": intensity})
    assert tilted == pytest.approx(got * 0.5**0.8104, rel=1e-9)


def test_slopes_of_a_power_law() -> None:
    intensity = np.geomspace(1e-3, 1e2, 50)
    choices, given = Choices("calzetti2007_24um"), Parameters(0.7, as_24um=1.1)
    for band in ("24um", "22um"):
        base = convert({band: intensity}, choices, given)
        up, down = (
            convert({band: intensity * (1 + e)}, choices, given).values["sigma_sfr"]
            for e in (1e-5, -1e-5)
        )
        slope = (up - down) / (2e-5 * intensity)
        np.testing.assert_allclose(base.derivatives["sigma_sfr"][band], slope, rtol=1e-8)


def test_what_a_power_law_cannot_have_is_counted() -> None:
    sky = {"24um": np.array([1.0, 0.0, -1.0, np.nan])}
    got = convert(sky, Choices("calzetti2007_24um"), Parameters(0.7))
    assert np.isnan(got.values["sigma_sfr"]).tolist() == [False, True, True, True]
    assert np.isnan(got.derivatives["sigma_sfr"]["24um"]).tolist() == [False, True, True, True]
    assert got.flags["no_solution"].tolist() == [False, True, True, False]
    assert "no_solution" not in convert(sky, Choices("rieke2009_24um"), Parameters(0.7)).flags


def test_noise_of_a_power_law_against_draws() -> None:
    # 100 000 draws at S/N 20: the first order within 1 %.
    rng = np.random.default_rng(2)
    sky = {"24um": 1.0 + rng.standard_normal(100_000) / 20}
    choices, given = Choices("calzetti2007_24um"), Parameters(0.7)
    at = convert({"24um": np.array(1.0)}, choices, given)
    error = float(at.derivatives["sigma_sfr"]["24um"]) / 20
    assert error == pytest.approx(convert(sky, choices, given).values["sigma_sfr"].std(), rel=0.01)

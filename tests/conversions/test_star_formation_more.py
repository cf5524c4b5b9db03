"""Infrared, radio, Balmer decrement, nitrogen, diffuse emission, and what may not be combined."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from demo_disc import converted, matched_maps, recipe_of, shared_folder
from helpers import demo_recipe

from kspipe.conversions import (
    BALMER,
    NITROGEN,
    STAR_FORMATION,
    TOTAL_INFRARED,
    Choices,
    Parameters,
    convert,
)
from kspipe.core.errors import RecipeError
from kspipe.kernels.diffuse import smooth_part

L_PER_KPC2 = 4 * np.pi * 3.0856776e21**2  # erg/s/kpc2 per erg/s/cm2/sr


# --- worked values (Kennicutt & Evans 2012, Tables 1 and 2; Hao et al. 2011) ----------------------


@pytest.mark.parametrize(
    ("key", "luminosities", "rate"),
    [
        ("kennicutt2012_tir", {"TIR": 1e43}, 0.38905),
        ("kennicutt2012_70um", {"70um": 1e43}, 0.58884),
        ("kennicutt2012_1p4ghz", {"1.4GHz": 1e28}, 0.63096),
        ("hao2011_fuv_tir", {"FUV": 1e43, "TIR": 5e43}, 1.4741),
        ("murphy2011_tir", {"TIR": 1e43}, 0.388),
        ("murphy2011_1p4ghz", {"1.4GHz": 1e28}, 0.635),
        ("kennicutt1998_fir", {"TIR": 1e43}, 0.45),
    ],
)
def test_worked_rates(key, luminosities, rate) -> None:
    # To the digits printed.
    assert float(STAR_FORMATION.get(key).rate(luminosities)) == pytest.approx(rate, rel=5e-5)


def test_luminosity_and_surface_brightness_are_one() -> None:
    # 1 MJy/sr at 70 um is 5.1243e39 erg/s/kpc2, and 1.1965e27 erg/s/Hz/kpc2 at any frequency.
    assert STAR_FORMATION.get("kennicutt2012_70um").coefficients["70um"] == pytest.approx(
        10**-43.23 * 5.1243e39, rel=2e-5
    )
    assert STAR_FORMATION.get("kennicutt2012_1p4ghz").coefficients["1.4GHz"] == pytest.approx(
        10**-28.20 * 1.1965e27, rel=5e-5
    )
    assert STAR_FORMATION.get("kennicutt2012_tir").coefficients["TIR"] == pytest.approx(
        10**-43.41 * L_PER_KPC2, rel=1e-6
    )


def test_a_hybrid_with_tir_is_an_attenuation() -> None:
    # Hao et al. 2011: A_FUV = 2.5 log10(1 + 0.46 L_TIR / L_FUV), 1.2963 mag for a ratio of 5.
    attenuation = 2.5 * np.log10(1 + 0.46 * 5)
    assert attenuation == pytest.approx(1.2963, abs=5e-5)
    alone = STAR_FORMATION.get("kennicutt2012_fuv").rate({"FUV": 1e43})
    both = STAR_FORMATION.get("hao2011_fuv_tir").rate({"FUV": 1e43, "TIR": 5e43})
    assert float(both / alone) == pytest.approx(10 ** (0.4 * attenuation), rel=1e-12)


def test_balmer_worked_values() -> None:
    # Halpha/Hbeta = 4: E(B-V) 0.33914 and A 0.85972 by Cardelli et al. 1989; 0.28635 by Calzetti
    # et al. 2000.
    ccm, calzetti = BALMER.get("cardelli1989_balmer"), BALMER.get("calzetti2000_balmer")
    assert float(ccm.excess(4.0)) == pytest.approx(0.33914, rel=1e-3)
    assert 2.5 * np.log10(float(ccm.factor(4.0))) == pytest.approx(0.85972, rel=1e-3)
    assert float(calzetti.excess(4.0)) == pytest.approx(0.28635, rel=1e-3)
    # Limits: no attenuation at case B, and a screen applied is a screen taken off.
    for record in (ccm, calzetti):
        assert float(record.factor(2.86)) == 1.0
        dust = 10 ** (-0.4 * 0.7 * np.array([record.k_halpha, record.k_hbeta]))
        seen = np.array([2.86, 1.0]) * dust
        assert float(record.factor(seen[0] / seen[1])) == pytest.approx(1 / dust[0], rel=1e-12)
        assert np.isnan(record.factor(np.array([-1.0, 0.0]))).all()


def test_nitrogen_worked_values() -> None:
    # Kennicutt et al. 2008: log10 of both lines = -0.173 M_B - 3.903 for M_B > -21, else 0.54.
    record = NITROGEN.get("kennicutt2008")
    doublet = 1 + 1 / 3.05
    assert record(-20.0) * doublet == pytest.approx(10 ** (0.173 * 20 - 3.903), rel=1e-12)
    assert record(-22.0) * doublet == pytest.approx(0.54, rel=1e-12)
    # The branches meet at M_B = -21 to the digits of the coefficients.
    assert record(-20.999) == pytest.approx(record(-21.0), rel=0.02)


def test_total_infrared_of_bands() -> None:
    # Dale & Helou 2002 and Galametz et al. 2013, on nu L_nu.
    nu = {band: 299792.458 / wave for band, wave in (("24um", 23.68), ("70um", 70), ("160um", 160))}
    for key, weights in (
        ("dale2002", (1.559, 0.7686, 1.347)),
        ("galametz2013", (2.133, 0.681, 1.125)),
    ):
        got = TOTAL_INFRARED.get(key).weights
        for band, weight in zip(nu, weights, strict=True):
            assert got[band] == pytest.approx(weight * nu[band] * 1e9 * 1e-17, rel=1e-6)


# --- through the one conversion -------------------------------------------------------------------


def test_tir_of_bands_is_tir_of_a_map() -> None:
    bands = {
        "24um": np.array([2.0, -0.1]),
        "70um": np.array([30.0, 1.0]),
        "160um": np.array([60.0, 2.0]),
    }
    record = TOTAL_INFRARED.get("galametz2013")
    tir = sum(weight * bands[band] for band, weight in record.weights.items())
    choices = Choices("hao2011_fuv_tir", total_infrared="galametz2013")
    fuv = {"FUV": np.array([0.1, 0.02])}
    got = convert({**fuv, **bands}, choices, Parameters(cos_i=0.6))
    expected = convert({**fuv, "TIR": tir}, choices, Parameters(cos_i=0.6))
    np.testing.assert_allclose(got.values["sigma_sfr"], expected.values["sigma_sfr"], rtol=1e-13)
    slopes = got.derivatives["sigma_sfr"]
    assert set(slopes) == {"FUV", "24um", "70um", "160um"}
    # Homogeneous: the value is the sum of slopes times maps.
    total = sum(slopes[t] * m for t, m in {**fuv, **bands}.items())
    np.testing.assert_allclose(total, got.values["sigma_sfr"], rtol=1e-13)


def test_22um_stands_in_the_sum_of_bands() -> None:
    bands = {"22um": np.array([2.0]), "70um": np.array([30.0]), "160um": np.array([60.0])}
    choices = Choices("kennicutt2012_tir", total_infrared="dale2002")
    got = convert(bands, choices, Parameters(cos_i=1.0, as_24um=1.1))
    bands["24um"] = bands.pop("22um") * 1.1
    expected = convert(bands, choices, Parameters(cos_i=1.0))
    np.testing.assert_allclose(got.values["sigma_sfr"], expected.values["sigma_sfr"], rtol=1e-14)


def test_the_decrement_takes_a_screen_off() -> None:
    # A screen of E(B-V) = 0.5 in the galaxy and of 0.1 in the Milky Way (Cardelli et al. 1989).
    true = 1e-5
    ccm = np.array([2.535, 3.609])
    foreground = np.array([2.5351, 3.6089])
    seen = np.array([true, true / 2.86]) * 10 ** (-0.4 * (0.5 * ccm + 0.1 * foreground))
    nii = 1 + 0.3 * (1 + 1 / 3.05)
    maps = {"Halpha": np.array([seen[0] * nii]), "Hbeta": np.array([seen[1]])}
    choices = Choices("kennicutt2012_halpha", balmer="cardelli1989_balmer")
    given = Parameters(cos_i=0.5, ebv=0.1, nii_ratio=0.3)
    got = convert(maps, choices, given)
    expected = convert(
        {"Halpha": np.array([true])}, Choices("kennicutt2012_halpha"), Parameters(0.5)
    )
    np.testing.assert_allclose(got.values["sigma_sfr"], expected.values["sigma_sfr"], rtol=1e-12)
    # Slopes are those of differences.
    for line, value in maps.items():
        step = 1e-5 * value
        ends = [convert({**maps, line: value + s}, choices, given) for s in (step, -step)]
        slope = (ends[0].values["sigma_sfr"] - ends[1].values["sigma_sfr"]) / (2 * step)
        np.testing.assert_allclose(got.derivatives["sigma_sfr"][line], slope, rtol=1e-8)


def test_lines_that_are_not_there_have_no_decrement() -> None:
    maps = {
        "Halpha": np.array([1e-5, -1e-6, 1e-5, np.nan]),
        "Hbeta": np.array([2e-6, 2e-6, -1e-7, 1e-6]),
    }
    choices = Choices("kennicutt2012_halpha", balmer="cardelli1989_balmer")
    got = convert(maps, choices, Parameters(1.0))
    np.testing.assert_array_equal(np.isnan(got.values["sigma_sfr"]), [False, True, True, True])
    np.testing.assert_array_equal(got.flags["no_solution"], [False, True, True, False])


def test_only_the_thermal_part_is_taken() -> None:
    # Murphy et al. 2011, Eq. 11: 4.6e-28 (nu/GHz)^0.1 L_nu(thermal) at 1e4 K.
    maps = {"1.4GHz": np.array([0.1])}
    given = Parameters(cos_i=0.7, thermal_fraction=0.12)
    got = convert(maps, Choices("murphy2011_thermal"), given).values["sigma_sfr"]
    expected = 4.6e-28 * 1.4**0.1 * 0.12 * 0.1 * 0.7 * L_PER_KPC2 * 1e-17
    np.testing.assert_allclose(got, expected, rtol=1e-6)
    all_of_it = convert(maps, Choices("murphy2011_1p4ghz"), given).values["sigma_sfr"]
    np.testing.assert_allclose(all_of_it, 6.35e-29 * 0.1 * 0.7 * L_PER_KPC2 * 1e-17, rtol=1e-6)


def test_a_diffuse_fraction_belongs_to_its_own_band() -> None:
    maps = {"FUV": np.array([0.1]), "24um": np.array([2.0])}
    choices = Choices("leroy2008_fuv_24um")
    got = convert(maps, choices, Parameters(1.0, diffuse={"24um": 0.3})).values["sigma_sfr"]
    # Leroy et al. 2008, Appendix D.
    np.testing.assert_allclose(got, 8.1e-2 * 0.1 + 3.2e-3 * 2.0 * 0.7, rtol=1e-14)


# --- through recipes ------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def out() -> Path:
    return shared_folder()


def with_lines(out: Path, **changes: Any) -> dict[str, Any]:
    maps = demo_recipe(out)["maps"]
    halpha = {"tracer": "Halpha", "file": "halpha.fits", "noise": "measure", "nii_ratio": 0}
    hbeta = {"tracer": "Hbeta", "file": "halpha.fits", "noise": "measure"}
    maps |= {"ha": halpha, "hb": hbeta}
    table = {
        "calibration": "kennicutt2012_halpha",
        "maps": ["ha", "hb"],
        "attenuation": "cardelli1989_balmer",
    }
    return {"maps": maps, "star_formation": {**table, **changes}}


def test_a_recipe_with_hbeta(out) -> None:
    matched = matched_maps(out)[1]
    got = converted(out, **with_lines(out))["sigma_sfr"]
    ha, hb = matched["ha"].value, matched["hb"].value
    with np.errstate(invalid="ignore"):
        factor = (ha / hb / 2.86) ** (2.535 / (3.609 - 2.535))
    # 10^-41.27 per erg/s (Kennicutt & Evans 2012, Table 1).
    expected = 10**-41.27 * L_PER_KPC2 * ha * factor * np.cos(np.radians(41))
    seen = np.isfinite(got)
    assert seen.sum() > 1000
    np.testing.assert_array_equal(seen, (ha > 0) & (hb > 0))
    np.testing.assert_allclose(got[seen], expected[seen], rtol=1e-5)


def test_a_fraction_a_table_and_a_filter_of_diffuse_emission(out) -> None:
    maps = demo_recipe(out)["maps"]
    base = converted(out)

    def with_diffuse(diffuse: Any) -> dict[str, np.ndarray]:
        return converted(out, maps={**maps, "ir": {**maps["ir"], "diffuse": diffuse}})

    np.testing.assert_array_equal(with_diffuse("none")["sigma_sfr"], base["sigma_sfr"])
    ir = matched_maps(out)[1]["ir"].value * 3.2e-3 * np.cos(np.radians(41))
    got = with_diffuse("0.4 +- 0.1")["sigma_sfr"]
    np.testing.assert_allclose(got, base["sigma_sfr"] - 0.4 * ir, rtol=1e-9, atol=1e-12)
    table = {"radius": [0, 5], "per": "kpc", "value": [0.6, 0.2]}
    share = np.interp(base["radius"], [0, 5], [0.6, 0.2])
    got = with_diffuse(table)["sigma_sfr"]
    np.testing.assert_allclose(got, base["sigma_sfr"] - share * ir, rtol=1e-9, atol=1e-12)
    # A filter takes off something smooth, more of it with a shorter length.
    lost = [
        np.nansum(base["sigma_sfr"] - with_diffuse({"filter": f"{kpc} kpc"})["sigma_sfr"])
        for kpc in (2.0, 6.0)
    ]
    assert lost[0] > lost[1] > 0


def test_the_smooth_part_of_a_smooth_sky_is_all_of_it() -> None:
    rng = np.random.default_rng(4)
    noise = rng.normal(0, 0.1, (120, 130))
    sky = np.full(noise.shape, 2.0)
    error = np.full(noise.shape, 0.1)
    np.testing.assert_allclose(smooth_part(sky, error, 12.0), sky, rtol=1e-12)
    smooth = smooth_part(sky + noise, error, 12.0)
    # The clip takes 0.0044 sigma off the mean (the normal density at 3); the rest is the noise of
    # the mean.
    assert abs(np.mean(smooth) - 2.0 + 0.0044 * 0.1) < 3 * 0.1 / np.sqrt(noise.size)
    # A source much narrower than the filter is no part of it.
    y, x = np.indices(sky.shape)
    source = 5 * np.exp(-((x - 60) ** 2 + (y - 60) ** 2) / (2 * 1.5**2))
    smooth = smooth_part(sky + source + noise, error, 20.0)
    compact = (sky + source + noise - smooth)[50:71, 50:71].sum()
    assert compact == pytest.approx(source.sum(), rel=0.06)
    # Blanks stay blank and pull nothing down.
    holed = np.where(x < 40, np.nan, sky)
    got = smooth_part(holed, error, 12.0)
    np.testing.assert_array_equal(np.isnan(got), np.isnan(holed))
    np.testing.assert_allclose(got[:, 40:], 2.0, rtol=1e-9)


def test_nitrogen_by_the_magnitude_of_the_galaxy(out) -> None:
    maps = demo_recipe(out)["maps"]
    ha = {"tracer": "Halpha", "file": "halpha.fits", "noise": "measure"}
    galaxy = {**demo_recipe(out)["galaxy"], "m_b": "-20.0 mag"}
    changes: dict[str, Any] = {
        "star_formation": {"calibration": "kennicutt2012_halpha", "maps": ["ha"]},
        "galaxy": galaxy,
    }
    free = converted(out, maps={**maps, "ha": {**ha, "nii_ratio": 0}}, **changes)["sigma_sfr"]
    got = converted(out, maps={**maps, "ha": {**ha, "nii_relation": "kennicutt2008"}}, **changes)
    both = 10 ** (0.173 * 20 - 3.903)  # Kennicutt et al. 2008
    np.testing.assert_allclose(got["sigma_sfr"], free / (1 + both), rtol=1e-9)


# --- what is refused ------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("table", "where", "why"),
    [
        ({"maps": ["ha"]}, "star_formation.maps", "takes Halpha and Hbeta; listed are Halpha"),
        ({"attenuation": None}, "star_formation.maps", "listed are Halpha and Hbeta"),
        (
            {"calibration": "kennicutt2009_halpha_24um", "maps": ["ha", "hb", "ir"]},
            "star_formation.attenuation",
            "twice",
        ),
        (
            {"calibration": "kennicutt2012_24um", "maps": ["ir", "hb"]},
            "star_formation.attenuation",
            "does not take",
        ),
        (
            {"total_infrared": "dale2002"},
            "star_formation.total_infrared",
            "takes no TIR",
        ),
        ({"attenuation": "cardelli1989"}, "star_formation.attenuation", "did you mean"),
    ],
)
def test_maps_and_calibrations_that_do_not_fit(out, table, where, why) -> None:
    changes = with_lines(out)
    merged = {**changes["star_formation"], **table}
    changes["star_formation"] = {k: v for k, v in merged.items() if v is not None}
    with pytest.raises(RecipeError) as caught:
        recipe_of(out, **changes)
    faults = {fault.where: str(fault) for fault in caught.value.faults}
    assert why in faults[where]


@pytest.mark.parametrize(
    ("ha", "where", "why"),
    [
        ({"nii_relation": "kennicutt2008"}, "maps.ha.nii_relation", "exclude each other"),
        (
            {"nii_ratio": None, "nii_relation": "kennicutt2008"},
            "maps.ha.nii_relation",
            "absolute magnitude",
        ),
        ({"thermal_fraction": 0.1}, "maps.ha.thermal_fraction", "belongs to a map of 1.4GHz"),
        ({"diffuse": 1.2}, "maps.ha.diffuse", "a fraction from 0 to below 1"),
        ({"diffuse": {"filter": "0 kpc"}}, "maps.ha.diffuse", "is no filter"),
        ({"diffuse": {"filter": "2 arcsec"}}, "maps.ha.diffuse", "kpc"),
    ],
)
def test_keys_of_a_map_that_do_not_fit(out, ha, where, why) -> None:
    changes = with_lines(out)
    merged = {**changes["maps"]["ha"], **ha}
    changes["maps"]["ha"] = {k: v for k, v in merged.items() if v is not None}
    with pytest.raises(RecipeError) as caught:
        recipe_of(out, **changes)
    faults = {fault.where: str(fault) for fault in caught.value.faults}
    assert why in faults[where]


def test_gas_and_star_formation_of_one_map_are_refused(out) -> None:
    record = {
        "family": "star_formation",
        "form": "linear",
        "slopes": {"CO(2-1)": 1e-3},
        "imf": "Kroupa",
        "citation": "Someone et al. 2031",
    }
    table = {"calibration": "mine", "maps": ["co"]}
    with pytest.raises(RecipeError, match=r"which is the gas.*its own shadow"):
        recipe_of(out, records={"mine": record}, star_formation=table)


@pytest.mark.parametrize(
    ("key", "fraction", "why"),
    [
        ("murphy2011_thermal", None, "takes the thermal part"),
        ("murphy2011_1p4ghz", 0.1, "takes all of it"),
    ],
)
def test_a_thermal_fraction_goes_with_its_record(out, key, fraction, why) -> None:
    maps = demo_recipe(out)["maps"]
    radio = {"tracer": "1.4GHz", "file": "mir24.fits", "noise": "measure"}
    maps["radio"] = radio if fraction is None else {**radio, "thermal_fraction": fraction}
    table = {"calibration": key, "maps": ["radio"]}
    with pytest.raises(RecipeError) as caught:
        recipe_of(out, maps=maps, star_formation=table)
    assert why in str(caught.value)

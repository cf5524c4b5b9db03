"""Stars: coefficients from zero points, midplane densities, and what alpha_CO makes of them."""

import math

import numpy as np
import pytest

from kspipe.conversions import (
    STARS,
    Choices,
    Parameters,
    convert,
    midplane_density_msun_pc3,
)

SKY = {
    "HI": np.array([300.0, 500.0, -10.0]),
    "CO(2-1)": np.array([4.0, -1.0, 20.0]),
    "FUV": np.full(3, 0.05),
    "24um": np.ones(3),
    "3.6um": np.array([0.2, 1.0, 3.0]),
}
CHOICES = Choices("leroy2008_fuv_24um", alpha_co="bolatto2013_eq31", stars="leroy2019_36um")


@pytest.mark.parametrize(
    ("key", "half", "zero_point_jy"),
    # 350 and 330 Msun/pc2 per MJy/sr at M/L = 0.5; zero points of the bands (all from memory).
    [("leroy2019_36um", 350.0, 280.9), ("leroy2019_w1", 330.0, 309.5)],
)
def test_coefficients(key: str, half: float, zero_point_jy: float) -> None:
    record = STARS.get(key)
    assert record.msun_pc2_per_intensity * 0.5 == half
    # From the Sun of 3.24 mag at 3.4 um: 1 L_sun/pc2 is mu = 3.24 + 5 log10(206265 / 10) mag per
    # square arcsecond. The zero points give 706 and 638 for 700 and 660: 3.5 %.
    mu = 3.24 + 5 * math.log10(648000 / math.pi / 10)
    mjy_sr = zero_point_jy * 10 ** (-0.4 * mu) / (math.pi / 648000) ** 2 / 1e6
    assert record.msun_pc2_per_intensity == pytest.approx(1 / mjy_sr, rel=0.035)


def test_one_star_field_in_both_bands() -> None:
    # Old stars are on the Rayleigh-Jeans side: F_nu at 3.35 um is (3.55 / 3.35)^2 of that at 3.6,
    # within 20 % (common practice). Both must weigh the same.
    ratio = STARS.get("leroy2019_36um").msun_pc2_per_intensity
    ratio /= STARS.get("leroy2019_w1").msun_pc2_per_intensity
    assert ratio == pytest.approx((3.55 / 3.3526) ** 2, rel=0.2)


def test_surface_density() -> None:
    given = Parameters(0.6, mass_to_light=0.4)
    got = convert(SKY, CHOICES, given)
    np.testing.assert_allclose(got.values["sigma_star"], 700 * 0.4 * 0.6 * SKY["3.6um"])
    np.testing.assert_allclose(got.derivatives["sigma_star"]["3.6um"], 700 * 0.4 * 0.6)
    with pytest.raises(KeyError, match=r"leroy2019_36um.*3\.6um"):
        convert({t: m for t, m in SKY.items() if t != "3.6um"}, CHOICES, given)


@pytest.mark.parametrize("alpha_co", ["bolatto2013_eq31", "schinnerer2024"])
def test_stars_reach_the_gas(alpha_co: str) -> None:
    choices = Choices("leroy2008_fuv_24um", alpha_co=alpha_co, stars="leroy2019_36um")
    given = Parameters(0.6, oh=8.5, line_ratio=0.65)
    got = convert(SKY, choices, given)
    # The same as the surface density handed over as a number.
    by_number = convert(
        {t: m for t, m in SKY.items() if t != "3.6um"},
        Choices("leroy2008_fuv_24um", alpha_co=alpha_co),
        Parameters(0.6, oh=8.5, line_ratio=0.65, sigma_star=got.values["sigma_star"]),
    )
    for product, value in by_number.values.items():
        np.testing.assert_array_equal(got.values[product], value)
    assert got.by_parameter == {}
    # ... and its slope with the map is a difference.
    for product in ("sigma_mol", "sigma_gas"):
        up, down = (
            convert({**SKY, "3.6um": SKY["3.6um"] * (1 + e)}, choices, given).values[product]
            for e in (1e-5, -1e-5)
        )
        slope = (up - down) / (2e-5 * SKY["3.6um"])
        np.testing.assert_allclose(got.derivatives[product]["3.6um"], slope, rtol=1e-6, atol=1e-9)


def test_midplane_density() -> None:
    # Sigma = 2 rho z0 (sech^2 of z/z0) or 4 rho z0 (of z/2z0): integrals of the profiles.
    z = np.linspace(-5000.0, 5000.0, 200_001)
    for definition, width in (("sech2(z/z0)", 1.0), ("sech2(z/2z0)", 2.0)):
        rho = float(midplane_density_msun_pc3(np.array(50.0), 300.0, definition))
        column = np.trapezoid(rho / np.cosh(z / (width * 300.0)) ** 2, z)
        assert column == pytest.approx(50.0, rel=1e-6)
    # The two definitions of one number differ by 2; 50 Msun/pc2 at 300 pc is 0.04 to 0.08, the
    # 0.01 to 0.1 Msun/pc3 of discs (common practice).
    one, other = (
        float(midplane_density_msun_pc3(np.array(50.0), 300.0, d))
        for d in ("sech2(z/z0)", "sech2(z/2z0)")
    )
    assert one == 2 * other
    assert 0.01 < other < one < 0.1


def test_hi_opacity() -> None:
    choices = Choices("leroy2008_fuv_24um", alpha_co="sun2020")
    thin, thick = (
        convert(SKY, choices, Parameters(0.6, hi_opacity=factor)) for factor in (1.0, 1.1)
    )
    np.testing.assert_allclose(
        thick.values["sigma_atom"], 1.1 * thin.values["sigma_atom"], rtol=1e-14
    )
    np.testing.assert_array_equal(thick.values["sigma_mol"], thin.values["sigma_mol"])
    ratio = thick.derivatives["sigma_gas"]["HI"] / thin.derivatives["sigma_gas"]["HI"]
    np.testing.assert_allclose(ratio, 1.1, rtol=1e-14)

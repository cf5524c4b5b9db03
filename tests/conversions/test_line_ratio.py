"""Line ratios: published values, the form with Sigma_SFR, and what it does to the noise.

Codes such as C119 number the worked check values of the project's reference sheet.
"""

import math

import numpy as np
import pytest

from kspipe.conversions import LINE_RATIO, Choices, Parameters, convert

FIVE_DIGITS = 5e-5
FORM = LINE_RATIO.get("schinnerer2024_r21")
CHOICES = Choices(
    "leroy2008_fuv_24um", alpha_co="bolatto2013_galactic", line_ratio="schinnerer2024_r21"
)


def ratio(sigma_sfr: float) -> float:
    return float(FORM(np.array(sigma_sfr))[0])


@pytest.mark.parametrize(
    ("key", "value", "low", "high"),
    [
        # Leroy et al. 2022, den Brok et al. 2021, Yajima et al. 2021: abstracts.
        ("leroy2022_r21", 0.65, 0.50, 0.83),
        ("leroy2022_r32", 0.50, 0.23, 0.59),
        ("leroy2022_r31", 0.31, 0.20, 0.42),
        ("denbrok2021_r21", 0.64, 0.64 - 0.09, 0.64 + 0.09),
        ("yajima2021_r21", 0.61, 0.61 - 0.19, 0.61 + 0.19),
        ("saintonge2017_r21", 0.79, 0.79 - 0.03, 0.79 + 0.03),  # from memory
    ],
)
def test_published_constants(key: str, value: float, low: float, high: float) -> None:
    record = LINE_RATIO.get(key)
    assert (record.value, record.low, record.high) == pytest.approx((value, low, high))
    assert record.needs == ()


def test_the_published_form() -> None:
    # Schinnerer & Leroy 2024, Table 1.
    assert ratio(0.1) == pytest.approx(0.80539, rel=FIVE_DIGITS)  # C119
    assert ratio(1e-4) == pytest.approx(0.35000, rel=FIVE_DIGITS)  # C120
    # Floor and ceiling, also where noise makes star formation negative.
    assert [ratio(s) for s in (-1.0, 0.0, 1e-9)] == [0.35] * 3
    assert ratio(1e3) == 1.0
    # Its anchor.
    assert ratio(1.8e-2) == 0.65


def test_constants_against_each_other() -> None:
    # R31 = R32 R21, from medians of different galaxies: two digits of each.
    product = LINE_RATIO.get("leroy2022_r32").value * LINE_RATIO.get("leroy2022_r21").value
    assert LINE_RATIO.get("leroy2022_r31").value == pytest.approx(product, abs=0.02)
    # Every R21 of a later paper lies within the 16 to 84 percent of Leroy et al. 2022.
    base = LINE_RATIO.get("leroy2022_r21")
    for record in LINE_RATIO:
        if record.upper == "CO(2-1)":
            assert base.low < record.value < base.high
    # No dust, no self-absorption, hot and thick gas: 1 is the limit of each ratio.
    assert all(record.high <= 1.0 for record in LINE_RATIO)


def test_the_form_against_measured_slopes() -> None:
    # den Brok et al. 2025 (abstract): slope 0.10 to 0.11 with Sigma_SFR, about 0.75 in centres.
    slope = math.log10(ratio(0.1) / ratio(0.01))
    assert slope == pytest.approx(0.105, abs=0.025)
    # 0.1 dex of variation within galaxies: ten times the star formation of the anchor.
    assert 0.65 < ratio(0.05) < 0.80


def maps(n: int) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(4)
    return {
        "HI": rng.normal(400, 100, n),
        "CO(2-1)": rng.normal(4, 3, n),
        "FUV": rng.lognormal(-3, 1.5, n),
        "24um": rng.lognormal(0, 1.5, n),
    }


@pytest.mark.parametrize("alpha_co", ["bolatto2013_galactic", "bolatto2013_eq31"])
def test_slopes_are_differences(alpha_co: str) -> None:
    choices = Choices("leroy2008_fuv_24um", alpha_co=alpha_co, line_ratio="schinnerer2024_r21")
    sky, given = maps(400), Parameters(0.7, oh=8.5, sigma_star=150.0)
    base = convert(sky, choices, given)
    assert set(base.derivatives["sigma_mol"]) >= {"CO(2-1)", "FUV", "24um"}
    for tracer, value in sky.items():
        step = 1e-5 * np.abs(value)
        up, down = (
            convert({**sky, tracer: value + sign * step}, choices, given).values for sign in (1, -1)
        )
        for product in ("sigma_mol", "sigma_gas"):
            slope = base.derivatives[product].get(tracer, np.zeros(400))
            other = (up[product] - down[product]) / (2 * step)
            np.testing.assert_allclose(slope, other, rtol=1e-4, atol=1e-6 * np.abs(slope).max())


def test_noise_against_draws() -> None:
    # 100 000 draws at S/N 20: the shared star formation is in both, and the first order within 1 %.
    n, snr = 100_000, 20.0
    rng = np.random.default_rng(6)
    truth = {"HI": 400.0, "CO(2-1)": 6.0, "FUV": 0.1, "24um": 2.0}
    sky = {t: v * (1 + rng.standard_normal(n) / snr) for t, v in truth.items()}
    drawn = convert(sky, CHOICES, Parameters(0.7)).values
    at = convert({t: np.array(v) for t, v in truth.items()}, CHOICES, Parameters(0.7))
    slopes = at.derivatives["sigma_mol"]
    error = math.sqrt(sum((float(s) * truth[t] / snr) ** 2 for t, s in slopes.items()))
    assert error == pytest.approx(drawn["sigma_mol"].std(), rel=0.01)
    sfr = at.derivatives["sigma_sfr"]
    covariance = sum(float(slopes[t] * s) * (truth[t] / snr) ** 2 for t, s in sfr.items())
    measured = np.cov(drawn["sigma_mol"], drawn["sigma_sfr"])[0, 1]
    # More stars form, a brighter CO(2-1) for the gas: less gas. The covariance of 100 000 draws is
    # known to s_mol s_sfr / sqrt(n).
    assert covariance < 0
    tolerance = 3 * error * drawn["sigma_sfr"].std() / math.sqrt(n)
    assert measured == pytest.approx(covariance, abs=tolerance)


def test_a_record_of_another_line_is_refused() -> None:
    for key in ("leroy2022_r31", "leroy2022_r32"):
        choices = Choices("leroy2008_fuv_24um", alpha_co="sun2020", line_ratio=key)
        with pytest.raises(KeyError, match=rf"{key}.*CO\(2-1\) over CO\(1-0\) is needed"):
            convert(maps(3), choices, Parameters(1.0))


def test_a_constant_record_is_its_number() -> None:
    by_key = Choices("leroy2008_fuv_24um", alpha_co="sun2020", line_ratio="leroy2022_r21")
    by_number = Choices("leroy2008_fuv_24um", alpha_co="sun2020")
    got = convert(maps(9), by_key, Parameters(0.7)).values["sigma_mol"]
    expected = convert(maps(9), by_number, Parameters(0.7, line_ratio=0.65)).values["sigma_mol"]
    np.testing.assert_array_equal(got, expected)


def test_blank_star_formation_is_no_gas() -> None:
    sky = maps(5)
    sky["FUV"][2] = np.nan
    got = convert(sky, CHOICES, Parameters(0.7))
    assert np.flatnonzero(np.isnan(got.values["sigma_mol"])).tolist() == [2]

"""alpha_CO that depends on the gas it gives: the root, its slopes, its noise.

Codes such as C203 number the worked check values of the project's reference sheet.
"""

import numpy as np
import pytest

from kspipe.conversions import ALPHA_CO, ATOMIC, Choices, Parameters, convert
from kspipe.conversions.molecular import molecular_gas
from kspipe.kernels.selfconsistent import solve_total

FIVE_DIGITS = 5e-5
PER_HI = ATOMIC.get("leroy2008_thin").msun_pc2_per_k_kms
RECORDS = [record.key for record in ALPHA_CO if record.is_self_consistent]
every = pytest.mark.parametrize("key", RECORDS)
SHAPE = (6, 7)


def drawn(shape: tuple[int, ...] = SHAPE) -> tuple[dict[str, np.ndarray], Parameters]:
    """Maps and parameters of a disc, a fifth of its CO negative."""
    rng = np.random.default_rng(5)
    line = rng.lognormal(1.0, 1.5, shape) * np.where(rng.random(shape) < 0.2, -1.0, 1.0)
    maps = {"HI": rng.normal(500, 200, shape), "CO(2-1)": line, "FUV": np.ones(shape)}
    maps["24um"] = np.ones(shape)
    given = Parameters(
        cos_i=0.6,
        oh=rng.uniform(8.2, 8.9, shape),
        line_ratio=0.65,
        sigma_star=rng.lognormal(4.5, 1.5, shape),
    )
    return maps, given


def choices(key: str) -> Choices:
    return Choices("leroy2008_fuv_24um", alpha_co=key)


def test_a_published_value() -> None:
    # C203, Bolatto et al. 2013, Eq. 31: Z' = 1, Sigma_star = 200, Sigma_atom = 8, I_CO = 20.
    maps = {"HI": np.array([8 / PER_HI]), "CO(1-0)": np.array([20.0])}
    maps |= {"FUV": np.zeros(1), "24um": np.zeros(1)}
    got = convert(maps, choices("bolatto2013_eq31"), Parameters(1.0, sigma_star=200.0))
    assert got.values["sigma_mol"][0] / 20 == pytest.approx(2.6753, rel=FIVE_DIGITS)


@every
def test_the_equation_holds(key: str) -> None:
    maps, given = drawn((2000,))
    got = convert(maps, choices(key), given)
    co = maps["CO(2-1)"] / 0.65 * 0.6
    # All inputs of the formula are face-on; negative CO adds nothing to the total.
    stars_and_gas = given.sigma_star + got.values["sigma_atom"]
    total = stars_and_gas + np.maximum(got.values["sigma_mol"], 0)
    alpha = ALPHA_CO.get(key)({"oh": given.oh, "sigma_total": total})
    np.testing.assert_allclose(got.values["sigma_mol"], alpha * co, rtol=1e-8)
    np.testing.assert_array_equal(got.flags["negative_co"], co < 0)


def test_the_root_is_that_of_a_cubic() -> None:
    # Above 100 Msun/pc2 Eq. 31 is u^3 - B u - 29 exp(0.4/Z') L = 0 for u = sqrt(total): one
    # positive root (Descartes' rule of signs), found here by another method.
    maps, given = drawn((300,))
    got = convert(maps, choices("bolatto2013_eq31"), given).values
    co = maps["CO(2-1)"] / 0.65 * 0.6
    base = given.sigma_star + got["sigma_atom"]
    scale = 2.9 * np.exp(0.4 * 10 ** (8.69 - given.oh))
    for k in np.flatnonzero(co > 0):
        if base[k] + scale[k] * co[k] <= 100:
            expected = base[k] + scale[k] * co[k]
        else:
            roots = np.roots([1.0, 0.0, -base[k], -10 * scale[k] * co[k]])
            real = roots[(np.abs(roots.imag) < 1e-9) & (roots.real > 0)].real
            assert real.size == 1
            expected = real[0] ** 2
        assert base[k] + got["sigma_mol"][k] == pytest.approx(expected, rel=1e-8)


@every
def test_slopes_are_differences(key: str) -> None:
    maps, given = drawn()
    base = convert(maps, choices(key), given)
    near_zero = np.abs(maps["CO(2-1)"]) < 1e-3
    for tracer in ("HI", "CO(2-1)"):
        step = 1e-4 * np.abs(maps[tracer])
        up, down = (
            convert({**maps, tracer: maps[tracer] + sign * step}, choices(key), given).values
            for sign in (1, -1)
        )
        for product in ("sigma_mol", "sigma_gas"):
            slope = np.where(near_zero, np.nan, base.derivatives[product][tracer])
            other = (up[product] - down[product]) / (2 * step)
            off_break = np.isfinite(slope) & (np.abs(slope - other) < 1e-3 * np.abs(slope).max())
            # Pixels at the break of the formula have two slopes; there is none here.
            assert off_break.sum() == np.isfinite(slope).sum()
            np.testing.assert_allclose(slope[off_break], other[off_break], rtol=2e-5, atol=1e-7)
    step = 1e-4 * given.sigma_star
    up, down = (
        convert(maps, choices(key), Parameters(0.6, given.oh, 0.65, sigma_star=stars)).values
        for stars in (given.sigma_star + step, given.sigma_star - step)
    )
    for product in ("sigma_mol", "sigma_gas"):
        np.testing.assert_allclose(
            base.by_parameter[product]["sigma_star"],
            (up[product] - down[product]) / (2 * step),
            rtol=2e-5,
            atol=1e-7,
        )


def test_slopes_of_schinnerer2024_with_stars() -> None:
    maps, given = drawn()
    choice = choices("schinnerer2024")
    base = convert(maps, choice, given)
    step = 1e-4 * given.sigma_star
    up, down = (
        convert(maps, choice, Parameters(0.6, given.oh, 0.65, sigma_star=stars)).values
        for stars in (given.sigma_star + step, given.sigma_star - step)
    )
    np.testing.assert_allclose(
        base.by_parameter["sigma_mol"]["sigma_star"],
        (up["sigma_mol"] - down["sigma_mol"]) / (2 * step),
        rtol=2e-5,
        atol=1e-9,
    )
    assert "negative_co" not in base.flags


@every
@pytest.mark.parametrize("sigma_star", [20.0, 300.0])
def test_noise_against_draws(key: str, sigma_star: float) -> None:
    # 100 000 draws of HI, CO and stars at S/N 20: the first-order error is within 1 %.
    n, snr = 100_000, 20.0
    rng = np.random.default_rng(11)
    truth = {"HI": 400.0, "CO(1-0)": 12.0, "FUV": 0.0, "24um": 0.0}

    def maps(scatter: float) -> dict[str, np.ndarray]:
        return {t: v * (1 + scatter * rng.standard_normal(n)) for t, v in truth.items()}

    stars = sigma_star * (1 + rng.standard_normal(n) / snr)
    drawn_gas = convert(maps(1 / snr), choices(key), Parameters(0.8, oh=8.5, sigma_star=stars))
    at = convert(
        {t: np.array(v) for t, v in truth.items()},
        choices(key),
        Parameters(0.8, oh=8.5, sigma_star=sigma_star),
    )
    for product in ("sigma_mol", "sigma_gas"):
        slopes = {t: s * truth[t] for t, s in at.derivatives[product].items()}
        slopes["sigma_star"] = at.by_parameter[product]["sigma_star"] * sigma_star
        first_order = np.sqrt(sum(float(s) ** 2 for s in slopes.values())) / snr
        # The scatter of 100 000 draws is itself known to 0.22 %.
        assert first_order == pytest.approx(drawn_gas.values[product].std(), rel=0.01)


@every
def test_draws_are_single_calls(key: str) -> None:
    rng = np.random.default_rng(8)
    pixels = {"HI": rng.normal(400, 100, 1000), "CO(2-1)": rng.normal(3, 3, 1000)}
    pixels |= {"FUV": np.ones(1000), "24um": np.ones(1000)}
    ratio, stars = rng.uniform(0.4, 0.9, (1000, 1)), rng.lognormal(5, 1, 1000)
    oh = rng.uniform(8.2, 8.9, 1000)
    together = convert(
        pixels, choices(key), Parameters(0.7, oh=oh, line_ratio=ratio, sigma_star=stars)
    )
    assert together.values["sigma_mol"].shape == (1000, 1000)
    for k in range(0, 1000, 50):
        one = convert(
            pixels, choices(key), Parameters(0.7, oh=oh, line_ratio=ratio[k], sigma_star=stars)
        )
        for product in ("sigma_mol", "sigma_gas"):
            np.testing.assert_allclose(together.values[product][k], one.values[product], rtol=1e-12)


@every
def test_inclination_and_stars_tilt_together(key: str) -> None:
    # A disc with all surface densities halved at the break's own scale is no symmetry; but far
    # below the break the gas is alpha times CO, and twice the tilt is half the gas.
    maps, _ = drawn()
    maps = {t: m * 1e-3 for t, m in maps.items()}
    flat, tilted = (
        convert(maps, choices(key), Parameters(c, oh=8.5, sigma_star=1.0)).values["sigma_mol"]
        for c in (1.0, 0.5)
    )
    np.testing.assert_allclose(tilted, flat / 2, rtol=1e-12)


@every
def test_what_is_missing_is_named(key: str) -> None:
    maps, given = drawn()
    with pytest.raises(KeyError, match=f"{key}.*sigma_star"):
        convert(maps, choices(key), Parameters(0.6, oh=8.5))
    without_hi = {t: m for t, m in maps.items() if t != "HI"}
    with pytest.raises(KeyError, match=f"{key}.*HI"):
        convert(without_hi, choices(key), given)


def test_blanks_do_not_spread() -> None:
    maps, given = drawn()
    for tracer in ("HI", "CO(2-1)"):
        holed = {**maps, tracer: maps[tracer].copy()}
        holed[tracer][2, 3] = np.nan
        got = convert(holed, choices("bolatto2013_eq31"), given).values["sigma_mol"]
        assert np.isnan(got[2, 3])
        assert np.isnan(got).sum() == 1
    empty = molecular_gas(
        ALPHA_CO.get("bolatto2013_eq31"),
        np.empty(0),
        np.empty(0),
        {"oh": np.array(8.5), "sigma_star": np.empty(0)},
    )
    assert empty.alpha_co.shape == (0,)


def test_a_factor_that_rises_has_no_root() -> None:
    # Outside the contract of the solver: a factor that grows faster than the total.
    with pytest.raises(ArithmeticError, match="no surface density"):
        solve_total(np.array([1.0]), np.array([1.0]), lambda t: 2 * t**2, lambda t: 2 / t)

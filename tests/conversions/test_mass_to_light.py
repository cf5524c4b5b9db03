"""Mass-to-light ratio by specific star formation, and heights of discs."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from demo_disc import converted, shared_folder
from helpers import demo_recipe
from scipy.optimize import brentq

from kspipe.conversions import (
    MASS_TO_LIGHT,
    Choices,
    Parameters,
    convert,
    midplane_density_msun_pc3,
    scale_height_from_length,
)

RECORD = MASS_TO_LIGHT.get("leroy2019_ssfr")


def by_hand(log_ssfr: float) -> float:
    # Leroy et al. 2019 (from memory): 0.5 below -11.0, 0.2 above -10.2, straight between.
    return float(np.interp(log_ssfr, [-11.0, -10.2], [0.5, 0.2]))


@pytest.mark.parametrize("log_rate", [-14.0, -11.6, -11.3, -11.2, -11.0, -10.95, -10.9, -10.0])
def test_the_ratio_fits_its_own_mass(log_rate: float) -> None:
    ratio, _ = RECORD.solve(np.array(10.0**log_rate))
    root = brentq(lambda m: m - by_hand(log_rate - np.log10(m)), 0.1, 0.6, xtol=1e-14)
    assert float(ratio) == pytest.approx(root, abs=1e-9)


def test_limits_of_the_ratio() -> None:
    rates = np.array([0.0, -1.0, np.inf, np.nan, 1e-20, 1.0])
    ratio, slope = RECORD.solve(rates)
    np.testing.assert_array_equal(ratio[[0, 1, 2, 4, 5]], [0.5, 0.5, 0.2, 0.5, 0.2])
    assert np.isnan(ratio[3])
    np.testing.assert_array_equal(slope[[0, 1, 2, 4, 5]], 0.0)
    # It falls with the rate, and never jumps.
    fine, _ = RECORD.solve(np.logspace(-13, -9, 4001))
    assert np.all(np.diff(fine) <= 1e-12)
    assert np.max(np.abs(np.diff(fine))) < 0.005


def sky(rng: np.random.Generator, n: int = 200) -> dict[str, np.ndarray]:
    maps = {"HI": 300.0, "FUV": 0.02, "24um": 0.3, "3.6um": 0.5}
    return {t: v * rng.lognormal(0, 0.8, n) for t, v in maps.items()}


CHOICES = Choices("leroy2008_fuv_24um", stars="leroy2019_36um", mass_to_light="leroy2019_ssfr")


def test_through_the_conversion() -> None:
    maps = sky(np.random.default_rng(5))
    got = convert(maps, CHOICES, Parameters(0.8))
    rate, star = got.values["sigma_sfr"], got.values["sigma_star"]
    # At the solution: M/L of the mass that comes out is the M/L that made it.
    used = star / (700 * 0.8 * maps["3.6um"])
    expected = [by_hand(q) for q in np.log10(rate / star / 1e6)]
    np.testing.assert_allclose(used, expected, atol=1e-9)
    assert 0.2 < np.median(used) < 0.5
    for tracer in ("FUV", "24um", "3.6um"):
        step = 1e-6 * maps[tracer]
        ends = [
            convert({**maps, tracer: maps[tracer] + s}, CHOICES, Parameters(0.8)).values
            for s in (step, -step)
        ]
        slope = (ends[0]["sigma_star"] - ends[1]["sigma_star"]) / (2 * step)
        np.testing.assert_allclose(
            got.derivatives["sigma_star"][tracer], slope, rtol=1e-4, atol=1e-6 * np.abs(slope).max()
        )


def test_light_and_star_formation_at_and_below_zero() -> None:
    maps = {
        "HI": np.full(5, 300.0),
        "FUV": np.array([0.0, -0.1, 0.1, 0.1, np.nan]),
        "24um": np.zeros(5),
        "3.6um": np.array([1.0, 1.0, 0.0, -1.0, 1.0]),
    }
    got = convert(maps, CHOICES, Parameters(1.0)).values["sigma_star"]
    np.testing.assert_allclose(got[:4], [350.0, 350.0, 0.0, -140.0], rtol=1e-12)
    assert np.isnan(got[4])


@pytest.mark.slow
def test_through_a_recipe() -> None:
    out: Path = shared_folder()
    maps = demo_recipe(out)["maps"]
    maps["nir"] = {**maps["ir"], "tracer": "3.6um"}
    table = {"record": "leroy2019_36um", "map": "nir", "mass_to_light": "leroy2019_ssfr"}
    got = converted(out, maps=maps, stars=table)
    constant = converted(out, maps=maps, stars={**table, "mass_to_light": 1.0})["sigma_star"]
    seen = np.isfinite(got["sigma_star"]) & (constant > 0) & (got["sigma_sfr"] > 0)
    expected = [
        by_hand(q) for q in np.log10((got["sigma_sfr"] / got["sigma_star"])[seen] / 1e6).tolist()
    ]
    np.testing.assert_allclose((got["sigma_star"] / constant)[seen], expected, atol=1e-9)
    # A map or table of M/L is one of the four ways of any quantity.
    ratio = {"radius": [0, 5], "per": "kpc", "value": [0.5, 0.3]}
    varied = converted(out, maps=maps, stars={**table, "mass_to_light": ratio})["sigma_star"]
    np.testing.assert_allclose(
        varied, constant * np.interp(got["radius"], [0, 5], [0.5, 0.3]), rtol=1e-9
    )


def test_heights_of_either_definition_give_one_density() -> None:
    # Leroy et al. 2008: l / z0 = 7.3 with Sigma = 4 rho z0 (from memory).
    assert float(scale_height_from_length(2190.0, "sech2(z/2z0)")) == pytest.approx(300.0)
    densities = [
        float(midplane_density_msun_pc3(np.array(50.0), scale_height_from_length(2190.0, d), d))
        for d in ("sech2(z/z0)", "sech2(z/2z0)")
    ]
    assert densities[0] == pytest.approx(densities[1], rel=1e-14)
    assert densities[0] == pytest.approx(50.0 / (4 * 300.0), rel=1e-12)

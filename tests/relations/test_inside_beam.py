"""What a beam hides: clumping three ways, structure inside the beam, noise in the gas."""

import math
from dataclasses import dataclass

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.optimize import brentq

from kspipe.relations import LAWS, Prediction
from kspipe.relations.inside_beam import (
    beam_bias_dex,
    clumping_of_beam,
    clumping_of_moments,
    mean_over_lognormal,
    mean_over_noise,
    noise_bias,
)

KMT = LAWS.get("krumholz2009")
KPC = {"clumping": 5.0}
OH = np.array(8.69)


@dataclass
class PowerLaw:
    exponent: float
    needs: tuple[str, ...] = ("sigma_gas",)

    def predict(self, inputs, _, *, slopes=True) -> Prediction:  # noqa: ARG002 - as a Law has it
        sigma = np.asarray(inputs["sigma_gas"], dtype=float)
        nothing = np.zeros(sigma.shape, dtype=bool)
        return Prediction(2.5e-4 * sigma**self.exponent, None, {}, nothing, nothing)


# --- clumping ------------------------------------------------------------------------------------


def test_clumping_as_a_function_of_the_beam() -> None:
    # Krumholz et al. 2009: 1 at 100 pc and below, 5 near 1 kpc; between them common practice.
    beam = np.array([10.0, 100.0, 1000.0, 3000.0])
    np.testing.assert_allclose(clumping_of_beam(beam), [1, 1, 5, 5], rtol=1e-12)
    between = clumping_of_beam(np.geomspace(100, 1000, 50))
    assert np.all(np.diff(between) > 0)
    assert float(clumping_of_beam(100 * math.sqrt(10))) == pytest.approx(math.sqrt(5), rel=1e-12)


def test_clumping_of_a_log_normal_is_known() -> None:
    # <S^2>/<S>^2 = exp(sigma_ln^2) for a log-normal.
    rng = np.random.default_rng(3)
    gas = rng.lognormal(2.0, 0.5, 400_000)
    got = clumping_of_moments(gas.mean(), (gas**2).mean(), 0.0)
    assert float(got) == pytest.approx(math.exp(0.25), rel=0.01)


def test_noise_alone_is_not_clumpy() -> None:
    rng = np.random.default_rng(4)
    smooth = 10.0 + rng.normal(0.0, 5.0, 400_000)
    raw = clumping_of_moments(smooth.mean(), (smooth**2).mean(), 0.0)
    assert float(raw) == pytest.approx(1.25, rel=0.01)
    got = clumping_of_moments(smooth.mean(), (smooth**2).mean(), 25.0)
    assert float(got) == pytest.approx(1.0, abs=0.01)


def test_what_no_clumping_can_be_told_of() -> None:
    got = clumping_of_moments(np.array([-1.0, 0.0, np.nan, 2.0]), np.full(4, 4.0), 0.4)
    np.testing.assert_array_equal(np.isnan(got), [True, True, True, False])
    # Below 1 is noise, and kept so that an average stays right.
    assert got[3] == pytest.approx(0.9)


# --- structure inside the beam -------------------------------------------------------------------


def test_a_power_law_over_a_log_normal() -> None:
    # <S^N> = <S>^N exp[N (N - 1) sigma_ln^2 / 2]: +20 % for N = 1.4 over 0.35 dex.
    law, inputs = PowerLaw(1.4), {"sigma_gas": np.array([3.0, 50.0])}
    ratio = mean_over_lognormal(law, inputs, {}, 0.35) / law.predict(inputs, {}).sigma_sfr
    exact = math.exp(1.4 * 0.4 * (0.35 * math.log(10)) ** 2 / 2)
    np.testing.assert_allclose(ratio, exact, rtol=1e-12)
    assert exact == pytest.approx(1.20, abs=0.005)
    np.testing.assert_allclose(beam_bias_dex(law, inputs, {}, 0.35), -math.log10(exact), rtol=1e-10)


def test_a_linear_law_does_not_see_structure() -> None:
    inputs = {"sigma_gas": np.array([3.0, 50.0])}
    np.testing.assert_allclose(beam_bias_dex(PowerLaw(1.0), inputs, {}, 0.5), 0.0, atol=1e-13)
    np.testing.assert_allclose(beam_bias_dex(KMT, {**inputs, "oh": OH}, KPC, 0.0), 0.0, atol=1e-13)


@pytest.mark.parametrize(
    ("sigma", "scatter", "rel"),
    [
        (2.0, 0.2, 1e-6),
        (7.0, 0.2, 1e-6),
        (2.0, 0.35, 1e-4),
        # Most of the gas beside the kink of the law at 85 Msun/pc2.
        (40.0, 0.35, 3e-3),
    ],
)
def test_a_steep_law_against_an_integral(sigma: float, scatter: float, rel: float) -> None:
    s = scatter * math.log(10)

    def integrand(x: float) -> float:
        gas = np.array(sigma * math.exp(s * x - s * s / 2))
        sfr = float(KMT.predict({"sigma_gas": gas, "oh": OH}, KPC).sigma_sfr)
        return sfr * math.exp(-x * x / 2) / math.sqrt(2 * math.pi)

    kink = (math.log(85 / sigma) + s * s / 2) / s
    exact = quad(integrand, -9, 9, points=[kink], epsrel=1e-10, limit=200)[0]
    got = mean_over_lognormal(KMT, {"sigma_gas": np.array(sigma), "oh": OH}, KPC, scatter)
    assert float(got) == pytest.approx(exact, rel=rel)


def test_where_the_relation_is_steep_its_value_at_the_mean_is_too_low() -> None:
    gas = {"sigma_gas": np.array([1.5, 100.0]), "oh": OH}
    steep, shallow = beam_bias_dex(KMT, gas, KPC, 0.3)
    assert steep < -0.2
    assert abs(shallow) < 0.1


# --- noise in the gas ----------------------------------------------------------------------------


@pytest.mark.parametrize(("snr", "expected"), [(3.0, 1.7), (5.0, 1.3)])
def test_noise_makes_a_steep_prediction_too_high(snr: float, expected: float) -> None:
    # Krumholz et al. 2009 at f_H2 = 0.05: simulated as 1.7 and 1.3 times too high on average.
    def f_mol(sigma: float) -> float:
        return float(KMT.predict({"sigma_gas": np.array(sigma), "oh": OH}, KPC).f_mol)

    sigma = np.array(brentq(lambda s: f_mol(s) - 0.05, 0.5, 50))
    got = noise_bias(KMT, {"sigma_gas": sigma, "oh": OH}, KPC, sigma / snr)
    assert round(float(got), 1) == expected


def test_noise_against_draws() -> None:
    rng = np.random.default_rng(5)
    sigma = np.array([2.0, 5.0, 20.0])
    drawn = np.maximum(sigma + 0.25 * sigma * rng.normal(size=(200_000, 3)), 0.0)
    sfr = KMT.predict({"sigma_gas": drawn, "oh": OH}, KPC).sigma_sfr.mean(axis=0)
    got = mean_over_noise(KMT, {"sigma_gas": sigma, "oh": OH}, KPC, 0.25 * sigma)
    np.testing.assert_allclose(got, sfr, rtol=0.01)


def test_pixels_without_prediction() -> None:
    gas = {"sigma_gas": np.array([0.0, -2.0, np.nan, 10.0]), "oh": OH}
    for got in (noise_bias(KMT, gas, KPC, np.ones(4)), beam_bias_dex(KMT, gas, KPC, 0.3)):
        np.testing.assert_array_equal(np.isnan(got), [True, True, True, False])

"""Temperature of cold gas: values of Krumholz, Leroy & McKee 2011, limits, both solutions."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

from kspipe.relations.state.thermal import (
    C_PLUS_FREQUENCY_GHZ,
    C_PLUS_LEVEL_K,
    C_PLUS_LINE_K,
    C_PLUS_WAVELENGTH_UM,
    Temperature,
    cosmic_ray_temperature,
    gas_temperature,
    isobaric_temperature,
    photoelectric_temperature,
)

FIVE_DIGITS = 5e-5
fixed = settings(derandomize=True, deadline=None, max_examples=60)


def heating(chi: float, zeta: float, z: float, tau: float) -> float:
    """ApJ 731, 25, written out once more."""
    return 4e-26 * chi * z * math.exp(-tau) + 2e-27 * zeta


def cooling(n: float, z: float, t: float) -> float:
    return 8e-10 * math.exp(-91 / t) * 1.1e-4 * z * 91 * 1.380649e-16 * n


def full(n: float, z: float = 1.0, tau: float = 0.0, chi: float = 1.0, zeta: float = 1.0):
    return gas_temperature(*(np.array(float(v)) for v in (n, chi, zeta, z, tau)))


def isobaric(p: float, z: float = 1.0, tau: float = 0.0, chi: float = 1.0, zeta: float = 1.0):
    return isobaric_temperature(*(np.array(float(v)) for v in (p, chi, zeta, z, tau)))


@pytest.mark.parametrize(
    ("n", "z", "tau", "expected"),
    [
        # The balance of ApJ 731, 25 with its rates, worked to five digits.
        (100, 1.0, 0, 94.017),
        (100, 1.0, 5, 23.417),
        (100, 0.1, 5, 53.641),
        (1000, 1.0, 0, 27.825),
    ],
)
def test_worked_values(n: float, z: float, tau: float, expected: float) -> None:
    assert float(full(n, z, tau).kelvin) == pytest.approx(expected, rel=FIVE_DIGITS)


def test_no_cold_solution_is_said() -> None:
    # 30 cm-3 without shielding: C+ carries off less than dust and cosmic rays bring.
    got = full(30)
    assert np.isnan(got.kelvin)
    assert got.no_cold_solution
    assert not got.co_cooled
    assert not full(100).no_cold_solution


def test_the_hottest_cold_gas() -> None:
    # At 500 K cooling over heating is e^(91/500).
    edge = heating(1, 1, 1, 0) * math.exp(91 / 500) / (cooling(1, 1, 1e9))
    assert float(full(edge * 1.0001).kelvin) == pytest.approx(500, rel=1e-3)
    assert full(edge * 0.9999).no_cold_solution


def test_below_15_k_carbon_monoxide_cools() -> None:
    n = heating(0, 1, 1, 0) / cooling(1, 1, 15.0)
    assert full(n * 1.01, chi=0.0).co_cooled
    assert not full(n * 0.99, chi=0.0).co_cooled


@fixed
@given(
    n=st.floats(30, 3e4),
    chi=st.floats(0.05, 100),
    zeta=st.floats(0.05, 100),
    z=st.floats(0.05, 3),
    tau=st.floats(0, 12),
)
def test_substitution(n: float, chi: float, zeta: float, z: float, tau: float) -> None:
    got = full(n, z, tau, chi, zeta)
    if got.no_cold_solution:
        # What C+ can carry off at 500 K is less than the heating.
        assert cooling(n, z, 500) < heating(chi, zeta, z, tau) * (1 + 1e-12)
    else:
        assert cooling(n, z, float(got.kelvin)) == pytest.approx(
            heating(chi, zeta, z, tau), rel=1e-10
        )
    pressure = n * 60.0
    got = isobaric(pressure, z, tau, chi, zeta)
    if got.no_cold_solution:
        # At a pressure n Lambda goes as e^(-91/T)/T, largest at 91 K.
        assert cooling(pressure / 91, z, 91) < heating(chi, zeta, z, tau) * (1 + 1e-12)
    else:
        t = float(got.kelvin)
        assert t < 91
        assert cooling(pressure / t, z, t) == pytest.approx(heating(chi, zeta, z, tau), rel=1e-8)


def test_the_isobaric_solution_against_a_root_finder() -> None:
    for tau, pressure in ((0.0, 1.2e4), (0.0, 1e5), (5.0, 3e3), (8.0, 1e6)):

        def excess(t: float, p: float = pressure, tau: float = tau) -> float:
            return cooling(p / t, 1, t) - heating(1, 1, 1, tau)

        expected = brentq(excess, 1.0, 91.0, xtol=1e-13, rtol=1e-14)
        assert float(isobaric(pressure, tau=tau).kelvin) == pytest.approx(expected, rel=1e-10)


def test_where_the_two_isobaric_solutions_meet() -> None:
    least = heating(1, 1, 1, 0) * 91 * math.e / cooling(1, 1, 1e12)
    assert isobaric(least * (1 - 1e-9)).no_cold_solution
    # The cold solution leaves 91 K as the root of the excess in pressure.
    assert float(isobaric(least * (1 + 1e-8)).kelvin) == pytest.approx(91, rel=3e-4)


def test_the_two_regimes_are_the_limits() -> None:
    one = np.array(1.0)
    n = np.array(300.0)
    dark = gas_temperature(n, one, one, one, 40.0).kelvin
    assert float(cosmic_ray_temperature(n, one, one).kelvin) == pytest.approx(
        float(dark), rel=1e-12
    )
    bright = gas_temperature(n, one, 1e-12 * one, one, 0.0).kelvin
    assert float(photoelectric_temperature(n, one).kelvin) == pytest.approx(float(bright), rel=1e-9)
    # Both heat: warmer than either alone.
    both = gas_temperature(n, one, one, one, 3.0).kelvin
    assert both > cosmic_ray_temperature(n, one, one).kelvin


def test_metallicity_matters_only_to_shielded_gas() -> None:
    # Dust heating and carbon cooling both go as Z'; cosmic rays do not.
    assert float(full(300, 0.3).kelvin) == pytest.approx(float(full(300, 1.0).kelvin), rel=0.15)
    assert float(full(300, 0.1, 5).kelvin) > 1.5 * float(full(300, 1.0, 5).kelvin)
    n = np.array(300.0)
    one = np.array(1.0)
    assert photoelectric_temperature(n, one).partials.keys() == {"density", "chi"}


def test_blanks_stay_blank_and_are_no_missing_solution() -> None:
    got = gas_temperature(*(np.array([np.nan, 100.0]) for _ in range(4)), 0.0)
    assert np.isnan(got.kelvin[0])
    assert not got.no_cold_solution[0]


@pytest.mark.parametrize("solver", [gas_temperature, isobaric_temperature])
def test_derivatives(solver) -> None:
    first = "density" if solver is gas_temperature else "pressure"
    names = (first, "chi", "zeta_prime", "z_prime", "depth")
    at = {first: 200.0 if first == "density" else 2e4} | dict(
        zip(names[1:], (0.8, 1.3, 0.6, 0.7), strict=True)
    )

    def value(**changes: float) -> Temperature:
        return solver(*(np.array(v) for v in (at | changes).values()), 1.4)

    partials = value().partials
    assert set(partials) == set(names)
    for name in names:
        h = 1e-5 * at[name]
        up, down = value(**{name: at[name] + h}).kelvin, value(**{name: at[name] - h}).kelvin
        assert float(partials[name]) == pytest.approx(float((up - down) / (2 * h)), rel=1e-7)


def test_derivatives_of_the_regimes() -> None:
    n, x, z, h = np.array(250.0), np.array(1.2), np.array(0.6), 1e-5
    got = photoelectric_temperature(n, x)
    up, down = (photoelectric_temperature(n, x * (1 + s)).kelvin for s in (h, -h))
    assert float(got.partials["chi"] * x) == pytest.approx(float((up - down) / (2 * h)), rel=1e-7)
    got = cosmic_ray_temperature(n, x, z)
    for name in ("density", "zeta_prime", "z_prime"):
        changed = []
        for s in (h, -h):
            at = {"density": n, "zeta_prime": x, "z_prime": z}
            at[name] = at[name] * (1 + s)
            changed.append(cosmic_ray_temperature(*at.values()).kelvin)
        scale = {"density": n, "zeta_prime": x, "z_prime": z}[name]
        expected = float((changed[0] - changed[1]) / (2 * h))
        assert float(got.partials[name] * scale) == pytest.approx(expected, rel=1e-7)


def test_the_carbon_line() -> None:
    # C+ 2P3/2-2P1/2: 158 um, 1900 GHz, 91 to 92 K (common practice).
    assert round(C_PLUS_WAVELENGTH_UM) == 158
    assert pytest.approx(1900, abs=1) == C_PLUS_FREQUENCY_GHZ
    assert 91 < C_PLUS_LINE_K < 92
    line_k = 6.62607015e-34 * C_PLUS_FREQUENCY_GHZ * 1e9 / 1.380649e-23
    assert line_k == pytest.approx(C_PLUS_LEVEL_K, rel=0.01)

"""Jeans and Bonnor-Ebert masses and lengths, each definition by hand and against scipy."""

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.optimize import brentq

from kspipe.relations.state import LENGTHS, MASSES, STATE, critical_sphere
from kspipe.relations.state.jeans import (
    MU_ATOMIC,
    free_fall_time_myr,
    jeans_length_pc,
    jeans_mass_msun,
    sound_speed_kms,
)

FIVE_DIGITS = 5e-5
G, K, M_H = 6.6743e-8, 1.380649e-16, 1.6735328e-24
MSUN, PC = 1.98841e33, 3.0856775814913673e18


def mass(definition: str, t: float = 100.0, n: float = 100.0, **more: float) -> float:
    return float(jeans_mass_msun(t, n, definition=definition, **({"mu": 1.27} | more)))


@pytest.mark.parametrize(
    ("definition", "more", "expected"),
    [
        # T = 100 K, n_H = 100 cm-3, rho = 1.4 m_H n, mu = 1.27 unless said; worked from the
        # definitions and the constants.
        ("jeans_cube", {}, 5555.2),
        ("jeans_virial", {}, 5449.8),
        ("jeans_sphere", {}, 2908.7),
        ("jeans_cube", {"mu": 1.4}, 4799.7),
        ("jeans_sphere", {"mu": 1.0, "mass_per_h": 1.0}, 4925.7),
    ],
)
def test_worked_masses(definition: str, more: dict[str, float], expected: float) -> None:
    assert mass(definition, **more) == pytest.approx(expected, rel=FIVE_DIGITS)


@pytest.mark.parametrize(("mu", "expected"), [(1.27, 1179.2), (2.33, 474.53)])
def test_bonnor_ebert_mass_with_the_printed_coefficient(mu: float, expected: float) -> None:
    # The literature rounds the coefficient to 1.182; integrated it is 1.18223, 0.02 % more.
    got = mass("bonnor_ebert_surface", mu=mu) * 1.182 / critical_sphere().mass
    assert got == pytest.approx(expected, rel=FIVE_DIGITS)
    assert mass("bonnor_ebert_surface", mu=mu) == pytest.approx(expected, rel=3e-4)


def test_masses_by_their_definitions() -> None:
    t, n, mu = 37.0, 450.0, 2.1
    rho, c = 1.4 * M_H * n, math.sqrt(K * t / (mu * M_H))
    length = math.sqrt(math.pi) * c / math.sqrt(G * rho)
    by_hand = {
        "jeans_cube": rho * length**3,
        "jeans_sphere": rho * math.pi / 6 * length**3,
        "jeans_virial": (5 * K * t / (G * mu * M_H)) ** 1.5 * math.sqrt(3 / (4 * math.pi * rho)),
    }
    for definition, grams in by_hand.items():
        assert mass(definition, t, n, mu=mu) == pytest.approx(grams / MSUN, rel=1e-9)
    assert float(jeans_length_pc(t, n, mu=mu)) == pytest.approx(length / PC, rel=1e-9)
    # The virial form: a sphere of that mass and density has virial parameter 1 with thermal motion.
    m = by_hand["jeans_virial"]
    radius = (3 * m / (4 * math.pi * rho)) ** (1 / 3)
    assert 5 * c**2 * radius / (G * m) == pytest.approx(1.0, rel=1e-12)


def test_worked_lengths_and_times() -> None:
    assert float(jeans_length_pc(100.0, 100.0, mu=1.27)) == pytest.approx(11.707, rel=FIVE_DIGITS)
    assert float(free_fall_time_myr(100.0)) == pytest.approx(4.3488, rel=FIVE_DIGITS)
    assert float(sound_speed_kms(10.0, 2.33)) == pytest.approx(0.18817, rel=FIVE_DIGITS)


def test_powers() -> None:
    for definition in MASSES:
        assert mass(definition, 400) / mass(definition) == pytest.approx(8.0, rel=1e-12)
        assert mass(definition, n=400) / mass(definition) == pytest.approx(0.5, rel=1e-12)
        # At a pressure: T up by 4, n down by 4.
        assert mass(definition, 400, 25) / mass(definition) == pytest.approx(16.0, rel=1e-12)
    for definition in LENGTHS:
        one, four = (
            float(jeans_length_pc(t, 50.0, definition=definition, mu=1.27)) for t in (20.0, 80.0)
        )
        assert four / one == pytest.approx(2.0, rel=1e-12)


def test_the_critical_sphere_against_scipy() -> None:
    # The isothermal equation by another integrator (DOP853) from another start.
    def rate(xi, y):
        return [y[1], math.exp(-y[0]) - 2 * y[1] / xi]

    start = 1e-3
    solved = solve_ivp(
        rate, (start, 20), [start**2 / 6, start / 3], "DOP853", rtol=1e-12, atol=1e-14,
        dense_output=True,
    )  # fmt: skip
    xi = brentq(lambda x: 2 * math.exp(-solved.sol(x)[0]) - solved.sol(x)[1] ** 2, 3, 10)
    psi, slope = solved.sol(xi)
    sphere = critical_sphere()
    assert sphere.xi == pytest.approx(xi, rel=1e-8)
    assert sphere.contrast == pytest.approx(math.exp(psi), rel=1e-8)
    mass_ = xi**2 * slope * math.exp(-psi / 2) / math.sqrt(4 * math.pi)
    assert sphere.mass == pytest.approx(mass_, rel=1e-8)
    # The mean density by quadrature of the profile: 3/xi^3 x integral of e^(psi_s - psi) xi^2.
    grid = np.linspace(start, xi, 20001)
    profile = np.exp(psi - solved.sol(grid)[0]) * grid**2
    mean = 3 / xi**3 * float(np.trapezoid(profile, grid))
    assert sphere.mean_over_surface == pytest.approx(mean, rel=1e-6)


def test_the_critical_sphere_as_published() -> None:
    # Bonnor 1956; Ebert 1955: xi = 6.451, density contrast 14.04, mass coefficient 1.182.
    sphere = critical_sphere()
    assert round(sphere.xi, 3) == 6.451
    assert round(sphere.contrast, 2) == 14.04
    assert sphere.mass == pytest.approx(1.1822, rel=FIVE_DIGITS)
    assert sphere.radius == pytest.approx(0.48561, rel=FIVE_DIGITS)


def test_radius_in_jeans_lengths_depends_on_the_density_meant() -> None:
    length = LENGTHS["jeans_length"]
    surface = LENGTHS["bonnor_ebert_radius_surface"] / length
    mean = LENGTHS["bonnor_ebert_radius_mean"] / length
    assert surface == pytest.approx(0.27398, rel=FIVE_DIGITS)
    assert mean == pytest.approx(0.43012, rel=FIVE_DIGITS)


def test_one_sphere_by_either_density() -> None:
    # The same sphere, once by its surface and once by its mean density.
    ratio, t, n = critical_sphere().mean_over_surface, 20.0, 1e3
    by_surface = mass("bonnor_ebert_surface", t, n)
    assert mass("bonnor_ebert_mean", t, n * ratio) == pytest.approx(by_surface, rel=1e-12)
    rho = 1.4 * M_H * n * ratio
    radius = PC * float(
        jeans_length_pc(t, n * ratio, definition="bonnor_ebert_radius_mean", mu=MU_ATOMIC)
    )
    assert 4 / 3 * math.pi * radius**3 * rho / MSUN == pytest.approx(by_surface, rel=1e-9)


def test_the_records_state_their_coefficient() -> None:
    for key, coefficient in {**MASSES, **LENGTHS}.items():
        record = STATE.get(key)
        assert record.coefficient == coefficient
        assert f"{coefficient:.5g}" in record.formula

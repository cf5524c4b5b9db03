"""Optical depths and densities: published values, limits, derivatives."""

import math

import numpy as np
import pytest
from scipy.optimize import brentq

from kspipe.relations.state.density import (
    hydrostatic_density,
    hydrostatic_pressure_k_cm3,
    two_phase_density,
)
from kspipe.relations.state.depths import (
    alpha_g,
    complex_depth,
    takeover_depth,
    transition_column,
)

FIVE_DIGITS = 5e-5


def a(*values: float) -> tuple[np.ndarray, ...]:
    return tuple(np.array(float(v)) for v in values)


def test_depth_of_a_complex() -> None:
    # ApJ 693, 216: (3/4) Sigma 1e-21 Z' / (1.4 m_H) with m_H = 1.67353e-24 g.
    assert float(complex_depth(*a(1, 1))[0]) == pytest.approx(0.066850, rel=FIVE_DIGITS)
    # By hand, for a sphere: n sigma_d R where pi R^2 Sigma = (4/3) pi R^3 rho.
    rho, radius = 3e-22, 2e19
    sigma = 4 / 3 * radius * rho / (1.98841e33 / 3.0856776e18**2)
    by_hand = rho / (1.4 * 1.6735328e-24) * 1e-21 * 0.4 * radius
    assert float(complex_depth(*a(sigma, 0.4))[0]) == pytest.approx(by_hand, rel=1e-6)


@pytest.mark.parametrize("sigma", [0.0, -3.0, np.nan])
def test_no_gas_has_no_depth(sigma: float) -> None:
    depth, partials = complex_depth(*a(sigma, 1))
    assert np.isnan(depth)
    assert np.isnan(partials["sigma_complex"])


def test_takeover_by_definition() -> None:
    # Where 4e-26 chi Z' e^-tau falls to 2e-27 zeta' (ApJ 731, 25).
    for chi, zeta, z in ((1, 1, 1), (5, 2, 0.3), (1, 10, 0.1)):
        tau = float(takeover_depth(*a(chi, zeta, z))[0])
        assert 4e-26 * chi * z * math.exp(-tau) == pytest.approx(2e-27 * zeta, rel=1e-12)
    # Cosmic rays that win at the surface are not hidden behind a zero.
    assert float(takeover_depth(*a(1, 100, 1))[0]) < 0
    assert np.isnan(takeover_depth(*a(0, 1, 1))[0])


def test_transition_values() -> None:
    # Sternberg et al. 2014, alphaG at I = 1, n = 100, Z' = 1; Bialy & Sternberg 2016, N_tr.
    assert float(alpha_g(*a(1, 100, 1))[0]) == pytest.approx(0.58671, rel=FIVE_DIGITS)
    assert float(alpha_g(*a(1, 100, 0.2))[0]) == pytest.approx(0.89191, rel=FIVE_DIGITS)
    assert float(transition_column(*a(10, 1))[0]) == pytest.approx(8.8230e20, rel=FIVE_DIGITS)


def test_transition_limits() -> None:
    # Weak field: the column before the H2 itself shields, 0.7 (alphaG/2)^(1/0.7) / sigma.
    weak = float(transition_column(*a(1e-4, 1))[0])
    assert weak == pytest.approx(0.7 * (0.5e-4) ** (1 / 0.7) / 1.9e-21, rel=1e-5)
    # Strong field: dust, N = ln(alphaG/2) / sigma, which is also the beamed total HI column
    # ln(alphaG/2 + 1) / sigma of Sternberg et al. 2014.
    strong = float(transition_column(*a(1e6, 1))[0])
    assert strong == pytest.approx(math.log(0.5e6 + 1) / 1.9e-21, rel=1e-5)
    assert float(transition_column(*a(1e6, 0.5))[0]) == pytest.approx(2 * strong, rel=1e-12)


def test_densities() -> None:
    # Krumholz 2013: n of two phases, and P_th/k for S_HI = 8, S_H2 = 2, rho = 0.05.
    assert float(two_phase_density(*a(1, 1))[0]) == pytest.approx(23.000, rel=FIVE_DIGITS)
    assert float(hydrostatic_pressure_k_cm3(*a(8, 2), 0.05)[0]) == pytest.approx(
        2436.8, rel=FIVE_DIGITS
    )
    assert float(hydrostatic_density(*a(8, 2), 0.05)[0]) == pytest.approx(
        2436.8 / (1.1 * 243), rel=FIVE_DIGITS
    )
    # Without stars and H2 the pressure is pi G S^2 / (2 a), a = 5: 33.0 K cm-3 per (Msun/pc2)^2
    # over 10, from pi G/2 (Msun/pc2)^2 / k = 33.0 K cm-3 by the constants.
    per = math.pi / 2 * 6.6743e-8 * (1.98841e33 / 3.0856776e18**2) ** 2 / 1.380649e-16
    alone = float(hydrostatic_pressure_k_cm3(*a(10, 0), 0.0)[0])
    assert alone == pytest.approx(per * 100 / 5, rel=1e-6)


def test_hydrostatic_balance_by_its_own_equation() -> None:
    # The positive root of a P^2 - (pi G/2) S^2 (1 + 2R) P - 2 pi G zeta_d rho f_w c_w^2 S^2 P_..:
    # written as P = (pi G/4a) S (S + 2M) + [the same squared + K]^0.5, so P^2 - 2 A P = K.
    s, m, rho, g = 12.0, 5.0, 0.03, 4.30092e-3
    a_term = math.pi * g / 20 * s * (s + 2 * m)
    k_term = (math.pi * g / 20) ** 2 * 32 * 0.33 * 5 * 0.5 * 64 * rho / (math.pi * g) * s**2
    p = brentq(lambda p: p**2 - 2 * a_term * p - k_term, 0, 1e3)
    unit = 1.98841e33 / 3.0856776e18**3 * 1e10 / 1.380649e-16
    assert float(hydrostatic_pressure_k_cm3(*a(s, m), rho)[0]) == pytest.approx(p * unit, rel=1e-4)


@pytest.mark.parametrize("atom", [0.0, -1.0])
def test_no_atomic_gas_has_no_hydrostatic_density(atom: float) -> None:
    assert np.isnan(hydrostatic_density(*a(atom, 3), 0.05)[0])


@pytest.mark.parametrize(
    ("function", "at"),
    [
        (complex_depth, {"sigma_complex": 40.0, "z_prime": 0.7}),
        (takeover_depth, {"chi": 2.0, "zeta_prime": 0.8, "z_prime": 0.7}),
        (alpha_g, {"chi": 2.0, "density": 80.0, "z_prime": 0.7}),
        (transition_column, {"alpha": 1.3, "z_prime": 0.7}),
        (two_phase_density, {"chi": 2.0, "z_prime": 0.7}),
        (
            lambda s, m: hydrostatic_density(s, m, 0.04),
            {"sigma_atom": 8.0, "sigma_mol": 3.0},
        ),
        (
            lambda s, m: hydrostatic_density(s, m, 0.04),
            {"sigma_atom": 8.0, "sigma_mol": -1.0},
        ),
    ],
    ids=["complex", "takeover", "alphaG", "transition", "two-phase", "hydrostatic", "negative H2"],
)
def test_derivatives(function, at) -> None:
    value, partials = function(*a(*at.values()))
    assert set(partials) == set(at)
    for name, x in at.items():
        h = 1e-5 * x
        up = function(*a(*(at | {name: x + h}).values()))[0]
        down = function(*a(*(at | {name: x - h}).values()))[0]
        assert float(partials[name]) == pytest.approx(float((up - down) / (2 * h)), rel=1e-7)
    assert np.isfinite(value)

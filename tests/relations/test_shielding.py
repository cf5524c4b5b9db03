"""Krumholz, McKee & Tumlinson 2009: published values, limits, properties, a second form.

Codes such as C703 number the worked check values of the project's reference sheet; five printed
digits are worth 5e-5.
"""

import math

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

from kspipe.relations import LAWS
from kspipe.relations.law import Prediction
from kspipe.relations.shielding import krumholz2009_fraction

FIVE_DIGITS = 5e-5
LAW = LAWS.get("krumholz2009")
SOLAR = 8.69

fixed = settings(derandomize=True, deadline=None, max_examples=120)
# The declared range of metallicity, 0.05 to 10 solar (less rounding at its ends), and every surface
# density of a galaxy.
log_sigma = st.floats(-1.0, 4.0)
oh_in_range = st.floats(SOLAR + math.log10(0.05) + 1e-9, SOLAR + 1.0 - 1e-9)
clumpings = st.floats(1.0, 20.0)


def fraction(sigma: float, z_prime: float) -> float:
    return float(krumholz2009_fraction(np.array(sigma), np.array(z_prime)))


def predict(sigma: object, oh: object, clumping: float = 5.0, **more: float) -> Prediction:
    inputs = {"sigma_gas": np.asarray(sigma, dtype=float), "oh": np.asarray(oh, dtype=float)}
    return LAW.predict(inputs, {"clumping": clumping, **more})


# --- published values ----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("sigma", "z_prime", "expected"),
    [
        # ApJ 699, 850, Eq. 2 (ApJ 693, 216).
        pytest.param(10, 1.0, 0.014182, id="C702"),
        pytest.param(50, 1.0, 0.64060, id="C703"),
        pytest.param(100, 1.0, 0.81236, id="C704"),
        pytest.param(50, 0.3, 0.16099, id="C705"),
    ],
)
def test_molecular_fraction(sigma: float, z_prime: float, expected: float) -> None:
    assert fraction(sigma, z_prime) == pytest.approx(expected, rel=FIVE_DIGITS)


@pytest.mark.parametrize(
    ("z_prime", "clumping", "expected"),
    [
        pytest.param(1.0, 1.0, 35.049, id="C706"),
        pytest.param(1.0, 5.0, 7.0098, id="C707"),
        pytest.param(0.3, 5.0, 19.110, id="C708"),
    ],
)
def test_where_half_of_the_gas_is_molecular(
    z_prime: float, clumping: float, expected: float
) -> None:
    oh = SOLAR + math.log10(z_prime)
    half = brentq(lambda sigma: float(predict(sigma, oh, clumping).f_mol) - 0.5, 1.0, 500.0)
    assert half == pytest.approx(expected, rel=FIVE_DIGITS)


@pytest.mark.parametrize(
    ("sigma", "z_prime", "expected"),
    [
        # ApJ 699, 850, Eq. 10, clumping 5.
        pytest.param(10, 1.0, 0.0049925, id="C710"),
        pytest.param(50, 1.0, 0.021118, id="C711"),
        pytest.param(200, 1.0, 0.099990, id="C712"),
        pytest.param(10, 0.2, 3.6450e-04, id="C713"),
    ],
)
def test_star_formation(sigma: float, z_prime: float, expected: float) -> None:
    got = predict(sigma, SOLAR + math.log10(z_prime))
    assert float(got.sigma_sfr) == pytest.approx(expected, rel=FIVE_DIGITS)


def test_traps() -> None:
    # C1001: 20 Msun/pc2 at kpc scale; C902: helium forgotten at 50; C920: clumping forgotten.
    assert float(predict(20, SOLAR).f_mol) == pytest.approx(0.81236, rel=FIVE_DIGITS)
    assert fraction(50, 1) / fraction(50 / 1.36, 1) == pytest.approx(1.2283, rel=FIVE_DIGITS)
    f = float(predict(7.0098, SOLAR, 5.0).f_mol)
    assert fraction(7.0098 * 5.0000, 1) == pytest.approx(f, rel=1e-12)


# --- limits --------------------------------------------------------------------------------------


@pytest.mark.parametrize("z_prime", [0.05, 0.3, 1.0, 10.0])
def test_the_atomic_layer_of_a_thick_complex(z_prime: float) -> None:
    # As s goes to 0, (1 - f) Sigma goes to 0.75 ln(1 + 0.6 chi) / (0.04 Z'): Eq. 2 by hand.
    chi = 0.77 * (1 + 3.1 * z_prime**0.365)
    layer = 0.75 * math.log1p(0.6 * chi) / (0.04 * z_prime)
    if z_prime == 1.0:
        assert layer == pytest.approx(19.926, rel=FIVE_DIGITS)  # C709
    sigma = 1e5 * layer
    # What is neglected: delta = 0.0712 (s / 0.1)^2.8 with s = 1.3e-5, and the rounding of 1 - f.
    assert (1 - fraction(sigma, z_prime)) * sigma == pytest.approx(layer, rel=1e-9)


def test_the_dust_cross_section_behind_the_coefficient() -> None:
    # tau_c = (3/4) Sigma 1e-21 Z' / (1.4 m_H) = 0.066850 Sigma Z' (C701), and s divides by 0.6 of
    # it; the paper rounds to 0.04, two digits.
    sun_pc2 = 1.98841e33 / 3.0856776e18**2
    tau = 0.75 * 1e-21 * sun_pc2 / (1.4 * 1.6735328e-24)
    assert tau == pytest.approx(0.066850, rel=FIVE_DIGITS)
    sigma = 2e6
    layer = (1 - fraction(sigma, 1.0)) * sigma
    assert 0.75 * math.log1p(0.6 * 0.77 * 4.1) / layer == pytest.approx(0.6 * tau, abs=0.0005)


@pytest.mark.parametrize("z_prime", [0.1, 1.0])
def test_the_tail_of_thin_gas(z_prime: float) -> None:
    # As s grows f goes to q^-5 / 5 and q to s: the fifth power of the surface density, to 1e-12.
    thin, half = fraction(0.02, z_prime), fraction(0.01, z_prime)
    assert thin > 0
    assert math.log2(thin / half) == pytest.approx(5.0, abs=0.001)


def test_the_depletion_time_of_molecular_gas() -> None:
    # 2.6 Gyr at 85 Msun/pc2, as (Sigma / 85)^0.33 below and ^-0.33 above.
    sigma = np.array([8.5, 42.5, 85.0, 170.0, 850.0])
    got = predict(sigma, SOLAR)
    gyr = got.f_mol * sigma / got.sigma_sfr / 1e3
    ratio = sigma / 85
    np.testing.assert_allclose(gyr, 2.6 * np.minimum(ratio, 1 / ratio) ** 0.33, rtol=1e-13)
    # Leroy et al. 2013 measure 2.2 Gyr with a scatter of 0.3 dex in discs.
    discs = (sigma > 5) & (sigma < 200)
    assert np.abs(np.log10(gyr[discs] / 2.2)).max() < 0.35


def test_at_85_the_value_is_one_and_the_slope_is_two() -> None:
    below, above = predict(85 * (1 - 1e-12), SOLAR), predict(85.0, SOLAR)
    assert float(below.sigma_sfr) == pytest.approx(float(above.sigma_sfr), rel=1e-11)
    slopes = [
        float(p.derivatives["sigma_sfr"]["sigma_gas"] * 85 / p.sigma_sfr) for p in (below, above)
    ]
    # d ln Sigma_SFR / d ln Sigma jumps from x - 0.33 to x + 0.33 (Eq. 10).
    assert slopes[1] - slopes[0] == pytest.approx(0.66, rel=1e-9)


# --- properties ----------------------------------------------------------------------------------


@fixed
@given(x=log_sigma, oh=oh_in_range, clumping=clumpings)
def test_a_fraction_is_a_fraction(x: float, oh: float, clumping: float) -> None:
    got = predict(10**x, oh, clumping)
    assert 0 <= float(got.f_mol) <= 1
    assert 0 <= float(got.sigma_sfr) < math.inf
    assert not got.no_solution
    assert not got.outside_range


@fixed
@given(x=log_sigma, dx=st.floats(1e-3, 1.0), oh=oh_in_range, doh=st.floats(1e-3, 1.0), c=clumpings)
def test_more_gas_and_more_metals_never_mean_less(
    x: float, dx: float, oh: float, doh: float, c: float
) -> None:
    base = predict(10**x, oh, c)
    for other in (predict(10 ** (x + dx), oh, c), predict(10**x, oh + doh, c)):
        assert float(other.f_mol) > float(base.f_mol)
        assert float(other.sigma_sfr) > float(base.sigma_sfr)
    for slopes in base.derivatives.values():
        assert all(float(slope) > 0 for slope in slopes.values())
    assert {n: d.sign for n, d in LAW.monotonic.items()} == {"sigma_gas": 1, "oh": 1}
    assert all(d.holds is None for d in LAW.monotonic.values())


@fixed
@given(x=log_sigma, oh=oh_in_range, clumping=clumpings)
def test_derivatives_are_central_differences(x: float, oh: float, clumping: float) -> None:
    sigma = 10**x
    assume(abs(sigma / 85 - 1) > 1e-3)  # the slope jumps there
    got = predict(sigma, oh, clumping)
    # Over a step h of a power of at most 6 the difference errs by (6 h)^2 / 6, or by rounding.
    step = 2e-4
    pairs = {
        "sigma_gas": (predict(sigma * (1 + step), oh, clumping),
                      predict(sigma * (1 - step), oh, clumping), 2 * step * sigma),
        "oh": (predict(sigma, oh + step, clumping),
               predict(sigma, oh - step, clumping), 2 * step),
    }  # fmt: skip
    for name, (more, less, width) in pairs.items():
        for product in ("f_mol", "sigma_sfr"):
            value = float(getattr(got, product))
            expected = float(getattr(more, product) - getattr(less, product)) / width
            assert float(got.derivatives[product][name]) == pytest.approx(
                expected, rel=1e-5, abs=2e-15 * value / width
            )


@fixed
@given(x=log_sigma, oh=oh_in_range, clumping=clumpings)
def test_clumping_is_a_denser_complex(x: float, oh: float, clumping: float) -> None:
    # Only the product of clumping and surface density enters the fraction (Sect. 2 of the paper).
    clumped, dense = predict(10**x, oh, clumping), predict(clumping * 10**x, oh, 1.0)
    assert float(clumped.f_mol) == pytest.approx(float(dense.f_mol), rel=1e-12)


@fixed
@given(x=log_sigma, oh=oh_in_range, anchor=st.floats(8.0, 9.5))
def test_metallicity_enters_relative_to_its_anchor(x: float, oh: float, anchor: float) -> None:
    moved = predict(10**x, oh - SOLAR + anchor, anchor_oh=anchor)
    assert float(moved.sigma_sfr) == pytest.approx(float(predict(10**x, oh).sigma_sfr), rel=1e-11)


# --- a second published form ---------------------------------------------------------------------


def mckee2010(sigma: np.ndarray, z_prime: np.ndarray) -> np.ndarray:
    """McKee & Krumholz 2010, ApJ 709, 308: molecular fraction of a complex."""
    tau = 0.066 * sigma * z_prime
    chi = 0.756 * (1 + 3.1 * z_prime**0.365)
    s = np.log(1 + 0.6 * chi + 0.01 * chi**2) / (0.6 * tau)
    return np.where(s < 2, 1 - 0.75 * s / (1 + 0.25 * s), 0.0)


def test_the_second_form_in_this_file() -> None:
    got = mckee2010(np.array([20.0, 50.0, 10.0]), np.ones(3))
    np.testing.assert_allclose(got, [0.23530, 0.63889, 0.0], rtol=FIVE_DIGITS)  # C714 to C716


def test_the_two_forms_agree() -> None:
    z_prime, sigma = np.meshgrid(np.geomspace(0.05, 10.0, 120), np.geomspace(1.0, 1e4, 300))
    first = krumholz2009_fraction(sigma, z_prime)
    second = mckee2010(sigma, z_prime)
    # Their coefficients differ by 2 %: within 0.05 once a tenth is molecular; below that the first
    # has a tail and the second is cut to zero.
    known = first > 0.1
    assert np.abs(first - second)[known].max() < 0.05
    assert np.all(second[~known] < 0.15)
    assert np.all(first[second == 0] > 0)


# --- edges of the input --------------------------------------------------------------------------


def test_no_gas_no_stars() -> None:
    for zero in (0.0, -0.0):
        got = predict([zero, zero], [SOLAR, 7.5])
        assert np.array_equal(got.sigma_sfr, np.zeros(2))
        assert np.array_equal(got.f_mol, np.zeros(2))
        assert not got.no_solution.any()
        for slopes in got.derivatives.values():
            assert all(np.array_equal(slope, np.zeros(2)) for slope in slopes.values())


@pytest.mark.parametrize("sigma", [-1e-6, -3.0, math.nan])
def test_less_than_no_gas_has_no_prediction(sigma: float) -> None:
    got = predict([sigma, 20.0], SOLAR)
    assert np.array_equal(np.isnan(got.sigma_sfr), [True, False])
    assert np.array_equal(np.isnan(got.f_mol), [True, False])
    assert np.array_equal(got.no_solution, [True, False])
    for slopes in got.derivatives.values():
        assert all(np.array_equal(np.isnan(slope), [True, False]) for slope in slopes.values())


@pytest.mark.parametrize("sigma", [-1.0, 0.0, 5.0, 200.0, math.nan])
@pytest.mark.parametrize("oh", [SOLAR, 7.0, math.nan])
def test_no_solution_means_no_value(sigma: float, oh: float) -> None:
    got = predict(sigma, oh)
    assert bool(got.no_solution) == math.isnan(got.sigma_sfr)


def test_outside_the_range_of_metallicity() -> None:
    edges = SOLAR + np.log10([0.05, 10.0])
    oh = np.array([edges[0] - 0.01, edges[0] + 0.01, SOLAR, edges[1] - 0.01, edges[1] + 0.01])
    got = predict(np.full(5, 20.0), oh)
    assert np.array_equal(got.outside_range, [True, False, False, False, True])
    # Flagged, yet still a value.
    assert np.all(np.isfinite(got.sigma_sfr))
    # The range is one of Z', wherever the anchor is.
    moved = predict(np.full(5, 20.0), oh + 0.07, anchor_oh=8.76)
    assert np.array_equal(moved.outside_range, got.outside_range)


def test_no_arithmetic_warning_over_the_range() -> None:
    sigma, oh = np.meshgrid(np.r_[0.0, -1.0, np.nan, np.geomspace(1e-3, 1e5, 30)], [7.4, 8.69, 9.6])
    with np.errstate(all="raise", under="ignore"):
        predict(sigma, oh)

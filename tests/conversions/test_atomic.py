"""Atomic gas: published values, and the coefficient from other sides.

Codes such as C104 number the worked check values of the project's reference sheet.
"""

import math

import numpy as np
import pytest

from kspipe.conversions import ATOMIC, Choices, Parameters, convert
from kspipe.core.constants import HELIUM_FACTOR

THIN = ATOMIC.get("leroy2008_thin")
FIVE_DIGITS = 5e-5
M_H, M_SUN, PC = 1.6735328e-24, 1.98841e33, 3.0856776e18


def sigma_atom(intensity_k_kms: float, inclination_deg: float) -> float:
    maps = {"HI": np.array([intensity_k_kms]), "FUV": np.zeros(1), "24um": np.zeros(1)}
    parameters = Parameters(cos_i=math.cos(math.radians(inclination_deg)))
    return float(convert(maps, Choices("leroy2008_fuv_24um"), parameters).values["sigma_atom"][0])


def test_published_coefficients() -> None:
    # N_HI = 1.823e18 I_HI (common practice): C102 to C106.
    assert 100 * THIN.column_per_k_kms == pytest.approx(1.8230e20, rel=FIVE_DIGITS)
    assert THIN.msun_pc2_per_k_kms == pytest.approx(0.019868, rel=FIVE_DIGITS)
    assert THIN.msun_pc2_per_k_kms / HELIUM_FACTOR == pytest.approx(0.014609, rel=FIVE_DIGITS)
    per_column = THIN.msun_pc2_per_k_kms / THIN.column_per_k_kms
    assert 1e21 * per_column == pytest.approx(10.899, rel=FIVE_DIGITS)
    assert 1e21 * per_column / HELIUM_FACTOR == pytest.approx(8.0136, rel=FIVE_DIGITS)
    # Leroy et al. 2008, Eq. A1 prints 0.020 with helium (from memory): two digits.
    assert THIN.msun_pc2_per_k_kms == pytest.approx(0.020, abs=0.0005)


@pytest.mark.parametrize(
    ("intensity", "inclination", "expected", "half_digit"),
    [
        pytest.param(500, 60, 4.9670, 0.00005 * 5, id="C107"),
        pytest.param(100, 60, 0.993, 0.0005, id="hand number"),
        pytest.param(100, 0, 1.9868, 0.00005 * 2, id="face-on"),
    ],
)
def test_a_tilted_disc(
    intensity: float, inclination: float, expected: float, half_digit: float
) -> None:
    assert sigma_atom(intensity, inclination) == pytest.approx(expected, abs=half_digit)


def test_the_coefficient_from_atomic_constants() -> None:
    # N = (4/3) 8 pi k nu^2 / (h c^3 A10) per K km/s with A10 = 2.86888e-15 /s (from memory) and
    # constants of CODATA: 0.03 % below the 1.823e18 of the observational papers, one unit of its
    # last digit; the whole literature spans 1.813 to 1.823e18.
    k, h, c = 1.380649e-16, 6.62607015e-27, 2.99792458e10
    column = 32 * math.pi * k * 1.420405751768e9**2 / (3 * h * c**3 * 2.86888e-15) * 1e5
    assert column == pytest.approx(1.8225e18, rel=FIVE_DIGITS)  # C101
    expected = 1.36 * M_H * column * PC**2 / M_SUN
    assert THIN.msun_pc2_per_k_kms == pytest.approx(expected, rel=0.001 / 1.823)


def test_a_solar_mass_per_square_parsec_in_atoms() -> None:
    # 1 Msun/pc2 of hydrogen is 1.25e20 atoms per cm2 (common practice, three digits).
    atoms = THIN.column_per_k_kms / (THIN.msun_pc2_per_k_kms / HELIUM_FACTOR)
    assert atoms == pytest.approx(1.25e20, abs=0.005e20)


def test_helium_counts_once() -> None:
    hydrogen = THIN.column_per_k_kms * M_H * PC**2 / M_SUN
    assert THIN.msun_pc2_per_k_kms / hydrogen == pytest.approx(1.36, rel=1e-6)
    assert THIN.helium_factor == 1.36

"""The CO-to-H2 factor: published values, limits and other published forms.

Codes such as C123 number the worked check values of the project's reference sheet.
"""

import math

import numpy as np
import pytest

from kspipe.conversions import ALPHA_CO, Choices, Parameters, convert

FIVE_DIGITS = 5e-5


def sigma_mol(
    line: str, k_kms: float, key: str, *, inclination_deg: float, **given: float
) -> float:
    maps = {line: np.array([k_kms]), "FUV": np.zeros(1), "24um": np.zeros(1)}
    parameters = Parameters(cos_i=math.cos(math.radians(inclination_deg)), **given)
    choices = Choices("leroy2008_fuv_24um", alpha_co=key)
    return float(convert(maps, choices, parameters).values["sigma_mol"][0])


def test_surface_densities() -> None:
    # Sigma_mol = alpha I_CO(2-1) / R21 cos i, alpha = 4.35 with helium.
    got = sigma_mol("CO(2-1)", 10, "bolatto2013_galactic", inclination_deg=30, line_ratio=0.65)
    assert got == pytest.approx(57.957, rel=FIVE_DIGITS)  # C123
    got = sigma_mol("CO(2-1)", 1, "bolatto2013_galactic", inclination_deg=0, line_ratio=0.65)
    assert got == pytest.approx(6.69, abs=0.005)
    # C903, C904: CO(2-1) or CO(3-2) taken for CO(1-0), R21 = 0.65, R31 = 0.31 (Leroy et al. 2022).
    for line, ratio, dex in (("CO(2-1)", 0.65, 0.18709), ("CO(3-2)", 0.31, 0.50864)):
        right = sigma_mol(line, 1, "bolatto2013_galactic", inclination_deg=0, line_ratio=ratio)
        wrong = sigma_mol("CO(1-0)", 1, "bolatto2013_galactic", inclination_deg=0)
        assert math.log10(right / wrong) == pytest.approx(dex, rel=FIVE_DIGITS)


def test_the_galactic_value_from_x_co() -> None:
    # X_CO = 2e20 H2 per cm2 per K km/s (Bolatto et al. 2013) times 2 m_H: C121, C122. Papers print
    # 4.35 or 4.36 for it, 3.2 without helium.
    h2 = 2e20 * 2 * 1.6735328e-24 * 3.0856776e18**2 / 1.98841e33
    assert h2 == pytest.approx(3.2055, rel=FIVE_DIGITS)
    assert 1.36 * h2 == pytest.approx(4.3594, rel=FIVE_DIGITS)
    record = ALPHA_CO.get("bolatto2013_galactic")
    assert float(record(np.array(1.0))) == pytest.approx(1.36 * h2, abs=0.01)
    assert float(record(np.array(1.0))) / record.helium_factor == pytest.approx(3.2, abs=0.05)


def test_the_galactic_value_knows_no_metallicity() -> None:
    record = ALPHA_CO.get("bolatto2013_galactic")
    z_prime = np.array([[0.01, 1.0, 50.0], [np.nan, 0.0, 3.0]])
    assert np.array_equal(record(z_prime), np.full((2, 3), 4.35))
    assert not record.depends_on_z


def test_sun2020() -> None:
    record = ALPHA_CO.get("sun2020")
    # Sun et al. 2020: 4.35 Z'^-1.6; C213 at Z' = 0.5; at solar metallicity the Galactic value.
    assert float(record(np.array(0.5))) == pytest.approx(13.187, rel=FIVE_DIGITS)
    assert float(record(np.array(1.0))) == 4.35
    # C918: 0.2 dex between two metallicity scales are 0.32 dex in alpha.
    low, high = record(10.0 ** np.array([-0.2, 0.0]))
    assert math.log10(low / high) == pytest.approx(0.32000, rel=FIVE_DIGITS)
    assert record.depends_on_z


def test_sun2020_against_other_forms() -> None:
    record = ALPHA_CO.get("sun2020")
    z_prime = np.geomspace(0.2, 2.0, 20)
    oh = 8.69 + np.log10(z_prime)
    # Schinnerer & Leroy 2024, Table 1 (exponents from memory): 4.35 Z'^-1.5 where stars are thin.
    # The slopes differ by 0.1 over at most log 5 = 0.7 dex.
    later = 4.35 * z_prime**-1.5
    assert np.abs(np.log10(record(z_prime) / later)).max() <= 0.1 * math.log10(5) + 1e-12
    # Genzel et al. 2012, Eq. 7: log alpha = 12.0 - 1.3 OH; its scale differs by log(5.05 / 4.35)
    # and its slope by 0.3 over 0.7 dex.
    earlier = 10 ** (12.0 - 1.3 * oh)
    bound = math.log10(5.0466 / 4.35) + 0.3 * math.log10(5)
    assert np.abs(np.log10(record(z_prime) / earlier)).max() <= bound
    # Schruba et al. 2012, Table 7, 8.0 10^(-2.0 (OH - 8.7)), is the steepest published: above at
    # low metallicity.
    assert np.all(record(z_prime) < 8.0 * 10 ** (-2.0 * (oh - 8.7)))


def test_metallicity_that_is_not_known_gives_nothing() -> None:
    assert np.isnan(ALPHA_CO.get("sun2020")(np.array([np.nan, 1.0]))[0])
    assert math.isnan(sigma_mol("CO(1-0)", 1, "sun2020", inclination_deg=0, z_prime=math.nan))

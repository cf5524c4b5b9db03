"""What every observer of cold gas knows, each under a written definition.

All are common practice without one source; the numbers in brackets are those of the formulas that
the definition names.
"""

import math

import numpy as np
import pytest
from scipy.optimize import brentq

from kspipe.relations import LAWS
from kspipe.relations.state import LENGTHS, TURBULENCE, Conditions, Forcing, Mach1D, gas_state
from kspipe.relations.state.depths import alpha_g, takeover_depth, transition_column
from kspipe.relations.state.jeans import jeans_mass_msun
from kspipe.relations.state.thermal import gas_temperature

ONE = np.array(1.0)
STANDARD = Conditions(density=100.0, chi=1.0, zeta_prime=1.0, clumping=1.0)


def temperature(tau: float) -> float:
    """Of gas with 100 H nuclei per cm3, Z' = chi = zeta' = 1, at an optical depth."""
    return float(gas_temperature(100 * ONE, ONE, ONE, ONE, tau).kelvin)


def test_unshielded_gas_near_100_k_and_shielded_gas_near_23_k() -> None:
    assert temperature(0.0) == pytest.approx(94.0, rel=0.01)
    assert temperature(5.0) == pytest.approx(23.4, rel=0.01)
    assert temperature(0.0) == pytest.approx(100, rel=0.1)
    assert temperature(5.0) == pytest.approx(23, rel=0.03)


def test_cosmic_rays_take_over_at_an_optical_depth_of_about_3() -> None:
    tau = float(takeover_depth(ONE, ONE, ONE)[0])
    assert tau == pytest.approx(math.log(20), rel=1e-12)
    assert tau == pytest.approx(3.0, abs=0.01)


@pytest.mark.parametrize("definition", ["jeans_cube", "jeans_virial"])
def test_a_jeans_mass_near_5000_suns(definition: str) -> None:
    # At 100 K and 100 per cm3: rho lambda_J^3, or the virial form; mu = 1.27, rho = 1.4 m_H n.
    got = float(jeans_mass_msun(100.0, 100.0, definition=definition, mu=1.27))
    assert got == pytest.approx(5000, rel=0.12)


def test_shielding_makes_the_jeans_mass_8_and_16_times_less() -> None:
    # One mass per particle for both, so that the temperature alone counts.
    warm, cold = temperature(0.0), temperature(5.0)
    mass = [
        float(jeans_mass_msun(t, n, definition="jeans_cube", mu=1.27))
        for t, n in ((warm, 100.0), (cold, 100.0), (cold, 100.0 * warm / cold))
    ]
    assert mass[0] / mass[1] == pytest.approx(8.0, rel=0.02)
    assert mass[0] / mass[2] == pytest.approx(16.0, rel=0.02)


def test_the_same_from_the_state_of_a_pixel() -> None:
    same = Conditions(
        density=100.0, chi=1.0, zeta_prime=1.0, clumping=1.0, shielded_depth=5.0, mu_shielded=1.27
    )
    got = gas_state({"sigma_gas": 20 * ONE, "z_prime": ONE}, same)
    warm = float(got["jeans_mass_unshielded"].value)
    assert warm / float(got["jeans_mass_shielded"].value) == pytest.approx(8.0, rel=0.02)
    assert warm / float(got["jeans_mass_equal_pressure"].value) == pytest.approx(16.0, rel=0.02)


def test_a_bonnor_ebert_radius_near_04_jeans_lengths() -> None:
    # With the mean density of the sphere; with that of its surface it is 0.27.
    ratio = LENGTHS["bonnor_ebert_radius_mean"] / LENGTHS["jeans_length"]
    assert ratio == pytest.approx(0.4, abs=0.05)
    assert LENGTHS["bonnor_ebert_radius_surface"] / LENGTHS["jeans_length"] < 0.3


def test_turbulent_models_span_more_than_a_factor_of_ten() -> None:
    # A cloud of virial parameter 1 and Mach 10 in three dimensions, natural forcing, no field.
    mach = Mach1D(10 / math.sqrt(3) * ONE)
    eps = {m.key: float(m.efficiency(ONE, mach, Forcing()).value) for m in TURBULENCE}
    assert max(eps.values()) / min(eps.values()) > 10
    # Their geometric mean is of order 0.1, against about 0.01 in clouds.
    mean = math.exp(sum(map(math.log, eps.values())) / len(eps))
    assert 10**-1.5 < mean < 10**-0.5
    assert mean > 3 * 0.01


def test_the_transition_moves_deeper_at_low_metallicity_but_slower_than_one_over_z() -> None:
    # Column of the HI-H2 transition at n = 100, chi = 1: in gas, per Z'.
    z = np.array([1.0, 0.3, 0.1])
    column = transition_column(alpha_g(ONE, 100 * ONE, z)[0], z)[0]
    assert np.all(np.diff(column) > 0)
    # In dust the depth grows too, because H2 forms more slowly: the column alone rises faster
    # than 1/Z'. It is Sigma_gas at half H2 of the fraction that rises more slowly (below).
    assert np.all(np.diff(column * z) > 0)


def test_half_of_the_gas_is_molecular_at_higher_columns_where_metals_are_few() -> None:
    # Krumholz, McKee & Tumlinson 2009: Sigma at f = 1/2 goes somewhat more slowly than 1/Z'.
    law = LAWS.get("krumholz2009")

    def f_mol(sigma: float, z: float) -> float:
        inputs = {"sigma_gas": sigma * ONE, "oh": 8.69 + math.log10(z) * ONE}
        return float(law.predict(inputs, {"clumping": 1.0}).f_mol)

    def half(z: float) -> float:
        return brentq(lambda sigma: f_mol(sigma, z) - 0.5, 1, 1e4)

    for z in (0.5, 0.3, 0.1, 0.06):
        assert 1.0 < half(z) / half(1.0) < 1.0 / z
    slope = math.log(half(0.1) / half(1.0)) / math.log(10)
    assert 0.7 < slope < 1.0

"""The whole state on arrays: its own functions put together, derivatives, losses, choices."""

from dataclasses import replace

import numpy as np
import pytest

from kspipe.core.citations import cite
from kspipe.relations.state import (
    LINEWIDTH_SIZE,
    QUANTITIES,
    STATE,
    TURBULENCE,
    Conditions,
    gas_state,
)
from kspipe.relations.state.density import hydrostatic_density, two_phase_density
from kspipe.relations.state.thermal import gas_temperature, isobaric_temperature

FULL = Conditions(
    density="larger",
    chi="star formation",
    zeta_prime="field",
    clumping=3.0,
    density_clumping=8.0,
    midplane_msun_pc3=0.05,
    cloud_radius_pc=40.0,
    turbulence=tuple(TURBULENCE.keys()),
)
AT = {
    "sigma_gas": np.array([12.0, 40.0, 150.0]),
    "sigma_atom": np.array([9.0, 10.0, 12.0]),
    "sigma_mol": np.array([3.0, 30.0, 138.0]),
    "sigma_sfr": np.array([4e-3, 2e-2, 1e-2]),
    "z_prime": np.array([0.5, 1.0, 1.4]),
    "linewidth": np.array([4.0, 6.0, 9.0]),
}
TYPED = Conditions(density=100.0, chi=1.0, zeta_prime=1.0, clumping=5.0)


def test_everything_is_told() -> None:
    assert set(gas_state(AT, FULL)) == set(QUANTITIES)
    less = set(gas_state({n: AT[n] for n in ("sigma_gas", "z_prime")}, TYPED))
    moving = {"linewidth", "mach", "virial_parameter", "sonic_length"}
    assert less == {q for q in QUANTITIES if q not in moving and not q.startswith("eps_ff")}


@pytest.mark.parametrize("conditions", [FULL, replace(FULL, density="two-phase", jeans="virial")])
def test_derivatives(conditions: Conditions) -> None:
    got = gas_state(AT, conditions)
    steps = 1e-5
    for name in ("sigma_gas", "sigma_atom", "sigma_mol", "sigma_sfr", "linewidth"):
        up = gas_state(AT | {name: AT[name] * (1 + steps)}, conditions)
        down = gas_state(AT | {name: AT[name] * (1 - steps)}, conditions)
        for quantity, traced in got.items():
            slope = np.broadcast_to(traced.slopes.get(name, 0.0), (3,)) * AT[name]
            expected = (up[quantity].value - down[quantity].value) / (2 * steps)
            scale = 1e-7 * np.nanmax(np.abs(np.append(traced.value, 1e-30)))
            np.testing.assert_allclose(
                slope, expected, rtol=1e-6, atol=scale, err_msg=f"d {quantity} / d {name}"
            )


def test_densities_as_chosen() -> None:
    two = two_phase_density(AT["sigma_sfr"] / 2.5e-3, AT["z_prime"])[0]
    hydro = hydrostatic_density(AT["sigma_atom"], AT["sigma_mol"], 0.05)[0]
    assert np.any(two > hydro)
    assert np.any(two < hydro)
    for chosen, expected in (
        ("two-phase", two),
        ("hydrostatic", hydro),
        ("larger", np.maximum(two, hydro)),
        (70.0, np.full(3, 70.0)),
    ):
        for factor in (1.0, 3.0, 1 / 3):
            got = gas_state(AT, replace(FULL, density=chosen, density_factor=factor))["density"]
            np.testing.assert_allclose(got.value, factor * expected, rtol=1e-13)


def test_without_molecular_gas_the_midplane_holds_atoms_alone() -> None:
    less = {name: AT[name] for name in AT if name != "sigma_mol"}
    got = gas_state(less, replace(FULL, density="hydrostatic"))["density"].value
    expected = hydrostatic_density(AT["sigma_atom"], np.zeros(3), 0.05)[0]
    np.testing.assert_allclose(got, expected, rtol=1e-14)
    with pytest.raises(ValueError, match="midplane_msun_pc3"):
        gas_state(AT, replace(FULL, density="hydrostatic", midplane_msun_pc3=None))


def test_temperatures_are_those_of_the_functions() -> None:
    got = gas_state(AT, FULL)
    n, chi, z = got["density"].value, AT["sigma_sfr"] / 2.5e-3, AT["z_prime"]
    depth = got["depth_complex"].value
    cold = gas_temperature(n, chi, chi, z, depth, 8.0).kelvin
    warm = gas_temperature(n, chi, chi, z, 0.0, 8.0).kelvin
    np.testing.assert_allclose(got["temperature_shielded"].value, cold)
    np.testing.assert_allclose(got["temperature_unshielded"].value, warm)
    squeezed = isobaric_temperature(n * warm, chi, chi, z, depth, 8.0).kelvin
    np.testing.assert_allclose(got["temperature_isobaric"].value, squeezed)
    assert np.all(squeezed < cold)
    typed = gas_state(AT, replace(FULL, shielded_depth=2.0))["temperature_shielded"].value
    np.testing.assert_allclose(typed, gas_temperature(n, chi, chi, z, 2.0, 8.0).kelvin)


def test_losses_are_carried_to_all_that_needs_them() -> None:
    thin = {"sigma_gas": np.array([20.0, 20.0, -1.0, 20.0]), "z_prime": np.array([1, 1, 1, 0.01])}
    got = gas_state(thin, replace(TYPED, density=30.0))
    # 30 per cm3 in full light has no cold solution, shielded it has.
    for name in ("temperature_unshielded", "jeans_mass_unshielded", "jeans_mass_equal_pressure"):
        assert np.all(got[name].no_cold), name
        assert np.all(np.isnan(got[name].value)), name
    assert not np.any(got["temperature_shielded"].no_cold[:3])
    # No gas is no missing solution, and not outside any range.
    assert np.isnan(got["depth_complex"].value[2])
    assert np.isnan(got["jeans_mass_shielded"].value[2])
    # A metallicity beyond the range is calculated and said.
    assert np.isfinite(got["depth_complex"].value[3])
    assert got["depth_complex"].outside.tolist() == [False, False, False, True]
    assert got["column_transition"].outside[3]


def test_where_no_stars_form_there_is_no_field_from_them() -> None:
    got = gas_state(AT | {"sigma_sfr": np.array([0.0, -1e-3, 1e-2])}, FULL)
    assert np.isnan(got["temperature_unshielded"].value[:2]).all()
    assert np.isfinite(got["temperature_unshielded"].value[2])


def test_a_linewidth_that_is_not_positive_moves_nothing() -> None:
    got = gas_state(AT | {"linewidth": np.array([0.0, -2.0, 5.0])}, FULL)
    for name in ("mach", "virial_parameter", "sonic_length", "eps_ff_krumholz2005"):
        np.testing.assert_array_equal(np.isnan(got[name].value), [True, True, False])


def test_a_linewidth_size_relation_needs_no_map() -> None:
    less = {"sigma_gas": AT["sigma_gas"], "z_prime": AT["z_prime"]}
    relation = replace(TYPED, linewidth_size="solomon1987", cloud_radius_pc=30.0)
    got = gas_state(less, relation)
    np.testing.assert_allclose(got["linewidth"].value, 0.72 * 30**0.5)
    by_length = gas_state(less, replace(relation, linewidth_size="heyer2004"))
    np.testing.assert_allclose(by_length["linewidth"].value, 0.87 * 60**0.65)
    # M = pi R^2 Sigma of the complex.
    m = np.pi * 900 * 5 * AT["sigma_gas"]
    expected = 5 * 0.72**2 * 30 * 30 / (4.30092e-3 * m)
    np.testing.assert_allclose(got["virial_parameter"].value, expected, rtol=1e-5)


def test_only_what_rests_on_the_density_follows_it() -> None:
    one, three = (gas_state(AT, replace(FULL, density_factor=f)) for f in (1.0, 3.0))
    for name, quantity in QUANTITIES.items():
        same = np.allclose(one[name].value, three[name].value, rtol=1e-12, equal_nan=True)
        # padoan2012 takes no Mach number, and so no temperature.
        if name != "eps_ff_padoan2012":
            assert same != quantity.follows_density, name


@pytest.mark.parametrize(
    "record", [*STATE, *TURBULENCE, *LINEWIDTH_SIZE], ids=lambda record: record.key
)
def test_records_stand_on_papers(record) -> None:
    assert cite(record.cite).key == record.cite
    assert record.formula
    assert record.where
    assert ("from memory" in record.sentence) == (
        record.certainty == "from memory" or "from memory" in record.where
    )


def test_every_quantity_names_records_that_there_are() -> None:
    for name, quantity in QUANTITIES.items():
        for key in quantity.records:
            assert key in STATE or key in TURBULENCE, name

"""Errors of predictions from several inputs, what both sides share, and HI alone."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pytest
from helpers import demo_recipe

from kspipe.comparison import (
    invert_atomic,
    predict_from_atomic,
    predict_residuals,
    shared_with_observed,
)
from kspipe.conversions import Surface
from kspipe.kernels.noise import NoiseTerm
from kspipe.maps.skymap import Flag
from kspipe.recipe import parse_recipe
from kspipe.relations import LAWS

FLAGS = np.zeros((1, 1), dtype=np.int32)
WHITE = np.zeros((2, 2))


@dataclass
class Quantity:
    """A value and its noise."""

    value: np.ndarray
    noise: tuple[NoiseTerm, ...] = field(default=())


def quantity(value: float, **sigmas: float) -> Quantity:
    terms = tuple(NoiseTerm(s, np.full((1, 1), sigma), WHITE) for s, sigma in sigmas.items())
    return Quantity(np.full((1, 1), value), terms)


def surface(value: float, **sigmas: float) -> Surface:
    made = quantity(value, **sigmas)
    return Surface(made.value, made.noise, {source: np.ones((1, 1)) for source in sigmas})


# --- Errors --------------------------------------------------------------------------------------

CASES = {
    # Gas by HI and CO; a field and an observed rate by the same bands; stars by one of them.
    "krumholz2013": (
        {"clumping": 5.0},
        {
            "sigma_gas": {"hi": 0.3, "co": 0.4},
            "rho_sd": {"nir": 0.003},
            "g0": {"fuv": 0.05, "ir": 0.08},
            "oh": {},
        },
        {"sigma_gas": 12.0, "rho_sd": 0.08, "g0": 0.9, "oh": 8.4},
    ),
    "leroy2008_pressure": (
        {"scale_length": 2.0, "depletion_time": 2.0},
        {"sigma_gas": {"hi": 0.5, "ir": -0.4}, "sigma_star": {"ir": 6.0, "nir": 3.0}},
        {"sigma_gas": 15.0, "sigma_star": 70.0},
    ),
    "leroy2013_depletion": ({}, {"sigma_mol": {"co": 0.9, "ir": 0.3}}, {"sigma_mol": 1.1}),
}


@pytest.mark.parametrize("key", CASES)
def test_errors_and_covariance_are_those_of_draws(key: str) -> None:
    given, sigmas, values = CASES[key]
    rates = {"fuv": 1e-4, "ir": 3e-4}
    inputs = {n: quantity(v, **sigmas[n]) for n, v in values.items()}
    got = predict_residuals(inputs, surface(4e-3, **rates), FLAGS, key, given)
    rng = np.random.default_rng(8)
    n = 200_000
    sources = sorted({s for terms in sigmas.values() for s in terms} | set(rates))
    noise = {source: rng.normal(size=n) for source in sources}
    draws = {
        name: value + sum((sigma * noise[s] for s, sigma in sigmas[name].items()), np.zeros(n))
        for name, value in values.items()
    }
    predicted = LAWS.get(key).predict(draws, given, slopes=False).sigma_sfr
    observed = 4e-3 + sum(sigma * noise[s] for s, sigma in rates.items())
    # Draws to 1 %; first order to a few per cent of what is curved.
    assert float(got.predicted_error[0, 0]) == pytest.approx(predicted.std(), rel=0.04)
    expected = float(np.cov(observed, predicted)[0, 1])
    size = float(observed.std() * predicted.std())
    assert float(got.covariance[0, 0]) == pytest.approx(expected, abs=0.03 * size)
    variance = 1e-8 + 9e-8 + float(got.predicted_error[0, 0]) ** 2 - 2 * got.covariance[0, 0]
    normalised = got.difference[0, 0] / np.sqrt(variance)
    assert float(got.normalised[0, 0]) == pytest.approx(float(normalised), rel=1e-9)


def test_a_curved_relation_is_integrated_over_gas_and_what_moves_with_it() -> None:
    # Steep and noisy: 6 +- 2.5, and a field that shares the noise.
    values = {"sigma_gas": 6.0, "rho_sd": 0.03, "g0": 1.0, "oh": 8.5}
    sigmas = {"sigma_gas": {"hi": 2.0, "ir": 1.5}, "g0": {"ir": 0.3}, "rho_sd": {}, "oh": {}}
    inputs = {n: quantity(v, **sigmas[n]) for n, v in values.items()}
    got = predict_residuals(
        inputs, surface(1e-3, fuv=1e-4), FLAGS, "krumholz2013", {"clumping": 5.0}
    )
    rng = np.random.default_rng(9)
    hi, ir = rng.normal(size=(2, 200_000))
    draws = {
        "sigma_gas": np.maximum(6.0 + 2.0 * hi + 1.5 * ir, 0.0), "g0": np.maximum(1 + 0.3 * ir, 0),
        "rho_sd": np.array(0.03), "oh": np.array(8.5),
    }  # fmt: skip
    law = LAWS.get("krumholz2013")
    predicted = law.predict(draws, {"clumping": 5.0}, slopes=False).sigma_sfr
    assert got.n_integrated == 1
    assert float(got.predicted_error[0, 0]) == pytest.approx(predicted.std(), rel=0.05)


# --- HI alone ------------------------------------------------------------------------------------


def test_inversion_gives_the_hydrogen_back() -> None:
    rng = np.random.default_rng(3)
    gas = np.exp(rng.uniform(np.log(1.0), np.log(300.0), 400))
    oh = rng.uniform(8.0, 8.8, 400)
    for key, given in (
        ("krumholz2009", {"clumping": 5.0}),
        ("mckee2010", {"clumping": 1.0, "depletion_time": 2.0}),
    ):
        f = np.asarray(LAWS.get(key).predict({"sigma_gas": gas, "oh": oh}, given).f_mol)
        atom = (1 - f) * gas
        got = invert_atomic(key, {"sigma_gas": atom, "oh": oh}, given)
        assert np.all(got.n_roots >= 1)
        again = LAWS.get(key).predict({"sigma_gas": got.lowest, "oh": oh}, given)
        np.testing.assert_allclose((1 - np.asarray(again.f_mol)) * got.lowest, atom, rtol=1e-9)
        single = got.n_roots == 1
        assert single.sum() > 100
        # Near saturation the gas is ill-determined by the HI: 1 - f is small there.
        clear = single & (f < 0.9)
        np.testing.assert_allclose(got.lowest[clear], gas[clear], rtol=1e-6)


def test_more_hydrogen_than_any_gas_leaves_atomic_has_no_root() -> None:
    # McKee & Krumholz 2010: the layer saturates at 3/4 ln(...) / (0.6 x 0.066 Z'), with c = 1.
    chi = 0.756 * 4.1
    layer = 0.75 * np.log(1 + 0.6 * chi + 0.01 * chi**2) / (0.6 * 0.066)
    inputs = {"sigma_gas": layer * np.array([0.3, 0.98, 1.02]), "oh": np.full(3, 8.69)}
    got = invert_atomic("mckee2010", inputs, {"clumping": 1.0, "depletion_time": 2.0})
    assert list(got.n_roots) == [1, 1, 0]
    assert np.isnan(got.lowest[2])
    # Unshielded gas is all atomic: the HI is the gas.
    assert got.lowest[0] == pytest.approx(0.3 * layer)


def test_two_roots_where_dense_gas_has_little_hydrogen_again() -> None:
    # Gnedin & Draine 2014: (1 - f) Sigma = Sigma / (1 + R) with R = (Sigma_H/S1)^a; for a > 1 it
    # has its peak at R = 1/(a - 1).
    given = {"scale": 1000.0, "depletion_time": 2.0}
    gas = np.geomspace(0.1, 1e4, 4000)
    inputs = {"oh": np.array(8.69), "g0": np.array(1.0)}
    f = np.asarray(LAWS.get("gnedin2014").predict({**inputs, "sigma_gas": gas}, given).f_mol)
    atom = (1 - f) * gas
    peak = atom.max()
    got = invert_atomic("gnedin2014", {**inputs, "sigma_gas": peak * np.array([0.9, 1.01])}, given)
    assert list(got.n_roots) == [2, 0]
    before, after = gas[: atom.argmax()], gas[atom.argmax() :]
    assert got.lowest[0] == pytest.approx(
        np.interp(0.9 * peak, atom[: before.size], before), rel=1e-3
    )
    falling = atom[atom.argmax() :][::-1]
    assert got.highest[0] == pytest.approx(np.interp(0.9 * peak, falling, after[::-1]), rel=1e-3)


def test_zero_and_negative_hydrogen_have_no_root() -> None:
    inputs = {"sigma_gas": np.array([0.0, -1.0, np.nan, 3.0]), "oh": np.full(4, 8.6)}
    got = invert_atomic("krumholz2009", inputs, {"clumping": 5.0})
    assert list(got.n_roots) == [0, 0, 0, 1]
    with pytest.raises(ValueError, match="no molecular fraction"):
        invert_atomic("leroy2013_depletion", {"sigma_mol": np.ones(2)}, {})


def test_errors_of_the_inversion_are_those_of_draws() -> None:
    given = {"clumping": 5.0}
    inputs = {"sigma_gas": quantity(2.0, hi=0.05), "oh": quantity(8.69)}
    got, inversion = predict_from_atomic(
        inputs, surface(3e-3, fuv=1e-4), FLAGS, "krumholz2009", given
    )
    atom = 2.0 + 0.05 * np.random.default_rng(2).normal(size=4000)
    gas = invert_atomic("krumholz2009", {"sigma_gas": atom, "oh": np.array(8.69)}, given).lowest
    predicted = LAWS.get("krumholz2009").predict({"sigma_gas": gas, "oh": np.array(8.69)}, given)
    assert float(got.predicted_error[0, 0]) == pytest.approx(predicted.sigma_sfr.std(), rel=0.05)
    assert inversion.n_roots[0, 0] == 1
    assert not got.flags[0, 0]
    assert float(got.predicted[0, 0]) == pytest.approx(
        float(np.median(predicted.sigma_sfr)), rel=0.01
    )


def test_roots_are_flagged() -> None:
    given = {"scale": 1000.0, "depletion_time": 2.0}
    for atom, flag in ((2.0, Flag.SEVERAL_ROOTS), (300.0, Flag.NO_SOLUTION)):
        inputs = {"sigma_gas": quantity(atom, hi=0.1), "oh": quantity(8.69), "g0": quantity(1.0)}
        got, _ = predict_from_atomic(inputs, surface(3e-3, fuv=1e-4), FLAGS, "gnedin2014", given)
        assert got.flags[0, 0] == flag


# --- What both sides share -----------------------------------------------------------------------


@pytest.fixture(scope="module")
def recipe_of(tmp_path_factory):
    folder = tmp_path_factory.mktemp("shared")

    def make(relations, **tables):
        return parse_recipe(demo_recipe(folder, relations=relations, **tables), folder=folder)

    return make


def one(**slopes: float) -> Surface:
    return surface(1.0, **slopes)


def test_what_is_shared_is_said(recipe_of) -> None:
    recipe = recipe_of(
        {"k": {"law": "krumholz2013", "clumping": 5}, "t": {"law": "leroy2013_depletion"},
         "s": {"law": "kennicutt1998_law"}},
        radiation_field={"origin": "star formation"},
        midplane={"density": "0.05 Msun/pc3"},
        gas={"alpha_co": "sun2020", "line_ratio": "schinnerer2024_r21"},
    )  # fmt: skip
    surfaces = {
        "sigma_gas": one(**{"HI": 1.0, "CO(2-1)": 1.0, "FUV": 0.1, "24um": 0.1}),
        "sigma_mol": one(**{"CO(2-1)": 1.0, "FUV": 0.1, "24um": 0.1}),
        "sigma_sfr": one(**{"FUV": 1.0, "24um": 1.0}),
    }
    found = shared_with_observed(recipe, "k", surfaces)
    texts = [str(shared) for shared in found]
    assert any("24um map" in t and "light of dust also stands for gas" in t for t in texts)
    assert any("24um map" in t and "G0', taken from the same star formation" in t for t in texts)
    assert any("alpha_CO (sun2020)" in t and "f_mol" in t for t in texts)
    assert any(t.startswith("metallicity") and "shielding" in t for t in texts)
    assert {s.is_carried for s in found if "map" in s.what} == {True}
    assert {s.is_carried for s in found if "map" not in s.what} == {False}
    assert any("depletion time" in str(s) for s in shared_with_observed(recipe, "t", surfaces))
    del surfaces["sigma_gas"].slopes["24um"], surfaces["sigma_gas"].slopes["FUV"]  # type: ignore[attr-defined]
    assert shared_with_observed(recipe, "s", surfaces) == ()


def test_atomic_gas_alone_shares_nothing(recipe_of) -> None:
    maps = demo_recipe_maps_without_co(recipe_of)
    recipe = recipe_of({"k": {"law": "krumholz2009", "clumping": 5}}, maps=maps, gas="atomic only")
    surfaces = {"sigma_gas": one(HI=1.0), "sigma_sfr": one(**{"FUV": 1.0, "24um": 1.0})}
    assert shared_with_observed(recipe, "k", surfaces) == ()


def demo_recipe_maps_without_co(recipe_of) -> dict:
    recipe = recipe_of({})
    raw = demo_recipe(recipe.maps["hi"].file.parent)
    return {name: table for name, table in raw["maps"].items() if name != "co"}

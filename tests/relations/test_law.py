"""What every relation must be, whatever it predicts."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pytest

from kspipe.conversions import imf_factor
from kspipe.core.citations import cite
from kspipe.core.radiation import FIELD_UNITS
from kspipe.recipe.shelf import worked_parameters
from kspipe.relations import LAW_INPUTS, LAWS, Law, Prediction, track
from kspipe.relations.conventions import KROUPA_RATE_OF

every = pytest.mark.parametrize("law", list(LAWS), ids=lambda law: law.key)
with_fraction = pytest.mark.parametrize(
    "law", [law for law in LAWS if law.has_fraction], ids=lambda law: law.key
)

GAS = np.array([[40.0, 50.0, 60.0], [90.0, 300.0, 1000.0]])


def parameters_of(law: Law) -> dict[str, float]:
    """Values for all parameters that must be typed."""
    given = worked_parameters(law)
    if law.one_of:
        given.pop("efficiency", None)
    return given


def inputs_of(law: Law, *, optional: bool = True) -> dict[str, np.ndarray]:
    """Typical values; the gas is an array and dense enough to be shielded."""
    names = (*law.needs, *(law.optional if optional else ()))
    found = {name: np.asarray(LAW_INPUTS[name].typical) for name in names}
    return {**found, law.gas: GAS}


def run(law: Law, **changes: np.ndarray) -> Prediction:
    return law.predict({**inputs_of(law), **changes}, parameters_of(law))


def drawn(law: Law, n: int, seed: int = 3) -> dict[str, np.ndarray]:
    """Inputs over the whole range in which relations are exercised."""
    rng = np.random.default_rng(seed)
    found = {}
    for name in law.needs:
        low, high = LAW_INPUTS[name].low, LAW_INPUTS[name].high
        if name in ("oh", "beta"):
            found[name] = rng.uniform(low, high, n)
        else:
            found[name] = np.exp(rng.uniform(np.log(low), np.log(high), n))
    return found


def arrays(prediction: Prediction) -> dict[str, np.ndarray]:
    found = {
        "sigma_sfr": prediction.sigma_sfr,
        "outside_range": prediction.outside_range,
        "no_solution": prediction.no_solution,
    }
    if prediction.f_mol is not None:
        found["f_mol"] = prediction.f_mol
    for product, slopes in prediction.derivatives.items():
        found |= {f"d {product} / d {name}": slope for name, slope in slopes.items()}
    return found


@every
def test_conventions_are_stated(law: Law) -> None:
    assert law.helium_factor in (1.0, 1.36, 1.4)
    assert law.metallicity_anchor
    assert (law.field_unit in FIELD_UNITS) == ("g0" in law.needs)
    assert ("oh" in law.needs) == ("anchor_oh" in {p.name for p in law.parameters})
    assert law.statistic in ("mean", "median")
    assert law.needs[0] in ("sigma_gas", "sigma_mol")
    assert {*law.needs, *law.optional} <= set(LAW_INPUTS)
    assert law.gas in law.monotonic
    assert set(law.monotonic) <= set(law.needs)
    assert all(low < high for low, high in law.ranges.values())
    assert cite(law.cite).short
    for direction in law.monotonic.values():
        assert direction.sign in (-1, 1)
        assert bool(direction.where) == (direction.holds is not None)
    for parameter in law.parameters:
        assert parameter.meaning
        assert parameter.low < parameter.high
        assert parameter.default is None or parameter.low <= parameter.default <= parameter.high


@every
def test_shapes_and_derivatives(law: Law) -> None:
    got = run(law)
    assert all(array.shape == (2, 3) for array in arrays(got).values())
    assert (got.f_mol is not None) == law.has_fraction
    products = {"sigma_sfr"} | ({"f_mol"} if law.has_fraction else set())
    assert set(got.derivatives) == products
    assert all(set(s) == {*law.needs, *law.optional} for s in got.derivatives.values())
    assert got.outside_range.dtype == got.no_solution.dtype == np.bool_
    assert np.all(got.sigma_sfr > 0)
    lean = law.predict(inputs_of(law), parameters_of(law), slopes=False)
    assert lean.derivatives == {}
    np.testing.assert_allclose(lean.sigma_sfr, got.sigma_sfr, rtol=1e-14)


@every
def test_blanks_stay_blank(law: Law) -> None:
    for name in (*law.needs, *law.optional):
        value = np.broadcast_to(inputs_of(law)[name], (2, 3)).copy()
        value[1, 2] = np.nan
        got = run(law, **{name: value})
        expected = np.zeros((2, 3), dtype=bool)
        expected[1, 2] = True
        np.testing.assert_array_equal(np.isnan(got.sigma_sfr), expected)
        np.testing.assert_array_equal(got.no_solution, expected)
        assert not got.outside_range[1, 2]
        slopes = got.derivatives["sigma_sfr"].values()
        assert all(np.isnan(slope[1, 2]) for slope in slopes)


@every
def test_no_gas_and_less(law: Law) -> None:
    got = run(law, **{law.gas: np.array([0.0, -3.0, 50.0])})
    assert got.sigma_sfr[0] == 0.0
    assert not got.no_solution[0]
    assert got.sigma_sfr[2] > 0
    if law.is_linear:
        # Noise below zero counts like noise above it.
        assert got.sigma_sfr[1] == pytest.approx(-3.0 / 50.0 * got.sigma_sfr[2])
    else:
        assert got.no_solution[1]
        assert np.isnan(got.sigma_sfr[1])


@every
def test_negative_inputs_have_no_prediction(law: Law) -> None:
    for name in set(law.needs) & {"sigma_star", "rho_sd", "g0"}:
        got = run(
            law, **{name: np.array([-0.1, LAW_INPUTS[name].typical])}, **{law.gas: np.array(50.0)}
        )
        assert list(got.no_solution) == [True, False]


@every
def test_inputs_are_untouched(law: Law) -> None:
    inputs = {name: np.array(value) for name, value in inputs_of(law).items()}
    given = parameters_of(law)
    for array in inputs.values():
        array.flags.writeable = False
    law.predict(inputs, given)
    assert given == parameters_of(law)


@every
def test_an_array_is_many_single_values(law: Law) -> None:
    whole = arrays(run(law))
    for index in np.ndindex(2, 3):
        single = arrays(run(law, **{law.gas: GAS[index]}))
        for name, value in single.items():
            assert float(value) == pytest.approx(float(whole[name][index]), rel=1e-9, abs=1e-300)


@every
def test_pieces_are_the_whole(law: Law) -> None:
    # Longer than a block, with draws on a leading axis.
    n = 40_000
    inputs = {name: value for name, value in drawn(law, n).items() if name != law.gas}
    gas = drawn(law, n)[law.gas] * np.array([[0.9], [1.1]])
    whole = law.predict({**inputs, law.gas: gas}, parameters_of(law), slopes=False)
    assert whole.sigma_sfr.shape == (2, n)
    ends = np.array([0, 1, 16383, 16384, 16385, n - 1])
    for k in (0, 1):
        part = {**{m: v[ends] for m, v in inputs.items()}, law.gas: gas[k, ends]}
        single = law.predict(part, parameters_of(law), slopes=False)
        np.testing.assert_allclose(whole.sigma_sfr[k, ends], single.sigma_sfr, rtol=1e-9)


@with_fraction
def test_a_fraction_is_a_fraction(law: Law) -> None:
    got = law.predict(drawn(law, 20_000), parameters_of(law))
    assert got.f_mol is not None
    assert np.all((got.f_mol >= 0) & (got.f_mol <= 1))
    assert np.all(got.sigma_sfr >= 0)
    assert not got.no_solution.any()
    for slopes in got.derivatives.values():
        assert all(np.isfinite(slope).all() for slope in slopes.values())


def directions(law: Law, name: str, n: int) -> tuple[np.ndarray, np.ndarray]:
    """Sign of the slope at random places, and where the declared direction is said to hold."""
    inputs, given = drawn(law, n, seed=11), parameters_of(law)
    if "oh" in inputs:
        inputs["oh"] = np.random.default_rng(12).uniform(6.7, 9.6, n)
    got = law.predict(inputs, given)
    filled = law.filled(given)
    direction = law.monotonic[name]
    holds = np.ones(n, dtype=bool)
    if direction.holds is not None:
        holds = np.asarray(direction.holds(law.own(inputs, filled), filled))
    # What is left of a slope by rounding is no direction.
    slope = got.derivatives["sigma_sfr"][name]
    size = np.abs(inputs[name] if name != "oh" else 1.0)
    slope = np.where(np.abs(slope) * size > 1e-9 * got.sigma_sfr, slope, 0.0)
    return np.sign(slope) * direction.sign, np.broadcast_to(holds, (n,))


@every
def test_declared_directions_hold_where_they_are_declared(law: Law) -> None:
    for name in law.monotonic:
        sign, holds = directions(law, name, 4000)
        assert holds.mean() > 0.01, name
        assert np.all(sign[holds] >= 0), name
        assert np.mean(sign[holds] > 0) > 0.5, name


@every
def test_declared_directions_fail_elsewhere(law: Law) -> None:
    # Else the domain would be drawn too narrow: flat is a failure too.
    for name, direction in law.monotonic.items():
        if direction.holds is not None:
            sign, holds = directions(law, name, 4000)
            assert np.any(sign[~holds] <= 0), name


def test_gnedin2011_rises_with_the_field_once_it_is_strong() -> None:
    # Sigma_c goes as L^(4/7) U^-1/2 there (Gnedin & Kravtsov 2011, Eq. 14).
    law = LAWS.get("gnedin2011")
    inputs = {"sigma_gas": np.array(50.0), "oh": np.array(9.2), "g0": np.geomspace(30, 1e4, 40)}
    assert np.all(np.diff(law.predict(inputs, {"depletion_time": 2.0}).sigma_sfr) > 0)
    weak = {**inputs, "g0": np.geomspace(1e-3, 1e-2, 40)}
    assert np.all(np.diff(law.predict(weak, {"depletion_time": 2.0}).sigma_sfr) < 0)


@every
def test_derivatives_are_central_differences(law: Law) -> None:
    inputs, given = drawn(law, 3000, seed=5), parameters_of(law)
    got = law.predict(inputs, given)
    step = 1e-4
    for name in law.needs:
        width = step if name == "oh" else step * inputs[name]
        more, less = (
            law.predict({**inputs, name: inputs[name] + sign * width}, given, slopes=False)
            for sign in (1, -1)
        )
        for product, slopes in got.derivatives.items():
            value = np.asarray(getattr(got, product))
            numeric = (getattr(more, product) - getattr(less, product)) / (2 * width)
            # In steps of the input, against the value: the difference errs by third derivatives.
            off = np.abs(slopes[name] - numeric) * width
            smooth = off <= 1e-6 * step / 1e-4 * np.abs(value) + 1e-13
            # A difference across a kink is none of the slopes beside it; kinks are declared.
            most = 0.999 if law.kinks else 1.0
            assert smooth.mean() >= most, (product, name, off.max())


def test_slopes_by_rotation() -> None:
    # Omega and beta enter where the disc's own free-fall time is the shorter one.
    law = LAWS.get("krumholz2013")
    base = {
        "sigma_gas": np.array([20.0, 60.0]), "oh": np.array(8.5), "rho_sd": np.array(0.1),
        "g0": np.array(1.0), "omega": np.array([400.0, 900.0]), "beta": np.array([0.0, 0.4]),
    }  # fmt: skip
    got = law.predict(base, {"clumping": 5.0})
    for name, step in (("omega", 0.01), ("beta", 1e-5)):
        more, less = (
            law.predict({**base, name: base[name] + sign * step}, {"clumping": 5.0}).sigma_sfr
            for sign in (1, -1)
        )
        slope = got.derivatives["sigma_sfr"][name]
        assert np.all(slope > 0)
        np.testing.assert_allclose(slope, (more - less) / (2 * step), rtol=1e-6)


@every
def test_values_are_continuous(law: Law) -> None:
    # Along each input in fine steps no step is much larger than its neighbours: no form jumps.
    base, given = {n: LAW_INPUTS[n].typical for n in law.needs}, parameters_of(law)
    for name in law.needs:
        low, high = LAW_INPUTS[name].low, LAW_INPUTS[name].high
        line = np.linspace(low, high, 8001) if name == "oh" else np.geomspace(low, high, 8001)
        inputs = {n: np.asarray(v) for n, v in base.items()} | {name: line}
        rate = law.predict(inputs, given, slopes=False).sigma_sfr
        steps = np.abs(np.diff(rate)) / rate.max()
        assert steps.max() < 0.02, name


@every
def test_what_is_missing_or_unknown_is_named(law: Law) -> None:
    given = parameters_of(law)
    for name in law.needs:
        inputs = {n: v for n, v in inputs_of(law).items() if n != name}
        with pytest.raises(KeyError, match=f"{law.key}.*{name}"):
            law.predict(inputs, given)
    with pytest.raises(KeyError, match="no parameter 'clumpiness'"):
        law.predict(inputs_of(law), {**given, "clumpiness": 3.0})
    for name in given:
        less = {n: v for n, v in given.items() if n != name}
        with pytest.raises(KeyError, match=f"needs (the parameter '{name}'|one of)"):
            law.predict(inputs_of(law), less)
    if law.one_of:
        with pytest.raises(KeyError, match="needs one of depletion_time and efficiency"):
            law.predict(inputs_of(law), {**given, "depletion_time": 2.0, "efficiency": 0.01})


@every
def test_defaults_are_filled_in(law: Law) -> None:
    filled = law.filled(parameters_of(law))
    unchosen = {name for name in law.one_of if name not in parameters_of(law)}
    assert set(filled) == {p.name for p in law.parameters} - unchosen
    defaults = {p.name: p.default for p in law.parameters if p.default is not None}
    assert filled == parameters_of(law) | defaults


@pytest.mark.parametrize("law", [law for law in LAWS if law.one_of], ids=lambda law: law.key)
def test_the_way_from_a_fraction_to_stars_is_the_chosen_one(law: Law) -> None:
    given = parameters_of(law)
    by_time = law.predict(inputs_of(law), given)
    np.testing.assert_allclose(by_time.sigma_sfr, by_time.f_mol * GAS / 2.0 * 1e-3, rtol=1e-13)
    given = {n: v for n, v in given.items() if n != "depletion_time"} | {"efficiency": 0.02}
    by_efficiency = law.predict(inputs_of(law), given)
    # Krumholz 2013: t_ff = 31 Myr Sigma^-1/4, helium included.
    expected = by_time.f_mol * 0.02 * GAS / (31 * GAS**-0.25)
    np.testing.assert_allclose(by_efficiency.sigma_sfr, expected, rtol=1e-13)


@every
def test_the_range_is_flagged_and_still_predicted(law: Law) -> None:
    for name, (low, high) in law.ranges.items():
        external = {"z_prime": "oh"}.get(name, name)
        ends = np.array([low * 0.99, low * 1.01, high * 0.99, high * 1.01])
        if external == "oh":
            ends = 8.69 + np.log10(ends)
        got = run(law, **{external: ends, law.gas: np.array(500.0)})
        assert list(got.outside_range) == [True, False, False, True]
        assert np.isfinite(got.sigma_sfr).all()


def test_helium_is_converted_once() -> None:
    # Gnedin & Kravtsov 2011 take hydrogen, Sternberg et al. 2014 a mass factor of 1.40.
    for key, factor in (("gnedin2011", 1.0), ("sternberg2014_two_sided", 1.4), ("mckee2010", 1.36)):
        own = LAWS.get(key).own({"sigma_gas": np.array(13.6)}, {})
        assert float(own["sigma_gas"]) == pytest.approx(10.0 * factor, rel=1e-12)


def test_the_salpeter_rate_is_that_of_the_conversions() -> None:
    assert KROUPA_RATE_OF["Salpeter"] == pytest.approx(imf_factor("Salpeter", "Kroupa"), rel=1e-5)


@every
def test_a_track_is_the_relation(law: Law) -> None:
    sigma = np.array([0.0, 3.0, 30.0, 300.0])
    others = {n: LAW_INPUTS[n].typical for n in law.needs if n not in (law.gas, "oh")}
    got = track(law.key, sigma, 8.5, parameters_of(law), others)
    inputs: Mapping[str, Any] = {**others, "oh": np.array(8.5), law.gas: sigma}
    np.testing.assert_array_equal(got, law.predict(inputs, parameters_of(law)).sigma_sfr)


def test_an_unknown_relation_is_answered_with_a_near_one() -> None:
    with pytest.raises(KeyError, match='did you mean "krumholz2009"'):
        track("krumholz2008", np.ones(2), 8.7, {"clumping": 5.0})

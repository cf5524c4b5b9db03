"""What every relation must be, whatever it predicts."""

import itertools

import numpy as np
import pytest

from kspipe.relations import LAWS, Law, Parameter, Prediction, track

every = pytest.mark.parametrize("law", list(LAWS), ids=lambda law: law.key)

# Values for every input that a relation may need.
TYPICAL = {"sigma_gas": np.array([[1.0, 8.0, 30.0], [90.0, 300.0, 1000.0]]), "oh": np.array(8.6)}
# A value for every parameter without a default.
GIVEN = {"clumping": 5.0}


def parameters_of(law: Law) -> dict[str, float]:
    return {p.name: GIVEN[p.name] for p in law.parameters if p.default is None}


def run(law: Law, **changes: np.ndarray) -> Prediction:
    return law.predict({n: TYPICAL[n] for n in law.needs} | changes, parameters_of(law))


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
    assert law.statistic in ("mean", "median")
    assert set(law.monotonic) <= set(law.needs)
    assert set(law.monotonic.values()) <= {-1, 1}
    assert all(low < high for low, high in law.ranges.values())
    for parameter in law.parameters:
        assert parameter.meaning
        assert parameter.low < parameter.high
        assert parameter.default is None or parameter.low <= parameter.default <= parameter.high


@every
def test_shapes_and_derivatives(law: Law) -> None:
    got = run(law)
    assert all(array.shape == (2, 3) for array in arrays(got).values())
    products = {"sigma_sfr"} | ({"f_mol"} if got.f_mol is not None else set())
    assert set(got.derivatives) == products
    assert all(set(slopes) == set(law.needs) for slopes in got.derivatives.values())
    assert got.outside_range.dtype == got.no_solution.dtype == np.bool_
    assert np.all(got.sigma_sfr > 0)


@every
def test_blanks_stay_blank(law: Law) -> None:
    for name in law.needs:
        value = np.broadcast_to(TYPICAL[name], (2, 3)).copy()
        value[1, 2] = np.nan
        got = run(law, **{name: value})
        expected = np.zeros((2, 3), dtype=bool)
        expected[1, 2] = True
        np.testing.assert_array_equal(np.isnan(got.sigma_sfr), expected)
        np.testing.assert_array_equal(got.no_solution, expected)
        assert not got.outside_range[1, 2]


@every
def test_inputs_are_untouched(law: Law) -> None:
    inputs = {name: TYPICAL[name].copy() for name in law.needs}
    given = parameters_of(law)
    for array in inputs.values():
        array.flags.writeable = False
    law.predict(inputs, given)
    assert given == parameters_of(law)
    assert all(np.array_equal(inputs[name], TYPICAL[name]) for name in inputs)


@every
def test_an_array_is_many_single_values(law: Law) -> None:
    whole = arrays(run(law))
    for index in np.ndindex(2, 3):
        single = run(law, **{n: np.broadcast_to(TYPICAL[n], (2, 3))[index] for n in law.needs})
        for name, value in arrays(single).items():
            assert float(value) == pytest.approx(float(whole[name][index]), rel=1e-12)


@every
def test_draws_on_a_leading_axis_are_single_calls(law: Law) -> None:
    shifts = np.array([0.9, 1.0, 1.2])
    draws = {n: TYPICAL[n] * (shifts[:, None, None] if n == "sigma_gas" else 1) for n in law.needs}
    whole = arrays(run(law, **draws))
    for k, shift in enumerate(shifts):
        single = arrays(run(law, sigma_gas=TYPICAL["sigma_gas"] * shift))
        for name, value in single.items():
            np.testing.assert_allclose(whole[name][k], value, rtol=1e-12)


@every
def test_declared_directions(law: Law) -> None:
    steps = {"sigma_gas": np.geomspace(0.1, 1e4, 200), "oh": np.linspace(7.5, 9.6, 200)}
    for (name, sign), clumping in itertools.product(law.monotonic.items(), (1.0, 5.0, 100.0)):
        inputs = {n: np.full(200, TYPICAL[n].flat[0]) for n in law.needs} | {name: steps[name]}
        given = parameters_of(law) | ({"clumping": clumping} if parameters_of(law) else {})
        assert np.all(sign * np.diff(law.predict(inputs, given).sigma_sfr) > 0)


@every
def test_what_is_missing_or_unknown_is_named(law: Law) -> None:
    given = parameters_of(law)
    for name in law.needs:
        inputs = {n: TYPICAL[n] for n in law.needs if n != name}
        with pytest.raises(KeyError, match=f"{law.key}.*{name}"):
            law.predict(inputs, given)
    with pytest.raises(KeyError, match="no parameter 'clumpiness'"):
        law.predict(TYPICAL, {**given, "clumpiness": 3.0})
    for name in given:
        less = {n: v for n, v in given.items() if n != name}
        with pytest.raises(KeyError, match=f"needs the parameter '{name}'"):
            law.predict(TYPICAL, less)


@every
def test_defaults_are_filled_in(law: Law) -> None:
    filled = law.filled(parameters_of(law))
    assert set(filled) == {p.name for p in law.parameters}
    defaults = {p.name: p.default for p in law.parameters if p.default is not None}
    assert filled == parameters_of(law) | defaults
    typed: dict[str, Parameter] = {p.name: p for p in law.parameters}
    for name in defaults:
        assert law.filled(parameters_of(law) | {name: typed[name].high})[name] == typed[name].high


@every
def test_a_track_is_the_relation(law: Law) -> None:
    sigma = np.array([0.0, 3.0, 30.0, 300.0])
    got = track(law.key, sigma, 8.5, parameters_of(law))
    inputs = {n: sigma if n == "sigma_gas" else np.full(4, 8.5) for n in law.needs}
    np.testing.assert_array_equal(got, law.predict(inputs, parameters_of(law)).sigma_sfr)


def test_an_unknown_relation_is_answered_with_a_near_one() -> None:
    with pytest.raises(KeyError, match='did you mean "krumholz2009"'):
        track("krumholz2008", np.ones(2), 8.7, {"clumping": 5.0})

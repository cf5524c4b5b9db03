"""What every published record, of any family, must be."""

import pickle
import re
from typing import get_args

import numpy as np
import pytest

from kspipe.conversions import (
    ALPHA_CO,
    ATOMIC,
    BALMER,
    EXTINCTION,
    GAS_TO_DUST,
    IMFS,
    INPUTS,
    LINE_RATIO,
    MASS_METALLICITY,
    MASS_TO_LIGHT,
    NITROGEN,
    STAR_FORMATION,
    STARS,
    STRONG_LINES,
    TOTAL_INFRARED,
    AlphaCO,
    Extinction,
    LineRatio,
    StarFormation,
)
from kspipe.conversions.record import Certainty, Range, Record
from kspipe.core.citations import cite
from kspipe.core.constants import HELIUM_FACTOR
from kspipe.core.tracers import TRACERS
from kspipe.relations import LAWS

FAMILIES = {
    "atomic": ATOMIC,
    "alpha_co": ALPHA_CO,
    "balmer": BALMER,
    "extinction": EXTINCTION,
    "gas_to_dust": GAS_TO_DUST,
    "imf": IMFS,
    "line_ratio": LINE_RATIO,
    "mass_metallicity": MASS_METALLICITY,
    "mass_to_light": MASS_TO_LIGHT,
    "nitrogen": NITROGEN,
    "star_formation": STAR_FORMATION,
    "stars": STARS,
    "strong_lines": STRONG_LINES,
    "total_infrared": TOTAL_INFRARED,
    "relations": LAWS,
}
SHELVED = [(name, record) for name, family in FAMILIES.items() for record in family]

WITHOUT_MASS = [
    record
    for family in (
        EXTINCTION,
        LINE_RATIO,
        STAR_FORMATION,
        IMFS,
        MASS_METALLICITY,
        STARS,
        STRONG_LINES,
        BALMER,
        NITROGEN,
        TOTAL_INFRARED,
        MASS_TO_LIGHT,
    )
    for record in family
]

every = pytest.mark.parametrize(
    "record", [record for _, record in SHELVED], ids=[f"{name}:{r.key}" for name, r in SHELVED]
)
every_conversion = pytest.mark.parametrize(
    "record",
    [record for name, record in SHELVED if name != "relations"],
    ids=[record.key for name, record in SHELVED if name != "relations"],
)


def test_no_key_means_two_things() -> None:
    keys = [record.key for _, record in SHELVED]
    assert len(set(keys)) == len(keys)


@pytest.mark.parametrize("name", FAMILIES)
def test_every_record_lies_under_its_key(name: str) -> None:
    family = FAMILIES[name]
    assert family.keys()
    assert all(family.get(record.key) is record for record in family)


@every
def test_a_record_says_what_it_is(record) -> None:
    for text in (record.label, record.where, record.formula):
        assert text.strip() == text != ""
    assert record.certainty in get_args(Certainty)
    # author2012 or author2012_tracer, and the year and author of its paper.
    assert re.fullmatch(r"[a-z]+\d{4}(_[a-z0-9_]+)?", record.key)
    assert record.key.split("_")[0] == record.cite.split("_")[0]
    assert cite(record.cite).key == record.cite


@every
def test_a_record_travels(record) -> None:
    back = pickle.loads(pickle.dumps(record))
    assert back.key == record.key
    assert back == record


@every
def test_a_record_cannot_be_changed(record) -> None:
    with pytest.raises(AttributeError):
        record.key = "other2000"


@every_conversion
def test_conventions_are_stated(record: Record) -> None:
    assert record.helium_factor in (None, HELIUM_FACTOR)
    assert (record.helium_factor is None) == (record in WITHOUT_MASS)
    assert (record.imf is None) == (record not in [*STAR_FORMATION, *IMFS, *STARS, *MASS_TO_LIGHT])
    assert record.scatter_dex is None or 0 < record.scatter_dex < 1
    for limits in record.ranges:
        assert limits.low < limits.high
        assert limits.quantity


def numbers(text: str) -> list[float]:
    return [float(n) for n in re.findall(r"(?<![\w.])\d+\.?\d*(?:e[+-]?\d+)?", text)]


@pytest.mark.parametrize("record", [*EXTINCTION, *STAR_FORMATION], ids=lambda record: record.key)
def test_the_printed_formula_holds_the_coefficients(record) -> None:
    # As printed, or to the five digits of what follows from constants per luminosity.
    printed = numbers(record.formula)
    for tracer, coefficient in record.coefficients.items():
        if tracer not in getattr(record, "powers", {}):
            assert any(coefficient == pytest.approx(n, rel=5e-5) for n in printed)
    assert set(getattr(record, "powers", {}).values()) <= set(printed)
    assert set(record.coefficients) <= set(TRACERS)
    with pytest.raises(TypeError):
        record.coefficients["FUV"] = 0.0


@pytest.mark.parametrize("record", list(STAR_FORMATION), ids=lambda record: record.key)
def test_a_calibration_states_its_family(record: StarFormation) -> None:
    assert record.family
    assert record.imf in {imf.name for imf in IMFS}
    assert record.is_linear == (not record.luminosity_powers)
    assert set(record.luminosity) <= set(record.tracers)
    assert set(record.powers) | set(record.luminosity_powers) <= set(record.tracers)
    luminosities = {tracer: np.array([1e40, np.nan, -1e40]) for tracer in record.tracers}
    if not record.luminosity:
        with pytest.raises(KeyError, match=f"{record.key}.*surface brightness only"):
            record.rate(luminosities)
        return
    rate = record.rate(luminosities)
    assert rate[0] > 0
    assert np.isnan(rate[1])
    # A straight line keeps its sign, a power law has no value.
    assert rate[2] == -rate[0] if record.is_linear else np.isnan(rate[2])


@pytest.mark.parametrize("record", list(EXTINCTION), ids=lambda record: record.key)
def test_an_extinction_on_both_scales(record: Extinction) -> None:
    for tracer in record.coefficients:
        own = record.magnitudes(tracer, np.array([0.0, 0.1, np.nan]))
        assert own[0] == 0
        assert own[1] > 0
        assert np.isnan(own[2])
        np.testing.assert_array_equal(
            own, record.magnitudes(tracer, np.array([0.0, 0.1, np.nan]), record.ebv_scale)
        )
        # Schlafly & Finkbeiner 2011 (from memory): their E(B-V) is 0.86 of the older one.
        same_sky = record.magnitudes(tracer, np.array(0.1), "SFD")
        assert float(record.magnitudes(tracer, np.array(0.086), "SF11")) == pytest.approx(
            float(same_sky), rel=1e-12
        )


@pytest.mark.parametrize("record", list(ATOMIC), ids=lambda record: record.key)
def test_the_printed_formula_of_atomic_gas_holds_its_coefficient(record) -> None:
    printed = numbers(record.formula)
    assert record.column_per_k_kms in printed
    assert any(record.msun_pc2_per_k_kms == pytest.approx(n, rel=5e-5) for n in printed)


every_alpha = pytest.mark.parametrize("record", list(ALPHA_CO), ids=lambda record: record.key)


def drawn(names: tuple[str, ...], shape: tuple[int, ...] = (40,)) -> dict[str, np.ndarray]:
    """Inputs over the span that a record is exercised on, read-only."""
    rng = np.random.default_rng(3)
    arrays = {name: rng.uniform(INPUTS[name].low, INPUTS[name].high, shape) for name in names}
    for array in arrays.values():
        array.flags.writeable = False
    return arrays


@every_alpha
def test_alpha_on_arrays(record: AlphaCO) -> None:
    inputs = drawn((*record.needs, "oh"), (5, 8))
    alpha = record(inputs)
    assert alpha.shape == (5, 8)
    assert alpha.dtype == np.float64
    assert np.all(np.isfinite(alpha))
    assert np.all(alpha > 0)
    for index in np.ndindex(alpha.shape):
        single = record({name: array[index] for name, array in inputs.items()})
        assert float(single) == pytest.approx(alpha[index], rel=1e-12)
    # Shapes broadcast: a number for the galaxy beside maps.
    mixed = {n: a if n == "oh" else a[0, 0] for n, a in inputs.items()}
    assert record(mixed).shape == (5, 8)


@every_alpha
def test_alpha_of_what_is_not_known(record: AlphaCO) -> None:
    for name in record.needs:
        inputs = {n: a.copy() for n, a in drawn(record.needs).items()}
        inputs[name][7] = np.nan
        alpha = record(inputs)
        assert np.isnan(alpha[7])
        assert np.isnan(alpha).sum() == 1
        with pytest.raises(KeyError, match=f"{record.key}.*{name}"):
            record({n: a for n, a in inputs.items() if n != name})


@every_alpha
def test_alpha_falls_with_metallicity(record: AlphaCO) -> None:
    # Less dust, less CO for the same H2: no published form rises with metallicity.
    inputs = {name: np.array(INPUTS[name].typical) for name in record.needs}
    alpha = record({**inputs, "oh": np.linspace(8.0, 9.0, 40)})
    assert np.all(np.diff(alpha) <= 0)
    assert (np.ptp(alpha) > 0) == ("oh" in record.needs)


@every_alpha
def test_slopes_of_alpha_are_differences(record: AlphaCO) -> None:
    assert set(record.needs) <= set(INPUTS)
    densities = {name for name in record.needs if name.startswith("sigma_")}
    assert {name for name, _ in record.log_slopes} == densities
    inputs = drawn((*record.needs, "oh"))
    for name in densities:
        step = 1e-5 * inputs[name]
        up, down = (
            np.log(record({**inputs, name: inputs[name] + sign * step})) for sign in (1, -1)
        )
        np.testing.assert_allclose(
            record.log_slope(name, inputs), (up - down) / (2 * step), rtol=1e-6, atol=1e-12
        )
        assert np.isnan(record.log_slope(name, {**inputs, name: np.array(np.nan)}))


@every_alpha
def test_alpha_is_flagged_outside_its_range(record: AlphaCO) -> None:
    for allowed in record.ranges:
        assert allowed.name in INPUTS
        for edge, beyond in ((allowed.low, 0.99), (allowed.high, 1.01)):
            if np.isfinite(edge):
                assert not record.outside({allowed.name: np.array(edge)})
                assert record.outside({allowed.name: np.array(edge * beyond)})
        assert not record.outside({allowed.name: np.array(np.nan)})


@pytest.mark.parametrize("record", list(LINE_RATIO), ids=lambda record: record.key)
def test_line_ratios_on_arrays(record: LineRatio) -> None:
    sfr = drawn(("sigma_sfr",), (5, 8))["sigma_sfr"]
    ratio, log_slope = record(sfr)
    assert ratio.shape == log_slope.shape == (5, 8)
    assert np.all((record.low <= ratio) & (ratio <= record.high))
    # CO(3-2) to CO(1-0): the higher the line, the fainter, in discs.
    assert 0 < record.low < record.value <= 1.0
    for index in np.ndindex(sfr.shape):
        assert float(record(sfr[index])[0]) == pytest.approx(ratio[index], rel=1e-12)
    assert np.isnan(record(np.array(np.nan))[0]) == bool(record.needs)
    printed = numbers(record.formula)
    assert {record.value, record.low, record.high} <= set(printed)


@every_alpha
def test_the_printed_formula_of_alpha_holds_its_numbers(record: AlphaCO) -> None:
    # Where the printed formula is one expression, it is evaluated as it stands.
    expressions = {
        "bolatto2013_galactic": lambda n, _: n[0],
        "sun2020": lambda n, i: n[0] * i["z"] ** -n[1],
        "genzel2012": lambda n, i: 10 ** (n[0] - n[1] * i["oh"]),
        "genzel2015_power": lambda n, i: n[0] * n[1] ** (-n[2] * (i["oh"] - n[3])),
        "schruba2012": lambda n, i: n[0] * n[1] ** (-n[2] * (i["oh"] - n[3])),
        "amorin2016": lambda n, i: 10 ** (n[0] - n[1] * (i["oh"] - n[2])),
    }
    if record.key in expressions:
        inputs = {"oh": np.array(8.4), "z": np.array(10 ** (8.4 - 8.69))}
        printed = expressions[record.key](numbers(record.formula), inputs)
        assert float(record(inputs)) == pytest.approx(float(printed), rel=1e-12)
    assert record.formula in record.sentence
    assert ("from memory" in record.sentence) == (record.certainty == "from memory")


def test_a_range_in_words() -> None:
    assert str(Range("Z'", 0.2, 2.0)) == "0.2 <= Z' <= 2"
    assert str(Range("Z'", 0.5, np.inf)) == "Z' >= 0.5"
    assert str(Range("OH", -np.inf, 8.8)) == "OH <= 8.8"


@pytest.mark.parametrize("record", list(STARS), ids=lambda record: record.key)
def test_the_printed_formula_of_stars_holds_its_coefficient(record) -> None:
    assert record.msun_pc2_per_intensity in numbers(record.formula)
    assert TRACERS[record.tracer].unit == "MJy/sr"

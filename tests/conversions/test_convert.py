"""The one conversion, over every combination of records."""

import itertools
import pickle
from dataclasses import fields, replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from kspipe.conversions import (
    ALPHA_CO,
    ATOMIC,
    EXTINCTION,
    STAR_FORMATION,
    Choices,
    Converted,
    Parameters,
    convert,
)
from kspipe.core.tracers import CO_LINES

Maps = dict[str, np.ndarray]
SHAPE = (3, 4)


def extinctions(tracers: tuple[str, ...]) -> list[dict[str, str]]:
    """List every way to correct the bands of a calibration that some record knows."""
    by_band = [
        [(band, record.key) for record in EXTINCTION if band in record.coefficients]
        for band in tracers
    ]
    return [dict(pairs) for pairs in itertools.product(*filter(None, by_band))]


# Every calibration with every extinction, every alpha_CO with one of them, none left out.
CHOICES = [
    Choices(record.key, alpha_co=alpha, atomic=atomic.key, extinction=extinction)
    for record in STAR_FORMATION
    for atomic in ATOMIC
    for extinction in extinctions(record.tracers)
    for alpha in (None, "sun2020")
]
CHOICES += [Choices("leroy2008_fuv_24um", alpha_co=alpha) for alpha in (r.key for r in ALPHA_CO)]
CHOICES += [Choices("kennicutt1998_halpha", imf=imf) for imf in ("Salpeter", "Chabrier")]
all_choices = pytest.mark.parametrize(
    "choices",
    CHOICES,
    ids=lambda c: "-".join([c.calibration, str(c.alpha_co), *c.extinction.values(), c.imf]),
)
LINEAR = [
    c
    for c in CHOICES
    if STAR_FORMATION.get(c.calibration).is_linear
    and not (c.alpha_co and ALPHA_CO.get(c.alpha_co).is_self_consistent)
]
linear_choices = pytest.mark.parametrize(
    "choices",
    LINEAR,
    ids=lambda c: "-".join([c.calibration, str(c.alpha_co), *c.extinction.values(), c.imf]),
)
TYPICAL = {"HI": 300.0, "CO(2-1)": 5.0, "FUV": 0.05, "NUV": 0.05, "24um": 1.0, "Halpha": 1e-5}
TYPICAL |= {"70um": 20.0, "TIR": 1e-3, "1.4GHz": 0.1}


def sky(choices: Choices, line: str = "CO(2-1)", shape: tuple[int, ...] = SHAPE) -> Maps:
    """Draw a map of each tracer that is needed, with some negative pixels and one blank."""
    rng = np.random.default_rng(1)
    tracers = ["HI", *STAR_FORMATION.get(choices.calibration).tracers]
    tracers += [line] if choices.alpha_co else []
    maps = {}
    for tracer in tracers:
        maps[tracer] = TYPICAL.get(tracer, 5.0) * rng.normal(1.0, 1.0, shape)
        maps[tracer].flat[0] = -TYPICAL.get(tracer, 5.0)
    return maps


def parameters(shape: tuple[int, ...] = ()) -> Parameters:
    rng = np.random.default_rng(2)
    return Parameters(
        cos_i=rng.uniform(0.3, 1.0, shape),
        oh=rng.uniform(8.2, 8.85, shape),
        line_ratio=rng.uniform(0.5, 0.9, shape),
        ebv=rng.uniform(0.0, 0.3, shape),
        nii_ratio=rng.uniform(0.0, 0.5, shape),
        as_24um=rng.uniform(0.9, 1.2, shape),
        hi_opacity=rng.uniform(1.0, 1.3, shape),
        mass_to_light=rng.uniform(0.2, 0.6, shape),
        sigma_star=rng.lognormal(5.0, 1.0, shape),
        ms_offset_dex=rng.uniform(-0.5, 0.5, shape),
        g0_over_n=rng.uniform(0.001, 0.1, shape),
        alpha_co=rng.uniform(1.0, 10.0, shape),
        thermal_fraction=rng.uniform(0.05, 0.2, shape),
        diffuse={"24um": rng.uniform(0.0, 0.5, shape), "Halpha": rng.uniform(0.0, 0.5, shape)},
    )


def assert_same(got: Converted, expected: Converted, rel: float = 1e-12) -> None:
    assert got.values.keys() == expected.values.keys()
    for product, value in expected.values.items():
        np.testing.assert_allclose(got.values[product], value, rtol=rel)
        assert got.derivatives[product].keys() == expected.derivatives[product].keys()
        for tracer, slope in expected.derivatives[product].items():
            np.testing.assert_allclose(got.derivatives[product][tracer], slope, rtol=rel)


def at(given: Parameters, index: tuple[int, ...]) -> Parameters:
    stated = {f.name: value for f in fields(given) if (value := getattr(given, f.name)) is not None}
    fractions = {t: np.asarray(v)[index] for t, v in stated.pop("diffuse").items()}
    cut = {name: np.asarray(value)[index] for name, value in stated.items()}
    return Parameters(**cut, diffuse=fractions)


# --- contracts -----------------------------------------------------------------------------------


@all_choices
def test_products(choices: Choices) -> None:
    got = convert(sky(choices), choices, parameters())
    molecular = {"sigma_mol"} if choices.alpha_co else set()
    assert got.values.keys() == {"sigma_atom", "sigma_gas", "sigma_sfr"} | molecular
    assert got.values.keys() == got.derivatives.keys()
    for product, value in got.values.items():
        assert value.shape == SHAPE
        assert value.dtype == np.float64
        assert all(slope.shape == SHAPE for slope in got.derivatives[product].values())
        solved = np.isfinite(value)
        assert solved.all() or not STAR_FORMATION.get(choices.calibration).is_linear
        for tracer, slope in got.derivatives[product].items():
            if product == "sigma_mol" and tracer == "HI":
                # More atoms, a deeper potential, a lower alpha_CO: what CO gives is nearer zero.
                assert np.all(slope * value <= 0)
            else:
                assert np.all(slope[solved] > 0)
                assert np.isfinite(slope[solved]).all()
    gas = got.values["sigma_atom"] + got.values.get("sigma_mol", 0.0)
    np.testing.assert_allclose(got.values["sigma_gas"], gas, rtol=1e-14)


@linear_choices
def test_derivatives_are_differences(choices: Choices) -> None:
    maps, given = sky(choices), parameters()
    base = convert(maps, choices, given)
    for tracer in maps:
        step = 0.25 * TYPICAL[tracer]
        more = convert({**maps, tracer: maps[tracer] + step}, choices, given)
        for product, value in base.values.items():
            slope = base.derivatives[product].get(tracer, np.zeros(SHAPE))
            # The conversion is linear: a difference of any length, to rounding of the values.
            scale = np.abs(value).max() + np.abs(slope).max() * step
            np.testing.assert_allclose(
                more.values[product] - value, slope * step, rtol=0, atol=1e-13 * scale
            )
    # ... and homogeneous: the values are the derivatives times the intensities, nothing added.
    for product, value in base.values.items():
        total = sum(s * maps[tracer] for tracer, s in base.derivatives[product].items())
        np.testing.assert_allclose(value, total, rtol=1e-12)


@linear_choices
def test_signs_and_blanks_are_kept(choices: Choices) -> None:
    maps = sky(choices)
    flipped = convert({t: -m for t, m in maps.items()}, choices, parameters())
    base = convert(maps, choices, parameters())
    for product, value in base.values.items():
        assert value.flat[0] < 0
        np.testing.assert_array_equal(flipped.values[product], -value)
    for tracer in maps:
        holed = {**maps, tracer: maps[tracer].copy()}
        holed[tracer][1, 1] = np.nan
        got = convert(holed, choices, parameters())
        for product, value in got.values.items():
            is_blank = np.zeros(SHAPE, dtype=bool)
            is_blank[1, 1] = tracer in base.derivatives[product]
            np.testing.assert_array_equal(np.isnan(value), is_blank)


@all_choices
def test_inputs_are_untouched(choices: Choices) -> None:
    maps, given = sky(choices), parameters(SHAPE)
    before = pickle.dumps((maps, given, choices))
    stated = {f.name: getattr(given, f.name) for f in fields(given)}
    arrays = [*maps.values(), *(np.asarray(stated[name]) for name in stated if name != "diffuse")]
    arrays += [np.asarray(fraction) for fraction in given.diffuse.values()]
    for array in arrays:
        array.flags.writeable = False
    got = convert(maps, choices, given)
    for value in got.values.values():
        assert not any(np.shares_memory(value, array) for array in arrays)
    for array in arrays:
        array.flags.writeable = True
    assert pickle.dumps((maps, given, choices)) == before


@all_choices
def test_an_array_is_many_single_pixels(choices: Choices) -> None:
    maps, given = sky(choices), parameters(SHAPE)
    whole = convert(maps, choices, given)
    for index in np.ndindex(SHAPE):
        single = convert({t: m[index] for t, m in maps.items()}, choices, at(given, index))
        for product, value in single.values.items():
            expected = whole.values[product][index]
            assert float(value) == pytest.approx(expected, rel=1e-12, nan_ok=True)
            for tracer, slope in single.derivatives[product].items():
                expected = whole.derivatives[product][tracer][index]
                assert float(slope) == pytest.approx(expected, rel=1e-12, nan_ok=True)


@all_choices
def test_draws_on_a_leading_axis_are_single_calls(choices: Choices) -> None:
    n = 5
    maps, draws = sky(choices), parameters((n, 1, 1))
    # Draws of parameters over one sky, and draws of both.
    together = convert(maps, choices, draws)
    skies = {t: m * np.linspace(0.5, 1.5, n)[:, None, None] for t, m in maps.items()}
    both = convert(skies, choices, draws)
    for k in range(n):
        one = at(draws, (k, 0, 0))
        for batch, single_sky in ((together, maps), (both, {t: m[k] for t, m in skies.items()})):
            cut = Converted(
                {p: v[k] for p, v in batch.values.items()},
                {p: {t: s[k] for t, s in d.items()} for p, d in batch.derivatives.items()},
            )
            assert_same(cut, convert(single_sky, choices, one))


@all_choices
def test_choices_and_results_travel(choices: Choices) -> None:
    maps, given = sky(choices), parameters()
    there = pickle.loads(pickle.dumps((maps, choices, given)))
    assert_same(pickle.loads(pickle.dumps(convert(*there))), convert(maps, choices, given), rel=0)


# --- inclination, and what belongs to single bands ------------------------------------------------


@linear_choices
def test_inclination_enters_exactly_once(choices: Choices) -> None:
    # C911: applied twice at 60 degrees it would be 0.30103 dex, as much as forgotten.
    maps, given = sky(choices), parameters()
    whole = convert(maps, choices, given)
    halved = convert(maps, choices, replace(given, cos_i=given.cos_i / 2))
    for product, value in whole.values.items():
        np.testing.assert_allclose(halved.values[product], value / 2, rtol=1e-14)
        # Ratios of two surface densities do not know the inclination.
        np.testing.assert_allclose(
            halved.values[product] / halved.values["sigma_sfr"],
            value / whole.values["sigma_sfr"],
            rtol=1e-13,
        )
        for tracer, slope in whole.derivatives[product].items():
            np.testing.assert_allclose(halved.derivatives[product][tracer], slope / 2, rtol=1e-14)


@pytest.mark.parametrize(
    ("name", "value", "touched"),
    [
        ("ebv", 0.2, {("sigma_sfr", "FUV"), ("sigma_sfr", "NUV"), ("sigma_sfr", "Halpha")}),
        ("nii_ratio", 0.4, {("sigma_sfr", "Halpha")}),
        ("oh", 8.4, {("sigma_mol", "CO(2-1)"), ("sigma_gas", "CO(2-1)")}),
        ("line_ratio", 0.65, {("sigma_mol", "CO(2-1)"), ("sigma_gas", "CO(2-1)")}),
        ("as_24um", 1.1, {("sigma_sfr", "22um")}),
        ("hi_opacity", 1.2, {("sigma_atom", "HI"), ("sigma_gas", "HI")}),
        ("mass_to_light", 0.3, set()),
    ],
)
@pytest.mark.parametrize("calibration", STAR_FORMATION.keys())
@pytest.mark.parametrize("band", ["24um", "22um"])
def test_a_parameter_changes_its_own_bands_only(
    name: str, value: float, touched: set[tuple[str, str]], calibration: str, band: str
) -> None:
    choices = Choices(calibration, alpha_co="sun2020")
    maps = sky(choices)
    if "24um" in maps:
        maps[band] = np.abs(maps.pop("24um"))
    base = convert(maps, choices, Parameters(cos_i=0.5)).derivatives
    other = convert(maps, choices, Parameters(cos_i=0.5, **{name: value})).derivatives
    changed = {
        (product, tracer)
        for product, slopes in base.items()
        for tracer, slope in slopes.items()
        if not np.array_equal(slope, other[product][tracer])
    }
    assert changed == {(p, t) for p, t in touched if t in maps}


@pytest.mark.parametrize(
    "calibration", [record.key for record in STAR_FORMATION if "24um" in record.tracers]
)
def test_22um_stands_for_24um(calibration: str) -> None:
    choices = Choices(calibration)
    maps = sky(choices)
    as_22 = {t: m for t, m in maps.items() if t != "24um"}
    as_22["22um"] = maps["24um"] / 1.1
    expected = convert(maps, choices, Parameters(cos_i=0.7))
    got = convert(as_22, choices, Parameters(cos_i=0.7, as_24um=1.1))
    np.testing.assert_allclose(got.values["sigma_sfr"], expected.values["sigma_sfr"], rtol=1e-14)
    # Where both are there, 24 um is itself and 22 um is not added.
    both = convert({**maps, "22um": as_22["22um"]}, choices, Parameters(cos_i=0.7, as_24um=1.1))
    assert_same(both, expected, rel=0)


@settings(derandomize=True, deadline=None)
@given(ebv=st.floats(0, 1), nii=st.floats(0, 1), cos_i=st.floats(0.1, 1.0))
def test_foreground_and_nitrogen_act_before_the_sum(ebv: float, nii: float, cos_i: float) -> None:
    # The 24 um part is what it is without either: the hybrid is a sum of corrected bands.
    choices = Choices("leroy2012_halpha_24um")
    maps = sky(choices)
    given = Parameters(cos_i=cos_i, ebv=ebv, nii_ratio=nii)
    both = convert(maps, choices, given).values["sigma_sfr"]
    zero = np.zeros(SHAPE)
    line = convert({**maps, "24um": zero}, choices, given).values["sigma_sfr"]
    dust = convert({**maps, "Halpha": zero}, choices, Parameters(cos_i)).values["sigma_sfr"]
    np.testing.assert_allclose(both, line + dust, rtol=1e-12, atol=1e-15)


# --- what is there and what is not ---------------------------------------------------------------


@pytest.mark.parametrize("line", CO_LINES)
def test_every_line_of_co(line: str) -> None:
    choices = Choices("leroy2008_fuv_24um", alpha_co="bolatto2013_galactic")
    got = convert(sky(choices, line), choices, Parameters(cos_i=1.0, line_ratio=0.5))
    assert set(got.derivatives["sigma_mol"]) == {line}
    np.testing.assert_allclose(got.derivatives["sigma_mol"][line], 4.35 / 0.5)


def test_no_hi_no_total() -> None:
    choices = Choices("leroy2008_fuv_24um", alpha_co="bolatto2013_galactic")
    maps = {t: m for t, m in sky(choices).items() if t != "HI"}
    assert convert(maps, choices, Parameters(cos_i=1.0)).values.keys() == {
        "sigma_mol",
        "sigma_sfr",
    }


def test_a_co_record_without_a_co_map_is_refused() -> None:
    # The total gas must never be the other phase alone.
    maps = sky(Choices("leroy2008_fuv_24um"))
    with pytest.raises(KeyError):
        convert(maps, Choices("leroy2008_fuv_24um", alpha_co="sun2020"), Parameters(cos_i=1.0))


@pytest.mark.parametrize("calibration", STAR_FORMATION.keys())
def test_a_missing_map_is_named(calibration: str) -> None:
    choices = Choices(calibration)
    for tracer in STAR_FORMATION.get(calibration).tracers:
        maps = {t: m for t, m in sky(choices).items() if t != tracer}
        # A 24 um map may be replaced by a 22 um one: either may be named.
        with pytest.raises(KeyError, match=f"{calibration}.*{tracer.replace('24um', '2[24]um')}"):
            convert(maps, choices, Parameters(cos_i=1.0))


@pytest.mark.parametrize(
    ("changes", "near"),
    [
        ({"calibration": "leroy2008_fuv"}, "leroy2008_fuv_24um"),
        ({"alpha_co": "sun2021"}, "sun2020"),
        ({"atomic": "leroy2008_thick"}, "leroy2008_thin"),
        ({"extinction": {"FUV": "bianchi17"}}, "bianchi2017"),
    ],
)
def test_an_unknown_record_is_answered_with_a_near_one(changes: dict, near: str) -> None:
    choices = Choices("leroy2008_fuv_24um", alpha_co="sun2020")
    with pytest.raises(KeyError, match=f'did you mean "{near}"'):
        convert(sky(choices), replace(choices, **changes), Parameters(cos_i=1.0))


def test_no_record_no_correction() -> None:
    choices = Choices("leroy2008_fuv_24um", extinction={})
    maps = sky(choices)
    dusty, clean = (
        convert(maps, choices, Parameters(cos_i=1.0, ebv=e)).values["sigma_sfr"] for e in (0.5, 0.0)
    )
    np.testing.assert_array_equal(dusty, clean)


@pytest.mark.slow
@pytest.mark.parametrize("alpha_co", ["sun2020", "bolatto2013_eq31"])
def test_a_thousand_draws_of_a_thousand_pixels(alpha_co: str) -> None:
    n = 1000
    choices = Choices("leroy2008_fuv_24um", alpha_co=alpha_co)
    maps, draws = sky(choices, shape=(n,)), parameters((n, 1))
    together = convert(maps, choices, draws)
    for k in range(n):
        single = convert(maps, choices, at(draws, (k, 0)))
        for product, value in single.values.items():
            # A sum of terms of either sign is good to the last bit of the terms.
            atol = 1e-15 * np.abs(value).max()
            np.testing.assert_allclose(together.values[product][k], value, rtol=1e-12, atol=atol)
            for tracer, slope in single.derivatives[product].items():
                got = together.derivatives[product][tracer][k]
                np.testing.assert_allclose(got, slope, rtol=1e-12)

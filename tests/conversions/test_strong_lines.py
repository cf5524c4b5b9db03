"""Metallicity calibrations, scales and the mass-metallicity fallback.

Codes such as C502 number the worked check values of the project's reference sheet.
"""

import math

import numpy as np
import pytest

from kspipe.conversions import (
    ALPHA_CO,
    INPUTS,
    MASS_METALLICITY,
    OH_SCALES,
    STRONG_LINES,
    MassMetallicity,
    StrongLine,
    scale_shift_dex,
)

FIVE_DIGITS = 5e-5
every = pytest.mark.parametrize("record", list(STRONG_LINES), ids=lambda record: record.key)
every_mass = pytest.mark.parametrize(
    "record", list(MASS_METALLICITY), ids=lambda record: record.key
)


def oh(key: str, **ratios: float | np.ndarray) -> np.ndarray:
    return STRONG_LINES.get(key)({n: np.asarray(v, float) for n, v in ratios.items()})


@pytest.mark.parametrize(
    ("key", "ratios", "expected"),
    [
        # Pettini & Pagel 2004.
        pytest.param("pettini2004_o3n2", {"o3n2": 0.2}, 8.6660, id="C502"),
        pytest.param("pettini2004_n2", {"n2": -0.5}, 8.6150, id="C504"),
        pytest.param("pettini2004_n2_cubic", {"n2": -0.5}, 8.6300, id="C505"),
        # Marino et al. 2013, Eqs. 2 and 4.
        pytest.param("marino2013_o3n2", {"o3n2": 0.2}, 8.4902, id="C503"),
        pytest.param("marino2013_n2", {"n2": -0.5}, 8.5120, id="C506"),
        # Pilyugin & Grebel 2016.
        pytest.param(
            "pilyugin2016_s", {"s2_hb": 1.0, "r3_hb": 1.5, "n2_hb": 1.2}, 8.4887, id="C507"
        ),
        pytest.param(
            "pilyugin2016_s", {"s2_hb": 0.8, "r3_hb": 4.0, "n2_hb": 0.2}, 8.0254, id="C508"
        ),
        pytest.param(
            "pilyugin2016_r", {"r2_hb": 2.0, "r3_hb": 1.5, "n2_hb": 1.2}, 8.5845, id="C509"
        ),
        # Dopita et al. 2016.
        pytest.param("dopita2016", {"n2s2": 0.0, "n2": -0.4}, 8.6645, id="C510"),
        # Curti et al. 2017, inverted: O3N2 at OH = 8.5.
        pytest.param("curti2017_o3n2", {"o3n2": 1.1045}, 8.5, id="C511"),
    ],
)
def test_published_values(key: str, ratios: dict[str, float], expected: float) -> None:
    # Five digits of 12+log(O/H) are 0.5 of the fourth decimal.
    assert float(oh(key, **ratios)) == pytest.approx(expected, abs=0.00005)


@pytest.mark.parametrize(
    ("key", "log_mass", "expected"),
    [
        # Sanchez et al. 2019 and Curti et al. 2020 (both from memory).
        pytest.param("sanchez2019", 10.0, 8.6628, id="C512"),
        pytest.param("curti2020", 10.0, 8.7199, id="C513"),
    ],
)
def test_published_masses(key: str, log_mass: float, expected: float) -> None:
    got = float(MASS_METALLICITY.get(key)(np.array(log_mass)))
    assert got == pytest.approx(expected, abs=0.00005)


# --- contracts -----------------------------------------------------------------------------------


def drawn(record: StrongLine, shape: tuple[int, ...] = (6, 7)) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(1)
    arrays = {n: rng.uniform(INPUTS[n].low, INPUTS[n].high, shape) for n in record.needs}
    for array in arrays.values():
        array.flags.writeable = False
    return arrays


@every
def test_arrays(record: StrongLine) -> None:
    ratios = drawn(record)
    got = record(ratios)
    assert got.shape == (6, 7)
    assert np.isfinite(got).all()
    assert np.all((got > 7.0) & (got < 9.3))
    for index in np.ndindex(got.shape):
        single = record({n: a[index] for n, a in ratios.items()})
        assert float(single) == pytest.approx(got[index], rel=1e-12)
    for name in record.needs:
        holed = {n: a.copy() for n, a in ratios.items()}
        holed[name][2, 3] = np.nan
        assert np.flatnonzero(np.isnan(record(holed))).tolist() == [2 * 7 + 3]
        assert not record.outside(holed)[2, 3]
        with pytest.raises(KeyError, match=f"{record.key}.*{name}"):
            record({n: a for n, a in ratios.items() if n != name})
    assert record.oh_scale in OH_SCALES


@every
def test_ranges_are_flagged(record: StrongLine) -> None:
    for limits in record.ranges:
        if limits.name in record.needs:
            edges = np.array([limits.low - 0.01, limits.low, limits.high, limits.high + 0.01])
            outside = record.outside({limits.name: edges})
            assert outside.tolist() == [True, False, False, True]
    if not record.ranges:
        assert record.key.startswith("pilyugin2016")


@every_mass
def test_masses_on_arrays(record: MassMetallicity) -> None:
    masses = np.linspace(8.5, 11.5, 30)
    got = record(masses)
    assert got.shape == masses.shape
    assert np.isfinite(got).all()
    np.testing.assert_allclose(got, [float(record(np.array(m))) for m in masses], rtol=1e-12)
    assert np.isnan(record(np.array([np.nan]))).all()
    # More massive galaxies have more metals, up to their plateau.
    assert np.all(np.diff(got[masses < 11]) > 0)
    assert record.oh_scale in OH_SCALES
    assert record.certainty == "from memory"


def test_masses_against_each_other() -> None:
    # Both saturate: 8.73 + 0.010 / e at x = 4.5, and 8.793.
    assert float(MASS_METALLICITY.get("sanchez2019")(np.array(12.5))) == pytest.approx(
        8.73 + 0.010 * math.exp(-1), rel=1e-12
    )
    assert float(MASS_METALLICITY.get("curti2020")(np.array(15.0))) == pytest.approx(
        8.793, abs=1e-6
    )
    # On one scale they would agree; between scales 0.1 to 0.3 dex (common practice).
    masses = np.linspace(9.5, 11.0, 9)
    apart = MASS_METALLICITY.get("curti2020")(masses) - MASS_METALLICITY.get("sanchez2019")(masses)
    assert np.abs(apart).max() < 0.3
    # The two fits of Sanchez et al. 2019 differ as the two calibrations do, within 0.05 dex.
    for mass in masses:
        first, second = (
            float(MASS_METALLICITY.get(k)(mass)) for k in ("sanchez2019", "sanchez2019_m13")
        )
        shift = scale_shift_dex("PP04 O3N2", "M13 O3N2", first)
        assert second - first == pytest.approx(shift, abs=0.05)


# --- limits, symmetries, other forms -------------------------------------------------------------


def test_the_two_forms_of_pettini2004_meet() -> None:
    # The cubic is steeper at both ends and agrees with the line in the middle: the paper's own
    # scatter is 0.18 dex.
    n2 = np.linspace(-1.5, -0.5, 20)
    difference = oh("pettini2004_n2_cubic", n2=n2) - oh("pettini2004_n2", n2=n2)
    assert np.abs(difference).max() < 0.18
    assert np.sign(difference).min() < 0 < np.sign(difference).max()


def test_curti2017_is_its_polynomial() -> None:
    x = np.linspace(7.7 - 8.69, 8.84 - 8.69, 60)
    o3n2 = 0.281 - 4.765 * x - 2.268 * x**2
    np.testing.assert_allclose(oh("curti2017_o3n2", o3n2=o3n2), 8.69 + x, atol=1e-10)
    n2 = -0.489 + 1.513 * x - 2.554 * x**2 - 5.293 * x**3 - 2.867 * x**4
    np.testing.assert_allclose(oh("curti2017_n2", n2=n2), 8.69 + x, atol=1e-10)
    # Beyond the turning point there is no metallicity: NaN, and flagged.
    for key, name, beyond in (("curti2017_o3n2", "o3n2", 3.0), ("curti2017_n2", "n2", 0.5)):
        record, ratio = STRONG_LINES.get(key), {name: np.array(beyond)}
        assert np.isnan(record(ratio))
        assert record.outside(ratio)


def test_one_galaxy_on_many_scales() -> None:
    # Strong lines of one HII region, Case B: OIII/Hb = 1, NII/Ha = 0.25, Ha/Hb = 2.86, SII/Ha =
    # 0.25, doublet ratios 1/3. Calibrations of direct type agree within 0.1 dex, all within 0.3
    # (common practice).
    n2, o3n2 = math.log10(0.25), math.log10(1 / 0.25)
    n2_hb, s2_hb, r3_hb = 0.25 * 4 / 3 * 2.86, 0.25 * 2.86, 4 / 3
    direct = [
        oh("marino2013_n2", n2=n2), oh("marino2013_o3n2", o3n2=o3n2),
        oh("pilyugin2016_s", s2_hb=s2_hb, r3_hb=r3_hb, n2_hb=n2_hb),
    ]  # fmt: skip
    assert np.ptp(direct) < 0.1
    every_one = [
        *direct, oh("pettini2004_n2", n2=n2), oh("pettini2004_n2_cubic", n2=n2),
        oh("pettini2004_o3n2", o3n2=o3n2), oh("curti2017_n2", n2=n2),
        oh("curti2017_o3n2", o3n2=o3n2), oh("dopita2016", n2s2=0.0, n2=n2),
    ]  # fmt: skip
    assert np.ptp(every_one) < 0.3


def test_more_oxygen_lines_less_oxygen() -> None:
    # At high metallicity cooling moves to the infrared: O3N2 falls, N2 rises.
    x = np.linspace(-0.3, 1.5, 9)
    for key in ("pettini2004_o3n2", "marino2013_o3n2", "curti2017_o3n2"):
        assert np.all(np.diff(oh(key, o3n2=x)) < 0)
    for key in ("pettini2004_n2", "pettini2004_n2_cubic", "marino2013_n2", "curti2017_n2"):
        assert np.all(np.diff(oh(key, n2=np.linspace(-1.4, -0.4, 9))) > 0)


def test_dopita2016_without_its_fifth_power() -> None:
    # Sometimes dropped: at y = -0.3 nothing is lost, and less than 0.01 dex within 0.45 of it.
    y = np.linspace(-0.75, 0.15, 20)
    full = oh("dopita2016", n2s2=y, n2=0.0)
    assert np.abs(full - (8.77 + y)).max() < 0.01
    assert float(oh("dopita2016", n2s2=-0.3, n2=0.0)) == pytest.approx(8.47, rel=1e-12)
    # Only N2S2 + 0.264 N2 counts.
    assert float(oh("dopita2016", n2s2=-0.264, n2=1.0)) == float(oh("dopita2016", n2s2=0.0, n2=0.0))


def test_pilyugin2016_branches() -> None:
    # The branches meet at log N2 = -0.6 within 0.1 dex for the ratios that regions of that N2 have,
    # R3 = 4.5, S2 = 0.4, R2 = 2.5 (common practice); for others they need not.
    for key, third, ratio in (("pilyugin2016_s", "s2_hb", 0.4), ("pilyugin2016_r", "r2_hb", 2.5)):
        below, above = (
            float(oh(key, **{third: ratio, "r3_hb": 4.5, "n2_hb": 10**-0.6 * f}))
            for f in (1 - 1e-9, 1 + 1e-9)
        )
        assert above == pytest.approx(below, abs=0.1)
        # A line that is not positive has no logarithm.
        record = STRONG_LINES.get(key)
        ratios = {third: np.array(1.0), "r3_hb": np.array(-0.1), "n2_hb": np.array(1.0)}
        assert np.isnan(record(ratios))
        assert record.outside(ratios)
    # S and R are for the same regions: within 0.1 dex.
    s = oh("pilyugin2016_s", s2_hb=0.9, r3_hb=1.5, n2_hb=1.0)
    r = oh("pilyugin2016_r", r2_hb=2.0, r3_hb=1.5, n2_hb=1.0)
    assert float(s) == pytest.approx(float(r), abs=0.1)


# --- scales --------------------------------------------------------------------------------------


def test_shifts_between_scales() -> None:
    # O3N2 = 0.125 is 8.69 of Pettini & Pagel 2004 and 8.50625 of Marino et al. 2013.
    assert scale_shift_dex("PP04 O3N2", "M13 O3N2", 8.69) == pytest.approx(8.50625 - 8.69, rel=1e-9)
    # There and back.
    there = scale_shift_dex("PP04 N2", "M13 N2", 8.5)
    assert scale_shift_dex("M13 N2", "PP04 N2", 8.5 + there) == pytest.approx(-there, rel=1e-9)
    assert scale_shift_dex("direct", "direct", 8.5) == 0.0
    # Different line ratios, or no straight line: not known.
    for given, wanted in (("PP04 N2", "PP04 O3N2"), ("direct", "M13 N2"), ("D16", "PP04 N2 cubic")):
        assert scale_shift_dex(given, wanted, 8.5) is None
    assert all(r.oh_scale is None or r.oh_scale in OH_SCALES for r in ALPHA_CO)

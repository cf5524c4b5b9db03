"""Closure on a recipe: the painted sky through the chain, found again."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest

from kspipe.core.errors import InputError
from kspipe.recipe import load_recipe
from kspipe.trials.closure import _true_zero_point, run_closure
from kspipe.trials.closure_result import Found, summed_up
from kspipe.trials.painted import Paint, Painter, noise_factors

RECIPES = Path(__file__).resolve().parents[2] / "recipes"
# Noise that is nothing; what the recipe measures on blank sky it then measures as nothing.
QUIET = dict.fromkeys(("hi", "co", "fuv", "ir"), 1e-06)


def small(name="orrinda_short.toml", size_arcsec=150.0):
    recipe = load_recipe(RECIPES / name)
    typed = type(recipe.galaxy.r25)(size_arcsec, 0.0, f"{size_arcsec} arcsec")
    return recipe.model_copy(update={"grid": recipe.grid.model_copy(update={"size": typed})})


@pytest.fixture(scope="module")
def painter():
    return Painter.of(small())


def test_noise_free_sky_comes_back(painter):
    """Painter and chain share no smoothing and no regridding: each checks the other."""
    paint = Paint(noise=QUIET)
    sky = painter.sky(paint, 0)
    disc = painter.reduce(sky, paint, 0)
    # The sky is painted 4 times finer than grid and pixels at least.
    assert painter.plane.pixel_arcsec <= painter.plan.grid.pixel_arcsec / 4 + 1e-9
    for name in ("sigma_atom", "sigma_mol", "sigma_gas", "sigma_sfr"):
        truth = sky.truth.surfaces[name].value
        used = disc.coverage[name] > 0.9999
        np.testing.assert_allclose(disc.surfaces[name].value[used], truth[used], rtol=2e-3)


def test_wrong_assumptions_show_as_they_must(painter):
    """Both phases and stars by cos i, molecular gas by alpha_CO besides (common practice)."""
    paint = Paint(noise=QUIET, inclination_off_deg=5.0, alpha_co_off=1.5)
    sky = painter.sky(paint, 0)
    disc = painter.reduce(sky, paint, 0)
    tilt = math.cos(math.radians(41)) / math.cos(math.radians(46))
    for name, factor in (("sigma_atom", tilt), ("sigma_mol", tilt / 1.5), ("sigma_sfr", tilt)):
        truth = sky.truth.surfaces[name].value
        used = disc.coverage[name] > 0.9999
        ratio = disc.surfaces[name].value[used] / truth[used]
        np.testing.assert_allclose(ratio, factor, rtol=3e-3, err_msg=name)


def test_true_zero_point_moves_with_the_paint(painter):
    used = np.isfinite(painter.plan.grid.offsets_arcsec()[0])
    found = []
    for shift in (0.0, 0.1):
        paint = Paint(relation="shielding_kpc", shift_dex=shift)
        truth = painter.sky(paint, 3).truth
        found.append(_true_zero_point(painter, paint, truth, truth, used))
    # The same sky with stars brighter by 0.1 dex everywhere.
    assert found[1] - found[0] == pytest.approx(0.1, abs=1e-6)
    # Clumps within the beam make a steep law yield more stars than its mean gas would.
    assert 0.0 < found[0] < 0.3


def test_noise_factor_reaches_map_and_recipe(painter):
    paint = Paint(noise={"fuv": 3.0, "hi": 0.5})
    # A noise that is typed as a number is typed anew; one in a file comes with the maps.
    assert painter.chain_recipe(paint).maps["fuv"].noise.level.startswith("0.015")
    sky = painter.sky(paint, 1)
    maps = painter.observe(sky, paint, 1)
    again = painter.observe(painter.sky(paint, 1), paint, 1)
    np.testing.assert_array_equal(maps["co"][0].data, again["co"][0].data)
    other = painter.observe(sky, paint, 2)
    assert not np.allclose(maps["co"][0].data, other["co"][0].data, equal_nan=True)
    stored = painter.plan.sources["hi"].noise_image.read()
    np.testing.assert_allclose(maps["hi"][1].data.squeeze(), 0.5 * stored, rtol=1e-6)
    assert maps["hi"][0].data.ndim == 4
    assert maps["fuv"][1] is None


def test_coverage_is_counted_from_the_population():
    # Found, error, truth of the own sky: truths scatter about 1, errors cover that.
    rng = np.random.default_rng(1)
    own = 1.0 + 0.1 * rng.standard_normal(4000)
    found = own + 0.1 * rng.standard_normal(4000)
    rows = np.stack([found, np.full(4000, math.sqrt(0.02)), own], axis=1)
    summary = summed_up("x", rows)
    assert isinstance(summary, Found)
    # Half widths of 68 and 95 % of a normal distribution, as in any table.
    assert summary.within_68 == pytest.approx(0.68, abs=0.02)
    assert summary.within_95 == pytest.approx(0.95, abs=0.01)
    assert summary.bias == pytest.approx(0.0, abs=4 * summary.bias_error)
    assert summary.bias_error == pytest.approx(0.1 / math.sqrt(4000), rel=0.05)


@pytest.mark.parametrize(
    ("paint", "mocks", "words"),
    [
        (Paint(relation="nowhere"), 2, "no relation of the recipe"),
        (Paint(noise={"xx": 2.0}), 2, "no map of the recipe"),
        (Paint(noise={"co": -1.0}), 2, "positive factor"),
        (Paint(), 1, "--mocks"),
    ],
)
def test_bad_settings_are_told(paint, mocks, words):
    with pytest.raises(InputError, match=words):
        run_closure(small(), paint, n_mocks=mocks)


def test_noise_factors_are_read():
    assert noise_factors(["co=0.5", "hi = 2"]) == {"co": 0.5, "hi": 2.0}
    with pytest.raises(InputError, match=r"--noise co=0\.5"):
        noise_factors(["co"])


@pytest.mark.slow
def test_line_is_found_as_often_as_the_errors_say():
    """Twelve skies over the whole demonstration field; slope and level within their errors."""
    closure = run_closure(load_recipe(RECIPES / "orrinda_short.toml"), Paint(), n_mocks=12)
    assert closure.failures == {}
    for found in closure.found:
        assert found.n == 12
        assert abs(found.bias) < max(4 * found.bias_error, found.stated_error), found
        # 68 and 95 % of 12: fewer than 4 and than 9 have chances of 0.3 and 0.2 % (binomial).
        assert found.within_68 >= 4 / 12, found
        assert found.within_95 >= 9 / 12, found
    for name, (expected, found_ratio) in closure.wrong.ratios.items():
        assert found_ratio == pytest.approx(expected, rel=0.1), name

"""The budget: the response against full fits, exact identities, turns, seeds and bad input."""

from __future__ import annotations

import math
import os
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from kspipe.comparison.samples import LinearSamples
from kspipe.core.errors import InputError
from kspipe.products.style import figure_style, save_figure
from kspipe.products.trial_figures import _budget_figure
from kspipe.trials.budget import make_budget, plain_budget
from kspipe.trials.draws import convert_draws, inputs_of, sums_of
from kspipe.trials.flips import _first_crossing
from kspipe.trials.priors import Prior
from kspipe.trials.reduced import line_samples
from kspipe.trials.response import line_response, refit
from kspipe.trials.universes import ranges_of
from kspipe.trials.write import as_json


@pytest.fixture(scope="module")
def demo(demo):
    """The inner disc: a fit costs a third of that of the whole field."""
    return replace(demo, used=demo.used & (demo.disc.radius_kpc < 7.0))


@pytest.fixture(scope="module")
def fitted(demo):
    lattice = demo.lattice()
    fit, response = line_response(line_samples(demo.disc, lattice))
    assert fit.is_fitted
    return fit, response, inputs_of(demo, lattice)


def move(fitted, prior, n_sigma=1.0):
    _, response, inputs = fitted
    _, drawn = next(convert_draws(inputs, [prior], np.array([[n_sigma]])))
    moved = response(drawn.gas, drawn.sfr, drawn.var_gas, drawn.var_sfr, drawn.cov)
    return moved, drawn


def test_unmoved_data_leave_the_line(fitted):
    fit, response, _ = fitted
    prior = Prior("nothing", "oh", 0.1, "", "test")
    moved, _ = move(fitted, prior)
    assert moved.slope[0] == pytest.approx(fit.slope, abs=1e-9)
    assert moved.level[0] == pytest.approx(fit.intercept, abs=1e-9)
    assert moved.scatter_dex[0] == pytest.approx(fit.scatter_dex, abs=1e-9)
    assert response.fit is fit


def test_inclination_shifts_the_level_by_one_minus_slope(fitted):
    # A factor f on both axes: log f + level at gas / f = (1 - N) log f (common practice).
    fit = fitted[0]
    moved, _ = move(fitted, Prior("inclination", "inclination", 19.0, "deg", "test"))
    factor = math.log10(math.cos(math.radians(60.0)) / math.cos(math.radians(41.0)))
    assert moved.slope[0] == pytest.approx(fit.slope, abs=1e-9)
    assert moved.level[0] - fit.intercept == pytest.approx((1 - fit.slope) * factor, abs=1e-9)


@pytest.mark.parametrize(
    "prior",
    [
        Prior("alpha_CO", "factor", 0.1, "dex", "test", "CO(2-1)"),
        Prior("dust", "factor", 0.1, "dex", "test", "24um"),
    ],
    ids=lambda prior: prior.name,
)
def test_response_is_the_full_fit_to_first_order(fitted, prior):
    """Reference: the generative model fitted again to the moved data."""
    fit, response, _ = fitted
    moved, drawn = move(fitted, prior)
    full = refit(response, drawn.samples(0))
    for name, own in (("slope", fit.slope), ("level", fit.intercept)):
        shift = getattr(full, name)[0] - own
        assert getattr(moved, name)[0] - own == pytest.approx(shift, rel=0.08, abs=0.002), name


@pytest.fixture(scope="module")
def budget(demo):
    with pytest.MonkeyPatch.context() as patch:
        # Full fits cost a second each: one check, one other phase of the lattice.
        patch.setattr("kspipe.trials.budget.CHECKED", 1)
        patch.setattr("kspipe.trials.universes.PHASES", 2)
        patch.setattr("kspipe.trials.universes.BEAMS", (1.0,))
        return make_budget(demo, n_draws=400)


def test_budget_adds_up(budget):
    for quantity in budget.quantities:
        shifts = budget.shifts[quantity.name]
        assert quantity.quadrature == pytest.approx(float(np.sqrt(np.sum(shifts**2))))
        # Percentiles of the sum of independent normal shifts, up to curvature and 400 draws.
        assert quantity.systematic == pytest.approx(quantity.quadrature, rel=0.35)
        assert quantity.n_lost == 0
        ranked = [abs(shift) for _, shift in budget.ranked(quantity.name)]
        assert ranked == sorted(ranked, reverse=True)
    assert max(abs(check.slope) for check in budget.checks) < 0.05
    own = budget.universes[0]
    assert (own.alpha_co, own.star_formation) == ("bolatto2013_galactic", "leroy2008_fuv_24um")
    for name, by_choice in ranges_of(budget.universes).items():
        low, high = by_choice["all"]
        for dimension, (least, most) in by_choice.items():
            assert low <= least <= own.values[name] <= most <= high, (name, dimension)
    for flip in budget.flips:
        if flip.assumption:
            assert 0 < abs(flip.n_sigma) <= 5


def test_flip_is_where_the_bias_crosses_zero(demo, budget):
    stated = [flip for flip in budget.flips if "stars" in flip.conclusion and flip.assumption]
    assert stated
    flip = stated[0]
    prior = next(p for p in budget.priors if p.name == flip.assumption)
    inputs = inputs_of(demo, demo.lattice())
    _, drawn = next(convert_draws(inputs, [prior], np.array([[flip.n_sigma]])))
    assert abs(sums_of(drawn, demo.recipe)["bias shielding_kpc"][0]) < 1e-3


def test_crossing_is_the_nearest_of_both_sides():
    amounts = np.array([-3.0, -2.0, -1.0, 1.0, 2.0, 3.0])
    margin = np.array([-1.0, -0.5, 0.5, 1.5, 2.0, 2.5])
    assert _first_crossing(amounts, margin, 1.0) == pytest.approx(-1.5)
    assert _first_crossing(amounts, margin + 5, 6.0) is None
    assert _first_crossing(amounts, np.full(6, np.nan), 1.0) is None


@pytest.mark.slow
def test_figure_has_a_panel_for_each_quantity(budget, tmp_path):
    plain = as_json({"galaxy": "Orrinda", **plain_budget(budget)})
    with figure_style():
        for name in ("one", "two"):
            figure = _budget_figure(plain)
            save_figure(figure, tmp_path / name)
    assert len(figure.axes) == len(budget.quantities)
    for suffix in (".png", ".pdf"):
        files = [(tmp_path / name).with_suffix(suffix).read_bytes() for name in ("one", "two")]
        assert files[0] == files[1]
    written = {text.get_text() for axes in figure.axes for text in axes.get_yticklabels()}
    assert {"alpha_CO", "together"} <= written


def test_too_few_draws_are_refused(demo):
    with pytest.raises(InputError, match="--draws"):
        make_budget(demo, n_draws=10)


def test_few_samples_give_no_line_but_a_budget(demo):
    few = np.zeros_like(demo.used)
    few[np.nonzero(demo.lattice())[0][:6], np.nonzero(demo.lattice())[1][:6]] = True
    fit, response = line_response(line_samples(demo.disc, few))
    assert response is None
    assert "needs 10" in fit.message
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("kspipe.trials.universes.BEAMS", ())
        budget = make_budget(replace(demo, used=few), n_draws=100)
    assert {quantity.name for quantity in budget.quantities} >= {"t_dep_gas", "bias shielding_kpc"}
    assert "slope" not in budget.shifts
    assert budget.checks == []


def test_samples_without_a_value_stay(fitted):
    _, response, inputs = fitted
    _, drawn = next(convert_draws(inputs, [], np.zeros((1, 0))))
    sfr = drawn.sfr.copy()
    sfr[0, 3] = np.nan
    moved = response(drawn.gas, sfr, drawn.var_gas, drawn.var_sfr, drawn.cov)
    assert np.isfinite(moved.slope).all()
    assert isinstance(drawn.samples(0), LinearSamples)


@pytest.mark.slow
def test_numbers_do_not_depend_on_threads(tmp_path):
    root = Path(__file__).resolve().parents[2]
    recipe = root / "recipes" / "orrinda_short.toml"
    texts = []
    for threads in ("1", "2"):
        out = tmp_path / threads
        names = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
        environment = {**os.environ, **dict.fromkeys(names, threads)}
        for command in (["reduce", recipe, "--out", out], ["budget", out, "--draws", "200"]):
            done = subprocess.run(
                [sys.executable, "-m", "kspipe", *map(str, command), "--quiet"],
                env=environment,
                capture_output=True,
                text=True,
                check=False,
            )
            assert done.returncode == 0, done.stderr
        texts.append((out / "budget.json").read_text())
    assert texts[0] == texts[1]

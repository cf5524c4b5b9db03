"""Draws through the conversion: identities that hold for any galaxy.

The identities are those of thin discs and linear tracers (common practice): cos i moves a point
along the 45-degree line, a factor on alpha_CO is a factor on the molecular depletion time, angular
gradients know no distance.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from kspipe.recipe.quantity import Measured
from kspipe.trials.draws import convert_draws, inputs_of, sums_of
from kspipe.trials.priors import Prior, priors_of
from kspipe.trials.reduced import line_samples


def shifted(inputs, prior, n_sigma=1.0):
    """One draw with one assumption moved, and the unmoved one."""
    moved, middle = (
        next(convert_draws(inputs, [prior], np.array([[n]])))[1] for n in (n_sigma, 0.0)
    )
    return moved, middle


@pytest.fixture(scope="module")
def inputs(demo):
    return inputs_of(demo, demo.lattice())


def test_no_shift_is_the_reduction(demo, inputs):
    _, drawn = next(convert_draws(inputs, [], np.zeros((1, 0))))
    samples, expected = drawn.samples(0), line_samples(demo.disc, demo.lattice())
    for name in ("x", "y", "var_x", "var_y", "cov"):
        np.testing.assert_allclose(getattr(samples, name), getattr(expected, name), rtol=1e-9)


def test_inclination_moves_points_along_the_diagonal(inputs):
    prior = Prior("inclination", "inclination", 19.0, "deg", "test")
    # alpha_CO of the demonstration recipe does not depend on metallicity.
    moved, middle = shifted(inputs, prior)
    factor = math.cos(math.radians(60.0)) / math.cos(math.radians(41.0))
    np.testing.assert_allclose(moved.gas, factor * middle.gas, rtol=1e-9)
    np.testing.assert_allclose(moved.sfr, factor * middle.sfr, rtol=1e-9)
    times = [sums_of(drawn, inputs.recipe)["t_dep"][0] for drawn in (moved, middle)]
    assert times[0] == pytest.approx(times[1], abs=1e-12)


def test_alpha_co_is_a_factor_on_the_depletion_time(inputs):
    prior = Prior("alpha_CO", "factor", 0.3, "dex", "test", "CO(2-1)")
    moved, middle = shifted(inputs, prior)
    times = [sums_of(drawn, inputs.recipe)["t_dep"][0] for drawn in (moved, middle)]
    assert times[0] - times[1] == pytest.approx(0.3, abs=1e-12)
    np.testing.assert_allclose(moved.sfr, middle.sfr, rtol=0)


@pytest.mark.parametrize(("gradient", "moves"), [("-0.3 dex/r25", False), ("-0.045 dex/kpc", True)])
def test_distance_acts_through_a_gradient_per_kpc_only(demo, gradient, moves):
    metallicity = demo.recipe.metallicity.model_copy(update={"gradient": gradient})
    recipe = demo.recipe.model_copy(update={"metallicity": metallicity})
    inputs = inputs_of(replace(demo, recipe=recipe), demo.lattice())
    prior = Prior("distance", "distance", 1.0, "of it", "test")
    moved, middle = shifted(inputs, prior)
    np.testing.assert_allclose(moved.gas, middle.gas, rtol=1e-12)
    away = moved.oh - middle.oh
    if not moves:
        assert not away.any()
    else:
        # At twice the distance each arcsecond is twice as long.
        radius_kpc = demo.disc.radius_kpc[demo.lattice()]
        np.testing.assert_allclose(away[0], -0.045 * radius_kpc, rtol=1e-6, atol=1e-9)


def test_diffuse_light_takes_its_share_of_the_flux(demo):
    # Over whole rings a share of the mean is a share of the sum.
    inputs = inputs_of(demo, demo.used)
    prior = Prior("diffuse", "spread", -0.2, "of the flux", "test", "FUV", is_one_sided=True)
    amount = prior.amount(np.array([-1.0, 1.0]))
    np.testing.assert_allclose(amount, [-0.2, -0.2])
    removed = amount[0] * inputs.level["FUV"].sum() / inputs.intensity["FUV"].sum()
    assert removed == pytest.approx(-0.2, rel=1e-9)


def test_calibration_errors_of_the_recipe_become_priors(demo):
    hi = demo.matched["hi"]
    common = replace(hi.common, calibration=0.05, pedestal=2.0)
    matched = {**demo.matched, "hi": replace(hi, common=common)}
    priors, fixed = priors_of(demo.recipe, matched, set(demo.disc.intensity))
    named = {prior.name: prior for prior in priors}
    assert named["flux scale of hi"].sigma == 0.05
    assert named["zero level of hi"].sigma == 2.0
    assert any(line.startswith("flux scale of co") for line in fixed)
    # Widths typed beside values: 41 +- 3 deg, 8.6 +- 0.4 Mpc.
    assert named["inclination"].sigma == 3.0
    assert named["distance"].sigma == pytest.approx(0.4 / 8.6)
    # Bolatto et al. 2013 give 30 % for the Galaxy: the record's scatter.
    assert named["alpha_CO"].sigma == 0.11
    assert "bolatto2013_galactic" in named["alpha_CO"].origin
    assert all(prior.origin for prior in priors)


def test_every_prior_moves_something(demo, inputs):
    given = demo.recipe.foreground.model_copy(update={"ebv": Measured(0.02, 0.01, "")})
    recipe = demo.recipe.model_copy(update={"foreground": given})
    priors, _ = priors_of(recipe, demo.matched, set(inputs.intensity))
    priors.append(Prior("pa", "position_angle", 5.0, "deg", "test"))
    for prior in priors:
        moved, middle = shifted(inputs, prior)
        changed = [
            not np.array_equal(getattr(moved, name), getattr(middle, name))
            for name in ("gas", "sfr", "oh")
        ]
        assert any(changed), prior.name

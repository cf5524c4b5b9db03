"""The line fitted with one generative model: recovered truth, nulls, and plain refusals."""

from __future__ import annotations

import math

import numpy as np
import pytest
from mock_galaxy import (
    CENTRE,
    LEVEL,
    N_PIXELS,
    PIVOT,
    PIXELS_PER_BEAM,
    beam_noise,
    paint,
    phase_of,
    samples_of,
)

from kspipe.comparison.line import fit_line, fit_line_phases
from kspipe.comparison.phases import Phase, average_optima, beam_correlation_length
from kspipe.comparison.posterior import draw_posterior
from kspipe.comparison.samples import LinearSamples, independent_samples, lattice_phases
from kspipe.core.errors import ShapeError

LATTICE = independent_samples((N_PIXELS, N_PIXELS), CENTRE, PIXELS_PER_BEAM)
LENGTH = beam_correlation_length(PIXELS_PER_BEAM)


def linear(x, y, sigma_x, sigma_y, cov=0.0):
    n = np.size(x)
    return LinearSamples(
        np.asarray(x),
        np.asarray(y),
        np.full(n, sigma_x**2),
        np.full(n, sigma_y**2),
        np.full(n, cov),
    )


@pytest.fixture(scope="module")
def galaxy():
    return paint(np.random.default_rng([1, 0]), 1.4, 0.2)


@pytest.fixture(scope="module")
def phased(galaxy):
    masks = lattice_phases((N_PIXELS, N_PIXELS), CENTRE, PIXELS_PER_BEAM, 2)
    return fit_line_phases([phase_of(galaxy, mask) for mask in masks], LENGTH)


def test_mocks_are_as_faint_as_they_say(galaxy):
    assert np.mean(galaxy.true_sfr < 3 * galaxy.sfr_error) == pytest.approx(0.5, abs=0.01)
    assert np.mean(galaxy.true_mol < 3 * galaxy.mol_error) == pytest.approx(0.5, abs=0.01)
    assert np.mean(galaxy.true_mol == 0) == pytest.approx(1 / 3, abs=0.01)


def test_truth_is_recovered_from_faint_maps(phased):
    fit = phased.mean
    assert abs(fit.slope - 1.4) < 3 * fit.slope_error < 0.2
    assert abs(fit.intercept - (LEVEL + 1.4 * (fit.pivot - PIVOT))) < 3 * fit.intercept_error
    assert abs(fit.scatter_dex - 0.2) < 3 * fit.scatter_error
    assert not fit.is_limit


def test_pivot_decorrelates_and_errors_grow_away_from_it(phased):
    fit = phased.mean
    assert abs(fit.covariance[0, 1]) < 1e-12
    assert fit.at(fit.pivot)[1] == pytest.approx(fit.intercept_error)
    assert fit.at(fit.pivot + 1.0)[1] == pytest.approx(
        math.hypot(fit.intercept_error, fit.slope_error)
    )


def test_mean_and_median_are_told_apart(phased):
    # log10 of the mean of a log-normal over its median is s^2 ln(10) / 2; 0.10 dex for 0.3 dex.
    assert phased.mean.mean_over_median_dex == pytest.approx(
        phased.mean.scatter_dex**2 * math.log(10) / 2
    )


def test_same_samples_give_the_same_bits(galaxy, phased):
    once = fit_line_phases([phase_of(galaxy, LATTICE)], LENGTH)
    assert once.phases[0].slope == phased.phases[0].slope
    assert once.phases[0].scatter_dex == phased.phases[0].scatter_dex


def test_neighbours_that_are_copies_are_counted_once(galaxy, phased):
    # Every sample twice at one place: the same estimate with the same error as once.
    phase = phase_of(galaxy, LATTICE)
    best, positions = phased.optima[0], phase.kept_positions()
    doubled, covariance = average_optima([best] * 2, [positions] * 2, np.arange(8), 3, 0.5)
    alone = average_optima([best], [positions], np.arange(8), 3, 0.5)
    np.testing.assert_allclose(doubled, alone[0])
    np.testing.assert_allclose(np.sqrt(np.diag(covariance)), np.sqrt(np.diag(alone[1])), rtol=0.15)


def test_no_scatter_gives_a_limit_not_a_value():
    # A likelihood ratio of 2.7 sets this mock apart from no scatter: one in twenty does that.
    galaxy = paint(np.random.default_rng([1, 1]), 1.0, 0.0)
    fit = fit_line(samples_of(galaxy, LATTICE))
    assert fit.is_limit
    assert math.isnan(fit.scatter_error)
    assert 0 < fit.scatter_dex < 0.05
    assert math.isnan(fit.mean_over_median_dex)
    assert abs(fit.slope - 1.0) < 3 * fit.slope_error


def test_noise_shared_by_both_axes_does_not_mimic_a_slope():
    rng = np.random.default_rng(8)
    log_x = rng.normal(1.0, 0.3, 400)
    shared = rng.normal(size=400)
    x = 10**log_x + 3.0 * shared
    y = 10 ** (-1.0 + 1.0 * (log_x - 1.0) + 0.1 * rng.normal(size=400)) + 0.03 * shared
    y += 0.01 * rng.normal(size=400)
    fit = fit_line(linear(x, y, 3.0, math.hypot(0.03, 0.01), 0.09))
    assert abs(fit.slope - 1.0) < 3 * fit.slope_error


class TestNulls:
    """Galaxies in which there is nothing to find."""

    def test_scrambled_map_has_no_slope(self, galaxy):
        samples = samples_of(galaxy, LATTICE)
        order = np.random.default_rng(9).permutation(samples.y.size)
        fit = fit_line(
            LinearSamples(samples.x, samples.y[order], samples.var_x, samples.var_y, samples.cov)
        )
        assert abs(fit.slope) < 3 * fit.slope_error

    def test_shuffled_within_annuli_only_the_profile_survives(self, galaxy):
        # What is left of the slope is that of the two profiles; the scatter grows by the rest.
        rng = np.random.default_rng(10)
        turned = galaxy.sfr[::-1, ::-1].copy()
        ring = np.rint(galaxy.radius * 6).astype(int)
        for r in np.unique(ring):
            here = np.flatnonzero(ring == r)
            turned.flat[here] = turned.flat[rng.permutation(here)]
        samples = samples_of(galaxy, LATTICE)
        whole = fit_line(samples)
        null = fit_line(
            LinearSamples(samples.x, turned[LATTICE], samples.var_x, samples.var_y, samples.cov)
        )
        assert 0.3 < null.slope < whole.slope + 3 * whole.slope_error
        assert null.scatter_dex > whole.scatter_dex + 3 * whole.scatter_error

    def test_one_map_on_both_axes_is_said(self):
        x = np.linspace(-1, 50, 60)
        fit = fit_line(
            LinearSamples(x, 0.01 * x, np.ones(60), np.full(60, 1e-4), np.full(60, 0.01))
        )
        assert "one map stands on both axes" in fit.message
        assert fit.slope == pytest.approx(1.0)
        assert fit.scatter_dex == 0.0

    def test_a_galaxy_of_noise_is_not_detected(self):
        rng = np.random.default_rng(11)
        fit = fit_line(linear(rng.normal(size=200), rng.normal(size=200), 1.0, 1.0))
        assert "not detected" in fit.message
        assert math.isnan(fit.slope)
        assert not fit.is_fitted


@pytest.mark.parametrize("n", [0, 3, 9])
def test_fewer_than_ten_points_give_no_number(n):
    fit = fit_line(linear(np.full(n, 9.0), np.full(n, 9.0), 1.0, 1.0))
    assert f"{n} independent samples" in fit.message
    assert math.isnan(fit.slope)


def test_arrays_must_match():
    with pytest.raises(ShapeError, match="samples"):
        LinearSamples(np.ones(3), np.ones(4), np.ones(3), np.ones(3), np.ones(3))


def test_values_without_an_error_do_not_enter():
    samples = LinearSamples(
        np.array([1.0, np.nan, 1.0]), np.ones(3), np.array([1.0, 1.0, 0.0]), np.ones(3), np.zeros(3)
    )
    assert samples.n == 1


@pytest.mark.slow
def test_posterior_agrees_with_the_curvature(phased, galaxy):
    data = samples_of(galaxy, LATTICE).measurements()
    drawn = draw_posterior(
        phased.models[0], data, phased.optima[0], 1500, np.random.default_rng(12)
    )
    assert drawn.is_converged, drawn.message
    low, high = drawn.interval("slope", 0.68)
    assert 0.5 * (high - low) == pytest.approx(phased.phases[0].slope_error, rel=0.15)


def test_a_sampler_that_fails_says_so(phased, galaxy):
    data = samples_of(galaxy, LATTICE).measurements()
    drawn = draw_posterior(phased.models[0], data, phased.optima[0], 30, np.random.default_rng(1))
    assert not drawn.is_converged
    assert "has not converged" in drawn.message
    assert math.isnan(drawn.interval("slope", 0.68)[0])


@pytest.mark.slow
@pytest.mark.parametrize(("slope", "scatter"), [(1.0, 0.1), (1.4, 0.3)])
def test_intervals_hold_the_truth_as_often_as_they_say(slope, scatter):
    # The bench counts 500 mocks of four kinds; 120 hold 68 % to 4.3 % (binomial).
    pulls = []
    for k in range(120):
        galaxy = paint(np.random.default_rng([13, k]), slope, scatter)
        fit = fit_line_phases([phase_of(galaxy, LATTICE)], LENGTH).mean
        assert fit.is_fitted, fit.message
        level = LEVEL + slope * (fit.pivot - PIVOT)
        off = np.array([fit.slope - slope, fit.intercept - level, fit.scatter_dex - scatter])
        pulls.append(off / [fit.slope_error, fit.intercept_error, fit.scatter_error])
    pulls = np.array(pulls)
    held = np.mean(np.abs(pulls) < 1.0, axis=0)
    assert np.all(np.abs(held - 0.683) < 3 * 0.0425), held
    assert np.all(np.mean(np.abs(pulls) < 1.96, axis=0) > 0.89)


def test_beam_noise_of_the_mocks_has_the_stated_correlation():
    noise = beam_noise(np.random.default_rng(14), 400)
    assert noise.std() == pytest.approx(1.0, abs=0.05)
    shift = round(PIXELS_PER_BEAM)
    # Noise one FWHM apart correlates by exp(-2 ln 2) = 0.25.
    assert np.mean(noise * np.roll(noise, shift, 0)) == pytest.approx(0.25, abs=0.05)


def test_phase_positions_follow_what_is_usable(galaxy):
    phase = phase_of(galaxy, LATTICE)
    broken = phase.samples.x.copy()
    broken[0] = np.nan
    other = Phase(
        LinearSamples(
            broken, phase.samples.y, phase.samples.var_x, phase.samples.var_y, phase.samples.cov
        ),
        phase.positions,
    )
    assert len(other.kept_positions()) == len(phase.kept_positions()) - 1

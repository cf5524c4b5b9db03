"""Likelihood with two latents: against brute force, a closed form, and differences."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from kspipe.kernels.latent import Measurements, marginal_likelihood
from kspipe.kernels.mixture import GaussianMixture

POPULATION = GaussianMixture(np.array([0.4, 0.6]), np.array([0.6, 1.3]), np.array([0.4, 0.25]))


def line(slope, intercept):
    def mean(x, _rows):
        return intercept + slope * (x - 1.0)

    def gradient(x, _rows):
        return np.stack([x - 1.0, np.ones_like(x)])

    return mean, gradient


def measured(rng, n, slope, scatter):
    """Any signal to noise from 0.1 to 100, noise that is correlated either way."""
    x = POPULATION.sample(n, rng)
    y = slope * (x - 1.0) - 1.5 + scatter * rng.normal(size=n)
    sigma_x, sigma_y = 10 ** rng.uniform(-1.0, 1.0, n), 10 ** rng.uniform(-3.0, -1.0, n)
    rho = rng.uniform(-0.6, 0.97, n)
    z = rng.normal(size=(2, n))
    return Measurements(
        10**x + sigma_x * z[0],
        10**y + sigma_y * (rho * z[0] + np.sqrt(1 - rho**2) * z[1]),
        sigma_x**2,
        sigma_y**2,
        rho * sigma_x * sigma_y,
    )


def brute_force(data, i, slope, intercept, scatter, n=4001):
    """The double integral of one point as a plain sum over a dense grid."""
    x, y = np.linspace(-4.5, 4.0, n), np.linspace(-9.0, 3.5, 3 * n // 2)
    sigma_x, sigma_y = math.sqrt(data.var_x[i]), math.sqrt(data.var_y[i])
    rho = data.cov[i] / (sigma_x * sigma_y)
    u, v = (data.x[i] - 10**x) / sigma_x, (data.y[i] - 10**y) / sigma_y
    weight = np.exp(POPULATION.log_density(x))
    total = 0.0
    for part in np.array_split(np.arange(n), 20):
        a = u[part, None]
        noise = (a**2 - 2 * rho * a * v + v**2) / (1 - rho**2)
        off = (y - intercept - slope * (x[part, None] - 1.0)) / scatter
        total += np.sum(weight[part, None] * np.exp(-0.5 * (noise + off**2)))
    norm = (2 * math.pi) ** 1.5 * scatter * sigma_x * sigma_y * math.sqrt(1 - rho**2)
    return math.log(total * (x[1] - x[0]) * (y[1] - y[0]) / norm)


@pytest.mark.parametrize(
    ("slope", "scatter", "n"),
    [
        (1.0, 0.3, 2),
        *(
            pytest.param(*case, 6, marks=pytest.mark.slow)
            for case in [(1.0, 0.05), (1.4, 0.1), (1.0, 0.3), (-0.7, 0.3), (1.4, 0.8)]
        ),
    ],
)
def test_equals_brute_force_to_a_millionth(slope, scatter, n):
    # Outside source: the definition, summed on 24 million nodes.
    data = measured(np.random.default_rng(round(100 * scatter)), n, slope, scatter)
    mean, gradient = line(slope, -1.5)
    result = marginal_likelihood(data, mean, gradient, scatter, POPULATION)
    brute = [brute_force(data, i, slope, -1.5, scatter) for i in range(data.x.size)]
    np.testing.assert_allclose(result.log_likelihood, brute, rtol=0, atol=1e-6)


def test_sharp_measurements_follow_the_normal_form():
    # Kelly 2007, ApJ 665, 1489, Eq. 16: with a Gaussian population and Gaussian errors of the
    # logarithms, (x, y) are bivariate normal. Linear noise of 0.1 % is such an error.
    population = GaussianMixture(np.array([1.0]), np.array([1.1]), np.array([0.4]))
    slope, intercept, scatter = 1.3, -2.0, 0.2
    log_x, log_y = np.array([0.6, 1.1, 1.9]), np.array([-2.4, -1.9, -1.2])
    x, y = 10**log_x, 10**log_y
    error = 1e-3
    data = Measurements(x, y, (error * x) ** 2, (error * y) ** 2, np.zeros(3))
    got = marginal_likelihood(data, *line(slope, intercept), scatter, population).log_likelihood
    in_dex = error / math.log(10.0)
    var_x = 0.4**2 + in_dex**2
    var_y = slope**2 * 0.4**2 + scatter**2 + in_dex**2
    cov = slope * 0.4**2
    normal = stats.multivariate_normal([1.1, intercept + slope * 0.1], [[var_x, cov], [cov, var_y]])
    jacobian = np.log(x * math.log(10.0)) + np.log(y * math.log(10.0))
    expected = normal.logpdf(np.column_stack([log_x, log_y])) - jacobian
    np.testing.assert_allclose(got, expected, atol=3e-4)


def test_derivatives_are_those_of_the_likelihood():
    data = measured(np.random.default_rng(3), 40, 1.2, 0.2)
    start = np.array([1.1, -1.4, math.log(0.25), *POPULATION.parameters])

    def at(parameters):
        mixture = GaussianMixture.from_parameters(parameters[3:])
        mean, gradient = line(*parameters[:2])
        return marginal_likelihood(
            data, mean, gradient, math.exp(parameters[2]), mixture, nodes=(14, 24)
        )

    here = at(start)
    # A likelihood good to 1e-8 has differences over 2e-4 that are good to 1e-4.
    for i in range(start.size):
        step = np.zeros(start.size)
        step[i] = 1e-4
        above, below = at(start + step), at(start - step)
        slope = (above.log_likelihood - below.log_likelihood) / 2e-4
        np.testing.assert_allclose(here.scores[i], slope, rtol=1e-4, atol=2e-4)
        bend = -(above.scores - below.scores).sum(axis=1) / 2e-4
        np.testing.assert_allclose(here.information[i], bend, rtol=1e-4, atol=2e-3)


def test_least_width_bends_the_parameters_of_a_mixture_consistently():
    x = np.linspace(-1.0, 3.0, 7)[None, :]
    weight = np.full(x.shape, 1.0 / 7.0)
    start = np.array([0.3, 0.6, 1.3, math.log(0.15), math.log(0.3)])

    def mixture(parameters):
        return GaussianMixture.from_parameters(parameters, 0.1)

    np.testing.assert_allclose(mixture(start).parameters, start)
    share, scores = mixture(start).complete_scores(x)
    mean = np.einsum("knj,kqnj->qnj", share, scores)
    for i in range(5):
        step = np.zeros(5)
        step[i] = 1e-5
        above, below = mixture(start + step), mixture(start - step)
        slope = (above.log_density(x) - below.log_density(x)) / 2e-5
        np.testing.assert_allclose(mean[i], slope, atol=1e-8)
    # Louis 1982: information is that of complete data less the variance of its scores.
    square = np.einsum("knj,kanj,kbnj->ab", share * weight, scores, scores)
    information = mixture(start).complete_information(x, weight)
    information = information - square + np.einsum("anj,bnj,nj->ab", mean, mean, weight)
    for i in range(5):
        step = np.zeros(5)
        step[i] = 1e-5
        parts = [mixture(p).complete_scores(x) for p in (start + step, start - step)]
        up, down = (np.einsum("knj,kqnj,nj->q", a, b, weight) for a, b in parts)
        np.testing.assert_allclose(information[i], -(up - down) / 2e-5, atol=1e-6)

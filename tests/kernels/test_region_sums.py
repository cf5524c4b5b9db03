"""Sums over regions against their definition, written out, and limits against normal tables."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from kspipe.kernels.correlation import SampledCorrelation
from kspipe.kernels.noise import NoiseTerm, sum_covariance
from kspipe.kernels.region_sums import region_covariance, upper_limit

JACOBIAN = np.array([[-3.0, 0.5], [0.5, 3.0]])
BEAM = np.array([[40.0, 8.0], [8.0, 25.0]])


def written_out(first, second, labels, weights, correlation):
    """Sum over all pairs of pixels: the definition of the covariance of two sums."""
    y, x = np.nonzero(labels >= 0)
    east = JACOBIAN[0, 0] * x + JACOBIAN[0, 1] * y
    north = JACOBIAN[1, 0] * x + JACOBIAN[1, 1] * y
    d = np.stack([east[:, None] - east, north[:, None] - north])
    # exp(-d^T C^-1 d / 4): white noise under a Gaussian of covariance C.
    rho = np.exp(-0.25 * np.einsum("iab,ij,jab->ab", d, np.linalg.inv(correlation), d))
    one, other = (s[y, x] * weights[y, x] for s in (first, second))
    pairs = one[:, None] * rho * other
    k = labels.max() + 1
    where = labels[y, x]
    return np.array(
        [[pairs[np.ix_(where == i, where == j)].sum() for j in range(k)] for i in range(k)]
    )


@pytest.fixture
def scene():
    rng = np.random.default_rng(3)
    labels = np.tile(np.repeat([-1, 0, 1, 2], 5), (14, 1))
    labels[2, 7] = -1
    sigma = [np.exp(rng.normal(0, 0.3, labels.shape)) * sign for sign in (1, -1)]
    return labels, sigma, rng.uniform(0.5, 1.5, labels.shape)


def test_is_the_sum_over_pairs(scene):
    labels, (one, other), weights = scene
    terms = [
        (NoiseTerm("a", s, BEAM), NoiseTerm("b", 2 * s, np.zeros((2, 2)))) for s in (one, other)
    ]
    found = region_covariance([(terms[0], terms[1])], labels, weights, JACOBIAN)[0]
    expected = written_out(one, other, labels, weights, BEAM)
    # White noise goes together with itself only.
    white = [4 * np.sum((one * other * weights**2)[labels == i]) for i in range(3)]
    np.testing.assert_allclose(found[0], np.diag(expected) + white, rtol=1e-4)
    symmetric = 0.5 * (expected + expected.T)
    np.testing.assert_allclose(found[1], np.diag(symmetric, 1), rtol=1e-4)


def test_agrees_with_the_sum_by_fourier_transform(scene):
    labels, (one, _), _ = scene
    # Gone at the edge of what was sampled, as a measured correlation is.
    lag = np.arange(-6, 7)
    values = np.exp(-0.4 * np.hypot(*np.meshgrid(lag, lag)) ** 2)
    term = (NoiseTerm("a", one, BEAM, SampledCorrelation(values, JACOBIAN)),)
    used = labels >= 0
    flat = np.where(used, 0, -1)
    ((variance, _),) = region_covariance([(term, term)], flat, np.ones(used.shape), JACOBIAN)
    assert variance[0] == pytest.approx(sum_covariance(term, term, used, JACOBIAN), rel=1e-4)


def test_sources_that_differ_do_not_go_together(scene):
    labels, (one, other), weights = scene
    pair = ((NoiseTerm("a", one, BEAM),), (NoiseTerm("b", other, BEAM),))
    variance, beside = region_covariance([pair], labels, weights, JACOBIAN)[0]
    assert not variance.any()
    assert not beside.any()


def test_limit_of_nothing_is_the_two_sided_table():
    # A Gaussian cut at zero and measured at zero is half a Gaussian: its 95 % lies at 1.960
    # sigma, the two-sided value of any normal table.
    one_sided_95 = 1.6448536
    assert upper_limit(0.0, 2.0, one_sided_95) == pytest.approx(2.0 * 1.959964, rel=1e-6)


def test_limit_far_from_zero_is_the_ordinary_one():
    assert upper_limit(20.0, 1.0, 3.0) == pytest.approx(23.0, abs=1e-9)


@pytest.mark.parametrize("value", [-4.0, -1.0, 0.5, 3.0])
def test_limit_is_the_quantile_of_a_truncated_normal(value):
    # Reference: scipy.stats.truncnorm.
    cut = stats.truncnorm(-value, np.inf, loc=value, scale=1.0)
    assert upper_limit(value, 1.0, 3.0) == pytest.approx(cut.isf(stats.norm.sf(3.0)), rel=1e-6)

"""Zero point and scatter: against brute-force integration, and on mocks of known truth."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from scipy.integrate import quad

from kspipe.kernels.likelihood import fit_zero_point, log_likelihood

# offset, scatter [dex], measured, predicted, error: ordinary, sharp, negative, far outliers.
POINTS = [
    (0.05, 0.2, 1.0, 1.2, 0.1),
    (0.05, 0.2, 1.0, 1.2, 0.001),
    (0.0, 0.3, -0.3, 0.5, 0.5),
    (0.0, 0.01, 5.0, 5.0, 0.3),
    (0.0, 0.1, 5.0, 0.5, 0.2),
    (0.0, 0.1, -3.0, 5.0, 0.5),
    (0.2, 0.5, 0.02, 1.0, 0.4),
]


def brute_force(offset: float, scatter: float, y: float, predicted: float, error: float) -> float:
    """Integral over the normal deviate e, adaptive, its pieces laid around both peaks."""

    def integrand(e: float) -> float:
        true = predicted * 10 ** (offset + scatter * e)
        return math.exp(-0.5 * e**2 - 0.5 * ((y - true) / error) ** 2) / (2 * math.pi * error)

    peak = (math.log10(max(y, 1e-3 * error) / predicted) - offset) / scatter
    edges = sorted({-30.0, 30.0, *np.clip([peak - 3, peak, peak + 3, -3, 0, 3], -29, 29)})
    pieces = [
        quad(integrand, a, b, limit=500, epsabs=0, epsrel=1e-10)[0] for a, b in pairwise(edges)
    ]
    return math.log(sum(pieces))


@pytest.mark.parametrize("point", POINTS)
def test_likelihood_is_the_integral(point):
    offset, scatter, y, predicted, error = point
    ours = log_likelihood(
        offset, scatter, np.array([y]), np.array([predicted]), np.array([[error**2], [0.0], [0.0]])
    )
    # Three pieces of 48 Gauss-Legendre nodes, cut at 6 sigma: 1e-6 in ln L.
    assert ours == pytest.approx(brute_force(*point), abs=1e-6 * max(1.0, abs(ours)))


def test_likelihood_is_continuous():
    """No point may fall through between nodes when the offset moves."""
    rng = np.random.default_rng(4)
    predicted = 10 ** rng.normal(-3, 1.0, 300)
    y = predicted * 10 ** rng.normal(0.1, 0.3, 300) + 1e-4 * rng.normal(size=300)
    terms = np.array([np.full(300, 1e-8), np.zeros(300), np.zeros(300)])
    offsets = 0.1 + np.linspace(-0.02, 0.02, 41)
    values = np.array([log_likelihood(o, 0.25, y, predicted, terms) for o in offsets])
    curvature = np.diff(values, 2)
    # A parabola: the second difference hardly changes.
    assert np.ptp(curvature) < 0.2 * abs(np.median(curvature))


def mock(rng: np.random.Generator, offset: float, scatter: float, n: int = 80):
    predicted = 10 ** rng.normal(-3, 0.7, n)
    y = predicted * 10 ** rng.normal(offset, scatter, n) + 1e-3 * rng.normal(size=n)
    return y, predicted, np.array([np.full(n, 1e-6), np.zeros(n), np.zeros(n)])


@pytest.mark.slow
def test_fit_recovers_zero_point_and_scatter():
    """Half of the values are below S/N 1, many negative; nothing is left out."""
    rng = np.random.default_rng(8)
    fits = [fit_zero_point(*mock(rng, 0.1, 0.25)) for _ in range(30)]
    offset = [(f.offset_dex - 0.1) / f.offset_error_dex for f in fits]
    scatter = [(f.scatter_dex - 0.25) / f.scatter_error_dex for f in fits]
    for pulls in (offset, scatter):
        # 30 mocks: the mean pull to 0.18, its width to 13 %; three times that.
        assert abs(np.mean(pulls)) < 0.55
        assert 0.6 < np.std(pulls) < 1.4


def test_no_scatter_is_a_limit_and_few_points_are_refused():
    rng = np.random.default_rng(9)
    y, predicted, terms = mock(rng, 0.0, 1e-6, n=60)
    terms[0] *= 1.5  # errors stated too large: the scatter hits its limit
    fit = fit_zero_point(y, predicted, terms)
    assert fit.scatter_dex < 0.05
    assert math.isnan(fit.scatter_error_dex) or fit.scatter_error_dex > 0
    assert fit_zero_point(y[:9], predicted[:9], terms[:, :9]) is None

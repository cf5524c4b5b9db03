"""The estimators of older papers, against worked examples and a statistics library."""

from __future__ import annotations

import math
import warnings

import numpy as np
import pytest
from scipy import stats

from kspipe.comparison.estimators import (
    classical_fits,
    least_squares_with_errors,
    ordinary_slopes,
)
from kspipe.comparison.samples import LinearSamples

# Pearson 1901's points with the weights of York 1966, Can. J. Phys. 44, 1079.
X = np.array([0.0, 0.9, 1.8, 2.6, 3.3, 4.4, 5.2, 6.1, 6.5, 7.4])
Y = np.array([5.9, 5.4, 4.4, 4.6, 3.5, 3.7, 2.8, 2.8, 2.4, 1.5])
WEIGHT_X = np.array([1000.0, 1000.0, 500.0, 800.0, 200.0, 80.0, 60.0, 20.0, 1.8, 1.0])
WEIGHT_Y = np.array([1.0, 1.8, 4.0, 8.0, 20.0, 20.0, 70.0, 70.0, 100.0, 500.0])


def test_errors_on_both_axes_as_in_the_worked_example():
    # York et al. 2004, Am. J. Phys. 72, 367, Table II: -0.480533407, 5.479910224.
    slope, intercept = least_squares_with_errors(
        X, Y, 1 / WEIGHT_X, 1 / WEIGHT_Y, np.zeros(10), start=-0.5
    )
    assert slope == pytest.approx(-0.480533407, abs=2e-9)
    assert intercept == pytest.approx(5.479910224, abs=2e-8)


def test_least_squares_are_those_of_scipy():
    slopes = ordinary_slopes(X, Y)
    assert slopes["y|x"] == pytest.approx(stats.linregress(X, Y).slope)
    assert slopes["x|y"] == pytest.approx(1 / stats.linregress(Y, X).slope)


def test_orthogonal_regression_is_the_first_principal_axis():
    # The axis of largest variance minimises perpendicular distances (Pearson 1901).
    values, vectors = np.linalg.eigh(np.cov(X, Y))
    axis = vectors[:, values.argmax()]
    assert ordinary_slopes(X, Y)["orthogonal"] == pytest.approx(axis[1] / axis[0])
    assert ordinary_slopes(-X, Y)["orthogonal"] == pytest.approx(-axis[1] / axis[0])


def test_bisector_halves_the_angle():
    # Isobe et al. 1990, ApJ 364, 104: the line that bisects OLS(Y|X) and OLS(X|Y).
    slopes = ordinary_slopes(-X, Y)
    middle = 0.5 * (math.atan(slopes["y|x"]) + math.atan(slopes["x|y"]))
    assert math.atan(slopes["bisector"]) == pytest.approx(middle)


def test_correlated_errors_agree_with_orthogonal_distance_regression():
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DeprecationWarning)
        odr = pytest.importorskip("scipy.odr", reason="scipy 1.19 has it no more")
    rng = np.random.default_rng(4)
    x = rng.normal(size=60)
    rho = 0.6
    noise = rng.multivariate_normal([0, 0], [[0.04, rho * 0.06], [rho * 0.06, 0.09]], 60)
    measured_x, measured_y = x + noise[:, 0], 1.5 * x + 0.3 + noise[:, 1]
    got = least_squares_with_errors(
        measured_x, measured_y, np.full(60, 0.04), np.full(60, 0.09), np.full(60, rho * 0.06),
        start=1.0,
    )  # fmt: skip
    # The same minimum after y' = y - 0.9 x, whose noise is independent of that of x.
    lean = rho * 0.06 / 0.04
    data = odr.RealData(measured_x, measured_y - lean * measured_x, 0.2, math.sqrt(0.09 * 0.64))
    result = odr.ODR(data, odr.unilinear, beta0=[0.5, 0.0], sstol=1e-15, partol=1e-12).run()
    assert got[0] - lean == pytest.approx(result.beta[0], abs=1e-6)
    assert got[1] == pytest.approx(result.beta[1], abs=1e-6)


def test_what_has_no_logarithm_is_left_out_and_counted():
    rng = np.random.default_rng(5)
    x = np.concatenate([10 ** rng.uniform(0, 2, 40), [-1.0, 2.0, np.nan]])
    y = np.concatenate([0.01 * x[:40], [0.1, -0.1, 0.1]])
    samples = LinearSamples(x, y, np.full(43, 0.01), np.full(43, 1e-8), np.zeros(43))
    fits = {fit.method: fit for fit in classical_fits(samples, pivot=1.0)}
    assert fits["y|x"].n == 40
    assert fits["y|x"].n_left_out == 2
    for fit in fits.values():
        assert fit.slope == pytest.approx(1.0, abs=0.02)
        assert fit.intercept == pytest.approx(-1.0, abs=0.02)


def test_too_few_detections_give_no_number():
    x = np.array([1.0, 2.0, 3.0])
    samples = LinearSamples(x, x, x / 9, x / 9, np.zeros(3))
    assert all(math.isnan(fit.slope) for fit in classical_fits(samples, 0.0))

"""Roots of many equations at once, against a general scalar root finder."""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy.optimize import brentq

from kspipe.kernels.rootfind import bisect, solve_falling

RNG = np.random.default_rng(4)
A, B = np.exp(RNG.normal(0, 2, 500)), RNG.uniform(0.1, 5, 500)


def kinked(x: Any, inputs: Any) -> Any:
    """Falls, with a kink and very different slopes."""
    return inputs["a"] * np.exp(-3.0 * x) - np.maximum(inputs["b"] * x, 4.0 * x - 1.0)


def solve(inputs: dict[str, np.ndarray], doubtful: bool = False) -> np.ndarray:
    n = inputs["a"].size
    return solve_falling(
        kinked, inputs, 0.0, 50.0, np.full(n, 1.0), np.full(n, doubtful)
    )  # fmt: skip


def test_against_a_scalar_root_finder() -> None:
    got = solve({"a": A, "b": B})
    expected = [
        brentq(lambda x, a=a, b=b: kinked(x, {"a": a, "b": b}), 0, 50, xtol=1e-14)
        for a, b in zip(A, B, strict=True)
    ]
    np.testing.assert_allclose(got, expected, rtol=1e-10)


def test_no_root_and_no_input() -> None:
    inputs = {"a": np.array([1.0, -1.0, np.nan, 0.5]), "b": np.array(1.0)}
    got = solve(inputs, doubtful=True)
    assert got[1] == 0.0
    assert np.isnan(got[2])
    np.testing.assert_allclose(
        kinked(got[[0, 3]], {"a": inputs["a"][[0, 3]], "b": 1.0}), 0, atol=1e-12
    )
    # Blanks among many others neither stop nor last for ever.
    some = np.where(np.arange(500) % 7 == 0, np.nan, A)
    np.testing.assert_array_equal(np.isnan(solve({"a": some, "b": B})), np.isnan(some))


def test_bisection_in_the_logarithm() -> None:
    target = np.array([1e-3, 2.0, 7e4])
    got = bisect(lambda x: x - target, np.full(3, 1e-6), np.full(3, 1e9))
    np.testing.assert_allclose(got, target, rtol=1e-12)

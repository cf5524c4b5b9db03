"""Slopes that a formula carries are those of central differences, and of calculus by hand."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from kspipe.kernels.dual import Dual, choose, implicit, plain, slopes_of

X, Y = np.array([0.3, 1.0, 2.5]), np.array([1.6, 0.4, 3.1])

FORMULAS: dict[str, Callable[[Any, Any], Any]] = {
    "sum": lambda x, y: x + 2.0 * y - 1.0 + (3.0 - x),
    "product": lambda x, y: x * y * x,
    "ratio": lambda x, y: (1.0 / x) / (y / x + y),
    "powers": lambda x, y: x**-2.5 * y**0.3 + 2.0**x + x**y,
    "exponentials": lambda x, y: np.exp(-x) * np.expm1(y) + np.exp(x * y),
    "logarithms": lambda x, y: np.log(x) * np.log1p(y) + np.log10(x + y),
    "roots": lambda x, y: np.sqrt(x * y) + np.square(x) - -y,
    "ends": lambda x, y: np.maximum(x, y) * np.minimum(2.0, x + y) + np.maximum(1.5, x),
    "choice": lambda x, y: choose(plain(x) < plain(y), x * x, 3.0 * y) + choose(
        plain(x) > 1.0, 1.0, y
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", FORMULAS)
def test_slopes_are_central_differences(name: str) -> None:
    formula = FORMULAS[name]
    got = formula(Dual(X, {"x": 1.0}), Dual(Y, {"y": 1.0}))
    np.testing.assert_allclose(got.value, formula(X, Y), rtol=1e-15)
    h = 1e-6
    by_x = (formula(X + h, Y) - formula(X - h, Y)) / (2 * h)
    by_y = (formula(X, Y + h) - formula(X, Y - h)) / (2 * h)
    # The middle of X and of Y lies on no edge of the choices.
    for slope, expected in ((got.slopes["x"], by_x), (got.slopes["y"], by_y)):
        away = np.array([True, name not in ("ends", "choice"), True])
        found = np.broadcast_to(slope, X.shape)
        np.testing.assert_allclose(found[away], expected[away], rtol=1e-8, atol=1e-8)


def test_one_variable_in_several_places() -> None:
    x = Dual(X, {"x": 1.0})
    # d/dx (x^2 - 3 x) exp(x), by hand.
    got = (x * x - 3.0 * x) * np.exp(x)
    np.testing.assert_allclose(got.slopes["x"], (X**2 - X - 3.0) * np.exp(X), rtol=1e-14)


def test_plain_numbers_stay_plain() -> None:
    assert isinstance(choose(X > 1, X, 0.0), np.ndarray)
    assert plain(X) is X
    assert slopes_of(X) == {}
    assert isinstance(Dual(X, {}) > 1.0, np.ndarray)
    with pytest.raises(TypeError):
        np.sin(Dual(X, {"x": 1.0}))


def test_slopes_of_a_root() -> None:
    # x^3 = u: dx/du = 1 / (3 x^2).
    u = np.array([1.0, 8.0, 27.0])
    root = np.cbrt(u)

    def residual(x: Any, inputs: Any) -> Any:
        return x**3.0 - inputs["u"]

    got = implicit(residual, root, {"u": Dual(u, {"u": 1.0})})
    np.testing.assert_allclose(got.slopes["u"], 1 / (3 * root**2), rtol=1e-14)
    assert implicit(residual, root, {"u": u}) is root

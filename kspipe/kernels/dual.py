"""Numbers that carry their slopes: a formula is written once and gives its derivatives too.

Forward differentiation: each operation applies the chain rule to the slopes that its operands
carry, so that derivatives are those of the formula itself, exact to rounding.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any, Final

import numpy as np
from numpy.lib.mixins import NDArrayOperatorsMixin
from numpy.typing import NDArray

__all__ = ["Dual", "choose", "implicit", "plain", "slopes_of"]

Array = NDArray[np.float64]
Partial = Callable[[Any, Any, Any], Any]

# For each operation on (x, y) with the result r, the partial derivatives by x and by y.
_BY_OPERAND: Final[dict[np.ufunc, tuple[Partial, ...]]] = {
    np.add: (lambda _x, _y, _r: 1.0, lambda _x, _y, _r: 1.0),
    np.subtract: (lambda _x, _y, _r: 1.0, lambda _x, _y, _r: -1.0),
    np.multiply: (lambda _x, y, _r: y, lambda x, _y, _r: x),
    np.divide: (lambda _x, y, _r: 1.0 / y, lambda _x, y, r: -r / y),
    np.power: (lambda x, y, r: y * r / x, lambda x, _y, r: r * np.log(x)),
    np.maximum: (lambda x, y, _r: 1.0 * (x >= y), lambda x, y, _r: 1.0 * (x < y)),
    np.minimum: (lambda x, y, _r: 1.0 * (x <= y), lambda x, y, _r: 1.0 * (x > y)),
    np.negative: (lambda _x, _y, _r: -1.0,),
    np.exp: (lambda _x, _y, r: r,),
    np.expm1: (lambda _x, _y, r: r + 1.0,),
    np.log: (lambda x, _y, _r: 1.0 / x,),
    np.log10: (lambda x, _y, _r: 1.0 / (np.log(10.0) * x),),
    np.log1p: (lambda x, _y, _r: 1.0 / (1.0 + x),),
    np.sqrt: (lambda _x, _y, r: 0.5 / r,),
    np.square: (lambda x, _y, _r: 2.0 * x,),
}
_COMPARISONS: Final = frozenset(
    {np.less, np.less_equal, np.greater, np.greater_equal, np.equal, np.not_equal, np.isfinite}
)


class Dual(NDArrayOperatorsMixin):
    """A value with its derivatives by named variables.

    Parameters
    ----------
    value : float64 array
    slopes : mapping of str to float64 array or float
        Derivative by each variable; absent means zero.

    Examples
    --------
    >>> x = Dual(np.array([1.0, 2.0]), {"x": 1.0})
    >>> y = 3.0 * x**2
    >>> y.value, y.slopes["x"]
    (array([ 3., 12.]), array([ 6., 12.]))
    """

    def __init__(self, value: Array, slopes: Mapping[str, Any]) -> None:
        self.value = value
        self.slopes = dict(slopes)

    def __array_ufunc__(self, ufunc: np.ufunc, method: str, *inputs: Any, **more: Any) -> Any:
        """Apply an operation to values and, by the chain rule, to slopes."""
        if method != "__call__" or more:
            return NotImplemented
        operands = [plain(operand) for operand in inputs]
        result = ufunc(*operands)
        if ufunc in _COMPARISONS:
            return result
        if ufunc not in _BY_OPERAND:
            return NotImplemented
        x, y = operands[0], operands[-1]
        slopes: dict[str, Any] = {}
        for operand, partial in zip(inputs, _BY_OPERAND[ufunc], strict=True):
            if not isinstance(operand, Dual):
                continue
            by_operand = partial(x, y, result)
            for name, slope in operand.slopes.items():
                part = _times(by_operand, slope)
                slopes[name] = slopes[name] + part if name in slopes else part
        return Dual(result, slopes)

    def __repr__(self) -> str:
        return f"Dual({self.value!r}, {self.slopes!r})"


def _times(first: Any, second: Any) -> Any:
    """Multiply, without work where one of them is the number 1."""
    if isinstance(first, float) and first == 1.0:
        return second
    if isinstance(second, float) and second == 1.0:
        return first
    return first * second


def plain(number: Any) -> Any:
    """Value of a number, whether it carries slopes or not."""
    return number.value if isinstance(number, Dual) else number


def slopes_of(number: Any) -> dict[str, Any]:
    """Slopes of a number; none where it carries none."""
    return number.slopes if isinstance(number, Dual) else {}


def choose(condition: NDArray[np.bool_], first: Any, second: Any) -> Any:
    """Take one of two numbers element by element, as `numpy.where` does.

    Parameters
    ----------
    condition : bool array
    first, second : float64 array, float or Dual
    """
    value = np.where(condition, plain(first), plain(second))
    if not isinstance(first, Dual) and not isinstance(second, Dual):
        return value
    one, other = slopes_of(first), slopes_of(second)
    slopes = {
        name: np.where(condition, one.get(name, 0.0), other.get(name, 0.0)) for name in one | other
    }
    return Dual(value, slopes)


def implicit(
    residual: Callable[[Any, Mapping[str, Any]], Any], root: Array, inputs: Mapping[str, Any]
) -> Any:
    """Give a root the slopes that follow from the equation that it solves.

    Parameters
    ----------
    residual : callable
        ``residual(x, inputs)``, zero at the root.
    root : float64 array
    inputs : mapping of str to float64 array or Dual

    Returns
    -------
    float64 array or Dual
        The root itself where no input carries slopes.

    Notes
    -----
    dx/du = -(dg/du) / (dg/dx) where g(x, u) = 0.
    """
    if not any(isinstance(number, Dual) for number in inputs.values()):
        return root
    at_root = residual(Dual(root, {"root": 1.0}), inputs)
    by_root = at_root.slopes.pop("root")
    return Dual(root, {name: -slope / by_root for name, slope in at_root.slopes.items()})

"""Quantiles along an axis."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Running", "running_quantiles"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Running:
    """Quantiles in bins.

    Attributes
    ----------
    x : (n,) float64 array
        Median position in each bin.
    y : (n_quantiles, n) float64 array
    count : (n,) int array
        Values in each bin.
    """

    x: Array
    y: Array
    count: NDArray[np.int64]


def running_quantiles(
    x: Array, y: Array, edges: Array, quantiles: Sequence[float], *, least: int = 1
) -> Running:
    """Quantiles of y in bins of x.

    Quantiles depend on the order of the values alone, so that negative ones are counted where a
    mean of logarithms would lose them.

    Parameters
    ----------
    x, y : (n,) float64 array
        Pairs with a NaN are left out; y may hold infinities.
    edges : (n_bins + 1,) float64 array
        Rising.
    quantiles : sequence of float
        Between 0 and 1.
    least : int
        Bins with fewer values are left out.

    Returns
    -------
    Running

    Examples
    --------
    >>> x, y = np.array([0.1, 0.2, 0.3, 1.5]), np.array([-5.0, 1.0, 2.0, 9.0])
    >>> running_quantiles(x, y, np.array([0.0, 1.0, 2.0]), [0.5]).y
    array([[1., 9.]])
    """
    usable = np.isfinite(x) & ~np.isnan(y)
    x, y = x[usable], y[usable]
    place = np.searchsorted(edges, x, side="right") - 1
    filled = [b for b in range(len(edges) - 1) if np.count_nonzero(place == b) >= max(least, 1)]
    members = [place == b for b in filled]
    columns = [np.quantile(y[m], quantiles, method="nearest") for m in members]
    return Running(
        x=np.array([np.median(x[m]) for m in members]),
        y=np.array(columns).reshape(len(members), len(quantiles)).T,
        count=np.array([np.count_nonzero(m) for m in members], dtype=np.int64),
    )

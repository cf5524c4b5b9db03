"""Where a relation fails: its residual against everything else that is known of a place."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.special import stdtr

from kspipe.comparison.samples import LEAST_SAMPLES
from kspipe.kernels.statistics import average_ranks

__all__ = ["RunningMedian", "Trend", "partial_rank_correlation", "running_median", "trends"]

Array = NDArray[np.float64]

_BINS: Final = 8
# What the residual itself is made of: its noise alone gives a correlation.
_SHARES_NOISE: Final = frozenset({"sigma_gas", "f_mol"})


@dataclass(frozen=True)
class RunningMedian:
    """Median of observed over predicted in bins of equal number.

    Attributes
    ----------
    centre : tuple of float
        Median of the abscissa in each bin.
    median_dex : tuple of float
        log10 of the median ratio, undetected values included; NaN where it is not positive.
    n : tuple of int
    """

    centre: tuple[float, ...]
    median_dex: tuple[float, ...]
    n: tuple[int, ...]


@dataclass(frozen=True)
class Trend:
    """Residual against one quantity, on independent samples.

    Attributes
    ----------
    against : str
    n : int
    rank_correlation, chance : float
        Spearman's, and the probability of one as strong by chance.
    partial_correlation, partial_chance : float
        The same with `held` held.
    held : tuple of str
    running : RunningMedian
    note : str
        What to beware of.
    """

    against: str
    n: int
    rank_correlation: float
    chance: float
    partial_correlation: float
    partial_chance: float
    held: tuple[str, ...]
    running: RunningMedian
    note: str = ""


def trends(
    observed: Array, predicted: Array, quantities: Mapping[str, Array], held: Sequence[str]
) -> tuple[Trend, ...]:
    """Correlate a residual with every quantity.

    Parameters
    ----------
    observed, predicted : (n,) float64 array
        On independent samples; observed may be negative, and then ranks lowest.
    quantities : mapping of str to (n,) float64 array
        ``azimuth`` [deg] is folded: its cosine and sine are correlated, the stronger is quoted.
    held : sequence of str
        Quantities that are held in partial correlations.

    Returns
    -------
    tuple of Trend
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = np.where(predicted > 0, observed / predicted, np.nan)
    out = []
    for name, values in quantities.items():
        others = tuple(h for h in held if h != name and h in quantities)
        used = np.isfinite(ratio) & np.isfinite(values)
        used &= np.all([np.isfinite(quantities[h]) for h in others], axis=0) if others else True
        out.append(_trend(name, ratio, values, quantities, others, used))
    return tuple(out)


def _trend(
    name: str,
    ratio: Array,
    values: Array,
    quantities: Mapping[str, Array],
    held: tuple[str, ...],
    used: NDArray[np.bool_],
) -> Trend:
    n = int(used.sum())
    note = "shares noise with the residual" if name in _SHARES_NOISE else ""
    running = running_median(values[used], ratio[used])
    if n < LEAST_SAMPLES or np.ptp(values[used]) == 0:
        why = "the same everywhere" if n >= LEAST_SAMPLES else f"{n} independent samples only"
        return Trend(name, n, math.nan, math.nan, math.nan, math.nan, held, running, why)
    controls = [quantities[h][used] for h in held]
    if name == "azimuth":
        angle = np.radians(values[used])
        sides = [
            _correlations(ratio[used], side, controls) for side in (np.cos(angle), np.sin(angle))
        ]
        best = max(sides, key=lambda side: abs(side[0]))
        note = "the stronger of cosine and sine of the angle from the major axis"
        # Two were tried.
        chances = (min(1.0, 2.0 * best[1]), min(1.0, 2.0 * best[3]))
        return Trend(name, n, best[0], chances[0], best[2], chances[1], held, running, note)
    return Trend(name, n, *_correlations(ratio[used], values[used], controls), held, running, note)


def _correlations(
    ratio: Array, values: Array, controls: Sequence[Array]
) -> tuple[float, float, float, float]:
    plain = partial_rank_correlation(ratio, values, ())
    return (*plain, *partial_rank_correlation(ratio, values, controls))


def partial_rank_correlation(
    first: Array, second: Array, held: Sequence[Array]
) -> tuple[float, float]:
    """Spearman's correlation of two quantities with others held.

    Parameters
    ----------
    first, second : (n,) float64 array
    held : sequence of (n,) float64 array

    Returns
    -------
    correlation, chance : float
        The latter two-sided, from Student's t with n - 2 - k degrees of freedom.

    References
    ----------
    .. [1] Kendall & Stuart 1979, The Advanced Theory of Statistics, vol. 2, chapter 27: partial
       correlation is that of the residuals of linear regressions, here of ranks.
    """
    n = first.size
    design = np.column_stack([np.ones(n), *(average_ranks(h) for h in held)])
    ranks = np.column_stack([average_ranks(first), average_ranks(second)])
    rest = ranks - design @ np.linalg.lstsq(design, ranks, rcond=None)[0]
    norms = np.sqrt(np.sum(rest**2, axis=0))
    freedom = n - 2 - len(held)
    if freedom < 1 or np.any(norms < 1e-9 * n):
        return math.nan, math.nan
    r = float(np.clip(rest[:, 0] @ rest[:, 1] / np.prod(norms), -1.0, 1.0))
    t = abs(r) * math.sqrt(freedom / max(1.0 - r**2, 1e-300))
    return r, 2.0 * float(stdtr(freedom, -t))


def running_median(values: Array, ratio: Array, n_bins: int = _BINS) -> RunningMedian:
    """Median of a ratio in bins of equal number, five samples or more in each."""
    n_bins = min(n_bins, values.size // 5)
    if n_bins < 1:
        return RunningMedian((), (), ())
    parts = np.array_split(np.argsort(values, kind="stable"), n_bins)
    medians = [float(np.median(ratio[part])) for part in parts]
    return RunningMedian(
        tuple(float(np.median(values[part])) for part in parts),
        tuple(math.log10(m) if m > 0 else math.nan for m in medians),
        tuple(part.size for part in parts),
    )

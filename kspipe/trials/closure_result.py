"""What a closure test found: bias, coverage, power."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from kspipe.trials.painted import Paint

__all__ = ["Closure", "Found", "Power", "WrongRun", "plain_closure", "power_of", "summed_up"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Found:
    """How one parameter came back.

    Attributes
    ----------
    name : str
    truth, truth_error : float
        At the final beam: the mean over the painted skies, and its error. For a sum the ratio
        to the truth, 1.
    n : int
        Mocks with a result.
    bias, bias_error : float
        Mean of found less true of the same sky.
    stated_error : float
        Median of the errors that the mocks state.
    within_68, within_95 : float
        Share of mocks whose central 68 and 95 % intervals hold the truth of the population.
    coverage_error_68, coverage_error_95 : float
        Binomial 1-sigma errors of these shares, were they what they should be.
    """

    name: str
    truth: float
    truth_error: float
    n: int
    bias: float
    bias_error: float
    stated_error: float
    within_68: float
    within_95: float
    coverage_error_68: float
    coverage_error_95: float


@dataclass(frozen=True)
class Power:
    """How often the painted relation is told from another.

    Attributes
    ----------
    footing : str
        Which errors are allowed for.
    rival : str
    n : int
        Mocks with a ranking.
    preferred : float
        Share in which the painted relation predicts better.
    separated, wrongly_separated : float
        Share in which it is called better, and the rival is.
    """

    footing: str
    rival: str
    n: int
    preferred: float
    separated: float
    wrongly_separated: float


@dataclass(frozen=True)
class WrongRun:
    """One sky whose inclination and alpha_CO are not what the recipe believes.

    Attributes
    ----------
    inclination_off_deg, alpha_co_off : float
        True inclination less believed; true alpha_CO over believed.
    ratios : dict of str to (float, float)
        By product, sum found over sum true: expected from the two errors alone, and found.
    slope_true, slope_found, slope_error : float
    """

    inclination_off_deg: float
    alpha_co_off: float
    ratios: dict[str, tuple[float, float]]
    slope_true: float
    slope_found: float
    slope_error: float


@dataclass(frozen=True)
class Closure:
    """A whole closure test.

    Attributes
    ----------
    paint : Paint
    n_mocks : int
    n_samples : float
        Independent samples per mock.
    found : list of Found
    law_shift : dict of str to float
        What averaging in the beam does to the painted law, before any noise: ``slope`` (lines),
        ``zero_point_dex`` (relations), each found at the final beam less painted.
    power : list of Power
    wrong : WrongRun
    failures : dict of str to int
        Messages of fits without a result, counted.
    finer : float
        Pixels of the painted sky per pixel of the grid.
    """

    paint: Paint
    n_mocks: int
    n_samples: float
    found: list[Found]
    law_shift: dict[str, float]
    power: list[Power]
    wrong: WrongRun
    failures: dict[str, int]
    finer: float


def summed_up(name: str, rows: Array) -> Found:
    """Sum up one parameter over the mocks, (mocks, 3): found, error, truth of its own sky."""
    value, error, own = rows.T
    n = len(value)
    truth = float(own.mean())
    off = np.abs(value - truth) / error
    return Found(
        name=name,
        truth=truth,
        truth_error=float(own.std(ddof=1) / math.sqrt(n)) if n > 1 else math.nan,
        n=n,
        bias=float(np.mean(value - own)),
        bias_error=float(np.std(value - own, ddof=1) / math.sqrt(n)) if n > 1 else math.nan,
        stated_error=float(np.median(error)),
        within_68=float(np.mean(off < 0.9944579)),
        within_95=float(np.mean(off < 1.9599640)),
        coverage_error_68=math.sqrt(0.68 * 0.32 / n),
        coverage_error_95=math.sqrt(0.95 * 0.05 / n),
    )


def power_of(key: tuple[str, str], rows: Sequence[tuple[bool, bool, bool]]) -> Power:
    """Sum up one rival on one footing: key, and by mock preferred, separated, wrongly so."""
    shares = np.mean(np.array(rows, dtype=float), axis=0)
    return Power(*key, len(rows), *(float(share) for share in shares))


def plain_closure(closure: Closure) -> Mapping[str, Any]:
    """The closure as nested plain values, for the file."""
    return asdict(closure)

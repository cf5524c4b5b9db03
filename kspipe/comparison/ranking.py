"""Which relation predicts a galaxy best, and whether the difference means anything."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.special import stdtr

from kspipe.comparison.latent_fit import LEAST_SCATTER_DEX, LatentModel, Optimum
from kspipe.comparison.relation_fit import (
    ZERO_POINT,
    FreeParameter,
    RelationFit,
    RelationUse,
    fit_relation,
)
from kspipe.comparison.samples import LinearSamples
from kspipe.kernels.blocks import block_bootstrap_error

__all__ = [
    "BLOCK_LENGTHS",
    "ERROR_RATE",
    "Difference",
    "Ranked",
    "Ranking",
    "block_scores",
    "rank_relations",
]

Array = NDArray[np.float64]

# Side of a block in correlation lengths of the residuals.
BLOCK_LENGTHS: Final = 3.0
# Two relations are called separated where chance does as well less often than this.
ERROR_RATE: Final = 0.05
# With fewer blocks the bootstrap says nothing.
_LEAST_BLOCKS: Final = 8


@dataclass(frozen=True)
class Ranked:
    """One relation's place.

    Attributes
    ----------
    name : str
    fit : RelationFit
    bic : float
        Bayesian information criterion; smaller is better.
    score : float
        Sum of log predictive densities of the blocks left out; larger is better.
    """

    name: str
    fit: RelationFit
    bic: float
    score: float


@dataclass(frozen=True)
class Difference:
    """The best relation against another.

    Attributes
    ----------
    better, worse : str
    difference, error : float
        Of the predictive scores; the error from a bootstrap of blocks.
    error_rate : float
        Probability of so large a difference, of either sign, between relations that predict
        equally well (Student's t with one degree of freedom less than there are blocks).
    sentence : str
    """

    better: str
    worse: str
    difference: float
    error: float
    error_rate: float
    sentence: str

    @property
    def is_separated(self) -> bool:
        """Whether the error rate is below the stated one."""
        return self.error_rate < ERROR_RATE


@dataclass(frozen=True)
class Ranking:
    """Relations in order of their predictive score, on one footing.

    Attributes
    ----------
    footing : str
        Which errors are allowed for.
    n_samples, n_blocks : int
    ranked : tuple of Ranked
        Best first.
    differences : tuple of Difference
        The best against each of the others.
    left_out : dict of str to str
        Relations without a result, and why.
    """

    footing: str
    n_samples: int
    n_blocks: int
    ranked: tuple[Ranked, ...]
    differences: tuple[Difference, ...]
    left_out: dict[str, str]


def rank_relations(
    samples: LinearSamples,
    inputs: Mapping[str, Array],
    uses: list[RelationUse],
    blocks: NDArray[np.intp],
    rng: np.random.Generator,
    *,
    zero_point_width_dex: float = 0.0,
    components: int = 2,
    population: Array | None = None,
) -> Ranking:
    """Rank relations by what they predict of blocks they were not fitted to.

    Parameters
    ----------
    samples : LinearSamples
    inputs : mapping of str to (n,) float64 array
    uses : list of RelationUse
        Their free parameters are kept, but for the zero point.
    blocks : (n,) int array
        Block of sky that each sample belongs to, at least three correlation lengths wide.
    rng : numpy.random.Generator
    zero_point_width_dex : float
        Prior width of each relation's zero point, for what all pixels share; 0 holds it fixed.
    components, population
        As for `fit_relation`.

    Returns
    -------
    Ranking

    Notes
    -----
    All relations are held against the same samples: those for which each has a prediction.
    """
    footing = (
        f"zero points free within {zero_point_width_dex:g} dex for systematic errors"
        if zero_point_width_dex > 0
        else "zero points fixed, random errors only"
    )
    fitted: dict[str, tuple[RelationFit, Array]] = {}
    left_out: dict[str, str] = {}
    usable = np.flatnonzero(samples.usable)
    common, known, groups = (
        samples.take(usable),
        {name: value[usable] for name, value in inputs.items()},
        np.unique(blocks[usable], return_inverse=True)[1],
    )
    for use in uses:
        free = tuple(f for f in use.free if f.name != ZERO_POINT)
        if zero_point_width_dex > 0:
            free = (FreeParameter(ZERO_POINT, zero_point_width_dex), *free)
        fit, model, best = fit_relation(
            common, known, replace(use, free=free), components=components, population=population
        )
        if model is None or best is None:
            left_out[use.name] = fit.message
        elif fit.n < common.n:
            left_out[use.name] = f"predicts {fit.n} of {common.n} samples only"
        else:
            fitted[use.name] = fit, block_scores(model, best, common, groups)
    order = sorted(fitted, key=lambda name: -fitted[name][1].sum())
    ranked = tuple(
        Ranked(name, fitted[name][0], fitted[name][0].bic, float(fitted[name][1].sum()))
        for name in order
    )
    differences = tuple(
        _difference(order[0], name, fitted[order[0]][1] - fitted[name][1], groups, rng)
        for name in order[1:]
    )
    n_blocks = int(groups.max() + 1) if groups.size else 0
    return Ranking(footing, common.n, n_blocks, ranked, differences, left_out)


def block_scores(
    model: LatentModel, best: Optimum, samples: LinearSamples, blocks: NDArray[np.intp]
) -> Array:
    """Log predictive density of each sample from a fit without its block.

    The fit without a block is one Newton step from the full one: the parameters move by minus
    the inverse information times the block's scores.

    References
    ----------
    .. [1] Giordano et al. 2019, AISTATS (PMLR 89, 1139): the infinitesimal jackknife.
    """
    data = samples.measurements()
    keep = np.arange(best.parameters.size)
    if math.exp(best.parameters[model.n_mean]) <= 1.001 * LEAST_SCATTER_DEX:
        keep = keep[keep != model.n_mean]
    inverse = np.linalg.inv(best.information[np.ix_(keep, keep)])
    out = np.empty(data.x.size)
    for block in range(int(blocks.max()) + 1):
        inside = np.flatnonzero(blocks == block)
        moved = best.parameters.copy()
        moved[keep] -= inverse @ best.scores[np.ix_(keep, inside)].sum(axis=1)
        out[inside] = model.at(inside).marginal(data.take(inside), moved).log_likelihood
    return out


def _difference(
    better: str, worse: str, scores: Array, blocks: NDArray[np.intp], rng: np.random.Generator
) -> Difference:
    total = float(scores.sum())
    n_blocks = int(blocks.max()) + 1
    if n_blocks < _LEAST_BLOCKS:
        sentence = (
            f"{better} and {worse} cannot be told apart: {n_blocks} blocks, "
            f"fewer than {_LEAST_BLOCKS}"
        )
        return Difference(better, worse, total, math.nan, 1.0, sentence)
    error = block_bootstrap_error(scores, blocks, rng)
    rate = 1.0 if error == 0 else 2.0 * float(stdtr(n_blocks - 1, -abs(total) / error))
    numbers = f"log predictive score {total:.1f} +- {error:.1f}, chance {_percent(rate)}"
    sentence = (
        f"{better} predicts better than {worse} ({numbers})"
        if rate < ERROR_RATE
        else f"{better} and {worse} are not separated ({numbers})"
    )
    return Difference(better, worse, total, error, rate, sentence)


def _percent(rate: float) -> str:
    return "below 0.1 %" if rate < 1e-3 else f"{100 * rate:.1f} %"

"""The systematics budget: what moves the result, by how much, and what would turn it around.

Three kinds of error stay apart: random (the data's noise and the scatter of the sample),
systematic (assumptions that have a width), and choices (records, samples, beams: no width).
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.comparison.line import LineFit
from kspipe.conversions import Choices
from kspipe.core.errors import Fault, InputError
from kspipe.core.progress import Progress, no_progress
from kspipe.core.seeds import generator
from kspipe.trials.draws import Drawn, SampleInputs, convert_draws, inputs_of, sums_of
from kspipe.trials.priors import Prior, priors_of
from kspipe.trials.reduced import Reduced, line_samples
from kspipe.trials.response import LineResponse, Moved, line_response, refit
from kspipe.trials.universes import Universe, explore, ranges_of, share_holding

__all__ = ["Budget", "Check", "Flip", "Quantity", "make_budget", "plain_budget"]

Array = NDArray[np.float64]

# Draws that are fitted in full, beside the response.
CHECKED: Final = 3
# How far an assumption is moved in search of a turn, in sigma, and in which steps.
FARTHEST_SIGMA: Final = 5.0
STEP_SIGMA: Final = 0.25
RESAMPLES: Final = 500
# A sign is stated where a value is this many random errors from none (common practice).
STATED_SIGMA: Final = 2.0


@dataclass(frozen=True)
class Quantity:
    """One number of the result with its three errors.

    Attributes
    ----------
    name : str
        ``slope``, ``level``, ``scatter``, ``t_dep``, ``t_dep_gas``, ``bias NAME``.
    value, random : float
        Value, and its random 1-sigma error.
    low, high : float
        16th and 84th percentile of its shift when all assumptions are drawn together.
    quadrature : float
        Root sum of squares of the shifts one at a time.
    n_lost : int
        Draws in which it has no value.
    """

    name: str
    value: float
    random: float
    low: float
    high: float
    quadrature: float
    n_lost: int

    @property
    def systematic(self) -> float:
        """Half of the central 68 %."""
        return 0.5 * (self.high - self.low)


@dataclass(frozen=True)
class Check:
    """A draw fitted in full against the response: differences, in the quantity's unit."""

    slope: float
    level: float
    scatter: float


@dataclass(frozen=True)
class Flip:
    """The smallest change to one assumption that turns a conclusion around.

    Attributes
    ----------
    conclusion : str
    assumption : str
        Empty where no assumption does it within 5 sigma.
    n_sigma : float
    change : str
        In words and units.
    becomes : str
    """

    conclusion: str
    assumption: str
    n_sigma: float
    change: str
    becomes: str


@dataclass(frozen=True)
class Budget:
    """The whole budget.

    Attributes
    ----------
    n_draws, n_samples : int
    quantities : list of Quantity
    priors : list of Prior
    fixed : list of str
        Assumptions without a width.
    shifts : dict of str to (priors,) float64 array
        By quantity, its shift for one sigma of each assumption.
    checks : list of Check
    flips : list of Flip
    universes : list of Universe
        Sets of choices, the recipe's own first.
    line : LineFit
    pivot_msun_pc2 : float
        Sigma_gas at which ``level`` is taken.
    """

    n_draws: int
    n_samples: int
    quantities: list[Quantity]
    priors: list[Prior]
    fixed: list[str]
    shifts: dict[str, Array]
    checks: list[Check]
    flips: list[Flip]
    universes: list[Universe]
    line: LineFit
    pivot_msun_pc2: float

    def ranked(self, quantity: str) -> list[tuple[Prior, float]]:
        """Assumptions with their shift of a quantity, the largest first."""
        shifts = self.shifts[quantity]
        order = np.argsort(-np.abs(np.nan_to_num(shifts)), kind="stable")
        return [(self.priors[i], float(shifts[i])) for i in order]


def make_budget(
    reduced: Reduced, *, n_draws: int = 2000, progress: Progress = no_progress
) -> Budget:
    """Draw all assumptions of a reduced recipe.

    Parameters
    ----------
    reduced : Reduced
    n_draws : int
    progress : Progress

    Raises
    ------
    InputError
        If fewer than 100 draws are asked for: percentiles would be noise.
    """
    if n_draws < 100:
        raise InputError(Fault("--draws", f"{n_draws}: percentiles need 100 or more"))
    progress(0, 5, "fitting the line")
    lattice = reduced.lattice()
    inputs = inputs_of(reduced, lattice)
    priors, fixed = priors_of(reduced.recipe, reduced.matched, set(inputs.intensity))
    fit, response = line_response(line_samples(reduced.disc, lattice))

    progress(1, 5, f"{n_draws} draws")
    rng = generator(reduced.recipe.seed, "budget", "draws")
    normal = rng.standard_normal((n_draws, len(priors)))
    middle = _evaluate(inputs, priors, np.zeros((1, len(priors))), response)
    together = _evaluate(inputs, priors, normal, response)
    alone = _one_at_a_time(inputs, priors, response, middle)

    progress(2, 5, "what would turn the conclusion")
    random = _random_errors(inputs, reduced, fit)
    flips = _find_flips(inputs, priors, response, middle, random)

    progress(3, 5, f"{CHECKED} draws fitted in full")
    checks = _check(inputs, priors, normal[:CHECKED], response, together)
    progress(4, 5, "other records, samples and beams")
    universes = explore(reduced, inputs, response)
    progress(5, 5, "budget made")
    return Budget(
        n_draws=n_draws,
        n_samples=int(lattice.sum()),
        quantities=[
            _quantity(name, middle[name], random.get(name, math.nan), together[name], alone[name])
            for name in middle
        ],
        priors=priors,
        fixed=fixed,
        shifts=alone,
        checks=checks,
        flips=flips,
        universes=universes,
        line=fit,
        pivot_msun_pc2=10.0**fit.pivot,
    )


def _quantity(name: str, middle: Array, random: float, drawn: Array, alone: Array) -> Quantity:
    shift = drawn - middle[0]
    known = shift[np.isfinite(shift)]
    low, high = np.percentile(known, [16, 84]) if known.size else (math.nan, math.nan)
    return Quantity(
        name=name,
        value=float(middle[0]),
        random=random,
        low=float(low),
        high=float(high),
        quadrature=float(np.sqrt(np.nansum(alone**2))),
        n_lost=int(shift.size - known.size),
    )


def _evaluate(
    inputs: SampleInputs,
    priors: Sequence[Prior],
    normal: Array,
    response: LineResponse | None,
    choices: Choices | None = None,
) -> dict[str, Array]:
    """All quantities under each draw."""
    parts: dict[str, list[Array]] = {}
    for _, drawn in convert_draws(inputs, priors, normal, choices):
        found = _of_line(response, drawn) | sums_of(drawn, inputs.recipe)
        for name, values in found.items():
            parts.setdefault(name, []).append(values)
    return {name: np.concatenate(values) for name, values in parts.items()}


def _of_line(response: LineResponse | None, drawn: Drawn) -> dict[str, Array]:
    if response is None:
        return {}
    moved = response(drawn.gas, drawn.sfr, drawn.var_gas, drawn.var_sfr, drawn.cov)
    return {"slope": moved.slope, "level": moved.level, "scatter": moved.scatter_dex}


def _one_at_a_time(
    inputs: SampleInputs,
    priors: Sequence[Prior],
    response: LineResponse | None,
    middle: Mapping[str, Array],
) -> dict[str, Array]:
    """Shift of each quantity for one sigma of each assumption, the mean of both sides."""
    n = len(priors)
    sides = _evaluate(inputs, priors, np.concatenate([np.eye(n), -np.eye(n)]), response)
    one_sided = np.array([prior.is_one_sided for prior in priors], dtype=bool)
    return {
        name: np.where(one_sided, v[:n] - middle[name][0], 0.5 * (v[:n] - v[n:]))
        for name, v in sides.items()
    }


def _random_errors(inputs: SampleInputs, reduced: Reduced, fit: LineFit) -> dict[str, float]:
    """Errors of the fit; of sums, the spread over bootstraps of the independent samples."""
    errors = {"slope": fit.slope_error, "level": fit.intercept_error, "scatter": fit.scatter_error}
    errors = {name: error for name, error in errors.items() if fit.is_fitted}
    _, drawn = next(convert_draws(inputs, [], np.zeros((1, 0))))
    n = inputs.oh.size
    rng = generator(reduced.recipe.seed, "budget", "bootstrap")
    picks = rng.integers(0, n, (RESAMPLES, n))

    def resample(value: Array) -> Array:
        return np.asarray(np.broadcast_to(value, (1, n))[0][picks])

    resampled = replace(
        drawn,
        gas=resample(drawn.gas),
        sfr=resample(drawn.sfr),
        mol=None if drawn.mol is None else resample(drawn.mol),
        oh=resample(drawn.oh),
    )
    sums = sums_of(resampled, inputs.recipe)
    return errors | {name: float(np.nanstd(values)) for name, values in sums.items()}


def _check(
    inputs: SampleInputs,
    priors: Sequence[Prior],
    normal: Array,
    response: LineResponse | None,
    together: Mapping[str, Array],
) -> list[Check]:
    """Fit some draws in full: response minus fit."""
    if response is None:
        return []
    _, drawn = next(convert_draws(inputs, priors, normal))
    checks = []
    for draw in range(normal.shape[0]):
        full: Moved = refit(response, drawn.samples(draw))
        checks.append(
            Check(
                slope=float(together["slope"][draw] - full.slope[0]),
                level=float(together["level"][draw] - full.level[0]),
                scatter=float(together["scatter"][draw] - full.scatter_dex[0]),
            )
        )
    return checks


# --- What would turn the conclusion ------------------------------------------------------------


def _find_flips(
    inputs: SampleInputs,
    priors: Sequence[Prior],
    response: LineResponse | None,
    middle: Mapping[str, Array],
    random: Mapping[str, float],
) -> list[Flip]:
    """For each conclusion the assumption that turns it around at the fewest sigma."""
    margins = _margins({name: values[:1] for name, values in middle.items()}, random)
    steps = np.arange(STEP_SIGMA, FARTHEST_SIGMA + 1e-9, STEP_SIGMA)
    amounts = np.concatenate([-steps[::-1], steps])
    best: dict[str, tuple[float, Prior]] = {}
    for i, prior in enumerate(priors):
        normal = np.zeros((amounts.size, len(priors)))
        normal[:, i] = amounts
        moved = _margins(_evaluate(inputs, priors, normal, response), random, margins)
        for conclusion, (_, _, values) in moved.items():
            crossing = _first_crossing(amounts, values, float(margins[conclusion][2][0]))
            if crossing is not None and abs(crossing) < abs(
                best.get(conclusion, (math.inf, prior))[0]
            ):
                best[conclusion] = (crossing, prior)
    flips = []
    for conclusion, (_, becomes, _) in margins.items():
        if conclusion in best:
            n_sigma, prior = best[conclusion]
            flips.append(Flip(conclusion, prior.name, n_sigma, prior.words(n_sigma), becomes))
        else:
            flips.append(Flip(conclusion, "", math.nan, "", becomes))
    return flips


def _margins(
    values: Mapping[str, Array],
    random: Mapping[str, float],
    stated: Mapping[str, object] | None = None,
) -> dict[str, tuple[str, str, Array]]:
    """How far each conclusion is from its opposite, positive while it holds.

    Conclusions are made of the unmoved values where `stated` is None, else the same ones are
    looked at again.
    """
    found: dict[str, tuple[str, str, Array]] = {}

    def add(conclusion: str, becomes: str, margin: Array, *, holds: bool) -> None:
        if holds if stated is None else conclusion in stated:
            found[conclusion] = (conclusion, becomes, margin)

    biases = {n.removeprefix("bias "): v for n, v in values.items() if n.startswith("bias ")}
    names = list(biases)
    for name in names:
        closest = biases[name]
        others = [np.abs(biases[other]) for other in names if other != name]
        if others:
            margin = np.min(others, axis=0) - np.abs(closest)
            add(
                f"{name} is nearest in total star formation",
                "another relation is nearer",
                margin,
                holds=bool(margin[0] > 0),
            )
        error = random.get(f"bias {name}", math.nan)
        for sign, word, opposite in ((-1.0, "too many", "too few"), (1.0, "too few", "too many")):
            margin = sign * closest
            add(
                f"{name} predicts {word} stars",
                f"it predicts {opposite}",
                margin,
                holds=bool(margin[0] > STATED_SIGMA * error),
            )
    if "slope" in values:
        error = random.get("slope", math.nan)
        for sign, word in ((1.0, "steeper"), (-1.0, "shallower")):
            margin = sign * (values["slope"] - 1.0)
            add(
                f"the line is {word} than linear",
                "it is not",
                margin,
                holds=bool(margin[0] > STATED_SIGMA * error),
            )
    return found


def _first_crossing(amounts: Array, margin: Array, at_zero: float) -> float | None:
    """Amount nearest to zero at which a margin reaches zero, on either side; None if none does."""
    nearest: float | None = None
    for side in (amounts > 0, amounts < 0):
        order = np.argsort(np.abs(amounts[side]))
        x = np.concatenate([[0.0], amounts[side][order]])
        y = np.concatenate([[at_zero], margin[side][order]])
        below = np.flatnonzero(y <= 0)
        if below.size and np.isfinite(y[: below[0] + 1]).all():
            k = int(below[0])
            share = y[k - 1] / (y[k - 1] - y[k])
            crossing = float(x[k - 1] + share * (x[k] - x[k - 1]))
            if nearest is None or abs(crossing) < abs(nearest):
                nearest = crossing
    return nearest


def plain_budget(budget: Budget) -> dict[str, object]:
    """The budget as nested plain values, for the file."""
    return {
        "n_draws": budget.n_draws,
        "n_samples": budget.n_samples,
        "pivot_msun_pc2": budget.pivot_msun_pc2,
        "line": {k: v for k, v in asdict(budget.line).items() if k != "covariance"},
        "quantities": {
            q.name: {**asdict(q), "systematic": q.systematic} for q in budget.quantities
        },
        "ranked": {
            q.name: [
                {"assumption": prior.name, "shift": shift, "origin": prior.origin}
                for prior, shift in budget.ranked(q.name)
            ]
            for q in budget.quantities
        },
        "priors": [asdict(prior) for prior in budget.priors],
        "fixed": budget.fixed,
        "response_minus_full_fit": [asdict(check) for check in budget.checks],
        "flips": [asdict(flip) for flip in budget.flips],
        "choices": {
            "n_universes": len(budget.universes),
            "ranges": ranges_of(budget.universes),
            "share_of_same_sign": share_holding(
                budget.universes,
                {
                    name: 1.0 if name == "slope" else 0.0
                    for name in budget.universes[0].values
                    if name == "slope" or name.startswith("bias ")
                },
            ),
            "universes": [asdict(universe) for universe in budget.universes],
        },
    }

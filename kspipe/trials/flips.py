"""What would turn a conclusion around: the smallest change to one assumption."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions import Choices
from kspipe.trials.draws import Drawn, SampleInputs, convert_draws, sums_of
from kspipe.trials.priors import Prior
from kspipe.trials.response import LineResponse

__all__ = ["Flip", "evaluate", "find_flips"]

Array = NDArray[np.float64]

# How far an assumption is moved in search of a turn, in sigma, and in which steps.
FARTHEST_SIGMA: Final = 5.0
STEP_SIGMA: Final = 0.25
# A sign is stated where a value is this many random errors from none (common practice).
STATED_SIGMA: Final = 2.0


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


def evaluate(
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


def find_flips(
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
        moved = _margins(evaluate(inputs, priors, normal, response), random, margins)
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

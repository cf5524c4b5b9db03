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
from kspipe.core.errors import Fault, InputError
from kspipe.core.progress import Progress, no_progress
from kspipe.core.seeds import generator
from kspipe.trials.draws import SampleInputs, convert_draws, inputs_of, not_carried, sums_of
from kspipe.trials.flips import Flip, evaluate, find_flips
from kspipe.trials.priors import Prior, priors_of
from kspipe.trials.reduced import Reduced, line_samples
from kspipe.trials.response import LineResponse, Moved, line_response, refit
from kspipe.trials.universes import Universe, explore, ranges_of, share_holding

__all__ = ["Budget", "Check", "Flip", "Quantity", "make_budget", "plain_budget"]

Array = NDArray[np.float64]

# Draws that are fitted in full, beside the response.
CHECKED: Final = 3
RESAMPLES: Final = 500


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
    fixed += [
        f"bias of {name}: its law needs {', '.join(absent)}, which the draws do not carry"
        for name, table in reduced.recipe.relations.items()
        if (absent := not_carried(table.law))
    ]
    fit, response = line_response(line_samples(reduced.disc, lattice))

    progress(1, 5, f"{n_draws} draws")
    rng = generator(reduced.recipe.seed, "budget", "draws")
    normal = rng.standard_normal((n_draws, len(priors)))
    middle = evaluate(inputs, priors, np.zeros((1, len(priors))), response)
    together = evaluate(inputs, priors, normal, response)
    alone = _one_at_a_time(inputs, priors, response, middle)

    progress(2, 5, "what would turn the conclusion")
    random = _random_errors(inputs, reduced, fit)
    flips = find_flips(inputs, priors, response, middle, random)

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


def _one_at_a_time(
    inputs: SampleInputs,
    priors: Sequence[Prior],
    response: LineResponse | None,
    middle: Mapping[str, Array],
) -> dict[str, Array]:
    """Shift of each quantity for one sigma of each assumption, the mean of both sides."""
    n = len(priors)
    sides = evaluate(inputs, priors, np.concatenate([np.eye(n), -np.eye(n)]), response)
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

"""Trials of a product folder, written into it as files."""

from __future__ import annotations

import json
import logging
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any, Final

import numpy as np
from astropy.table import Column, Table

from kspipe import __version__
from kspipe.core.progress import Progress, no_progress
from kspipe.recipe import Recipe
from kspipe.stages.folder import ProductFolder, fingerprint
from kspipe.stages.plan import InMemory, compare_print, make_plan
from kspipe.trials.budget import make_budget, plain_budget
from kspipe.trials.closure import run_closure
from kspipe.trials.closure_result import Found, plain_closure
from kspipe.trials.ladder import FACTORS, climb, plain_ladder
from kspipe.trials.painted import Paint
from kspipe.trials.reduced import Reduced, open_reduced

__all__ = ["write_budget", "write_closure", "write_ladder"]

log = logging.getLogger(__name__)

DRAWS: Final = 2000
MOCKS: Final = 20


def write_budget(
    out: Path,
    *,
    n_draws: int = DRAWS,
    overwrite: bool = False,
    progress: Progress = no_progress,
) -> bool:
    """Make the systematics budget of a reduction: ``budget.json`` and ``budget.ecsv``.

    Parameters
    ----------
    out : Path
        Product folder.
    n_draws : int
    overwrite : bool
        Whether an older budget may be replaced.
    progress : Progress

    Returns
    -------
    bool
        False where everything was there already and was reused.

    Raises
    ------
    OutputError
        If the folder holds no reduction or a stale one.
    InputError
        If there are too few draws.
    """
    reduced = open_reduced(out)
    print_ = _print(reduced, draws=n_draws, systematics=reduced.recipe.systematics)
    if not reduced.folder.check({"budget": print_}, overwrite=overwrite):
        log.info("budget: nothing changed, %s is reused", out)
        return False
    budget = make_budget(reduced, n_draws=n_draws, progress=progress)
    plain = {"kspipe": __version__, "galaxy": reduced.recipe.galaxy.name, **plain_budget(budget)}
    table = Table(meta={"galaxy": reduced.recipe.galaxy.name, "kspipe": __version__})
    _add(table, "assumption", [prior.name for prior in budget.priors], "")
    _add(table, "sigma", [abs(prior.sigma) for prior in budget.priors], "width, 1 sigma, in `unit`")
    _add(table, "unit", [prior.unit for prior in budget.priors], "")
    for name, shifts in budget.shifts.items():
        _add(table, f"shift {name}", shifts, f"of {name} for one sigma; dex but for the slope")
    _add(table, "origin", [prior.origin for prior in budget.priors], "who said so")
    _publish(reduced.folder, "budget", print_, plain, table)
    return True


def write_ladder(
    out: Path,
    *,
    factors: tuple[float, ...] = FACTORS,
    overwrite: bool = False,
    progress: Progress = no_progress,
) -> bool:
    """Climb the resolution ladder of a reduction: ``ladder.json`` and ``ladder.ecsv``.

    Parameters
    ----------
    out : Path
        Product folder.
    factors : tuple of float
        Times the beam of the reduction.
    overwrite, progress
        As for `write_budget`.

    Raises
    ------
    OutputError
        If the folder holds no reduction or a stale one.
    """
    reduced = open_reduced(out)
    print_ = _print(reduced, factors=list(factors))
    if not reduced.folder.check({"ladder": print_}, overwrite=overwrite):
        log.info("ladder: nothing changed, %s is reused", out)
        return False
    rungs = climb(reduced, factors, progress=progress)
    plain = {
        "kspipe": __version__,
        "galaxy": reduced.recipe.galaxy.name,
        "rungs": plain_ladder(rungs),
    }
    table = Table(meta={"galaxy": reduced.recipe.galaxy.name, "kspipe": __version__})
    for name, unit, what in (
        ("beam_arcsec", "arcsec", "FWHM"),
        ("beam_pc", "pc", "FWHM"),
        ("n_pixels", None, "covered pixels"),
        ("n_independent", None, "effective number for a mean"),
        ("stars_per_beam", None, "expected stars of 8 Msun and more, median weighted by number"),
        ("share_of_few", None, "detected samples in which fewer than 10 are expected"),
    ):
        _add(table, name, [getattr(rung, name) for rung in rungs], what, unit)
    for name in ("n", "slope", "slope_error", "intercept", "intercept_error", "pivot"):
        _add(table, f"line_{name}", [getattr(r.line, name) for r in rungs], "of the fitted line")
    for name in ("scatter_dex", "scatter_error", "is_limit"):
        _add(table, f"line_{name}", [getattr(r.line, name) for r in rungs], "intrinsic scatter")
    for name in reduced.recipe.relations:
        sums = [rung.relations[name].sum_ratio for rung in rungs]
        _add(table, f"sum_ratio_{name}", sums, "sum of observed over sum of predicted")
    _add(table, "sampling_limited", ["; ".join(r.limits) for r in rungs], "why; empty where not")
    _publish(reduced.folder, "ladder", print_, plain, table)
    return True


def write_closure(
    recipe: Recipe,
    out: Path,
    paint: Paint,
    *,
    n_mocks: int = MOCKS,
    zero_point_width_dex: float = 0.2,
    wrong: tuple[float, float] = (5.0, 1.5),
    overwrite: bool = False,
    memory: InMemory | None = None,
    progress: Progress = no_progress,
) -> bool:
    """Run the closure test of a recipe: ``closure.json`` and ``closure.ecsv``.

    Parameters
    ----------
    recipe : Recipe
    out : Path
        Product folder; that of a reduction, or one of its own.
    paint, n_mocks, zero_point_width_dex, wrong, memory
        As in `run_closure`.
    overwrite, progress
        As for `write_budget`.

    Raises
    ------
    InputError
        If a name is not known or a map cannot be painted; nothing is written then.
    """
    folder = ProductFolder.open(out)
    print_ = fingerprint(
        {
            "kspipe": __version__,
            "convert": make_plan(recipe, memory).prints["convert"],
            "relations": {n: [t.law, t.parameters] for n, t in recipe.relations.items()},
            "seed": recipe.seed,
            "paint": paint,
            "settings": [n_mocks, zero_point_width_dex, *wrong],
        }
    )
    if not folder.check({"closure": print_}, overwrite=overwrite):
        log.info("closure: nothing changed, %s is reused", out)
        return False
    closure = run_closure(
        recipe,
        paint,
        n_mocks=n_mocks,
        zero_point_width_dex=zero_point_width_dex,
        wrong=wrong,
        memory=memory,
        progress=progress,
    )
    meta = {"kspipe": __version__, "galaxy": recipe.galaxy.name}
    table = Table(meta=meta)
    for name in Found.__dataclass_fields__:
        _add(table, name, [getattr(found, name) for found in closure.found], _FOUND[name])
    plain = {**meta, **plain_closure(closure)}
    _publish(folder, "closure", print_, plain, table)
    return True


_FOUND: Final = {
    "name": "parameter, or sum of a product over its truth",
    "truth": "at the final beam, mean over the skies",
    "truth_error": "of that mean",
    "n": "mocks with a result",
    "bias": "mean of found less true of the same sky",
    "bias_error": "of that mean",
    "stated_error": "median of the stated errors",
    "within_68": "share of 68 % intervals that hold the truth",
    "within_95": "share of 95 % intervals that hold the truth",
    "coverage_error_68": "binomial error of a share of 68 %",
    "coverage_error_95": "binomial error of a share of 95 %",
}


def _print(reduced: Reduced, **settings: Any) -> str:
    compared = compare_print(reduced.recipe, reduced.print_)
    return fingerprint({"kspipe": __version__, "compare": compared, **settings})


def _publish(
    folder: ProductFolder, stage: str, print_: str, plain: Mapping[str, Any], table: Table
) -> None:
    """Write a trial as JSON and as a table; a figure of an older one goes."""
    gone = tuple(name for name in (f"{stage}_figure",) if name in folder.stages)
    with folder.publish({stage: print_}, drop=gone) as staging:
        text = json.dumps(as_json(plain), indent=1) + "\n"
        (staging / f"{stage}.json").write_text(text, encoding="utf-8")
        table.write(staging / f"{stage}.ecsv", format="ascii.ecsv")


def _add(table: Table, name: str, values: Any, what: str, unit: str | None = None) -> None:
    table.add_column(Column(values, name=name, unit=unit, description=what))


def as_json(value: Any) -> Any:
    """Make a structure fit for JSON: no NaN, no numpy numbers."""
    if isinstance(value, Mapping):
        return {str(key): as_json(entry) for key, entry in value.items()}
    if isinstance(value, list | tuple):
        return [as_json(entry) for entry in value]
    if isinstance(value, np.ndarray):
        return as_json(value.tolist())
    if isinstance(value, np.generic):
        return as_json(value.item())
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    return value

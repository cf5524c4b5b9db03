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
from kspipe.stages.folder import fingerprint
from kspipe.stages.plan import compare_print
from kspipe.trials.budget import make_budget, plain_budget
from kspipe.trials.ladder import FACTORS, climb, plain_ladder
from kspipe.trials.reduced import Reduced, open_reduced

__all__ = ["write_budget", "write_ladder"]

log = logging.getLogger(__name__)

DRAWS: Final = 2000


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
    _publish(reduced, "budget", print_, plain, table, ("budget_figure",))
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
    _publish(reduced, "ladder", print_, plain, table, ("ladder_figure",))
    return True


def _print(reduced: Reduced, **settings: Any) -> str:
    compared = compare_print(reduced.recipe, reduced.print_)
    return fingerprint({"kspipe": __version__, "compare": compared, **settings})


def _publish(
    reduced: Reduced,
    stage: str,
    print_: str,
    plain: Mapping[str, Any],
    table: Table,
    drop: tuple[str, ...],
) -> None:
    gone = tuple(name for name in drop if name in reduced.folder.stages)
    with reduced.folder.publish({stage: print_}, drop=gone) as staging:
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

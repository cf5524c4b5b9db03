"""The job for scripts and notebooks: the same stages, with quantities at the border."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from astropy.table import Table

from kspipe.core.errors import Fault, InputError
from kspipe.core.progress import Progress, no_progress
from kspipe.products import draw_figures
from kspipe.products.opened import Comparison, Reduction
from kspipe.products.tracks import tracks_table, write_tracks
from kspipe.products.trial_figures import draw_budget, draw_ladder
from kspipe.recipe import Recipe, load_recipe
from kspipe.relations import tracks as make_tracks
from kspipe.stages.alternatives import ALTERNATIVES_FILE, weigh_alternatives
from kspipe.stages.chain import pixel_chain
from kspipe.stages.compare import compare_relations
from kspipe.stages.reduce import reduce_maps
from kspipe.trials.painted import Paint
from kspipe.trials.write import write_budget, write_closure, write_ladder

__all__ = [
    "Comparison",
    "Reduction",
    "alternatives",
    "budget",
    "chain",
    "closure",
    "compare",
    "figures",
    "ladder",
    "reduce",
    "run",
    "tracks",
]

Maps = Mapping[str, fits.PrimaryHDU | tuple[fits.PrimaryHDU, fits.PrimaryHDU | None]]


def reduce(
    recipe: Recipe | str | Path,
    out: str | Path,
    *,
    maps: Maps | None = None,
    overwrite: bool = False,
    progress: Progress = no_progress,
) -> Reduction:
    """Bring all maps of a recipe to one beam and grid and convert them to surface densities.

    Parameters
    ----------
    recipe : Recipe or path
    out : path
        Product folder.
    maps : mapping of str to HDU or (HDU, HDU), optional
        Maps (with their noise maps) in memory, by the recipe's names, instead of files.
    overwrite : bool
        Whether products made from something else may be replaced.
    progress : Progress

    Returns
    -------
    Reduction

    Raises
    ------
    InputError
        With every fault of the recipe or of the maps; nothing is written then.
    """
    memory = _memory(maps)
    loaded = _loaded(recipe, memory)
    reduce_maps(loaded, Path(out), overwrite=overwrite, memory=memory, progress=progress)
    return Reduction(out)


def compare(
    out: str | Path,
    *,
    maps: Maps | None = None,
    overwrite: bool = False,
    progress: Progress = no_progress,
) -> Comparison:
    """Hold the relations of a reduced recipe against the galaxy.

    Parameters
    ----------
    out : path
        Product folder of a reduction.
    maps, overwrite, progress
        As in `reduce`.

    Raises
    ------
    OutputError
        If the reduction is absent or stale.
    """
    compare_relations(Path(out), overwrite=overwrite, memory=_memory(maps), progress=progress)
    return Comparison(out)


def alternatives(
    out: str | Path,
    *,
    maps: Maps | None = None,
    overwrite: bool = False,
    progress: Progress = no_progress,
) -> Table:
    """Say what every other record that fits would give for a reduced galaxy.

    Parameters
    ----------
    out : path
        Product folder of a reduction; ``alternatives.ecsv`` is written.
    maps, overwrite, progress
        As in `reduce`.

    Returns
    -------
    astropy.table.Table
        One row for each record: total, median and tilt with radius beside those of the one used.

    Raises
    ------
    OutputError
        If the reduction is absent or stale.
    """
    weigh_alternatives(Path(out), overwrite=overwrite, memory=_memory(maps), progress=progress)
    return Table.read(Path(out) / ALTERNATIVES_FILE)


def chain(out: str | Path, position: str, *, maps: Maps | None = None) -> Table:
    """Follow one position on the sky from the stored counts to surface densities.

    Parameters
    ----------
    out : path
        Product folder of a reduction.
    position : str
        ``03h12m24.0s -27d18m36s`` or ``48.100 -27.310 deg``, ICRS.
    maps
        As in `reduce`.

    Returns
    -------
    astropy.table.Table
        Every factor with the value and unit behind it.

    Raises
    ------
    InputError
        If the position cannot be read or lies outside the grid, or the reduction is stale.
    """
    return pixel_chain(Path(out), position, memory=_memory(maps))


def figures(
    out: str | Path, *, overwrite: bool = False, progress: Progress = no_progress
) -> list[Path]:
    """Draw the figures of a comparison and return their files.

    Raises
    ------
    OutputError
        If the comparison is absent.
    """
    draw_figures(Path(out), overwrite=overwrite, progress=progress)
    return sorted((Path(out) / "figures").iterdir())


def run(
    recipe: Recipe | str | Path,
    out: str | Path,
    *,
    maps: Maps | None = None,
    overwrite: bool = False,
    progress: Progress = no_progress,
) -> Comparison:
    """Reduce, compare and draw, through the same files.

    Parameters
    ----------
    recipe, out, maps, overwrite, progress
        As in `reduce`.
    """
    reduce(recipe, out, maps=maps, overwrite=overwrite, progress=progress)
    comparison = compare(out, maps=maps, overwrite=overwrite, progress=progress)
    figures(out, overwrite=overwrite, progress=progress)
    return comparison


def tracks(
    relation: str,
    *,
    low: float = 1.0,
    high: float = 1000.0,
    n: int = 200,
    at: Mapping[str, Sequence[float]] | None = None,
    parameters: Mapping[str, float] | None = None,
    out: str | Path | None = None,
    overwrite: bool = False,
) -> Table:
    """Curves of a relation against gas, without any map.

    Parameters
    ----------
    relation : str
        Its key; ``kspipe.list_family("relations")`` has them all.
    low, high : float
        Gas [Msun/pc2, with helium] from least to most, in logarithmic steps.
    n : int
        Points of a curve.
    at : mapping of str to sequence of float, optional
        Values of the relation's other inputs, of which all combinations are drawn: ``oh``,
        ``g0``, ``rho_sd``, ``sigma_star``, ``omega``, ``beta``.
    parameters : mapping of str to float, optional
        Of the relation.
    out : path, optional
        Folder that tracks.ecsv, tracks.pdf and tracks.png are written to.
    overwrite : bool
        Whether older ones may be replaced.

    Returns
    -------
    astropy.table.Table
        A row for each point of each curve, with units.

    Raises
    ------
    InputError
        If an input or a parameter is missing or unknown, or the gas is no range.

    Examples
    --------
    >>> import kspipe
    >>> kspipe.tracks("leroy2013_depletion", low=10, high=100, n=2)["sigma_sfr"].tolist()
    [0.004545454545454545, 0.045454545454545456]
    """
    if not (0 < low < high < math.inf and n >= 2):
        what = f"{n} points from {low:g} to {high:g} Msun/pc2 are no curve"
        raise InputError(Fault("tracks", what, "type a positive --low below --high"))
    curves = make_tracks(relation, np.geomspace(low, high, n), at or {}, parameters)
    if out is not None:
        write_tracks(curves, Path(out), overwrite=overwrite)
    return tracks_table(curves)


def budget(
    out: str | Path,
    *,
    draws: int = 2000,
    overwrite: bool = False,
    progress: Progress = no_progress,
) -> dict[str, Any]:
    """Draw every assumption of a reduction and rank what moves the result.

    Parameters
    ----------
    out : path
        Product folder of a reduction; ``budget.json``, ``budget.ecsv`` and a figure are written.
    draws : int
    overwrite, progress
        As in `reduce`.

    Returns
    -------
    dict
        What ``budget.json`` holds.

    Raises
    ------
    OutputError
        If the reduction is absent or stale.
    """
    write_budget(Path(out), n_draws=draws, overwrite=overwrite, progress=progress)
    draw_budget(Path(out))
    return _plain(out, "budget")


def ladder(
    out: str | Path, *, overwrite: bool = False, progress: Progress = no_progress
) -> dict[str, Any]:
    """Compare at 1, 2, 4 and 8 times the beam of a reduction.

    Parameters
    ----------
    out : path
        Product folder of a reduction; ``ladder.json``, ``ladder.ecsv`` and a figure are written.
    overwrite, progress
        As in `reduce`.

    Returns
    -------
    dict
        What ``ladder.json`` holds.

    Raises
    ------
    OutputError
        If the reduction is absent or stale.
    """
    write_ladder(Path(out), overwrite=overwrite, progress=progress)
    draw_ladder(Path(out))
    return _plain(out, "ladder")


def closure(
    recipe: Recipe | str | Path,
    out: str | Path,
    *,
    relation: str = "",
    slope: float = 1.4,
    scatter_dex: float = 0.2,
    noise: Mapping[str, float] | None = None,
    mocks: int = 20,
    wrong: tuple[float, float] = (5.0, 1.5),
    maps: Maps | None = None,
    overwrite: bool = False,
    progress: Progress = no_progress,
) -> dict[str, Any]:
    """Paint skies through a recipe's headers, beams, coverage and noise, and find them again.

    Parameters
    ----------
    recipe : Recipe or path
    out : path
        Where ``closure.json`` and ``closure.ecsv`` are written.
    relation : str
        The recipe's name of the relation to paint; a line of `slope` where it is empty.
    slope, scatter_dex : float
    noise : mapping of str to float, optional
        Noise of a map over the recipe's, to plan a depth.
    mocks : int
    wrong : (float, float)
        In one more run: true inclination less the recipe's [deg], true alpha_CO over it.
    maps, overwrite, progress
        As in `reduce`.

    Returns
    -------
    dict
        What ``closure.json`` holds.

    Raises
    ------
    InputError
        If a name is not known or a map cannot be painted.
    """
    memory = _memory(maps)
    paint = Paint(relation=relation, slope=slope, scatter_dex=scatter_dex, noise=dict(noise or {}))
    write_closure(
        _loaded(recipe, memory),
        Path(out),
        paint,
        n_mocks=mocks,
        wrong=wrong,
        overwrite=overwrite,
        memory=memory,
        progress=progress,
    )
    return _plain(out, "closure")


def _plain(out: str | Path, trial: str) -> dict[str, Any]:
    return dict(json.loads((Path(out) / f"{trial}.json").read_text(encoding="utf-8")))


def _memory(maps: Maps | None) -> dict[str, tuple[fits.PrimaryHDU, fits.PrimaryHDU | None]] | None:
    if maps is None:
        return None
    return {name: m if isinstance(m, tuple) else (m, None) for name, m in maps.items()}


def _loaded(recipe: Recipe | str | Path, memory: Mapping[str, Any] | None) -> Recipe:
    if isinstance(recipe, Recipe):
        return recipe
    return load_recipe(recipe, in_memory=frozenset(memory or ()))

"""Reduce: from the maps of a recipe to surface densities on one beam and one grid."""

from __future__ import annotations

import logging
import os
import warnings
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions import ALPHA_CO, STAR_FORMATION, Ratio, Surface, imf_factor
from kspipe.core.errors import Fault, KspipeWarning, OutputError, RecipeError
from kspipe.core.progress import Progress, no_progress
from kspipe.maps.product import read_matched, write_matched, write_product
from kspipe.maps.read import load_map, relative_noise, with_photon_noise
from kspipe.maps.skymap import Flag, SkyMap
from kspipe.matching import match_map, measure_noise, measure_noise_correlation
from kspipe.recipe import Recipe, load_recipe
from kspipe.recipe.quantity import Measured
from kspipe.recipe.resolved import resolved_recipe
from kspipe.stages.blank_sky import outside_galaxy, without_background
from kspipe.stages.folder import TRIAL_STAGES, ProductFolder
from kspipe.stages.plan import (
    InMemory,
    Plan,
    choices_of,
    compare_print,
    make_plan,
    records_of,
)
from kspipe.stages.steps import (
    STEPS_FILE,
    judge_maps,
    note_shift,
    note_steps,
    read_totals,
    write_steps,
)
from kspipe.stages.surface import Disc, surfaces_of

__all__ = ["PRODUCT_UNITS", "load_one", "match_one", "reduce_maps"]

log = logging.getLogger(__name__)

# FITS unit of each product in DIR/maps.
PRODUCT_UNITS: Final = {
    "sigma_star": "solMass pc-2",
    "sigma_atom": "solMass pc-2",
    "sigma_mol": "solMass pc-2",
    "sigma_gas": "solMass pc-2",
    "sigma_sfr": "solMass yr-1 kpc-2",
    "f_mol": "",
    "t_dep": "Gyr",
}


def reduce_maps(
    recipe: Recipe,
    out: Path,
    *,
    overwrite: bool = False,
    memory: InMemory | None = None,
    progress: Progress = no_progress,
) -> bool:
    """Bring all maps to one beam and one grid and convert them.

    Parameters
    ----------
    recipe : Recipe
    out : Path
        Product folder; ``matched/``, ``maps/``, ``steps.ecsv`` and ``recipe.toml`` are written.
    overwrite : bool
        Whether products made from something else may be replaced.
    memory : mapping of str to (HDU, HDU or None), optional
        Maps in memory instead of files.
    progress : Progress

    Returns
    -------
    bool
        False where everything was there already and was reused.

    Raises
    ------
    InputError
        One of its kinds; nothing was written then.
    """
    plan = make_plan(recipe, memory)
    totals = read_totals(plan)
    folder = ProductFolder.open(out)
    stale = folder.check(plan.prints, overwrite=overwrite)
    if not stale and not _asks_the_same(out, recipe):
        if not overwrite:
            what = "the recipe asks for another comparison than the one kept in recipe.toml"
            raise OutputError(Fault(str(out), what, "type --overwrite, or another --out"))
        stale = ["convert"]
    if not stale:
        log.info("reduce: nothing changed, %s is reused", out)
        return False
    to_match = [name for name in plan.sources if f"match.{name}" in stale]
    drop = tuple(
        stage
        for stage in folder.stages
        if stage in ("compare", "figures", "alternatives", *TRIAL_STAGES) or _is_gone(stage, plan)
    )
    if drop:
        log.info("reduce: out-of-date products of %s are removed", ", ".join(drop))
    written = {stage: plan.prints[stage] for stage in plan.prints if stage in stale}
    written["convert"] = plan.prints["convert"]
    steps = len(to_match) + 1
    with folder.publish(written, drop=drop) as staging:
        (staging / "matched").mkdir()
        for done, name in enumerate(to_match):
            progress(done, steps, f"matching {name}")
            write_matched(staging / "matched" / f"{name}.fits", match_one(plan, name))
        progress(len(to_match), steps, "converting")
        # Every run converts what lies in the files, so that a reused map gives the same numbers.
        matched = {
            name: read_matched((staging if name in to_match else out) / "matched" / f"{name}.fits")
            for name in plan.sources
        }
        disc = surfaces_of(recipe, matched, plan.grid)
        _warn_unsolved(recipe, disc)
        (staging / "maps").mkdir()
        _write_maps(staging / "maps", plan, disc)
        write_steps(staging / STEPS_FILE, matched, judge_maps(plan, matched, totals))
        (staging / "recipe.toml").write_text(
            resolved_recipe(recipe, _found(plan)), encoding="utf-8"
        )
        progress(steps, steps, "reduced")
    return True


def _asks_the_same(out: Path, recipe: Recipe) -> bool:
    """Whether DIR/recipe.toml, which the comparison reads, asks what the recipe asks."""
    try:
        kept = load_recipe(out / "recipe.toml", in_memory=frozenset(recipe.maps))
    except RecipeError:
        return True  # its files have moved, which changes no number
    return compare_print(kept, "") == compare_print(recipe, "")


def _is_gone(stage: str, plan: Plan) -> bool:
    return stage.startswith("match.") and stage not in plan.prints


def load_one(plan: Plan, name: str) -> SkyMap:
    """Read one map on its own pixels, and measure its noise if asked."""
    source, recipe = plan.sources[name], plan.recipe
    sky = note_shift(load_map(source), source)
    stated = source.request.noise
    if stated.kind == "measure" or stated.correlated == "measure":
        outside = outside_galaxy(sky, recipe)
    if stated.kind == "measure":
        sky = measure_noise(
            sky,
            outside,
            correlated=stated.correlated != "none",
            relative=relative_noise(source),
        )
    if stated.correlated == "measure":
        sky = measure_noise_correlation(sky, outside)
    if stated.gain is not None:
        sky = with_photon_noise(sky, source)
    if source.request.background == "subtract":
        sky = without_background(sky, recipe)
    return sky


def match_one(plan: Plan, name: str) -> SkyMap:
    """Read one map, measure its noise if asked, and bring it to the target beam and grid."""
    source, sky = plan.sources[name], load_one(plan, name)
    log.info("match %s: %d pixels observed", name, int(np.isfinite(sky.value).sum()))
    matched = match_map(
        sky,
        plan.target_arcsec2,
        plan.grid,
        minimum_coverage=plan.recipe.grid.minimum_coverage,
        regrid=source.request.regrid,
        workers=os.cpu_count() or 1,
    )
    return note_steps(sky, matched, plan)


def _write_maps(folder: Path, plan: Plan, disc: Disc) -> None:
    """Write the surface densities, ratios, metallicity and radius."""
    lines = [record.sentence for record in records_of(plan.recipe)]
    galaxy = plan.recipe.galaxy
    lines += _imf_lines(plan.recipe)
    lines += _factor_lines(plan.recipe)
    lines += [note for field in disc.fields.values() for note in field.notes]
    lines.append(
        f"face-on, helium included (1.36), cos i = {galaxy.cos_i:.5f} applied once; distance "
        f"{galaxy.distance.text}"
    )
    sources = [
        f"maps.{sky.name}: {entry}" for sky in disc.intensity.values() for entry in sky.history
    ]
    for name, unit in PRODUCT_UNITS.items():
        if name not in disc.surfaces:
            continue
        surface = disc.surfaces[name]
        n_drawn = disc.drawn.get(name, 0)
        drawn = [f"ERROR: by draws in {n_drawn} pixels, where first order is off"]
        write_product(
            folder / f"{name}.fits",
            surface.value,
            unit,
            plan.grid.wcs,
            plan.target_arcsec2,
            extensions={
                "ERROR": (surface.error, unit),
                "COVERAGE": (disc.coverage[name], ""),
                "FLAGS": (disc.flags, ""),
                **_interval_of(surface, unit),
            },
            history=[
                *sources,
                *lines,
                *(drawn if n_drawn else []),
                *([_RATIO_LINE] if isinstance(surface, Ratio) else []),
            ],
        )
    everywhere = np.ones(plan.grid.shape)
    anchored = f"scale of 12+log10(O/H): {plan.recipe.metallicity.oh_scale}"
    for name, value, unit, note in (
        ("metallicity", disc.oh, "", anchored),
        ("radius", disc.radius_kpc, "kpc", "deprojected distance from the centre, thin disc"),
    ):
        write_product(
            folder / f"{name}.fits",
            value,
            unit,
            plan.grid.wcs,
            plan.target_arcsec2,
            extensions={"COVERAGE": (everywhere, ""), "FLAGS": (disc.flags, "")},
            history=[note],
        )


_RATIO_LINE: Final = (
    "ERROR is first order and says little where the denominator is below about 5 sigma; LOWER and "
    "UPPER hold the true ratio with 68.3 % confidence everywhere (Fieller 1954), infinite where "
    "the data leave an end open"
)


def _interval_of(surface: Surface, unit: str) -> dict[str, tuple[NDArray[Any], str]]:
    """Extensions with the interval of a ratio; none for other surfaces."""
    if not isinstance(surface, Ratio):
        return {}
    lower, upper = surface.interval()
    return {"LOWER": (lower, unit), "UPPER": (upper, unit)}


def _factor_lines(recipe: Recipe) -> list[str]:
    """Say which typed factors stand beside the records."""
    gas = None if isinstance(recipe.gas, str) else recipe.gas
    lines = [
        f"maps.{name}: a finished map of {table.tracer}, {table.finished}"
        for name, table in recipe.maps.items()
        if table.finished is not None
    ]
    if gas and gas.hi_opacity:
        lines.append(f"atomic gas x {gas.hi_opacity}, one opacity factor for all pixels")
    if recipe.stars and isinstance(recipe.stars.mass_to_light, Measured):
        lines.append(f"mass-to-light ratio of stars: {recipe.stars.mass_to_light}")
    return lines


def _warn_unsolved(recipe: Recipe, disc: Disc) -> None:
    unsolved = (disc.flags & int(Flag.NO_SOLUTION)) != 0
    # Where star formation is there, it is the gas that is not.
    of_gas = unsolved & np.isfinite(disc.surfaces["sigma_sfr"].value)
    choices = choices_of(recipe)
    alpha_co = None if choices.alpha_co is None else ALPHA_CO.get(choices.alpha_co)
    for where, key, record in (
        (
            unsolved & ~of_gas,
            "star_formation.calibration",
            STAR_FORMATION.get(choices.calibration),
        ),
        (of_gas, "gas.alpha_co", alpha_co),
    ):
        n = int(where.sum())
        if n and record is not None:
            warnings.warn(
                f'{key}: "{record.key}" is a power law, and {n} pixels are at or below zero: NaN, '
                "flagged no_solution. What is left is biased towards bright pixels",
                KspipeWarning,
                stacklevel=2,
            )


def _imf_lines(recipe: Recipe) -> list[str]:
    """Say what a change of initial mass function did; nothing where there was none."""
    given = str(STAR_FORMATION.get(choices_of(recipe).calibration).imf)
    wanted = recipe.star_formation.imf
    if given == wanted:
        return []
    factor = imf_factor(given, wanted)
    change = f"{given} to {wanted}, star formation x {factor:.5f}"
    return [f"initial mass function: {change} (same number of stars of 30 Msun)"]


def _found(plan: Plan) -> dict[str, dict[str, str]]:
    """What was read from headers, by map, for the comments of the resolved recipe."""
    return {
        name: {
            "unit": f"{source.unit.text!r} from {source.unit.origin}",
            "beam": f"{source.beam} from {source.beam.origin}",
            "sampling": "mean over the pixel" if source.request.averages_pixels else "at points",
        }
        for name, source in plan.sources.items()
    }

"""Reduce: from the maps of a recipe to surface densities on one beam and one grid."""

from __future__ import annotations

import logging
import os
import warnings
from pathlib import Path
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions import STAR_FORMATION, imf_factor
from kspipe.core.errors import Fault, KspipeWarning, OutputError, RecipeError
from kspipe.core.progress import Progress, no_progress
from kspipe.kernels.coarse import evaluate_smoothly
from kspipe.kernels.geometry import disc_radius, position_offsets
from kspipe.maps.header import sky_of_pixels
from kspipe.maps.product import read_matched, write_matched, write_product
from kspipe.maps.read import load_map, relative_noise, with_photon_noise
from kspipe.maps.skymap import Flag, SkyMap
from kspipe.matching import match_map, measure_noise, measure_noise_correlation
from kspipe.recipe import Recipe, load_recipe
from kspipe.recipe.resolved import resolved_recipe
from kspipe.stages.folder import ProductFolder
from kspipe.stages.plan import InMemory, Plan, compare_print, make_plan, records_of
from kspipe.stages.steps import (
    STEPS_FILE,
    judge_maps,
    note_shift,
    note_steps,
    read_totals,
    write_steps,
)
from kspipe.stages.surface import Disc, surfaces_of

__all__ = ["PRODUCT_UNITS", "match_one", "reduce_maps"]

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

# Emission is expected inside this many r25 of the disc (common practice).
BLANK_SKY_R25: Final = 1.5


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
        stage for stage in folder.stages if stage in ("compare", "figures") or _is_gone(stage, plan)
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


def match_one(plan: Plan, name: str) -> SkyMap:
    """Read one map, measure its noise if asked, and bring it to the target beam and grid."""
    source, recipe = plan.sources[name], plan.recipe
    sky = note_shift(load_map(source), source)
    stated = source.request.noise
    if stated.kind == "measure" or stated.correlated == "measure":
        outside = _outside_galaxy(sky, recipe)
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
    log.info("match %s: %d pixels observed", name, int(np.isfinite(sky.value).sum()))
    matched = match_map(
        sky,
        plan.target_arcsec2,
        plan.grid,
        minimum_coverage=recipe.grid.minimum_coverage,
        regrid=source.request.regrid,
        workers=os.cpu_count() or 1,
    )
    return note_steps(sky, matched, plan)


def _outside_galaxy(sky: SkyMap, recipe: Recipe) -> NDArray[np.bool_]:
    """Pixels of a map beyond the disc; all of them where the recipe gives no r25."""
    galaxy = recipe.galaxy
    if galaxy.r25 is None:
        return np.ones(sky.value.shape, dtype=bool)

    def offsets(x: NDArray[np.float64], y: NDArray[np.float64]) -> tuple[NDArray[np.float64], ...]:
        return position_offsets(*sky_of_pixels(sky.wcs, x, y), *galaxy.centre.degrees)

    # A tenth of an arcsecond is nothing at 1.5 r25.
    (east, north), _ = evaluate_smoothly(offsets, sky.value.shape, 0.1)
    radius = disc_radius(
        east,
        north,
        inclination_deg=galaxy.inclination.value,
        pa_deg=galaxy.position_angle.value,
    )
    return np.asarray(radius > BLANK_SKY_R25 * galaxy.r25.value)


def _write_maps(folder: Path, plan: Plan, disc: Disc) -> None:
    """Write the surface densities, ratios, metallicity and radius."""
    lines = [record.sentence for record in records_of(plan.recipe)]
    galaxy = plan.recipe.galaxy
    lines += _imf_lines(plan.recipe)
    lines += _factor_lines(plan.recipe)
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
            },
            history=[*sources, *lines],
        )
    everywhere = np.ones(plan.grid.shape)
    anchored = f"scale of 12+log10(O/H): {plan.recipe.metallicity.scale}"
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


def _factor_lines(recipe: Recipe) -> list[str]:
    """Say which typed factors stand beside the records."""
    gas = None if isinstance(recipe.gas, str) else recipe.gas
    lines = []
    if gas and gas.hi_opacity:
        lines.append(f"atomic gas x {gas.hi_opacity}, one opacity factor for all pixels")
    if recipe.stars:
        lines.append(f"mass-to-light ratio of stars: {recipe.stars.mass_to_light}")
    return lines


def _warn_unsolved(recipe: Recipe, disc: Disc) -> None:
    n = int(np.sum((disc.flags & int(Flag.NO_SOLUTION)) != 0))
    if n:
        warnings.warn(
            f'star_formation.calibration: "{recipe.star_formation.calibration}" is a power law, '
            f"and {n} pixels are at or below zero: NaN, flagged no_solution. What is left is "
            "biased towards bright pixels",
            KspipeWarning,
            stacklevel=2,
        )


def _imf_lines(recipe: Recipe) -> list[str]:
    """Say what a change of initial mass function did; nothing where there was none."""
    given = str(STAR_FORMATION.get(recipe.star_formation.calibration).imf)
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

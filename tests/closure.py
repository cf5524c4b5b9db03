"""Closure of the reduction on the demo sky, whose truth is analytic.

Truth is the true sky smoothed to the final beam, taken at pixel centres, then converted. The
painter is `demo_maps/make_demo.py`, which shares no code with kspipe.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from demo import load_demo

from kspipe.conversions import Ratio, Surface, make_surface
from kspipe.maps import SkyMap
from kspipe.recipe import load_recipe
from kspipe.stages.plan import Plan, choices_of, make_plan
from kspipe.stages.reduce import match_one
from kspipe.stages.surface import Disc, parameters_of, surfaces_of

ROOT = Path(__file__).resolve().parents[1]
STEMS = {"hi": ("hi", "hi_noise"), "co": ("co", None), "fuv": ("fuv", None)}
STEMS |= {"ir": ("mir24", "mir24_noise"), "ha": ("halpha", None)}
PRODUCTS = ("sigma_atom", "sigma_mol", "sigma_gas", "sigma_sfr", "f_mol", "t_dep")


@dataclass(frozen=True)
class Run:
    """One reduction of the painted sky."""

    plan: Plan
    disc: Disc
    complete: np.ndarray


def matched_painted(
    seed: int, *, noise: bool, recipe_name: str = "orrinda_short.toml"
) -> tuple[Plan, dict[str, SkyMap]]:
    """Paint the sky, match its maps in memory."""
    recipe = load_recipe(ROOT / "recipes" / recipe_name)
    if not noise:
        # A noise-free map shows no noise to measure; the painter's own value stands in.
        co = recipe.maps["co"].model_copy(update={"noise": "0.24 K km/s"})
        recipe = recipe.model_copy(update={"maps": {**recipe.maps, "co": co}})
    painted = load_demo().paint(seed, noise)
    memory = {
        name: (painted[STEMS[name][0]], painted.get(STEMS[name][1] or "")) for name in recipe.maps
    }
    plan = make_plan(recipe, memory)
    return plan, {name: match_one(plan, name) for name in plan.sources}


def reduce_painted(seed: int, *, noise: bool, recipe_name: str = "orrinda_short.toml") -> Run:
    """Paint the sky, reduce it in memory."""
    plan, matched = matched_painted(seed, noise=noise, recipe_name=recipe_name)
    complete = np.min([sky.coverage for sky in matched.values()], axis=0) > 0.9999
    return Run(plan, surfaces_of(plan.recipe, matched, plan.grid), complete)


def truth_of(run: Run) -> dict[str, tuple[np.ndarray, np.ndarray]]:
    """True value and true error (noise propagated at the true value) of each product."""
    demo, plan, disc = load_demo(), run.plan, run.disc
    lon, lat = plan.grid.sky()
    sky = {
        tracer: demo.true_intensity(tracer, lon, lat, plan.target_arcsec2)
        for tracer in disc.intensity
    }
    if "Halpha" in sky:
        sky["Halpha"] = sky["Halpha"] * demo.FILTER_OVER_HALPHA
    surfaces = make_surface(
        sky,
        {tracer: matched.noise for tracer, matched in disc.intensity.items()},
        choices_of(plan.recipe),
        parameters_of(plan.recipe, disc.fields),
    )
    return {name: (surface.value, surface.error) for name, surface in surfaces.items()}


def noise_free_percentiles(recipe_name: str = "orrinda_short.toml") -> dict[str, np.ndarray]:
    """1st, 16th, 50th, 84th, 99th percentile of recovered/true - 1 [%], coverage complete.

    Where truth exceeds 5 % of its maximum.
    """
    run = reduce_painted(1, noise=False, recipe_name=recipe_name)
    table = {}
    for name, (truth, _) in truth_of(run).items():
        used = run.complete & (truth > 0.05 * np.nanmax(truth))
        ratio = run.disc.surfaces[name].value[used] / truth[used] - 1.0
        table[name] = 100 * np.percentile(ratio, [1, 16, 50, 84, 99])
    return table


@dataclass(frozen=True)
class Coverage:
    """How often the truth lies inside what is stated."""

    product: str
    snr: str
    n: int
    within_1: float
    within_2: float


def stated(surface: Surface, n_sigma: int) -> tuple[np.ndarray, np.ndarray]:
    """What a product says: value +- error, and for a ratio its interval."""
    if isinstance(surface, Ratio):
        return surface.interval(n_sigma)
    return surface.value - n_sigma * surface.error, surface.value + n_sigma * surface.error


def coverage_table(seeds: Iterable[int]) -> list[Coverage]:
    """Pool pixels over noise seeds, by product and true S/N.

    All covered pixels count: also those of a ratio whose denominator came out below zero, which
    have an interval, if no value.
    """
    inside: dict[tuple[str, str], list[np.ndarray]] = {}
    for seed in seeds:
        run = reduce_painted(seed, noise=True)
        truths = truth_of(run)
        for name in PRODUCTS:
            truth, true_error = truths[name]
            low, high = np.swapaxes([stated(run.disc.surfaces[name], k) for k in (1, 2)], 0, 1)
            within = (low < truth) & (truth < high)
            used = ~np.isnan(low[0]) & np.isfinite(truth)
            snr = truth / true_error
            for label, least, most in (("< 1", -np.inf, 1), ("1 to 5", 1, 5), ("> 5", 5, np.inf)):
                chosen = used & (snr >= least) & (snr < most)
                inside.setdefault((name, label), []).append(within[:, chosen])
    table = []
    for (name, label), parts in inside.items():
        pooled = np.concatenate(parts, axis=1)
        if pooled.size:
            table.append(Coverage(name, label, pooled.shape[1], *pooled.mean(axis=1).tolist()))
    return table

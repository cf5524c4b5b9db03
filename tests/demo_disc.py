"""The demonstration maps, matched once, converted by any recipe."""

from __future__ import annotations

import atexit
import shutil
import tempfile
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
from helpers import demo_recipe

from kspipe.maps.product import read_matched
from kspipe.maps.skymap import SkyMap
from kspipe.matching import Grid
from kspipe.recipe import Recipe, parse_recipe
from kspipe.stages.plan import make_plan
from kspipe.stages.reduce import reduce_maps
from kspipe.stages.surface import Disc, surfaces_of


@cache
def shared_folder() -> Path:
    """Return a folder for the demo's files that all test modules of this run share."""
    folder = tempfile.mkdtemp(prefix="kspipe-demo-")
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    return Path(folder)


@cache
def matched_maps(out: Path) -> tuple[Grid, dict[str, SkyMap]]:
    """Grid and matched maps of the demo, and that of 24 um as if it were of other bands."""
    recipe = recipe_of(out)
    reduce_maps(recipe, out / "run")
    maps = {p.stem: read_matched(p) for p in (out / "run" / "matched").glob("*.fits")}
    maps["ha"] = replace(maps["ir"], name="ha", tracer="Halpha", unit="erg/s/cm2/sr")
    maps["hb"] = replace(maps["ir"], name="hb", tracer="Hbeta", unit="erg/s/cm2/sr")
    maps["hb"] = replace(maps["hb"], value=maps["ir"].value[::-1])
    maps["dust"] = replace(maps["ir"], name="dust", tracer="Sigma_dust", unit="Msun/pc2")
    maps["nir"] = replace(maps["ir"], name="nir", tracer="3.6um")
    return make_plan(recipe).grid, maps


def recipe_of(out: Path, **changes: Any) -> Recipe:
    return parse_recipe(demo_recipe(out, **changes), folder=out)


def disc_of(out: Path, _as: dict[str, str] | None = None, **changes: Any) -> Disc:
    """Convert the matched maps of the demo by another recipe, some as if of another tracer."""
    grid, maps = matched_maps(out)
    recipe = recipe_of(out, **changes)
    used = {name: maps[name] for name in recipe.maps}
    used |= {name: replace(maps[name], tracer=tracer) for name, tracer in (_as or {}).items()}
    return surfaces_of(recipe, used, grid)


def converted(out: Path, **changes: Any) -> dict[str, np.ndarray]:
    """Images of a conversion by name, errors as NAME_error."""
    disc = disc_of(out, **changes)
    images = {"metallicity": disc.oh, "radius": disc.radius_kpc, "flags": disc.flags}
    for name, surface in disc.surfaces.items():
        images |= {name: surface.value, f"{name}_error": surface.error}
    return images

"""Pixels of the named environments of a recipe."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from kspipe.comparison.regions import parse_regions, pixels_inside
from kspipe.core.errors import Fault, InputError
from kspipe.matching import Grid
from kspipe.recipe import Recipe
from kspipe.recipe.environment import EnvironmentTable

__all__ = ["environment_area", "environment_areas"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]


def environment_area(
    name: str, environment: EnvironmentTable, radius_kpc: Array, grid: Grid
) -> Mask:
    """Pixels between two radii, or in the regions of a file.

    Raises
    ------
    InputError
        If the file cannot be read.
    """
    radii = environment.radii_kpc
    if radii is not None:
        return np.asarray((radius_kpc >= radii[0]) & (radius_kpc < radii[1]))
    path = Path(environment.where)
    try:
        text = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        where = f"comparison.environments.{name}"
        raise InputError(Fault(where, f"{path} cannot be read ({error})")) from None
    return pixels_inside(parse_regions(text, str(path)), *grid.sky())


def environment_areas(recipe: Recipe, radius_kpc: Array, grid: Grid) -> dict[str, Mask]:
    """Pixels of every environment, by name."""
    return {
        name: environment_area(name, environment, radius_kpc, grid)
        for name, environment in recipe.comparison.environments.items()
    }

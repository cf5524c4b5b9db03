"""The sky beyond the galaxy: where it is, and what level it has."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.core.errors import Fault, MapError
from kspipe.kernels.coarse import evaluate_smoothly
from kspipe.kernels.geometry import disc_radius, position_offsets
from kspipe.maps.header import sky_of_pixels
from kspipe.maps.skymap import SkyMap
from kspipe.matching.sky_level import SkyLevel, measure_sky_level, subtract_sky_level
from kspipe.recipe import Recipe

__all__ = ["level_of", "outside_galaxy", "without_background"]

# Emission is expected inside this many r25 of the disc (common practice).
BLANK_SKY_R25: Final = 1.5
# A faint outer disc is nothing among noise, but it is something in the mean of all sky: the
# level is measured farther out (common practice).
SKY_LEVEL_R25: Final = 2.0


def outside_galaxy(
    sky: SkyMap, recipe: Recipe, beyond_r25: float = BLANK_SKY_R25
) -> NDArray[np.bool_]:
    """Pixels of a map beyond the disc; all of them where the recipe gives no r25."""
    galaxy = recipe.galaxy
    if galaxy.r25 is None:
        return np.ones(sky.value.shape, dtype=bool)

    def offsets(x: NDArray[np.float64], y: NDArray[np.float64]) -> tuple[NDArray[np.float64], ...]:
        return position_offsets(*sky_of_pixels(sky.wcs, x, y), *galaxy.centre.degrees)

    # A tenth of an arcsecond is nothing there.
    (east, north), _ = evaluate_smoothly(offsets, sky.value.shape, 0.1)
    radius = disc_radius(
        east,
        north,
        inclination_deg=galaxy.inclination.value,
        pa_deg=galaxy.position_angle.value,
    )
    return np.asarray(radius > beyond_r25 * galaxy.r25.value)


def level_of(sky: SkyMap, recipe: Recipe) -> SkyLevel | None:
    """Level of the sky beyond the galaxy; None without r25, or where there is too little sky."""
    if recipe.galaxy.r25 is None:
        return None
    return measure_sky_level(sky, outside_galaxy(sky, recipe, SKY_LEVEL_R25))


def without_background(sky: SkyMap, recipe: Recipe) -> SkyMap:
    """Take the level of the sky beyond the galaxy off a map.

    Raises
    ------
    MapError
        If there is too little sky there.
    """
    level = level_of(sky, recipe)
    if level is None:
        raise MapError(
            Fault(
                f"maps.{sky.name}.background",
                f"there is too little sky beyond {SKY_LEVEL_R25:g} r25 to measure its level",
                'type background = "keep" and pedestal_error, or give a map with more sky',
            )
        )
    return subtract_sky_level(sky, level)

"""What may not change: surface densities with distance, depletion times with inclination.

Surface densities do not depend on distance when beam and gradients are angular; sizes go with it,
totals with its square. cos i multiplies every surface density once and no ratio (identities).
"""

from __future__ import annotations

import numpy as np
import pytest
from closure import matched_painted

from kspipe.recipe.quantity import Measured
from kspipe.stages.surface import surfaces_of

DENSITIES = ("sigma_atom", "sigma_mol", "sigma_gas", "sigma_sfr")


@pytest.fixture(scope="module")
def made():
    return matched_painted(1, noise=True)


def with_galaxy(recipe, **changes):
    """The recipe with another galaxy; a gradient per r25 is angular."""
    metallicity = recipe.metallicity.model_copy(update={"gradient": "-0.4 dex/r25"})
    galaxy = recipe.galaxy.model_copy(update=changes)
    return recipe.model_copy(update={"galaxy": galaxy, "metallicity": metallicity})


@pytest.mark.parametrize("factor", [2.0, 0.5, 10.0])
def test_distance_moves_sizes_and_totals_only(made, factor) -> None:
    plan, matched = made
    near = with_galaxy(plan.recipe)
    mpc = near.galaxy.distance.value
    far = with_galaxy(plan.recipe, distance=Measured(factor * mpc, 0.0, "typed"))
    one, other = (surfaces_of(recipe, matched, plan.grid) for recipe in (near, far))
    for name in (*DENSITIES, "f_mol", "t_dep"):
        for part in ("value", "error"):
            first, second = (getattr(disc.surfaces[name], part) for disc in (one, other))
            np.testing.assert_allclose(second, first, rtol=1e-10, atol=0, equal_nan=True)
    np.testing.assert_allclose(other.radius_kpc, factor * one.radius_kpc, rtol=1e-12)
    areas = [recipe.galaxy.pc_per_arcsec**2 for recipe in (near, far)]
    assert areas[1] / areas[0] == pytest.approx(factor**2)


@pytest.mark.parametrize("inclination", [30.0, 60.0, 70.0])
def test_inclination_scales_all_densities_and_no_ratio(made, inclination) -> None:
    plan, matched = made
    # No gradient: radii, and with them metallicities, do depend on inclination.
    flat = plan.recipe.metallicity.model_copy(update={"gradient": None})
    base = plan.recipe.model_copy(update={"metallicity": flat})
    discs = []
    for angle in (0.0, inclination):
        galaxy = base.galaxy.model_copy(update={"inclination": Measured(angle, 0.0, "typed")})
        discs.append(surfaces_of(base.model_copy(update={"galaxy": galaxy}), matched, plan.grid))
    for name in DENSITIES:
        for part in ("value", "error"):
            first, second = (getattr(disc.surfaces[name], part) for disc in discs)
            np.testing.assert_allclose(
                second, np.cos(np.radians(inclination)) * first, rtol=1e-10, equal_nan=True
            )
    for name in ("f_mol", "t_dep"):
        first, second = (disc.surfaces[name].value for disc in discs)
        np.testing.assert_allclose(second, first, rtol=1e-10, equal_nan=True)

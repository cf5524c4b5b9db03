"""alpha_CO of a reduced galaxy by the evenness of its gas-to-dust ratio."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from kspipe.comparison import independent_samples
from kspipe.conversions import (
    CIRCULARITY,
    JointFit,
    convert,
    finished_factor,
    fit_alpha_co_and_gas_to_dust,
)
from kspipe.core.errors import Fault, InputError, nearest
from kspipe.core.seeds import generator
from kspipe.core.tracers import CO_LINES
from kspipe.kernels.geometry import beam_axes
from kspipe.maps.product import read_matched
from kspipe.stages.compare import reduced_plan
from kspipe.stages.folder import ProductFolder
from kspipe.stages.place import Place
from kspipe.stages.plan import InMemory, choices_of
from kspipe.stages.surface import fields_of, parameters_of, used_maps

__all__ = ["fit_cells", "fit_joint"]


def fit_joint(out: Path, region: str | None = None, *, memory: InMemory | None = None) -> JointFit:
    """Fit alpha_CO and one gas-to-dust ratio to independent samples of a galaxy.

    Parameters
    ----------
    out : Path
        Folder of a reduction whose recipe lists maps of HI, of CO and of Sigma_dust.
    region : str or None
        Of the recipe's ``[regions]``; everything that the three maps cover without it.
    memory : mapping, optional
        As given to the reduction.

    Raises
    ------
    InputError
        If a map or the region is not there, or the samples cannot tell alpha_CO.
    """
    plan = reduced_plan(ProductFolder.open(out), memory)
    recipe, grid = plan.recipe, plan.grid
    line, dust_name = recipe.map_of(*CO_LINES), recipe.map_of("Sigma_dust")
    choices = choices_of(recipe)
    if line is None or dust_name is None or choices.alpha_co is None:
        raise InputError(
            Fault(
                "maps",
                "the joint fit of alpha_CO and the gas-to-dust ratio needs maps of HI, CO and "
                "Sigma_dust, and a recipe with gas.alpha_co",
                'list the one that lacks; a dust map has tracer = "Sigma_dust"',
            )
        )
    if region is not None and region not in recipe.regions:
        raise InputError(
            Fault("region", f'no region is called "{region}"', nearest(region, recipe.regions))
        )
    matched = {name: read_matched(out / "matched" / f"{name}.fits") for name in plan.sources}
    place = Place.of(recipe, grid)
    parameters = parameters_of(recipe, fields_of(recipe, place))
    used = used_maps(recipe, matched)
    intensity = {tracer: sky.value for tracer, sky in used.items()}
    converted = convert(intensity, choices, parameters)
    cos_i = np.asarray(recipe.galaxy.cos_i)
    ico = intensity[recipe.maps[line].tracer] * cos_i / converted.factors["line_ratio"]
    dust = matched[dust_name].value * finished_factor(
        choices.finished["Sigma_dust"], cos_i, "Kroupa"
    )
    beam = beam_axes(plan.target_arcsec2)[0]
    samples = independent_samples(grid.shape, grid.centre_pixel, beam / grid.pixel_arcsec)
    if region is not None:
        samples = samples & place.region(region)
    try:
        return fit_alpha_co_and_gas_to_dust(
            dust[samples],
            converted.values["sigma_atom"][samples],
            ico[samples],
            generator(recipe.seed, "joint fit", region or ""),
        )
    except ValueError as error:
        raise InputError(
            Fault("maps", str(error), "take a larger region or a finer beam")
        ) from None


def fit_cells(fit: JointFit) -> list[tuple[str, str]]:
    """Write a fit as names with text."""
    rows = [
        ("alpha_CO", f"{fit.alpha_co:.3g} +- {fit.alpha_co_error:.2g} Msun/pc2 per K km/s"),
        ("gas-to-dust ratio", f"{fit.gas_to_dust:.4g}, gas with helium"),
        ("scatter of the ratio", f"{fit.scatter_dex:.3f} dex"),
    ]
    if not fit.is_bounded:
        low, high = fit.trials_alpha_co[[0, -1]]
        rows.append(
            ("beware", f"least at an end of the range tried, {low:g} to {high:g}: not determined")
        )
    return [*rows, ("beware", CIRCULARITY)]

"""What the beam and the noise do to each relation, pixel by pixel."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from astropy.table import Column, Table
from numpy.typing import NDArray

from kspipe.recipe import Recipe
from kspipe.relations import LAWS
from kspipe.relations.inside_beam import beam_bias_dex, noise_bias

__all__ = ["add_inside_beam"]

Array = NDArray[np.float64]


def add_inside_beam(
    recipe: Recipe,
    inputs: Mapping[str, Array],
    errors: Mapping[str, Array],
    used: NDArray[np.bool_],
    table: Table,
) -> dict[str, Any] | None:
    """Add two columns for each relation to the table of pixels, and sum them up.

    Parameters
    ----------
    recipe : Recipe
        Without ``[inside_beam]`` nothing is added.
    inputs, errors : mapping of str to (ny, nx) float64 array
        What relations take, and the random errors of the gas among it.
    used : (ny, nx) bool array
        Rows of the table.
    table : astropy.table.Table

    Returns
    -------
    dict or None
        For the summary.
    """
    if recipe.inside_beam is None:
        return None
    scatter = recipe.inside_beam.scatter
    told: dict[str, Any] = {}
    rows = {name: np.broadcast_to(value, used.shape)[used] for name, value in inputs.items()}
    for name, relation in recipe.relations.items():
        law = LAWS.get(relation.law)
        gas = law.needs[0]
        by_structure = beam_bias_dex(law, rows, relation.parameters, scatter.value)
        by_noise = noise_bias(law, rows, relation.parameters, errors[gas][used])
        what = f"{name} at the mean over its mean inside the beam, gas log-normal by {scatter}"
        table.add_column(
            Column(by_structure, name=f"beam_bias_{name}", unit="dex", description=what)
        )
        what = f"factor by which noise in the gas raises {name} on average, taking {gas} as true"
        table.add_column(Column(by_noise, name=f"noise_bias_{name}", description=what))
        told[name] = {
            "scatter_dex": scatter.value,
            "median_beam_bias_dex": _median(by_structure),
            "median_noise_bias": _median(by_noise),
            "n_without_value": int(np.sum(~np.isfinite(by_structure) | ~np.isfinite(by_noise))),
        }
    return told


def _median(values: Array) -> float:
    seen = values[np.isfinite(values)]
    return float(np.median(seen)) if seen.size else float("nan")

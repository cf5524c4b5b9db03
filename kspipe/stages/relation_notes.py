"""What is said of each relation of a comparison: its inputs, and what it shares with the data."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from kspipe.comparison import Known, Residuals, shared_with_observed
from kspipe.maps.skymap import Flag
from kspipe.recipe import Recipe
from kspipe.relations import LAW_INPUTS, LAWS
from kspipe.stages.surface import Disc

__all__ = ["history_lines", "relation_notes"]


def relation_notes(
    recipe: Recipe,
    name: str,
    inputs: Mapping[str, Known],
    disc: Disc,
    residuals: Residuals,
    used: NDArray[np.bool_],
) -> dict[str, Any]:
    """Say of one relation what it was given, as plain values for the summary.

    Parameters
    ----------
    recipe : Recipe
    name : str
        The recipe's name of the relation.
    inputs : mapping of str to Known
    disc : Disc
    residuals : Residuals
        Of this relation.
    used : (ny, nx) bool array
        Covered pixels.

    Returns
    -------
    dict
        ``inputs``: of each the median where gas and star formation are significant (everywhere
        if that is nowhere), unit, origin, and how many covered pixels have no usable value;
        ``n_outside_range`` and ``n_no_solution``: covered pixels so flagged by this relation;
        ``shared``: what stands on both sides of the comparison, and whether its random error is
        carried.
    """
    law = LAWS.get(recipe.relations[name].law)
    described = {}
    good = (disc.flags & int(Flag.LOW_SNR)) == 0
    for need in law.takes(inputs):
        value = np.broadcast_to(inputs[need].value, used.shape)
        known = np.isfinite(value) if need in ("oh", "beta") else value > 0
        known = known & used
        seen = known & good if (known & good).any() else known
        described[need] = {
            "median": float(np.median(value[seen])) if seen.any() else float("nan"),
            "unit": LAW_INPUTS[need].unit,
            "origin": getattr(inputs[need], "origin", "map of this reduction"),
            "n_unusable": int(np.sum(used & ~known)),
        }
    added = residuals.flags & ~disc.flags
    return {
        "inputs": described,
        "n_outside_range": int(np.sum(used & ((added & int(Flag.OUTSIDE_RANGE)) != 0))),
        "n_no_solution": int(np.sum(used & np.isnan(residuals.predicted))),
        "shared": [
            {
                "what": shared.what,
                "observed": shared.observed,
                "predicted": shared.predicted,
                "covariance_carried": shared.is_carried,
            }
            for shared in shared_with_observed(recipe, name, disc.surfaces)
        ],
    }


def history_lines(notes: Mapping[str, Any]) -> list[str]:
    """Write the same as lines of history."""
    lines = [
        f"input {need}: {entry['origin']}, median {entry['median']:.4g} {entry['unit']}".rstrip()
        for need, entry in notes["inputs"].items()
    ]
    for shared in notes["shared"]:
        carried = "error carried as covariance" if shared["covariance_carried"] else "no error term"
        lines.append(
            f"on both sides: {shared['what']}, in the observed {shared['observed']} and the "
            f"{shared['predicted']}; {carried}"
        )
    return lines

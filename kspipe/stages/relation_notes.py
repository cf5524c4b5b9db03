"""What is said of each relation of a comparison: its inputs, and what it shares with the data."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from kspipe.comparison import Known, shared_with_observed
from kspipe.recipe import Recipe
from kspipe.relations import LAW_INPUTS, LAWS
from kspipe.stages.surface import Disc

__all__ = ["history_lines", "relation_notes"]


def relation_notes(
    recipe: Recipe,
    name: str,
    inputs: Mapping[str, Known],
    disc: Disc,
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
    used : (ny, nx) bool array
        Covered pixels.

    Returns
    -------
    dict
        ``inputs``: median over the covered pixels, unit, origin and pixels without a usable value
        of each; ``shared``: what stands on both sides of the comparison, and whether its random
        error is carried.
    """
    law = LAWS.get(recipe.relations[name].law)
    described = {}
    for need in law.takes(inputs):
        value = np.broadcast_to(inputs[need].value, used.shape)[used]
        known = np.isfinite(value) if need in ("oh", "beta") else value > 0
        described[need] = {
            "median": float(np.median(value[known])) if known.any() else float("nan"),
            "unit": LAW_INPUTS[need].unit,
            "origin": getattr(inputs[need], "origin", "map of this reduction"),
            "n_unusable": int(np.sum(~known)),
        }
    return {
        "inputs": described,
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

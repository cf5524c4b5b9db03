"""What the errors of parameters do to surface densities."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.choices import Choices, Parameters
from kspipe.conversions.convert import Converted, convert
from kspipe.conversions.field import Field

__all__ = ["Shifts", "parameter_shifts"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Shifts:
    """A conversion with what its parameters do to it.

    Attributes
    ----------
    converted : Converted
        With the derivative by each parameter that has a random error among its derivatives.
    common : dict of str to list of float64 array
        By product: its change for each error that pixels share.
    """

    converted: Converted
    common: dict[str, list[Array]]


def parameter_shifts(
    converted: Converted,
    intensity: Mapping[str, Array],
    choices: Choices,
    parameters: Parameters,
    fields: Mapping[str, Field],
) -> Shifts:
    """Find how each surface density changes with the parameters that have an error.

    Parameters
    ----------
    converted : Converted
        Of the next three arguments.
    intensity, choices, parameters
        As in `convert`.
    fields : mapping of str to Field
        Parameters by name; only their errors are looked at, and their values.

    Returns
    -------
    Shifts
        By differences over one error, or half the value where that is less.
    """
    derivatives = {product: dict(slopes) for product, slopes in converted.derivatives.items()}
    common: dict[str, list[Array]] = {product: [] for product in converted.values}

    def slopes(name: str, error: Array) -> dict[str, Array]:
        up, down = fields[name].around(error)
        high, low = (
            convert(intensity, choices, parameters.changed(name, value)).values
            for value in (up, down)
        )
        with np.errstate(invalid="ignore", divide="ignore"):
            found = {
                product: np.where(up != down, (high[product] - low[product]) / (up - down), 0.0)
                for product in high
            }
        # A blank is no change.
        return {product: slope for product, slope in found.items() if np.nan_to_num(slope).any()}

    for name, field in fields.items():
        if field.random is not None:
            for product, slope in slopes(name, field.random).items():
                derivatives[product][name] = slope
        for pattern in field.common:
            for product, slope in slopes(name, pattern).items():
                common[product].append(slope * pattern)
    return Shifts(replace(converted, derivatives=derivatives), common)

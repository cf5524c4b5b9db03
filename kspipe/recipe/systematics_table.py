"""How wide the assumptions are that a systematics budget varies, where nothing else says so.

Errors of distance, inclination, position angle, line ratio, metallicity and of the maps' flux
scales and zero levels stand beside their values, elsewhere in the recipe.
"""

from __future__ import annotations

from typing import Annotated

from pydantic import AfterValidator, BeforeValidator

from kspipe.recipe.quantity import Measured, parse_measured, parse_percent
from kspipe.recipe.values import Table

__all__ = ["SystematicsTable"]


def _width(quantity: Measured) -> Measured:
    if not 0 <= quantity.value <= 1:
        raise ValueError(f"{quantity.text!r}: expected a width from 0 (not varied) to 1 dex")
    return quantity


def _share(quantity: Measured) -> Measured:
    if not 0 <= quantity.value <= 0.5:
        raise ValueError(f"{quantity.text!r}: expected a share from 0 % (not varied) to 50 %")
    return quantity


Dex = Annotated[
    Measured,
    BeforeValidator(lambda typed: parse_measured(typed, "dex", '"0.2 dex"')),
    AfterValidator(_width),
]
Share = Annotated[Measured, BeforeValidator(parse_percent), AfterValidator(_share)]


class SystematicsTable(Table):
    """1-sigma widths; an absent key takes what the budget prints as its origin."""

    alpha_co: Dex | None = None
    line_ratio: Dex | None = None
    star_formation: Dex | None = None
    metallicity: Dex | None = None
    imf: Dex | None = None
    helium: Share | None = None
    diffuse: Share | None = None
    short_spacings: Share | None = None

"""What relations need of the disc besides gas: midplane, radiation field, rotation."""

from __future__ import annotations

import math
from typing import Annotated, Any, Literal, get_args

import numpy as np
from pydantic import AfterValidator, BeforeValidator, Field, model_validator

from kspipe.conversions.midplane import ScaleHeight
from kspipe.core.errors import nearest
from kspipe.core.radiation import FIELD_UNITS, FieldUnit
from kspipe.recipe.kinds import FieldStrength
from kspipe.recipe.quantity import Measured, parse_measured
from kspipe.recipe.values import Table

__all__ = ["MidplaneTable", "RadiationFieldTable", "RotationTable"]


def _positive(unit: str, example: str, *, or_zero: bool = False) -> Any:
    def check(typed: Any) -> Measured:
        quantity = parse_measured(typed, unit, example)
        if quantity.value < 0 or (quantity.value == 0 and not or_zero):
            raise ValueError(f"{quantity.text!r}: expected a positive value such as {example}")
        return quantity

    return BeforeValidator(check)


def _definition(typed: Any) -> str:
    if typed not in get_args(ScaleHeight):
        raise ValueError(
            f"definition {typed!r} is not known; {nearest(str(typed), get_args(ScaleHeight))}"
        )
    return str(typed)


def _unit(typed: Any) -> str:
    if typed not in FIELD_UNITS:
        raise ValueError(f"unit {typed!r} is not known; {nearest(str(typed), FIELD_UNITS)}")
    return str(typed)


Density = Annotated[Measured, _positive("Msun/pc3", '"0.05 Msun/pc3"')]
DensityOrZero = Annotated[Measured, _positive("Msun/pc3", '"0.01 Msun/pc3"', or_zero=True)]
Height = Annotated[Measured, _positive("pc", '"300 pc"')]


class MidplaneTable(Table):
    """Density of stars and dark matter: one for the whole disc, or from the map of stars."""

    density: Density | None = None
    scale_height: Height | None = None
    definition: Annotated[ScaleHeight | None, BeforeValidator(_definition)] = None
    dark_matter: DensityOrZero | None = None

    @model_validator(mode="after")
    def _one_way(self) -> MidplaneTable:
        from_stars = {
            "scale_height": self.scale_height,
            "definition": self.definition,
            "dark_matter": self.dark_matter,
        }
        given = [name for name, value in from_stars.items() if value is not None]
        if self.density is not None and given:
            raise ValueError(f"density excludes {', '.join(given)}: keep one way")
        if self.density is None and len(given) < len(from_stars):
            missing = [name for name in from_stars if name not in given]
            raise ValueError(
                f'{", ".join(missing)} is missing: give density = "0.05 Msun/pc3", or '
                'scale_height = "300 pc" with definition = "sech2(z/z0)" and '
                'dark_matter = "0.01 Msun/pc3", 0 where it is left out'
            )
        return self


class RadiationFieldTable(Table):
    """Far-ultraviolet field: a number, a map or a table in a stated unit, or as the stars form."""

    field: FieldStrength | None = None
    unit: Annotated[FieldUnit | None, BeforeValidator(_unit)] = None
    origin: Literal["star formation"] | None = None

    @model_validator(mode="after")
    def _one_way(self) -> RadiationFieldTable:
        if (self.field is None) == (self.origin is None):
            raise ValueError('give either field = 1.0 with unit, or origin = "star formation"')
        if (self.field is None) != (self.unit is None):
            raise ValueError(f"field and unit go together; units: {', '.join(FIELD_UNITS)}")
        return self


def _numbers(values: list[float]) -> list[float]:
    if not all(math.isfinite(value) for value in values):
        raise ValueError("one of the numbers is not finite")
    return values


Numbers = Annotated[list[float], Field(min_length=3), AfterValidator(_numbers)]


class RotationTable(Table):
    """A rotation curve, joined by power laws; nothing is known outside it."""

    radius_kpc: Numbers
    velocity_km_s: Numbers

    @model_validator(mode="after")
    def _is_curve(self) -> RotationTable:
        if len(self.radius_kpc) != len(self.velocity_km_s):
            raise ValueError(
                f"{len(self.radius_kpc)} radii and {len(self.velocity_km_s)} velocities"
            )
        if self.radius_kpc[0] <= 0 or not np.all(np.diff(self.radius_kpc) > 0):
            raise ValueError("radius_kpc must be positive and rise")
        if min(self.velocity_km_s) <= 0:
            raise ValueError("velocity_km_s must be positive")
        return self

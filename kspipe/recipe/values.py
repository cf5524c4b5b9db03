"""Values that a recipe may hold: quantities with bounds, keys of records."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from types import MappingProxyType
from typing import Annotated, Any, Final

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, ValidationInfo

from kspipe.core.errors import nearest
from kspipe.core.registry import Registry
from kspipe.core.tracers import TRACERS
from kspipe.recipe.quantity import Measured, parse_measured, parse_percent

__all__ = [
    "NO_ERROR",
    "Angle",
    "Arcsec",
    "Distance",
    "FieldOverDensity",
    "Inclination",
    "Magnitude",
    "Offset",
    "Opacity",
    "Percent",
    "Ratio",
    "Speed",
    "StellarMass",
    "Table",
    "TracerName",
    "Wavelength",
    "key_of",
    "key_or",
]


class Table(BaseModel):
    """A table of the recipe: frozen, no unknown keys."""

    model_config = ConfigDict(frozen=True, extra="forbid", arbitrary_types_allowed=True)


def _measured(unit: str, example: str) -> Any:
    return BeforeValidator(lambda typed: parse_measured(typed, unit, example))


def _between(low: float, high: float, what: str) -> Any:
    """Check that a value lies in the open interval, or on its lower end where that is zero."""

    def check(quantity: Measured | None) -> Measured | None:
        if quantity is None:
            return None
        above = (
            quantity.value >= low
            if (low == 0 and ", or 0" in what) or ", 0 or" in what
            else quantity.value > low
        )
        if not (above and quantity.value < high):
            raise ValueError(f"{quantity.text!r}: expected {what}")
        return quantity

    return AfterValidator(check)


def _opacity(factor: Measured) -> Measured:
    if not 1.0 <= factor.value <= 3.0:
        raise ValueError(f"{factor.text!r}: expected a factor from 1 (optically thin) to 3")
    return factor


def key_of(registry: Registry[Any], more: Mapping[str, Any] = MappingProxyType({})) -> Any:
    """Validator of a key of a registry, or of the name of a record of the user's own.

    The user's own records of the recipe stand, by name, in the validation context; one that is
    named becomes the record itself, like one of `more`.
    """
    kind = type(next(iter(registry)))

    def check(typed: Any, info: ValidationInfo) -> Any:
        if typed is None or isinstance(typed, kind):
            return typed
        own = {**(info.context or {}).get("records", {}), **more}
        if isinstance(typed, str) and isinstance(own.get(typed), kind):
            return own[typed]
        if not isinstance(typed, str) or typed not in registry:
            raise ValueError(registry.unknown(str(typed)))
        return typed

    return BeforeValidator(check)


def key_or(registry: Registry[Any], other: Callable[[Any], Any], hint: str) -> Any:
    """Validator of a key as in `key_of`, or of another value that does not begin with a letter."""
    find = key_of(registry).func

    def check(typed: Any, info: ValidationInfo) -> Any:
        if not isinstance(typed, str) or not typed[:1].isalpha():
            is_record = hasattr(typed, "certainty")
            return typed if is_record else other(typed)
        try:
            return find(typed, info)
        except ValueError as error:
            raise ValueError(f"{error}; {hint}") from None

    return BeforeValidator(check)


def _tracer(typed: Any) -> str:
    if not isinstance(typed, str) or typed not in TRACERS:
        raise ValueError(f'tracer "{typed}" is not known; {nearest(str(typed), TRACERS)}')
    return str(typed)


TracerName = Annotated[str, BeforeValidator(_tracer)]
Distance = Annotated[
    Measured, _measured("Mpc", '"8.3 +- 0.4 Mpc"'), _between(0, math.inf, "a positive distance")
]
Inclination = Annotated[
    Measured, _measured("deg", '"41 +- 3 deg"'), _between(0, 90, "0 (face-on), or 0 to 90 deg")
]
Angle = Annotated[Measured, _measured("deg", '"128 +- 2 deg"')]
Magnitude = Annotated[Measured, _measured("mag", '"18.82 mag"')]
Wavelength = Annotated[
    Measured,
    _measured("um", '"1538.6 Angstrom" or "0.1539 um"'),
    _between(0, math.inf, "a positive wavelength"),
]
Ratio = Annotated[
    Measured, _measured("", '0.65 or "0.65 +- 0.08"'), _between(0, 10, "a ratio between 0 and 10")
]
StellarMass = Annotated[
    Measured, _measured("solMass", '"2e10 solMass"'), _between(0, math.inf, "a positive mass")
]
Offset = Annotated[Measured, _measured("dex", '"0.2 +- 0.1 dex"')]
FieldOverDensity = Annotated[
    Measured,
    _measured("", "0.01"),
    _between(0, math.inf, "a positive ratio of radiation field to density"),
]
Opacity = Annotated[Measured, _measured("", '1.1 or "1.1 +- 0.1"'), AfterValidator(_opacity)]
Speed = Annotated[Measured, _measured("km/s", '"640 km/s"')]
Percent = Annotated[Measured, BeforeValidator(parse_percent)]
Arcsec = Annotated[
    Measured, _measured("arcsec", '"4.1 arcmin"'), _between(0, math.inf, "a positive angle")
]

NO_ERROR: Final = Measured(0.0, 0.0, "0 %")

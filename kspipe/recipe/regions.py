"""Named regions of the galaxy: rings in the disc, ellipses on the sky, masks."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any, Final

from pydantic import BeforeValidator, model_validator

from kspipe.recipe.quantity import Position, parse_centre, parse_measured
from kspipe.recipe.values import Angle, Arcsec, Table
from kspipe.recipe.varying import RADIUS_UNITS

__all__ = ["Radius", "RegionTable", "radius_value"]

_EXAMPLE: Final = '"2 kpc", "0.3 r25", "1 r_e" or "40 arcsec"'


def radius_value(typed: str) -> tuple[float, str]:
    """Split ``2 kpc`` or ``0.3 r25`` into the number and one of `RADIUS_UNITS`.

    Raises
    ------
    ValueError
        If it is not a radius.
    """
    number, _, unit = typed.strip().partition(" ")
    unit = unit.strip()
    if unit in ("r25", "r_e"):
        return parse_measured(number, "", _EXAMPLE).value, unit
    for known in RADIUS_UNITS[:2]:
        try:
            return parse_measured(typed, known, _EXAMPLE).value, known
        except ValueError:
            continue
    raise ValueError(f"{typed!r} is not a radius; expected, for example, {_EXAMPLE}")


def _radius(typed: Any) -> str:
    if not isinstance(typed, str) or radius_value(typed)[0] < 0:
        raise ValueError(f"{typed!r} is not a radius; expected, for example, {_EXAMPLE}")
    return typed


Radius = Annotated[str, BeforeValidator(_radius)]

_SHAPES: Final = {
    "ring": ("inner", "outer"),
    "ellipse": ("centre", "semi_major", "semi_minor", "position_angle"),
    "mask": ("mask",),
}


class RegionTable(Table):
    """One region: a ring in the disc, an ellipse on the sky, or where a mask is not zero."""

    inner: Radius | None = None
    outer: Radius | None = None
    centre: Annotated[Position | None, BeforeValidator(parse_centre)] = None
    semi_major: Arcsec | None = None
    semi_minor: Arcsec | None = None
    position_angle: Angle | None = None
    mask: Path | None = None

    @property
    def shape(self) -> str:
        """``ring``, ``ellipse`` or ``mask``."""
        given = self.model_fields_set
        return next(name for name, keys in _SHAPES.items() if given & set(keys))

    @model_validator(mode="after")
    def _one_shape(self) -> RegionTable:
        given = {key for key in self.model_fields_set if getattr(self, key) is not None}
        shapes = [name for name, keys in _SHAPES.items() if given & set(keys)]
        if len(shapes) != 1:
            raise ValueError(
                'give one shape: outer = "2 kpc" (and inner), or semi_major, semi_minor and '
                'position_angle, or mask = "file.fits"'
            )
        if shapes == ["ellipse"] and None in (self.semi_major, self.semi_minor):
            raise ValueError("an ellipse needs semi_major and semi_minor")
        if self.semi_major and self.semi_minor and self.semi_minor.value > self.semi_major.value:
            raise ValueError(
                f"semi_minor {self.semi_minor} is longer than semi_major {self.semi_major}"
            )
        return self

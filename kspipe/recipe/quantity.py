"""Numbers with units and errors as one types them: ``8.3 +- 0.4 Mpc``."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, field
from typing import Any, Final

import astropy.units as u
from astropy.coordinates import SkyCoord

__all__ = ["Measured", "Position", "parse_centre", "parse_measured", "parse_percent"]

_NUMBER: Final = r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"
_MEASURED: Final = re.compile(
    rf"^\s*(?P<value>{_NUMBER})(?:\s*(?:\+-|\+/-|±)\s*(?P<error>{_NUMBER}))?\s*(?P<unit>.*?)\s*$"
)
_PERCENT: Final = re.compile(rf"^\s*(?P<value>{_NUMBER})\s*%\s*$")


@dataclass(frozen=True)
class Measured:
    """A value with its 1-sigma error, in a known unit.

    Attributes
    ----------
    value, error : float
        Error zero where none was typed.
    text : str
        As typed; two ways to type one value are equal.
    """

    value: float
    error: float
    text: str = field(compare=False)

    def __str__(self) -> str:
        return self.text


def parse_measured(typed: Any, unit: str, example: str) -> Measured:
    """Read ``8.3 +- 0.4 Mpc`` or a bare number where no unit is needed.

    Parameters
    ----------
    typed : object
        What stands in the recipe.
    unit : str
        Unit of the result; typed units are converted to it. Empty for a plain number.
    example : str
        For the message.

    Raises
    ------
    ValueError
        If it cannot be read or has another kind of unit.
    """
    if isinstance(typed, bool) or not isinstance(typed, (int, float, str)):
        raise ValueError(f"{typed!r} is not a number; expected, for example, {example}")
    match = _MEASURED.match(str(typed))
    if match is None:
        raise ValueError(f"{typed!r} cannot be read; expected, for example, {example}")
    value, error = float(match["value"]), float(match["error"] or 0.0)
    if not math.isfinite(value) or not math.isfinite(error) or error < 0:
        raise ValueError(f"{typed!r} is not finite or has a negative error")
    given = match["unit"]
    if bool(given) != bool(unit):
        missing = f"has no unit (expected {unit})" if unit else f"has the unit {given!r}"
        raise ValueError(f"{typed!r} {missing}; expected, for example, {example}")
    if not unit:
        return Measured(value, error, str(typed))
    try:
        factor = float(u.Unit(given).to(u.Unit(unit)))
    except (ValueError, u.UnitConversionError):
        raise ValueError(
            f"{typed!r} is not in a unit of the kind {unit}; expected, for example, {example}"
        ) from None
    return Measured(value * factor, error * factor, str(typed))


def parse_percent(typed: Any) -> Measured:
    """Read ``5 %`` as 0.05.

    Raises
    ------
    ValueError
        If there is no percent sign or the number is negative.
    """
    match = _PERCENT.match(typed) if isinstance(typed, str) else None
    value = float(match["value"]) / 100.0 if match else math.nan
    if not 0 <= value < math.inf:
        raise ValueError(f'{typed!r} is not a percentage; expected, for example, "5 %"')
    return Measured(value, 0.0, typed)


@dataclass(frozen=True)
class Position:
    """A position on the sky.

    Attributes
    ----------
    lon_deg, lat_deg : float
        ICRS.
    text : str
        As typed.
    """

    lon_deg: float
    lat_deg: float
    text: str

    @property
    def degrees(self) -> tuple[float, float]:
        """Longitude and latitude, ICRS."""
        return self.lon_deg, self.lat_deg

    def __str__(self) -> str:
        return self.text


def parse_centre(typed: Any) -> Position:
    """Read ``13h33m38.4s -21d46m12s`` or ``80.05 -69.30 deg`` as ICRS degrees.

    Raises
    ------
    ValueError
        If it cannot be read in exactly one way (a bare ``13 33 38`` could be hours or degrees).
    """
    expected = 'expected, for example, "03h12m24.0s -27d18m36s" or "48.100 -27.310 deg"'
    if not isinstance(typed, str):
        raise ValueError(f"{typed!r} is not a position; {expected}")
    in_degrees = re.match(rf"^\s*({_NUMBER})\s+({_NUMBER})\s+deg\s*$", typed)
    in_sexagesimal = re.search(r"\dh.*\d[ms]?.*\dd", typed)
    try:
        if in_degrees:
            sky = SkyCoord(float(in_degrees[1]), float(in_degrees[2]), unit="deg")
        else:
            sky = SkyCoord(typed if in_sexagesimal else "")
    except ValueError:
        raise ValueError(f"{typed!r} is not a position; {expected}") from None
    return Position(float(sky.ra.deg), float(sky.dec.deg), typed)

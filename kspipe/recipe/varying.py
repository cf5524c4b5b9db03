"""A quantity that may vary over the disc, as one types it.

One quantity, four ways: a number (``"0.65 +- 0.08"``); a map (``{map = "r21.fits", error =
"r21_err.fits"}``); a radial table, inline or in a file (``{radius = [0, 4], per = "kpc", value =
[0.8, 0.6]}`` or ``{table = "r21.csv", per = "kpc"}``); or a number for each named region
(``{regions = {bar = 0.8}, elsewhere = 0.6}``).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, Final, TypeAlias

import numpy as np
from numpy.typing import NDArray
from pydantic import BeforeValidator

from kspipe.core.errors import nearest
from kspipe.recipe.quantity import Measured, parse_measured

__all__ = [
    "RADIUS_UNITS",
    "ByRegion",
    "Kind",
    "OnMap",
    "Profile",
    "Varying",
    "constant_of",
    "files_of",
    "read_varying",
    "typed_as",
    "varying",
    "with_files",
]

Array = NDArray[np.float64]

# What a radius may count in; the last two need the galaxy's own lengths.
RADIUS_UNITS: Final = ("kpc", "arcsec", "r25", "r_e")


@dataclass(frozen=True)
class Kind:
    """What a quantity is, and which values of it are possible.

    Attributes
    ----------
    unit : str
        Empty for a pure number.
    example : str
        For messages.
    low, high : float
    what : str
        The possible values in words.
    from_low : bool
        Whether `low` itself is possible.
    """

    unit: str
    example: str
    low: float
    high: float
    what: str
    from_low: bool = False

    def number(self, typed: Any) -> Measured:
        """Read one number.

        Raises
        ------
        ValueError
            If it cannot be read or is not possible.
        """
        number = parse_measured(typed, self.unit, self.example)
        if not self.is_possible(number.value):
            raise ValueError(f"{number.text!r}: expected {self.what}")
        return number

    def is_possible(self, value: Array | float) -> NDArray[np.bool_]:
        """Where values lie between the bounds."""
        above = np.greater_equal(value, self.low) if self.from_low else np.greater(value, self.low)
        return np.asarray(above & np.less(value, self.high))


@dataclass(frozen=True)
class OnMap:
    """A map of the quantity.

    Attributes
    ----------
    kind : Kind
    map : Path
        FITS image in the quantity's unit; interpolated on the grid, not smoothed.
    error : Path or None
        Its random 1-sigma error.
    elsewhere : Measured or None
        Where the map is blank; None leaves blanks.
    """

    kind: Kind
    map: Path
    error: Path | None = None
    elsewhere: Measured | None = None


@dataclass(frozen=True)
class Profile:
    """A table against the radius in the disc, straight between its rows and level beyond them.

    Attributes
    ----------
    kind : Kind
    per : str
        Of `RADIUS_UNITS`; empty until the file was read.
    radius, value, error : tuple of float
        Rising radii; errors are all zero where none were given.
    table : Path or None
        The file that it was read from.
    columns : tuple of str
        Its columns for radius, value and error.
    """

    kind: Kind
    per: str
    radius: tuple[float, ...]
    value: tuple[float, ...]
    error: tuple[float, ...]
    table: Path | None = field(default=None, compare=False)
    columns: tuple[str, ...] = field(default=(), compare=False)


@dataclass(frozen=True)
class ByRegion:
    """A number for each named region of the recipe.

    Attributes
    ----------
    kind : Kind
    regions : mapping of str to Measured
        Names of ``[regions.NAME]``.
    elsewhere : Measured or None
        Outside all of them; None leaves blanks.
    """

    kind: Kind
    regions: Mapping[str, Measured]
    elsewhere: Measured | None = None


Varying: TypeAlias = Measured | OnMap | Profile | ByRegion

_FORMS: Final = {
    "map": ("map", "error", "elsewhere"),
    "table": ("table", "per", "columns"),
    "radius": ("radius", "per", "value", "error"),
    "regions": ("regions", "elsewhere"),
}


def varying(kind: Kind) -> Any:
    """Validator of a quantity that may vary."""
    return BeforeValidator(lambda typed: read_varying(typed, kind))


def read_varying(typed: Any, kind: Kind) -> Varying | None:
    """Read a quantity in any of its four ways; files are not opened.

    Raises
    ------
    ValueError
        If it is none of them, or one of its values is not possible.
    """
    if typed is None or isinstance(typed, Measured | OnMap | Profile | ByRegion):
        return typed
    if not isinstance(typed, dict):
        return kind.number(typed)
    form = next((name for name in _FORMS if name in typed), None)
    if form is None:
        raise ValueError(
            f"{sorted(typed)} is no way to give a quantity; expected a number such as "
            f"{kind.example}, {{map = ...}}, {{table = ...}}, {{radius = [...], per = ..., value "
            "= [...]} or {regions = {NAME = ...}}"
        )
    for key in typed:
        if key not in _FORMS[form]:
            raise ValueError(f'"{key}" does not go with {form}; {nearest(key, _FORMS[form])}')
    elsewhere = kind.number(typed["elsewhere"]) if "elsewhere" in typed else None
    if form == "map":
        error = typed.get("error")
        return OnMap(kind, _path(typed["map"]), error and _path(error), elsewhere)
    if form == "regions":
        return ByRegion(kind, _regions(typed["regions"], kind), elsewhere)
    if form == "table":
        columns = typed.get("columns", [])
        if not isinstance(columns, list) or (columns and len(columns) not in (2, 3)):
            raise ValueError(
                'columns names those of radius, value and perhaps error: ["R", "OH", "e_OH"]'
            )
        per = _radius_unit(typed["per"]) if "per" in typed else ""
        return Profile(kind, per, (), (), (), _path(typed["table"]), tuple(map(str, columns)))
    for key in ("per", "value"):
        if key not in typed:
            raise ValueError(f'a radial table needs {key}: {{radius = [0, 4], per = "kpc", ...}}')
    rows = [_numbers(typed[key], key) for key in ("radius", "value")]
    error_row = _numbers(typed["error"], "error") if "error" in typed else (0.0,) * len(rows[0])
    return _checked(Profile(kind, _radius_unit(typed["per"]), rows[0], rows[1], error_row))


def _path(typed: Any) -> Path:
    if not isinstance(typed, str | Path):
        raise ValueError(f"{typed!r} is not the name of a file")
    return Path(typed)


def _regions(typed: Any, kind: Kind) -> dict[str, Measured]:
    if not isinstance(typed, dict) or not typed:
        raise ValueError("regions needs names with numbers: {regions = {bar = 0.8}}")
    return {name: kind.number(value) for name, value in typed.items()}


def _radius_unit(typed: Any) -> str:
    if typed not in RADIUS_UNITS:
        raise ValueError(
            f'per = "{typed}" is no unit of a radius; {nearest(str(typed), RADIUS_UNITS)}'
        )
    return str(typed)


def _numbers(typed: Any, key: str) -> tuple[float, ...]:
    def is_number(entry: Any) -> bool:
        return isinstance(entry, int | float) and not isinstance(entry, bool)

    if not isinstance(typed, list) or not typed or not all(map(is_number, typed)):
        raise ValueError(f"{key} = {typed!r} is not a list of numbers")
    return tuple(float(entry) for entry in typed)


def _checked(profile: Profile) -> Profile:
    """Refuse rows that are no table."""
    rows = (profile.radius, profile.value, profile.error)
    if len({len(row) for row in rows}) != 1:
        counts = ", ".join(str(len(row)) for row in rows)
        raise ValueError(f"radius, value and error have {counts} entries; expected as many of each")
    if not np.all(np.isfinite(rows)):
        raise ValueError("a radius, value or error is not finite")
    if not np.all(np.diff(profile.radius) > 0) or profile.radius[0] < 0:
        raise ValueError(f"radius {list(profile.radius)} does not rise from zero or more")
    wrong = [value for value in profile.value if not profile.kind.is_possible(value)]
    if wrong:
        raise ValueError(f"{wrong[0]:g} in the table: expected {profile.kind.what}")
    if min(profile.error) < 0:
        raise ValueError(f"{min(profile.error):g} in the table is a negative error")
    return profile


def files_of(quantity: object) -> dict[str, Path]:
    """Files that a quantity is given by, by key; none where it is no file's."""
    if isinstance(quantity, OnMap):
        return {"map": quantity.map} | ({"error": quantity.error} if quantity.error else {})
    if isinstance(quantity, Profile) and quantity.table is not None:
        return {"table": quantity.table}
    return {}


def with_files(quantity: Varying, located: Mapping[str, Path]) -> Varying:
    """Put found files in the place of those typed, and read a table.

    Raises
    ------
    ValueError
        If a table cannot be read, or its values are not possible.
    """
    if isinstance(quantity, OnMap):
        return replace(quantity, map=located["map"], error=located.get("error"))
    if isinstance(quantity, Profile):
        return _read_table(replace(quantity, table=located["table"]))
    return quantity


def _read_table(profile: Profile) -> Profile:
    # Its import costs a third of a second, and few recipes need it.
    from astropy.table import Table as AstropyTable  # noqa: PLC0415

    path = profile.table
    is_ecsv = str(path).endswith(".ecsv")
    try:
        table = AstropyTable.read(path, format="ascii.ecsv" if is_ecsv else "ascii.csv")
    except Exception as error:  # astropy raises many kinds for text that is no table
        raise ValueError(f"{path} cannot be read as a table ({error})") from None
    names = profile.columns or ("radius", "value", "error")[: 3 if "error" in table.colnames else 2]
    absent = [name for name in names if name not in table.colnames]
    if absent:
        raise ValueError(
            f'{path} has the columns {table.colnames}, not "{absent[0]}"; type columns = '
            '["RADIUS", "VALUE"] (and the error)'
        )
    unit = str(table[names[0]].unit or "")
    per = profile.per or (unit if unit in RADIUS_UNITS else "")
    if not per:
        raise ValueError(f'{path} does not say what its radius counts in; type per = "kpc"')
    try:
        columns = [tuple(map(float, table[name])) for name in names]
    except (TypeError, ValueError) as error:
        raise ValueError(f"{path} holds something else than numbers ({error})") from None
    if not columns[0]:
        raise ValueError(f"{path} has no rows")
    error_column = columns[2] if len(columns) == 3 else (0.0,) * len(columns[0])
    try:
        return _checked(
            replace(profile, per=per, radius=columns[0], value=columns[1], error=error_column)
        )
    except ValueError as error:
        raise ValueError(f"{path}: {error}") from None


def constant_of(quantity: Varying | None) -> float | None:
    """The value of a quantity that is one number; None for any other."""
    return quantity.value if isinstance(quantity, Measured) else None


def typed_as(quantity: OnMap | Profile | ByRegion) -> dict[str, Any]:
    """What one types to have a quantity, as plain values."""
    if isinstance(quantity, OnMap):
        given: dict[str, Any] = {"map": quantity.map, "error": quantity.error}
    elif isinstance(quantity, Profile):
        has_error = any(error > 0 for error in quantity.error)
        return {
            "radius": list(quantity.radius),
            "per": quantity.per,
            "value": list(quantity.value),
            **({"error": list(quantity.error)} if has_error else {}),
        }
    else:
        given = {"regions": dict(quantity.regions)}
    given["elsewhere"] = quantity.elsewhere
    return {key: value for key, value in given.items() if value is not None}

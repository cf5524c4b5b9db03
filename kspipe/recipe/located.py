"""Files that a recipe names: found from its folder, tables read."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel

from kspipe.core.errors import Fault
from kspipe.recipe.varying import ByRegion, OnMap, Profile, files_of, with_files

__all__ = ["locate", "located", "region_faults"]

M = TypeVar("M", bound=BaseModel)


def locate(file: Path, folder: Path, where: str, faults: list[Fault]) -> Path:
    """Find a file from a folder; a fault is appended where there is none."""
    try:
        found = (folder / file.expanduser()).resolve()
        exists = found.is_file()
    except (OSError, RuntimeError, ValueError) as error:
        # No such user, a name that is too long, a zero byte.
        faults.append(Fault(where, f"{str(file)[:80]!r} is not a path ({error})"))
        return file
    if not exists:
        faults.append(
            Fault(where, f"{found} does not exist", "relative paths count from the recipe's folder")
        )
    return found


def located(table: M, folder: Path, where: str, faults: list[Fault]) -> M:
    """Find the files of all fields of a table that are paths or quantities given by a file.

    Parameters
    ----------
    table : pydantic model
        Changed in a copy.
    folder : Path
    where : str
        Its name in the recipe.
    faults : list of Fault
        Appended to.
    """
    changes = {}
    for key in type(table).model_fields:
        value = getattr(table, key)
        found = _found(value, folder, f"{where}.{key}", faults)
        if found is not value:
            changes[key] = found
    return table.model_copy(update=changes) if changes else table


def _found(value: Any, folder: Path, where: str, faults: list[Fault]) -> Any:
    if isinstance(value, Path):
        return locate(value, folder, where, faults)
    if isinstance(value, dict):
        found = {k: _found(v, folder, f"{where}.{k}", faults) for k, v in value.items()}
        return found if any(found[k] is not v for k, v in value.items()) else value
    files = files_of(value)
    if not files:
        return value
    before = len(faults)
    paths = {key: locate(file, folder, f"{where}.{key}", faults) for key, file in files.items()}
    if len(faults) > before:
        return value
    try:
        return with_files(value, paths)
    except ValueError as error:
        faults.append(Fault(where, str(error)))
        return value


def region_faults(tables: Mapping[str, Any]) -> list[Fault]:
    """Find quantities that name a region or count in a length that the recipe does not give."""
    galaxy, regions = tables["galaxy"], tables.get("regions", {})
    faults = []
    for where, quantity in _quantities(tables):
        if isinstance(quantity, ByRegion):
            absent = [name for name in quantity.regions if name not in regions]
            known = ", ".join(regions) or "none"
            faults += [
                Fault(
                    f"{where}.regions",
                    f'no region is called "{name}" (known: {known})',
                    f"type [regions.{name}]",
                )
                for name in absent
            ]
        if isinstance(quantity, Profile) and quantity.per in ("r25", "r_e"):
            faults += _length(galaxy, quantity.per, where)
    for name, region in regions.items():
        for key in ("inner", "outer"):
            unit = (getattr(region, key) or "").rpartition(" ")[2]
            if unit in ("r25", "r_e"):
                faults += _length(galaxy, unit, f"regions.{name}.{key}")
    return faults


def _length(galaxy: Any, unit: str, where: str) -> list[Fault]:
    if galaxy is None or getattr(galaxy, unit) is not None:
        return []
    return [
        Fault(
            where,
            f"counts in {unit}, which the recipe does not give",
            f'type {unit} = "... arcmin" in [galaxy]',
        )
    ]


def _quantities(tables: Mapping[str, Any]) -> list[tuple[str, OnMap | Profile | ByRegion]]:
    """All quantities that vary, with their full keys."""
    found: list[tuple[str, OnMap | Profile | ByRegion]] = []

    def look(value: Any, where: str) -> None:
        if isinstance(value, OnMap | Profile | ByRegion):
            found.append((where, value))
        elif isinstance(value, BaseModel):
            for key in type(value).model_fields:
                look(getattr(value, key), f"{where}.{key}")
        elif isinstance(value, dict):
            for key, entry in value.items():
                look(entry, f"{where}.{key}" if where else key)

    look(dict(tables), "")
    return found

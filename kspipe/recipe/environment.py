"""Named environments of a galaxy, and which numbers of a relation a fit may move."""

from __future__ import annotations

import math
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any

from pydantic import AfterValidator, BeforeValidator, Field

from kspipe.core.errors import Fault, nearest
from kspipe.recipe.values import Table
from kspipe.relations import LAWS

__all__ = ["Environment", "EnvironmentTable", "FreeWidth", "environment_faults", "locate_regions"]

# Numbers that may be free beside the parameters of a law.
FREE_NAMES = ("alpha_co_scale", "metallicity")

FreeWidth = Annotated[float, Field(gt=0.0, le=2.0)]


def radii(where: str) -> tuple[float, float] | None:
    """Read ``0 - 1.5 kpc``; None for the name of a region file.

    Raises
    ------
    ValueError
        If it ends in kpc and is not a range.
    """
    text, unit, rest = where.strip().rpartition("kpc")
    if not unit or rest:
        return None
    try:
        low, high = (float(part) for part in text.split("-"))
    except ValueError:
        low = high = math.nan
    if not 0 <= low < high:
        raise ValueError(f'{where!r} is not a range of radii; expected "0 - 1.5 kpc"')
    return low, high


def _where(typed: str) -> str:
    radii(typed)
    return typed


class EnvironmentTable(Table):
    """A part of the galaxy: between two radii, or in the regions of a file."""

    where: Annotated[str, AfterValidator(_where)]
    alpha_co_scale: float = Field(default=1.0, gt=0.0, le=100.0)

    @property
    def radii_kpc(self) -> tuple[float, float] | None:
        """Inner and outer radius; None for a file."""
        return radii(self.where)


def _environment(typed: Any) -> Any:
    return {"where": typed} if isinstance(typed, str) else typed


Environment = Annotated[EnvironmentTable, BeforeValidator(_environment)]


def locate_regions(
    environments: Mapping[str, EnvironmentTable], folder: Path, faults: list[Fault]
) -> dict[str, EnvironmentTable]:
    """Make the paths of region files absolute; files that are missing become faults."""
    out = {}
    for name, table in environments.items():
        if not name.isidentifier():
            faults.append(
                Fault(f"comparison.environments.{name}", "a name has letters, digits, _ only")
            )
        if table.radii_kpc is not None:
            out[name] = table
            continue
        path = (folder / Path(table.where).expanduser()).resolve()
        if not path.is_file():
            faults.append(
                Fault(
                    f"comparison.environments.{name}",
                    f"{path} does not exist",
                    'type a region file, or radii such as "0 - 1.5 kpc"',
                )
            )
        out[name] = table.model_copy(update={"where": str(path)})
    return out


def environment_faults(
    free: Mapping[str, Mapping[str, float]], relations: Mapping[str, Any]
) -> list[Fault]:
    """Free parameters of relations that are not in the recipe, or that a law does not have."""
    faults = []
    for name, widths in free.items():
        where = f"comparison.free.{name}"
        if name not in relations:
            faults.append(Fault(where, f'no relation is called "{name}"', nearest(name, relations)))
            continue
        law = LAWS.get(relations[name].law)
        known = {p.name for p in law.parameters if p.name != "anchor_oh"} | set(FREE_NAMES)
        if "oh" not in law.needs:
            known -= {"metallicity"}
        faults += [
            Fault(f"{where}.{key}", f'"{key}" cannot be free in {law.key}', nearest(key, known))
            for key in widths
            if key not in known
        ]
    return faults

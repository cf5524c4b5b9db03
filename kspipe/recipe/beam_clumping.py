"""``clumping = "beam"`` of a relation: the number that belongs to the final beam."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from kspipe.core.errors import Fault
from kspipe.recipe.models import GalaxyTable, GridTable, RelationTable
from kspipe.relations.inside_beam import clumping_of_beam

__all__ = ["with_beam_clumping"]

Check = Callable[[dict[str, Any], list[Fault]], dict[str, RelationTable]]
_WORD = "beam"


def with_beam_clumping(
    raw: Mapping[str, Any], tables: Mapping[str, Any], check: Check, faults: list[Fault]
) -> dict[str, RelationTable]:
    """Check relations after putting numbers where the clumping of the beam is asked for.

    Parameters
    ----------
    raw : mapping
        The whole recipe.
    tables : mapping
        Its checked ``galaxy`` and ``grid``; None where they are faulty.
    check : callable
        What checks the relations.
    faults : list of Fault
        Appended to: without a typed beam there is no number.

    Returns
    -------
    dict of str to RelationTable
        The number counts among the defaults, because nobody typed it.
    """
    relations = raw.get("relations")
    asked = [
        name
        for name, table in (relations.items() if isinstance(relations, dict) else ())
        if isinstance(table, dict) and table.get("clumping") == _WORD
    ]
    if not asked or not isinstance(relations, dict):
        return check(dict(raw), faults)
    number = _number(asked, tables["galaxy"], tables["grid"], faults)
    filled = {
        name: {**table, "clumping": number} if name in asked else table
        for name, table in relations.items()
    }
    checked = check({**raw, "relations": filled}, faults)
    return {
        name: table.model_copy(update={"defaults": (*table.defaults, "clumping")})
        if name in asked
        else table
        for name, table in checked.items()
    }


def _number(asked: list[str], galaxy: object, grid: object, faults: list[Fault]) -> float:
    """Clumping of the final beam; 1 stands in where a fault was found."""
    if not isinstance(galaxy, GalaxyTable) or not isinstance(grid, GridTable):
        return 1.0
    fwhm = grid.fwhm_arcsec(galaxy.pc_per_arcsec)
    if fwhm is None:
        faults += [
            Fault(
                f"relations.{name}.clumping",
                'grid.beam = "common" is known only when the maps are read',
                'type a number (1 below 100 pc, 5 near 1 kpc), or grid.beam = "15 arcsec"',
            )
            for name in asked
        ]
        return 1.0
    return float(clumping_of_beam(fwhm * galaxy.pc_per_arcsec))

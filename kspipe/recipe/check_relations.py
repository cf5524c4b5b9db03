"""What relations ask of the rest of a recipe."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from kspipe.core.errors import Fault
from kspipe.recipe.disc_tables import MidplaneTable
from kspipe.recipe.models import GasTable, RelationTable
from kspipe.relations import LAW_INPUTS, LAWS

__all__ = ["given_inputs", "rate_choice_faults", "relation_faults"]


def given_inputs(tables: Mapping[str, Any]) -> set[str]:
    """Names of the inputs that a recipe provides; tables that are faulty count as given."""
    given = {"sigma_gas", "oh"}
    if isinstance(tables["gas"], GasTable) or tables["gas"] is None:
        given.add("sigma_mol")
    for table, names in (
        ("stars", ("sigma_star",)),
        ("midplane", ("rho_sd",)),
        ("radiation_field", ("g0",)),
        ("rotation", ("omega", "beta")),
    ):
        if table in tables:
            given |= set(names)
    return given


def relation_faults(tables: Mapping[str, Any]) -> list[Fault]:
    """Inputs that a relation needs and the recipe does not give, with relations that do without."""
    given = given_inputs(tables)
    able = [law.key for law in LAWS if set(law.needs) <= given]
    faults = []
    for name, table in tables["relations"].items():
        if not isinstance(table, RelationTable):
            continue
        faults += [
            Fault(
                f"relations.{name}.law",
                f'"{table.law}" needs the {LAW_INPUTS[need].sentence}, which the recipe does not '
                "give",
                f"{LAW_INPUTS[need].do}; relations that do without: {', '.join(sorted(able))}",
            )
            for need in LAWS.get(table.law).needs
            if need not in given
        ]
    midplane = tables.get("midplane")
    if isinstance(midplane, MidplaneTable) and midplane.density is None and "stars" not in tables:
        faults.append(
            Fault(
                "midplane.scale_height",
                "the density of stars needs their surface density, which the recipe does not give",
                f'{LAW_INPUTS["sigma_star"].do}; or type density = "0.05 Msun/pc3" instead',
            )
        )
    return faults


def rate_choice_faults(where: str, key: str, given: Mapping[str, object]) -> list[Fault]:
    """A relation that gives a fraction needs one way from molecular gas to stars."""
    law = LAWS.get(key)
    typed = [name for name in law.one_of if name in given]
    if not law.one_of or len(typed) == 1:
        return []
    meanings = "; ".join(f"{p.name}: {p.meaning}" for p in law.parameters if p.name in law.one_of)
    seen = f"both {' and '.join(typed)} are given" if typed else "the star formation is not chosen"
    return [
        Fault(
            f"{where}.{law.one_of[0]}",
            f'"{key}" predicts a molecular fraction; {seen}',
            f"type one of {' = ..., '.join(law.one_of)} = ... ({meanings})",
        )
    ]

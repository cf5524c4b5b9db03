"""Finished maps: which conventions each must state, and what is given twice."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Final

from kspipe.core.errors import Fault
from kspipe.core.tracers import CO_LINES
from kspipe.recipe.map_table import MapTable
from kspipe.recipe.models import GasTable

__all__ = ["dust_faults", "finished_faults", "given_twice_faults"]

# What each finished map says of itself.
_STATES: Final = {
    "Sigma_HI": ("inclination", "helium"),
    "Sigma_mol": ("inclination", "helium"),
    "Sigma_star": ("inclination", "imf"),
    "Sigma_SFR": ("inclination", "imf"),
    "Sigma_dust": ("inclination",),
}
_TYPE: Final = {
    "inclination": '"face-on" where it was multiplied by cos i, "sky" where it was not',
    "helium": "1.36 where it includes helium, 1.0 where it is hydrogen only",
    "imf": '"Kroupa", "Salpeter" or "Chabrier"',
}


def finished_faults(name: str, table: MapTable) -> list[Fault]:
    """A finished map that does not say its conventions, and another map that does."""
    states = _STATES.get(table.tracer, ())
    faults = []
    for key, values in _TYPE.items():
        given = getattr(table, key) is not None
        where = f"maps.{name}.{key}"
        if key in states and not given:
            faults.append(
                Fault(where, f"a finished map of {table.tracer} says its {key}", f"type {values}")
            )
        elif given and key not in states:
            faults.append(Fault(where, f"does not belong to a map of {table.tracer}"))
    return faults


def dust_faults(gas: GasTable, tracers: Mapping[str, str]) -> list[Fault]:
    """Gas of dust without dust, or with what belongs to CO."""
    faults = []
    if "Sigma_dust" not in tracers:
        faults.append(
            Fault(
                "gas.gas_to_dust",
                f'"{gas.gas_to_dust}" needs a map of Sigma_dust, which the recipe does not list',
                "add it, or type alpha_co in place of gas_to_dust",
            )
        )
    faults += [
        Fault(f"gas.{key}", "belongs to CO, and the gas is that of dust", "remove the key")
        for key in ("line_ratio", "ms_offset", "g0_over_n")
        if getattr(gas, key) is not None
    ]
    return faults


def given_twice_faults(tracers: Mapping[str, str]) -> list[Fault]:
    """One product from two maps; `tracers` holds the names of maps by tracer."""
    return [
        Fault("maps", f"{first} and {second} are both there: one of them is the gas", "remove one")
        for first, second in (("HI", "Sigma_HI"), *((line, "Sigma_mol") for line in CO_LINES))
        if first in tracers and second in tracers
    ]

"""What ties the values of a recipe together."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping
from typing import Any, Final

from kspipe.conversions import LINE_RATIO, LineRatio
from kspipe.core.errors import Fault, nearest
from kspipe.core.tracers import CO_LINES
from kspipe.recipe.check_finished import dust_faults, given_twice_faults
from kspipe.recipe.check_records import (
    alpha_co_faults,
    convention_faults,
    line_ratio_faults,
    listed,
    metallicity_faults,
    stars_faults,
)
from kspipe.recipe.check_relations import rate_choice_faults, relation_faults
from kspipe.recipe.check_star_formation import map_extra_faults, star_formation_faults
from kspipe.recipe.gas_state import gas_state_faults
from kspipe.recipe.located import region_faults
from kspipe.recipe.map_table import MapTable
from kspipe.recipe.models import (
    GalaxyTable,
    GasTable,
    MetallicityTable,
    RelationTable,
    StarFormationTable,
    StarsTable,
)
from kspipe.relations import LAWS

__all__ = ["MOST_INCLINED_DEG", "check_relation", "check_together"]

# Above this the radius and the column of a pixel are smeared along the line of sight, so that a
# prediction pixel by pixel means nothing (common practice).
MOST_INCLINED_DEG: Final = 75.0


def check_together(tables: Mapping[str, Any]) -> list[Fault]:
    """Find the faults between tables; tables that are faulty themselves (None) are passed over."""
    maps = {name: table for name, table in tables["maps"].items() if table is not None}
    some_map_is_faulty = len(maps) < len(tables["maps"])
    faults = _duplicates(maps)
    faults += _gas_faults(tables["gas"], maps, complete=not some_map_is_faulty)
    if isinstance(tables["gas"], GasTable):
        faults += alpha_co_faults(tables["gas"], has_stars=_has_stars(tables, maps))
    if isinstance(tables.get("stars"), StarsTable):
        faults += stars_faults(tables["stars"], tables["maps"])
        if any(table.tracer == "Sigma_star" for table in maps.values()):
            faults.append(Fault("stars", "a map of Sigma_star is there, too", "remove one"))
    faults += relation_faults(tables)
    faults += map_extra_faults(maps, tables["galaxy"])
    faults += gas_state_faults(tables)
    if isinstance(tables["star_formation"], StarFormationTable):
        faults += star_formation_faults(tables["star_formation"], tables["maps"])
        faults += convention_faults(
            tables["star_formation"], tables["foreground"], tables["relations"]
        )
    faults += region_faults(tables)
    galaxy, metallicity = tables["galaxy"], tables["metallicity"]
    if isinstance(galaxy, GalaxyTable):
        if isinstance(metallicity, MetallicityTable):
            faults += metallicity_faults(metallicity, galaxy)
        if galaxy.inclination.value > MOST_INCLINED_DEG and tables["relations"]:
            faults.append(
                Fault(
                    "galaxy.inclination",
                    f"{galaxy.inclination.text} is above {MOST_INCLINED_DEG:g} deg: relations "
                    "pixel by pixel are refused, the line of sight crosses the whole disc",
                    "remove [relations] to make surface densities only",
                )
            )
    return faults


def _has_stars(tables: Mapping[str, Any], maps: Mapping[str, MapTable]) -> bool:
    return "stars" in tables or any(table.tracer == "Sigma_star" for table in maps.values())


def _duplicates(maps: Mapping[str, MapTable]) -> list[Fault]:
    counts = Counter(table.tracer for table in maps.values())
    return [
        Fault(
            f"maps.{name}.tracer",
            f"{table.tracer} is the tracer of {counts[table.tracer]} maps",
            "keep one map per tracer",
        )
        for name, table in maps.items()
        if counts[table.tracer] > 1
    ]


def _gas_faults(gas: object, maps: Mapping[str, MapTable], *, complete: bool) -> list[Fault]:
    faults = []
    tracers = {table.tracer: name for name, table in maps.items()}
    lines = [line for line in CO_LINES if line in tracers]
    if complete and not {"HI", "Sigma_HI"} & set(tracers):
        faults.append(
            Fault("maps", "no map of HI, which the atomic gas needs", 'add one with tracer = "HI"')
        )
    faults += given_twice_faults(tracers)
    if complete and gas == "finished map" and "Sigma_mol" not in tracers:
        faults.append(
            Fault("gas", '"finished map", but no map is one of Sigma_mol', "add it, or type [gas]")
        )
    if len(lines) > 1:
        faults.append(
            Fault("maps", f"maps of {' and '.join(lines)}: the molecular gas takes one CO line")
        )
    if isinstance(gas, str) and lines:
        faults.append(
            Fault(
                "gas",
                f'"{gas}", but maps.{tracers[lines[0]]} is {lines[0]}',
                "type a table [gas] with alpha_co, or remove that map",
            )
        )
    if isinstance(gas, GasTable) and gas.gas_to_dust is not None:
        return faults + dust_faults(gas, tracers)
    if isinstance(gas, GasTable):
        if complete and not lines:
            faults.append(
                Fault(
                    "gas.alpha_co",
                    "the recipe lists no CO map",
                    'add one, or type gas = "atomic only" in place of [gas]',
                )
            )
        if lines and lines[0] != "CO(1-0)" and gas.line_ratio is None:
            faults.append(
                Fault(
                    "gas.line_ratio",
                    f"{lines[0]} needs its ratio to CO(1-0)",
                    "type line_ratio, for example 0.65 for CO(2-1) (Leroy et al. 2022: 0.50-0.83), "
                    f"or the key of a record: {listed(LINE_RATIO.keys())}",
                )
            )
        if lines and isinstance(gas.line_ratio, str | LineRatio):
            faults += line_ratio_faults(lines[0], gas.line_ratio)
        elif lines and lines[0] == "CO(1-0)" and gas.line_ratio is not None:
            faults.append(Fault("gas.line_ratio", "CO(1-0) takes no line ratio", "remove the key"))
    return faults


def check_relation(name: str, raw: object, faults: list[Fault]) -> RelationTable | None:
    """Check one ``[relations.NAME]`` against what its law declares."""
    where = f"relations.{name}"
    if not name.isidentifier():
        faults.append(
            Fault(where, "the name becomes a file name and a column: letters, digits, _ only")
        )
        return None
    if not isinstance(raw, dict) or "law" not in raw:
        faults.append(
            Fault(f"{where}.law", "the key is missing", f"known: {', '.join(LAWS.keys())}")
        )
        return None
    if not isinstance(raw["law"], str) or raw["law"] not in LAWS:
        faults.append(Fault(f"{where}.law", LAWS.unknown(str(raw["law"]))))
        return None
    law = LAWS.get(raw["law"])
    known = {parameter.name: parameter for parameter in law.parameters}
    before = len(faults)
    for key, value in raw.items():
        if key == "law":
            continue
        if key not in known:
            faults.append(
                Fault(
                    f"{where}.{key}", f'"{law.key}" has no parameter "{key}"', nearest(key, known)
                )
            )
            continue
        low, high = known[key].low, known[key].high
        is_number = isinstance(value, (int, float)) and not isinstance(value, bool)
        if not is_number or not math.isfinite(value) or not low <= value <= high:
            faults.append(
                Fault(f"{where}.{key}", f"{value!r} is not a number between {low:g} and {high:g}")
            )
    for key, parameter in known.items():
        if key not in raw and parameter.default is None and key not in law.one_of:
            faults.append(
                Fault(
                    f"{where}.{key}",
                    f"the key is missing: {parameter.meaning}",
                    f"type {key} = ...",
                )
            )
    faults += rate_choice_faults(where, law.key, raw)
    if len(faults) > before:
        return None
    given = {key: float(value) for key, value in raw.items() if key != "law"}
    defaults = tuple(key for key in known if key not in given)
    return RelationTable(law=law.key, parameters=law.filled(given), defaults=defaults)

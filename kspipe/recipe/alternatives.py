"""Recipes that differ from one in a single record, as far as its maps and numbers allow."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

from kspipe.conversions import (
    ALPHA_CO,
    EXTINCTION,
    GAS_TO_DUST,
    LINE_RATIO,
    STAR_FORMATION,
    STARS,
    STRONG_LINES,
    Record,
    StarFormation,
)
from kspipe.core.tracers import CO_LINES
from kspipe.recipe.check_records import alpha_co_faults, line_ratio_faults
from kspipe.recipe.models import GasTable, Recipe

__all__ = ["Alternative", "alternatives_of"]


@dataclass(frozen=True)
class Alternative:
    """One record in the place of the recipe's.

    Attributes
    ----------
    family : str
        What it is an alternative for; ``extinction.FUV`` by band.
    record : Record
    recipe : Recipe
        With this record; the same recipe where it is the one used.
    product : str
        The surface density that it changes.
    is_used : bool
    """

    family: str
    record: Record
    recipe: Recipe
    product: str
    is_used: bool


def alternatives_of(recipe: Recipe) -> Iterator[Alternative]:
    """Every record that the maps and numbers of a recipe allow, family by family.

    A family is there if its record is used and one other can be; what a recipe gives as numbers
    or maps of its own has no alternatives.
    """
    for family in (
        _alpha_co,
        _gas_to_dust,
        _line_ratio,
        _star_formation,
        _extinction,
        _stars,
        _strong_lines,
    ):
        by_name: dict[str, list[Alternative]] = {}
        for found in family(recipe):
            by_name.setdefault(found.family, []).append(found)
        for group in by_name.values():
            if len(group) > 1:
                yield from group


def _changed(recipe: Recipe, table: str, **changes: Any) -> Recipe:
    """Copy a recipe with another value in one of its tables."""
    return recipe.model_copy(
        update={table: getattr(recipe, table).model_copy(update=changes)}, deep=False
    )


def _own(recipe: Recipe, used: Any) -> list[Any]:
    """The user's own record, where it is the one used."""
    return [used] if isinstance(used, Record) and recipe.records else []


def _alpha_co(recipe: Recipe) -> Iterator[Alternative]:
    gas = recipe.gas
    if not isinstance(gas, GasTable) or gas.alpha_co is None:
        return
    has_stars = recipe.stars is not None or recipe.map_of("Sigma_star") is not None
    used = gas.alpha_co
    for record in [*_own(recipe, used), *ALPHA_CO]:
        key = record if record is used else record.key
        other = gas.model_copy(update={"alpha_co": key})
        faults = alpha_co_faults(other, has_stars=has_stars)
        if not any(fault.where == "gas.alpha_co" for fault in faults):
            changed = _changed(recipe, "gas", alpha_co=key)
            yield Alternative("alpha_co", record, changed, "sigma_mol", key == used)


def _gas_to_dust(recipe: Recipe) -> Iterator[Alternative]:
    gas = recipe.gas
    if isinstance(gas, GasTable) and gas.gas_to_dust is not None:
        for record in GAS_TO_DUST:
            changed = _changed(recipe, "gas", gas_to_dust=record.key)
            is_used = record.key == gas.gas_to_dust
            yield Alternative("gas_to_dust", record, changed, "sigma_mol", is_used)


def _line_ratio(recipe: Recipe) -> Iterator[Alternative]:
    gas, line = recipe.gas, recipe.map_of(*CO_LINES)
    if not isinstance(gas, GasTable) or gas.alpha_co is None or line is None:
        return
    tracer = recipe.maps[line].tracer
    used: Any = gas.line_ratio
    for record in [*_own(recipe, used), *LINE_RATIO]:
        key = record if record is used else record.key
        if tracer != "CO(1-0)" and not line_ratio_faults(tracer, key):
            changed = _changed(recipe, "gas", line_ratio=key)
            yield Alternative("line_ratio", record, changed, "sigma_mol", key == used)


def _star_formation(recipe: Recipe) -> Iterator[Alternative]:
    used = recipe.star_formation.calibration
    for record in [*_own(recipe, used), *STAR_FORMATION]:
        key = record if record is used else record.key
        maps = recipe.star_formation.maps if key == used else _maps_for(recipe, record)
        if maps is not None:
            changed = _changed(recipe, "star_formation", calibration=key, maps=maps)
            yield Alternative("star_formation", record, changed, "sigma_sfr", key == used)


def _maps_for(recipe: Recipe, record: StarFormation) -> tuple[str, ...] | None:
    """Maps that a calibration takes, by name; None where one is missing or has no extinction."""
    found = []
    for tracer in record.tracers:
        name = recipe.map_of(tracer)
        if name is None and tracer == "24um":
            name = recipe.map_of("22um")
            if name is not None and recipe.maps[name].as_24um is None:
                return None
        band = {"FUV": "uv", "NUV": "uv", "Halpha": "halpha"}.get(tracer)
        if name is None:
            return None
        if band and tracer not in EXTINCTION.get(getattr(recipe.foreground, band)).coefficients:
            return None
        found.append(name)
    return tuple(found)


def _extinction(recipe: Recipe) -> Iterator[Alternative]:
    tracers = STAR_FORMATION.get(recipe.star_formation.calibration).tracers
    for key, bands in (("uv", {"FUV", "NUV"}), ("halpha", {"Halpha"})):
        needed = bands & set(tracers)
        for record in EXTINCTION:
            if needed and needed <= set(record.coefficients):
                changed = _changed(recipe, "foreground", **{key: record.key})
                yield Alternative(
                    f"extinction.{key}",
                    record,
                    changed,
                    "sigma_sfr",
                    record.key == getattr(recipe.foreground, key),
                )


def _stars(recipe: Recipe) -> Iterator[Alternative]:
    if recipe.stars is None:
        return
    for record in STARS:
        if record.tracer == recipe.maps[recipe.stars.map].tracer:
            changed = _changed(recipe, "stars", record=record.key)
            yield Alternative(
                "stars", record, changed, "sigma_star", record.key == recipe.stars.record
            )


def _strong_lines(recipe: Recipe) -> Iterator[Alternative]:
    table = recipe.metallicity
    if table.calibration is None or table.lines is None or not recipe.has_molecular:
        return
    for record in [*_own(recipe, table.calibration), *STRONG_LINES]:
        if set(record.needs) <= set(table.lines):
            key = record if record is table.calibration else record.key
            lines = {name: table.lines[name] for name in record.needs}
            changed = _changed(recipe, "metallicity", calibration=key, lines=lines)
            yield Alternative(
                "strong_lines", record, changed, "sigma_mol", key == table.calibration
            )


_FAMILIES = (
    _alpha_co,
    _gas_to_dust,
    _line_ratio,
    _star_formation,
    _extinction,
    _stars,
    _strong_lines,
)

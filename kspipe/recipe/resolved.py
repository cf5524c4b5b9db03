"""A recipe with nothing left unsaid: every default filled in, each with its origin."""

from __future__ import annotations

import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from pydantic import BaseModel

from kspipe.conversions import Record
from kspipe.recipe.map_table import Filter, MapTable
from kspipe.recipe.models import Recipe
from kspipe.recipe.quantity import Measured, Position
from kspipe.recipe.varying import ByRegion, OnMap, Profile, typed_as

__all__ = ["resolved_recipe"]


def resolved_recipe(recipe: Recipe, found: Mapping[str, Mapping[str, str]]) -> str:
    """Write a recipe out as TOML, with absolute paths and all defaults.

    Parameters
    ----------
    recipe : Recipe
    found : mapping of str to mapping of str to str
        By map, what its header said: written as comments.

    Returns
    -------
    str
        TOML that gives identical numbers when it is run.
    """
    lines = [
        "# Resolved recipe: values without a comment were typed, the others say their origin.",
        f"seed = {recipe.seed}",
    ]
    if isinstance(recipe.gas, str):
        lines.append(f"gas = {_value(recipe.gas)}")
    for name in ("galaxy", "grid"):
        lines += _table(name, getattr(recipe, name))
    for name, table in recipe.maps.items():
        lines += _map(name, table, found.get(name, {}))
    tables = ["metallicity", "foreground", "star_formation", "comparison"]
    if not isinstance(recipe.gas, str):
        tables.insert(2, "gas")
    if recipe.stars is not None:
        tables.insert(-1, "stars")
    optional = (
        "midplane",
        "radiation_field",
        "rotation",
        "gas_state",
        "inside_beam",
        "systematics",
    )
    tables += [name for name in optional if getattr(recipe, name) is not None]
    for name in tables:
        lines += _table(name, getattr(recipe, name))
    for family, group in (("regions", recipe.regions), ("records", recipe.records)):
        for name, own in group.items():
            lines += _table(f"{family}.{name}", own)
    for name, relation in recipe.relations.items():
        lines += ["", f"[relations.{name}]", f"law = {_value(relation.law)}"]
        lines += [
            f"{key} = {_value(value)}" + ("  # default" if key in relation.defaults else "")
            for key, value in relation.parameters.items()
        ]
    return "\n".join(lines) + "\n"


def _table(name: str, table: BaseModel) -> list[str]:
    lines = ["", f"[{name}]"]
    for key in type(table).model_fields:
        value = getattr(table, key)
        if value is not None and value != {}:
            origin = "" if key in table.model_fields_set else "  # default"
            lines.append(f"{key} = {_value(value)}{origin}")
    return lines


def _map(name: str, table: MapTable, found: Mapping[str, str]) -> list[str]:
    request = table.request(name)
    lines = _table(f"maps.{name}", table)
    if table.averages_pixels is None:
        averages = str(request.averages_pixels).lower()
        lines.append(f"averages_pixels = {averages}  # default for {table.tracer}")
    for key in ("unit", "beam"):
        if getattr(table, key) is None and key in found:
            lines.append(f"# {key}: {found[key]}")
    lines.append(f"# noise correlated like: {request.noise.correlated}")
    return lines


def _key(key: str) -> str:
    return key if key.isidentifier() else _value(key)


def _value(value: Any) -> str:
    """Write one value in TOML."""
    if isinstance(value, Measured | Position):
        try:
            return repr(float(value.text))
        except ValueError:
            return _value(value.text)
    if isinstance(value, OnMap | Profile | ByRegion | Filter):
        plain = {"filter": value.text} if isinstance(value, Filter) else typed_as(value)
        return _value(plain)
    if isinstance(value, Mapping):
        pairs = [f"{_key(key)} = {_value(entry)}" for key, entry in value.items()]
        return "{" + ", ".join(pairs) + "}"
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, int | float):
        return repr(value)
    if isinstance(value, str | Path | Record):
        # A JSON string is a TOML basic string.
        text = value.key if isinstance(value, Record) else str(value)
        return json.dumps(text, ensure_ascii=False)
    if isinstance(value, Mapping):
        pairs = [f"{key} = {_value(entry)}" for key, entry in value.items()]
        return "{" + ", ".join(pairs) + "}"
    if isinstance(value, BaseModel):
        pairs = [
            f"{field.alias or key} = {_value(getattr(value, key))}"
            for key, field in type(value).model_fields.items()
            if getattr(value, key) is not None
        ]
        return "{" + ", ".join(pairs) + "}"
    if isinstance(value, tuple) and len(value) == 3 and isinstance(value[0], float):
        major, minor, pa = value
        if major == minor:
            return _value(f"{major!r} arcsec")
        return _value(f"{major!r} x {minor!r} arcsec, pa {pa!r} deg")
    if isinstance(value, tuple) and len(value) == 2 and isinstance(value[0], float):
        east, north = value
        return _value(f"{east!r} {north!r} arcsec")
    return "[" + ", ".join(_value(entry) for entry in value) + "]"

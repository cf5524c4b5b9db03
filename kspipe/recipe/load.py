"""From TOML text to a `Recipe`, or to every fault at once."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any, Final, TypeVar

from pydantic import BaseModel, ValidationError

from kspipe.conversions import Record
from kspipe.conversions.shelf import FAMILIES
from kspipe.core.errors import Fault, RecipeError, nearest
from kspipe.recipe.beam_clumping import with_beam_clumping
from kspipe.recipe.checks import check_relation, check_together
from kspipe.recipe.disc_tables import MidplaneTable, RadiationFieldTable, RotationTable
from kspipe.recipe.environment import environment_faults, locate_regions
from kspipe.recipe.gas_state import GasStateTable, InsideBeamTable, LinewidthMap
from kspipe.recipe.located import locate, located
from kspipe.recipe.map_table import MapTable, NoiseFile, NoiseTyped
from kspipe.recipe.models import (
    ComparisonTable,
    ForegroundTable,
    GalaxyTable,
    GasTable,
    GridTable,
    MetallicityTable,
    Recipe,
    RelationTable,
    StarFormationTable,
    StarsTable,
    SystematicsTable,
)
from kspipe.recipe.own_records import RecordTable
from kspipe.recipe.regions import RegionTable

__all__ = ["load_recipe", "parse_recipe"]

M = TypeVar("M", bound=BaseModel)

_TABLES: Final[dict[str, type[BaseModel]]] = {
    "galaxy": GalaxyTable,
    "grid": GridTable,
    "metallicity": MetallicityTable,
    "foreground": ForegroundTable,
    "star_formation": StarFormationTable,
    "stars": StarsTable,
    "comparison": ComparisonTable,
    "midplane": MidplaneTable,
    "radiation_field": RadiationFieldTable,
    "rotation": RotationTable,
    "inside_beam": InsideBeamTable,
    "systematics": SystematicsTable,
}
_OPTIONAL: Final = (
    "relations",
    "comparison",
    "stars",
    "midplane",
    "radiation_field",
    "rotation",
    "inside_beam",
    "systematics",
)
_TOP: Final = ("seed", "maps", "gas", "relations", "records", "regions", "gas_state", *_TABLES)


def load_recipe(path: str | Path, *, in_memory: frozenset[str] = frozenset()) -> Recipe:
    """Read and check a recipe.

    Parameters
    ----------
    path : str or Path
        A TOML file; relative paths in it are relative to its folder.
    in_memory : set of str
        Maps whose files need not exist, because they are handed over in memory.

    Returns
    -------
    Recipe

    Raises
    ------
    RecipeError
        With every fault found, each with its full key. No map was opened.
    """
    path = Path(path)
    try:
        raw = tomllib.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise RecipeError(Fault(str(path), "the recipe does not exist")) from None
    except (OSError, UnicodeDecodeError) as error:
        raise RecipeError(Fault(str(path), f"the recipe cannot be read ({error})")) from None
    except tomllib.TOMLDecodeError as error:
        twice = "Cannot overwrite" in str(error) or "Cannot declare" in str(error)
        do = "a key or table stands there for the second time: keep one" if twice else ""
        raise RecipeError(Fault(str(path), f"not valid TOML: {error}", do)) from None
    resolved = path.resolve()
    return parse_recipe(raw, folder=resolved.parent, path=resolved, in_memory=in_memory)


def parse_recipe(
    raw: dict[str, Any],
    *,
    folder: Path | None = None,
    path: Path | None = None,
    in_memory: frozenset[str] = frozenset(),
) -> Recipe:
    """Check a recipe given as nested dictionaries.

    Parameters
    ----------
    raw : dict
        As TOML gives it.
    folder : Path, optional
        Relative paths are relative to it; the current folder by default.
    path : Path, optional
        Remembered in the recipe.
    in_memory : set of str
        Maps whose files need not exist, because they are handed over in memory.

    Raises
    ------
    RecipeError
        With every fault found.
    """
    folder = folder or Path.cwd()
    faults: list[Fault] = [
        Fault(key, f'"{key}" is not a key of a recipe', nearest(key, _TOP))
        for key in raw
        if key not in _TOP
    ]
    records = _named(RecordTable, raw.get("records", {}), "records", faults)
    regions = _named(RegionTable, raw.get("regions", {}), "regions", faults)
    context = {"records": _own(records, faults)}
    tables: dict[str, Any] = {
        name: _table(model, raw.get(name), name, faults, context)
        for name, model in _TABLES.items()
        if name in raw or name not in _OPTIONAL
    }
    tables["seed"] = _seed(raw, faults)
    tables["gas"] = _gas(raw, faults, context)
    tables["maps"] = _maps(raw, folder, in_memory, faults)
    tables["relations"] = with_beam_clumping(raw, tables, _relations, faults)
    if "gas_state" in raw:
        tables["gas_state"] = _gas_state(raw["gas_state"], folder, faults)
    for name in ("metallicity", "foreground", "gas", "stars", "star_formation", "radiation_field"):
        if isinstance(tables.get(name), BaseModel):
            tables[name] = located(tables[name], folder, name, faults)
    tables["records"] = records
    tables["regions"] = {
        name: located(table, folder, f"regions.{name}", faults) for name, table in regions.items()
    }
    grid = tables["grid"]
    if isinstance(grid, GridTable) and grid.like is not None and grid.like not in tables["maps"]:
        like = locate(Path(grid.like), folder, "grid.like", faults)
        tables["grid"] = grid.model_copy(update={"like": str(like)})
    comparison = tables.get("comparison")
    if isinstance(comparison, ComparisonTable):
        places = locate_regions(comparison.environments, folder, faults)
        tables["comparison"] = comparison.model_copy(update={"environments": places})
        faults += environment_faults(comparison.free, tables["relations"])
    faults += check_together(tables)
    if faults:
        raise RecipeError(*faults)
    return Recipe(path=path, **tables)


def _fields(model: type[BaseModel]) -> list[str]:
    return [field.alias or name for name, field in model.model_fields.items()]


def _named(model: type[M], raw: object, where: str, faults: list[Fault]) -> dict[str, M]:
    """Check tables that the user names."""
    if not isinstance(raw, dict):
        faults.append(Fault(where, f"{raw!r} is not a table", f"type [{where}.NAME]"))
        return {}
    checked = {}
    for name, table in raw.items():
        if not name.isidentifier():
            faults.append(Fault(f"{where}.{name}", "a name is made of letters, digits and _"))
            continue
        found = _table(model, table, f"{where}.{name}", faults)
        if found is not None:
            checked[name] = found
    return checked


def _own(tables: Mapping[str, RecordTable], faults: list[Fault]) -> dict[str, Record]:
    """Make the user's own records; no key means two things."""
    records = {}
    published = {key for family in FAMILIES.values() for key in family.keys()}  # noqa: SIM118 - a registry iterates over records
    for name, table in tables.items():
        where = f"records.{name}"
        if name in published:
            faults.append(Fault(where, "is the key of a published record", "type another name"))
            continue
        try:
            records[name] = table.record(name)
        except ValueError as error:
            faults.append(Fault(where, str(error)))
    return records


def _table(
    model: type[M],
    raw: object,
    where: str,
    faults: list[Fault],
    context: Mapping[str, Any] | None = None,
) -> M | None:
    """Check one table; its faults are appended and None comes back if there is any."""
    if raw is None:
        needed = [
            field.alias or name for name, field in model.model_fields.items() if field.is_required()
        ]
        faults.append(Fault(where, "the table is missing", f"type [{where}] with {needed}"))
        return None
    if not isinstance(raw, dict):
        faults.append(Fault(where, f"{raw!r} is not a table", f"type [{where}]"))
        return None
    try:
        return model.model_validate(raw, context=context)
    except ValidationError as error:
        faults += [_fault(model, where, dict(detail)) for detail in error.errors()]
        return None


def _fault(model: type[BaseModel], where: str, detail: dict[str, Any]) -> Fault:
    """Turn one of pydantic's details into a fault with its full key."""
    steps = [str(step) for step in detail["loc"]]
    key = ".".join([where, *steps])
    kind, message = detail["type"], str(detail["msg"])
    if kind == "extra_forbidden":
        return Fault(
            key, f'"{steps[-1]}" is not a key of [{where}]', nearest(steps[-1], _fields(model))
        )
    if kind == "missing":
        return Fault(key, "the key is missing", f"type {steps[-1]} = ... in [{where}]")
    message = message.removeprefix("Value error, ")
    seen = detail.get("input")
    if kind != "value_error" and isinstance(seen, (str, int, float)):
        message = f"{seen!r}: {message}"
    return Fault(key, message)


def _seed(raw: dict[str, Any], faults: list[Fault]) -> int | None:
    seed = raw.get("seed")
    if isinstance(seed, int) and not isinstance(seed, bool) and seed >= 0:
        return seed
    seen = "the key is missing" if seed is None else f"{seed!r} is not a whole number from 0 up"
    faults.append(Fault("seed", seen, "type seed = 1 at the top"))
    return None


def _gas(
    raw: dict[str, Any], faults: list[Fault], context: Mapping[str, Any]
) -> GasTable | str | None:
    gas = raw.get("gas")
    if gas in ("atomic only", "finished map"):
        return str(gas)
    if gas is None or isinstance(gas, str):
        seen = "is missing" if gas is None else f"is {gas!r}"
        faults.append(
            Fault(
                "gas",
                f"the gas {seen}",
                'type a table [gas] with alpha_co, or gas = "atomic only" where there is no CO map '
                '("finished map" where there is one of Sigma_mol)',
            )
        )
        return None
    return _table(GasTable, gas, "gas", faults, context)


def _maps(
    raw: dict[str, Any], folder: Path, in_memory: frozenset[str], faults: list[Fault]
) -> dict[str, MapTable | None]:
    maps = raw.get("maps")
    if not isinstance(maps, dict) or not maps:
        faults.append(Fault("maps", "no map is listed", "type [maps.hi] with tracer, file, noise"))
        return {}
    found: dict[str, MapTable | None] = {}
    for name, table in maps.items():
        where = f"maps.{name}"
        if not name.isidentifier():
            faults.append(
                Fault(where, "the name becomes a file name and a column: letters, digits, _ only")
            )
        found[name] = _map(table, where, faults)
        model = found[name]
        if model is None or name in in_memory:
            continue
        model = located(model, folder, where, faults)
        if isinstance(model.noise, BaseModel):
            noise = located(model.noise, folder, f"{where}.noise", faults)
            model = model.model_copy(update={"noise": noise})
        found[name] = model
    return found


def _gas_state(raw: object, folder: Path, faults: list[Fault]) -> GasStateTable | None:
    """Check the state of the gas and find the files that it names."""
    is_faulty = False
    if isinstance(raw, dict) and "finer_map" in raw:
        found: list[Fault] = []
        nested = _maps({"maps": {"finer_map": raw["finer_map"]}}, folder, frozenset(), found)
        faults += [
            Fault(fault.where.replace("maps.", "gas_state."), fault.what, fault.do)
            for fault in found
        ]
        raw = {**raw, "finer_map": nested["finer_map"]}
        is_faulty = bool(found)
    state = _table(GasStateTable, raw, "gas_state", faults)
    if state is None or is_faulty:
        return None
    if not isinstance(state.linewidth, LinewidthMap):
        return state
    file = locate(state.linewidth.map, folder, "gas_state.linewidth.map", faults)
    linewidth = state.linewidth.model_copy(update={"map": file})
    return state.model_copy(update={"linewidth": linewidth})


def _map(table: object, where: str, faults: list[Fault]) -> MapTable | None:
    """Check a map's table; its noise first, so that a union of forms gives one message."""
    if isinstance(table, dict) and isinstance(table.get("noise"), dict):
        noise = table["noise"]
        form = NoiseFile if "file" in noise else NoiseTyped
        checked = _table(form, noise, f"{where}.noise", faults)
        table = {**table, "noise": checked if checked is not None else "measure"}
        model = _table(MapTable, table, where, faults)
        return model if checked is not None else None
    return _table(MapTable, table, where, faults)


def _relations(raw: dict[str, Any], faults: list[Fault]) -> dict[str, RelationTable]:
    relations = raw.get("relations", {})
    if not isinstance(relations, dict):
        faults.append(Fault("relations", f"{relations!r} is not a table", "type [relations.NAME]"))
        return {}
    checked = {name: check_relation(name, table, faults) for name, table in relations.items()}
    return {name: table for name, table in checked.items() if table is not None}

"""What the records that a recipe names ask of the rest of it."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Final

from kspipe.conversions import (
    ALPHA_CO,
    EXTINCTION,
    GIVEN_ALPHA_CO,
    INPUTS,
    LINE_RATIO,
    MASS_METALLICITY,
    STAR_FORMATION,
    STARS,
    AlphaCO,
    LineRatio,
)
from kspipe.core.errors import Fault, nearest
from kspipe.recipe.map_table import MapTable
from kspipe.recipe.metallicity_table import MetallicityTable
from kspipe.recipe.models import (
    ForegroundTable,
    GalaxyTable,
    GasTable,
    StarFormationTable,
    StarsTable,
)

__all__ = [
    "alpha_co_faults",
    "convention_faults",
    "line_ratio_faults",
    "listed",
    "metallicity_faults",
    "stars_faults",
]


def metallicity_faults(table: MetallicityTable, galaxy: GalaxyTable) -> list[Fault]:
    """Lengths that a metallicity counts in and the recipe does not give."""
    needed = {}
    per = table.slope[1]
    if per != "kpc":
        needed[per] = ("metallicity.gradient", f"a gradient per {per}")
    if table.relation is not None and table.gradient is not None:
        record = MASS_METALLICITY.get(table.relation)
        if record.place == "effective radius":
            needed["r_e"] = ("metallicity.relation", f'a gradient around "{record.key}"')
    return [
        Fault(where, f"{what} needs galaxy.{length}", f'type {length} = "... arcmin" in [galaxy]')
        for length, (where, what) in needed.items()
        if getattr(galaxy, length) is None
    ]


def line_ratio_faults(line: str, key: str | LineRatio) -> list[Fault]:
    """A line-ratio record that belongs to another line than the map."""
    record = LINE_RATIO.get(key)
    if (record.upper, record.lower) == (line, "CO(1-0)"):
        return []
    fit = [k.key for k in LINE_RATIO if (k.upper, k.lower) == (line, "CO(1-0)")]
    return [
        Fault(
            "gas.line_ratio",
            f'"{record.key}" is {record.upper} over {record.lower}; the map is {line}',
            f"records for it: {listed(fit)}" if fit else "remove the key",
        )
    ]


# Keys of [gas] that stand for an input of alpha_CO records.
_GAS_INPUTS: Final = {"ms_offset": "ms_offset_dex", "g0_over_n": "g0_over_n"}


def alpha_co_faults(gas: GasTable, *, has_stars: bool) -> list[Fault]:
    """What an alpha_CO record needs and the recipe does not give, and the other way round."""
    if gas.alpha_co is None:
        return []
    if not isinstance(gas.alpha_co, str | AlphaCO):
        record = GIVEN_ALPHA_CO
        needs = {"oh"}
    else:
        record = ALPHA_CO.get(gas.alpha_co)
        needs = set(record.needs)
    if "sigma_total" in needs:
        needs = needs - {"sigma_total"} | {"sigma_star"}
    given = {"oh"} | ({"sigma_star"} if has_stars else set())
    given |= {_GAS_INPUTS[key] for key in _GAS_INPUTS if getattr(gas, key) is not None}
    faults = [
        Fault(
            f"gas.{key}",
            f'"{record.key}" takes no {INPUTS[name].meaning}',
            f"remove the key; it belongs to {listed(k.key for k in ALPHA_CO if name in k.needs)}",
        )
        for key, name in _GAS_INPUTS.items()
        if name in given - needs
    ]
    for name in sorted(needs - given):
        do_without = listed(
            other.key
            for other in ALPHA_CO
            if set(other.needs) - {"sigma_total"} <= given
            and (has_stars or not other.is_self_consistent)
        )
        faults.append(
            Fault(
                "gas.alpha_co",
                f'"{record.key}" needs the {INPUTS[name].meaning}, which the recipe does not give',
                "; ".join(
                    filter(None, (INPUTS[name].do, f"records that do without: {do_without}"))
                ),
            )
        )
    return faults


def listed(keys: Iterable[str]) -> str:
    """Write keys in a row, sorted."""
    return ", ".join(sorted(keys))


def stars_faults(table: StarsTable, maps: Mapping[str, MapTable | None]) -> list[Fault]:
    """A map of stars that is not there or is no map of the record's band."""
    if table.map not in maps:
        what = f'no map is called "{table.map}"'
        return [Fault("stars.map", what, nearest(table.map, maps))]
    listed_map = maps[table.map]
    record = STARS.get(table.record)
    if listed_map is None or listed_map.tracer == record.tracer:
        return []
    fit = listed(r.key for r in STARS if r.tracer == listed_map.tracer)
    return [
        Fault(
            "stars.map",
            f'"{record.key}" takes {record.tracer}; maps.{table.map} is {listed_map.tracer}',
            f"records for it: {fit or 'none'}",
        )
    ]


def convention_faults(
    table: StarFormationTable, foreground: object, relations: Mapping[str, object]
) -> list[Fault]:
    """Bands without an extinction coefficient, and mass functions that do not fit relations."""
    faults = []
    record = STAR_FORMATION.get(table.calibration)
    if isinstance(foreground, ForegroundTable):
        lines = ("Hbeta",) if table.attenuation is not None else ()
        for tracer in (*record.tracers, *lines):
            key = {"FUV": "uv", "NUV": "uv"}.get(tracer) or (
                "halpha" if tracer in ("Halpha", "Hbeta") else None
            )
            if key and tracer not in EXTINCTION.get(getattr(foreground, key)).coefficients:
                known = listed(r.key for r in EXTINCTION if tracer in r.coefficients)
                faults.append(
                    Fault(
                        f"foreground.{key}",
                        f'"{getattr(foreground, key)}" has no coefficient for {tracer}',
                        f"records for it: {known}",
                    )
                )
    if table.imf != "Kroupa" and relations:
        faults.append(
            Fault(
                "star_formation.imf",
                f"relations predict star formation for a Kroupa IMF, not {table.imf}",
                "remove the key, or [relations] to make surface densities only",
            )
        )
    return faults

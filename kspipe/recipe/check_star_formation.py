"""Whether the maps of a recipe are those that its star formation takes."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Final

from kspipe.conversions import STAR_FORMATION, TOTAL_INFRARED, StarFormation
from kspipe.core.errors import Fault, nearest
from kspipe.core.tracers import CO_LINES
from kspipe.recipe.check_finished import finished_faults
from kspipe.recipe.map_table import MapTable
from kspipe.recipe.models import GalaxyTable, StarFormationTable

__all__ = ["map_extra_faults", "star_formation_faults", "wanted_tracers"]

# Maps that are gas wherever they stand in a recipe.
_GAS: Final = ("HI", *CO_LINES, "Sigma_HI", "Sigma_mol", "Sigma_dust")


def wanted_tracers(table: StarFormationTable) -> list[str]:
    """Tracers that a star-formation table takes maps of."""
    record = STAR_FORMATION.get(table.calibration)
    wanted = list(record.tracers)
    if "TIR" in wanted and table.total_infrared is not None:
        wanted.remove("TIR")
        wanted += [b for b in TOTAL_INFRARED.get(table.total_infrared).bands if b not in wanted]
    if table.attenuation is not None:
        wanted.append("Hbeta")
    return wanted


def star_formation_faults(
    table: StarFormationTable, maps: Mapping[str, MapTable | None]
) -> list[Fault]:
    """Maps that are missing, too many, or of the gas."""
    record, wanted = STAR_FORMATION.get(table.calibration), wanted_tracers(table)
    faults = _key_faults(table, record) + _thermal_faults(table, maps)
    found: list[str] = []
    for name in table.maps:
        if name not in maps:
            what = f'no map is called "{name}"'
            return [*faults, Fault("star_formation.maps", what, nearest(name, maps))]
        listed = maps[name]
        if listed is None:
            return faults
        tracer = listed.tracer
        if tracer == "22um" and "24um" in wanted:
            if listed.as_24um is None:
                faults.append(
                    Fault(
                        f"maps.{name}.as_24um",
                        f'"{record.key}" is calibrated on 24 um and this map is 22 um',
                        "type as_24um = 24 um over 22 um intensity, for example 1.0",
                    )
                )
            tracer = "24um"
        found.append(tracer)
    if sorted(found) != sorted(wanted):
        bands = {"24um", "70um", "160um"} <= set(found) and "TIR" in wanted
        faults.append(
            Fault(
                "star_formation.maps",
                f'"{record.key}" takes {" and ".join(wanted)}; listed are '
                f"{' and '.join(found) or 'none'}",
                f"type total_infrared = one of {', '.join(TOTAL_INFRARED.keys())}"
                if bands
                else "list one map of each",
            )
        )
    return faults


def _key_faults(table: StarFormationTable, record: StarFormation) -> list[Fault]:
    faults = []
    if table.attenuation is not None and record.tracers != ("Halpha",):
        hybrid = "Halpha" in record.tracers
        faults.append(
            Fault(
                "star_formation.attenuation",
                f'"{record.key}" counts the light that dust took by another band already: twice'
                if hybrid
                else f'a Balmer decrement corrects Halpha, which "{record.key}" does not take',
                'take a calibration of Halpha alone, such as "kennicutt2012_halpha", or remove '
                "the key",
            )
        )
    if table.total_infrared is not None and "TIR" not in record.tracers:
        faults.append(
            Fault("star_formation.total_infrared", f'"{record.key}" takes no TIR', "remove the key")
        )
    twice = [tracer for tracer in record.tracers if tracer in _GAS]
    if twice:
        faults.append(
            Fault(
                "star_formation.calibration",
                f'"{record.key}" takes {", ".join(twice)}, which is the gas: gas and star '
                "formation would be one map, and their relation its own shadow",
                "take another tracer for one of them",
            )
        )
    return faults


def map_extra_faults(maps: Mapping[str, MapTable], galaxy: object) -> list[Fault]:
    """Keys that belong to one tracer only, and keys that one tracer needs."""
    faults = []
    for name, table in maps.items():
        faults += finished_faults(name, table)
        if table.tracer == "Halpha":
            faults += _nitrogen_faults(name, table, galaxy)
        for key, value, owner in (
            ("nii_ratio", table.nii_ratio, "Halpha"),
            ("nii_relation", table.nii_relation, "Halpha"),
            ("as_24um", table.as_24um, "22um"),
            ("thermal_fraction", table.thermal_fraction, "1.4GHz"),
        ):
            if value is not None and table.tracer != owner:
                faults.append(
                    Fault(f"maps.{name}.{key}", f"belongs to a map of {owner}, not {table.tracer}")
                )
        if table.diffuse is not None and table.tracer in _GAS:
            faults.append(
                Fault(f"maps.{name}.diffuse", f"belongs to star formation, not to {table.tracer}")
            )
    return faults


def _nitrogen_faults(name: str, table: MapTable, galaxy: object) -> list[Fault]:
    ways = [way for way in (table.nii_ratio, table.nii_relation) if way is not None]
    if not ways:
        return [
            Fault(
                f"maps.{name}.nii_ratio",
                "an H-alpha map needs [NII]6583/Halpha",
                'type nii_ratio = 0 if the map is free of [NII], or nii_relation = "kennicutt2008"',
            )
        ]
    if len(ways) == 2:
        what = "nii_ratio and nii_relation exclude each other"
        return [Fault(f"maps.{name}.nii_relation", what, "remove one")]
    if table.nii_relation is not None and isinstance(galaxy, GalaxyTable) and galaxy.m_b is None:
        return [
            Fault(
                f"maps.{name}.nii_relation",
                f'"{table.nii_relation}" needs the absolute magnitude in B',
                'type m_b = "-20.3 mag" in [galaxy]',
            )
        ]
    return []


def _thermal_faults(table: StarFormationTable, maps: Mapping[str, MapTable | None]) -> list[Fault]:
    """A calibration of the thermal radio continuum without its fraction, or the other way."""
    record = STAR_FORMATION.get(table.calibration)
    faults = []
    for name in table.maps:
        listed = maps.get(name)
        if listed is None or listed.tracer != "1.4GHz":
            continue
        where = f"maps.{name}.thermal_fraction"
        if record.thermal and listed.thermal_fraction is None:
            what = f'"{record.key}" takes the thermal part'
            faults.append(Fault(where, what, 'type thermal_fraction = "0.1 +- 0.05"'))
        if not record.thermal and listed.thermal_fraction is not None:
            known = ", ".join(r.key for r in STAR_FORMATION if r.thermal)
            what = f'"{record.key}" takes all of it, thermal or not'
            faults.append(Fault(where, what, f"remove the key; it belongs to {known}"))
    return faults

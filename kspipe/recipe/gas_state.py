"""The tables on the state of the gas and on what a beam hides, and what ties them to the rest."""

from __future__ import annotations

import math
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any, Final, Literal

from pydantic import AfterValidator, BeforeValidator, Field

from kspipe.core.errors import Fault
from kspipe.core.tracers import CO_LINES
from kspipe.recipe.map_table import MapTable
from kspipe.recipe.quantity import Measured, parse_measured
from kspipe.recipe.values import Offset, Table
from kspipe.relations.state import LINEWIDTH_SIZE, TURBULENCE

__all__ = ["GasStateTable", "InsideBeamTable", "LinewidthMap", "gas_state_faults"]


def _positive(unit: str, example: str) -> Any:
    """Check a positive number with its unit and without an error."""

    def check(typed: Any) -> Measured:
        quantity = parse_measured(typed, unit, example)
        if quantity.value <= 0:
            raise ValueError(f"{typed!r} is not positive; expected, for example, {example}")
        if quantity.error:
            raise ValueError(
                f"{typed!r}: a choice takes no error (all pixels share it); type one number"
            )
        return quantity

    return BeforeValidator(check)


_DENSITIES: Final = ("two-phase", "hydrostatic", "larger")


def _density(typed: Any) -> Measured | str:
    if typed in _DENSITIES:
        return str(typed)
    words = ", ".join(f'"{word}"' for word in _DENSITIES)
    example = f'"100 cm-3" (H nuclei), or one of {words}'
    quantity = parse_measured(typed, "cm-3", example)
    if quantity.value <= 0 or quantity.error:
        raise ValueError(
            f"{typed!r}: expected one positive density without an error, {example}; "
            "three times more and less is shown anyhow"
        )
    return quantity


def _number_or(low: float, *words: str) -> Any:
    """Check a number above `low`, or one of some words."""

    def check(typed: Any) -> float | str:
        if isinstance(typed, str) and typed in words:
            return typed
        is_number = isinstance(typed, int | float) and not isinstance(typed, bool)
        if not is_number or not math.isfinite(typed) or typed < low or typed <= 0:
            least = "a positive number" if low == 0 else f"a number from {low:g} up"
            listed = " or ".join(f'"{word}"' for word in words)
            raise ValueError(f"{typed!r}: expected {least}, or {listed}")
        return float(typed)

    return BeforeValidator(check)


class LinewidthMap(Table):
    """A map of linewidths."""

    map: Path
    is_: Literal["sigma", "fwhm"] = Field(alias="is")
    error: Annotated[Measured, _positive("km/s", '"0.5 km/s"')] | None = None


def _linewidth(typed: Any) -> Any:
    if isinstance(typed, str) and typed not in LINEWIDTH_SIZE:
        raise ValueError(
            f'{LINEWIDTH_SIZE.unknown(typed)}; or a map: {{map = "file.fits", is = "sigma"}}'
        )
    return LinewidthMap.model_validate(typed) if isinstance(typed, dict) else typed


def _models(typed: tuple[str, ...]) -> tuple[str, ...]:
    for key in typed:
        if key not in TURBULENCE:
            raise ValueError(TURBULENCE.unknown(key))
    return typed


class GasStateTable(Table):
    """What no map gives and the state of the gas rests on: every choice has a name."""

    density: Annotated[Measured | str, BeforeValidator(_density)]
    field: Annotated[float | str, _number_or(0, "star formation")]
    cosmic_rays: Annotated[float | str, _number_or(0, "field")]
    clumping: Annotated[float | str, _number_or(1, "beam", "finer map")]
    finer_map: MapTable | None = None
    density_clumping: float = Field(default=1.0, ge=1.0, le=1e4)
    midplane_density: Annotated[Measured, _positive("Msun/pc3", '"0.05 Msun/pc3"')] | None = None
    shielded_depth: Annotated[float | str, _number_or(0, "complex")] = "complex"
    mu_unshielded: float = Field(default=1.27, ge=0.5, le=3.0)
    mu_shielded: float = Field(default=2.33, ge=0.5, le=3.0)
    jeans: Literal["cube", "virial", "sphere"] = "cube"
    bonnor_ebert: Literal["surface", "mean"] = "surface"
    linewidth: Annotated[LinewidthMap | str | None, BeforeValidator(_linewidth)] = None
    cloud_radius: Annotated[Measured, _positive("pc", '"30 pc"')] | None = None
    sonic_exponent: float = Field(default=0.5, gt=0.0, le=1.0)
    turbulence: Annotated[tuple[str, ...], AfterValidator(_models)] = tuple(TURBULENCE.keys())
    forcing: float = Field(default=0.4, ge=0.3, le=1.0)
    plasma_beta: float = Field(default=math.inf, gt=0.0)
    core_efficiency: float = Field(default=0.5, gt=0.0, le=1.0)


class InsideBeamTable(Table):
    """How the gas is spread inside a beam."""

    scatter: Offset


def gas_state_faults(tables: Mapping[str, Any]) -> list[Fault]:
    """Find what the tables of this room need of each other and of the rest of the recipe."""
    faults = []
    inside = tables.get("inside_beam")
    if isinstance(inside, InsideBeamTable) and (
        not 0 < inside.scatter.value <= 1.5 or inside.scatter.error
    ):
        faults.append(
            Fault(
                "inside_beam.scatter",
                f'"{inside.scatter}": expected a scatter above 0 and up to 1.5 dex, without error',
                'type, for example, scatter = "0.35 dex"',
            )
        )
    state = tables.get("gas_state")
    return faults + (_state_faults(state) if isinstance(state, GasStateTable) else [])


def _state_faults(state: GasStateTable) -> list[Fault]:
    faults = []
    wants_midplane = state.density in ("hydrostatic", "larger")
    if wants_midplane != (state.midplane_density is not None):
        faults.append(
            Fault(
                "gas_state.midplane_density",
                f'density = "{state.density}" needs the density of stars and dark matter'
                if wants_midplane
                else f'density = "{state.density}" takes no density of stars',
                'type midplane_density = "0.05 Msun/pc3" (0.01 to 0.1 in discs)'
                if wants_midplane
                else 'remove the key, or type density = "hydrostatic"',
            )
        )
    if (state.clumping == "finer map") != (state.finer_map is not None):
        faults.append(
            Fault(
                "gas_state.finer_map",
                'clumping = "finer map" needs the finer map'
                if state.finer_map is None
                else f'the finer map is given, but clumping = "{state.clumping}"',
                'type [gas_state.finer_map] with tracer, file, noise and clumping = "finer map"',
            )
        )
    if state.finer_map is not None:
        faults += _finer_map_faults(state.finer_map)
    if isinstance(state.linewidth, str) and state.cloud_radius is None:
        faults.append(
            Fault(
                "gas_state.cloud_radius",
                f'"{state.linewidth}" gives the linewidth of a size, which is not typed',
                'type cloud_radius = "30 pc"',
            )
        )
    if state.linewidth is None and state.cloud_radius is not None:
        faults.append(
            Fault(
                "gas_state.linewidth",
                "a cloud radius without a linewidth tells nothing",
                f"type linewidth = one of {', '.join(LINEWIDTH_SIZE.keys())}, "
                'or {map = "file.fits", is = "sigma"}',
            )
        )
    return faults


def _finer_map_faults(table: MapTable) -> list[Fault]:
    faults = []
    if table.tracer not in ("HI", *CO_LINES):
        faults.append(
            Fault(
                "gas_state.finer_map.tracer",
                f"{table.tracer} is no gas",
                f"type one of HI, {', '.join(CO_LINES)}",
            )
        )
    if table.request("finer_map").noise.kind == "measure":
        faults.append(
            Fault(
                "gas_state.finer_map.noise",
                "noise looks clumpy and is taken off, so it must be known before the map is read",
                'type its level, for example noise = "0.5 K km/s", or a noise file',
            )
        )
    return faults

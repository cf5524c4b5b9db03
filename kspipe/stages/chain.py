"""The chain of one pixel: from the stored counts to surface densities, factor by factor."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
from astropy.coordinates import SkyCoord
from astropy.table import Table
from astropy.wcs.utils import skycoord_to_pixel

from kspipe.conversions import Choices, Parameters, convert
from kspipe.conversions.chain import chains_of
from kspipe.core.errors import Fault, InputError
from kspipe.kernels.geometry import beam_axes
from kspipe.maps.product import read_matched
from kspipe.maps.read import load_map
from kspipe.recipe.quantity import Position, parse_centre
from kspipe.stages.compare import reduced_plan
from kspipe.stages.folder import ProductFolder
from kspipe.stages.place import Place
from kspipe.stages.plan import InMemory, Plan, choices_of
from kspipe.stages.surface import fields_of, parameters_of, used_maps

__all__ = ["chain_cells", "pixel_chain"]


def pixel_chain(out: Path, position: str, *, memory: InMemory | None = None) -> Table:
    """Follow one position on the sky from its stored values to Msun/pc2.

    Parameters
    ----------
    out : Path
        Folder of a reduction.
    position : str
        ``03h12m24.0s -27d18m36s`` or ``48.100 -27.310 deg``, ICRS.
    memory : mapping, optional
        As given to the reduction.

    Returns
    -------
    astropy.table.Table
        Rows of product, map, step, factor, value behind the step, and its unit. The chains of a
        product add up to its last row, which is the number in DIR/maps.

    Raises
    ------
    InputError
        If the position cannot be read or lies outside the grid.
    OutputError
        If the folder holds no reduction, or one made from other inputs.
    """
    try:
        sky = parse_centre(position)
    except ValueError as error:
        raise InputError(Fault("position", str(error))) from None
    plan = reduced_plan(ProductFolder.open(out), memory)
    row, column = _pixel(plan, sky)
    matched = {name: read_matched(out / "matched" / f"{name}.fits") for name in plan.sources}
    place = Place.of(plan.recipe, plan.grid)
    fields = fields_of(plan.recipe, place)
    at = (row, column)
    parameters = parameters_of(plan.recipe, {})
    for name, field in fields.items():
        value = np.broadcast_to(field.value, plan.grid.shape)[at]
        parameters = parameters.changed(name, np.asarray(value))
    used = used_maps(plan.recipe, matched)
    intensity = {tracer: np.asarray(image.value[at]) for tracer, image in used.items()}
    rows = _rows(plan, matched, at, intensity, choices_of(plan.recipe), parameters, sky)
    meta = {
        "position": position,
        "pixel": f"x = {column}, y = {row}, zero-based",
        "radius_kpc": float(place.radius_kpc[at]),
        "oh": float(np.broadcast_to(fields["oh"].value, plan.grid.shape)[at]),
    }
    names = ("product", "map", "step", "factor", "value", "unit")
    return Table(rows=rows, names=names, meta=meta)


def _pixel(plan: Plan, sky: Position) -> tuple[int, int]:
    x, y = skycoord_to_pixel(SkyCoord(*sky.degrees, unit="deg"), plan.grid.wcs, origin=0)
    ny, nx = plan.grid.shape
    inside = math.isfinite(x) and math.isfinite(y) and -0.5 <= x < nx - 0.5 and -0.5 <= y < ny - 0.5
    if not inside:
        raise InputError(
            Fault("position", f"{sky} is not on the grid ({nx} x {ny} pixels around the galaxy)")
        )
    return round(float(y)), round(float(x))


def _rows(
    plan: Plan,
    matched: dict[str, Any],
    at: tuple[int, int],
    intensity: dict[str, Any],
    choices: Choices,
    parameters: Parameters,
    sky: Position,
) -> list[tuple[str, str, str, float, float, str]]:
    converted = convert(intensity, choices, parameters)
    names = {image.tracer: name for name, image in matched.items()}
    rows: list[tuple[str, str, str, float, float, str]] = []
    stored: dict[str, list[tuple[str, float, float, str]]] = {}
    chains = chains_of(intensity, choices, parameters, converted)
    for product in converted.values:
        mine = [chain for chain in chains if chain.product == product]
        for chain in mine:
            name = names[chain.tracer]
            if name not in stored:
                stored[name] = _to_matched(plan, name, matched[name], at, sky)
            rows += [(product, name, *entry) for entry in stored[name]]
            value = float(intensity[chain.tracer])
            before = stored[name][-1][2]
            if value != before and not math.isnan(value):
                change, unit = value / before if before else math.nan, stored[name][-1][3]
                rows.append((product, name, "diffuse emission taken off", change, value, unit))
            for link in chain.links:
                value = link.of(value)
                step = f"to the power of ({link.name})" if link.is_power else link.name
                rows.append((product, name, step, link.factor, value, link.unit))
        unit = "Msun/yr/kpc2" if product == "sigma_sfr" else "Msun/pc2"
        if product == "sigma_gas":
            what = " + ".join(n for n in ("sigma_atom", "sigma_mol") if n in converted.values)
        else:
            what = " + ".join(names[chain.tracer] for chain in mine)
        rows.append((product, "", f"= {what}", math.nan, float(converted.values[product]), unit))
    return rows


def _to_matched(
    plan: Plan, name: str, matched: Any, at: tuple[int, int], sky: Position
) -> list[tuple[str, float, float, str]]:
    """From the stored number of the nearest pixel to the matched intensity."""
    source = plan.sources[name]
    own = load_map(source)
    x, y = skycoord_to_pixel(SkyCoord(*sky.degrees, unit="deg"), source.wcs, origin=0)
    pixel = (round(float(y)), round(float(x)))
    stored, intensity = float(source.image.read()[pixel]), float(own.value[pixel])
    unit, text = own.unit, source.unit.text
    beam = beam_axes(plan.target_arcsec2)[0]
    value = float(matched.value[at])
    to_unit = intensity / stored if stored and not source.door.is_magnitude else math.nan
    what = "from magnitudes" if source.door.is_magnitude else f"{text} to {unit}"
    return [
        (f"stored, pixel x = {pixel[1]}, y = {pixel[0]}", math.nan, stored, text),
        (what, to_unit, intensity, unit),
        (
            f"smoothed to {beam:.4g} arcsec, on the grid",
            value / intensity if intensity else math.nan,
            value,
            unit,
        ),
    ]


def chain_cells(table: Table) -> list[tuple[str, ...]]:
    """Write the table as rows of text."""
    cells: list[tuple[str, ...]] = []
    for row in table:
        factor = "" if math.isnan(row["factor"]) else f"x {row['factor']:.6g}"
        if row["step"].startswith("to the power"):
            factor = f"^ {row['factor']:g}"
        cells.append(
            (
                str(row["product"]),
                str(row["map"]),
                str(row["step"]),
                factor,
                f"{row['value']:.6g}",
                str(row["unit"]),
            )
        )
    return cells

"""What was read of each map, from where, and what each step did to its flux and noise.

Steps up to the matched map travel with it, in its file. What is only found by looking at all
maps together, where they lie against each other and what interferometers may miss, is added by
`judge_maps`. Both stand in ``DIR/steps.ecsv``.
"""

from __future__ import annotations

import math
import warnings
from collections.abc import Iterable, Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any, Final, NamedTuple, cast

import numpy as np
from astropy.table import Table

from kspipe.core.constants import ARCSEC2_SR
from kspipe.core.errors import Fault, KspipeWarning, MapError, OutputError
from kspipe.kernels.geometry import beam_axes
from kspipe.kernels.noise import sum_covariance
from kspipe.maps import MapSource
from kspipe.maps.header import celestial_wcs
from kspipe.maps.skymap import SkyMap, Step
from kspipe.matching import Grid
from kspipe.matching.flux import flux_on_grid, flux_within, pixels_within
from kspipe.matching.negative import find_negative, mask_regions
from kspipe.matching.registration import register_maps
from kspipe.matching.short_spacings import (
    ShortSpacings,
    Total,
    judge_short_spacings,
    read_total,
)
from kspipe.matching.sky_level import SkyLevel
from kspipe.stages.blank_sky import level_of, outside_galaxy
from kspipe.stages.plan import Plan

__all__ = [
    "STEPS_FILE",
    "StepRow",
    "judge_maps",
    "note_shift",
    "note_steps",
    "read_findings",
    "read_totals",
    "step_cells",
    "step_table",
    "write_steps",
]

STEPS_FILE: Final = "steps.ecsv"
# The median noise of a map is that of about so many pixels, evenly spread.
MEDIAN_OF: Final = 250_000
Findings = dict[str, dict[str, Any]]
# Flux, median noise and observed pixels on the grid's sky.
_Left = tuple[float, float, int]


class StepRow(NamedTuple):
    """One row of the table.

    Attributes
    ----------
    map : str
        The recipe's name.
    step, what, origin : str
        Name of the step, what was read or done, and who said so.
    flux : float
        On the grid's sky [unit sr].
    noise : float
        Median random error there [unit].
    pixels : int
        Observed pixels there.
    unit : str
        Canonical unit of the map.
    """

    map: str
    step: str
    what: str
    origin: str
    flux: float
    noise: float
    pixels: int
    unit: str


# --- Steps of one map ----------------------------------------------------------------------------


def note_shift(sky: SkyMap, source: MapSource) -> SkyMap:
    """Say in the history that the recipe moved a map; its coordinates are moved already."""
    if not any(source.request.shift_arcsec):
        return sky
    return sky.with_step(f"{_shift_words(source)} (recipe: maps.{sky.name}.shift)")


def note_steps(stored: SkyMap, matched: SkyMap, plan: Plan) -> SkyMap:
    """Note what was read of a map and what matching left; find, and mask if asked, its negatives.

    Parameters
    ----------
    stored : SkyMap
        On its own pixels, moved by the recipe's shift, its noise known.
    matched : SkyMap
        What matching made of it.
    plan : Plan

    Returns
    -------
    SkyMap
        The matched map with its steps.
    """
    source, grid = plan.sources[stored.name], plan.grid
    read = _left(stored, grid, _flux_of(matched, "flux_before"))
    steps = _reading(stored, source, grid, read)
    ny, nx = grid.shape
    what = (
        f"to {beam_axes(matched.beam_arcsec2)[0]:.4g} arcsec, on {nx} x {ny} pixels of "
        f"{grid.pixel_arcsec:.4g} arcsec"
    )
    origin = "sharpest common beam" if plan.recipe.grid.beam == "common" else "recipe grid.beam"
    left = _left(matched, grid, _flux_of(matched, "flux_after"))
    steps.append(Step("match", what, origin, *left))
    regions, where = find_negative(matched, grid)
    words, origin = str(regions), "found"
    is_masked = source.request.mask_negative and regions.count > 0
    if is_masked:
        words, origin = f"{words}; taken as not observed", "recipe mask_negative"
        matched = mask_regions(matched, where)
        left = _left(matched, grid, flux_on_grid(matched.value, grid))
    detail = _plain({**regions.as_plain(), "masked": is_masked})
    steps.append(Step("negative", words, origin, *left, detail=detail))
    return matched.with_step(words, steps=tuple(steps))


def _reading(stored: SkyMap, source: MapSource, grid: Grid, read: _Left) -> list[Step]:
    """What was read, from where; and what the recipe's shift did, where it types one."""
    ny, nx = stored.value.shape
    blank = int(np.isnan(stored.value).sum())
    size = f"{nx} x {ny} pixels of {source.pixel_arcsec:.4g} arcsec, {blank} not observed"
    image = f"[{source.image.index}]" if source.image.index else ""
    noise, noise_origin = _noise_words(source)
    before, moved = read, []
    if any(source.request.shift_arcsec):
        wcs = celestial_wcs(source.image.header, f"maps.{stored.name}, {source.image}")
        unmoved = replace(stored, wcs=wcs)
        before = _left(unmoved, grid, flux_within(unmoved.value, wcs, grid))
        moved = [Step("shift", _shift_words(source), "recipe shift", *read)]
    if "sky_taken_off" in stored.facts:
        level = cast("SkyLevel", stored.facts["sky_taken_off"])
        sky_flux = flux_within(np.isfinite(stored.value) * level.value, stored.wcs, grid)
        off = Step("background", f"taken off: {level}", "recipe background", *read)
        moved = [*(replace(step, flux=step.flux + sky_flux) for step in moved), off]
        before = (before[0] + sky_flux, *before[1:])
    return [
        Step("read", size, f"{source.image.file.name}{image}", *before),
        Step("unit", f"{source.unit.text!r} to {stored.unit}", source.unit.origin, *before),
        Step("beam", str(source.beam), source.beam.origin, *before),
        Step("noise", noise, noise_origin, *before),
        *moved,
    ]


def _shift_words(source: MapSource) -> str:
    east, north = source.request.shift_arcsec
    return f"moved by {east:+g} arcsec east, {north:+g} arcsec north"


def _noise_words(source: MapSource) -> tuple[str, str]:
    """What the noise is, and where it comes from."""
    noise = source.request.noise
    like = f"correlated like: {noise.correlated}"
    if noise.gain is not None:
        like += ", photons added"
    if noise.kind == "measure":
        return f"scatter of the blank sky, {like}", "measured"
    if noise.kind == "file" and source.noise_image is not None:
        return f"{noise.stated} of each pixel, {like}", source.noise_image.file.name
    return f"{noise.value:g} {noise.unit or source.unit.text}, {like}", "recipe noise"


def _flux_of(matched: SkyMap, fact: str) -> float:
    """A flux that matching has worked out already [unit sr]."""
    return float(cast("float", matched.facts[fact]))


def _left(sky: SkyMap, grid: Grid, flux: float) -> _Left:
    """Flux as given, with median noise and number of observed pixels on the grid's sky."""
    seen = np.isfinite(sky.value)
    if sky.wcs is not grid.wcs:
        seen &= pixels_within(sky.value.shape, sky.wcs, grid)
    every = (slice(None, None, max(1, math.isqrt(seen.size // MEDIAN_OF))),) * 2
    of = seen[every]
    sigmas = [term.sigma[every][of] for term in sky.noise]
    noise = float(np.median(np.sqrt(sum(s**2 for s in sigmas)))) if of.any() else math.nan
    return flux, noise, int(seen.sum())


# --- All maps together ---------------------------------------------------------------------------


def read_totals(plan: Plan) -> dict[str, Total | None]:
    """Read the total fluxes of a recipe, before any work is done.

    Raises
    ------
    MapError
        With the faults of all maps at once.
    """
    velocity = plan.recipe.galaxy.velocity
    totals: dict[str, Total | None] = {}
    faults: list[Fault] = []
    for name, source in plan.sources.items():
        try:
            totals[name] = read_total(
                source,
                velocity_kms=velocity.value if velocity else None,
                velocity_convention=plan.recipe.galaxy.velocity_convention,
            )
        except MapError as error:
            faults += error.faults
    if faults:
        raise MapError(*faults)
    return totals


def judge_maps(
    plan: Plan, matched: Mapping[str, SkyMap], totals: Mapping[str, Total | None]
) -> Findings:
    """Find where maps lie against each other, what they miss and where they are negative.

    Warns of flux that may be missing.

    Parameters
    ----------
    plan : Plan
    matched : mapping of str to SkyMap
    totals : mapping of str to Total or None
        By `read_totals`.

    Returns
    -------
    dict of str to dict
        By map: ``registration``, ``negative``; where there is sky beyond the galaxy,
        ``sky_level``; and, for lines in the radio, ``short_spacings``.
    """
    kpc = plan.recipe.galaxy.pc_per_arcsec / 1e3
    applied = {name: source.request.shift_arcsec for name, source in plan.sources.items()}
    findings: Findings = {}
    disc = None
    if plan.recipe.galaxy.r25 is not None:
        disc = outside_galaxy(next(iter(matched.values())), plan.recipe, 1.0)
    for name, registration in register_maps(matched, plan.grid, applied, disc).items():
        sky = matched[name]
        found: dict[str, Any] = {
            "registration": registration.as_plain(),
            "negative": next((s.detail for s in sky.steps if s.step == "negative"), None),
        }
        level = level_of(sky, plan.recipe)
        if level is not None:
            found["sky_level"] = level.as_plain()
            _warn_of_level(sky, level, plan)
        spacings = _short_spacings(sky, plan, totals[name])
        if spacings is not None:
            found["short_spacings"] = spacings.as_plain(kpc)
            warning = spacings.warning(kpc)
            if warning:
                warnings.warn(f"maps.{name}: {warning}", KspipeWarning, stacklevel=2)
        findings[name] = _plain(found)
    return findings


def _warn_of_level(sky: SkyMap, level: SkyLevel, plan: Plan) -> None:
    """Warn of a sky level that neither the recipe's action nor its error accounts for."""
    is_known = abs(level.value) <= 3.0 * sky.common.pedestal
    if not level.is_significant or is_known:
        return
    subtracted = plan.sources[sky.name].request.background == "subtract"
    warnings.warn(
        f"maps.{sky.name}: the sky is not zero: {level}; "
        + (
            "what is left after subtraction: the background is not flat"
            if subtracted
            else 'type background = "subtract", or pedestal_error if it is emission or known'
        ),
        KspipeWarning,
        stacklevel=3,
    )


def _short_spacings(sky: SkyMap, plan: Plan, total: Total | None) -> ShortSpacings | None:
    request, grid = plan.sources[sky.name].request, plan.grid
    if total is None:
        return judge_short_spacings(request, None, math.nan, math.nan)
    seen = np.isfinite(sky.value)
    variance = sum_covariance(sky.noise, sky.noise, seen, grid.jacobian_arcsec())
    pixel_sr = float(np.mean(grid.areas_arcsec2())) * ARCSEC2_SR
    error = math.sqrt(max(variance, 0.0)) * pixel_sr
    return judge_short_spacings(request, total, flux_on_grid(sky.value, grid), error)


# --- The table -----------------------------------------------------------------------------------


def write_steps(path: Path, matched: Mapping[str, SkyMap], findings: Findings) -> None:
    """Write the table of all maps as ECSV, with the findings in its header."""
    rows = [row for name, sky in matched.items() for row in _rows(sky, findings[name])]
    table = Table(rows=rows, names=StepRow._fields, meta={"maps": findings})
    descriptions = {
        "flux": "on the grid's sky, in the unit of the map times sr",
        "noise": "median random 1-sigma error there, in the unit of the map",
        "pixels": "observed pixels there",
        "origin": "who said so",
    }
    for name, text in descriptions.items():
        table[name].description = text
    table.write(path, format="ascii.ecsv")


def _rows(sky: SkyMap, found: Mapping[str, Any]) -> list[StepRow]:
    steps = list(sky.steps)
    left = (steps[-1].flux, steps[-1].noise, steps[-1].n_pixels) if steps else (math.nan,) * 3
    if "short_spacings" in found:
        spacings = found["short_spacings"]
        origin = "default" if spacings["stated"] is None else "recipe short_spacings"
        steps.append(Step("short spacings", spacings["text"], origin, *left))
    if "sky_level" in found:
        steps.append(Step("sky level", found["sky_level"]["text"], "measured", *left))
    registration = found["registration"]
    proposal = f"; {registration['proposal']} would undo it" if registration["proposal"] else ""
    steps.append(Step("registration", f"{registration['text']}{proposal}", "measured", *left))
    return [
        StepRow(sky.name, s.step, s.what, s.origin, s.flux, s.noise, s.n_pixels, sky.unit)
        for s in steps
    ]


def step_table(folder: Path) -> list[StepRow]:
    """Read the table of a reduction.

    Raises
    ------
    OutputError
        If the folder holds none.
    """
    return [
        StepRow(*(value.item() if hasattr(value, "item") else value for value in row))
        for row in _read(folder)
    ]


def read_findings(folder: Path) -> Findings:
    """Read what was found about each map of a reduction.

    Raises
    ------
    OutputError
        If the folder holds no table of steps.
    """
    return dict(_read(folder).meta["maps"])


def _read(folder: Path) -> Table:
    path = folder / STEPS_FILE
    if not path.is_file():
        raise OutputError(
            Fault(str(path), "does not exist", "run: kspipe reduce RECIPE --out DIR --overwrite")
        )
    return Table.read(path, format="ascii.ecsv")


def step_cells(rows: Iterable[StepRow]) -> list[tuple[str, ...]]:
    """Rows as text: the map's name and unit at its first row, then the columns of `StepRow`."""
    cells: list[tuple[str, ...]] = []
    last = ""
    for row in rows:
        name = f"{row.map} [{row.unit}]" if row.map != last else ""
        last = row.map
        numbers = (f"{row.flux:.5g}", f"{row.noise:.3g}", str(row.pixels))
        cells.append((name, row.step, row.what, row.origin, *numbers))
    return cells


def _plain(value: Any) -> Any:
    """Nested plain values without NaN, which JSON does not know."""
    if isinstance(value, Mapping):
        return {key: _plain(entry) for key, entry in value.items()}
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    return value

"""What a reduction will do: maps found usable, beam and grid chosen, fingerprints of each stage."""

from __future__ import annotations

import hashlib
import os
import warnings
from collections.abc import Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from numpy.typing import NDArray
from pydantic import BaseModel

from kspipe import __version__
from kspipe.conversions import (
    ALPHA_CO,
    ATOMIC,
    BALMER,
    CIRCULARITY,
    EXTINCTION,
    FINISHED_SFR,
    GAS_TO_DUST,
    GIVEN_ALPHA_CO,
    LINE_RATIO,
    MASS_METALLICITY,
    MASS_TO_LIGHT,
    NITROGEN,
    STAR_FORMATION,
    STARS,
    STRONG_LINES,
    TOTAL_INFRARED,
    AlphaCO,
    Choices,
    LineRatio,
    Record,
)
from kspipe.core.errors import Fault, KspipeWarning, MapError
from kspipe.kernels.geometry import beam_axes
from kspipe.maps import MapSource
from kspipe.maps.header import celestial_wcs
from kspipe.maps.stored import StoredImage
from kspipe.matching import Grid, choose_beam
from kspipe.recipe import Recipe
from kspipe.recipe.varying import ByRegion, OnMap, Profile, typed_as
from kspipe.relations import LAWS
from kspipe.stages.folder import file_checksum, fingerprint
from kspipe.stages.metallicity import metallicity_warnings
from kspipe.stages.state_files import state_files_print, state_values

__all__ = ["InMemory", "Plan", "choices_of", "compare_print", "convert_print", "make_plan"]

Array = NDArray[np.float64]
InMemory = Mapping[str, tuple[fits.PrimaryHDU, fits.PrimaryHDU | None]]

# From here on the recipe is told how fast cos i changes.
INCLINED_DEG = 65.0


@dataclass(frozen=True)
class Plan:
    """A reduction, decided.

    Attributes
    ----------
    recipe : Recipe
    sources : dict of str to MapSource
    target_arcsec2 : (2, 2) float64 array
        Beam covariance.
    grid : Grid
    prints : dict of str to str
        Fingerprints of ``match.NAME`` and ``convert``.
    """

    recipe: Recipe
    sources: dict[str, MapSource]
    target_arcsec2: Array
    grid: Grid
    prints: dict[str, str]

    @property
    def fwhm_arcsec(self) -> float:
        """Width of the target beam."""
        return beam_axes(self.target_arcsec2)[0]


def make_plan(recipe: Recipe, memory: InMemory | None = None) -> Plan:
    """Read all headers, choose beam and grid.

    Parameters
    ----------
    recipe : Recipe
    memory : mapping of str to (HDU, HDU or None), optional
        Maps, and their noise, that stand in for files.

    Raises
    ------
    MapError
        With the faults of all maps at once.
    """
    galaxy = recipe.galaxy
    sources: dict[str, MapSource] = {}
    faults: list[Fault] = []
    for name, table in recipe.maps.items():
        try:
            sources[name] = MapSource.open(
                table.request(name),
                centre_deg=galaxy.centre.degrees,
                velocity_kms=galaxy.velocity.value if galaxy.velocity else None,
                velocity_convention=galaxy.velocity_convention,
                memory=(memory or {}).get(name),
            )
        except MapError as error:
            faults += error.faults
    if faults:
        raise MapError(*faults)
    listed = list(sources.values())
    target = choose_beam(listed, recipe.grid.fwhm_arcsec(galaxy.pc_per_arcsec))
    fwhm = beam_axes(target)[0]
    grid = _grid(recipe, sources, fwhm)
    _check_grid(grid)
    _warn_inclination(recipe)
    _warn_metallicity(recipe)
    _warn_opacity(recipe)
    _warn_circularity(recipe)
    # Checksums of large files take a second or two, and leave the interpreter free.
    with ThreadPoolExecutor(os.cpu_count() or 1) as pool:
        found = pool.map(lambda source: _match_print(recipe, source, grid, fwhm), listed)
        prints = {f"match.{name}": print_ for name, print_ in zip(sources, found, strict=True)}
    prints["convert"] = convert_print(recipe, prints)
    return Plan(recipe, sources, target, grid, prints)


def _grid(recipe: Recipe, sources: dict[str, MapSource], fwhm_arcsec: float) -> Grid:
    """Lay kspipe's own grid, or take over that of a named map or file."""
    centre, table = recipe.galaxy.centre.degrees, recipe.grid
    # Also where the pixels are another map's, all maps must reach the galaxy.
    own = Grid.around(
        centre,
        fwhm_arcsec / table.pixels_per_beam,
        list(sources.values()),
        table.size.value if table.size else None,
    )
    if table.like is None:
        return own
    if table.like in sources:
        source = sources[table.like]
        return Grid.like(source.wcs, source.image.shape, centre, f"maps.{table.like}")
    image = StoredImage.find(Path(table.like), None)
    return Grid.like(
        celestial_wcs(image.header, f"grid.like, {image}"), image.shape, centre, str(image)
    )


def _check_grid(grid: Grid) -> None:
    if min(grid.shape) < 3:
        raise MapError(
            Fault(
                "grid",
                f"the maps share only {grid.shape[1]} x {grid.shape[0]} pixels of "
                f"{grid.pixel_arcsec:.3g} arcsec",
                "type a narrower grid.beam or check the maps",
            )
        )


def _warn_inclination(recipe: Recipe) -> None:
    inclination = recipe.galaxy.inclination.value
    if inclination > INCLINED_DEG:
        per_degree = 100 * np.tan(np.radians(inclination)) * np.radians(1.0)
        warnings.warn(
            f"galaxy.inclination {inclination:g} deg: cos i, and each surface density with it, "
            f"changes by {per_degree:.1f} % per degree",
            KspipeWarning,
            stacklevel=2,
        )


def _warn_opacity(recipe: Recipe) -> None:
    """Tell that one factor for all pixels is no opacity correction of any of them."""
    opacity = None if isinstance(recipe.gas, str) else recipe.gas.hi_opacity
    if opacity is not None and opacity.value != 1.0:
        warnings.warn(
            f"gas.hi_opacity {opacity}: one factor for all pixels, though only cold peaks are "
            "thick; "
            "integrated maps know no spin temperature",
            KspipeWarning,
            stacklevel=2,
        )


def _warn_circularity(recipe: Recipe) -> None:
    gas = None if isinstance(recipe.gas, str) else recipe.gas
    if gas is not None and gas.gas_to_dust is not None and recipe.relations:
        warnings.warn(
            f'gas.gas_to_dust "{gas.gas_to_dust}": {CIRCULARITY}', KspipeWarning, stacklevel=3
        )


def _warn_metallicity(recipe: Recipe) -> None:
    alpha_co = choices_of(recipe).alpha_co
    record = None if alpha_co is None else ALPHA_CO.get(alpha_co)
    for text in metallicity_warnings(recipe, record):
        warnings.warn(text, KspipeWarning, stacklevel=3)


def _match_print(recipe: Recipe, source: MapSource, grid: Grid, fwhm: float) -> str:
    galaxy, request = recipe.galaxy, asdict(source.request)
    # Contents count, not where they lie.
    del request["file"], request["noise"]["file"]
    for table, key in ((request, "psf"), (request["noise"], "shape_file")):
        table[key] = table[key] and file_checksum(table[key])
    return fingerprint(
        {
            "kspipe": __version__,
            "map": request,
            "pixels": _checksum(source.image),
            "noise": _checksum(source.noise_image) if source.noise_image else None,
            "galaxy": [
                galaxy.centre.degrees,
                galaxy.velocity,
                galaxy.velocity_convention,
                # Blank sky is what lies outside the disc.
                [galaxy.inclination.value, galaxy.position_angle.value, galaxy.r25]
                if "measure" in (source.request.noise.kind, source.request.noise.correlated)
                or source.request.background == "subtract"
                else None,
            ],
            "grid": [fwhm, grid.pixel_arcsec, grid.shape, grid.wcs.to_header_string()],
            "coverage": recipe.grid.minimum_coverage,
        }
    )


def _checksum(image: Any) -> str:
    if image.memory is None:
        return file_checksum(image.file)
    header = image.memory.header.tostring(endcard=False).encode()
    return hashlib.sha256(header + np.ascontiguousarray(image.memory.data).tobytes()).hexdigest()


def choices_of(recipe: Recipe) -> Choices:
    """Pick the records that a recipe names, by key."""
    gas = None if isinstance(recipe.gas, str) else recipe.gas
    finished = {t.tracer: t.finished for t in recipe.maps.values() if t.finished is not None}
    calibration = recipe.star_formation.calibration
    if calibration is FINISHED_SFR or calibration == FINISHED_SFR:
        calibration = replace(FINISHED_SFR, imf=finished["Sigma_SFR"].imf)
    return Choices(
        calibration=calibration,
        finished=finished,
        balmer=recipe.star_formation.attenuation,
        total_infrared=recipe.star_formation.total_infrared,
        alpha_co=_or(gas.alpha_co, str | AlphaCO | None, GIVEN_ALPHA_CO) if gas else None,
        gas_to_dust=gas.gas_to_dust if gas else None,
        stars=recipe.stars.record if recipe.stars else None,
        mass_to_light=_or(recipe.stars.mass_to_light, str, None) if recipe.stars else None,
        imf=recipe.star_formation.imf,
        ebv_scale=recipe.foreground.ebv_scale,
        line_ratio=_or(gas.line_ratio, str | LineRatio, None) if gas else None,
        extinction={
            "FUV": recipe.foreground.uv,
            "NUV": recipe.foreground.uv,
            "Halpha": recipe.foreground.halpha,
            "Hbeta": recipe.foreground.halpha,
        },
    )


def _or(value: Any, kind: Any, other: Any) -> Any:
    return value if isinstance(value, kind) else other


def records_of(recipe: Recipe) -> list[Any]:
    """All conversion records that a recipe uses."""
    choices = choices_of(recipe)
    records: list[Any] = [ATOMIC.get(choices.atomic)] if recipe.map_of("HI") else []
    if choices.alpha_co is not None:
        records.append(ALPHA_CO.get(choices.alpha_co))
    if choices.gas_to_dust is not None:
        records.append(GAS_TO_DUST.get(choices.gas_to_dust))
    if choices.line_ratio is not None:
        records.append(LINE_RATIO.get(choices.line_ratio))
    if choices.stars is not None:
        records.append(STARS.get(choices.stars))
    if choices.mass_to_light is not None:
        records.append(MASS_TO_LIGHT.get(choices.mass_to_light))
    calibration = STAR_FORMATION.get(choices.calibration)
    records.append(calibration)
    keys = {choices.extinction[t] for t in calibration.tracers if t in choices.extinction}
    records += [EXTINCTION.get(key) for key in sorted(keys)]
    if choices.balmer is not None:
        records.append(BALMER.get(choices.balmer))
    if choices.total_infrared is not None:
        records.append(TOTAL_INFRARED.get(choices.total_infrared))
    relations = {recipe.maps[n].nii_relation for n in recipe.star_formation.maps}
    records += [NITROGEN.get(key) for key in sorted(filter(None, relations))]
    metallicity = recipe.metallicity
    if metallicity.calibration is not None:
        records.append(STRONG_LINES.get(metallicity.calibration))
    if metallicity.relation is not None:
        records.append(MASS_METALLICITY.get(metallicity.relation))
    return records


def _values(table: BaseModel) -> dict[str, Any]:
    """Values of a recipe's table, as they are and not as they were typed."""
    return {key: _content(getattr(table, key)) for key in type(table).model_fields}


def _content(value: Any) -> Any:
    """A value by what it holds: files by their contents, the user's own records by their words."""
    if isinstance(value, Path):
        return file_checksum(value)
    if isinstance(value, Record):
        return [value.sentence, *map(str, value.ranges)]
    if isinstance(value, BaseModel):
        return _values(value)
    if isinstance(value, OnMap | Profile | ByRegion):
        return _content(typed_as(value))
    if isinstance(value, list | tuple):
        return [_content(entry) for entry in value]
    if isinstance(value, Mapping):
        return {str(key): _content(entry) for key, entry in value.items()}
    return value


def convert_print(recipe: Recipe, match_prints: Mapping[str, str]) -> str:
    """Fingerprint of the surface densities."""
    return fingerprint(
        {
            "matched": {k: v for k, v in match_prints.items() if k.startswith("match.")},
            "galaxy": _values(recipe.galaxy),
            "metallicity": _values(recipe.metallicity),
            "regions": {n: _values(t) for n, t in recipe.regions.items()},
            "foreground": _values(recipe.foreground),
            "gas": recipe.gas if isinstance(recipe.gas, str) else _values(recipe.gas),
            "stars": recipe.stars and _values(recipe.stars),
            "star formation": _values(recipe.star_formation),
            "finished": {n: str(t.finished) for n, t in recipe.maps.items()},
            "ratios": {
                n: _content([t.nii_ratio, t.as_24um, t.nii_relation, t.thermal_fraction, t.diffuse])
                for n, t in recipe.maps.items()
            },
            "low_snr": recipe.comparison.low_snr,
            "records": [f"{r.key}: {r.formula}" for r in records_of(recipe)],
            **({"gas state files": state_files_print(recipe)} if recipe.gas_state else {}),
        }
    )


def compare_print(recipe: Recipe, reduction_print: str) -> str:
    """Fingerprint of the comparison."""
    return fingerprint(
        {
            "reduction": reduction_print,
            "relations": {n: _values(t) | {"defaults": None} for n, t in recipe.relations.items()},
            "laws": [LAWS.get(t.law).formula for t in recipe.relations.values()],
            "disc": [t and _values(t) for t in (recipe.midplane, recipe.radiation_field)],
            "rotation": recipe.rotation and _values(recipe.rotation),
            "comparison": _values(recipe.comparison) | {"environments": None},
            "environments": {
                name: (table.radii_kpc or file_checksum(Path(table.where)), table.alpha_co_scale)
                for name, table in recipe.comparison.environments.items()
            },
            "seed": recipe.seed,
            **({"gas state": state_values(recipe.gas_state)} if recipe.gas_state else {}),
            **({"inside beam": _values(recipe.inside_beam)} if recipe.inside_beam else {}),
        }
    )

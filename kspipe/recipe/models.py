"""What a recipe may hold: one frozen model for each table.

Models check single values; what ties values together is checked in `checks`.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BeforeValidator, Field, model_validator

from kspipe.conversions import ALPHA_CO, EXTINCTION, LINE_RATIO, OH_SCALES, STAR_FORMATION, STARS
from kspipe.core.errors import nearest
from kspipe.recipe.environment import Environment, FreeWidth
from kspipe.recipe.map_table import MapTable
from kspipe.recipe.quantity import Measured, Position, parse_centre, parse_measured
from kspipe.recipe.systematics_table import SystematicsTable
from kspipe.recipe.values import (
    Abundance,
    Angle,
    Arcsec,
    Distance,
    FieldOverDensity,
    Inclination,
    Offset,
    Opacity,
    Ratio,
    Reddening,
    Speed,
    Table,
    key_of,
)

__all__ = [
    "ComparisonTable",
    "ForegroundTable",
    "GalaxyTable",
    "GasTable",
    "GridTable",
    "MetallicityTable",
    "Recipe",
    "RelationTable",
    "StarFormationTable",
    "StarsTable",
    "SystematicsTable",
]


class GalaxyTable(Table):
    """Where the galaxy is and how it is tilted."""

    name: str = Field(min_length=1)
    centre: Annotated[Position, BeforeValidator(parse_centre)]
    distance: Distance
    inclination: Inclination
    position_angle: Angle
    r25: Arcsec | None = None
    velocity: Speed | None = None
    velocity_convention: Literal["optical", "radio"] = "optical"

    @property
    def cos_i(self) -> float:
        """Cosine of the inclination."""
        return math.cos(math.radians(self.inclination.value))

    @property
    def pc_per_arcsec(self) -> float:
        """Length on the sky for one arcsecond."""
        return self.distance.value * 1e6 * math.pi / 648000.0


def _beam_target(typed: Any) -> str:
    if typed == "common":
        return "common"
    for unit in ("arcsec", "pc"):
        try:
            if parse_measured(typed, unit, "").value > 0:
                return str(typed)
        except ValueError:
            continue
    raise ValueError(f'{typed!r} is not a beam; expected "15 arcsec", "600 pc" or "common"')


class GridTable(Table):
    """The common beam and grid."""

    beam: Annotated[str, BeforeValidator(_beam_target)]
    pixels_per_beam: float = Field(default=3.0, ge=2.0, le=20.0)
    like: str | None = None
    size: Arcsec | None = None
    minimum_coverage: float = Field(default=0.5, gt=0.0, le=1.0)

    @model_validator(mode="after")
    def _one_grid(self) -> GridTable:
        clash = {"size", "pixels_per_beam"} & self.model_fields_set
        if self.like is not None and clash:
            raise ValueError(f"like = ... gives the pixels; remove {' and '.join(sorted(clash))}")
        return self

    def fwhm_arcsec(self, pc_per_arcsec: float) -> float | None:
        """Width of the target beam; None for the smallest common one."""
        if self.beam == "common":
            return None
        try:
            return parse_measured(self.beam, "arcsec", "").value
        except ValueError:
            return parse_measured(self.beam, "pc", "").value / pc_per_arcsec


def gradient_value(typed: str) -> tuple[float, str]:
    """Split ``-0.045 dex/kpc`` into the number and what it counts per.

    Raises
    ------
    ValueError
        If it is neither per kpc nor per r25.
    """
    text, _, per = typed.partition("dex/")
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value) or per.strip() not in ("kpc", "r25"):
        raise ValueError(
            f'{typed!r} is not a gradient; expected "-0.045 dex/kpc" or "-0.3 dex/r25"'
        )
    return value, per.strip()


def _gradient(typed: str | None) -> str | None:
    if typed is not None:
        gradient_value(typed)
    return typed


def _oh_scale(typed: Any) -> str:
    if typed not in OH_SCALES:
        raise ValueError(
            f'metallicity scale "{typed}" is not known; {nearest(str(typed), OH_SCALES)}'
        )
    return str(typed)


class MetallicityTable(Table):
    """12 + log10(O/H) over the disc: a centre and a gradient, or a map."""

    oh: Abundance | None = None
    gradient: Annotated[str | None, AfterValidator(_gradient)] = None
    map: Path | None = None
    scale: Annotated[str, BeforeValidator(_oh_scale)] = "not stated"

    @property
    def slope(self) -> tuple[float, str]:
        """Gradient and what it counts per: ``kpc`` or ``r25``; zero where none is given."""
        return (0.0, "kpc") if self.gradient is None else gradient_value(self.gradient)

    @model_validator(mode="after")
    def _one_way(self) -> MetallicityTable:
        if (self.map is None) == (self.oh is None):
            raise ValueError(
                'give either oh = 8.69 (with gradient = "... dex/kpc") or map = "file.fits"'
            )
        if self.map is not None and self.gradient is not None:
            raise ValueError("a gradient and a map exclude each other")
        return self


class ForegroundTable(Table):
    """Extinction by the Milky Way; the colour excess must be typed, zero if it was removed."""

    ebv: Reddening
    uv: Annotated[str, key_of(EXTINCTION)] = "bianchi2017"
    halpha: Annotated[str, key_of(EXTINCTION)] = "cardelli1989"
    ebv_scale: Literal["SFD", "SF11"] | None = None


def _line_ratio(typed: Any) -> Measured | str | None:
    """Read ``0.65 +- 0.08``, or the key of a record."""
    if isinstance(typed, str) and typed[:1].isalpha():
        if typed not in LINE_RATIO:
            raise ValueError(f"{LINE_RATIO.unknown(typed)}; or a number such as 0.65")
        return typed
    return None if typed is None else parse_measured(typed, "", '0.65 or "0.65 +- 0.08"')


def _line_ratio_bounds(ratio: Measured | str | None) -> Measured | str | None:
    if isinstance(ratio, Measured) and not 0 < ratio.value < 10:
        raise ValueError(f"{ratio.text!r}: expected a ratio between 0 and 10")
    return ratio


class GasTable(Table):
    """From lines to atomic and molecular gas."""

    alpha_co: Annotated[str, key_of(ALPHA_CO)]
    line_ratio: Annotated[
        Measured | str | None, BeforeValidator(_line_ratio), AfterValidator(_line_ratio_bounds)
    ] = None
    ms_offset: Offset | None = None
    g0_over_n: FieldOverDensity | None = None
    hi_opacity: Opacity | None = None


class StarsTable(Table):
    """Stellar surface density from a near-infrared map."""

    record: Annotated[str, key_of(STARS)]
    map: str
    mass_to_light: Ratio = Measured(0.5, 0.0, "0.5")


class StarFormationTable(Table):
    """Which calibration, on which maps."""

    calibration: Annotated[str, key_of(STAR_FORMATION)]
    maps: tuple[str, ...]
    imf: Literal["Kroupa", "Salpeter", "Chabrier"] = "Kroupa"


class RelationTable(Table):
    """One law with its parameters, under a name of the user's."""

    law: str
    parameters: dict[str, float] = Field(default_factory=dict)
    defaults: tuple[str, ...] = ()


class ComparisonTable(Table):
    """How the comparison is made."""

    low_snr: float = Field(default=5.0, ge=0.0)
    fits: bool = True
    lattice_phases: int = Field(default=4, ge=1, le=4)
    population_components: int = Field(default=2, ge=1, le=3)
    zero_point_prior: float = Field(default=0.2, gt=0.0, le=2.0)
    free: dict[str, dict[str, FreeWidth]] = Field(default_factory=dict)
    environments: dict[str, Environment] = Field(default_factory=dict)
    posterior_draws: int = Field(default=0, ge=0, le=100_000)


class Recipe(Table):
    """A whole recipe, checked.

    Attributes
    ----------
    path : Path or None
        Where it was read from.
    """

    path: Path | None = None
    seed: int = Field(ge=0)
    galaxy: GalaxyTable
    grid: GridTable
    maps: dict[str, MapTable]
    metallicity: MetallicityTable
    foreground: ForegroundTable
    gas: GasTable | Literal["atomic only"]
    star_formation: StarFormationTable
    stars: StarsTable | None = None
    relations: dict[str, RelationTable] = Field(default_factory=dict)
    comparison: ComparisonTable = ComparisonTable()
    systematics: SystematicsTable | None = None

    def map_of(self, *tracers: str) -> str | None:
        """Name of the first map of one of these tracers."""
        return next((name for name, table in self.maps.items() if table.tracer in tracers), None)

    @property
    def has_molecular(self) -> bool:
        """Whether the recipe asks for molecular gas."""
        return isinstance(self.gas, GasTable)

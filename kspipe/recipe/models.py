"""What a recipe may hold: one frozen model for each table.

Models check single values; what ties values together is checked in `checks`.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BeforeValidator, Field, model_validator

from kspipe.conversions import (
    ALPHA_CO,
    BALMER,
    EXTINCTION,
    FINISHED_SFR,
    GAS_TO_DUST,
    LINE_RATIO,
    MASS_TO_LIGHT,
    STAR_FORMATION,
    STARS,
    TOTAL_INFRARED,
    AlphaCO,
    LineRatio,
    StarFormation,
)
from kspipe.recipe.disc_tables import MidplaneTable, RadiationFieldTable, RotationTable
from kspipe.recipe.environment import Environment, FreeWidth
from kspipe.recipe.gas_state import GasStateTable, InsideBeamTable
from kspipe.recipe.kinds import ALPHA_CO_VALUE, RATIO, Reddening
from kspipe.recipe.map_table import MapTable
from kspipe.recipe.metallicity_table import MetallicityTable
from kspipe.recipe.own_records import RecordTable
from kspipe.recipe.quantity import Measured, Position, parse_centre, parse_measured
from kspipe.recipe.regions import RegionTable
from kspipe.recipe.systematics_table import SystematicsTable
from kspipe.recipe.values import (
    Angle,
    Arcsec,
    Distance,
    FieldOverDensity,
    Inclination,
    Magnitude,
    Offset,
    Opacity,
    Speed,
    Table,
    key_of,
    key_or,
)
from kspipe.recipe.varying import Varying, read_varying

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
    r_e: Arcsec | None = None
    m_b: Magnitude | None = None
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

    def kpc_per(self, unit: str) -> float:
        """Length of one ``kpc``, ``arcsec``, ``r25`` or ``r_e`` [kpc].

        Raises
        ------
        KeyError
            If the recipe does not give that length.
        """
        lengths = {"r25": self.r25, "r_e": self.r_e}
        if unit == "kpc":
            return 1.0
        length = lengths.get(unit)
        if unit != "arcsec" and length is None:
            raise KeyError(f"galaxy.{unit} is not given")
        return self.pc_per_arcsec / 1e3 * (length.value if length else 1.0)


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


class ForegroundTable(Table):
    """Extinction by the Milky Way; the colour excess must be typed, zero if it was removed."""

    ebv: Reddening
    uv: Annotated[str, key_of(EXTINCTION)] = "bianchi2017"
    halpha: Annotated[str, key_of(EXTINCTION)] = "cardelli1989"
    ebv_scale: Literal["SFD", "SF11"] | None = None


class GasTable(Table):
    """From lines to atomic and molecular gas.

    ``alpha_co`` and ``line_ratio`` are the key of a record or the quantity itself, which may vary
    over the disc.
    """

    alpha_co: Annotated[
        str | AlphaCO | Varying | None,
        key_or(
            ALPHA_CO,
            lambda typed: read_varying(typed, ALPHA_CO_VALUE),
            "or alpha_CO itself, such as 4.35 [Msun/pc2 per K km/s]",
        ),
    ] = None
    gas_to_dust: Annotated[str | None, key_of(GAS_TO_DUST)] = None
    line_ratio: Annotated[
        str | LineRatio | Varying | None,
        key_or(LINE_RATIO, lambda typed: read_varying(typed, RATIO), "or a number such as 0.65"),
    ] = None
    ms_offset: Offset | None = None
    g0_over_n: FieldOverDensity | None = None
    hi_opacity: Opacity | None = None

    @model_validator(mode="after")
    def _one_way(self) -> GasTable:
        if (self.alpha_co is None) == (self.gas_to_dust is None):
            raise ValueError(
                "give either alpha_co (molecular gas from CO) or gas_to_dust (from a map of "
                "Sigma_dust)"
            )
        return self


class StarsTable(Table):
    """Stellar surface density from a near-infrared map.

    ``mass_to_light`` is a number, varies over the disc, or is the key of a record.
    """

    record: Annotated[str, key_of(STARS)]
    map: str
    mass_to_light: Annotated[
        str | Varying,
        key_or(MASS_TO_LIGHT, lambda typed: read_varying(typed, RATIO), "or a number such as 0.5"),
    ] = Measured(0.5, 0.0, "0.5")


class StarFormationTable(Table):
    """Which calibration, on which maps.

    ``attenuation`` is by the Balmer decrement, with a map of Hbeta among the maps;
    ``total_infrared`` makes TIR of maps of its bands.
    """

    calibration: Annotated[
        str | StarFormation,
        key_of(STAR_FORMATION, {FINISHED_SFR.key: FINISHED_SFR}),
    ]
    maps: tuple[str, ...]
    attenuation: Annotated[str | None, key_of(BALMER)] = None
    total_infrared: Annotated[str | None, key_of(TOTAL_INFRARED)] = None
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
    lattice_phases: int = Field(default=1, ge=1, le=4)
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
    gas: GasTable | Literal["atomic only", "finished map"]
    star_formation: StarFormationTable
    stars: StarsTable | None = None
    regions: dict[str, RegionTable] = Field(default_factory=dict)
    records: dict[str, RecordTable] = Field(default_factory=dict)
    relations: dict[str, RelationTable] = Field(default_factory=dict)
    comparison: ComparisonTable = ComparisonTable()
    midplane: MidplaneTable | None = None
    radiation_field: RadiationFieldTable | None = None
    rotation: RotationTable | None = None
    gas_state: GasStateTable | None = None
    inside_beam: InsideBeamTable | None = None
    systematics: SystematicsTable | None = None

    def map_of(self, *tracers: str) -> str | None:
        """Name of the first map of one of these tracers."""
        return next((name for name, table in self.maps.items() if table.tracer in tracers), None)

    @property
    def has_molecular(self) -> bool:
        """Whether the recipe asks for molecular gas."""
        return self.gas != "atomic only"

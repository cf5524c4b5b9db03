"""What a recipe may hold: one frozen model for each table.

Models check single values; what ties values together is checked in `checks`.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    PlainValidator,
    model_validator,
)

from kspipe.conversions import ALPHA_CO, EXTINCTION, LINE_RATIO, OH_SCALES, STAR_FORMATION, STARS
from kspipe.core.errors import nearest
from kspipe.core.registry import Registry
from kspipe.core.tracers import TRACERS
from kspipe.core.units import read_unit
from kspipe.maps import MapRequest, NoiseRequest
from kspipe.recipe.quantity import Measured, Position, parse_centre, parse_measured, parse_percent

__all__ = [
    "ComparisonTable",
    "ForegroundTable",
    "GalaxyTable",
    "GasTable",
    "GridTable",
    "MapTable",
    "MetallicityTable",
    "NoiseFile",
    "Recipe",
    "RelationTable",
    "StarFormationTable",
    "StarsTable",
]


def _measured(unit: str, example: str) -> Any:
    return BeforeValidator(lambda typed: parse_measured(typed, unit, example))


def _between(low: float, high: float, what: str) -> Any:
    """Check that a value lies in the open interval, or on its lower end where that is zero."""

    def check(quantity: Measured | None) -> Measured | None:
        if quantity is None:
            return None
        above = (
            quantity.value >= low
            if (low == 0 and ", or 0" in what) or ", 0 or" in what
            else quantity.value > low
        )
        if not (above and quantity.value < high):
            raise ValueError(f"{quantity.text!r}: expected {what}")
        return quantity

    return AfterValidator(check)


def _opacity(factor: Measured) -> Measured:
    if not 1.0 <= factor.value <= 3.0:
        raise ValueError(f"{factor.text!r}: expected a factor from 1 (optically thin) to 3")
    return factor


def _key_of(registry: Registry[Any]) -> Any:
    def check(typed: Any) -> str:
        if not isinstance(typed, str) or typed not in registry:
            raise ValueError(registry.unknown(str(typed)))
        return typed

    return BeforeValidator(check)


def _tracer(typed: Any) -> str:
    if not isinstance(typed, str) or typed not in TRACERS:
        raise ValueError(f'tracer "{typed}" is not known; {nearest(str(typed), TRACERS)}')
    return str(typed)


class Table(BaseModel):
    """A table of the recipe: frozen, no unknown keys."""

    model_config = ConfigDict(frozen=True, extra="forbid", arbitrary_types_allowed=True)


Distance = Annotated[
    Measured, _measured("Mpc", '"8.3 +- 0.4 Mpc"'), _between(0, math.inf, "a positive distance")
]
Inclination = Annotated[
    Measured, _measured("deg", '"41 +- 3 deg"'), _between(0, 90, "0 (face-on), or 0 to 90 deg")
]
Angle = Annotated[Measured, _measured("deg", '"128 +- 2 deg"')]
Abundance = Annotated[
    Measured,
    _measured("", '8.69 or "8.69 +- 0.05"'),
    _between(6.5, 9.5, "12+log10(O/H) between 6.5 and 9.5"),
]
Magnitude = Annotated[Measured, _measured("mag", '"18.82 mag"')]
Wavelength = Annotated[
    Measured,
    _measured("um", '"1538.6 Angstrom" or "0.1539 um"'),
    _between(0, math.inf, "a positive wavelength"),
]
Reddening = Annotated[
    Measured,
    _measured("", '0.03 or "0.03 +- 0.005"'),
    _between(0, 3, "E(B-V), 0 or between 0 and 3 mag"),
]
Ratio = Annotated[
    Measured, _measured("", '0.65 or "0.65 +- 0.08"'), _between(0, 10, "a ratio between 0 and 10")
]
RatioOrZero = Annotated[
    Measured, _measured("", '0.3 or "0.3 +- 0.1"'), _between(0, 10, "a ratio, 0 or 0 to 10")
]
Offset = Annotated[Measured, _measured("dex", '"0.2 +- 0.1 dex"')]
FieldOverDensity = Annotated[
    Measured,
    _measured("", "0.01"),
    _between(0, math.inf, "a positive ratio of radiation field to density"),
]
Opacity = Annotated[Measured, _measured("", '1.1 or "1.1 +- 0.1"'), AfterValidator(_opacity)]
Speed = Annotated[Measured, _measured("km/s", '"640 km/s"')]
Percent = Annotated[Measured, BeforeValidator(parse_percent)]
Arcsec = Annotated[
    Measured, _measured("arcsec", '"4.1 arcmin"'), _between(0, math.inf, "a positive angle")
]

NO_ERROR = Measured(0.0, 0.0, "0 %")


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


_NOISE_EXAMPLE = (
    'expected "measure", a number with its unit such as "0.0012 MJy/sr", or '
    '{file = "...", is = "sigma"}'
)


def noise_value(typed: str) -> tuple[float, str]:
    """Split ``0.0012 MJy/sr`` into number and unit.

    Raises
    ------
    ValueError
        If there is no positive number, or no unit.
    """
    number, _, unit = typed.strip().partition(" ")
    try:
        value = float(number)
    except ValueError:
        value = math.nan
    if not 0 < value < math.inf or not unit.strip():
        raise ValueError(f"{typed!r} is not a noise; {_NOISE_EXAMPLE}")
    return value, unit.strip()


def _level(typed: Any) -> Any:
    if isinstance(typed, BaseModel):
        return typed
    if not isinstance(typed, str):
        raise ValueError(f"{typed!r} is not a noise; {_NOISE_EXAMPLE}")
    if typed != "measure":
        noise_value(typed)
    return typed


def _stated(example: str) -> Any:
    """Check a positive number with a unit that depends on the map."""

    def check(typed: Any) -> str:
        try:
            read_unit(noise_value(str(typed))[1])
        except ValueError:
            raise ValueError(
                f"{typed!r} is not a positive number with its unit; expected, for example, "
                f"{example}"
            ) from None
        return str(typed)

    return BeforeValidator(check)


Level = Annotated[str, BeforeValidator(_level)]


Correlated = Literal["beam", "none", "measure"]


class NoiseFile(Table):
    """Noise that lies in a file of its own."""

    file: Path
    is_: Literal["sigma", "variance", "inverse variance"] = Field(alias="is")
    hdu: int | None = None
    correlated: Correlated | None = None
    gain: float | None = Field(default=None, gt=0)


class NoiseTyped(Table):
    """Noise measured or stated as a number, with its correlation and its shape."""

    level: Level
    correlated: Correlated | None = None
    shape: Path | None = None
    shape_is: Literal["primary beam", "exposure", "weight", "channels"] | None = None
    gain: float | None = Field(default=None, gt=0)

    @model_validator(mode="after")
    def _shape_is_said(self) -> NoiseTyped:
        if (self.shape is None) != (self.shape_is is None):
            raise ValueError(
                'shape = "file.fits" goes with shape_is = "primary beam", "exposure", "weight" or '
                '"channels"'
            )
        return self


def _beam_typed(typed: Any) -> tuple[float, float, float]:
    """Read ``15 arcsec`` or ``13.4 x 10.6 arcsec, pa 35 deg``."""
    example = '"4.6 arcsec" or "13.4 x 10.6 arcsec, pa 35 deg"'
    if not isinstance(typed, str):
        raise ValueError(f"{typed!r} is not a beam; expected, for example, {example}")
    widths, comma, angle = typed.partition(",")
    major, cross, minor = widths.partition(" x ")
    try:
        if not cross:
            width = parse_measured(widths, "arcsec", example).value
            beam = (width, width, 0.0)
        else:
            pa = parse_measured(angle.strip().removeprefix("pa"), "deg", example).value
            unit = minor.strip().split(" ", 1)[1]
            beam = (
                parse_measured(f"{major} {unit}", "arcsec", example).value,
                parse_measured(minor, "arcsec", example).value,
                pa % 180.0,
            )
    except (ValueError, IndexError):
        raise ValueError(f"{typed!r} is not a beam; expected, for example, {example}") from None
    if (comma and not cross) or beam[1] <= 0 or beam[0] < beam[1]:
        raise ValueError(f"{typed!r} is not a beam; expected, for example, {example}")
    return beam


def _shift_typed(typed: Any) -> tuple[float, float]:
    """Read ``1.2 -0.5 arcsec``: east and north."""
    example = '"1.2 -0.5 arcsec" (east and north)'
    words = typed.split() if isinstance(typed, str) else []
    if len(words) != 3:
        raise ValueError(f"{typed!r} is not a shift; expected, for example, {example}")
    east, north = (
        parse_measured(f"{word} {words[2]}", "arcsec", example).value for word in words[:2]
    )
    return east, north


class MapTable(Table):
    """One map: what it is, where it lies, and what its header does not say."""

    tracer: Annotated[str, BeforeValidator(_tracer)]
    file: Path
    noise: Annotated[NoiseFile | NoiseTyped | str, PlainValidator(_level)]
    hdu: int | None = None
    unit: str | None = None
    beam: Annotated[tuple[float, float, float] | None, BeforeValidator(_beam_typed)] = None
    averages_pixels: bool | None = None
    calibration_error: Percent = NO_ERROR
    pedestal_error: Annotated[str | None, _stated('"0.005 MJy/sr"')] = None
    zeros: Literal["flux", "blank"] | None = None
    counts: Annotated[str | None, _stated('"1.40e-15 erg/s/cm2/A"')] = None
    zero_point: Magnitude | None = None
    wavelength: Wavelength | None = None
    psf: Path | None = None
    regrid: Literal["spline", "area"] | None = None
    shift: Annotated[tuple[float, float] | None, BeforeValidator(_shift_typed)] = None
    mask_negative: bool = False
    short_spacings: Literal["yes", "no", "unknown"] | None = None
    largest_scale: Arcsec | None = None
    total_flux: Level | None = None
    nii_ratio: RatioOrZero | None = None
    as_24um: Ratio | None = None

    def request(self, name: str) -> MapRequest:
        """Plain values for the room that reads maps."""
        is_radio = TRACERS[self.tracer].is_radio
        usual: Literal["beam", "none"] = "beam" if is_radio else "none"
        averages = (not is_radio) if self.averages_pixels is None else self.averages_pixels
        return MapRequest(
            name=name,
            tracer=self.tracer,
            file=self.file,
            noise=self._noise(usual),
            hdu=self.hdu,
            unit=self.unit,
            beam=self.beam,
            averages_pixels=averages,
            calibration_error=self.calibration_error.value,
            pedestal_error=noise_value(self.pedestal_error) if self.pedestal_error else None,
            zeros=self.zeros,
            counts=self.counts,
            zero_point=self.zero_point.value if self.zero_point else None,
            wavelength_um=self.wavelength.value if self.wavelength else None,
            psf=self.psf,
            regrid=self.regrid,
            shift_arcsec=self.shift or (0.0, 0.0),
            mask_negative=self.mask_negative,
            short_spacings=self.short_spacings,
            largest_scale_arcsec=self.largest_scale.value if self.largest_scale else None,
            total_flux=self.total_flux,
        )

    def _noise(self, usual: Literal["beam", "none"]) -> NoiseRequest:
        noise = self.noise
        if isinstance(noise, NoiseFile):
            return NoiseRequest(
                "file",
                file=noise.file,
                hdu=noise.hdu,
                stated=noise.is_,
                correlated=noise.correlated or usual,
                gain=noise.gain,
            )
        typed = noise if isinstance(noise, NoiseTyped) else NoiseTyped(level=noise)
        value, unit = (math.nan, "") if typed.level == "measure" else noise_value(typed.level)
        return NoiseRequest(
            "measure" if typed.level == "measure" else "value",
            value=value,
            unit=unit,
            correlated=typed.correlated or usual,
            shape_file=typed.shape,
            shape_is=typed.shape_is or "primary beam",
            gain=typed.gain,
        )


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
    uv: Annotated[str, _key_of(EXTINCTION)] = "bianchi2017"
    halpha: Annotated[str, _key_of(EXTINCTION)] = "cardelli1989"
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

    alpha_co: Annotated[str, _key_of(ALPHA_CO)]
    line_ratio: Annotated[
        Measured | str | None, BeforeValidator(_line_ratio), AfterValidator(_line_ratio_bounds)
    ] = None
    ms_offset: Offset | None = None
    g0_over_n: FieldOverDensity | None = None
    hi_opacity: Opacity | None = None


class StarsTable(Table):
    """Stellar surface density from a near-infrared map."""

    record: Annotated[str, _key_of(STARS)]
    map: str
    mass_to_light: Ratio = Measured(0.5, 0.0, "0.5")


class StarFormationTable(Table):
    """Which calibration, on which maps."""

    calibration: Annotated[str, _key_of(STAR_FORMATION)]
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

    def map_of(self, *tracers: str) -> str | None:
        """Name of the first map of one of these tracers."""
        return next((name for name, table in self.maps.items() if table.tracer in tracers), None)

    @property
    def has_molecular(self) -> bool:
        """Whether the recipe asks for molecular gas."""
        return isinstance(self.gas, GasTable)

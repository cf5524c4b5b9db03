"""What a recipe says of one map: its tracer, its file, and what its header does not say."""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, BeforeValidator, Field, PlainValidator, model_validator

from kspipe.conversions import NITROGEN, Finished
from kspipe.core.tracers import TRACERS
from kspipe.core.units import read_unit
from kspipe.maps import MapRequest, NoiseRequest
from kspipe.recipe.kinds import FRACTION, Fraction, RatioOrZero
from kspipe.recipe.quantity import parse_measured
from kspipe.recipe.values import (
    NO_ERROR,
    Arcsec,
    Magnitude,
    Percent,
    Ratio,
    Table,
    TracerName,
    Wavelength,
    key_of,
)
from kspipe.recipe.varying import Varying, read_varying

__all__ = ["Filter", "MapTable", "NoiseFile", "NoiseTyped", "noise_value"]

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


def _helium(typed: Any) -> float | None:
    if typed is not None and typed not in (1.0, 1.36, 1.4):
        raise ValueError(f"{typed!r}: expected 1.0 (hydrogen only), 1.36 or 1.4")
    return None if typed is None else float(typed)


@dataclass(frozen=True)
class Filter:
    """Emission that is smoother than a length in the disc's distance counts as diffuse.

    Attributes
    ----------
    text : str
        The length as typed.
    """

    text: str

    @property
    def kpc(self) -> float:
        """The length."""
        return parse_measured(self.text, "kpc", '"2 kpc"').value

    def __str__(self) -> str:
        return self.text


def _diffuse(typed: Any) -> Any:
    """Read ``"none"``, a fraction that may vary, or ``{filter = "2 kpc"}``."""
    if typed is None or typed == "none" or isinstance(typed, Filter):
        return None if typed == "none" else typed
    if isinstance(typed, dict) and "filter" in typed:
        length = Filter(str(typed["filter"]))
        if set(typed) != {"filter"} or not length.kpc > 0:
            raise ValueError(f'{typed!r} is no filter; expected {{filter = "2 kpc"}}')
        return length
    return read_varying(typed, FRACTION)


class MapTable(Table):
    """One map: what it is, where it lies, and what its header does not say."""

    tracer: TracerName
    file: Path
    noise: Annotated[NoiseFile | NoiseTyped | str, PlainValidator(_level)]
    hdu: int | None = None
    unit: str | None = None
    beam: Annotated[tuple[float, float, float] | None, BeforeValidator(_beam_typed)] = None
    averages_pixels: bool | None = None
    calibration_error: Percent = NO_ERROR
    pedestal_error: Annotated[str | None, _stated('"0.005 MJy/sr"')] = None
    background: Literal["keep", "subtract"] = "keep"
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
    nii_relation: Annotated[str | None, key_of(NITROGEN)] = None
    as_24um: Ratio | None = None
    thermal_fraction: Fraction | None = None
    diffuse: Annotated[Varying | Filter | None, BeforeValidator(_diffuse)] = None
    inclination: Literal["face-on", "sky"] | None = None
    helium: Annotated[float | None, BeforeValidator(_helium)] = None
    imf: Literal["Kroupa", "Salpeter", "Chabrier"] | None = None

    @property
    def finished(self) -> Finished | None:
        """Conventions of a finished map; None for a map of an intensity."""
        if self.inclination is None:
            return None
        return Finished(self.inclination == "face-on", self.helium, self.imf)

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
            background=self.background,
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

"""The door: from the unit that a file is stored in to the canonical intensity of its tracer.

Fluxes per beam, per pixel or per count become intensities here. A unit that could be read in two
ways, or that is another quantity than the tracer's, stops with the units that would fit.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import astropy.units as u
import numpy as np
from numpy.typing import NDArray

from kspipe.core.constants import (
    ARCSEC2_SR,
)
from kspipe.core.errors import Fault, UnitError
from kspipe.core.tracers import Tracer
from kspipe.core.units import StoredUnit, UnitReadingError, read_unit
from kspipe.maps.canonical import (
    FLUX_PER_ANGSTROM,
    LINE_FLUX,
    SPEED,
    band_intensity,
    line_intensity,
    line_temperature,
)

__all__ = [
    "Door",
    "UnitReading",
    "examples",
    "linear_door",
    "open_door",
    "read_stored_unit",
    "refuse_unused_counts",
]

Array = NDArray[np.float64]

_EXAMPLES = {
    "K km/s": "'K km/s', 'Jy/beam km/s', 'Jy/beam m/s'",
    "MJy/sr": "'MJy/sr', 'Jy/pixel', 'Jy/beam', 'erg/s/cm2/A/pixel', 'mag(AB)/arcsec2'",
    "erg/s/cm2/sr": "'erg/s/cm2/arcsec2', 'erg/s/cm2/sr', 'Rayleigh', '0.1 Rayleigh'",
    "Msun/pc2": "'Msun/pc2', 'Msun/kpc2'",
    "Msun/yr/kpc2": "'Msun/yr/kpc2', 'Msun/yr/pc2'",
}

_COUNTS: Final = (u.count, u.DN, u.adu, u.electron)

_FINISHED_UNITS: Final = {
    "Msun/pc2": u.Msun / u.pc**2,
    "Msun/yr/kpc2": u.Msun / u.yr / u.kpc**2,
}
_NO_SOLID_ANGLE: Final = "a flux without a solid angle (per beam, pixel, sr or arcsec2?)"
# What a refused unit is, beams and pixels taken as steradians; the first that fits is told.
_KINDS: Final = (
    (u.K, "a temperature that is not integrated over velocity"),
    (u.Jy / u.sr, "an intensity per frequency, not integrated over a line"),
    (FLUX_PER_ANGSTROM / u.sr, "an intensity per wavelength, not integrated over a line"),
    (LINE_FLUX / u.sr, "an intensity integrated over frequency"),
    (u.Jy, _NO_SOLID_ANGLE),
    (u.Jy * SPEED, _NO_SOLID_ANGLE),
    (LINE_FLUX, _NO_SOLID_ANGLE),
    (FLUX_PER_ANGSTROM, _NO_SOLID_ANGLE),
    (u.Msun / u.pc**2, "a surface density, which is read for finished maps (Sigma_HI ...) only"),
    (u.cm**-2, "a column density, which is read for HI only"),
    (u.mag, "a magnitude of an unsaid system and without a solid angle"),
    (u.mag / u.sr, "a magnitude of an unsaid system (AB is written mag(AB)/arcsec2)"),
)


@dataclass(frozen=True)
class UnitReading:
    """How a stored unit was understood.

    Attributes
    ----------
    text : str
        As stored or typed.
    origin : str
        ``header BUNIT`` or ``recipe``.
    unit : astropy.units.UnitBase or astropy.units.MagUnit
    key : str
        What to type in the recipe for another reading.
    """

    text: str
    origin: str
    unit: StoredUnit
    key: str

    @property
    def is_magnitude(self) -> bool:
        """Whether the stored numbers are AB magnitudes."""
        return isinstance(self.unit, u.MagUnit)

    @property
    def linear(self) -> u.UnitBase:
        """The unit; for magnitudes that of the flux at magnitude zero."""
        return self.unit.physical_unit if self.is_magnitude else self.unit

    @property
    def counted(self) -> u.UnitBase | None:
        """What the stored numbers count: photons or steps of a detector; None for a flux."""
        return next((one for one in _COUNTS if one in self.linear.bases), None)

    @property
    def needs_frequency(self) -> bool:
        """Whether flux density must become brightness temperature."""
        return bool(_per_steradian(self.linear).is_equivalent(u.Jy / u.sr * SPEED))


@dataclass(frozen=True)
class Door:
    """The way from stored numbers to the canonical intensity, and why.

    Attributes
    ----------
    factor : float
        Canonical intensity for a stored value of one, or at magnitude zero, in a pixel at the
        galaxy's centre.
    per_pixel : bool
        Whether the stored number counts per pixel, so that the factor goes with 1 / pixel area.
    reason : str
        One line for the history.
    is_magnitude : bool
        Whether the stored numbers are magnitudes: -2.5 log10 of the intensity over `factor`.
    """

    factor: float
    per_pixel: bool
    reason: str
    is_magnitude: bool = False

    def intensity(self, stored: Array, relative_area: Array | float = 1.0) -> Array:
        """Turn stored numbers into the canonical intensity, in place.

        Parameters
        ----------
        stored : (ny, nx) float64 array
            Overwritten.
        relative_area : (ny, nx) float64 array or float
            Area of each pixel over that of the pixel at the galaxy's centre.

        Returns
        -------
        (ny, nx) float64 array
            NaN where `stored` is NaN, or stands for a blank as a magnitude beyond all numbers.
        """
        if self.is_magnitude:
            stored *= -0.4
            with np.errstate(over="ignore"):
                np.power(10.0, stored, out=stored)
            stored[np.isinf(stored)] = np.nan
        stored *= self.factor
        if self.per_pixel:
            stored /= relative_area
        return stored


def examples(tracer: Tracer) -> str:
    """Units that would fit a tracer."""
    if tracer.unit == "erg/s/cm2/sr" and tracer.key != "Halpha":
        return "'erg/s/cm2/arcsec2', 'erg/s/cm2/sr', 'W/m2/sr'"
    extra = ", 'cm-2'" if tracer.key == "HI" else ""
    return _EXAMPLES[tracer.unit] + extra


def read_stored_unit(
    bunit: object, override: str | None, tracer: Tracer, where: str, *, key: str = ""
) -> UnitReading:
    """Read the unit of a map from the recipe or else from its header.

    Parameters
    ----------
    bunit : object
        The header's card; None where there is none.
    override : str or None
        The recipe's word.
    tracer : Tracer
    where : str
        For messages: the map, and after a comma its file.
    key : str, optional
        What to type in the recipe; the map's ``unit`` by default.

    Raises
    ------
    UnitError
        If there is no unit, or it cannot be read in exactly one way.
    """
    key = key or f"{where.partition(',')[0]}.unit"
    text, origin = (override, "recipe") if override is not None else (bunit, "header BUNIT")
    if not isinstance(text, str) or not text.strip():
        raise UnitError(
            Fault(where, f"the map has no unit (BUNIT is {bunit!r})", _what_to_type(key, tracer))
        )
    text = text.strip()
    try:
        return UnitReading(text, origin, read_unit(text), key)
    except UnitReadingError as error:
        raise UnitError(
            Fault(
                where,
                f"the unit {text!r} ({origin}) cannot be read: {error}",
                _what_to_type(key, tracer),
            )
        ) from error


def _what_to_type(key: str, tracer: Tracer) -> str:
    return f"type {key} = ...; for {tracer.key}: {examples(tracer)}"


def open_door(
    reading: UnitReading,
    tracer: Tracer,
    *,
    frequency_ghz: float | None,
    beam_area_arcsec2: float | None,
    pixel_area_arcsec2: float,
    where: str,
    frequency_note: str = "",
    counts: str | None = None,
    zero_point: float | None = None,
    wavelength_um: float | None = None,
) -> Door:
    """Work out the factor from the stored unit to the canonical intensity.

    Parameters
    ----------
    reading : UnitReading
    tracer : Tracer
    frequency_ghz : float or None
        Observed frequency; the Rayleigh-Jeans relation uses it, never the rest frequency.
    beam_area_arcsec2, pixel_area_arcsec2 : float
        Solid angles of the beam and of one pixel.
    where : str
        For messages: the map, and after a comma its file.
    frequency_note : str, optional
        Where the frequency comes from.
    counts : str, optional
        What one stored count (per second) is worth: a number and the unit of a flux, taken per
        pixel, or of an intensity.
    zero_point : float, optional
        AB magnitude of one stored count (per second) in a pixel.
    wavelength_um : float, optional
        For units per wavelength; the effective wavelength of the tracer by default.

    Returns
    -------
    Door

    Raises
    ------
    UnitError
        If the unit is not one of this tracer's intensities.
    """
    notes: list[str] = []
    unit = reading.linear
    if reading.counted is not None:
        unit = _weigh_counts(reading, tracer, counts, zero_point, where, notes)
    per_pixel = u.pix in unit.bases
    if u.beam in unit.bases:
        if beam_area_arcsec2 is None:
            raise UnitError(
                Fault(
                    where,
                    f"the unit {reading.text!r} needs a beam",
                    'type beam = "... arcsec" for this map',
                )
            )
        unit = u.Unit(unit * u.beam / (beam_area_arcsec2 * ARCSEC2_SR * u.sr))
        notes.append(f"beam of {beam_area_arcsec2:.6g} arcsec2")
    if per_pixel:
        unit = u.Unit(unit * u.pix / (pixel_area_arcsec2 * ARCSEC2_SR * u.sr))
        notes.append(f"pixel of {pixel_area_arcsec2:.6g} arcsec2")
    if tracer.unit == "K km/s":
        factor = line_temperature(unit, tracer, frequency_ghz, frequency_note, notes)
    elif tracer.unit == "MJy/sr":
        factor = band_intensity(unit, tracer, wavelength_um, notes)
    elif tracer.unit == "erg/s/cm2/sr":
        factor = line_intensity(unit, tracer, notes)
    else:
        finished = _FINISHED_UNITS[tracer.unit]
        factor = float(unit.to(finished)) if unit.is_equivalent(finished) else None
    if factor is None:
        raise UnitError(_wrong_kind(reading, unit, tracer, where, notes))
    one = "magnitude 0" if reading.is_magnitude else "1 stored unit"
    because = f" ({', '.join(notes)})" if notes else ""
    reason = (
        f"unit {reading.text!r} from {reading.origin} read as {reading.unit.to_string()!r}; "
        f"{one} = {factor:.8g} {tracer.unit}{because}"
    )
    return Door(factor, per_pixel, reason, reading.is_magnitude)


def linear_door(door: Door, tracer: Tracer, where: str) -> Door:
    """Refuse an error in magnitudes, and let any other pass.

    Raises
    ------
    UnitError
        If the door is one for magnitudes.
    """
    if door.is_magnitude:
        raise UnitError(
            Fault(
                where,
                "an error in magnitudes is a share of each pixel's own flux, and magnitudes have "
                "no blank sky around zero: a noise or zero level can be stated as an intensity "
                "only",
                f'type {where} = "... {tracer.unit}"',
            )
        )
    return door


def refuse_unused_counts(
    reading: UnitReading, counts: str | None, zero_point: float | None, where: str
) -> None:
    """Refuse a worth of counts for a map that is not in counts.

    Raises
    ------
    UnitError
        If there is one.
    """
    if reading.counted is None and (counts is not None or zero_point is not None):
        name, key = _table(where), "zero_point" if counts is None else "counts"
        raise UnitError(
            Fault(
                f"{name}.{key}",
                f"the unit {reading.text!r} ({reading.origin}) reads as "
                f"{reading.unit.to_string()!r}, which counts nothing",
                f'remove {name}.{key}, or type {name}.unit = "counts/s"',
            )
        )


def _table(where: str) -> str:
    """``maps.NAME`` of a place in that table."""
    return ".".join(where.partition(",")[0].split(".")[:2])


def _wrong_kind(
    reading: UnitReading, unit: u.UnitBase, tracer: Tracer, where: str, notes: list[str]
) -> Fault:
    """Say what the unit (per steradian in `unit`) is instead of an intensity of the tracer."""
    kind = next((f" but {words}" for one, words in _KINDS if unit.is_equivalent(one)), "")
    weighed = f"; {notes[0]}" if reading.counted is not None else ""
    return Fault(
        where,
        f"the unit {reading.text!r} ({reading.origin}) reads as {reading.unit.to_string()!r}, "
        f"which is not an intensity of {tracer.key}{kind}{weighed}",
        _what_to_type(reading.key, tracer),
    )


def _power(unit: u.UnitBase, base: u.UnitBase) -> float:
    return float(dict(zip(unit.bases, unit.powers, strict=True)).get(base, 0))


def _per_steradian(unit: u.UnitBase) -> u.UnitBase:
    """The unit with steradians in the place of beams and pixels, to compare kinds."""
    for angle in (u.beam, u.pix):
        unit = unit * (u.sr / angle) ** _power(unit, angle)
    return unit


def _weigh_counts(
    reading: UnitReading,
    tracer: Tracer,
    counts: str | None,
    zero_point: float | None,
    where: str,
    notes: list[str],
) -> u.UnitBase:
    """Put what one count (per second) is worth in the place of the count.

    Counts are numbers of one pixel; a worth that is a flux is therefore per pixel, unless the
    counts themselves are stored per solid angle.
    """
    name = _table(where)
    if counts is not None and zero_point is not None:
        raise UnitError(
            Fault(
                where,
                f"counts = {counts!r} and zero_point = {zero_point:g} mag both say what one "
                f"{reading.counted} is worth",
                f"remove {name}.counts or {name}.zero_point",
            )
        )
    if zero_point is not None:
        worth = u.Unit(10.0 ** (-0.4 * zero_point) * u.AB)
        told = f"AB magnitude {zero_point:g} (recipe zero_point)"
    elif counts is not None:
        worth = _worth(counts, name)
        told = f"{counts} (recipe counts)"
    else:
        raise UnitError(
            Fault(
                where,
                f"the unit {reading.text!r} ({reading.origin}) reads as "
                f"{reading.unit.to_string()!r}, which is not an intensity of {tracer.key} without "
                f"what one {reading.counted} is worth",
                f'type {name}.counts = "... erg/s/cm2/A" (what one is worth in a pixel) or '
                f'{name}.zero_point = "... mag" (its AB magnitude), or {reading.key} = ...; for '
                f"{tracer.key}: {examples(tracer)}",
            )
        )
    number = reading.linear / reading.counted
    is_rate = _power(number, u.s) == -1
    if is_rate:
        number = number * u.s
    if _has_solid_angle(worth):
        number = number * u.pix ** (-_power(number, u.pix))
    elif not _has_solid_angle(number):
        number = number / u.pix
    weighed = u.Unit(number * worth)
    one = f"{reading.counted}{'/s' if is_rate else ''}{' of a pixel' * (u.pix in weighed.bases)}"
    notes.append(f"1 {one} is {told}")
    return weighed


def _worth(counts: str, name: str) -> u.UnitBase:
    """Read ``1.40e-15 erg/s/cm2/A`` as a unit."""
    number, _, text = counts.strip().partition(" ")
    try:
        unit = read_unit(text)
        if isinstance(unit, u.MagUnit) or not 0 < float(number) < math.inf:
            raise UnitReadingError("a positive number and the unit of a flux or intensity are due")
        return u.Unit(float(number) * unit)
    except ValueError as error:
        raise UnitError(
            Fault(
                f"{name}.counts",
                f"{counts!r} cannot be read: {error}",
                f'type {name}.counts = "1.40e-15 erg/s/cm2/A", for example',
            )
        ) from error


def _has_solid_angle(unit: u.UnitBase) -> bool:
    return u.rad in unit.decompose().bases or any(one in unit.bases for one in (u.beam, u.pix))

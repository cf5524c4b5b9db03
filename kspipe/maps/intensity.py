"""The door: from the unit that a file is stored in to the canonical intensity of its tracer."""

from __future__ import annotations

from dataclasses import dataclass

import astropy.units as u

from kspipe.core.constants import (
    ARCSEC2_SR,
    C_CM_S,
    H_ERG_S,
    HALPHA_CM,
    HI_COLUMN_PER_K_KMS,
    RAYLEIGH_PHOTONS_S_CM2_SR,
)
from kspipe.core.errors import Fault, UnitError
from kspipe.core.tracers import Tracer
from kspipe.core.units import UnitReadingError, read_unit

__all__ = ["Door", "UnitReading", "examples", "open_door", "read_stored_unit"]

_EXAMPLES = {
    "K km/s": "'K km/s', 'Jy/beam km/s', 'Jy/beam m/s'",
    "MJy/sr": "'MJy/sr', 'Jy/pixel', 'Jy/beam'",
    "erg/s/cm2/sr": "'erg/s/cm2/arcsec2', 'erg/s/cm2/sr', 'Rayleigh', '0.1 Rayleigh'",
}


@dataclass(frozen=True)
class UnitReading:
    """How a stored unit was understood.

    Attributes
    ----------
    text : str
        As stored or typed.
    origin : str
        ``header BUNIT`` or ``recipe``.
    unit : astropy.units.UnitBase
    """

    text: str
    origin: str
    unit: u.UnitBase

    @property
    def needs_beam(self) -> bool:
        """Whether the unit counts per beam."""
        return u.beam in self.unit.decompose().bases

    @property
    def needs_frequency(self) -> bool:
        """Whether flux density must become brightness temperature."""
        per_speed = (self.unit * u.beam * u.pix / (u.km / u.s)).decompose()
        return not any(base in per_speed.bases for base in (u.K,)) and u.beam in (
            self.unit.decompose().bases
        )


@dataclass(frozen=True)
class Door:
    """The factor from stored numbers to the canonical intensity, and why.

    Attributes
    ----------
    factor : float
        Canonical intensity for a stored value of one at `pixel_area_arcsec2`.
    per_pixel : bool
        Whether the stored number counts per pixel, so that the factor goes with 1 / pixel area.
    reason : str
        One line for the history.
    """

    factor: float
    per_pixel: bool
    reason: str


def examples(tracer: Tracer) -> str:
    """Units that would fit a tracer."""
    extra = ", 'cm-2'" if tracer.key == "HI" else ""
    return _EXAMPLES[tracer.unit] + extra


def read_stored_unit(
    bunit: object, override: str | None, tracer: Tracer, where: str
) -> UnitReading:
    """Read the unit of a map from the recipe or else from its header.

    Raises
    ------
    UnitError
        If there is no unit, or it cannot be read in exactly one way.
    """
    text, origin = (override, "recipe") if override is not None else (bunit, "header BUNIT")
    fix = f"type unit = ... for this map; for {tracer.key}: {examples(tracer)}"
    if not isinstance(text, str) or not text.strip():
        raise UnitError(Fault(where, f"the map has no unit (BUNIT is {bunit!r})", fix))
    try:
        return UnitReading(text.strip(), origin, read_unit(text))
    except UnitReadingError as error:
        raise UnitError(
            Fault(where, f"the unit {text.strip()!r} ({origin}) cannot be read: {error}", fix)
        ) from error


def open_door(
    reading: UnitReading,
    tracer: Tracer,
    *,
    frequency_ghz: float | None,
    beam_area_arcsec2: float | None,
    pixel_area_arcsec2: float,
    where: str,
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
        For messages.

    Returns
    -------
    Door

    Raises
    ------
    UnitError
        If the unit is not one of this tracer's intensities.
    """
    unit, notes = reading.unit, []
    per_pixel = u.pix in unit.bases
    if u.beam in unit.bases:
        if beam_area_arcsec2 is None:
            raise UnitError(Fault(where, f"the unit {reading.text!r} needs a beam"))
        unit = u.Unit(unit * u.beam / (beam_area_arcsec2 * ARCSEC2_SR * u.sr))
        notes.append(f"beam of {beam_area_arcsec2:.6g} arcsec2")
    if per_pixel:
        unit = u.Unit(unit * u.pix / (pixel_area_arcsec2 * ARCSEC2_SR * u.sr))
        notes.append(f"pixel of {pixel_area_arcsec2:.6g} arcsec2")
    factor = _factor(unit, tracer, frequency_ghz, notes)
    if factor is None:
        raise UnitError(
            Fault(
                where,
                f"the unit {reading.text!r} ({reading.origin}) reads as "
                f"{reading.unit.to_string()!r}, which is not an intensity of {tracer.key}",
                f"type unit = ... for this map; for {tracer.key}: {examples(tracer)}",
            )
        )
    because = f" ({', '.join(notes)})" if notes else ""
    reason = (
        f"unit {reading.text!r} from {reading.origin} read as {reading.unit.to_string()!r}; "
        f"1 stored unit = {factor:.8g} {tracer.unit}{because}"
    )
    return Door(factor, per_pixel, reason)


def _factor(
    unit: u.UnitBase, tracer: Tracer, frequency_ghz: float | None, notes: list[str]
) -> float | None:
    """Factor from a unit free of beams and pixels to the tracer's canonical unit, or None."""
    speed = u.km / u.s
    if tracer.unit == "K km/s":
        if unit.is_equivalent(u.K * speed):
            return float(unit.to(u.K * speed))
        if unit.is_equivalent(u.cm**-2) and tracer.key == "HI":
            notes.append(f"{HI_COLUMN_PER_K_KMS:.4g} H atoms per cm2 for 1 K km/s, optically thin")
            return float(unit.to(u.cm**-2)) / HI_COLUMN_PER_K_KMS
        if unit.is_equivalent(u.Jy / u.sr * speed) and frequency_ghz is not None:
            notes.append(f"Rayleigh-Jeans at {frequency_ghz:.8g} GHz observed")
            kelvin = u.brightness_temperature(frequency_ghz * u.GHz)
            per_speed = unit.to(u.Jy / u.sr * speed)
            return float((per_speed * u.Jy / u.sr).to_value(u.K, kelvin))
        return None
    target = u.MJy / u.sr if tracer.unit == "MJy/sr" else u.erg / u.s / u.cm**2 / u.sr
    if unit.is_equivalent(target):
        return float(unit.to(target))
    if tracer.unit == "erg/s/cm2/sr" and unit.is_equivalent(u.R):
        notes.append("photons of 6562.8 A")
        photon_erg = H_ERG_S * C_CM_S / HALPHA_CM
        return float(unit.to(u.R)) * RAYLEIGH_PHOTONS_S_CM2_SR * photon_erg
    return None

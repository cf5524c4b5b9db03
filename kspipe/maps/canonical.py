"""What one unit of a flux or intensity is worth in the canonical intensity of a tracer."""

from __future__ import annotations

from typing import Final

import astropy.units as u

from kspipe.core.constants import (
    C_CM_S,
    H_ERG_S,
    HALPHA_CM,
    HI_COLUMN_PER_K_KMS,
    RAYLEIGH_PHOTONS_S_CM2_SR,
)
from kspipe.core.tracers import Tracer

__all__ = [
    "FLUX_PER_ANGSTROM",
    "LINE_FLUX",
    "SPEED",
    "band_intensity",
    "line_intensity",
    "line_temperature",
]

SPEED: Final = u.km / u.s
LINE_FLUX: Final = u.erg / u.s / u.cm**2
FLUX_PER_ANGSTROM: Final = LINE_FLUX / u.AA


def line_temperature(
    unit: u.UnitBase,
    tracer: Tracer,
    frequency_ghz: float | None,
    frequency_note: str,
    notes: list[str],
) -> float | None:
    """Brightness temperature over velocity [K km/s] for one `unit`, or None."""
    if unit.is_equivalent(u.K * SPEED):
        return float(unit.to(u.K * SPEED))
    if unit.is_equivalent(u.cm**-2) and tracer.key == "HI":
        notes.append(f"{HI_COLUMN_PER_K_KMS:.4g} H atoms per cm2 for 1 K km/s, optically thin")
        return float(unit.to(u.cm**-2)) / HI_COLUMN_PER_K_KMS
    if unit.is_equivalent(u.Jy / u.sr * SPEED) and frequency_ghz is not None:
        origin = f" from {frequency_note}" if frequency_note else ""
        notes.append(f"Rayleigh-Jeans at {frequency_ghz:.8g} GHz observed{origin}")
        kelvin = u.brightness_temperature(frequency_ghz * u.GHz)
        per_speed = unit.to(u.Jy / u.sr * SPEED)
        return float((per_speed * u.Jy / u.sr).to_value(u.K, kelvin))
    return None


def band_intensity(
    unit: u.UnitBase, tracer: Tracer, wavelength_um: float | None, notes: list[str]
) -> float | None:
    """Specific intensity [MJy/sr] for one `unit`, or None."""
    if unit.is_equivalent(u.MJy / u.sr):
        return float(unit.to(u.MJy / u.sr))
    if unit.is_equivalent(FLUX_PER_ANGSTROM / u.sr):
        if wavelength_um is None:
            wavelength, origin = C_CM_S / (tracer.frequency_ghz * 1e9) * u.cm, tracer.source
        else:
            wavelength, origin = wavelength_um * u.um, "recipe wavelength"
        notes.append(f"lambda^2 / c at {wavelength.to_value(u.AA):.6g} Angstrom: {origin}")
        per_frequency = (1.0 * unit) * wavelength**2 / (C_CM_S * u.cm / u.s)
        return float(per_frequency.to_value(u.MJy / u.sr))
    return None


def line_intensity(unit: u.UnitBase, tracer: Tracer, notes: list[str]) -> float | None:
    """Integrated intensity [erg/s/cm2/sr] for one `unit`, or None; photons of H-alpha only."""
    if unit.is_equivalent(LINE_FLUX / u.sr):
        return float(unit.to(LINE_FLUX / u.sr))
    if unit.is_equivalent(u.R) and tracer.key == "Halpha":
        notes.append("photons of 6562.8 A")
        photon_erg = H_ERG_S * C_CM_S / HALPHA_CM
        return float(unit.to(u.R)) * RAYLEIGH_PHOTONS_S_CM2_SR * photon_erg
    return None

"""What an interferometer map may lack: the flux on scales that its shortest spacings do not see."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import astropy.units as u

from kspipe.core.constants import C_CM_S, JY_CGS, K_ERG_K
from kspipe.core.errors import Fault, MapError
from kspipe.core.tracers import RADIO_LINES
from kspipe.core.units import UnitReadingError, read_unit
from kspipe.maps.header import header_frequency_ghz, observed_frequency_ghz
from kspipe.maps.request import MapRequest
from kspipe.maps.source import MapSource

__all__ = ["ShortSpacings", "Total", "judge_short_spacings", "jy_per_k_sr", "read_total"]

# A map with its short spacings and a single-dish total that differ by more than this disagree:
# either flux scale is good to 5 to 10 % (common practice).
LARGEST_DIFFERENCE: Final = 0.15
# What interferometers without short spacings miss of galaxy discs (common practice).
USUALLY_MISSING: Final = (0.10, 0.50)
COMMON_PRACTICE: Final = "10 to 50 %, scale dependent (common practice)"


@dataclass(frozen=True)
class Total:
    """A flux by a single dish, to compare with.

    Attributes
    ----------
    jy_kms : float
    frequency_ghz : float
        At which the line was observed.
    text : str
        As typed.
    """

    jy_kms: float
    frequency_ghz: float
    text: str


@dataclass(frozen=True)
class ShortSpacings:
    """What is known of the short spacings of one map.

    Attributes
    ----------
    stated : {"yes", "no", "unknown"} or None
        By the recipe; None where it does not say.
    largest_scale_arcsec : float or None
        Largest scale that the interferometer sees, if typed.
    flux_jy_kms, flux_error_jy_kms : float or None
        Of the matched map on the grid's sky, with its random error; None without a total.
    total : Total or None
    """

    stated: str | None
    largest_scale_arcsec: float | None = None
    flux_jy_kms: float | None = None
    flux_error_jy_kms: float | None = None
    total: Total | None = None

    @property
    def is_open(self) -> bool:
        """Whether flux may be missing."""
        return self.stated in ("no", "unknown")

    @property
    def ratio(self) -> float | None:
        """Flux of the map over the total."""
        if self.total is None or self.flux_jy_kms is None:
            return None
        return self.flux_jy_kms / self.total.jy_kms

    @property
    def missing(self) -> tuple[float, float] | None:
        """Least and largest fraction by which the flux may be higher; never lower."""
        if not self.is_open:
            return None
        if self.ratio is None or self.ratio <= 0:
            return USUALLY_MISSING
        return 0.0, max(1.0 / self.ratio - 1.0, 0.0)

    @property
    def basis(self) -> str:
        """What the missing fraction rests on."""
        if not self.is_open:
            return ""
        if self.ratio is None or self.ratio <= 0 or self.total is None:
            return COMMON_PRACTICE
        return f"total flux {self.total.text}"

    def scale_text(self, kpc_per_arcsec: float) -> str:
        """Largest scale in arcsec and kpc, or that it is not known."""
        if self.largest_scale_arcsec is None:
            return "largest scale unknown"
        kpc = self.largest_scale_arcsec * kpc_per_arcsec
        return f"largest scale {self.largest_scale_arcsec:.4g} arcsec = {kpc:.3g} kpc"

    def text(self, kpc_per_arcsec: float) -> str:
        """One line for tables and warnings."""
        compared = ""
        if self.ratio is not None and self.total is not None:
            compared = f"; map / total flux {self.total.text} = {self.ratio:.3g}"
        if self.stated is None:
            return f"short spacings not stated{compared}"
        if self.missing is None:
            return f"short spacings included{compared}"
        is_typed = self.basis != COMMON_PRACTICE
        higher = f"by up to {self.missing[1]:.0%}" if is_typed else f"by {COMMON_PRACTICE}"
        state = "missing" if self.stated == "no" else "unknown"
        return (
            f"short spacings {state}, {self.scale_text(kpc_per_arcsec)}: flux may be higher "
            f"{higher}{compared}"
        )

    def warning(self, kpc_per_arcsec: float) -> str:
        """What the user should be warned of; empty for nothing."""
        if self.is_open:
            return self.text(kpc_per_arcsec)
        if self.ratio is not None and abs(self.ratio - 1.0) > LARGEST_DIFFERENCE:
            return f"{self.text(kpc_per_arcsec)}, off by more than {LARGEST_DIFFERENCE:.0%}"
        return ""

    def as_plain(self, kpc_per_arcsec: float) -> dict[str, Any]:
        """Plain values for the summary."""
        scale = self.largest_scale_arcsec
        missing = self.missing
        return {
            "stated": self.stated,
            "largest_scale_arcsec": scale,
            "largest_scale_kpc": None if scale is None else scale * kpc_per_arcsec,
            "flux_jy_kms": self.flux_jy_kms,
            "flux_error_jy_kms": self.flux_error_jy_kms,
            "total_jy_kms": self.total.jy_kms if self.total else None,
            "map_over_total": self.ratio,
            "systematic": None
            if missing is None
            else {
                "direction": "flux may be higher, not lower",
                "least_fraction": missing[0],
                "largest_fraction": missing[1],
                "basis": self.basis,
            },
            "text": self.text(kpc_per_arcsec),
        }


def jy_per_k_sr(frequency_ghz: float) -> float:
    """Flux density [Jy] of 1 K over 1 sr: 2 k nu^2 / c^2, by Rayleigh-Jeans."""
    return 2.0 * K_ERG_K * (frequency_ghz * 1e9 / C_CM_S) ** 2 / JY_CGS


def read_total(
    source: MapSource, *, velocity_kms: float | None, velocity_convention: str
) -> Total | None:
    """Read the total flux that a recipe gives for a map; None where it gives none.

    Raises
    ------
    MapError
        If the map is not of a line in the radio, the flux is not one of a line, or the observed
        frequency is not known.
    """
    request = source.request
    where = f"maps.{request.name}"
    if not source.tracer.is_radio:
        _refuse_keys(request, where)
    if request.total_flux is None:
        return None
    if velocity_kms is None and header_frequency_ghz(source.image.header) is None:
        raise MapError(
            Fault(
                f"{where}.total_flux",
                "to compare it needs the observed frequency, and the header has no FREQ axis",
                'type galaxy.velocity = "... km/s"',
            )
        )
    frequency, _ = observed_frequency_ghz(
        source.tracer, source.image.header, velocity_kms, velocity_convention, where
    )
    return Total(_jy_kms(request, frequency), frequency, request.total_flux)


def _refuse_keys(request: MapRequest, where: str) -> None:
    """Refuse what the recipe says of short spacings where there are none."""
    typed = {
        "short_spacings": request.short_spacings,
        "largest_scale": request.largest_scale_arcsec,
        "total_flux": request.total_flux,
    }
    faults = [
        Fault(f"{where}.{key}", f"{request.tracer} is not mapped by interferometers", "remove it")
        for key, value in typed.items()
        if value is not None
    ]
    if faults:
        raise MapError(*faults)


def _jy_kms(request: MapRequest, frequency_ghz: float) -> float:
    """Read ``230 Jy km/s`` or ``5e4 K km/s arcsec2``."""
    number, _, text = (request.total_flux or "").strip().partition(" ")
    where, example = f"maps.{request.name}.total_flux", 'expected, for example, "230 Jy km/s"'
    try:
        unit = read_unit(text)
    except UnitReadingError as error:
        raise MapError(
            Fault(where, f"the unit {text!r} cannot be read: {error}", example)
        ) from None
    speed = u.km / u.s
    if unit.is_equivalent(u.Jy * speed):
        return float(number) * float(unit.to(u.Jy * speed))
    if unit.is_equivalent(u.K * speed * u.sr):
        return float(number) * float(unit.to(u.K * speed * u.sr)) * jy_per_k_sr(frequency_ghz)
    raise MapError(Fault(where, f"{text!r} is not the flux of a line", example))


def judge_short_spacings(
    request: MapRequest, total: Total | None, flux: float, flux_error: float
) -> ShortSpacings | None:
    """Put together what is known of a map's short spacings.

    Parameters
    ----------
    request : MapRequest
    total : Total or None
    flux, flux_error : float
        Of the matched map on the grid's sky [K km/s sr].

    Returns
    -------
    ShortSpacings or None
        None for a map that no interferometer makes.
    """
    if request.tracer not in RADIO_LINES:
        return None
    if total is None:
        return ShortSpacings(request.short_spacings, request.largest_scale_arcsec)
    factor = jy_per_k_sr(total.frequency_ghz)
    return ShortSpacings(
        request.short_spacings,
        request.largest_scale_arcsec,
        flux * factor,
        flux_error * factor,
        total,
    )

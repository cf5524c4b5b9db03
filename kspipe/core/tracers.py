"""What a map can be a map of.

The canonical unit is the one that a map carries from the moment it is read: brightness
temperature integrated over velocity for lines in the radio, specific intensity for continuum
bands, line intensity for the rest, and surface density for maps that are finished.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final, Literal

from kspipe.core.constants import C_CM_S

__all__ = ["CO_LINES", "RADIO_LINES", "TRACERS", "CanonicalUnit", "Tracer"]

CanonicalUnit = Literal["K km/s", "MJy/sr", "erg/s/cm2/sr", "Msun/pc2", "Msun/yr/kpc2"]


@dataclass(frozen=True)
class Tracer:
    """One kind of emission.

    Attributes
    ----------
    key : str
        As it is typed in a recipe.
    label : str
        As it stands on a figure.
    unit : str
        Canonical unit.
    frequency_ghz : float
        Rest frequency of a line, or frequency at the effective wavelength of a band; NaN where
        there is none.
    is_radio : bool
        Whether maps of it are sampled at points (radio) or averaged over detector pixels.
    source : str
        Where the frequency comes from.
    """

    key: str
    label: str
    unit: CanonicalUnit
    frequency_ghz: float
    is_radio: bool
    source: str


def _at_micron(wavelength_um: float) -> float:
    return C_CM_S / (wavelength_um * 1e-4) / 1e9


def _finished(key: str, label: str, unit: CanonicalUnit) -> Tracer:
    """A map of a surface density that someone else made: on its beam, at points."""
    return Tracer(key, label, unit, math.nan, is_radio=True, source="a finished map has none")


_LINES = "rest frequency, common practice"

TRACERS: Final = {
    tracer.key: tracer
    for tracer in (
        Tracer("HI", "H I", "K km/s", 1.420405751768, is_radio=True, source=_LINES),
        Tracer("CO(1-0)", "CO(1-0)", "K km/s", 115.2712018, is_radio=True, source=_LINES),
        Tracer("CO(2-1)", "CO(2-1)", "K km/s", 230.5380000, is_radio=True, source=_LINES),
        Tracer("CO(3-2)", "CO(3-2)", "K km/s", 345.7959899, is_radio=True, source=_LINES),
        Tracer(
            "FUV",
            "FUV",
            "MJy/sr",
            _at_micron(0.1528),
            is_radio=False,
            source="1528 A, Martin et al. 2005 (from memory)",
        ),
        Tracer(
            "NUV",
            "NUV",
            "MJy/sr",
            _at_micron(0.2271),
            is_radio=False,
            source="2271 A, Martin et al. 2005 (from memory)",
        ),
        Tracer(
            "Halpha",
            r"H$\alpha$",
            "erg/s/cm2/sr",
            _at_micron(0.65628),
            is_radio=False,
            source="6562.8 A in air, common practice",
        ),
        Tracer(
            "24um",
            r"24 $\mu$m",
            "MJy/sr",
            _at_micron(23.68),
            is_radio=False,
            source="23.68 um, common practice for the 24 um band",
        ),
        Tracer(
            "22um",
            r"22 $\mu$m",
            "MJy/sr",
            _at_micron(22.09),
            is_radio=False,
            source="22.09 um nominal, common practice for the 22 um band",
        ),
        Tracer(
            "3.6um",
            r"3.6 $\mu$m",
            "MJy/sr",
            _at_micron(3.55),
            is_radio=False,
            source="3.55 um, value from memory",
        ),
        Tracer(
            "W1",
            "W1",
            "MJy/sr",
            _at_micron(3.3526),
            is_radio=False,
            source="3.3526 um, value from memory",
        ),
        Tracer(
            "Hbeta",
            r"H$\beta$",
            "erg/s/cm2/sr",
            _at_micron(0.48613),
            is_radio=False,
            source="4861.3 A in air, common practice",
        ),
        Tracer(
            "70um",
            r"70 $\mu$m",
            "MJy/sr",
            _at_micron(70.0),
            is_radio=False,
            source="70 um nominal, common practice",
        ),
        Tracer(
            "160um",
            r"160 $\mu$m",
            "MJy/sr",
            _at_micron(160.0),
            is_radio=False,
            source="160 um nominal, common practice",
        ),
        Tracer(
            "TIR",
            "TIR",
            "erg/s/cm2/sr",
            math.nan,
            is_radio=False,
            source="3 to 1100 um, integrated",
        ),
        Tracer(
            "1.4GHz",
            "1.4 GHz",
            "MJy/sr",
            1.4,
            is_radio=True,
            source="1.4 GHz, by name",
        ),
        _finished("Sigma_HI", r"$\Sigma_{\rm HI}$", "Msun/pc2"),
        _finished("Sigma_mol", r"$\Sigma_{\rm mol}$", "Msun/pc2"),
        _finished("Sigma_star", r"$\Sigma_\star$", "Msun/pc2"),
        _finished("Sigma_dust", r"$\Sigma_{\rm dust}$", "Msun/pc2"),
        _finished("Sigma_SFR", r"$\Sigma_{\rm SFR}$", "Msun/yr/kpc2"),
    )
}

CO_LINES: Final = ("CO(1-0)", "CO(2-1)", "CO(3-2)")

# What interferometers map, whose short spacings may be missing.
RADIO_LINES: Final = ("HI", *CO_LINES, "1.4GHz")

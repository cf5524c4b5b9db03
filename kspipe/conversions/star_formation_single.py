"""Star-formation rate from a single tracer."""

from __future__ import annotations

from types import MappingProxyType
from typing import Any, Final

from kspipe.conversions.record import Certainty, Range
from kspipe.conversions.star_formation import (
    STAR_FORMATION,
    StarFormation,
    from_luminosities,
    luminosity_per_intensity,
)
from kspipe.core.tracers import TRACERS

# Stars of 10 to 100 Myr with the mass function of Kroupa: Kennicutt & Evans 2012, Table 1, whose
# constants are those of Hao et al. 2011, Murphy et al. 2011 and Rieke et al. 2009.
KENNICUTT_EVANS: Final = "Kennicutt & Evans 2012"
KENNICUTT: Final = "Kennicutt 1998"
CALZETTI: Final = "Calzetti et al. 2007"

# Nominal solar luminosity [erg/s]: IAU 2015 Resolution B3.
L_SUN: Final = 3.828e33

_CORRECTED = "The luminosity is corrected for dust."


def _one(
    key: str,
    tracer: str,
    constant: float,
    published: str,
    where: str,
    family: str = KENNICUTT_EVANS,
    certainty: Certainty = "verified",
    **more: Any,
) -> StarFormation:
    return STAR_FORMATION.add(
        from_luminosities(
            key,
            {tracer: constant},
            published,
            cite=key.split("_", maxsplit=1)[0],
            where=where,
            certainty=certainty,
            family=family,
            **more,
        )
    )


def _kennicutt2012(name: str, tracer: str, log_c: float, ages: str, note: str) -> StarFormation:
    return _one(
        f"kennicutt2012_{name}",
        tracer,
        10.0**-log_c,
        f"log10 SFR = log10 L({tracer}) - {log_c:.2f}  [Msun/yr; erg/s]",
        "Table 1",
        note=f"Stars of {ages} Myr (youngest, mean, 90 percent). {note}",
    )


KENNICUTT2012_FUV = _kennicutt2012("fuv", "FUV", 43.35, "0, 10, 100", _CORRECTED)
KENNICUTT2012_NUV = _kennicutt2012("nuv", "NUV", 43.17, "0, 10, 200", _CORRECTED)
KENNICUTT2012_HALPHA = _kennicutt2012("halpha", "Halpha", 41.27, "0, 3, 10", _CORRECTED)
_kennicutt2012(
    "24um", "24um", 42.69, "0, 5, 100", "Blind to light that no dust absorbs; old stars add to it."
)

_kennicutt2012("70um", "70um", 43.23, "0, 5, 100", "Old stars add to it, more than at 24 um.")
KENNICUTT2012_TIR = _kennicutt2012(
    "tir", "TIR", 43.41, "0, 5, 100", "Blind to light that no dust absorbs; old stars add to it."
)
_one(
    "kennicutt2012_1p4ghz",
    "1.4GHz",
    10.0**-28.20,
    "log10 SFR = log10 L_nu(1.4GHz) - 28.20  [Msun/yr; erg/s/Hz]",
    "Table 1",
    note="Stars of 0 to 100 Myr, tied to the infrared of whole galaxies; electrons travel by a "
    "kpc, and active nuclei shine, too.",
)
_one(
    "murphy2011_1p4ghz",
    "1.4GHz",
    6.35e-29,
    "SFR = 6.35e-29 L_nu(1.4GHz)  [Msun/yr; erg/s/Hz]",
    "the calibration at 1.4 GHz (equation number not confirmed)",
    note="Tied to the infrared of whole galaxies; electrons travel by a kpc.",
)
_one(
    "murphy2011_tir",
    "TIR",
    3.88e-44,
    "SFR = 3.88e-44 L(TIR)  [Msun/yr; erg/s]",
    "the TIR calibration (equation number not confirmed)",
    note="Blind to light that no dust absorbs; old stars add to it.",
)
_one(
    "murphy2011_thermal",
    "1.4GHz",
    4.6e-28 * 1.4**0.1,
    "SFR = 4.6e-28 (T_e / 1e4 K)^-0.45 (nu / GHz)^0.1 L_nu(thermal), T_e = 1e4 K, nu = 1.4 GHz  "
    "[Msun/yr; erg/s/Hz]",
    "Eq. 11",
    certainty="from memory",
    label="1.4 GHz, thermal",
    note="Needs the thermal fraction at 1.4 GHz, usually about 0.1 for whole discs (common "
    "practice); no dust in the way.",
    thermal=("1.4GHz",),
)

# 1.4e-28 per erg/s/Hz of the continuum from 1500 to 2800 A.
for _name, _tracer in (("fuv", "FUV"), ("nuv", "NUV")):
    _one(
        f"kennicutt1998_{_name}",
        _tracer,
        1.4e-28 / (TRACERS[_tracer].frequency_ghz * 1e9),
        f"SFR = 1.4e-28 L_nu({_tracer})  [Msun/yr; erg/s/Hz]",
        "Eq. 1",
        family=KENNICUTT,
        imf="Salpeter",
        note=_CORRECTED,
    )
_one(
    "kennicutt1998_halpha",
    "Halpha",
    7.9e-42,
    "SFR = 7.9e-42 L(Halpha)  [Msun/yr; erg/s]",
    "Eq. 2",
    family=KENNICUTT,
    imf="Salpeter",
    note=_CORRECTED,
)
_one(
    "kennicutt1998_fir",
    "TIR",
    4.5e-44,
    "SFR = 4.5e-44 L(8-1000um)  [Msun/yr; erg/s]",
    "Eq. 4",
    family=KENNICUTT,
    imf="Salpeter",
    note="For starbursts, in which dust takes all the light; 8 to 1000 um, taken for 3 to 1100 um.",
)
_one(
    "murphy2011_fuv",
    "FUV",
    4.42e-44,
    "SFR = 4.42e-44 L(FUV)  [Msun/yr; erg/s]",
    "the FUV calibration (equation number not confirmed)",
    note=_CORRECTED,
)
_one(
    "murphy2011_halpha",
    "Halpha",
    5.37e-42,
    "SFR = 5.37e-42 L(Halpha)  [Msun/yr; erg/s]",
    "the H-alpha calibration (equation number not confirmed)",
    note=_CORRECTED,
)
_one(
    "rieke2009_24um",
    "24um",
    7.8e-10 / L_SUN,
    "SFR = 7.8e-10 L(24um) / L_sun  [Msun/yr]",
    "abstract",
    ranges=(Range("L(TIR) of the galaxy [L_sun]", 5e9, 1e11),),
    note="For whole galaxies; above the range the paper multiplies by (7.76e-11 L(24um))^0.048, "
    "which no surface brightness can know.",
)

_POWER, _LUMINOSITY_POWER = 0.8104, 0.885
STAR_FORMATION.add(
    StarFormation(
        key="calzetti2007_24um",
        label="24 um, power law",
        cite="calzetti2007",
        where="the 24 um calibrations in surface brightness and in luminosity",
        formula="Sigma_SFR = 1.56e-35 S^0.8104, S = 1.5148e40 I_24um cos i  "
        "[Msun/yr/kpc2; erg/s/kpc2; MJy/sr]; SFR = 1.27e-38 L(24um)^0.885  [Msun/yr; erg/s]",
        certainty="from memory",
        imf="Kroupa",
        family=CALZETTI,
        ranges=(Range("L(24um) of the region [erg/s]", 1e40, 3e44),),
        note="Regions of some 500 pc. A power law of a pixel at or below zero does not exist: such "
        "pixels are NaN and counted as no_solution, which biases sums and means upwards.",
        coefficients=MappingProxyType(
            {"24um": 1.56e-35 * luminosity_per_intensity("24um") ** _POWER}
        ),
        powers=MappingProxyType({"24um": _POWER}),
        luminosity=MappingProxyType({"24um": 1.27e-38}),
        luminosity_powers=MappingProxyType({"24um": _LUMINOSITY_POWER}),
    )
)

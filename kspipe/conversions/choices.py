"""What a conversion is told besides the maps: records by key, and numbers."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.alpha_co import AlphaCO
from kspipe.conversions.extinction import EbvScale
from kspipe.conversions.finished import Finished
from kspipe.conversions.gas_to_dust import GasToDust
from kspipe.conversions.line_ratio import LineRatio
from kspipe.conversions.star_formation import StarFormation
from kspipe.core.constants import OH_SOLAR

__all__ = ["Choices", "Parameters"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Choices:
    """Which records are used: by key, so that a choice travels between processes.

    A user's own record, which has no key on a shelf, stands in the place of its key.

    Attributes
    ----------
    calibration : str or StarFormation
        Star-formation record.
    alpha_co : str or AlphaCO or None
        alpha_CO record; None for atomic gas only.
    gas_to_dust : str or None
        Gas-to-dust record, where molecular gas is what dust says beyond the atomic gas.
    stars : str or None
        Stellar-mass record, where a map of its tracer is given; its ``sigma_star`` replaces the
        parameter.
    mass_to_light : str or None
        Mass-to-light record; None where it is a number among the parameters.
    imf : str
        Initial mass function of the star-formation rates that come out.
    line_ratio : str or LineRatio or None
        Line-ratio record; None where the ratio is a number among the parameters.
    atomic : str
        Atomic gas record.
    extinction : mapping of str to str
        Extinction record of each tracer that needs one.
    ebv_scale : {"SFD", "SF11"} or None
        Which E(B-V) is given; None takes it as each record wants it.
    balmer : str or None
        Balmer-decrement record, where a map of Hbeta corrects Halpha.
    total_infrared : str or None
        Record that makes TIR of bands, where a calibration takes TIR and no map of it is there.
    finished : mapping of str to Finished
        Conventions of each finished map, by tracer.
    """

    calibration: str | StarFormation
    alpha_co: str | AlphaCO | None = None
    gas_to_dust: str | GasToDust | None = None
    atomic: str = "leroy2008_thin"
    line_ratio: str | LineRatio | None = None
    stars: str | None = None
    mass_to_light: str | None = None
    imf: str = "Kroupa"
    ebv_scale: EbvScale | None = None
    balmer: str | None = None
    total_infrared: str | None = None
    finished: Mapping[str, Finished] = field(default_factory=dict)
    extinction: Mapping[str, str] = field(
        default_factory=lambda: {
            "FUV": "bianchi2017",
            "NUV": "bianchi2017",
            "Halpha": "cardelli1989",
            "Hbeta": "cardelli1989",
        }
    )


@dataclass(frozen=True)
class Parameters:
    """Numbers that are not records; each a float or an array that broadcasts with the maps.

    Attributes
    ----------
    cos_i : array_like
        Cosine of the inclination; enters every surface density exactly once.
    oh : array_like
        Metallicity, 12 + log10(O/H).
    line_ratio : array_like
        Brightness of the CO line used over CO(1-0); 1 for CO(1-0).
    ebv : array_like
        Foreground E(B-V) [mag].
    nii_ratio : array_like
        [NII]6583 / Halpha in the H-alpha map; 0 where it is free of [NII].
    as_24um : array_like
        24 um over 22 um intensity, where a 22 um map stands for 24 um.
    diffuse : mapping of str to array_like
        Fraction of the emission of a tracer that does not come from where stars form.
    thermal_fraction : array_like
        Of the radio continuum, for calibrations of its thermal part.
    hi_opacity : array_like
        Atomic gas over that of optically thin emission.
    mass_to_light : array_like
        Of stars, in solar units at 3.4 um.
    sigma_star : array_like or None
        Stellar surface density [Msun/pc2], face-on, at the beam of the maps.
    alpha_co : array_like or None
        alpha_CO itself [Msun/pc2 per K km/s], where no record makes it.
    ms_offset_dex, g0_over_n : array_like or None
        As in `kspipe.conversions.inputs.INPUTS`; only some alpha_CO records need them.
    """

    cos_i: Array | float
    oh: Array | float = OH_SOLAR
    line_ratio: Array | float = 1.0
    ebv: Array | float = 0.0
    nii_ratio: Array | float = 0.0
    as_24um: Array | float = 1.0
    diffuse: Mapping[str, Array | float] = field(default_factory=dict)
    thermal_fraction: Array | float = 1.0
    hi_opacity: Array | float = 1.0
    mass_to_light: Array | float = 0.5
    sigma_star: Array | float | None = None
    alpha_co: Array | float | None = None
    ms_offset_dex: Array | float | None = None
    g0_over_n: Array | float | None = None

    def changed(self, name: str, value: Array) -> Parameters:
        """Copy with another value; ``diffuse.TRACER`` is one of `diffuse`."""
        table, _, tracer = name.partition(".")
        change: dict[str, Any] = {name: value}
        if tracer:
            change = {table: {**getattr(self, table), tracer: value}}
        return replace(self, **change)

"""The one function from intensities to surface densities.

The reduction, the systematic draws, the closure test and the chain of one pixel all call it. It
knows no header, file or map: plain float64 arrays, broadcast over any leading axis of draws.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.alpha_co import ALPHA_CO
from kspipe.conversions.atomic import ATOMIC
from kspipe.conversions.extinction import EXTINCTION
from kspipe.conversions.star_formation import STAR_FORMATION
from kspipe.core.tracers import CO_LINES

__all__ = ["NII_DOUBLET", "Choices", "Converted", "Parameters", "convert"]

Array = NDArray[np.float64]

# [NII]6548 + [NII]6583 over [NII]6583: transition probabilities give 6583/6548 = 3.05 (common
# practice).
NII_DOUBLET = 1.0 + 1.0 / 3.05


@dataclass(frozen=True)
class Choices:
    """Which records are used, by key, so that a choice travels between processes.

    Attributes
    ----------
    calibration : str
        Star-formation record.
    alpha_co : str or None
        alpha_CO record; None for atomic gas only.
    atomic : str
        Atomic gas record.
    extinction : mapping of str to str
        Extinction record of each tracer that needs one.
    """

    calibration: str
    alpha_co: str | None = None
    atomic: str = "leroy2008_thin"
    extinction: Mapping[str, str] = field(
        default_factory=lambda: {
            "FUV": "bianchi2017",
            "NUV": "bianchi2017",
            "Halpha": "cardelli1989",
        }
    )


@dataclass(frozen=True)
class Parameters:
    """Numbers that are not records; each a float or an array that broadcasts with the maps.

    Attributes
    ----------
    cos_i : array_like
        Cosine of the inclination; enters every surface density exactly once.
    z_prime : array_like
        Metallicity, 10^(12+log(O/H) - 8.69).
    line_ratio : array_like
        Brightness of the CO line used over CO(1-0); 1 for CO(1-0).
    ebv : array_like
        Foreground E(B-V) [mag].
    nii_ratio : array_like
        [NII]6583 / Halpha in the H-alpha map; 0 where it is free of [NII].
    as_24um : array_like
        24 um over 22 um intensity, where a 22 um map stands for 24 um.
    """

    cos_i: Array | float
    z_prime: Array | float = 1.0
    line_ratio: Array | float = 1.0
    ebv: Array | float = 0.0
    nii_ratio: Array | float = 0.0
    as_24um: Array | float = 1.0


@dataclass(frozen=True)
class Converted:
    """Surface densities and how they depend on each intensity.

    Attributes
    ----------
    values : dict of str to float64 array
        ``sigma_atom``, ``sigma_mol``, ``sigma_gas`` [Msun/pc2, with helium, face-on] and
        ``sigma_sfr`` [Msun/yr/kpc2, face-on]; molecular entries are absent without CO.
    derivatives : dict of str to dict of str to float64 array
        Per product and tracer, in the product's unit per canonical intensity.
    """

    values: dict[str, Array]
    derivatives: dict[str, dict[str, Array]]


def convert(intensity: Mapping[str, Array], choices: Choices, parameters: Parameters) -> Converted:
    """Turn intensities into face-on surface densities.

    Parameters
    ----------
    intensity : mapping of str to float64 array
        By tracer, in its canonical unit: K km/s for lines, MJy/sr for FUV, NUV, 24 and 22 um,
        erg/s/cm2/sr for Halpha. Negative values stay negative, NaN stays NaN.
    choices : Choices
    parameters : Parameters

    Returns
    -------
    Converted

    Raises
    ------
    KeyError
        If a record is not known or a tracer that it needs is absent.

    References
    ----------
    .. [1] leroy2008, Eq. A1 for atomic gas.
    .. [2] bolatto2013, Eq. 2: Sigma_mol = alpha_CO I_CO(1-0).
    """
    cos_i = np.asarray(parameters.cos_i, dtype=float)
    slopes: dict[str, dict[str, Array]] = {}
    if "HI" in intensity:
        slopes["sigma_atom"] = {"HI": ATOMIC.get(choices.atomic).msun_pc2_per_k_kms * cos_i}
    line = next((tracer for tracer in CO_LINES if tracer in intensity), None)
    if choices.alpha_co is not None:
        if line is None:
            raise KeyError(f"record {choices.alpha_co!r} needs a CO line, none is among the maps")
        alpha = ALPHA_CO.get(choices.alpha_co)(np.asarray(parameters.z_prime, dtype=float))
        slopes["sigma_mol"] = {line: alpha / parameters.line_ratio * cos_i}
    if "sigma_atom" in slopes:
        slopes["sigma_gas"] = {**slopes["sigma_atom"], **slopes.get("sigma_mol", {})}
    slopes["sigma_sfr"] = _sfr_slopes(intensity, choices, parameters, cos_i)

    values, derivatives = {}, {}
    for product, by_tracer in slopes.items():
        terms = [by_tracer[tracer] * intensity[tracer] for tracer in by_tracer]
        values[product] = np.asarray(sum(terms[1:], terms[0]), dtype=float)
        derivatives[product] = {
            tracer: np.broadcast_to(slope, values[product].shape)
            for tracer, slope in by_tracer.items()
        }
    return Converted(values, derivatives)


def _sfr_slopes(
    intensity: Mapping[str, Array], choices: Choices, parameters: Parameters, cos_i: Array
) -> dict[str, Array]:
    """Sigma_SFR per stored intensity of each tracer: calibration times corrections times cos i."""
    record = STAR_FORMATION.get(choices.calibration)
    slopes = {}
    for tracer, coefficient in record.coefficients.items():
        slope = np.asarray(coefficient * cos_i)
        if tracer in choices.extinction:
            extinction = EXTINCTION.get(choices.extinction[tracer]).coefficients[tracer]
            slope = slope * 10.0 ** (0.4 * extinction * np.asarray(parameters.ebv, dtype=float))
        if tracer == "Halpha":
            slope = slope / (1.0 + NII_DOUBLET * np.asarray(parameters.nii_ratio, dtype=float))
        stands_in = tracer == "24um" and "24um" not in intensity
        if stands_in:
            slope = slope * parameters.as_24um
        source = "22um" if stands_in else tracer
        if source not in intensity:
            raise KeyError(f"record {record.key!r} needs {tracer}, which is not among the maps")
        slopes[source] = slope
    return slopes

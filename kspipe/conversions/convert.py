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
from kspipe.conversions.line_ratio import LINE_RATIO
from kspipe.conversions.molecular import molecular_gas
from kspipe.conversions.star_formation import STAR_FORMATION
from kspipe.core.constants import OH_SOLAR
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
    line_ratio : str or None
        Line-ratio record; None where the ratio is a number among the parameters.
    atomic : str
        Atomic gas record.
    extinction : mapping of str to str
        Extinction record of each tracer that needs one.
    """

    calibration: str
    alpha_co: str | None = None
    atomic: str = "leroy2008_thin"
    line_ratio: str | None = None
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
    sigma_star : array_like or None
        Stellar surface density [Msun/pc2], face-on, at the beam of the maps.
    ms_offset_dex, g0_over_n : array_like or None
        As in `kspipe.conversions.inputs.INPUTS`; only some alpha_CO records need them.
    """

    cos_i: Array | float
    oh: Array | float = OH_SOLAR
    line_ratio: Array | float = 1.0
    ebv: Array | float = 0.0
    nii_ratio: Array | float = 0.0
    as_24um: Array | float = 1.0
    sigma_star: Array | float | None = None
    ms_offset_dex: Array | float | None = None
    g0_over_n: Array | float | None = None


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
    by_parameter : dict of str to dict of str to float64 array
        The same for surface densities given as parameters: ``["sigma_mol"]["sigma_star"]``.
    flags : dict of str to bool array
        ``negative_co`` (alpha_CO was taken at zero CO) and ``outside_range`` (an input of the
        alpha_CO record), where they can occur.
    """

    values: dict[str, Array]
    derivatives: dict[str, dict[str, Array]]
    by_parameter: dict[str, dict[str, Array]] = field(default_factory=dict)
    flags: dict[str, NDArray[np.bool_]] = field(default_factory=dict)


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
        If a record is not known or a tracer or parameter that it needs is absent.

    References
    ----------
    .. [1] leroy2008, Eq. A1 for atomic gas.
    .. [2] bolatto2013, Eq. 2: Sigma_mol = alpha_CO I_CO(1-0).
    """
    cos_i = np.asarray(parameters.cos_i, dtype=float)
    made = _Products()
    if "HI" in intensity:
        per_hi = ATOMIC.get(choices.atomic).msun_pc2_per_k_kms * cos_i
        made.add("sigma_atom", per_hi * intensity["HI"], {"HI": per_hi})
    # First, because a line ratio may depend on it.
    slopes = _sfr_slopes(intensity, choices, parameters, cos_i)
    terms = [slopes[tracer] * intensity[tracer] for tracer in slopes]
    made.add("sigma_sfr", sum(terms[1:], terms[0]), slopes)
    if choices.alpha_co is not None:
        _add_molecular(made, intensity, choices, parameters)
    if "sigma_atom" in made.values:
        _add_gas(made)
    return Converted(made.values, made.derivatives, made.by_parameter, made.flags)


@dataclass
class _Products:
    """What has been converted so far."""

    values: dict[str, Array] = field(default_factory=dict)
    derivatives: dict[str, dict[str, Array]] = field(default_factory=dict)
    by_parameter: dict[str, dict[str, Array]] = field(default_factory=dict)
    flags: dict[str, NDArray[np.bool_]] = field(default_factory=dict)

    def add(self, product: str, value: Array, slopes: Mapping[str, Array]) -> None:
        self.values[product] = np.asarray(value, dtype=float)
        shape = self.values[product].shape
        self.derivatives[product] = {
            tracer: np.broadcast_to(slope, shape) for tracer, slope in slopes.items()
        }


def _add_molecular(
    made: _Products, intensity: Mapping[str, Array], choices: Choices, parameters: Parameters
) -> None:
    """Molecular gas of the one CO line, with its slopes by tracer."""
    record = ALPHA_CO.get(str(choices.alpha_co))
    line = next((tracer for tracer in CO_LINES if tracer in intensity), None)
    if line is None:
        raise KeyError(f"record {record.key!r} needs a CO line, none is among the maps")
    cos_i = np.asarray(parameters.cos_i, dtype=float)
    given = {
        name: np.asarray(value, dtype=float)
        for name in ("oh", "sigma_star", "ms_offset_dex", "g0_over_n")
        if (value := getattr(parameters, name)) is not None
    }
    ratio, ratio_log_slope = _line_ratio(line, choices, parameters, made.values["sigma_sfr"])
    face_on = cos_i / ratio * intensity[line]
    gas = molecular_gas(record, face_on, made.values.get("sigma_atom"), given)
    slopes = {line: gas.per_line / ratio * cos_i}
    value = gas.alpha_co / ratio * cos_i * intensity[line]
    if gas.per_atom is not None:
        slopes["HI"] = gas.per_atom * made.derivatives["sigma_atom"]["HI"]
    if ratio_log_slope is not None:
        per_sfr = -gas.per_line * face_on * ratio_log_slope
        for tracer, slope in made.derivatives["sigma_sfr"].items():
            slopes[tracer] = per_sfr * slope
    made.add("sigma_mol", value, slopes)
    shape = made.values["sigma_mol"].shape
    if gas.per_star is not None:
        made.by_parameter["sigma_mol"] = {"sigma_star": np.broadcast_to(gas.per_star, shape)}
    if gas.negative_co is not None:
        made.flags["negative_co"] = np.broadcast_to(gas.negative_co, shape)
    made.flags["outside_range"] = np.broadcast_to(gas.outside_range, shape)


def _line_ratio(
    line: str, choices: Choices, parameters: Parameters, sigma_sfr: Array
) -> tuple[Array, Array | None]:
    """Ratio to CO(1-0), and its logarithmic slope with Sigma_SFR where it has one."""
    if choices.line_ratio is None:
        return np.asarray(parameters.line_ratio, dtype=float), None
    record = LINE_RATIO.get(choices.line_ratio)
    if (record.upper, record.lower) != (line, "CO(1-0)"):
        raise KeyError(
            f"record {record.key!r} is {record.upper} over {record.lower}; {line} over CO(1-0) is "
            "needed"
        )
    if not record.needs:
        return np.asarray(record.value), None
    return record(sigma_sfr)


def _add_gas(made: _Products) -> None:
    """Total gas: the sum of both phases, in values and in slopes."""
    value = made.values["sigma_atom"]
    slopes = dict(made.derivatives["sigma_atom"])
    if "sigma_mol" in made.values:
        value = value + made.values["sigma_mol"]
        for tracer, slope in made.derivatives["sigma_mol"].items():
            slopes[tracer] = slopes[tracer] + slope if tracer in slopes else slope
        if "sigma_mol" in made.by_parameter:
            made.by_parameter["sigma_gas"] = made.by_parameter["sigma_mol"]
    made.add("sigma_gas", value, slopes)


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

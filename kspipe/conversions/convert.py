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
from kspipe.conversions.choices import Choices, Parameters
from kspipe.conversions.corrections import apply, terms_of
from kspipe.conversions.finished import FINISHED, finished_factor
from kspipe.conversions.gas_to_dust import GAS_TO_DUST
from kspipe.conversions.imf import imf_factor
from kspipe.conversions.line_ratio import LINE_RATIO
from kspipe.conversions.mass_to_light import MASS_TO_LIGHT
from kspipe.conversions.molecular import molecular_gas
from kspipe.conversions.star_formation import STAR_FORMATION
from kspipe.conversions.stars import STARS
from kspipe.core.tracers import CO_LINES

__all__ = ["Converted", "convert"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Converted:
    """Surface densities and how they depend on each intensity.

    Attributes
    ----------
    values : dict of str to float64 array
        ``sigma_star``, ``sigma_atom``, ``sigma_mol``, ``sigma_gas``
        [Msun/pc2, with helium, face-on] and
        ``sigma_sfr`` [Msun/yr/kpc2, face-on]; molecular entries are absent without CO.
    derivatives : dict of str to dict of str to float64 array
        Per product and tracer, in the product's unit per canonical intensity.
    by_parameter : dict of str to dict of str to float64 array
        The same for surface densities given as parameters: ``["sigma_mol"]["sigma_star"]``.
    flags : dict of str to bool array
        ``negative_co`` (alpha_CO was taken at zero CO), ``outside_range`` (an input of the
        alpha_CO record) and ``no_solution`` (a power law of a pixel at or below zero), where they
        can occur.
    factors : dict of str to float64 array
        ``alpha_co``, ``line_ratio`` and ``mass_to_light`` as they were used.
    """

    values: dict[str, Array]
    derivatives: dict[str, dict[str, Array]]
    by_parameter: dict[str, dict[str, Array]] = field(default_factory=dict)
    flags: dict[str, NDArray[np.bool_]] = field(default_factory=dict)
    factors: dict[str, Array] = field(default_factory=dict)


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
        if np.any(np.asarray(parameters.hi_opacity) != 1.0):
            per_hi = per_hi * parameters.hi_opacity
        made.add("sigma_atom", per_hi * intensity["HI"], {"HI": per_hi})
    _add_finished(made, intensity, choices, cos_i)
    # First, because a line ratio and a mass-to-light ratio may depend on it.
    _add_sfr(made, intensity, choices, parameters)
    if choices.stars is not None:
        _add_stars(made, intensity, choices, parameters)
    if choices.gas_to_dust is not None:
        _add_gas_of_dust(made, intensity, choices, parameters)
    if choices.alpha_co is not None:
        _add_molecular(made, intensity, choices, parameters)
    if "sigma_atom" in made.values:
        _add_gas(made)
    return Converted(made.values, made.derivatives, made.by_parameter, made.flags, made.factors)


@dataclass
class _Products:
    """What has been converted so far."""

    values: dict[str, Array] = field(default_factory=dict)
    derivatives: dict[str, dict[str, Array]] = field(default_factory=dict)
    by_parameter: dict[str, dict[str, Array]] = field(default_factory=dict)
    flags: dict[str, NDArray[np.bool_]] = field(default_factory=dict)
    factors: dict[str, Array] = field(default_factory=dict)

    def add(self, product: str, value: Array, slopes: Mapping[str, Array]) -> None:
        self.values[product] = np.asarray(value, dtype=float)
        shape = self.values[product].shape
        self.derivatives[product] = {
            tracer: np.broadcast_to(slope, shape) for tracer, slope in slopes.items()
        }


def _add_finished(
    made: _Products, intensity: Mapping[str, Array], choices: Choices, cos_i: Array
) -> None:
    """Gas and stars that are given; star formation goes through its calibration."""
    for tracer, product in FINISHED.items():
        if tracer in intensity and product != "sigma_sfr":
            factor = finished_factor(choices.finished[tracer], cos_i, "Kroupa")
            made.add(product, factor * intensity[tracer], {tracer: factor})


def _add_stars(
    made: _Products, intensity: Mapping[str, Array], choices: Choices, parameters: Parameters
) -> None:
    record = STARS.get(str(choices.stars))
    if record.tracer not in intensity:
        raise KeyError(f"record {record.key!r} needs {record.tracer}, which is not among the maps")
    light = record.msun_pc2_per_intensity * np.asarray(parameters.cos_i, dtype=float)
    if choices.mass_to_light is None:
        made.factors["mass_to_light"] = np.asarray(parameters.mass_to_light, dtype=float)
        slope = light * made.factors["mass_to_light"]
        made.add("sigma_star", slope * intensity[record.tracer], {record.tracer: slope})
        return
    at_one = light * intensity[record.tracer]
    rate = made.values["sigma_sfr"]
    with np.errstate(divide="ignore", invalid="ignore"):
        per_light = np.where(at_one > 0, rate / at_one, np.where(rate > 0, np.inf, 0.0)) * 1e-6
    per_light = np.where(np.isnan(at_one + rate), np.nan, per_light)
    ratio, log_slope = MASS_TO_LIGHT.get(choices.mass_to_light).solve(per_light)
    made.factors["mass_to_light"] = ratio
    # d Sigma = light (m - m') dI + at_one m' d ln Sigma_SFR, with m' = dm / d ln(rate per light).
    slopes = {record.tracer: light * (ratio - log_slope)}
    safe = np.where(rate > 0, rate, 1.0)
    for tracer, slope in made.derivatives["sigma_sfr"].items():
        part = at_one * log_slope / safe * slope
        slopes[tracer] = slopes[tracer] + part if tracer in slopes else part
    made.add("sigma_star", at_one * ratio, slopes)


def _add_gas_of_dust(
    made: _Products, intensity: Mapping[str, Array], choices: Choices, parameters: Parameters
) -> None:
    """Molecular gas as what all gas of the dust has beyond the atomic gas; negatives are kept."""
    record = GAS_TO_DUST.get(choices.gas_to_dust or "")
    if "Sigma_dust" not in intensity:
        raise KeyError(f"record {record.key!r} needs Sigma_dust, which is not among the maps")
    oh = np.asarray(parameters.oh, dtype=float)
    ratio = record(oh)
    cos_i = np.asarray(parameters.cos_i, dtype=float)
    per_dust = ratio * finished_factor(choices.finished["Sigma_dust"], cos_i, "Kroupa")
    atom = made.values["sigma_atom"]
    slopes = {tracer: -slope for tracer, slope in made.derivatives["sigma_atom"].items()}
    made.add(
        "sigma_mol", per_dust * intensity["Sigma_dust"] - atom, slopes | {"Sigma_dust": per_dust}
    )
    made.factors["gas_to_dust"] = ratio
    shape = made.values["sigma_mol"].shape
    made.flags["outside_range"] = np.broadcast_to(record.outside({"oh": oh}), shape)


def _add_molecular(
    made: _Products, intensity: Mapping[str, Array], choices: Choices, parameters: Parameters
) -> None:
    """Molecular gas of the one CO line, with its slopes by tracer."""
    record = ALPHA_CO.get(choices.alpha_co or "")
    line = next((tracer for tracer in CO_LINES if tracer in intensity), None)
    if line is None:
        raise KeyError(f"record {record.key!r} needs a CO line, none is among the maps")
    cos_i = np.asarray(parameters.cos_i, dtype=float)
    given = {
        name: np.asarray(value, dtype=float)
        for name in ("oh", "sigma_star", "alpha_co", "ms_offset_dex", "g0_over_n")
        if (value := getattr(parameters, name)) is not None
    }
    given.update({k: v for k, v in made.values.items() if k == "sigma_star"})
    ratio, ratio_log_slope = _line_ratio(line, choices, parameters, made.values["sigma_sfr"])
    face_on = cos_i / ratio * intensity[line]
    gas = molecular_gas(record, face_on, made.values.get("sigma_atom"), given)
    made.factors |= {"alpha_co": gas.alpha_co, "line_ratio": ratio}
    slopes = {line: gas.per_line / ratio * cos_i}
    value = gas.alpha_co / ratio * cos_i * intensity[line]
    if gas.per_atom is not None:
        for tracer, slope in made.derivatives["sigma_atom"].items():
            slopes[tracer] = gas.per_atom * slope
    if ratio_log_slope is not None:
        per_sfr = -gas.per_line * face_on * ratio_log_slope
        for tracer, slope in made.derivatives["sigma_sfr"].items():
            slopes[tracer] = per_sfr * slope
    if gas.per_star is not None and "sigma_star" in made.values:
        for tracer, slope in made.derivatives["sigma_star"].items():
            slopes[tracer] = gas.per_star * slope
    made.add("sigma_mol", value, slopes)
    shape = made.values["sigma_mol"].shape
    if gas.per_star is not None and "sigma_star" not in made.values:
        made.by_parameter["sigma_mol"] = {"sigma_star": np.broadcast_to(gas.per_star, shape)}
    if gas.negative_co is not None:
        made.flags["negative_co"] = np.broadcast_to(gas.negative_co, shape)
    made.flags["outside_range"] = np.broadcast_to(gas.outside_range, shape)
    no_factor = np.isnan(gas.alpha_co)
    if no_factor.any():
        # A power of what is not positive; a blank input is a blank, not a failure.
        needed = [face_on, *(given[name] for name in record.needs if name in given)]
        if record.is_self_consistent:
            needed += [made.values["sigma_atom"], given["sigma_star"]]
        no_factor = no_factor & np.isfinite(sum(needed[1:], needed[0]))
        if no_factor.any():
            made.flags["no_solution"] = made.flags.get("no_solution", False) | np.broadcast_to(
                no_factor, shape
            )


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


def _add_sfr(
    made: _Products, intensity: Mapping[str, Array], choices: Choices, parameters: Parameters
) -> None:
    """Star formation: the terms of the calibration, each with its slope."""
    record = STAR_FORMATION.get(choices.calibration)
    cos_i = np.asarray(parameters.cos_i, dtype=float)
    imf = imf_factor(str(record.imf), choices.imf)
    values: list[Array] = []
    slopes: dict[str, Array] = {}
    unsolved: list[NDArray[np.bool_]] = []

    def add(value: Array, slopes_of_it: Mapping[str, Array]) -> None:
        values.append(value)
        for source, slope in slopes_of_it.items():
            slopes[source] = slopes[source] + slope if source in slopes else slope

    for term in terms_of(record, intensity, choices, parameters):
        coefficient, power = record.coefficients[term.tracer], record.powers.get(term.tracer)
        if imf != 1.0:
            coefficient *= imf
        stored = intensity[term.source]
        if power is not None:
            positive = np.where(stored > 0, stored, np.nan)
            value = coefficient * (apply(cos_i, term.corrections) * positive) ** power
            add(value, {term.source: power * value / positive})
            unsolved.append(stored <= 0)
            continue
        slope = apply(np.asarray(coefficient * cos_i), term.corrections)
        if term.decrement is None:
            add(slope * stored, {term.source: slope})
            continue
        line = intensity["Hbeta"]
        other = np.where(line > 0, line, np.nan)
        seen = apply(np.ones(()), term.corrections) * stored
        ratio = seen / (apply(np.ones(()), term.decrement.corrections) * other)
        bright = slope * term.decrement.record.factor(ratio)
        gain = term.decrement.record.power
        value = bright * stored
        add(value, {term.source: (1.0 + gain) * bright, "Hbeta": -gain * value / other})
        unsolved.append((stored <= 0) | (line <= 0))
    made.add("sigma_sfr", sum(values[1:], values[0]), slopes)
    if unsolved:
        shape = made.values["sigma_sfr"].shape
        failed = np.logical_or.reduce(np.broadcast_arrays(*unsolved))
        made.flags["no_solution"] = np.broadcast_to(failed, shape)

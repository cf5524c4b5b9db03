"""Every factor between an intensity and the surface densities that it goes into."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.atomic import ATOMIC
from kspipe.conversions.choices import Choices, Parameters
from kspipe.conversions.convert import Converted
from kspipe.conversions.corrections import Term, apply, terms_of
from kspipe.conversions.finished import FINISHED, finished_factor
from kspipe.conversions.imf import imf_factor
from kspipe.conversions.star_formation import STAR_FORMATION
from kspipe.conversions.stars import STARS
from kspipe.core.tracers import CO_LINES, TRACERS

__all__ = ["Chain", "Link", "chains_of"]

Array = NDArray[np.float64]

_GAS, _SFR = "Msun/pc2", "Msun/yr/kpc2"


@dataclass(frozen=True)
class Link:
    """One step.

    Attributes
    ----------
    name : str
    factor : float
        What the value before is multiplied by, or raised to.
    unit : str
        Of the value behind it.
    is_power : bool
    """

    name: str
    factor: float
    unit: str
    is_power: bool = False

    def of(self, value: float) -> float:
        """Apply it; a power of what is not positive is NaN."""
        if not self.is_power:
            return value * self.factor
        return float(value**self.factor) if value > 0 else math.nan


@dataclass(frozen=True)
class Chain:
    """The way of one map into one product.

    Attributes
    ----------
    product, tracer : str
        The tracer is that of the map.
    links : tuple of Link
    """

    product: str
    tracer: str
    links: tuple[Link, ...]

    def end(self, intensity: float) -> float:
        """What it makes of an intensity."""
        value = intensity
        for link in self.links:
            value = link.of(value)
        return value


def chains_of(
    intensity: Mapping[str, Array],
    choices: Choices,
    parameters: Parameters,
    converted: Converted,
) -> list[Chain]:
    """Take the conversion of one pixel apart.

    Parameters
    ----------
    intensity : mapping of str to float64 array
        One number each, as are all parameters.
    choices, parameters
        As in `convert`.
    converted : Converted
        What `convert` makes of these.

    Returns
    -------
    list of Chain
        The chains of a product add up to it.
    """
    cos_i = float(np.asarray(parameters.cos_i))
    made: list[Chain] = []
    if "HI" in intensity:
        per = ATOMIC.get(choices.atomic).msun_pc2_per_k_kms
        links = [Link("atoms with helium, optically thin", per, _GAS), Link("cos i", cos_i, _GAS)]
        opacity = float(np.asarray(parameters.hi_opacity))
        if opacity != 1.0:
            links.append(Link("opacity", opacity, _GAS))
        made.append(Chain("sigma_atom", "HI", tuple(links)))
    for tracer, product in FINISHED.items():
        if tracer in intensity and product != "sigma_sfr":
            state = choices.finished[tracer]
            factor = float(finished_factor(state, np.asarray(cos_i), "Kroupa"))
            made.append(Chain(product, tracer, (Link(f"was {state}", factor, _GAS),)))
    if choices.gas_to_dust is not None:
        state = choices.finished["Sigma_dust"]
        factor = float(finished_factor(state, np.asarray(cos_i), "Kroupa"))
        ratio = float(converted.factors["gas_to_dust"])
        links = [Link(f"was {state}", factor, _GAS), Link("gas-to-dust ratio", ratio, _GAS)]
        made.append(Chain("sigma_mol", "Sigma_dust", tuple(links)))
        made += [
            Chain("sigma_mol", c.tracer, (*c.links, Link("taken off", -1.0, _GAS)))
            for c in made
            if c.product == "sigma_atom"
        ]
    if choices.alpha_co is not None:
        line = next(tracer for tracer in CO_LINES if tracer in intensity)
        ratio, alpha = (float(converted.factors[name]) for name in ("line_ratio", "alpha_co"))
        links = [] if line == "CO(1-0)" else [Link("over the line ratio", 1 / ratio, "K km/s")]
        links += [Link("cos i", cos_i, "K km/s"), Link("alpha_CO", alpha, _GAS)]
        made.append(Chain("sigma_mol", line, tuple(links)))
    if choices.stars is not None:
        record = STARS.get(choices.stars)
        light = float(converted.factors["mass_to_light"])
        links = [
            Link("stars at M/L of 1", record.msun_pc2_per_intensity, _GAS),
            Link("M/L", light, _GAS),
            Link("cos i", cos_i, _GAS),
        ]
        made.append(Chain("sigma_star", record.tracer, tuple(links)))
    record_sfr = STAR_FORMATION.get(choices.calibration)
    for term in terms_of(record_sfr, intensity, choices, parameters):
        links = _sfr_links(term, intensity, choices, cos_i)
        made.append(Chain("sigma_sfr", term.source, tuple(links)))
    return made


def _sfr_links(
    term: Term, intensity: Mapping[str, Array], choices: Choices, cos_i: float
) -> list[Link]:
    record = STAR_FORMATION.get(choices.calibration)
    unit = TRACERS[term.source].unit
    after = TRACERS[term.tracer].unit
    links = []
    for correction in term.corrections:
        unit = after if correction.name.startswith("TIR per") else unit
        links.append(Link(correction.name, float(correction.factor), unit))
    if term.decrement is not None:
        one = np.ones(())
        seen = apply(one, term.corrections) * intensity[term.source]
        hbeta = apply(one, term.decrement.corrections) * intensity["Hbeta"]
        factor = float(term.decrement.record.factor(seen / hbeta))
        links.append(Link("attenuation, Balmer decrement", factor, unit))
    links.append(Link("cos i", cos_i, unit))
    power = record.powers.get(term.tracer)
    if power is not None:
        links.append(Link("power law", power, f"({unit})^{power:g}", is_power=True))
    links.append(Link(record.key, record.coefficients[term.tracer], _SFR))
    imf = imf_factor(str(record.imf), choices.imf)
    if imf != 1.0:
        links.append(Link(f"{record.imf} to {choices.imf} IMF", imf, _SFR))
    return links

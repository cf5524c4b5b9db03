"""Star-formation rate from one tracer, or from an unobscured one and its reprocessed part."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.record import Certainty, Record
from kspipe.core.constants import JY_CGS, PC_CM
from kspipe.core.registry import Registry
from kspipe.core.tracers import TRACERS

__all__ = [
    "STAR_FORMATION",
    "StarFormation",
    "from_luminosities",
    "hybrid",
    "luminosity_per_intensity",
]

Array = NDArray[np.float64]


def _none() -> Mapping[str, float]:
    return MappingProxyType({})


@dataclass(frozen=True, kw_only=True)
class StarFormation(Record):
    """A sum over tracers, each linear or a power law.

    Attributes
    ----------
    coefficients : mapping of str to float
        Msun/yr/kpc2 per face-on canonical intensity of each tracer.
    luminosity : mapping of str to float
        Msun/yr per luminosity of each tracer [erg/s; nu L_nu for bands]; empty where only the
        surface-brightness form is published.
    powers : mapping of str to float
        Of a tracer's face-on intensity where its term is no straight line.
    luminosity_powers : mapping of str to float
        Of a tracer's luminosity; may differ from `powers`.
    thermal : tuple of str
        Tracers of which only the thermal part is taken.
    family : str
        Whose stellar models the constants stand on: constants of two families are never added.
    """

    coefficients: Mapping[str, float]
    family: str
    luminosity: Mapping[str, float] = field(default_factory=_none)
    powers: Mapping[str, float] = field(default_factory=_none)
    luminosity_powers: Mapping[str, float] = field(default_factory=_none)
    thermal: tuple[str, ...] = ()

    @property
    def tracers(self) -> tuple[str, ...]:
        """What it needs."""
        return tuple(self.coefficients)

    @property
    def is_linear(self) -> bool:
        """Whether every term is proportional to its intensity."""
        return not self.powers

    def rate(self, luminosities: Mapping[str, Array]) -> Array:
        """Star-formation rate [Msun/yr] of luminosities [erg/s]; a power law of less than 0 is NaN.

        Raises
        ------
        KeyError
            If the record has no luminosity form, or a tracer is missing.
        """
        if not self.luminosity:
            raise KeyError(f"record {self.key!r} is published for surface brightness only")
        total: Array | float = 0.0
        for tracer, coefficient in self.luminosity.items():
            power = self.luminosity_powers.get(tracer)
            value = np.asarray(luminosities[tracer], dtype=float)
            if power is not None:
                value = np.where(value >= 0, value, np.nan) ** power
            total = total + coefficient * value
        return np.asarray(total)

    def __reduce__(self) -> tuple[Any, ...]:
        """Travel by key; a user's own record, which lies on no shelf, as plain data."""
        if self.key in STAR_FORMATION:
            return _by_key, (self.key,)
        data = {f.name: getattr(self, f.name) for f in fields(self)}
        plain = {k: dict(v) if isinstance(v, Mapping) else v for k, v in data.items()}
        return _from_data, (plain,)


def _by_key(key: str) -> StarFormation:
    return STAR_FORMATION.get(key)


def _from_data(data: dict[str, Any]) -> StarFormation:
    return StarFormation(**data)


STAR_FORMATION = Registry[StarFormation]("star-formation record")


def luminosity_per_intensity(tracer: str) -> float:
    """Luminosity per kpc2 [erg/s/kpc2] of a unit of canonical intensity, nu L_nu for bands.

    The radio continuum is counted per frequency [erg/s/Hz/kpc2], as its calibrations are.
    """
    per_sr = 4.0 * math.pi * (PC_CM * 1e3) ** 2
    kind = TRACERS[tracer]
    if kind.unit == "MJy/sr" and kind.is_radio:
        return per_sr * 1e6 * JY_CGS
    if kind.unit == "MJy/sr":
        return per_sr * kind.frequency_ghz * 1e9 * 1e6 * JY_CGS
    if kind.unit == "erg/s/cm2/sr":
        return per_sr
    raise ValueError(f"{tracer} is no tracer of a luminosity in erg/s")


def from_luminosities(
    key: str,
    luminosity: Mapping[str, float],
    published: str,
    *,
    cite: str,
    where: str,
    certainty: Certainty,
    family: str,
    **more: Any,
) -> StarFormation:
    """Make a linear record from constants per luminosity; its surface form is geometry.

    Parameters
    ----------
    key : str
    luminosity : mapping of str to float
        Msun/yr per erg/s, by tracer.
    published : str
        The formula as the paper has it.
    cite, where, certainty, family, **more
        As in `StarFormation`.
    """
    coefficients = {t: c * luminosity_per_intensity(t) for t, c in luminosity.items()}
    terms = " + ".join(f"{c:.5g} I_{t}" for t, c in coefficients.items())
    units = ", ".join(dict.fromkeys(TRACERS[t].unit for t in coefficients))
    given: dict[str, Any] = {
        "label": " + ".join(_in_words(t) for t in luminosity),
        "imf": "Kroupa",
        **more,
    }
    return StarFormation(
        key=key,
        cite=cite,
        where=where,
        formula=f"{published}, so Sigma_SFR = ({terms}) cos i  [Msun/yr/kpc2; {units}]",
        certainty=certainty,
        family=family,
        luminosity=MappingProxyType(dict(luminosity)),
        coefficients=MappingProxyType(coefficients),
        **given,
    )


def hybrid(
    key: str,
    base: StarFormation,
    dust: str,
    weight: float,
    published: str,
    *,
    family: str,
    certainty: Certainty,
    **more: Any,
) -> StarFormation:
    """Make L(corrected) = L(observed) + weight L(dust) with the constant of a single tracer.

    Parameters
    ----------
    key : str
    base : StarFormation
        Of the one unobscured tracer.
    dust : str
        Tracer of the reprocessed part.
    weight : float
    published : str
        The formula as the paper has it.
    family : str
        Whose constant the weight was fitted with.
    certainty
        Of the weight; with a base from memory the hybrid is from memory too.
    **more
        As in `from_luminosities`.

    Raises
    ------
    ValueError
        If weight and base are of two families, or the base is no single tracer.
    """
    if base.family != family:
        raise ValueError(
            f"{base.key} has constants of {base.family}, the dust weight was fitted with those of "
            f"{family}: the constants of one tracer differ by up to 0.11 dex between families, so "
            "that a hybrid of two would count the unobscured part on one scale and the obscured "
            "part on another"
        )
    if len(base.luminosity) != 1:
        raise ValueError(f"{base.key} is no calibration of a single tracer")
    ((tracer, constant),) = base.luminosity.items()
    both: Certainty = "verified" if certainty == base.certainty == "verified" else "from memory"
    return from_luminosities(
        key,
        {tracer: constant, dust: constant * weight},
        published,
        family=family,
        certainty=both,
        imf=base.imf,
        **more,
    )


def _in_words(tracer: str) -> str:
    return tracer.replace("um", " um")

"""Records of the user's own: straight lines and power laws that were typed, not published here.

They lie on no shelf. A choice holds the record itself in the place of a key, and all of a record
is plain data, so that it travels between processes like a key does.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.alpha_co import AlphaCO
from kspipe.conversions.line_ratio import LineRatio
from kspipe.conversions.metallicity import z_prime
from kspipe.conversions.record import Range, Record
from kspipe.conversions.star_formation import StarFormation
from kspipe.conversions.strong_lines import StrongLine
from kspipe.core.constants import HELIUM_FACTOR
from kspipe.core.tracers import TRACERS

__all__ = ["GIVEN_ALPHA_CO", "OwnForm", "own_record"]

Array = NDArray[np.float64]
Inputs = Mapping[str, Array]

_SURFACES: Final = ("sigma_star", "sigma_total")


@dataclass(frozen=True)
class OwnForm:
    """A sum ``zero + sum(slope x)`` or a product ``coefficient prod(x^exponent)``.

    Attributes
    ----------
    is_power_law : bool
    first : float
        `zero` of a sum, `coefficient` of a product.
    terms : tuple of (str, float)
        Inputs with their slopes or exponents.
    """

    is_power_law: bool
    first: float
    terms: tuple[tuple[str, float], ...]

    def __call__(self, inputs: Inputs) -> Array:
        """Evaluate; a power of what is not positive is NaN."""
        total = np.asarray(self.first, dtype=float)
        for name, number in self.terms:
            value = z_prime(inputs["oh"]) if name == "z_prime" else np.asarray(inputs[name])
            if self.is_power_law:
                total = total * np.where(value > 0, value, np.nan) ** number
            else:
                total = total + number * value
        return np.asarray(total)

    def __str__(self) -> str:
        if self.is_power_law:
            return " ".join([f"{self.first:g}", *(f"{n}^{e:g}" for n, e in self.terms)])
        head = [] if self.first == 0 and self.terms else [f"{self.first:g}"]
        return " + ".join([*head, *(f"{slope:g} {name}" for name, slope in self.terms)])


@dataclass(frozen=True)
class _LogSlope:
    """d ln(form) / d(input)."""

    form: OwnForm
    name: str

    def __call__(self, inputs: Inputs) -> Array:
        number = dict(self.form.terms)[self.name]
        over = np.asarray(inputs[self.name]) if self.form.is_power_law else self.form(inputs)
        return np.asarray(number / over)


@dataclass(frozen=True)
class _OfSfr:
    """A form of Sigma_SFR alone, held between two bounds; or its logarithmic slope."""

    form: OwnForm
    low: float
    high: float
    is_slope: bool = False

    def __call__(self, sigma_sfr: Array) -> Array:
        # At and below zero a power law is at its lower bound, as the published form is.
        positive = np.maximum(sigma_sfr, np.finfo(float).tiny)
        free = self.form({"sigma_sfr": np.where(np.isnan(sigma_sfr), np.nan, positive)})
        held = np.clip(free, self.low, self.high)
        if not self.is_slope:
            return held
        slope = _LogSlope(self.form, "sigma_sfr")({"sigma_sfr": positive})
        return np.where(held == free, slope, 0.0)


def own_record(
    family: str,
    name: str,
    form: OwnForm,
    citation: str,
    *,
    ranges: tuple[Range, ...] = (),
    scatter_dex: float | None = None,
    helium_factor: float = HELIUM_FACTOR,
    imf: str = "Kroupa",
    lines: tuple[str, str] = ("CO(2-1)", "CO(1-0)"),
    bounds: tuple[float, float] = (0.0, 10.0),
    oh_scale: str | None = None,
) -> Record:
    """Make a record of one of four families.

    Parameters
    ----------
    family : {"alpha_co", "line_ratio", "star_formation", "strong_lines"}
    name : str
        The recipe's name for it, used as its key.
    form : OwnForm
        Of the inputs of the family; of intensities by tracer for star formation.
    citation : str
        As the user typed it.
    ranges : tuple of Range
    scatter_dex : float or None
    helium_factor : float
        That the form includes (alpha_CO); the record's own result includes `HELIUM_FACTOR`.
    imf : str
        Of the star-formation rate, or of nothing.
    lines : (str, str)
        Upper and lower line of a ratio.
    bounds : (float, float)
        Between which a line ratio is held.
    oh_scale : str or None
        Metallicity scale that alpha_CO wants, or that a calibration makes.

    Raises
    ------
    ValueError
        If there can be no such record.
    """
    names = tuple(name for name, _ in form.terms)
    more: dict[str, Any] = {
        "key": name,
        "label": name,
        "cite": citation,
        "where": "typed in the recipe",
        "certainty": "the user's own",
        "ranges": ranges,
        "scatter_dex": scatter_dex,
    }
    if family == "alpha_co":
        scaled = _scaled(form, HELIUM_FACTOR / helium_factor)
        if form.is_power_law is False and "sigma_total" in names:
            raise ValueError("alpha_CO that falls on a straight line with sigma_total has no root")
        if not -1.0 < dict(form.terms).get("sigma_total", 0.0) <= 0.0:
            raise ValueError(
                "the exponent of sigma_total lies between -1 and 0, else there is no single root"
            )
        needs = tuple(dict.fromkeys("oh" if n == "z_prime" else n for n in names))
        return AlphaCO(
            formula=f"alpha_CO = {scaled}  [Msun/pc2 per K km/s]",
            helium_factor=HELIUM_FACTOR,
            needs=needs,
            function=scaled,
            log_slopes=tuple((n, _LogSlope(scaled, n)) for n in names if n in _SURFACES),
            oh_scale=oh_scale,
            **more,
        )
    if family == "line_ratio":
        return LineRatio(
            formula=f"{lines[0]} over {lines[1]} = {form}, not below {bounds[0]:g} nor above "
            f"{bounds[1]:g}",
            upper=lines[0],
            lower=lines[1],
            value=float(np.clip(form({"sigma_sfr": np.asarray(0.018)}), *bounds)),
            low=bounds[0],
            high=bounds[1],
            spread="bounds of the form",
            function=_OfSfr(form, *bounds),
            log_slope=_OfSfr(form, *bounds, is_slope=True),
            **more,
        )
    if family == "star_formation":
        return _star_formation(form, imf, more)
    return StrongLine(
        formula=f"OH = {form}", needs=names, function=form, oh_scale=oh_scale or name, **more
    )


def _scaled(form: OwnForm, factor: float) -> OwnForm:
    """Multiply a form by a number."""
    if form.is_power_law:
        return OwnForm(True, form.first * factor, form.terms)
    return OwnForm(False, form.first * factor, tuple((n, s * factor) for n, s in form.terms))


def _star_formation(form: OwnForm, imf: str, more: Mapping[str, Any]) -> StarFormation:
    if form.is_power_law and len(form.terms) != 1:
        raise ValueError("a power law of star formation takes one tracer")
    if not form.is_power_law and form.first != 0.0:
        raise ValueError("star formation on a straight line goes through zero")
    units = ", ".join(dict.fromkeys(TRACERS[tracer].unit for tracer, _ in form.terms))
    ((only, exponent),) = form.terms if form.is_power_law else (("", 1.0),)
    return StarFormation(
        formula=f"Sigma_SFR = {form} of face-on intensities  [Msun/yr/kpc2; {units}]",
        imf=imf,
        family=str(more["key"]),
        coefficients={only: form.first} if form.is_power_law else dict(form.terms),
        powers={only: exponent} if form.is_power_law else {},
        **more,
    )


def _hand_on(inputs: Inputs) -> Array:
    return np.asarray(inputs["alpha_co"], dtype=float)


# alpha_CO as a number, a map or a table: a record that hands on what it is given.
GIVEN_ALPHA_CO: Final = AlphaCO(
    key="given",
    label=r"$\alpha_{\rm CO}$ given",
    cite="the recipe",
    where="typed in the recipe",
    formula="alpha_CO as given  [Msun/pc2 per K km/s]",
    certainty="the user's own",
    helium_factor=HELIUM_FACTOR,
    needs=("alpha_co",),
    function=_hand_on,
)

"""What a budget varies: each assumption with its width, and who said so."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions import (
    ALPHA_CO,
    LINE_RATIO,
    STAR_FORMATION,
    USUAL_SHIFT_DEX,
    AlphaCO,
    LineRatio,
    imf_factor,
)
from kspipe.core.constants import HELIUM_FACTOR
from kspipe.core.tracers import CO_LINES
from kspipe.maps.skymap import SkyMap
from kspipe.matching.short_spacings import USUALLY_MISSING
from kspipe.recipe import Recipe
from kspipe.recipe.models import SystematicsTable
from kspipe.recipe.quantity import Measured

__all__ = ["Effect", "Prior", "priors_of"]

Array = NDArray[np.float64]

# How an amount acts on what is converted:
#   factor     intensity of `target` times 10^amount
#   fraction   intensity of `target` times (1 + amount)
#   offset     amount added to the intensity of `target`
#   spread     amount times the mean intensity of `target` at that radius added; a share of the
#              flux that lies smoothly over the disc
#   parameter  amount added to the number `target` of the conversion
#   gas        both phases times (1 + amount)
#   sfr        star formation times 10^amount
#   oh         amount added to 12 + log10(O/H)
#   distance, inclination, position_angle
#              distance times (1 + amount); amount added [deg]
Effect = Literal[
    "factor",
    "fraction",
    "offset",
    "spread",
    "parameter",
    "gas",
    "sfr",
    "oh",
    "distance",
    "inclination",
    "position_angle",
]


@dataclass(frozen=True)
class Prior:
    """One assumption.

    Attributes
    ----------
    name : str
        For tables.
    effect : str
        One of `Effect`.
    sigma : float
        1-sigma width of the amount; negative for a one-sided amount that removes.
    unit : str
        Of the amount.
    origin : str
        Who said so.
    target : str
        Tracer or number that it acts on.
    centre : float
        What the recipe assumes, in `unit`; NaN where the amount is a factor on it.
    is_one_sided : bool
        Whether only one sign is possible: amounts are then half-normal.
    """

    name: str
    effect: Effect
    sigma: float
    unit: str
    origin: str
    target: str = ""
    centre: float = math.nan
    is_one_sided: bool = False

    def amount(self, normal: Array) -> Array:
        """Turn standard normal numbers into amounts."""
        return self.sigma * (np.abs(normal) if self.is_one_sided else normal)

    def words(self, n_sigma: float) -> str:
        """What the assumption is at so many sigma."""
        amount = float(self.amount(np.asarray(n_sigma)))
        if math.isfinite(self.centre):
            return f"{self.centre:.4g} to {self.centre + amount:.4g} {self.unit}".strip()
        return f"by {amount:+.3g} {self.unit}".strip()


_PRACTICE: Final = "default (common practice)"
# Values in use lie between 1.33 and 1.40 (common practice).
_HELIUM_SIGMA: Final = 0.02
# Calibrations of one quantity differ by so much (common practice).
_ALPHA_CO_DEX, _LINE_RATIO_DEX, _SFR_DEX, _DIFFUSE = 0.2, 0.1, 0.1, 0.1


def priors_of(
    recipe: Recipe, matched: dict[str, SkyMap], used: set[str]
) -> tuple[list[Prior], list[str]]:
    """List all assumptions of a recipe that have a width, and say which have none.

    Parameters
    ----------
    recipe : Recipe
    matched : dict of str to SkyMap
        By the recipe's names.
    used : set of str
        Tracers that the surface densities are made of.

    Returns
    -------
    priors : list of Prior
    fixed : list of str
        Assumptions that are not varied, each with the reason.
    """
    typed = recipe.systematics or SystematicsTable()
    found = [
        *_geometry(recipe),
        *_gas(recipe, typed, used),
        *_stars(recipe, typed, used),
        *_metallicity(recipe, typed),
        *_maps(recipe, typed, matched, used),
    ]
    priors = [prior for prior in found if prior.sigma != 0]
    fixed = [f"{prior.name}: {prior.origin}" for prior in found if prior.sigma == 0]
    return priors, fixed


def _stated(
    name: str, measured: object, effect: Effect, unit: str, key: str, target: str = ""
) -> Prior:
    """A prior whose width is the error typed beside a value."""
    if not isinstance(measured, Measured):
        return Prior(name, effect, 0.0, unit, f"{key} varies over the disc: not drawn", target)
    scale = measured.value if effect == "distance" else 1.0
    origin = f"recipe: {key} = {measured}" if measured.error else f"{key} has no +- error"
    return Prior(
        name,
        effect,
        measured.error / scale,
        unit,
        origin,
        target,
        math.nan if effect == "distance" else measured.value,
    )


def _width(
    typed: Measured | None, key: str, record_dex: float | None, record: str, usual: float
) -> tuple[float, str]:
    """Width and origin: the recipe's word, the record's scatter, or the usual size."""
    if typed is not None:
        return typed.value, f"recipe: systematics.{key} = {typed}"
    if record_dex is not None:
        return record_dex, f"scatter of {record}"
    return usual, _PRACTICE


def _geometry(recipe: Recipe) -> list[Prior]:
    galaxy = recipe.galaxy
    return [
        _stated("distance", galaxy.distance, "distance", "of it", "galaxy.distance"),
        _stated("inclination", galaxy.inclination, "inclination", "deg", "galaxy.inclination"),
        _stated(
            "position angle",
            galaxy.position_angle,
            "position_angle",
            "deg",
            "galaxy.position_angle",
        ),
    ]


def _gas(recipe: Recipe, typed: SystematicsTable, used: set[str]) -> list[Prior]:
    helium = typed.helium.value if typed.helium else _HELIUM_SIGMA / HELIUM_FACTOR
    origin = f"recipe: systematics.helium = {typed.helium}" if typed.helium else _PRACTICE
    priors = [Prior("helium", "gas", helium, "of all gas", origin)]
    if isinstance(recipe.gas, str):
        return priors
    line = next(line for line in CO_LINES if line in used)
    width, said = _width(
        typed.alpha_co, "alpha_co", *_scatter_of(recipe.gas.alpha_co), _ALPHA_CO_DEX
    )
    priors.append(Prior("alpha_CO", "factor", width, "dex", said, line))
    ratio = recipe.gas.line_ratio
    if isinstance(ratio, Measured) and ratio.error > 0 and typed.line_ratio is None:
        priors.append(_stated("line ratio", ratio, "parameter", "", "gas.line_ratio", "line_ratio"))
    elif line != "CO(1-0)":
        scatter = LINE_RATIO.get(ratio).scatter_dex if isinstance(ratio, str | LineRatio) else None
        said = ratio.key if isinstance(ratio, LineRatio) else str(ratio)
        width, said = _width(typed.line_ratio, "line_ratio", scatter, said, _LINE_RATIO_DEX)
        priors.append(Prior("line ratio", "factor", width, "dex", said, line))
    if recipe.gas.hi_opacity is not None:
        opacity = recipe.gas.hi_opacity
        priors.append(
            _stated("HI opacity", opacity, "parameter", "", "gas.hi_opacity", "hi_opacity")
        )
    if recipe.stars is not None:
        key = "stars.mass_to_light"
        ratio = recipe.stars.mass_to_light
        priors.append(_stated("mass to light", ratio, "parameter", "", key, "mass_to_light"))
    return priors


def _scatter_of(alpha_co: object) -> tuple[float | None, str]:
    """Scatter of an alpha_CO record or typed error [dex], and what it is the scatter of."""
    if isinstance(alpha_co, str | AlphaCO):
        record = ALPHA_CO.get(alpha_co)
        return record.scatter_dex, record.key
    if isinstance(alpha_co, Measured) and alpha_co.error > 0:
        return alpha_co.error / alpha_co.value / math.log(10.0), f"gas.alpha_co = {alpha_co}"
    return None, ""


def _stars(recipe: Recipe, typed: SystematicsTable, used: set[str]) -> list[Prior]:
    """Star formation: coefficients, mass function, foreground, [NII], diffuse light."""
    record = STAR_FORMATION.get(recipe.star_formation.calibration)
    width, said = _width(
        typed.star_formation, "star_formation", record.scatter_dex, record.key, _SFR_DEX
    )
    share = typed.diffuse.value if typed.diffuse else _DIFFUSE
    from_recipe = f"recipe: systematics.diffuse = {typed.diffuse}"
    priors = []
    for tracer in record.tracers:
        source = tracer if tracer in used else "22um"
        # A power law turns a factor on its intensity into a smaller one.
        on_intensity = width / record.powers.get(tracer, 1.0)
        priors += [
            Prior(f"SFR coefficient of {tracer}", "factor", on_intensity, "dex", said, source),
            Prior(
                f"diffuse {tracer}",
                "spread",
                -share,
                "of the flux",
                from_recipe if typed.diffuse else _PRACTICE,
                source,
                is_one_sided=True,
            ),
        ]
    imf = abs(math.log10(imf_factor("Kroupa", "Chabrier")))
    origin = "Kroupa against Chabrier, same number of massive stars"
    if typed.imf is not None:
        imf, origin = typed.imf.value, f"recipe: systematics.imf = {typed.imf}"
    priors.append(Prior("IMF", "sfr", imf, "dex", origin))
    ebv = recipe.foreground.ebv
    if {"FUV", "NUV", "Halpha"} & set(record.tracers):
        priors.append(
            _stated("foreground E(B-V)", ebv, "parameter", "mag", "foreground.ebv", "ebv")
        )
    for name in recipe.star_formation.maps:
        table = recipe.maps[name]
        for key in ("nii_ratio", "as_24um"):
            value = getattr(table, key)
            if value is not None:
                where = f"maps.{name}.{key}"
                priors.append(_stated(key, value, "parameter", "", where, key))
    return priors


def _metallicity(recipe: Recipe, typed: SystematicsTable) -> list[Prior]:
    table = recipe.metallicity
    centre = table.oh.value if isinstance(table.oh, Measured) else math.nan
    if typed.metallicity is None and isinstance(table.oh, Measured) and table.oh.error > 0:
        return [_stated("metallicity zero point", table.oh, "oh", "", "metallicity.oh")]
    width, said = _width(typed.metallicity, "metallicity", None, "", USUAL_SHIFT_DEX[0])
    return [Prior("metallicity zero point", "oh", width, "", said, "", centre)]


def _maps(
    recipe: Recipe, typed: SystematicsTable, matched: dict[str, SkyMap], used: set[str]
) -> list[Prior]:
    """Flux scale, zero level and missing short spacings of each map."""
    priors = []
    for name, sky in matched.items():
        if sky.tracer not in used:
            continue
        where = f"maps.{name}"
        scale = math.hypot(sky.common.calibration, sky.common.matching)
        said = f"recipe: {where}.calibration_error"
        if sky.common.matching:
            said += " and a PSF read as a Gaussian"
        if not scale:
            said = f"{where}.calibration_error is not typed"
        priors.append(Prior(f"flux scale of {name}", "fraction", scale, "of it", said, sky.tracer))
        level = sky.common.pedestal
        said = f"{'recipe: ' if level else ''}{where}.pedestal_error"
        said += "" if level else " is not typed"
        priors.append(Prior(f"zero level of {name}", "offset", level, sky.unit, said, sky.tracer))
        stated = recipe.maps[name].short_spacings
        if stated in ("no", "unknown"):
            missing, said = USUALLY_MISSING[0], f"{where}.short_spacings = {stated!r}: " + _PRACTICE
            if typed.short_spacings is not None:
                missing = typed.short_spacings.value
                said = f"recipe: systematics.short_spacings = {typed.short_spacings}"
            priors.append(
                Prior(
                    f"short spacings of {name}",
                    "spread",
                    missing,
                    "of the flux",
                    said,
                    sky.tracer,
                    is_one_sided=True,
                )
            )
    return priors

"""The table of the metallicity: four ways to know 12 + log10(O/H), on a stated scale."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Annotated, Any, Final, Literal

from pydantic import AfterValidator, BeforeValidator, model_validator

from kspipe.conversions import MASS_METALLICITY, OH_SCALES, STRONG_LINES, StrongLine
from kspipe.core.errors import nearest
from kspipe.recipe.kinds import ABUNDANCE, Abundance, LineMap, MetalContent
from kspipe.recipe.quantity import Measured
from kspipe.recipe.values import StellarMass, Table, key_of
from kspipe.recipe.varying import OnMap, Varying

__all__ = ["MetallicityTable", "gradient_value"]

_PER: Final = ("kpc", "r25", "r_e")


def gradient_value(typed: str) -> tuple[float, str]:
    """Split ``-0.045 dex/kpc`` into the number and what it counts per.

    Raises
    ------
    ValueError
        If it is not per kpc, r25 or r_e.
    """
    text, _, per = typed.partition("dex/")
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value) or per.strip() not in _PER:
        raise ValueError(
            f'{typed!r} is not a gradient; expected "-0.045 dex/kpc", "-0.3 dex/r25" or '
            '"-0.1 dex/r_e"'
        )
    return value, per.strip()


def _gradient(typed: str | None) -> str | None:
    if typed is not None:
        gradient_value(typed)
    return typed


def _oh_scale(typed: Any) -> str:
    if typed not in OH_SCALES:
        raise ValueError(
            f'metallicity scale "{typed}" is not known; {nearest(str(typed), OH_SCALES)}'
        )
    return str(typed)


_WAYS: Final = ("oh", "map", "z_prime", "calibration", "relation")
# Keys that go with one of the ways only.
_BELONGS: Final = {
    "solar": "z_prime",
    "lines": "calibration",
    "stellar_mass": "relation",
    "error": "map",
}


class MetallicityTable(Table):
    """12 + log10(O/H) over the disc, on a stated scale.

    ``oh`` is a number (with a gradient), a map, a radial table or a number per region, and
    ``map`` is short for its map; ``z_prime`` is relative to a solar anchor; ``calibration`` takes
    maps of strong-line ratios; ``relation`` is the fallback by the galaxy's stellar mass.
    """

    oh: Abundance | None = None
    gradient: Annotated[str | None, AfterValidator(_gradient)] = None
    map: Path | None = None
    error: Path | None = None
    z_prime: MetalContent | None = None
    solar: Literal["8.69", "8.76", "Z = 0.02"] | None = None
    calibration: Annotated[str | StrongLine, key_of(STRONG_LINES)] | None = None
    lines: dict[str, LineMap] | None = None
    relation: Annotated[str, key_of(MASS_METALLICITY)] | None = None
    stellar_mass: StellarMass | None = None
    scale: Annotated[str, BeforeValidator(_oh_scale)] = "not stated"

    @property
    def slope(self) -> tuple[float, str]:
        """Gradient and what it counts per: ``kpc``, ``r25`` or ``r_e``; zero without one."""
        return (0.0, "kpc") if self.gradient is None else gradient_value(self.gradient)

    @property
    def abundance(self) -> Varying | None:
        """12 + log10(O/H) as it was given, where it was."""
        return OnMap(ABUNDANCE, self.map, self.error) if self.map is not None else self.oh

    @property
    def oh_scale(self) -> str:
        """The scale: that of the calibration or relation, or the one typed."""
        if self.calibration is not None:
            return STRONG_LINES.get(self.calibration).oh_scale
        if self.relation is not None:
            return MASS_METALLICITY.get(self.relation).oh_scale
        return self.scale

    @model_validator(mode="after")
    def _one_way(self) -> MetallicityTable:
        given = [key for key in _WAYS if getattr(self, key) is not None]
        if len(given) != 1:
            raise ValueError(
                'give either oh = 8.69 (with gradient = "... dex/kpc"), map = "file.fits", '
                'z_prime = 0.5 with solar = "8.69", calibration = "KEY" with lines, or relation = '
                f'"KEY" with stellar_mass; given: {", ".join(given) or "none"}'
            )
        for key, way in _BELONGS.items():
            if getattr(self, key) is not None and given != [way]:
                raise ValueError(f"{key} belongs to {way}, not to {given[0]}")
            if key != "error" and given == [way] and getattr(self, key) is None:
                raise ValueError(f"{way} needs {key}: {_HELP[key]}")
        if self.gradient is not None and given not in (["oh"], ["relation"]):
            what = "map" if given == ["map"] else given[0]
            raise ValueError(f"a gradient and a {what} exclude each other")
        if self.gradient is not None and self.oh and not isinstance(self.oh, Measured):
            raise ValueError("a gradient goes with one number for oh, which is that of the centre")
        if self.scale not in (self.oh_scale, "not stated"):
            raise ValueError(
                f'scale = "{self.scale}", but {given[0]} makes the scale "{self.oh_scale}"; remove '
                "the key"
            )
        return self

    @model_validator(mode="after")
    def _lines_fit(self) -> MetallicityTable:
        if self.calibration is not None and self.lines is not None:
            record = STRONG_LINES.get(self.calibration)
            needs = set(record.needs)
            if set(self.lines) != needs:
                raise ValueError(
                    f'"{record.key}" takes lines = {{{", ".join(sorted(needs))}}}; given: '
                    f"{', '.join(sorted(self.lines)) or 'none'}"
                )
        return self


_HELP: Final = {
    "solar": 'what Z\' = 1 means, "8.69", "8.76" or "Z = 0.02"',
    "lines": "the ratios that the calibration takes, {o3n2 = {map = ...}}",
    "stellar_mass": '"2e10 Msun"',
}

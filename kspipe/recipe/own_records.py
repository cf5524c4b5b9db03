"""The user's own records: ``[records.NAME]`` with a family, a form and a citation."""

from __future__ import annotations

import math
from typing import Annotated, Any, Final, Literal

from pydantic import BeforeValidator, Field, model_validator

from kspipe.conversions import IMFS, INPUTS, OwnForm, Range, Record, own_record
from kspipe.core.constants import HELIUM_FACTOR
from kspipe.core.errors import nearest
from kspipe.core.tracers import CO_LINES, TRACERS
from kspipe.recipe.values import Table

__all__ = ["RecordTable"]

_TAKES: Final[dict[str, tuple[str, ...]]] = {
    "alpha_co": ("oh", "z_prime", "sigma_star", "sigma_total", "ms_offset_dex", "g0_over_n"),
    "line_ratio": ("sigma_sfr",),
    "star_formation": tuple(TRACERS),
    "strong_lines": ("n2", "o3n2", "n2s2", "r2_hb", "r3_hb", "n2_hb", "s2_hb"),
}
_ONLY: Final = {
    "helium": "alpha_co",
    "imf": "star_formation",
    "lines": "line_ratio",
    "bounds": "line_ratio",
}


def _interval(typed: Any) -> list[float]:
    if not isinstance(typed, list | tuple) or len(typed) != 2:
        raise ValueError(f"{typed!r} is not an interval; expected [8.0, 8.9]")
    low, high = (float(bound) for bound in typed)
    if not low < high:
        raise ValueError(f"{typed!r} does not rise")
    return [low, high]


def _helium(typed: Any) -> float | None:
    if typed is not None and typed not in (1.0, 1.36, 1.4):
        raise ValueError(f"helium = {typed!r}: expected 1.0 (hydrogen only), 1.36 or 1.4")
    return None if typed is None else float(typed)


Interval = Annotated[list[float], BeforeValidator(_interval)]


class RecordTable(Table):
    """One record of the user's own, a straight line or a power law."""

    family: Literal["alpha_co", "line_ratio", "star_formation", "strong_lines"]
    form: Literal["linear", "power law"]
    citation: str = Field(min_length=4)
    zero: float | None = None
    slopes: dict[str, float] | None = None
    coefficient: float | None = None
    exponents: dict[str, float] | None = None
    ranges: dict[str, Interval] = Field(default_factory=dict)
    scatter_dex: float | None = Field(default=None, ge=0)
    helium: Annotated[float | None, BeforeValidator(_helium)] = None
    imf: str | None = None
    lines: tuple[str, str] | None = None
    bounds: Interval | None = None
    scale: str | None = None

    @property
    def own_form(self) -> OwnForm:
        """The formula."""
        if self.form == "power law":
            return OwnForm(
                True, float(self.coefficient or 0.0), tuple((self.exponents or {}).items())
            )
        return OwnForm(False, float(self.zero or 0.0), tuple((self.slopes or {}).items()))

    @model_validator(mode="after")
    def _complete(self) -> RecordTable:
        mine, other = (
            (("coefficient", "exponents"), ("zero", "slopes"))
            if self.form == "power law"
            else (("slopes",), ("coefficient", "exponents"))
        )
        for key in mine:
            if getattr(self, key) is None:
                raise ValueError(f"a {self.form} needs {' and '.join(mine)}")
        for key in other:
            if getattr(self, key) is not None:
                raise ValueError(f'"{key}" does not go with form = "{self.form}"')
        if self.coefficient is not None and not 0 < self.coefficient < math.inf:
            raise ValueError(f"coefficient {self.coefficient:g} is not positive")
        self._check_inputs()
        self._check_conventions()
        return self

    def _check_inputs(self) -> None:
        takes = _TAKES[self.family]
        for name in (*(self.slopes or {}), *(self.exponents or {}), *self.ranges):
            if name not in takes:
                raise ValueError(
                    f'a record of {self.family} takes no "{name}"; {nearest(name, takes)}'
                )

    def _check_conventions(self) -> None:
        for key, family in _ONLY.items():
            if getattr(self, key) is not None and self.family != family:
                raise ValueError(f"{key} belongs to records of {family}")
        for key in ("helium", "imf", "lines"):
            if getattr(self, key) is None and self.family == _ONLY[key]:
                raise ValueError(f"a record of {self.family} says its {key}: {_HELP[key]}")
        names = [imf.name for imf in IMFS]
        if self.imf is not None and self.imf not in names:
            raise ValueError(f'imf = "{self.imf}" is not known; {nearest(self.imf, names)}')
        if self.lines is not None and not set(self.lines) <= set(CO_LINES):
            raise ValueError(f"lines = {list(self.lines)}: known are {', '.join(CO_LINES)}")

    def record(self, name: str) -> Record:
        """Make the record.

        Raises
        ------
        ValueError
            If there can be no such record.
        """
        return own_record(
            self.family,
            name,
            self.own_form,
            self.citation,
            ranges=tuple(_range(n, bounds) for n, bounds in self.ranges.items()),
            scatter_dex=self.scatter_dex,
            helium_factor=self.helium or HELIUM_FACTOR,
            imf=self.imf or "Kroupa",
            lines=self.lines or ("CO(2-1)", "CO(1-0)"),
            bounds=(self.bounds[0], self.bounds[1]) if self.bounds else (0.0, math.inf),
            oh_scale=self.scale,
        )


def _range(name: str, bounds: list[float]) -> Range:
    symbol = INPUTS[name].symbol if name in INPUTS else name
    return Range(symbol, bounds[0], bounds[1], name if name in INPUTS else "")


_HELP: Final = {
    "helium": "1.36 where it includes helium, 1.0 where it is hydrogen only",
    "imf": '"Kroupa", "Salpeter" or "Chabrier"',
    "lines": '["CO(2-1)", "CO(1-0)"], upper and lower',
}

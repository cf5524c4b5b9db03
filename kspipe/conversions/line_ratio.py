"""Brightness of one CO line over another: constants with their spread, and one form."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.record import Record
from kspipe.core.registry import Registry

__all__ = ["LINE_RATIO", "LineRatio"]

Array = NDArray[np.float64]
OfSfr = Callable[[Array], Array]


@dataclass(frozen=True, kw_only=True)
class LineRatio(Record):
    """Ratio of brightness temperatures integrated over velocity.

    Attributes
    ----------
    upper, lower : str
        The ratio is that of the upper line over the lower one.
    value : float
        The constant, or the value at Sigma_SFR = 0.018 Msun/yr/kpc2 of a form.
    low, high : float
        Published spread: 16 to 84 percent, 1 standard deviation, or the bounds of a form.
    spread : str
        What `low` and `high` are.
    function, log_slope : callable or None
        Of Sigma_SFR [Msun/yr/kpc2]: the ratio, and d ln(ratio) / d Sigma_SFR; None for constants.
    """

    upper: str
    lower: str
    value: float
    low: float
    high: float
    spread: str
    function: OfSfr | None = None
    log_slope: OfSfr | None = None

    @property
    def needs(self) -> tuple[str, ...]:
        """Names in `kspipe.conversions.inputs.INPUTS`."""
        return () if self.function is None else ("sigma_sfr",)

    def __call__(self, sigma_sfr: Array) -> tuple[Array, Array]:
        """Ratio, and d ln(ratio) / d Sigma_SFR; NaN in gives NaN where Sigma_SFR matters."""
        if self.function is None or self.log_slope is None:
            return np.full(np.shape(sigma_sfr), self.value), np.zeros(np.shape(sigma_sfr))
        return self.function(sigma_sfr), self.log_slope(sigma_sfr)


LINE_RATIO = Registry[LineRatio]("line-ratio record")

_FLOOR, _CEILING, _POWER = 0.35, 1.0, 0.125


def _schinnerer2024(sigma_sfr: Array) -> Array:
    positive = np.maximum(sigma_sfr, 0.0)
    return np.asarray(np.clip(0.65 * (positive / 1.8e-2) ** _POWER, _FLOOR, _CEILING))


def _schinnerer2024_log_slope(sigma_sfr: Array) -> Array:
    ratio = _schinnerer2024(sigma_sfr)
    level = (ratio <= _FLOOR) | (ratio >= _CEILING)
    return np.where(level, 0.0, _POWER / np.where(level, 1.0, sigma_sfr))


def _constant(
    key: str,
    ratio: tuple[str, str],
    value: float,
    spread: tuple[float, float, str],
    where: str,
    certainty: str = "verified",
    note: str = "",
) -> None:
    """Put a constant on the shelf."""
    upper, lower = ratio
    name = f"R{upper[3]}{lower[3]}"
    low, high, meaning = spread
    LINE_RATIO.add(
        LineRatio(
            key=key,
            label=f"{name} = {value:g}",
            cite=key.split("_", maxsplit=1)[0],
            where=where,
            formula=f"{name} = {value:g}, {low:g} to {high:g} ({meaning})",
            certainty="verified" if certainty == "verified" else "from memory",
            note=note,
            upper=upper,
            lower=lower,
            value=value,
            low=low,
            high=high,
            spread=meaning,
        )
    )


_R21, _R31, _R32 = ("CO(2-1)", "CO(1-0)"), ("CO(3-2)", "CO(1-0)"), ("CO(3-2)", "CO(2-1)")
_GALAXIES = "16 to 84 percent of galaxies"

_constant("leroy2022_r21", _R21, 0.65, (0.50, 0.83, _GALAXIES), "abstract")
_constant("leroy2022_r32", _R32, 0.50, (0.23, 0.59, _GALAXIES), "abstract")
_constant("leroy2022_r31", _R31, 0.31, (0.20, 0.42, _GALAXIES), "abstract")
_constant(
    "denbrok2021_r21",
    _R21,
    0.64,
    (0.55, 0.73, "1 sigma between 9 galaxies"),
    "abstract",
    note="Luminosity-weighted mean; 10 to 20 % higher in centres.",
)
_constant(
    "yajima2021_r21",
    _R21,
    0.61,
    (0.42, 0.80, "1 sigma between pixels"),
    "abstract",
    note="Median; weighted by intensity 0.66. About 0.8 in the inner kpc and 0.60 in discs.",
)
_constant(
    "saintonge2017_r21",
    _R21,
    0.79,
    (0.76, 0.82, "1 sigma of the mean"),
    "aperture-corrected ratio of whole galaxies",
    "from memory",
)
LINE_RATIO.add(
    LineRatio(
        key="schinnerer2024_r21",
        label=r"R21 $\propto \Sigma_{\rm SFR}^{0.125}$",
        cite="schinnerer2024",
        where="Table 1",
        formula="R21 = 0.65 (Sigma_SFR / 1.8e-2)^0.125, not below 0.35 nor above 1.0  "
        "[Msun/yr/kpc2]",
        certainty="verified",
        note="Sigma_SFR of the same pixel, so that the molecular gas shares its noise; where it is "
        "not positive the ratio is 0.35.",
        upper="CO(2-1)",
        lower="CO(1-0)",
        value=0.65,
        low=_FLOOR,
        high=_CEILING,
        spread="bounds of the form",
        function=_schinnerer2024,
        log_slope=_schinnerer2024_log_slope,
    )
)

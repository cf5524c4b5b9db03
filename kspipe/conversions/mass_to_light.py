"""Mass-to-light ratio at 3.4 um that falls with specific star formation."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.record import Record
from kspipe.core.registry import Registry

__all__ = ["MASS_TO_LIGHT", "MassToLight"]

Array = NDArray[np.float64]

_LN10: Final = float(np.log(10.0))
_MOST_STEPS: Final = 60


@dataclass(frozen=True, kw_only=True)
class MassToLight(Record):
    """Level, then straight in log10 of the specific rate, then level again.

    Attributes
    ----------
    high, low : float
        M/L [solar units at 3.4 um] where few and where many stars form.
    start, stop : float
        log10 of Sigma_SFR / Sigma_star [1/yr] between which it falls.
    """

    high: float
    low: float
    start: float
    stop: float

    @property
    def slope(self) -> float:
        """Of the falling part, per dex."""
        return (self.low - self.high) / (self.stop - self.start)

    def at(self, log_ssfr: Array) -> Array:
        """M/L of a specific rate."""
        falling = self.high + self.slope * (log_ssfr - self.start)
        return np.asarray(np.clip(falling, self.low, self.high))

    def solve(self, rate_per_light: Array) -> tuple[Array, Array]:
        """M/L whose mass gives the specific rate that gives this M/L.

        Parameters
        ----------
        rate_per_light : float64 array
            Sigma_SFR over Sigma_star at M/L = 1 [1/yr]. Below or at zero M/L is `high`: no star
            formation is seen.

        Returns
        -------
        ratio, log_slope : float64 array
            M/L, and d(M/L) / d(ln rate_per_light).

        Notes
        -----
        m = f(q - log10 m) has one root: m - f(q - log10 m) rises with m wherever m ln(10) is more
        than minus the slope of f.
        """
        rate = np.asarray(rate_per_light, dtype=float)
        with np.errstate(divide="ignore", invalid="ignore"):
            q = np.where(rate > 0, np.log10(np.where(rate > 0, rate, 1.0)), -np.inf)
        q = np.where(np.isnan(rate), np.nan, q)
        q = np.where(np.isposinf(rate), np.inf, q)
        ratio = np.full(q.shape, self.high)
        for _ in range(_MOST_STEPS):
            log_ssfr = q - np.log10(ratio)
            falls = (log_ssfr > self.start) & (log_ssfr < self.stop)
            rise = 1.0 + np.where(falls, self.slope, 0.0) / (ratio * _LN10)
            step = (self.at(log_ssfr) - ratio) / rise
            ratio = np.clip(ratio + step, self.low, self.high)
            if not np.any(np.abs(step) > 1e-12):
                break
        log_ssfr = q - np.log10(ratio)
        falls = (log_ssfr > self.start) & (log_ssfr < self.stop)
        per_dex = np.where(falls, self.slope, 0.0)
        log_slope = per_dex / _LN10 / (1.0 + per_dex / (ratio * _LN10))
        return np.where(np.isnan(rate), np.nan, ratio), log_slope


MASS_TO_LIGHT = Registry[MassToLight]("mass-to-light record")

MASS_TO_LIGHT.add(
    MassToLight(
        key="leroy2019_ssfr",
        label="M/L by sSFR, Leroy et al. 2019",
        cite="leroy2019",
        where="the mass-to-light ratio by specific star formation (equation number not confirmed)",
        formula="M/L = 0.5 below log10 sSFR = -11.0, 0.2 above -10.2, straight between  [solar "
        "units at 3.4 um; 1/yr]",
        certainty="from memory",
        imf="Kroupa",
        note="sSFR = Sigma_SFR / Sigma_star with the mass that this M/L gives, solved for; fitted "
        "to whole galaxies. Where star formation is not positive M/L is 0.5; where light is not "
        "positive, and stars form, 0.2.",
        high=0.5,
        low=0.2,
        start=-11.0,
        stop=-10.2,
    )
)

"""The level of the sky beyond the galaxy: what is left of a background, or taken off too much."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from kspipe.kernels.statistics import clipped_scatter, correlation_area
from kspipe.maps.header import pixel_jacobian
from kspipe.maps.skymap import CommonError, SkyMap

__all__ = ["SkyLevel", "measure_sky_level", "subtract_sky_level"]

Array = NDArray[np.float64]

# A background is not flat: its error is that of the mean of so many sectors about the galaxy.
SECTORS: Final = 8
# Each needs some independent values for a mean.
LEAST_PER_SECTOR: Final = 5.0
# A level of so many errors is worth a warning.
SIGNIFICANT: Final = 3.0


@dataclass(frozen=True)
class SkyLevel:
    """Mean of the sky beyond the galaxy.

    Attributes
    ----------
    value, error : float
        In the unit of the map; the error holds noise and what differs between directions.
    unit : str
    n_pixels : int
    n_independent : float
        Independent values among them.
    """

    value: float
    error: float
    unit: str
    n_pixels: int
    n_independent: float

    @property
    def is_significant(self) -> bool:
        """Whether it differs from zero by more than three errors."""
        return abs(self.value) > SIGNIFICANT * self.error

    def __str__(self) -> str:
        return (
            f"{self.value:.3g} +- {self.error:.2g} {self.unit} beyond the galaxy "
            f"({self.n_pixels} pixels, {self.n_independent:.0f} independent)"
        )

    def as_plain(self) -> dict[str, Any]:
        """Plain values for the summary."""
        return {
            "value": self.value,
            "error": self.error,
            "unit": self.unit,
            "n_pixels": self.n_pixels,
            "n_independent": self.n_independent,
            "text": str(self),
        }


def measure_sky_level(sky: SkyMap, is_outside: NDArray[np.bool_]) -> SkyLevel | None:
    """Measure the mean of the sky beyond the galaxy; stars and other galaxies do not count.

    Parameters
    ----------
    sky : SkyMap
        With its noise.
    is_outside : (ny, nx) bool array
        Where no emission of the galaxy is expected.

    Returns
    -------
    SkyLevel or None
        None where there is too little sky, on fewer than half of the directions.
    """
    used = is_outside & np.isfinite(sky.value)
    y, x = np.nonzero(used)
    ny, nx = sky.value.shape
    jacobian = pixel_jacobian(sky.wcs, (nx - 1) / 2, (ny - 1) / 2)
    pixel_area = abs(float(np.linalg.det(jacobian)))
    widest = max((correlation_area(t.correlation_arcsec2) for t in sky.noise), default=0.0)
    per_value = max(widest / pixel_area, 1.0)
    # About the middle of what is the galaxy's.
    inside_y, inside_x = np.nonzero(~is_outside)
    middle = (inside_x.mean(), inside_y.mean()) if inside_x.size else ((nx - 1) / 2, (ny - 1) / 2)
    angle = np.arctan2(y - middle[1], x - middle[0])
    sector = np.floor((angle / (2 * math.pi) + 0.5) * SECTORS).astype(int) % SECTORS
    values = sky.value[used]
    counts = np.bincount(sector, minlength=SECTORS) / per_value
    known = np.flatnonzero(counts >= LEAST_PER_SECTOR)
    if known.size < SECTORS // 2:
        return None
    level, sigma = clipped_scatter(values)
    means = [clipped_scatter(values[sector == one])[0] for one in known]
    n_independent = float(values.size / per_value)
    error = math.hypot(
        sigma / math.sqrt(n_independent), _excess(np.array(means), counts[known], sigma)
    )
    return SkyLevel(level, error, sky.unit, values.size, n_independent)


def _excess(means: Array, n_independent: Array, sigma: float) -> float:
    """Error of the mean by what the sectors differ beyond their noise."""
    beyond = float(np.var(means, ddof=1)) - float(np.mean(sigma**2 / n_independent))
    return math.sqrt(max(beyond, 0.0) / means.size)


def subtract_sky_level(sky: SkyMap, level: SkyLevel) -> SkyMap:
    """Take a sky level off a map; its error joins that of the zero level, which pixels share."""
    common = CommonError(
        sky.common.calibration,
        math.hypot(sky.common.pedestal, level.error),
        sky.common.matching,
    )
    step = f"sky level taken off: {level}"
    return sky.with_step(
        step,
        value=sky.value - level.value,
        common=common,
        facts={**sky.facts, "sky_taken_off": level},
    )

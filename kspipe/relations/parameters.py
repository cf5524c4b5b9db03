"""Numbers that a user may set for one use of a relation; those that several relations share."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

from kspipe.core.constants import OH_SOLAR

__all__ = [
    "ANCHOR",
    "CLUMPING",
    "DEPLETION_TIME",
    "EFFICIENCY",
    "RATE_CHOICES",
    "Parameter",
    "scale_pc",
]


@dataclass(frozen=True)
class Parameter:
    """A number that the user may set for one use of a relation.

    Attributes
    ----------
    name : str
    meaning : str
    default : float or None
        None where it must be typed.
    low, high : float
        Allowed values.
    """

    name: str
    meaning: str
    default: float | None
    low: float
    high: float


ANCHOR: Final = Parameter("anchor_oh", "12+log10(O/H) at which Z' = 1", OH_SOLAR, 8.0, 9.5)
CLUMPING: Final = Parameter(
    "clumping",
    "surface density of a complex over that of the beam: 1 below 100 pc, 5 near 1 kpc",
    None,
    1.0,
    100.0,
)
DEPLETION_TIME: Final = Parameter(
    "depletion_time", "time in which stars use up the molecular gas, in Gyr", None, 0.01, 100.0
)
EFFICIENCY: Final = Parameter(
    "efficiency",
    "share of molecular gas that forms stars in a free-fall time of giant clouds, about 0.01",
    None,
    1e-4,
    1.0,
)
# Of a relation that gives only a molecular fraction, exactly one.
RATE_CHOICES: Final = (DEPLETION_TIME, EFFICIENCY)


def scale_pc(low: float, high: float) -> Parameter:
    """Size of the region that a relation is averaged over, between the paper's limits."""
    return Parameter("scale", "size of the region, as a rule the beam, in pc", None, low, high)

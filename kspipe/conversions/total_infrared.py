"""Total infrared emission, 3 to 1100 um, as a sum over bands."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.record import Record
from kspipe.core.constants import JY_CGS
from kspipe.core.registry import Registry
from kspipe.core.tracers import TRACERS

__all__ = ["TOTAL_INFRARED", "TotalInfrared"]

Array = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True)
class TotalInfrared(Record):
    """A weighted sum of nu L_nu.

    Attributes
    ----------
    bands : mapping of str to float
        Weight of nu L_nu by tracer.
    """

    bands: Mapping[str, float]

    @property
    def weights(self) -> dict[str, float]:
        """Total infrared [erg/s/cm2/sr] for 1 MJy/sr of each band."""
        return {
            band: weight * TRACERS[band].frequency_ghz * 1e9 * 1e6 * JY_CGS
            for band, weight in self.bands.items()
        }

    def __reduce__(self) -> tuple[object, tuple[str]]:
        """Travel by key."""
        return _by_key, (self.key,)


def _by_key(key: str) -> TotalInfrared:
    return TOTAL_INFRARED.get(key)


TOTAL_INFRARED = Registry[TotalInfrared]("total-infrared record")

TOTAL_INFRARED.add(
    TotalInfrared(
        key="dale2002",
        label="TIR of 24, 70, 160 um, Dale & Helou 2002",
        cite="dale2002",
        where="the three-band sum (equation number not confirmed)",
        formula="L(TIR) = 1.559 L(24um) + 0.7686 L(70um) + 1.347 L(160um)  [nu L_nu]",
        certainty="from memory",
        bands=MappingProxyType({"24um": 1.559, "70um": 0.7686, "160um": 1.347}),
    )
)
TOTAL_INFRARED.add(
    TotalInfrared(
        key="galametz2013",
        label="TIR of 24, 70, 160 um, Galametz et al. 2013",
        cite="galametz2013",
        where="the three-band sum (table number not confirmed)",
        formula="L(TIR) = 2.133 L(24um) + 0.681 L(70um) + 1.125 L(160um)  [nu L_nu]",
        certainty="from memory",
        bands=MappingProxyType({"24um": 2.133, "70um": 0.681, "160um": 1.125}),
    )
)

"""Milky Way extinction in the bands that need it: A = R E(B-V).

E(B-V) is on one of two scales: that of the dust map of Schlegel, Finkbeiner & Davis 1998 ("SFD"),
or that of its recalibration by Schlafly & Finkbeiner 2011 ("SF11"), which is 0.86 of it and the
colour excess that extinction curves mean.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.record import Record
from kspipe.core.registry import Registry

__all__ = ["EXTINCTION", "SF11_OVER_SFD", "EbvScale", "Extinction"]

Array = NDArray[np.float64]
EbvScale = Literal["SFD", "SF11"]

# Schlafly & Finkbeiner 2011, ApJ 737, 103 (value from memory; for R_V = 3.1).
SF11_OVER_SFD: Final = 0.86


def _none() -> Mapping[str, float]:
    return MappingProxyType({})


@dataclass(frozen=True, kw_only=True)
class Extinction(Record):
    """Coefficients R = A / E(B-V) by tracer.

    Attributes
    ----------
    coefficients : mapping of str to float
    ebv_scale : {"SFD", "SF11"}
        Of the E(B-V) that the coefficients belong to.
    quadratic : mapping of str to float
        Coefficient of E(B-V)^2, where the paper has one.
    """

    coefficients: Mapping[str, float]
    ebv_scale: EbvScale
    quadratic: Mapping[str, float] = field(default_factory=_none)

    def magnitudes(self, tracer: str, ebv: Array, scale: EbvScale | None = None) -> Array:
        """Extinction [mag] of a tracer.

        Parameters
        ----------
        tracer : str
        ebv : float64 array
            E(B-V) [mag].
        scale : {"SFD", "SF11"} or None
            Which E(B-V) it is; None for the one of the record.
        """
        if scale not in (None, self.ebv_scale):
            ebv = ebv * SF11_OVER_SFD if scale == "SFD" else ebv / SF11_OVER_SFD
        linear = self.coefficients[tracer] * ebv
        curved = self.quadratic.get(tracer)
        return np.asarray(linear if curved is None else linear + curved * ebv**2)

    def __reduce__(self) -> tuple[object, tuple[str]]:
        """Travel by key."""
        return _by_key, (self.key,)


def _by_key(key: str) -> Extinction:
    return EXTINCTION.get(key)


EXTINCTION = Registry[Extinction]("extinction record")

EXTINCTION.add(
    Extinction(
        key="bianchi2017",
        label="Bianchi et al. 2017",
        cite="bianchi2017",
        where="band coefficients of the FUV and NUV imaging channels",
        formula="A_FUV = 8.06 E(B-V), A_NUV = 7.95 E(B-V)  [mag]",
        certainty="verified",
        note="For E(B-V) of the 1998 dust map. Some high-latitude samples find 4.4 to 4.9 in the "
        "FUV: 0.3 mag per 0.1 mag of E(B-V) is a real systematic.",
        ebv_scale="SFD",
        coefficients=MappingProxyType({"FUV": 8.06, "NUV": 7.95}),
    )
)
EXTINCTION.add(
    Extinction(
        key="wyder2007",
        label="Wyder et al. 2007",
        cite="wyder2007",
        where="band coefficient of the FUV imaging channel",
        formula="A_FUV = 8.24 E(B-V)  [mag]",
        certainty="from memory",
        note="The NUV form of the paper is quadratic in E(B-V) and not in this record.",
        ebv_scale="SFD",
        coefficients=MappingProxyType({"FUV": 8.24}),
    )
)
EXTINCTION.add(
    Extinction(
        key="cardelli1989",
        label="Cardelli et al. 1989, R_V = 3.1",
        cite="cardelli1989",
        where="Eqs. 1 to 3 with R_V = 3.1, at 6562.8 and 4861.3 A",
        formula="A_Halpha = 2.5351 E(B-V), A_Hbeta = 3.6089 E(B-V)  [mag]",
        certainty="verified",
        ebv_scale="SF11",
        coefficients=MappingProxyType({"Halpha": 2.5351, "Hbeta": 3.6089}),
    )
)
EXTINCTION.add(
    Extinction(
        key="wyder2007_uv",
        label="Wyder et al. 2007, both bands",
        cite="wyder2007",
        where="band coefficients of the FUV and NUV imaging channels",
        formula="A_FUV = 8.24 E(B-V), A_NUV = 8.24 E(B-V) - 0.67 E(B-V)^2  [mag]",
        certainty="from memory",
        ebv_scale="SFD",
        coefficients=MappingProxyType({"FUV": 8.24, "NUV": 8.24}),
        quadratic=MappingProxyType({"NUV": -0.67}),
    )
)
EXTINCTION.add(
    Extinction(
        key="gildepaz2007",
        label="Gil de Paz et al. 2007",
        cite="gildepaz2007",
        where="band coefficients of the FUV and NUV imaging channels",
        formula="A_FUV = 7.9 E(B-V), A_NUV = 8.0 E(B-V)  [mag]",
        certainty="from memory",
        ebv_scale="SFD",
        coefficients=MappingProxyType({"FUV": 7.9, "NUV": 8.0}),
    )
)
EXTINCTION.add(
    Extinction(
        key="cardelli1989_fuv",
        label="Cardelli et al. 1989 at 1528 A, R_V = 3.1",
        cite="cardelli1989",
        where="Eqs. 1 and 4 with R_V = 3.1, at 1528 A",
        formula="A_FUV = 8.1494 E(B-V)  [mag]",
        certainty="verified",
        note="One wavelength for the band, which in the FUV is within 1.2 % of band values. In the "
        "NUV the 2175 A bump would make it 12 to 15 % too large: there is no such record.",
        ebv_scale="SF11",
        coefficients=MappingProxyType({"FUV": 8.1494}),
    )
)
EXTINCTION.add(
    Extinction(
        key="fitzpatrick1999",
        label="Fitzpatrick 1999, R_V = 3.1",
        cite="fitzpatrick1999",
        where="the curve with R_V = 3.1, at 1528, 6562.8 and 4861.3 A",
        formula="A_FUV = 7.965 E(B-V), A_Halpha = 2.358 E(B-V), A_Hbeta = 3.615 E(B-V)  [mag]",
        certainty="verified",
        note="The values of a general extinction library.",
        ebv_scale="SF11",
        coefficients=MappingProxyType({"FUV": 7.965, "Halpha": 2.358, "Hbeta": 3.615}),
    )
)
EXTINCTION.add(
    Extinction(
        key="odonnell1994",
        label="O'Donnell 1994, R_V = 3.1",
        cite="odonnell1994",
        where="the optical curve with R_V = 3.1, at 6562.8 and 4861.3 A",
        formula="A_Halpha = 2.519 E(B-V), A_Hbeta = 3.663 E(B-V)  [mag]",
        certainty="verified",
        note="The value of a general extinction library.",
        ebv_scale="SF11",
        coefficients=MappingProxyType({"Halpha": 2.519, "Hbeta": 3.663}),
    )
)

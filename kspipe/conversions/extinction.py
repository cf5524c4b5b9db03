"""Milky Way extinction in the bands that need it: A = R E(B-V)."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

from kspipe.conversions.record import Record
from kspipe.core.registry import Registry

__all__ = ["EXTINCTION", "Extinction"]


@dataclass(frozen=True, kw_only=True)
class Extinction(Record):
    """Coefficients R = A / E(B-V) by tracer.

    Attributes
    ----------
    coefficients : mapping of str to float
    """

    coefficients: Mapping[str, float]

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
        coefficients=MappingProxyType({"FUV": 8.24}),
    )
)
EXTINCTION.add(
    Extinction(
        key="cardelli1989",
        label="Cardelli et al. 1989, R_V = 3.1",
        cite="cardelli1989",
        where="Eqs. 1 to 3 with R_V = 3.1, at 6562.8 A",
        formula="A_Halpha = 2.5351 E(B-V)  [mag]",
        certainty="verified",
        coefficients=MappingProxyType({"Halpha": 2.5351}),
    )
)

"""Star-formation rate surface density from an unobscured tracer and its dust-reprocessed part."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

from kspipe.conversions.record import Record
from kspipe.core.registry import Registry

__all__ = ["STAR_FORMATION", "StarFormation"]


@dataclass(frozen=True, kw_only=True)
class StarFormation(Record):
    """A linear combination of intensities.

    Attributes
    ----------
    coefficients : mapping of str to float
        Msun/yr/kpc2 per canonical intensity of each tracer, before cos i.
    """

    coefficients: Mapping[str, float]

    @property
    def tracers(self) -> tuple[str, ...]:
        """What it needs."""
        return tuple(self.coefficients)

    def __reduce__(self) -> tuple[object, tuple[str]]:
        """Travel by key."""
        return _by_key, (self.key,)


def _by_key(key: str) -> StarFormation:
    return STAR_FORMATION.get(key)


STAR_FORMATION = Registry[StarFormation]("star-formation record")

STAR_FORMATION.add(
    StarFormation(
        key="leroy2008_fuv_24um",
        label="FUV + 24 um",
        cite="leroy2008",
        where="Appendix D",
        formula="Sigma_SFR = (8.1e-2 I_FUV + 3.2e-3 I_24) cos i  [Msun/yr/kpc2; MJy/sr]",
        certainty="from memory",
        imf="Kroupa",
        note="FUV corrected for the foreground. Old stars heat part of the 24 um: too high where "
        "star formation is faint. Both coefficients were recomputed from 0.68e-28 and from "
        "1.3 x 5.3e-42 x 0.031.",
        coefficients=MappingProxyType({"FUV": 8.1e-2, "24um": 3.2e-3}),
    )
)
STAR_FORMATION.add(
    StarFormation(
        key="leroy2012_halpha_24um",
        label="Halpha + 24 um",
        cite="leroy2012",
        where="the surface-brightness form of Calzetti et al. 2007",
        formula="Sigma_SFR = (634 I_Halpha + 0.0025 I_24) cos i  "
        "[Msun/yr/kpc2; erg/s/cm2/sr, MJy/sr]",
        certainty="from memory",
        imf="Kroupa",
        note="Halpha free of [NII] and corrected for the foreground. Calibrated on star-forming "
        "knots: on kpc scales the 24 um part over-corrects faint regions.",
        coefficients=MappingProxyType({"Halpha": 634.0, "24um": 0.0025}),
    )
)

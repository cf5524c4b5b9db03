"""Stellar surface density from near-infrared light, and the midplane density that follows."""

from __future__ import annotations

from dataclasses import dataclass

from kspipe.conversions.record import Record
from kspipe.core.registry import Registry

__all__ = ["STARS", "Stars"]


@dataclass(frozen=True, kw_only=True)
class Stars(Record):
    """Surface density per intensity of one band.

    Attributes
    ----------
    tracer : str
    msun_pc2_per_intensity : float
        Msun/pc2 per MJy/sr at a mass-to-light ratio of 1 solar unit at 3.4 um.
    """

    tracer: str
    msun_pc2_per_intensity: float


STARS = Registry[Stars]("stellar-mass record")

_NOTE = (
    "M/L in solar units at 3.4 um: 0.5 where stars are old, about 0.2 where many are young "
    "(common practice). Hot dust adds some light."
)
STARS.add(
    Stars(
        key="leroy2019_36um",
        label="3.6 um",
        cite="leroy2019",
        where="the conversion of near-infrared light (equation number not confirmed)",
        formula="Sigma_star = 700 (M/L) I_3.6um cos i  [Msun/pc2; MJy/sr]",
        certainty="from memory",
        imf="Kroupa",
        note=_NOTE,
        tracer="3.6um",
        msun_pc2_per_intensity=700.0,
    )
)
STARS.add(
    Stars(
        key="leroy2019_w1",
        label="W1",
        cite="leroy2019",
        where="the conversion of near-infrared light (equation number not confirmed)",
        formula="Sigma_star = 660 (M/L) I_W1 cos i  [Msun/pc2; MJy/sr]",
        certainty="from memory",
        imf="Kroupa",
        note=_NOTE,
        tracer="W1",
        msun_pc2_per_intensity=660.0,
    )
)

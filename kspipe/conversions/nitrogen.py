"""[NII] in a narrow H-alpha band where it was not measured."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

from kspipe.conversions.record import Record
from kspipe.core.registry import Registry

__all__ = ["NII_DOUBLET", "NITROGEN", "Nitrogen"]

# [NII]6548 + [NII]6583 over [NII]6583: transition probabilities give 6583/6548 = 3.05 (common
# practice).
NII_DOUBLET: Final = 1.0 + 1.0 / 3.05


@dataclass(frozen=True, kw_only=True)
class Nitrogen(Record):
    """Both [NII] lines over H-alpha for a whole galaxy, by its absolute magnitude in B.

    Attributes
    ----------
    slope, zero : float
        log10 of the ratio of both lines = slope M_B + zero.
    brightest : float
        M_B below which the ratio stays at `most`.
    most : float
    """

    slope: float
    zero: float
    brightest: float
    most: float

    def __call__(self, m_b: float) -> float:
        """[NII]6583 / Halpha of a galaxy of absolute magnitude `m_b`."""
        both = self.most if m_b <= self.brightest else 10.0 ** (self.slope * m_b + self.zero)
        return both / NII_DOUBLET


NITROGEN = Registry[Nitrogen]("[NII] record")

NITROGEN.add(
    Nitrogen(
        key="kennicutt2008",
        label="[NII] by M_B, Kennicutt et al. 2008",
        cite="kennicutt2008",
        where="the mean relation (equation number not confirmed)",
        formula="log10 [NII]6548+83/Halpha = -0.173 M_B - 3.903 for M_B > -21, else 0.54 as a "
        "ratio",
        certainty="from memory",
        note="One number for the whole galaxy; [NII]6548 is 1/3.05 of [NII]6583.",
        slope=-0.173,
        zero=-3.903,
        brightest=-21.0,
        most=0.54,
    )
)

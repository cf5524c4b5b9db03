"""What every quantity of the state of the gas states about itself, and the shelf of them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

from kspipe.core.registry import Registry

__all__ = ["STATE", "Z_PRIME_RANGE", "StateRecord"]

# Outside these metallicities the results are flagged (the range of krumholz2009, below which its
# two-phase gas is not described).
Z_PRIME_RANGE: Final = (0.05, 10.0)


@dataclass(frozen=True, kw_only=True)
class StateRecord:
    """One published definition of a quantity.

    Attributes
    ----------
    key, label, cite, where, formula, note : str
        As in the conversion records.
    certainty : {"verified", "from memory"}
    unit : str
        Of the result, in FITS spelling; empty for a pure number.
    coefficient : float or None
        Of records that differ by one number only.
    """

    key: str
    label: str
    cite: str
    where: str
    formula: str
    certainty: Literal["verified", "from memory"]
    unit: str
    coefficient: float | None = None
    note: str = ""

    @property
    def sentence(self) -> str:
        """One line for histories."""
        doubt = "; coefficients from memory" if self.certainty == "from memory" else ""
        return f"{self.key} ({self.cite}, {self.where}): {self.formula}{doubt}"


STATE = Registry[StateRecord]("gas-state record")

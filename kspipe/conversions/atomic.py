"""Atomic gas from the 21 cm line."""

from __future__ import annotations

from dataclasses import dataclass

from kspipe.conversions.record import Record
from kspipe.core.constants import (
    HELIUM_FACTOR,
    HI_COLUMN_PER_K_KMS,
    M_H_G,
    MSUN_PC2_IN_G_CM2,
)
from kspipe.core.registry import Registry

__all__ = ["ATOMIC", "AtomicGas"]


@dataclass(frozen=True, kw_only=True)
class AtomicGas(Record):
    """Surface density per integrated brightness temperature.

    Attributes
    ----------
    column_per_k_kms : float
        H atoms [cm-2] for 1 K km/s.
    """

    column_per_k_kms: float

    @property
    def msun_pc2_per_k_kms(self) -> float:
        """Face-on surface density with helium for 1 K km/s [Msun/pc2]."""
        hydrogen = self.column_per_k_kms * M_H_G / MSUN_PC2_IN_G_CM2
        return hydrogen * (self.helium_factor or 1.0)


ATOMIC = Registry[AtomicGas]("atomic gas record")

ATOMIC.add(
    AtomicGas(
        key="leroy2008_thin",
        label="H I, optically thin",
        cite="leroy2008",
        where="Eq. A1",
        formula="Sigma_atom = 1.36 m_H 1.823e18 I_HI cos i = 0.019868 I_HI cos i  "
        "[Msun/pc2; K km/s]",
        certainty="verified",
        helium_factor=HELIUM_FACTOR,
        note="No opacity correction: cold peaks may hold 10 to 30 % more. The paper rounds the "
        "coefficient to 0.020.",
        column_per_k_kms=HI_COLUMN_PER_K_KMS,
    )
)

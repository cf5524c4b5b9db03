"""Motions inside clouds: linewidth and size, sonic length, virial parameter."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from kspipe.core.constants import G_CGS, M_SUN_G, PC_CM
from kspipe.core.registry import Registry
from kspipe.relations.state.record import STATE, StateRecord

__all__ = [
    "LINEWIDTH_SIZE",
    "LinewidthSize",
    "linewidth_kms",
    "sonic_length_at_pc",
    "sonic_length_pc",
    "virial_parameter",
]

Array = NDArray[np.float64]
Number = Array | float

# G in pc (km/s)^2 / Msun.
_G_PC: Final = G_CGS * M_SUN_G / PC_CM * 1e-10


@dataclass(frozen=True, kw_only=True)
class LinewidthSize(StateRecord):
    """sigma = norm (size / pc)^exponent, one-dimensional.

    Attributes
    ----------
    norm_kms : float
        At 1 pc.
    exponent : float
    size : {"radius", "length"}
        What the size is.
    """

    norm_kms: float
    exponent: float
    size: Literal["radius", "length"]


LINEWIDTH_SIZE = Registry[LinewidthSize]("linewidth-size record")


def linewidth_kms(size_pc: Number, norm_kms: float, exponent: float) -> Array:
    """One-dimensional velocity dispersion of a cloud of a size [km/s]."""
    return np.asarray(norm_kms * np.asarray(size_pc) ** exponent)


def sonic_length_pc(sound_speed_kms: Number, norm_kms: float, exponent: float) -> Array:
    """Size [pc] at which a linewidth-size relation gives the sound speed.

    Notes
    -----
    l_s = (c_s / sigma(1 pc))^(1/p).
    """
    return np.asarray((np.asarray(sound_speed_kms) / norm_kms) ** (1.0 / exponent))


def sonic_length_at_pc(
    sound_speed_kms: Number, linewidth_kms: Number, size_pc: Number, exponent: float
) -> Array:
    """Size [pc] at which motions fall to the sound speed, from a linewidth at one size.

    Parameters
    ----------
    sound_speed_kms, linewidth_kms : float64 array
        Both one-dimensional.
    size_pc : float64 array or float
        Where the linewidth was measured.
    exponent : float
        Of the linewidth-size relation below that size.
    """
    ratio = np.asarray(sound_speed_kms) / linewidth_kms
    return np.asarray(size_pc * ratio ** (1.0 / exponent))


def virial_parameter(linewidth_kms: Number, radius_pc: Number, mass_msun: Number) -> Array:
    """Virial parameter 5 sigma^2 R / (G M) of a uniform sphere.

    Parameters
    ----------
    linewidth_kms : float64 array
        One-dimensional velocity dispersion.
    radius_pc, mass_msun : float64 array
    """
    return np.asarray(5.0 * np.asarray(linewidth_kms) ** 2 * radius_pc / (_G_PC * mass_msun))


LINEWIDTH_SIZE.add(
    LinewidthSize(
        key="solomon1987",
        label="linewidth and radius of clouds",
        cite="solomon1987",
        where="its linewidth-size relation, with the radius as size",
        formula="sigma_1D = 0.72 (R / pc)^0.5 km/s",
        certainty="from memory",
        unit="km s-1",
        norm_kms=0.72,
        exponent=0.5,
        size="radius",
    )
)
LINEWIDTH_SIZE.add(
    LinewidthSize(
        key="solomon1987_size",
        label="linewidth and size of clouds",
        cite="solomon1987",
        where="its linewidth-size relation, with its own size parameter",
        formula="sigma_1D = 1.0 (S / pc)^0.5 km/s",
        certainty="from memory",
        unit="km s-1",
        norm_kms=1.0,
        exponent=0.5,
        size="length",
    )
)
LINEWIDTH_SIZE.add(
    LinewidthSize(
        key="heyer2004",
        label="structure function of clouds",
        cite="heyer2004",
        where="its structure function",
        formula="dv = 0.87 (l / pc)^0.65 km/s",
        certainty="from memory",
        unit="km s-1",
        norm_kms=0.87,
        exponent=0.65,
        size="length",
        note="As measured; the paper's exponent of the true structure function is 0.56.",
    )
)
STATE.add(
    StateRecord(
        key="virial_parameter",
        label="virial parameter",
        cite="bertoldi1992",
        where="definition (equation number from memory)",
        formula="alpha_vir = 5 sigma_1D^2 R / (G M), M = pi R^2 Sigma_complex",
        certainty="verified",
        unit="",
    )
)
STATE.add(
    StateRecord(
        key="sonic_length",
        label="sonic length",
        cite="krumholz2005",
        where="definition: the size on which motions are as fast as sound",
        formula="l_s = L (c_s / sigma_1D(L))^(1/p), p of the linewidth-size relation",
        certainty="verified",
        unit="pc",
    )
)

"""What no map of gas and stars gives: the named choices that the state of the gas rests on."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from kspipe.relations.state.jeans import MU_ATOMIC, MU_MOLECULAR
from kspipe.relations.state.record import STATE, StateRecord
from kspipe.relations.state.turbulence import Forcing

__all__ = ["SOLAR_SIGMA_SFR", "Conditions", "DensityFrom"]

Array = NDArray[np.float64]
DensityFrom = Literal["two-phase", "hydrostatic", "larger"]

# Star formation [Msun/yr/kpc2] of the solar neighbourhood, where chi = 1: krumholz2013.
SOLAR_SIGMA_SFR = 2.5e-3


@dataclass(frozen=True, kw_only=True)
class Conditions:
    """Named choices.

    Attributes
    ----------
    density : float or {"two-phase", "hydrostatic", "larger"}
        H nuclei per cm3, or the relation that gives it; ``larger`` of the two.
    chi : float or "star formation"
        FUV field relative to the solar neighbourhood; or in proportion to Sigma_SFR.
    zeta_prime : float or "field"
        Cosmic-ray ionisation rate relative to the solar neighbourhood; or equal to chi.
    clumping : float or float64 array
        Surface density of a complex over that of the beam.
    density_clumping : float
        <n^2> / <n>^2 below the density, in the cooling.
    midplane_msun_pc3 : float or None
        Stars and dark matter; for the hydrostatic density.
    shielded_depth : float or None
        Optical depth of the gas that is called shielded; None for the centre of the complex.
    mu_unshielded, mu_shielded : float
        Mass per particle in m_H.
    jeans : str
        Definition of the Jeans mass, without its prefix: ``cube``, ``virial``, ``sphere``.
    bonnor_ebert : {"surface", "mean"}
        Which density of the critical sphere is that of the gas.
    linewidth_size : str or None
        Record of the linewidth-size relation; None where a map gives the linewidth.
    sonic_exponent : float
        p of sigma ~ size^p below the size of the cloud, where a map gives the linewidth.
    cloud_radius_pc : float or None
        Radius of the cloud that moves so fast; None for no motions at all.
    turbulence : tuple of str
        Keys of models of the efficiency.
    forcing : Forcing
    density_factor : float
        The density is multiplied by it, to show what it does.
    """

    density: float | DensityFrom
    chi: float | Literal["star formation"]
    zeta_prime: float | Literal["field"]
    clumping: float | Array
    density_clumping: float = 1.0
    midplane_msun_pc3: float | None = None
    shielded_depth: float | None = None
    mu_unshielded: float = MU_ATOMIC
    mu_shielded: float = MU_MOLECULAR
    jeans: str = "cube"
    bonnor_ebert: Literal["surface", "mean"] = "surface"
    linewidth_size: str | None = None
    sonic_exponent: float = 0.5
    cloud_radius_pc: float | None = None
    turbulence: tuple[str, ...] = ()
    forcing: Forcing = field(default_factory=Forcing)
    density_factor: float = 1.0


STATE.add(
    StateRecord(
        key="krumholz2013_field",
        label="FUV field from star formation",
        cite="krumholz2013",
        where="its closure with the star-formation rate (equation number from memory)",
        formula="chi = Sigma_SFR / 2.5e-3 Msun/yr/kpc2",
        certainty="from memory",
        unit="",
    )
)

"""Relations in which heating and weight of the gas balance the stars that form: the rival."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final

import numpy as np

from kspipe.core.constants import HELIUM_FACTOR
from kspipe.kernels.dual import implicit, plain
from kspipe.kernels.rootfind import solve_falling
from kspipe.relations.hydrostatic import SOLAR_SFR_MSUN_YR_KPC2
from kspipe.relations.law import LAWS, Direction, Law, Outcome
from kspipe.relations.parameters import ANCHOR, Parameter
from kspipe.relations.vertical import dynamical_pressure, thermal_pressure

__all__ = ["heated_pressure"]

# P_th/k of the solar neighbourhood [K cm^-3].
SOLAR_PRESSURE_K_CM3: Final = 3000.0


def heated_pressure(sigma_sfr_msun_yr_kpc2: Any, shading: Any) -> Any:
    """Thermal pressure P/k [K cm^-3] that the stars' heating sustains.

    Parameters
    ----------
    sigma_sfr_msun_yr_kpc2 : float64 array or Dual
    shading : float64 array or Dual
        (1 + 3 (Z' Sigma / 10)^0.4) / 4, of the solar neighbourhood 1.

    References
    ----------
    .. [1] ostriker2010 (numbers from memory).
    """
    return sigma_sfr_msun_yr_kpc2 * (SOLAR_PRESSURE_K_CM3 / SOLAR_SFR_MSUN_YR_KPC2) / shading


def _ostriker2010(own: Mapping[str, Any], given: Mapping[str, float]) -> Outcome:
    """Sigma_SFR = Sigma_gbc / t_SF, where thermal and vertical balance give the same pressure.

    More gas in bound clouds means more stars and heating, and less diffuse gas whose weight is
    held: there is one root.
    """
    taken = dict(own)
    taken["shading"] = 0.25 * (1.0 + 3.0 * (own["z_prime"] * own["sigma_gas"] * 0.1) ** 0.4)
    per_gyr = 1e-3 / given["star_formation_time"]

    def imbalance(f: Any, o: Mapping[str, Any]) -> Any:
        """Pressure missing, in units of the heating at f = 1."""
        bound = f * o["sigma_gas"]
        weight = thermal_pressure(o["sigma_gas"] - bound, bound, o["rho_sd"])
        return weight / heated_pressure(o["sigma_gas"] * per_gyr, o["shading"]) - f

    bare = {name: plain(number) for name, number in taken.items()}
    shape = np.broadcast_shapes(*(np.shape(number) for number in bare.values()))
    first = imbalance(np.zeros(shape), bare)
    # Exact for thin gas, where the clouds weigh nothing and the weight falls as 1 - f.
    start = first / (1.0 + first)
    root = solve_falling(imbalance, bare, 0.0, 1.0, start, np.zeros(shape, dtype=bool))
    f = implicit(imbalance, root, taken)
    return Outcome(f, f * own["sigma_gas"] * per_gyr)


def _kim2011(own: Mapping[str, Any], given: Mapping[str, float]) -> Outcome:
    weight = dynamical_pressure(own["sigma_gas"], own["rho_sd"], given["gas_dispersion"])
    return Outcome(sigma_sfr=2.1e-3 * (weight * 1e-4) ** 1.18)


LAWS.add(
    Law(
        key="ostriker2010",
        label="Ostriker et al. 2010",
        cite="ostriker2010",
        where="vertical and thermal balance (equation numbers from memory)",
        formula="Sigma_SFR = Sigma_gbc / t_SF; P_th of vertical balance = 12000 k "
        "(Sigma_SFR/2.5e-3)/(1 + 3 (Z' Sigma/10)^0.4)",
        certainty="from memory",
        function=_ostriker2010,
        needs=("sigma_gas", "oh", "rho_sd"),
        parameters=(
            Parameter(
                "star_formation_time", "t_SF of gravitationally bound clouds, in Gyr", 2.0, 0.1, 20
            ),
            ANCHOR,
        ),
        helium_factor=HELIUM_FACTOR,
        metallicity_anchor="dust to gas, solar neighbourhood = 1",
        ranges={"z_prime": (0.05, 10.0)},
        monotonic={
            "sigma_gas": Direction(1),
            "oh": Direction(1),
            "rho_sd": Direction(1),
        },
        note="f_mol is the share of gas in gravitationally bound clouds. Vertical balance was "
        "compared with a text; the numbers of thermal balance are from memory.",
    )
)
LAWS.add(
    Law(
        key="kim2011",
        label="Kim et al. 2011",
        cite="kim2011",
        where="the fit of Sigma_SFR against pressure (equation number from memory)",
        formula="Sigma_SFR = 2.1e-3 (P_DE/k / 1e4)^1.18, "
        "P_DE = pi G Sigma^2/2 + Sigma (2 G rho_sd)^0.5 sigma_z",
        certainty="from memory",
        function=_kim2011,
        needs=("sigma_gas", "rho_sd"),
        parameters=(Parameter("gas_dispersion", "vertical, of the gas, km/s", 7.0, 1.0, 50.0),),
        has_fraction=False,
        helium_factor=HELIUM_FACTOR,
        metallicity_anchor="none: metallicity does not enter",
        monotonic={"sigma_gas": Direction(1), "rho_sd": Direction(1)},
    )
)

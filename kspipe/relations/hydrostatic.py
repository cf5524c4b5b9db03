"""Shielding with a floor to the density of cold gas: vertical balance, where the field is weak."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final

import numpy as np

from kspipe.core.constants import HELIUM_FACTOR
from kspipe.kernels.dual import choose, implicit, plain
from kspipe.kernels.rootfind import solve_falling
from kspipe.relations.conventions import free_fall_myr
from kspipe.relations.law import LAWS, Direction, Law, Outcome
from kspipe.relations.parameters import ANCHOR, CLUMPING, Parameter
from kspipe.relations.shielding import shielding_demand, shielding_reach
from kspipe.relations.vertical import thermal_pressure

__all__ = ["SOLAR_SFR_MSUN_YR_KPC2", "krumholz2013_chi", "toomre_time_myr", "two_phase_density"]

# Highest temperature of cold gas [K], and particles over hydrogen nuclei.
T_MAX_K: Final = 243.0
PARTICLES: Final = 1.1
# Sigma_SFR of the solar neighbourhood, to which the radiation field is scaled (krumholz2013).
SOLAR_SFR_MSUN_YR_KPC2: Final = 2.5e-3
# 1 km/s/kpc is 1.0227e-3 per Myr.
# Fraction that is small, and ln(2/s) that is large: there is no field at s = 2e-26.
SMALL: Final = 1e-6
MOST_W: Final = 60.0
PER_MYR_PER_KMS_KPC: Final = 1.0227121650537077e-3


def two_phase_density(g0: Any, z_prime: Any) -> Any:
    """Density [cm^-3] of cold gas in two-phase balance: 23 G0' x 4.1 / (1 + 3.1 Z'^0.365)."""
    return g0 * (23.0 * 4.1) / (1.0 + 3.1 * z_prime**0.365)


def krumholz2013_chi(
    f_atom: Any, sigma_gas_msun_pc2: Any, rho_sd_msun_pc3: Any, g0: Any, two_phase_chi: Any
) -> Any:
    """Field over density where the density is the larger of two-phase and hydrostatic balance.

    Parameters
    ----------
    f_atom : float64 array or Dual
        1 - f_H2.
    sigma_gas_msun_pc2, rho_sd_msun_pc3, g0 : float64 array or Dual
    two_phase_chi : float64 array or Dual
        72 G0' over the two-phase density, which does not depend on G0'.

    References
    ----------
    .. [1] krumholz2013: n = max(n_2p, P_th / (1.1 k 243 K)), chi = 7.2 G0' / (n / 10).
    """
    diffuse, bound = f_atom * sigma_gas_msun_pc2, (1.0 - f_atom) * sigma_gas_msun_pc2
    pressure = thermal_pressure(diffuse, bound, rho_sd_msun_pc3)
    return np.minimum(two_phase_chi, 72.0 * PARTICLES * T_MAX_K * g0 / pressure)


def toomre_time_myr(omega_kms_kpc: Any, beta: Any, toomre_q: float, phi_pressure: float) -> Any:
    """Free-fall time [Myr] of gas on the verge of instability in a rotating disc.

    References
    ----------
    .. [1] krumholz2012: t_ff = [3 pi^2 Q^2 / (32 (beta + 1) phi_P)]^(1/2) / Omega.
    """
    square = 3.0 * np.pi**2 * toomre_q**2 / (32.0 * phi_pressure) / (beta + 1.0)
    return np.sqrt(square) / (omega_kms_kpc * PER_MYR_PER_KMS_KPC)


def _free_fall(own: Mapping[str, Any], given: Mapping[str, float]) -> Any:
    clouds = free_fall_myr(own["sigma_gas"])
    if "omega" not in own:
        return clouds
    disc = toomre_time_myr(own["omega"], own["beta"], given["toomre_q"], given["phi_pressure"])
    return np.minimum(clouds, disc)


def _solved(own: Mapping[str, Any], given: Mapping[str, float], field_of: Any) -> Any:
    """Molecular fraction that is consistent with the pressure, and with the field, it implies.

    A larger fraction leaves less diffuse gas, hence a lower floor, more field over density and a
    smaller fraction: there is one root.
    """
    z = own["z_prime"]
    reach = shielding_reach(given["clumping"] * own["sigma_gas"], z)
    taken = {
        **own,
        "two_phase": 72.0 * (1.0 + 3.1 * z**0.365) / (23.0 * 4.1),
        "most_w": np.log(2.0 * reach),
    }

    def excess(w: Any, o: Mapping[str, Any]) -> Any:
        """Ln of s = 2 exp(-w) over the s of the pressure and the field that f(w) implies."""
        return o["most_w"] - w - np.log(shielding_demand(_chi_at(w, o, field_of)))

    bare = {name: plain(number) for name, number in taken.items()}
    shape = np.broadcast_shapes(*(np.shape(number) for number in bare.values()))
    # Two-phase balance gives most of the gas its fraction, and a floor only raises it.
    start = bare["most_w"] - np.log(shielding_demand(bare["two_phase"]))
    doubtful = start <= 0.0
    start = np.maximum(start, 0.02)
    if "g0" not in bare:
        # Where little is molecular the field goes as f, and s with it.
        per_fraction = shielding_demand(_chi_at(1.5 * SMALL, bare, field_of)) / plain(reach) / SMALL
        thin = 3.0 / (3.0 + per_fraction)
        start = np.where(doubtful, thin, np.maximum(start, thin))
        doubtful = np.zeros(np.shape(start), dtype=bool)
    start, doubtful = np.broadcast_to(start, shape), np.broadcast_to(doubtful, shape)
    root = solve_falling(excess, bare, 0.0, MOST_W, start, doubtful)
    # Where even pure atomic gas is not shielded the fraction is exactly zero.
    f = _fraction(implicit(excess, root, taken))
    for is_end, value in ((root == 0.0, 0.0), (root > 0.999 * MOST_W, 1.0)):
        f = choose(is_end, value, f) if is_end.any() else f
    return f


def _fraction(w: Any) -> Any:
    """f_H2 of mckee2010 by w = ln(2/s), accurate where it is small."""
    below = -np.expm1(-w)
    return below / (1.5 - 0.5 * below)


def _chi_at(w: Any, o: Mapping[str, Any], field_of: Any) -> Any:
    """Field over density where s = 2 exp(-w)."""
    s_half = np.exp(-w)
    # 1 - f, accurate where that is small.
    f_atom = 1.5 * s_half / (1.0 + 0.5 * s_half)
    return krumholz2013_chi(f_atom, o["sigma_gas"], o["rho_sd"], field_of(w, o), o["two_phase"])


def _krumholz2013(own: Mapping[str, Any], given: Mapping[str, float]) -> Outcome:
    """Sigma_SFR = f_H2 eps_ff Sigma / t_ff at a given field."""
    f = _solved(own, given, lambda _w, o: o["g0"])
    return Outcome(f, f * own["sigma_gas"] * given["efficiency"] / _free_fall(own, given))


def _krumholz2013_own_field(own: Mapping[str, Any], given: Mapping[str, float]) -> Outcome:
    """Take the field from the star formation that is predicted."""
    per_fraction = own["sigma_gas"] * given["efficiency"] / _free_fall(own, given)
    taken = {**own, "field": per_fraction / SOLAR_SFR_MSUN_YR_KPC2}
    f = _solved(taken, given, lambda w, o: _fraction(w) * o["field"])
    return Outcome(f, f * per_fraction)


def _has_gas(own: Mapping[str, Any], given: Mapping[str, float]) -> Any:
    return _krumholz2013(own, given).f_mol > 0


def _is_on_floor(own: Mapping[str, Any], given: Mapping[str, float]) -> Any:
    """Whether vertical balance, and not two-phase balance, gives the density."""
    return _floor(own, _krumholz2013(own, given).f_mol, own["g0"])


def _floor(own: Mapping[str, Any], f: Any, g0: Any) -> Any:
    two_phase = 72.0 * (1.0 + 3.1 * own["z_prime"] ** 0.365) / (23.0 * 4.1)
    return (
        krumholz2013_chi(1.0 - f, own["sigma_gas"], own["rho_sd"], g0, two_phase) < two_phase
    ) & (f > 0)


def _is_on_own_floor(own: Mapping[str, Any], given: Mapping[str, float]) -> Any:
    outcome = _krumholz2013_own_field(own, given)
    return _floor(own, outcome.f_mol, outcome.sigma_sfr / SOLAR_SFR_MSUN_YR_KPC2)


_SHARED: Final = {
    "cite": "krumholz2013",
    "certainty": "verified",
    "parameters": (
        CLUMPING,
        ANCHOR,
        Parameter("efficiency", "share of molecular gas formed in a free-fall time", 0.01, 1e-4, 1),
        Parameter("toomre_q", "Toomre's Q of the disc, where there is a [rotation]", 1.0, 0.1, 10),
        Parameter("phi_pressure", "pressure over that of gas alone, krumholz2012", 3.0, 1.0, 10),
    ),
    "optional": ("omega", "beta"),
    "helium_factor": HELIUM_FACTOR,
    "metallicity_anchor": "metals, solar neighbourhood = 1",
    "ranges": {"z_prime": (0.05, 10.0)},
    "statistic": "mean",
}
_NOTE: Final = (
    "t_ff is 31 Myr Sigma^-1/4 of giant clouds or, where the recipe has a rotation curve, the "
    "smaller of that and of a disc with Q = 1 (from memory). That Sigma includes helium is from "
    "memory: some read it as hydrogen, a shift of 0.13 dex."
)

LAWS.add(
    Law(
        key="krumholz2013",
        label="Krumholz 2013",
        where="density floor and star-formation law (equation numbers from memory)",
        formula="Sigma_SFR = f_H2 eps_ff Sigma_gas / t_ff; f_H2 of mckee2010 with chi = "
        "72 G0'/max(n_2p, P_th/(1.1 k 243 K)), P_th(f_H2, rho_sd)",
        function=_krumholz2013,
        needs=("sigma_gas", "oh", "rho_sd", "g0"),
        field_unit="solar neighbourhood",
        monotonic={
            "sigma_gas": Direction(1, "where f_H2 > 0", _has_gas),
            "oh": Direction(1, "where f_H2 > 0", _has_gas),
            "rho_sd": Direction(1, "where vertical balance sets the density", _is_on_floor),
            "g0": Direction(-1, "where vertical balance sets the density", _is_on_floor),
        },
        kinks="the slope jumps where the floor takes over, at s = 2 and where t_ff changes over",
        note=_NOTE,
        **_SHARED,  # type: ignore[arg-type]
    )
)
LAWS.add(
    Law(
        key="krumholz2013_own_field",
        label="Krumholz 2013, own field",
        where="the same with G0' = Sigma_SFR / 2.5e-3 Msun/yr/kpc2 (from memory)",
        formula="as krumholz2013, with G0' = Sigma_SFR(predicted) / 2.5e-3 Msun/yr/kpc2",
        function=_krumholz2013_own_field,
        needs=("sigma_gas", "oh", "rho_sd"),
        monotonic={
            "sigma_gas": Direction(1),
            "oh": Direction(1),
            "rho_sd": Direction(1, "where vertical balance sets the density", _is_on_own_floor),
        },
        kinks="the slope jumps where the floor takes over and where t_ff changes over",
        note=_NOTE + " The field is that of the predicted stars, not of the observed ones.",
        **_SHARED,  # type: ignore[arg-type]
    )
)

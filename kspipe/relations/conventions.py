"""The conventions in which relations differ, and the one way from kspipe's own to a paper's.

kspipe's own: surface densities with helium (1.36), metallicity as 12 + log10(O/H), radiation field
over that of the solar neighbourhood, Kroupa mass function.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final, Literal

import numpy as np

from kspipe.core.constants import HELIUM_FACTOR
from kspipe.core.radiation import FieldUnit, field_in

__all__ = ["KROUPA_RATE_OF", "ImfName", "free_fall_myr", "own_inputs", "rate_of_molecular_gas"]

ImfName = Literal["Kroupa", "Salpeter"]

# Star-formation rate for a Kroupa mass function over that for the same light and another one: the
# same number of stars of 30 Msun, as in the conversions (a test holds the two together).
KROUPA_RATE_OF: Final[dict[str, float]] = {"Kroupa": 1.0, "Salpeter": 0.64509}

_GAS: Final = ("sigma_gas", "sigma_mol")
_LN10: Final = np.log(10.0)


def own_inputs(
    inputs: Mapping[str, Any],
    *,
    helium_factor: float,
    anchor_oh: float | None,
    field_unit: FieldUnit | None,
) -> dict[str, Any]:
    """Turn kspipe's inputs into a paper's.

    Parameters
    ----------
    inputs : mapping of str to float64 array or Dual
        By the names of `LAW_INPUTS`.
    helium_factor : float
        Mass over hydrogen mass in the paper's surface densities of gas.
    anchor_oh : float or None
        12 + log10(O/H) at which the paper has Z' = 1.
    field_unit : str or None

    Returns
    -------
    dict
        ``oh`` has become ``z_prime``.
    """
    own = dict(inputs)
    if helium_factor != HELIUM_FACTOR:
        for name in _GAS:
            if name in own:
                own[name] = own[name] * (helium_factor / HELIUM_FACTOR)
    if "oh" in own and anchor_oh is not None:
        own["z_prime"] = np.exp((own.pop("oh") - anchor_oh) * _LN10)
    if "g0" in own and field_unit is not None:
        own["g0"] = field_in(own["g0"], "solar neighbourhood", field_unit)
    return own


def free_fall_myr(sigma_gas_msun_pc2: Any) -> Any:
    """Free-fall time of giant clouds [Myr] in gas of this surface density, helium included.

    References
    ----------
    .. [1] krumholz2013: clouds of 85 Msun/pc2 in gas of 8 km/s, t_ff = 31 Sigma^-1/4 Myr.
    """
    return 31.0 / np.sqrt(np.sqrt(sigma_gas_msun_pc2))


def rate_of_molecular_gas(f_mol: Any, sigma_gas_msun_pc2: Any, given: Mapping[str, float]) -> Any:
    """Sigma_SFR [Msun/yr/kpc2] of a molecular fraction, by the way that was chosen.

    Parameters
    ----------
    f_mol : float64 array or Dual
    sigma_gas_msun_pc2 : float64 array or Dual
        With helium.
    given : mapping of str to float
        ``depletion_time`` [Gyr] or ``efficiency`` (per free-fall time).
    """
    sigma_mol = f_mol * sigma_gas_msun_pc2
    if "depletion_time" in given:
        # 1 Msun/pc2/Gyr is 1e-3 Msun/yr/kpc2.
        return sigma_mol * (1e-3 / given["depletion_time"])
    return sigma_mol * given["efficiency"] / free_fall_myr(sigma_gas_msun_pc2)

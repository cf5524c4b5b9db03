"""A relation as a curve, without any map."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from kspipe.relations.law import LAWS

__all__ = ["track"]

Array = NDArray[np.float64]


def track(
    law: str, sigma_gas_msun_pc2: Array, oh: float, parameters: Mapping[str, float] | None = None
) -> Array:
    """Sigma_SFR [Msun/yr/kpc2] of a relation along Sigma_gas at one metallicity.

    Parameters
    ----------
    law : str
        Key of the relation.
    sigma_gas_msun_pc2 : (n,) float64 array
        Total gas with helium.
    oh : float
        12 + log10(O/H).
    parameters : mapping of str to float, optional

    Returns
    -------
    (n,) float64 array
    """
    sigma = np.asarray(sigma_gas_msun_pc2, dtype=float)
    inputs = {"sigma_gas": sigma, "oh": np.full(sigma.shape, oh)}
    return LAWS.get(law).predict(inputs, parameters).sigma_sfr

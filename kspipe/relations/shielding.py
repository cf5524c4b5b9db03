"""Relations in which dust and H2 self-shielding decide where gas is molecular."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from kspipe.core.constants import HELIUM_FACTOR, OH_SOLAR
from kspipe.relations.law import LAWS, Law, Parameter, Prediction

__all__ = ["krumholz2009_fraction", "krumholz2009_sfr"]

Array = NDArray[np.float64]


def krumholz2009_fraction(sigma_complex_msun_pc2: Array, z_prime: Array) -> tuple[Array, Array]:
    """Molecular mass fraction of an atomic-molecular complex, and its logarithmic derivative.

    Parameters
    ----------
    sigma_complex_msun_pc2 : float64 array
        Surface density of the complex with helium; clumping factor times the smoothed one.
    z_prime : float64 array
        Metallicity relative to the solar neighbourhood.

    Returns
    -------
    f_mol : float64 array
        0 at zero surface density, NaN below.
    df_dln_s : float64 array
        Derivative with respect to ln s; s goes as 1 / surface density.

    References
    ----------
    .. [1] krumholz2009, Eq. 2; krumholz2009_fraction for its derivation.

    Notes
    -----
    f = 1 - [1 + (3/4 s / (1 + d))^-5]^(-1/5), d = 0.0712 (0.1/s + 0.675)^-2.8,
    s = ln(1 + 0.6 chi) / (0.04 Sigma Z'), chi = 0.77 (1 + 3.1 Z'^0.365).
    """
    sigma = np.where(np.asarray(sigma_complex_msun_pc2) > 0, sigma_complex_msun_pc2, np.nan)
    chi = 0.77 * (1.0 + 3.1 * z_prime**0.365)
    s = np.log1p(0.6 * chi) / (0.04 * sigma * z_prime)
    base = 0.1 / s + 0.675
    delta = 0.0712 * base**-2.8
    ddelta_dln_s = 0.0712 * 2.8 * base**-3.8 * 0.1 / s
    q = 0.75 * s / (1.0 + delta)
    dln_q = 1.0 - ddelta_dln_s / (1.0 + delta)
    with np.errstate(over="ignore"):
        # In this form the tail at small fractions keeps its relative accuracy.
        f = -np.expm1(-0.2 * np.log1p(q**-5))
        df_dln_q = -((1.0 + q**-5) ** -0.2) / (1.0 + q**5)
    zero = np.asarray(sigma_complex_msun_pc2) == 0
    return np.where(zero, 0.0, f), np.where(zero, 0.0, df_dln_q * dln_q)


def krumholz2009_sfr(inputs: Mapping[str, Array], parameters: Mapping[str, float]) -> Prediction:
    """Star-formation law of Krumholz, McKee & Tumlinson.

    Parameters
    ----------
    inputs : mapping
        ``sigma_gas`` [Msun/pc2, with helium] and ``oh`` [12+log10(O/H)].
    parameters : mapping
        ``clumping`` and ``anchor_oh``.

    Returns
    -------
    Prediction
        sigma_sfr is 0 at zero gas and NaN (no solution) below.

    References
    ----------
    .. [1] krumholz2009, Eq. 10.

    Notes
    -----
    Sigma_SFR = f_H2 Sigma_gas / 2.6 Gyr x (Sigma_gas / 85)^(-0.33 below 85, +0.33 above).
    """
    sigma, oh = np.broadcast_arrays(
        np.asarray(inputs["sigma_gas"], dtype=float), np.asarray(inputs["oh"], dtype=float)
    )
    z = 10.0 ** (oh - parameters["anchor_oh"])
    f, df_dln_s = krumholz2009_fraction(parameters["clumping"] * sigma, z)
    power = np.where(sigma < 85.0, -0.33, 0.33)
    positive = np.where(sigma > 0, sigma, np.nan)
    # 1 Msun/pc2/Gyr is 1e-3 Msun/yr/kpc2.
    per_gas = (positive / 85.0) ** power / 2.6e3
    sfr = f * positive * per_gas
    df_dsigma = -df_dln_s / positive
    dsfr_dsigma = per_gas * (df_dsigma * positive + f * (1.0 + power))
    dln_s_dln_z = _dln_s_dln_z(z)
    dln_z_doh = np.log(10.0)
    df_doh = df_dln_s * dln_s_dln_z * dln_z_doh
    zero = (sigma == 0) & np.isfinite(z)
    low_z, high_z = LAW_RANGES["z_prime"]
    return Prediction(
        sigma_sfr=np.where(zero, 0.0, sfr),
        f_mol=np.where(np.isfinite(z), f, np.nan),
        derivatives={
            "sigma_sfr": {
                "sigma_gas": np.where(zero, 0.0, dsfr_dsigma),
                "oh": np.where(zero, 0.0, positive * per_gas * df_doh),
            },
            "f_mol": {
                "sigma_gas": np.where(zero, 0.0, df_dsigma),
                "oh": np.where(zero, 0.0, df_doh),
            },
        },
        outside_range=(z < low_z) | (z > high_z),
        no_solution=(sigma < 0) | ~np.isfinite(sigma) | ~np.isfinite(z),
    )


def _dln_s_dln_z(z_prime: Array) -> Array:
    """How s falls with metallicity: the column goes as Z', chi slowly grows with it."""
    chi = 0.77 * (1.0 + 3.1 * z_prime**0.365)
    dchi_dln_z = 0.77 * 3.1 * 0.365 * z_prime**0.365
    return 0.6 * dchi_dln_z / ((1.0 + 0.6 * chi) * np.log1p(0.6 * chi)) - 1.0


LAW_RANGES = {"z_prime": (0.05, 10.0)}

LAWS.add(
    Law(
        key="krumholz2009",
        label="Krumholz et al. 2009",
        cite="krumholz2009",
        where="Eqs. 2 and 10",
        formula="Sigma_SFR = f_H2(c Sigma_gas, Z') Sigma_gas / 2.6 Gyr x (Sigma_gas/85)^(-+0.33)",
        certainty="verified",
        function=krumholz2009_sfr,
        needs=("sigma_gas", "oh"),
        parameters=(
            Parameter(
                "clumping",
                "surface density of a complex over that of the beam: 1 below 100 pc, 5 near 1 kpc",
                None,
                1.0,
                100.0,
            ),
            Parameter(
                "anchor_oh",
                "12+log10(O/H) at which Z' = 1; the paper's own solar value is 8.76",
                OH_SOLAR,
                8.0,
                9.5,
            ),
        ),
        helium_factor=HELIUM_FACTOR,
        metallicity_anchor="metals, solar neighbourhood = 1 (paper: 12+log(O/H) = 8.76)",
        field_unit=None,
        ranges=LAW_RANGES,
        monotonic={"sigma_gas": 1, "oh": 1},
        statistic="mean",
        note="The field drops out by two-phase balance. In the limit of large columns the atomic "
        "layer of a complex is 20 Msun/pc2 with helium at Z' = 1 (4 for clumping 5), not the "
        "rounded 10 of the abstract.",
    )
)

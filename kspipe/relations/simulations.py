"""Fits to simulations of galaxies with explicit H2 chemistry."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final

import numpy as np

from kspipe.core.constants import PC_CM
from kspipe.relations.law import LAWS, Direction, Law, Outcome
from kspipe.relations.parameters import ANCHOR, RATE_CHOICES, scale_pc
from kspipe.relations.photodissociation import NUCLEI_CM2_PER_MSUN_PC2

__all__ = ["gnedin2011_cell_fraction", "gnedin2011_critical", "gnedin2014_half", "polzin2024"]

SECONDS_3_MYR: Final = 3.0 * 3.15576e13


def _interpolation(u: Any, d: Any) -> Any:
    """The logarithm L of gnedin2011, which its forms for cells and for kpc share."""
    # Powers cost ten times a product: U^1.7, D^(3/7) (U/15)^(4/7) and L^(4/7) are all there are.
    d_star = 1.5e-3 * np.log1p((3.0 * u) ** 1.7)
    a = 2.5 * u / (1.0 + 0.25 * u * u)
    s = 0.04 / (d_star + d)
    g = (1.0 + s * (a + s)) / (1.0 + s)
    return np.log1p(g * d ** (3.0 / 7.0) * (u * (1.0 / 15.0)) ** (4.0 / 7.0))


def gnedin2011_critical(u: Any, d: Any) -> Any:
    """Hydrogen surface density [Msun/pc2] above which gas on kpc scales is molecular.

    Parameters
    ----------
    u : float64 array or Dual
        Radiation field over that of the Milky Way.
    d : float64 array or Dual
        Dust to gas over that of the Milky Way.

    References
    ----------
    .. [1] gnedin2011, Eqs. 10 and 14.
    """
    return 20.0 * _interpolation(u, d) ** (4.0 / 7.0) / (d * np.sqrt(1.0 + u * d * d))


def gnedin2011_cell_fraction(density_cm3: Any, u: Any, d: Any) -> Any:
    """H2 fraction of a cell of a simulation, by its density of hydrogen nuclei."""
    depth = _interpolation(u, d)
    x = depth ** (3.0 / 7.0) * np.log(d * density_cm3 / (25.0 * depth))
    return 1.0 / (1.0 + np.exp(-x * (4.0 + 3.0 * x * x)))


def _gnedin2011(own: Mapping[str, Any], _given: Mapping[str, float]) -> Outcome:
    ratio = 1.0 + gnedin2011_critical(own["g0"], own["z_prime"]) / own["sigma_gas"]
    return Outcome(1.0 / (ratio * ratio))


def gnedin2014_half(u: Any, d: Any, scale_pc: float, *, erratum: bool) -> tuple[Any, Any]:
    """Hydrogen surface density [Msun/pc2] at which H2 equals HI, and the exponent.

    Parameters
    ----------
    u, d : float64 array or Dual
        As in `gnedin2011_critical`.
    scale_pc : float
        Size of the region.
    erratum : bool
        Whether the corrected coefficients are taken.

    References
    ----------
    .. [1] gnedin2014; gnedin2016 for the erratum.
    """
    s5 = (scale_pc / 100.0) ** 5
    d_star = 0.17 * (2.0 + s5) / (1.0 + s5)
    g = np.sqrt(d * d + d_star * d_star)
    exponent = 0.5 + 1.0 / (1.0 + np.sqrt(u * d * d * (1.0 / 600.0)))
    root = np.sqrt(0.001 + 0.1 * u) if erratum else np.sqrt(0.01 + u)
    weight = 1.69 if erratum else 0.69
    return 50.0 / g * root / (1.0 + weight * root), exponent


def _gnedin2014(*, erratum: bool) -> Any:
    def function(own: Mapping[str, Any], given: Mapping[str, float]) -> Outcome:
        half, exponent = gnedin2014_half(own["g0"], own["z_prime"], given["scale"], erratum=erratum)
        return Outcome(1.0 / (1.0 + np.exp(-exponent * np.log(own["sigma_gas"] / half))))

    return function


def polzin2024(column_cm2: Any, z_prime: Any, u: Any, scale_pc: float) -> Any:
    """H2 fraction by the column N_HI + 2 N_H2 of a region.

    Parameters
    ----------
    column_cm2 : float64 array or Dual
        Hydrogen nuclei.
    z_prime, u : float64 array or Dual
        Metallicity and field over those of the solar neighbourhood.
    scale_pc : float

    References
    ----------
    .. [1] polzin2024, the fit in projection.

    Notes
    -----
    fm / (1 + exp(-A x + ln(fm / 1.65e-4))) is written as 1 / (1/fm + exp(-A x) / 1.65e-4).
    """
    # log10 of the size in its two places.
    size, size10 = np.log10(scale_pc), np.log10(scale_pc / 10.0)
    ln_z = np.log(z_prime)
    lz = ln_z * (1.0 / np.log(10.0))
    w = 0.27 - 0.01 * lz * (9.25 * lz + 9.64)
    bell = (lz + 1.5) * (1.0 / 6.84)
    y = (21.96 - 0.19 * size) * np.exp(-0.5 * bell * bell)
    ln_foot = w * np.log(u) + y * np.log(10.0) + np.log1p(-0.13 * (1.0 + lz) * size10)
    x = np.log(column_cm2) - ln_foot
    per_column = SECONDS_3_MYR * 3.5e-17 / (150.0 * PC_CM)
    formed = column_cm2 * per_column * np.exp(1.3 * (ln_z + np.log(10.0)))
    inverse_limit = 1.0 - 2.0 * np.exp(-formed) / np.expm1(-formed)
    steepness = (
        1.0
        + 1.35 * 0.01**0.25 * (scale_pc / 10.0) ** 0.6 * np.exp(-0.25 * ln_z)
        + 3.4 * np.exp(0.02 * (ln_z - np.log(0.6)))
    )
    return 1.0 / (inverse_limit + np.exp(-steepness * x) * (1.0 / 1.65e-4))


def _polzin2024(own: Mapping[str, Any], given: Mapping[str, float]) -> Outcome:
    column = own["sigma_gas"] * NUCLEI_CM2_PER_MSUN_PC2
    return Outcome(polzin2024(column, own["z_prime"], own["g0"], given["scale"]))


def _is_thin_to_field(own: Mapping[str, Any], _given: Mapping[str, float]) -> Any:
    """U D^2 < 0.1: there Sigma_c rises with U."""
    return own["g0"] * own["z_prime"] ** 2 < 0.1


def _is_molecular(*, erratum: bool, mostly: bool) -> Any:
    """Whether more than half of the gas is molecular, or less."""

    def holds(own: Mapping[str, Any], given: Mapping[str, float]) -> Any:
        f = _gnedin2014(erratum=erratum)(own, given).f_mol
        return f >= 0.5 if mostly else f <= 0.5

    return holds


_FRACTION: Final = {
    "needs": ("sigma_gas", "oh", "g0"),
    "one_of": ("depletion_time", "efficiency"),
    "helium_factor": 1.0,
    "field_unit": "solar neighbourhood",
}

LAWS.add(
    Law(
        key="gnedin2011",
        label="Gnedin & Kravtsov 2011",
        cite="gnedin2011",
        where="Eqs. 10 and 14, on kpc scales",
        formula="f_H2 = (1 + Sigma_c/Sigma_H)^-2, Sigma_c = 20 L^(4/7)/(D (1 + U D^2)^0.5), "
        "L(U, D)",
        certainty="verified",
        function=_gnedin2011,
        parameters=(ANCHOR, *RATE_CHOICES),
        metallicity_anchor="dust to gas, Milky Way = 1",
        ranges={"z_prime": (1e-3, 3.0), "g0": (0.1, 100.0)},
        monotonic={
            "sigma_gas": Direction(1),
            "oh": Direction(1),
            "g0": Direction(-1, "where U D^2 < 0.1", _is_thin_to_field),
        },
        note="Once U D^2 is large the fraction rises with the field: Sigma_c falls as U^-1/2. The "
        "ranges of D and U are from memory.",
        **_FRACTION,  # type: ignore[arg-type]
    )
)
for _key, _label, _cite, _s1, _is_erratum in (
    (
        "gnedin2014", "Gnedin & Draine 2014, erratum", "gnedin2014",
        "(50/g) r/(1 + 1.69 r), r = (0.001 + 0.1 U)^0.5", True,
    ),
    (
        "gnedin2014_original", "Gnedin & Draine 2014, original", "gnedin2014",
        "(50/g) r/(1 + 0.69 r), r = (0.01 + U)^0.5", False,
    ),
):  # fmt: skip
    LAWS.add(
        Law(
            key=_key,
            label=_label,
            cite=_cite,
            where="fit for averages over a scale (equation number from memory)"
            + (", as in the erratum, ApJ 830, 54" if _is_erratum else ""),
            formula=f"f_H2 = R/(1 + R), R = (Sigma_H/S1)^a, a = 0.5 + 1/(1 + (U D^2/600)^0.5), "
            f"S1 = {_s1}, g = (D^2 + D_*(L)^2)^0.5",
            certainty="verified",
            function=_gnedin2014(erratum=_is_erratum),
            parameters=(scale_pc(10.0, 5000.0), ANCHOR, *RATE_CHOICES),
            metallicity_anchor="dust to gas, Milky Way = 1",
            ranges={"z_prime": (0.01, 3.0), "g0": (0.01, 1000.0)},
            monotonic={
                "sigma_gas": Direction(1),
                "oh": Direction(
                    1, "where f_H2 <= 1/2", _is_molecular(erratum=_is_erratum, mostly=False)
                ),
                "g0": Direction(
                    -1, "where f_H2 >= 1/2", _is_molecular(erratum=_is_erratum, mostly=True)
                ),
            },
            note="The erratum lowers S1, by 2.9 at U = 1. Ranges of D and U are from memory."
            if _is_erratum
            else "Superseded by the erratum of 2016 (gnedin2014); kept to repeat older work.",
            **_FRACTION,  # type: ignore[arg-type]
        )
    )
LAWS.add(
    Law(
        key="polzin2024",
        label="Polzin et al. 2024",
        cite="polzin2024",
        where="the fit in projection (equation number from memory)",
        formula="f_H2 = fm/(1 + exp(-A ln(N/N_tr) + ln(fm/1.65e-4))), N = N_HI + 2 N_H2; "
        "N_tr(U, Z', L), A(Z', L), fm(Z' N)",
        certainty="verified",
        function=_polzin2024,
        parameters=(scale_pc(10.0, 1000.0), ANCHOR, *RATE_CHOICES),
        metallicity_anchor="metals, solar neighbourhood = 1",
        ranges={"z_prime": (0.01, 3.0), "g0": (0.01, 1000.0)},
        monotonic={
            "sigma_gas": Direction(1),
            "oh": Direction(1, "where Z' >= 0.2", lambda own, _given: own["z_prime"] >= 0.2),
            "g0": Direction(-1),
        },
        note="N_tr is the foot of the rise: there the fraction is 1.65e-4. The ranges of Z' and U "
        "are from memory.",
        **_FRACTION,  # type: ignore[arg-type]
    )
)

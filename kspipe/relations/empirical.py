"""Baselines without physics: constant depletion times of molecular gas, and power laws."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final, Literal

import numpy as np

from kspipe.core.constants import HELIUM_FACTOR
from kspipe.relations.conventions import ImfName
from kspipe.relations.law import LAWS, Direction, Formula, Law, Outcome
from kspipe.relations.parameters import Parameter

__all__: list[str] = []


def _constant_time(own: Mapping[str, Any], given: Mapping[str, float]) -> Outcome:
    """1 Msun/pc2 in 1 Gyr is 1e-3 Msun/yr/kpc2."""
    return Outcome(sigma_sfr=own["sigma_mol"] * (1e-3 / given["depletion_time"]))


def _power_law(gas: str, log_zero: float, index: float, pivot: float) -> Formula:
    ln_zero = log_zero * np.log(10.0) - index * np.log(pivot)

    def function(own: Mapping[str, Any], _given: Mapping[str, float]) -> Outcome:
        return Outcome(sigma_sfr=np.exp(ln_zero + index * np.log(own[gas])))

    return function


_NO_METALS: Final = "none: metallicity does not enter"


def _time(
    key: str, label: str, cite: str, gyr: float, *, certainty: Literal["verified", "from memory"],
    scatter: float | None, where: str, note: str,
) -> None:  # fmt: skip
    LAWS.add(
        Law(
            key=key,
            label=label,
            cite=cite,
            where=where,
            formula=f"Sigma_SFR = Sigma_mol / {gyr:.4g} Gyr",
            certainty=certainty,
            function=_constant_time,
            needs=("sigma_mol",),
            parameters=(
                Parameter("depletion_time", "of molecular gas with helium, Gyr", gyr, 0.01, 100),
            ),
            has_fraction=False,
            helium_factor=HELIUM_FACTOR,
            metallicity_anchor=_NO_METALS,
            monotonic={"sigma_mol": Direction(1)},
            statistic="median",
            scatter_dex=scatter,
            is_linear=True,
            note=note,
        )
    )


def _power(
    key: str, label: str, cite: str, gas: str, law: tuple[float, float, float], *,
    helium: float, imf: ImfName = "Kroupa", certainty: Literal["verified", "from memory"],
    scatter: float | None, where: str, formula: str, note: str = "",
) -> None:  # fmt: skip
    LAWS.add(
        Law(
            key=key,
            label=label,
            cite=cite,
            where=where,
            formula=formula,
            certainty=certainty,
            function=_power_law(gas, *law),
            needs=(gas,),
            has_fraction=False,
            helium_factor=helium,
            metallicity_anchor=_NO_METALS,
            imf=imf,
            monotonic={gas: Direction(1)},
            statistic="median",
            scatter_dex=scatter,
            note=note,
        )
    )


_time(
    "leroy2008_efficiency", "Leroy et al. 2008, constant efficiency", "leroy2008", 1.0 / 0.525,
    certainty="from memory", scatter=None, where="the mean over discs, 800 pc",
    note="(5.25 +- 2.5)e-10 per yr. That it is a median is from memory.",
)  # fmt: skip
_time(
    "leroy2013_depletion", "Leroy et al. 2013, constant time", "leroy2013", 2.2,
    certainty="verified", scatter=0.3, where="abstract",
    note="1 kpc, one alpha_CO for all; a fit has the index 1 +- 0.15.",
)  # fmt: skip
_time(
    "bigiel2011_depletion", "Bigiel et al. 2011, constant time", "bigiel2011", 2.35,
    certainty="verified", scatter=0.24, where="abstract",
    note="1 kpc; the scatter is from memory.",
)  # fmt: skip
_power(
    "bigiel2008", "Bigiel et al. 2008", "bigiel2008", "sigma_mol", (-2.06, 0.96, 10.0),
    helium=1.0, certainty="from memory", scatter=None, where="Eq. 2",
    formula="Sigma_SFR = 10^-2.06 (Sigma_H2 / 10 Msun/pc2)^0.96",
    note="Hydrogen only in this fit; the 2 Gyr of the abstract are with helium, and do not follow "
    "from it. Errors 0.17 and 0.07.",
)  # fmt: skip
_power(
    "kennicutt1998_law", "Kennicutt 1998", "kennicutt1998_law", "sigma_gas",
    (-3.6020599913279625, 1.4, 1.0),
    helium=1.0, imf="Salpeter", certainty="verified", scatter=None, where="Eq. 4",
    formula="Sigma_SFR = 2.5e-4 (Sigma_HI + Sigma_H2)^1.4 for a Salpeter mass function",
    note="Averages over discs. Hydrogen only; errors (2.5 +- 0.7)e-4 and 1.4 +- 0.15. Fitted with "
    "X_CO = 2.8e20: another alpha_CO moves the gas, and is not undone (conventions from memory).",
)  # fmt: skip
_power(
    "delosreyes2019", "De los Reyes & Kennicutt 2019", "delosreyes2019", "sigma_gas",
    (-3.84, 1.41, 1.0),
    helium=HELIUM_FACTOR, certainty="from memory", scatter=0.28, where="fit to spirals",
    formula="log10 Sigma_SFR = 1.41 log10 Sigma_gas - 3.84",
    note="Averages over spirals. Index 1.41 +- 0.07 and scatter from the abstract; the constant "
    "and that helium is included are from memory.",
)  # fmt: skip

"""The published models of the efficiency per free-fall time, one record each."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from kspipe.core.registry import Registry
from kspipe.relations.state.mach import Mach1D, Mach3D, require_1d
from kspipe.relations.state.record import StateRecord
from kspipe.relations.state.turbulence import (
    Efficiency,
    Forcing,
    hennebelle_chabrier,
    krumholz2005,
    krumholz2005_fit,
    krumholz_mckee,
    multi_free_fall,
    padoan2012,
    padoan_nordlund,
    single_free_fall,
)

__all__ = ["TURBULENCE", "TurbulenceModel"]

Array = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True)
class TurbulenceModel(StateRecord):
    """One model of the efficiency per free-fall time.

    Attributes
    ----------
    dimensions : {1, 3}
        Of the Mach number in the paper.
    function : callable
        ``function(alpha_vir, mach, forcing)`` with a Mach1D; models in three dimensions convert.
    """

    dimensions: Literal[1, 3]
    function: Callable[[Array, Mach1D, Forcing], Efficiency]

    def efficiency(self, alpha_vir: Array, mach: Mach1D, forcing: Forcing) -> Efficiency:
        """Efficiency per free-fall time.

        Parameters
        ----------
        alpha_vir : float64 array
            5 sigma_1D^2 R / (G M).
        mach : Mach1D
            sigma_1D over the sound speed; derivatives are by it.
        forcing : Forcing
            Passed over by models that have none of it.

        Raises
        ------
        TypeError
            If the Mach number is of another kind.
        """
        require_1d(mach)
        return self.function(alpha_vir, mach, forcing)


TURBULENCE = Registry[TurbulenceModel]("turbulence model")


def _in_3d(
    function: Callable[[Array, Mach3D, Forcing], Efficiency],
) -> Callable[[Array, Mach1D, Forcing], Efficiency]:
    """Let a model of the three-dimensional Mach number take the one-dimensional one."""

    def converted(alpha_vir: Array, mach: Mach1D, forcing: Forcing) -> Efficiency:
        got = function(alpha_vir, mach.to_3d(), forcing)
        return Efficiency(got.value, got.by_alpha, math.sqrt(3.0) * got.by_mach)

    return converted


def _km(alpha: Array, mach: Mach3D, forcing: Forcing) -> Efficiency:
    return single_free_fall(alpha, mach, krumholz_mckee(alpha, mach, forcing), forcing)


def _km_multi(alpha: Array, mach: Mach3D, forcing: Forcing) -> Efficiency:
    return multi_free_fall(alpha, mach, krumholz_mckee(alpha, mach, forcing), forcing)


def _pn(alpha: Array, mach: Mach3D, forcing: Forcing) -> Efficiency:
    s_c = padoan_nordlund(alpha, mach, forcing)
    return single_free_fall(alpha, mach, s_c, forcing, at_threshold=True)


def _pn_multi(alpha: Array, mach: Mach3D, forcing: Forcing) -> Efficiency:
    return multi_free_fall(alpha, mach, padoan_nordlund(alpha, mach, forcing), forcing)


def _hc(alpha: Array, mach: Mach3D, forcing: Forcing) -> Efficiency:
    s_c = hennebelle_chabrier(alpha, mach, forcing, turbulent=True)
    return single_free_fall(alpha, mach, s_c, forcing)


def _hc_multi(alpha: Array, mach: Mach3D, forcing: Forcing) -> Efficiency:
    s_c = hennebelle_chabrier(alpha, mach, forcing, turbulent=False)
    return multi_free_fall(alpha, mach, s_c, forcing)


def _padoan2012(alpha: Array, mach: Mach1D, _: Forcing) -> Efficiency:
    # t_ff / t_dyn = pi (3 alpha / 40)^0.5 for a uniform sphere: from the definitions of t_ff,
    # t_dyn = R / sigma_3D and alpha_vir, with sigma_3D^2 = 3 sigma_1D^2.
    ratio = math.pi * np.sqrt(3.0 * np.asarray(alpha) / 40.0)
    value, slope = padoan2012(ratio)
    no_mach = np.zeros(np.shape(require_1d(mach)))
    return Efficiency(value, slope * ratio / (2.0 * alpha), no_mach + 0.0 * value)


_SINGLE = "(eps/(2 phi_t)) {1 + erf[(s2 - 2 s_c)/(8 s2)^0.5]}"
_MULTI = "(eps/(2 phi_t)) exp(3 s2/8) {1 + erf[(s2 - s_c)/(2 s2)^0.5]}"
_S2 = "s2 = ln[1 + b^2 M^2 beta/(1 + beta)], M in 3D"
_KM = "s_c = ln[(pi^2/5) 1.12^2 alpha M^2/(1 + 1/beta)]"
_PN = "s_c = ln[0.067 0.35^-2 alpha M^2 f(beta)]"
_HC = "s_c = ln[(pi^2/5) 100 alpha M^-2 (1 + 1/beta)"
_NOTE = (
    "Before feedback, with half of each core in stars; clouds show about 0.01. "
    "The constants fitted to simulations by federrath2012 are not used."
)
for _key, _label, _cite, _formula, _certainty, _function in (
    ("federrath2012_km", "KM, single free-fall", "federrath2012", f"{_SINGLE}, {_KM}", True, _km),
    (
        "federrath2012_km_multi",
        "KM, multi free-fall",
        "federrath2012",
        f"{_MULTI}, {_KM}",
        True,
        _km_multi,
    ),
    (
        "padoan2011",
        "PN, single free-fall",
        "padoan2011",
        f"{_SINGLE} exp(s_c/2), {_PN}",
        True,
        _pn,
    ),
    (
        "padoan2011_multi",
        "PN, multi free-fall",
        "federrath2012",
        f"{_MULTI}, {_PN}",
        True,
        _pn_multi,
    ),
    (
        "hennebelle2011",
        "HC, single free-fall",
        "federrath2012",
        f"{_SINGLE}, {_HC} + (pi^2/15) 10 alpha]",
        False,
        _hc,
    ),
    (
        "hennebelle2011_multi",
        "HC, multi free-fall",
        "hennebelle2011",
        f"{_MULTI}, {_HC}]",
        True,
        _hc_multi,
    ),
):
    TURBULENCE.add(
        TurbulenceModel(
            key=_key,
            label=_label,
            cite=_cite,
            where="Table 1" if _cite == "federrath2012" else "Table 1 of federrath2012",
            formula=f"eps_ff = {_formula}; {_S2}",
            certainty="verified" if _certainty else "from memory",
            unit="",
            note=_NOTE,
            dimensions=3,
            function=_in_3d(_function),
        )
    )
TURBULENCE.add(
    TurbulenceModel(
        key="krumholz2005",
        label="Krumholz & McKee 2005",
        cite="krumholz2005",
        where="its efficiency (equation numbers not confirmed)",
        formula="eps_ff = (0.5/(2 x 1.91)) {1 + erf[(s2 - 2 ln x_c)/(8 s2)^0.5]}, "
        "x_c = (pi^2/15) 1.12^2 alpha M^2, s2 = ln(1 + 3 M^2/4), M in 1D",
        certainty="verified",
        unit="",
        note=_NOTE,
        dimensions=1,
        function=lambda alpha, mach, _: krumholz2005(alpha, mach),
    )
)
TURBULENCE.add(
    TurbulenceModel(
        key="krumholz2005_fit",
        label="Krumholz & McKee 2005, fit",
        cite="krumholz2005",
        where="its power law (equation number not confirmed)",
        formula="eps_ff = 0.014 (alpha/1.3)^-0.68 (M/100)^-0.32, M in 1D",
        certainty="verified",
        unit="",
        note=_NOTE,
        dimensions=1,
        function=lambda alpha, mach, _: krumholz2005_fit(alpha, mach),
    )
)
TURBULENCE.add(
    TurbulenceModel(
        key="padoan2012",
        label="Padoan et al. 2012",
        cite="padoan2012",
        where="its fit to simulations (equation number not confirmed)",
        formula="eps_ff = 0.5 exp(-1.6 t_ff/t_dyn), t_dyn = R/sigma_3D; "
        "t_ff/t_dyn = pi (3 alpha/40)^0.5 for a uniform sphere",
        certainty="from memory",
        unit="",
        note=_NOTE,
        dimensions=3,
        function=_padoan2012,
    )
)

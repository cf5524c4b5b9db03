"""12 + log10(O/H) of a whole galaxy from its stellar mass: a fallback where no lines are seen."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.record import Record
from kspipe.core.registry import Registry

__all__ = ["MASS_METALLICITY", "MassMetallicity"]

Array = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True)
class MassMetallicity(Record):
    """Metallicity as a function of stellar mass.

    Attributes
    ----------
    function : callable
        12 + log10(O/H) of log10(M_star / Msun).
    oh_scale : str
        The metallicity scale of the result.
    place : str
        Where in the galaxy it holds.
    """

    function: Callable[[Array], Array]
    oh_scale: str
    place: str

    def __call__(self, log_mass: Array) -> Array:
        """Evaluate."""
        return self.function(np.asarray(log_mass, dtype=float))


def _sanchez2019(log_mass: Array, top: float, scale: float) -> Array:
    x = log_mass - 8.0 - 3.5
    return np.asarray(top + scale * x * np.exp(-x))


def _sanchez2019_o3n2(log_mass: Array) -> Array:
    return _sanchez2019(log_mass, 8.73, 0.010)


def _sanchez2019_m13(log_mass: Array) -> Array:
    return _sanchez2019(log_mass, 8.51, 0.007)


def _curti2020(log_mass: Array) -> Array:
    # log1p keeps the tail at high mass.
    return np.asarray(
        8.793 - 0.28 / 1.2 * np.log1p(10.0 ** (-1.2 * (log_mass - 10.02))) / np.log(10.0)
    )


MASS_METALLICITY = Registry[MassMetallicity]("mass-metallicity record")

MASS_METALLICITY.add(
    MassMetallicity(
        key="sanchez2019",
        label="Sanchez et al. 2019, PP04 O3N2",
        cite="sanchez2019",
        where="the fit for that calibration (equation number not confirmed)",
        formula="OH = 8.73 + 0.010 (x - 3.5) exp(-(x - 3.5)), x = log10 M_star - 8",
        certainty="from memory",
        note="At the effective radius.",
        function=_sanchez2019_o3n2,
        oh_scale="PP04 O3N2",
        place="effective radius",
    )
)
MASS_METALLICITY.add(
    MassMetallicity(
        key="sanchez2019_m13",
        label="Sanchez et al. 2019, M13 O3N2",
        cite="sanchez2019",
        where="the fit for that calibration (equation number not confirmed)",
        formula="OH = 8.51 + 0.007 (x - 3.5) exp(-(x - 3.5)), x = log10 M_star - 8",
        certainty="from memory",
        note="At the effective radius.",
        function=_sanchez2019_m13,
        oh_scale="M13 O3N2",
        place="effective radius",
    )
)
MASS_METALLICITY.add(
    MassMetallicity(
        key="curti2020",
        label="Curti et al. 2020",
        cite="curti2020",
        where="Eq. 2",
        formula="OH = 8.793 - (0.28 / 1.2) log10(1 + (M_star / 10^10.02)^-1.2)",
        certainty="from memory",
        note="In the aperture of a fibre, on the scale of electron temperatures.",
        function=_curti2020,
        oh_scale="direct",
        place="fibre aperture",
    )
)

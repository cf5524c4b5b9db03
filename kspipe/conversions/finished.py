"""Maps of surface densities that someone else made, brought to kspipe's conventions."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.imf import imf_factor
from kspipe.conversions.star_formation import StarFormation
from kspipe.core.constants import HELIUM_FACTOR

__all__ = ["FINISHED", "FINISHED_SFR", "Finished", "finished_factor"]

Array = NDArray[np.float64]

# Tracers of finished maps, and the product that each is.
FINISHED: Final = {
    "Sigma_HI": "sigma_atom",
    "Sigma_mol": "sigma_mol",
    "Sigma_star": "sigma_star",
    "Sigma_SFR": "sigma_sfr",
}


@dataclass(frozen=True)
class Finished:
    """In which conventions a finished map is.

    Attributes
    ----------
    face_on : bool
        Whether it was multiplied by cos i; else it is as seen on the sky.
    helium_factor : float or None
        Total over hydrogen mass that it includes; None where it is no gas.
    imf : str or None
        Of its stars or star formation; None where it is gas.
    """

    face_on: bool
    helium_factor: float | None = None
    imf: str | None = None

    def __str__(self) -> str:
        parts = ["face-on" if self.face_on else "as seen on the sky"]
        if self.helium_factor is not None:
            parts.append(f"helium x {self.helium_factor:g}")
        if self.imf is not None:
            parts.append(f"{self.imf} IMF")
        return ", ".join(parts)


def finished_factor(state: Finished, cos_i: Array, imf: str) -> Array:
    """Multiply a finished map by this: face-on, helium of 1.36, and one mass function.

    Parameters
    ----------
    state : Finished
    cos_i : float64 array
    imf : str
        Of what comes out.
    """
    factor = np.ones(np.shape(cos_i)) if state.face_on else np.asarray(cos_i, dtype=float)
    if state.helium_factor is not None:
        factor = factor * (HELIUM_FACTOR / state.helium_factor)
    if state.imf is not None:
        factor = factor * imf_factor(state.imf, imf)
    return np.asarray(factor)


# The calibration of a recipe whose star formation is a finished map.
FINISHED_SFR: Final = StarFormation(
    key="finished map",
    label="finished map",
    cite="the recipe",
    where="typed in the recipe",
    formula="Sigma_SFR as given  [Msun/yr/kpc2]",
    certainty="the user's own",
    imf="Kroupa",
    family="the user's own",
    coefficients={"Sigma_SFR": 1.0},
)

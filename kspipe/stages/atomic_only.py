"""Relations held against galaxies without CO a second way: through the HI that they leave."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from astropy.table import Column, Table
from numpy.typing import NDArray

from kspipe.comparison import (
    Inversion,
    Known,
    Residuals,
    headline,
    predict_from_atomic,
)
from kspipe.core.seeds import generator
from kspipe.recipe import Recipe
from kspipe.relations import LAWS
from kspipe.stages.surface import Disc

__all__ = ["FromAtomic", "from_atomic", "summaries"]

SFR_UNIT = "solMass yr-1 kpc-2"
GAS_UNIT = "solMass pc-2"


@dataclass(frozen=True)
class FromAtomic:
    """One relation, inverted.

    Attributes
    ----------
    residuals : Residuals
        At the smallest amount of gas that fits.
    inversion : Inversion
    """

    residuals: Residuals
    inversion: Inversion

    @property
    def extensions(self) -> dict[str, tuple[NDArray[Any], str]]:
        """Images for the file of residuals."""
        r, i = self.residuals, self.inversion
        return {
            "INVERTED": (r.ratio_dex, ""),
            "INVERTED_PREDICTED": (r.predicted, SFR_UNIT),
            "INVERTED_ERROR": (r.predicted_error, SFR_UNIT),
            "INVERTED_GAS": (i.lowest, GAS_UNIT),
            "INVERTED_GAS_HIGHEST": (i.highest, GAS_UNIT),
            "INVERTED_ROOTS": (i.n_roots, ""),
            "INVERTED_FLAGS": (r.flags, ""),
        }

    def add_columns(self, table: Table, name: str, used: NDArray[np.bool_]) -> None:
        """Add what was found to the table of pixels."""
        r, i = self.residuals, self.inversion
        sfr, gas = "solMass / (yr kpc2)", "solMass / pc2"
        for column, values, unit, what in (
            ("roots", i.n_roots, None, "amounts of gas whose atomic part is the HI seen"),
            ("gas_inverted", i.lowest, gas, "smallest of these amounts"),
            ("predicted_inverted", r.predicted, sfr, "sigma_sfr predicted for it"),
            ("residual_inverted", r.ratio_dex, "dex", "log10(observed / predicted) for it"),
        ):
            label = f"{column}_{name}"
            table.add_column(
                Column(values[used], name=label, unit=unit, description=f"{what}, {name}")
            )

    def summary(
        self,
        disc: Disc,
        used: NDArray[np.bool_],
        independent: NDArray[np.bool_],
        jacobian_arcsec: NDArray[np.float64],
        rng: np.random.Generator,
    ) -> dict[str, Any]:
        """Count roots and sum up the residuals."""
        roots = self.inversion.n_roots[used]
        numbers = headline(
            self.residuals, disc.surfaces["sigma_sfr"], used, independent, jacobian_arcsec, rng
        )
        return {
            "n_without_root": int(np.sum(roots == 0)),
            "n_one_root": int(np.sum(roots == 1)),
            "n_several_roots": int(np.sum(roots > 1)),
            **asdict(numbers),
        }


def from_atomic(recipe: Recipe, inputs: Mapping[str, Known], disc: Disc) -> dict[str, FromAtomic]:
    """Invert every relation that predicts a molecular fraction, where the recipe has no CO.

    Parameters
    ----------
    recipe : Recipe
    inputs : mapping of str to Known
        ``sigma_gas`` is the atomic gas.
    disc : Disc

    Returns
    -------
    dict of str to FromAtomic
        By the recipe's name; empty where the recipe has molecular gas.
    """
    if recipe.has_molecular:
        return {}
    found = {}
    for name, table in recipe.relations.items():
        law = LAWS.get(table.law)
        if law.has_fraction and law.gas == "sigma_gas":
            sfr = disc.surfaces["sigma_sfr"]
            found[name] = FromAtomic(
                *predict_from_atomic(inputs, sfr, disc.flags, table.law, table.parameters)
            )
    return found


def summaries(
    recipe: Recipe,
    found: Mapping[str, FromAtomic],
    disc: Disc,
    used: NDArray[np.bool_],
    independent: NDArray[np.bool_],
    jacobian_arcsec: NDArray[np.float64],
) -> dict[str, dict[str, Any]]:
    """Sum up every inverted relation, by name."""
    return {
        name: one.summary(
            disc,
            used,
            independent,
            jacobian_arcsec,
            generator(recipe.seed, "compare", f"{name}, inverted"),
        )
        for name, one in found.items()
    }

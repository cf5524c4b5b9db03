"""What every relation states about itself, and the shelf of relations."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from kspipe.core.registry import Registry

__all__ = ["LAWS", "Law", "Parameter", "Prediction"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Parameter:
    """A number that the user may set for one use of a relation.

    Attributes
    ----------
    name : str
    meaning : str
    default : float or None
        None where it must be typed.
    low, high : float
        Allowed values.
    """

    name: str
    meaning: str
    default: float | None
    low: float
    high: float


@dataclass(frozen=True)
class Prediction:
    """What a relation predicts, with derivatives and flags.

    Attributes
    ----------
    sigma_sfr : float64 array
        [Msun/yr/kpc2]; NaN where there is no prediction.
    f_mol : float64 array or None
        Molecular fraction of the gas by mass.
    derivatives : dict of str to dict of str to float64 array
        ``derivatives["sigma_sfr"]["sigma_gas"]`` and so on.
    outside_range, no_solution : bool array
        Inputs outside the declared range; no value exists.
    """

    sigma_sfr: Array
    f_mol: Array | None
    derivatives: dict[str, dict[str, Array]]
    outside_range: NDArray[np.bool_]
    no_solution: NDArray[np.bool_]


PredictFunction = Callable[[Mapping[str, Array], Mapping[str, float]], Prediction]


@dataclass(frozen=True, kw_only=True)
class Law:
    """One published relation.

    Attributes
    ----------
    key, label, cite, where, formula, note : str
        As in the conversion records.
    certainty : {"verified", "from memory"}
    function : callable
        ``function(inputs, parameters) -> Prediction`` on plain arrays.
    needs : tuple of str
        Names of the inputs: ``sigma_gas`` [Msun/pc2], ``oh`` [12+log10(O/H)].
    parameters : tuple of Parameter
    helium_factor : float
        Of the surface densities that it takes.
    metallicity_anchor : str
        What Z' = 1 means in the paper.
    field_unit : str or None
        Unit of the radiation field; None where it takes none.
    ranges : mapping of str to (float, float)
        Where the paper trusts it.
    monotonic : mapping of str to int
        +1 where sigma_sfr rises with an input over the whole range, -1 where it falls.
    statistic : {"mean", "median"}
        What the prediction is of, in a population of regions.
    """

    key: str
    label: str
    cite: str
    where: str
    formula: str
    certainty: Literal["verified", "from memory"]
    function: PredictFunction
    needs: tuple[str, ...]
    parameters: tuple[Parameter, ...]
    helium_factor: float
    metallicity_anchor: str
    field_unit: str | None
    ranges: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    monotonic: Mapping[str, int] = field(default_factory=dict)
    statistic: Literal["mean", "median"] = "mean"
    note: str = ""

    def predict(
        self, inputs: Mapping[str, Array], parameters: Mapping[str, float] | None = None
    ) -> Prediction:
        """Evaluate the relation.

        Parameters
        ----------
        inputs : mapping of str to float64 array
            All of `needs`, shapes that broadcast.
        parameters : mapping of str to float, optional
            Overrides of the defaults.

        Raises
        ------
        KeyError
            If an input or a parameter without a default is missing, or a name is not known.
        """
        missing = [name for name in self.needs if name not in inputs]
        if missing:
            raise KeyError(f"relation {self.key!r} needs {', '.join(missing)}")
        return self.function(inputs, self.filled(parameters or {}))

    def filled(self, given: Mapping[str, float]) -> dict[str, float]:
        """Fill in defaults.

        Raises
        ------
        KeyError
            If a name is not known or a needed parameter is missing.
        """
        known = {parameter.name: parameter for parameter in self.parameters}
        for name in given:
            if name not in known:
                raise KeyError(f"relation {self.key!r} has no parameter {name!r}")
        values: dict[str, float] = {}
        for name, parameter in known.items():
            value = given.get(name, parameter.default)
            if value is None:
                raise KeyError(f"relation {self.key!r} needs the parameter {name!r}")
            values[name] = float(value)
        return values


LAWS = Registry[Law]("relation")

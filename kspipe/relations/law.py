"""What every relation states about itself, and the shelf of relations."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from kspipe.core.radiation import FieldUnit
from kspipe.core.registry import Registry
from kspipe.kernels.dual import Dual, plain, slopes_of
from kspipe.relations.conventions import (
    KROUPA_RATE_OF,
    ImfName,
    own_inputs,
    rate_of_molecular_gas,
)
from kspipe.relations.parameters import Parameter

__all__ = ["LAWS", "Direction", "Law", "Outcome", "Prediction"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

# Arrays are worked through in pieces that stay in the cache.
BLOCK = 16384
# Inputs that are never negative; the gas itself is looked at apart.
_NEVER_NEGATIVE = ("sigma_star", "rho_sd", "g0", "omega")


@dataclass(frozen=True)
class Direction:
    """Which way a prediction goes with one input.

    Attributes
    ----------
    sign : {1, -1}
        Whether sigma_sfr rises or falls with it.
    where : str
        In which part of the range, in words; empty for all of it.
    holds : callable or None
        ``holds(own_inputs, parameters)`` marks that part; None for all of it.
    """

    sign: int
    where: str = ""
    holds: Callable[[Mapping[str, Any], Mapping[str, float]], Mask] | None = None


@dataclass(frozen=True)
class Outcome:
    """What a formula gives: arrays, or duals where slopes were asked for.

    Attributes
    ----------
    f_mol : float64 array, Dual or None
        Molecular fraction of the gas by mass.
    sigma_sfr : float64 array, Dual or None
        [Msun/yr/kpc2]; None where the paper gives the fraction only.
    """

    f_mol: Any = None
    sigma_sfr: Any = None


@dataclass(frozen=True)
class Prediction:
    """What a relation predicts, with derivatives and flags.

    Attributes
    ----------
    sigma_sfr : float64 array
        [Msun/yr/kpc2], Kroupa mass function; NaN where there is no prediction.
    f_mol : float64 array or None
        Molecular fraction of the gas by mass.
    derivatives : dict of str to dict of str to float64 array
        ``derivatives["sigma_sfr"]["sigma_gas"]`` and so on; empty where not asked for.
    outside_range, no_solution : bool array
        Inputs outside the declared range; no value exists.
    """

    sigma_sfr: Array
    f_mol: Array | None
    derivatives: dict[str, dict[str, Array]]
    outside_range: Mask
    no_solution: Mask


Formula = Callable[[Mapping[str, Any], Mapping[str, float]], Outcome]


@dataclass(frozen=True, kw_only=True)
class Law:
    """One published relation.

    Attributes
    ----------
    key, label, cite, where, formula, note : str
        As in the conversion records.
    certainty : {"verified", "from memory"}
    function : callable
        ``function(own_inputs, parameters) -> Outcome``, in the paper's own conventions and units;
        written once for arrays and for numbers that carry slopes.
    needs : tuple of str
        Names of the inputs, as in `LAW_INPUTS`; the gas comes first.
    optional : tuple of str
        Inputs that it uses where they are given, all of them or none.
    parameters : tuple of Parameter
    one_of : tuple of str
        Parameters of which exactly one must be typed.
    has_fraction : bool
        Whether it predicts a molecular fraction.
    helium_factor : float
        Mass over hydrogen mass in the surface densities of gas that the formula takes.
    metallicity_anchor : str
        What Z' = 1 means in the paper.
    field_unit : {"solar neighbourhood", "Draine", "Habing"} or None
        Unit of the radiation field; None where it takes none.
    imf : {"Kroupa", "Salpeter"}
        Of the paper's star-formation rates.
    ranges : mapping of str to (float, float)
        Where the paper trusts it, in its own conventions.
    monotonic : mapping of str to Direction
    kinks : str
        Where its value or slope jumps, and which; empty for a smooth form.
    statistic : {"mean", "median"}
        What the prediction is of, in a population of regions.
    scatter_dex : float or None
        Of single regions about it, as measured by the paper.
    is_linear : bool
        Whether it is a constant times the gas, which holds for noise below zero too.
    """

    key: str
    label: str
    cite: str
    where: str
    formula: str
    certainty: Literal["verified", "from memory"]
    function: Formula
    needs: tuple[str, ...]
    optional: tuple[str, ...] = ()
    parameters: tuple[Parameter, ...] = ()
    one_of: tuple[str, ...] = ()
    has_fraction: bool = True
    helium_factor: float
    metallicity_anchor: str
    field_unit: FieldUnit | None = None
    imf: ImfName = "Kroupa"
    ranges: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    monotonic: Mapping[str, Direction] = field(default_factory=dict)
    kinks: str = ""
    statistic: Literal["mean", "median"] = "mean"
    scatter_dex: float | None = None
    is_linear: bool = False
    note: str = ""

    def __reduce__(self) -> tuple[object, tuple[str]]:
        """Travel by key."""
        return _by_key, (self.key,)

    @property
    def gas(self) -> str:
        """Name of the gas that it takes: ``sigma_gas`` or ``sigma_mol``."""
        return self.needs[0]

    def predict(
        self,
        inputs: Mapping[str, Array],
        parameters: Mapping[str, float] | None = None,
        *,
        slopes: bool = True,
    ) -> Prediction:
        """Evaluate the relation.

        Parameters
        ----------
        inputs : mapping of str to float64 array
            All of `needs` in kspipe's units, shapes that broadcast; others are passed over.
        parameters : mapping of str to float, optional
            Overrides of the defaults.
        slopes : bool
            Whether derivatives are wanted.

        Returns
        -------
        Prediction
            sigma_sfr is 0 at zero gas and NaN (no solution) below, unless `is_linear`.

        Raises
        ------
        KeyError
            If an input or a parameter without a default is missing, or a name is not known.
        """
        missing = [name for name in self.needs if name not in inputs]
        if missing:
            raise KeyError(f"relation {self.key!r} needs {', '.join(missing)}")
        filled = self.filled(parameters or {})
        taken = {name: np.asarray(inputs[name], dtype=float) for name in self.takes(inputs)}
        shape = np.broadcast_shapes(*(array.shape for array in taken.values()))
        size = int(np.prod(shape))
        made = _Blank(size, self.has_fraction, tuple(taken), slopes=slopes)
        flat = {
            name: array.reshape(())
            if array.size == 1
            else np.broadcast_to(array, shape).reshape(-1)
            for name, array in taken.items()
        }
        for start in range(0, size, BLOCK):
            piece = slice(start, min(start + BLOCK, size))
            part = {name: a if a.ndim == 0 else a[piece] for name, a in flat.items()}
            self._evaluate(part, filled, made, piece, slopes=slopes)
        return made.shaped(shape)

    def takes(self, inputs: Mapping[str, Any]) -> tuple[str, ...]:
        """Names of the inputs that it would use of those given."""
        more = self.optional if all(name in inputs for name in self.optional) else ()
        return (*self.needs, *more)

    def own(self, inputs: Mapping[str, Any], parameters: Mapping[str, float]) -> dict[str, Any]:
        """Inputs in the conventions of the paper."""
        return own_inputs(
            inputs,
            helium_factor=self.helium_factor,
            anchor_oh=parameters.get("anchor_oh"),
            field_unit=self.field_unit,
        )

    def filled(self, given: Mapping[str, float]) -> dict[str, float]:
        """Fill in defaults.

        Raises
        ------
        KeyError
            If a name is not known, or a needed parameter is missing, or not exactly one of
            `one_of` is given.
        """
        known = {parameter.name: parameter for parameter in self.parameters}
        for name in given:
            if name not in known:
                raise KeyError(f"relation {self.key!r} has no parameter {name!r}")
        if self.one_of and sum(name in given for name in self.one_of) != 1:
            raise KeyError(f"relation {self.key!r} needs one of {' and '.join(self.one_of)}")
        values: dict[str, float] = {}
        for name, parameter in known.items():
            value = given.get(name, parameter.default)
            if value is None:
                if name in self.one_of:
                    continue
                raise KeyError(f"relation {self.key!r} needs the parameter {name!r}")
            values[name] = float(value)
        return values

    def _usable(self, name: str, value: Array) -> Array:
        """An input where it can have a prediction, else NaN."""
        if name == self.gas:
            return value if self.is_linear else np.where(value > 0, value, np.nan)
        return np.where(value >= 0, value, np.nan) if name in _NEVER_NEGATIVE else value

    def _evaluate(
        self,
        inputs: Mapping[str, Array],
        parameters: Mapping[str, float],
        made: _Blank,
        piece: slice,
        *,
        slopes: bool,
    ) -> None:
        """Predict one piece."""
        numbers: dict[str, Any] = {}
        for name, given in inputs.items():
            value = self._usable(name, given)
            numbers[name] = Dual(value, {name: 1.0}) if slopes else value
        own = self.own(numbers, parameters)
        with np.errstate(over="ignore", under="ignore", invalid="ignore", divide="ignore"):
            outcome = self.function(own, parameters)
            rate = outcome.sigma_sfr
            if rate is None:
                rate = rate_of_molecular_gas(outcome.f_mol, numbers[self.gas], parameters)
            if self.imf != "Kroupa":
                rate = rate * KROUPA_RATE_OF[self.imf]
        products = {"sigma_sfr": rate, "f_mol": outcome.f_mol}
        # Without gas nothing forms, if the other inputs are known.
        is_empty = inputs[self.gas] == 0
        has_empty = not self.is_linear and bool(is_empty.any())
        if has_empty:
            for name, number in numbers.items():
                if name != self.gas:
                    is_empty = is_empty & np.isfinite(plain(number))
        for product in made.values:
            made.write(product, products[product], piece, is_empty if has_empty else None)
        for name, (low, high) in self.ranges.items():
            if name in own:
                value = plain(own[name])
                made.outside_range[piece] |= (value < low) | (value > high)


class _Blank:
    """Arrays that a prediction is written into, piece by piece."""

    def __init__(self, size: int, has_fraction: bool, names: tuple[str, ...], *, slopes: bool):
        products = ("sigma_sfr", "f_mol") if has_fraction else ("sigma_sfr",)
        self.values = {product: np.empty(size) for product in products}
        self.slopes = (
            {product: {name: np.empty(size) for name in names} for product in products}
            if slopes
            else {}
        )
        self.outside_range = np.zeros(size, dtype=bool)

    def write(self, product: str, number: Any, piece: slice, is_empty: Mask | None) -> None:
        """Write one product of one piece, zero where there is no gas."""
        target = self.values[product][piece]
        target[...] = plain(number)
        found = slopes_of(number)
        slopes = {name: slope[piece] for name, slope in self.slopes.get(product, {}).items()}
        for name, slope in slopes.items():
            slope[...] = found.get(name, 0.0)
        if is_empty is not None:
            where = np.broadcast_to(is_empty, target.shape)
            for array in (target, *slopes.values()):
                array[where] = 0.0
        unknown = np.isnan(target) if slopes else None
        for slope in slopes.values():
            slope[unknown] = np.nan

    def shaped(self, shape: tuple[int, ...]) -> Prediction:
        rate = self.values["sigma_sfr"].reshape(shape)
        fraction = self.values.get("f_mol")
        return Prediction(
            sigma_sfr=rate,
            f_mol=None if fraction is None else fraction.reshape(shape),
            derivatives={
                product: {name: slope.reshape(shape) for name, slope in slopes.items()}
                for product, slopes in self.slopes.items()
            },
            outside_range=self.outside_range.reshape(shape),
            no_solution=np.isnan(rate),
        )


LAWS = Registry[Law]("relation")


def _by_key(key: str) -> Law:
    return LAWS.get(key)

"""What every published conversion states about itself."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from kspipe.core.citations import CITATIONS

__all__ = ["Certainty", "Range", "Record"]

Array = NDArray[np.float64]
Certainty = Literal["verified", "from memory", "the user's own"]


@dataclass(frozen=True)
class Range:
    """Where a record was calibrated.

    Attributes
    ----------
    quantity : str
        The input, with its unit.
    low, high : float
        Infinite where the paper gives no bound.
    name : str
        Of the input in `kspipe.conversions.inputs.INPUTS`; empty where it is none of them.
    """

    quantity: str
    low: float
    high: float
    name: str = ""

    def __str__(self) -> str:
        if math.isinf(self.high):
            return f"{self.quantity} >= {self.low:g}"
        if math.isinf(self.low):
            return f"{self.quantity} <= {self.high:g}"
        return f"{self.low:g} <= {self.quantity} <= {self.high:g}"


@dataclass(frozen=True, kw_only=True)
class Record:
    """One published conversion.

    Attributes
    ----------
    key : str
        ``author2012`` or ``author2012_tracer``; never reused for a changed formula.
    label : str
        For figures and tables.
    cite : str
        Key of `kspipe.core.citations`; of a user's own record the citation as it was typed.
    where : str
        Equation or table of the paper.
    formula : str
        In words and symbols, with units.
    certainty : {"verified", "from memory", "the user's own"}
        Whether the coefficients were compared with a stored text of the source, or recomputed.
    ranges : tuple of Range
        Empty where the paper gives none.
    scatter_dex : float or None
        Intrinsic scatter; None where the paper gives none.
    helium_factor : float or None
        Total over hydrogen mass that the result includes; None where it does not apply.
    imf : str or None
        Initial mass function that the result assumes; None where it does not apply.
    note : str
        What a user must know before believing it.
    """

    key: str
    label: str
    cite: str
    where: str
    formula: str
    certainty: Certainty
    ranges: tuple[Range, ...] = ()
    scatter_dex: float | None = None
    helium_factor: float | None = None
    imf: str | None = None
    note: str = ""

    @property
    def sentence(self) -> str:
        """One line for histories: key, source, formula, and that it is from memory if it is."""
        doubt = "; coefficients from memory" if self.certainty == "from memory" else ""
        return f"{self.key} ({self.cite}, {self.where}): {self.formula}{doubt}"

    @property
    def paper(self) -> str:
        """The citation in full."""
        return str(CITATIONS.get(self.cite, self.cite))

    def outside(self, inputs: Mapping[str, Array]) -> NDArray[np.bool_]:
        """Where an input lies outside a range; a range of an input not given is passed over."""
        outside = np.zeros((), dtype=bool)
        for allowed in self.ranges:
            if allowed.name in inputs:
                value = np.asarray(inputs[allowed.name])
                outside = outside | (value < allowed.low) | (value > allowed.high)
        return outside

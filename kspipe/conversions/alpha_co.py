"""The CO-to-H2 conversion factor, always for CO(1-0) and with helium: what a record of it is."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.record import Record
from kspipe.core.registry import Registry

__all__ = ["ALPHA_CO", "AlphaCO", "Inputs"]

Array = NDArray[np.float64]
Inputs = Mapping[str, Array]
OfInputs = Callable[[Inputs], Array]


@dataclass(frozen=True, kw_only=True)
class AlphaCO(Record):
    """alpha_CO [Msun/pc2 per K km/s of CO(1-0)].

    Attributes
    ----------
    needs : tuple of str
        Names in `kspipe.conversions.inputs.INPUTS`. One that needs ``sigma_total`` depends on its
        own result; `convert` solves for it.
    function : callable
        Of a mapping with all of `needs`; surface densities in it are face-on and with helium.
    log_slopes : tuple of (str, callable)
        d ln(alpha_CO) / d(input) for each surface density that is needed, as a function of the
        same mapping.
    oh_scale : str or None
        The metallicity scale that the coefficients are tied to; None where the paper's scale was
        not confirmed.
    """

    function: OfInputs
    needs: tuple[str, ...] = ()
    log_slopes: tuple[tuple[str, OfInputs], ...] = ()
    oh_scale: str | None = None

    @property
    def is_self_consistent(self) -> bool:
        """Whether the molecular gas that it gives is among its inputs."""
        return "sigma_total" in self.needs

    def __call__(self, inputs: Inputs) -> Array:
        """Evaluate on arrays that broadcast; NaN in a needed input gives NaN.

        Raises
        ------
        KeyError
            If an input is missing.
        """
        missing = [name for name in self.needs if name not in inputs]
        if missing:
            raise KeyError(f"record {self.key!r} needs {', '.join(missing)}")
        return self.function(inputs)

    def log_slope(self, name: str, inputs: Inputs) -> Array | float:
        """Evaluate d ln(alpha_CO) / d(input); zero for what it does not need."""
        return next((slope(inputs) for known, slope in self.log_slopes if known == name), 0.0)


ALPHA_CO = Registry[AlphaCO]("alpha_CO record")

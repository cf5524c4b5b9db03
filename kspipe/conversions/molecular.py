"""Molecular gas from a CO line: alpha_CO, solved for where it depends on what it gives."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.alpha_co import AlphaCO
from kspipe.conversions.metallicity import z_prime
from kspipe.kernels.selfconsistent import solve_total

__all__ = ["Molecular", "molecular_gas"]

Array = NDArray[np.float64]

# Pixels that are solved together: a dozen arrays of them fit the cache of one core.
BLOCK: Final = 1 << 14


@dataclass(frozen=True)
class Molecular:
    """alpha_CO of each pixel, and how the gas depends on what went in.

    Attributes
    ----------
    alpha_co : float64 array
        Msun/pc2 per K km/s of CO(1-0).
    per_line : float64 array
        d Sigma_mol / d(face-on CO(1-0) intensity).
    per_atom, per_star : float64 array or None
        d Sigma_mol / d Sigma_atom and / d Sigma_star; None where there is no dependence.
    negative_co : bool array or None
        Where CO is negative and alpha_CO was taken at zero CO; None where it does not matter.
    outside_range : bool array
    """

    alpha_co: Array
    per_line: Array
    per_atom: Array | None
    per_star: Array | None
    negative_co: NDArray[np.bool_] | None
    outside_range: NDArray[np.bool_]


def molecular_gas(
    record: AlphaCO,
    line: Array,
    sigma_atom: Array | None,
    given: Mapping[str, Array],
) -> Molecular:
    """Evaluate a record on face-on surface densities at one beam.

    Parameters
    ----------
    record : AlphaCO
    line : float64 array
        Face-on CO(1-0) intensity [K km/s].
    sigma_atom : float64 array or None
        Atomic gas with helium, face-on.
    given : mapping of str to float64 array
        All other inputs by name; ``oh`` is always there.

    Returns
    -------
    Molecular

    Raises
    ------
    KeyError
        If an input is missing.

    Notes
    -----
    With M = alpha(T) L, T = B + M and k = L d alpha / dT: dM = (alpha dL + k dB) / (1 - k).
    Where L < 0, T = B and dM = alpha dL + k dB.
    """
    inputs = dict(given)
    negative: NDArray[np.bool_] | None = None
    per_atom: Array | None = None
    damping: Array | float = 1.0
    if record.is_self_consistent:
        if sigma_atom is None or "sigma_star" not in inputs:
            absent = "sigma_star" if sigma_atom is not None else "a map of HI"
            raise KeyError(f"record {record.key!r} needs {absent}")
        inputs["sigma_total"] = _total(record, line, sigma_atom, inputs)
    alpha = record(inputs)
    per_star = np.asarray(alpha * line * record.log_slope("sigma_star", inputs))
    if record.is_self_consistent:
        negative = np.asarray(line < 0)
        k = alpha * line * record.log_slope("sigma_total", inputs)
        damping = np.where(negative, 1.0, 1.0 - k)
        per_atom = k / damping
        per_star = (per_star + k) / damping
    needs_stars = {"sigma_star", "sigma_total"} & set(record.needs)
    return Molecular(
        alpha_co=alpha,
        per_line=alpha / damping,
        per_atom=per_atom,
        per_star=per_star if needs_stars else None,
        negative_co=negative,
        outside_range=record.outside({**inputs, "z_prime": z_prime(inputs["oh"])}),
    )


def _total(record: AlphaCO, line: Array, sigma_atom: Array, inputs: Mapping[str, Array]) -> Array:
    """Solve for the total surface density, block by block so that a block stays in the cache."""
    base = sigma_atom + inputs["sigma_star"]
    fixed = {name: inputs[name] for name in record.needs if name in inputs}
    shape = np.broadcast_shapes(base.shape, line.shape, *(a.shape for a in fixed.values()))
    flat_base, flat_line = (np.broadcast_to(a, shape).reshape(-1) for a in (base, line))
    flat = {
        name: array.reshape(-1) if array.size == 1 else np.broadcast_to(array, shape).reshape(-1)
        for name, array in fixed.items()
    }
    total = np.empty(flat_base.shape)
    for start in range(0, total.size, BLOCK):
        part = slice(start, start + BLOCK)
        block = {name: a if a.size == 1 else a[part] for name, a in flat.items()}
        total[part] = _solve(record, flat_base[part], flat_line[part], block)
    return total.reshape(shape)


def _solve(record: AlphaCO, base: Array, line: Array, inputs: Mapping[str, Array]) -> Array:
    def alpha(total: Array) -> Array:
        return record({**inputs, "sigma_total": total})

    def log_slope(total: Array) -> Array | float:
        return record.log_slope("sigma_total", {**inputs, "sigma_total": total})

    return solve_total(base, line, alpha, log_slope)

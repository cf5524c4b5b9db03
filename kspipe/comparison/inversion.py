"""Without CO: the gas whose atomic part, by a relation, is the HI that is seen."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.comparison.residuals import Known, Residuals, compared, prediction_noise
from kspipe.conversions import Surface
from kspipe.kernels.noise import total_error
from kspipe.kernels.rootfind import bisect
from kspipe.maps.skymap import Flag
from kspipe.relations import LAWS, Law, Prediction

__all__ = ["Inversion", "invert_atomic", "predict_from_atomic"]

Array = NDArray[np.float64]
Ints = NDArray[np.int32]

# Amounts of gas that are tried, from the HI itself upwards: roots nearer to each other than a step
# of 0.025 dex are not told apart.
STEP_DEX: Final = 0.025
MOST_GAS_MSUN_PC2: Final = 1e5


@dataclass(frozen=True)
class Inversion:
    """Amounts of gas that have the observed atomic part.

    Attributes
    ----------
    n_roots : (ny, nx) int32 array
        0 where there is more HI than the relation leaves atomic in any amount of gas, or none.
    lowest, highest : (ny, nx) float64 array
        Smallest and largest of the amounts [Msun/pc2, with helium]; NaN where there is none.
    """

    n_roots: Ints
    lowest: Array
    highest: Array


def invert_atomic(
    law: str, inputs: Mapping[str, Array], parameters: Mapping[str, float]
) -> Inversion:
    """Solve Sigma_atom = (1 - f_mol) Sigma_gas for Sigma_gas in every pixel.

    Parameters
    ----------
    law : str
        Key of a relation that predicts a molecular fraction of ``sigma_gas``.
    inputs : mapping of str to float64 array
        ``sigma_gas`` holds the atomic gas [Msun/pc2, with helium].
    parameters : mapping of str to float

    Returns
    -------
    Inversion

    Raises
    ------
    ValueError
        If the relation predicts no molecular fraction of all gas.

    Notes
    -----
    Amounts from the atomic gas up to 1e5 Msun/pc2 are tried in steps of 0.025 dex, and each change
    of sign is halved to rounding.
    """
    relation = LAWS.get(law)
    if not relation.has_fraction or relation.gas != "sigma_gas":
        raise ValueError(f"relation {law!r} predicts no molecular fraction of all gas")
    shape = np.broadcast_shapes(*(np.shape(inputs[n]) for n in relation.takes(inputs)))
    flat = {n: np.broadcast_to(inputs[n], shape).reshape(-1) for n in relation.takes(inputs)}
    atom = flat["sigma_gas"]
    usable = np.flatnonzero((atom > 0) & np.isfinite(atom))
    n_roots = np.zeros(atom.shape, dtype=np.int32)
    lowest, highest = np.full(atom.shape, np.nan), np.full(atom.shape, np.nan)
    if usable.size:
        part = {name: values[usable] for name, values in flat.items()}
        n_roots[usable], lowest[usable], highest[usable] = _roots(relation, part, parameters)
    return Inversion(n_roots.reshape(shape), lowest.reshape(shape), highest.reshape(shape))


def _roots(
    relation: Law, inputs: Mapping[str, Array], parameters: Mapping[str, float]
) -> tuple[Ints, Array, Array]:
    atom = inputs["sigma_gas"]

    def surplus(gas: Array) -> Array:
        """Atomic part of an amount of gas, less what is seen."""
        fraction = relation.predict({**inputs, "sigma_gas": gas}, parameters, slopes=False).f_mol
        return (1.0 - np.asarray(fraction)) * gas - atom

    n_steps = int(np.ceil(np.log10(MOST_GAS_MSUN_PC2 / np.min(atom)) / STEP_DEX)) + 1
    n_roots = np.zeros(atom.shape, dtype=np.int32)
    brackets = {end: (np.full(atom.shape, np.nan), np.full(atom.shape, np.nan)) for end in (0, 1)}
    # All gas atomic is the exact answer where nothing is molecular.
    before, at_before = atom, surplus(atom)
    exact = at_before == 0.0
    n_roots[exact] = 1
    for low, high in brackets.values():
        low[exact] = high[exact] = atom[exact]
    for step in range(1, n_steps + 1):
        gas = atom * 10.0 ** (STEP_DEX * step)
        at_gas = surplus(gas)
        crossed = (np.sign(at_before) * np.sign(at_gas) < 0) & (gas <= MOST_GAS_MSUN_PC2)
        for end, (low, high) in brackets.items():
            new = crossed & ((n_roots == 0) | (end == 1))
            low[new], high[new] = before[new], gas[new]
        n_roots[crossed] += 1
        before, at_before = gas, at_gas
    ends = [np.where(n_roots > 0, bisect(surplus, *pair), np.nan) for pair in brackets.values()]
    return n_roots, ends[0], ends[1]


def predict_from_atomic(
    inputs: Mapping[str, Known],
    sfr: Surface,
    flags: Ints,
    law: str,
    parameters: Mapping[str, float],
) -> tuple[Residuals, Inversion]:
    """Predict star formation from HI alone, at the smallest amount of gas that fits.

    Parameters
    ----------
    inputs, sfr, flags, law, parameters
        As in `predict_residuals`; ``sigma_gas`` is the atomic gas.

    Returns
    -------
    residuals : Residuals
        Flagged ``no_solution`` where there is no root and ``several_roots`` where there are more.
        Errors are first order.
    inversion : Inversion

    Notes
    -----
    With h = (1 - f) Sigma the gas moves with the HI by 1 / h', and with another input u by
    -h_u / h'.
    """
    relation = LAWS.get(law)
    taken = {name: inputs[name] for name in relation.takes(inputs)}
    values = {name: known.value for name, known in taken.items()}
    inversion = invert_atomic(law, values, parameters)
    gas = inversion.lowest
    at_root = relation.predict({**values, "sigma_gas": gas}, parameters)
    by_gas = {p: slopes["sigma_gas"] for p, slopes in at_root.derivatives.items()}
    with np.errstate(invalid="ignore", divide="ignore"):
        rise = 1.0 - np.asarray(at_root.f_mol) - gas * by_gas["f_mol"]
        moved = {
            name: (1.0 if name == "sigma_gas" else gas * slope) / rise
            for name, slope in at_root.derivatives["f_mol"].items()
        }
        slopes = {
            product: {
                name: by_gas[product] * moved[name] + (0.0 if name == "sigma_gas" else slope)
                for name, slope in found.items()
            }
            for product, found in at_root.derivatives.items()
        }
    prediction = Prediction(
        at_root.sigma_sfr, at_root.f_mol, slopes, at_root.outside_range, at_root.no_solution
    )
    noise = prediction_noise(prediction, taken)
    error = np.broadcast_to(total_error(noise), sfr.value.shape)
    several = np.where(inversion.n_roots > 1, int(Flag.SEVERAL_ROOTS), 0).astype(np.int32)
    residuals = compared(prediction, sfr, noise, error, flags | several, n_integrated=0)
    return residuals, inversion

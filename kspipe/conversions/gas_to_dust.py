"""Gas from dust: records of the gas-to-dust ratio, and a joint fit of it with alpha_CO."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.record import Range, Record
from kspipe.core.constants import HELIUM_FACTOR, OH_SOLAR
from kspipe.core.registry import Registry

__all__ = ["CIRCULARITY", "GAS_TO_DUST", "GasToDust", "JointFit", "fit_alpha_co_and_gas_to_dust"]

Array = NDArray[np.float64]

CIRCULARITY: Final = (
    "gas that is made of dust follows dust by assumption, so that a prediction by dust shielding "
    "is held against its own input"
)


@dataclass(frozen=True, kw_only=True)
class GasToDust(Record):
    """Mass of all gas, with helium, over that of dust, as straight lines in 12 + log10(O/H).

    Attributes
    ----------
    lines : tuple of (float, float)
        log10 of the ratio at 8.69, and what it rises by where 12 + log10(O/H) falls by one; one
        line, or that above and that below `break_at`.
    break_at : float
        12 + log10(O/H); minus infinity where there is one line.
    oh_scale : str or None
    """

    lines: tuple[tuple[float, float], ...]
    break_at: float = -np.inf
    oh_scale: str | None = None

    def __call__(self, oh: Array) -> Array:
        """Evaluate; NaN stays NaN."""
        below_solar = OH_SOLAR - np.asarray(oh, dtype=float)
        values = [zero + slope * below_solar for zero, slope in self.lines]
        log_ratio = values[0]
        if len(values) == 2:
            log_ratio = np.where(np.asarray(oh) > self.break_at, values[0], values[1])
        return np.asarray(10.0**log_ratio)


GAS_TO_DUST = Registry[GasToDust]("gas-to-dust record")

_NOTE = (
    "Of whole galaxies, with a scatter of about 0.37 dex; within a galaxy dust grows with density, "
    f"too. Beware: {CIRCULARITY}."
)
for _key, _label, _formula, _lines, _break in (
    (
        "remyruyer2014_linear",
        "slope 1",
        "log10 G/D = 2.21 + 1.00 (8.69 - OH)",
        ((2.21, 1.00),),
        -np.inf,
    ),
    (
        "remyruyer2014_power",
        "slope free",
        "log10 G/D = 2.21 + 2.02 (8.69 - OH)",
        ((2.21, 2.02),),
        -np.inf,
    ),
    (
        "remyruyer2014_broken",
        "broken",
        "log10 G/D = 2.21 + 1.00 (8.69 - OH) above OH = 8.10, 0.96 + 3.10 (8.69 - OH) below",
        ((2.21, 1.00), (0.96, 3.10)),
        8.10,
    ),
):
    GAS_TO_DUST.add(
        GasToDust(
            key=_key,
            label=f"G/D, Remy-Ruyer et al. 2014, {_label}",
            cite="remyruyer2014",
            where="Table 1, alpha_CO by metallicity",
            formula=_formula,
            certainty="from memory",
            ranges=(Range("OH", 7.1, 9.1, "oh"),),
            scatter_dex=0.37,
            helium_factor=HELIUM_FACTOR,
            note=f"{_NOTE} The paper counts 1.38 for helium.",
            lines=_lines,
            break_at=_break,
        )
    )
GAS_TO_DUST.add(
    GasToDust(
        key="leroy2011",
        label="G/D, Leroy et al. 2011",
        cite="leroy2011",
        where="the fit to five galaxies (equation number not confirmed)",
        formula="log10 G/D = 9.4 - 0.85 OH",
        certainty="from memory",
        ranges=(Range("OH", 8.0, 8.8, "oh"),),
        helium_factor=HELIUM_FACTOR,
        note=f"The Local Group. Beware: {CIRCULARITY}.",
        lines=((9.4 - 0.85 * OH_SOLAR, 0.85),),
    )
)


@dataclass(frozen=True)
class JointFit:
    """alpha_CO and gas-to-dust ratio for which that ratio scatters least.

    Attributes
    ----------
    alpha_co, alpha_co_error : float
        Msun/pc2 per K km/s of CO(1-0); the error is from drawing samples again.
    gas_to_dust : float
        Median over the samples.
    scatter_dex : float
        Of log10 of the ratio, standard deviation by the median deviation.
    trials_alpha_co, trials_scatter_dex : float64 array
        What was tried.
    is_bounded : bool
        Whether the least scatter lies inside the range tried, and not at one of its ends.
    """

    alpha_co: float
    alpha_co_error: float
    gas_to_dust: float
    scatter_dex: float
    trials_alpha_co: Array
    trials_scatter_dex: Array
    is_bounded: bool


# A normal deviate's standard deviation over its median absolute deviation.
_SIGMA_PER_MAD: Final = 1.4826


def fit_alpha_co_and_gas_to_dust(
    sigma_dust_msun_pc2: Array,
    sigma_atom_msun_pc2: Array,
    ico_face_on_k_kms: Array,
    rng: np.random.Generator,
    *,
    lowest: float = 0.1,
    highest: float = 100.0,
    n_trials: int = 301,
    n_bootstrap: int = 100,
) -> JointFit:
    """Find the alpha_CO for which the gas-to-dust ratio is most nearly one number.

    Parameters
    ----------
    sigma_dust_msun_pc2, sigma_atom_msun_pc2 : (n,) float64 array
        Face-on, at one beam, of independent samples of a region; gas with helium.
    ico_face_on_k_kms : (n,) float64 array
        CO(1-0) times cos i.
    rng : numpy.random.Generator
    lowest, highest : float
        Range of alpha_CO tried, evenly in its logarithm.
    n_trials, n_bootstrap : int

    Returns
    -------
    JointFit

    Raises
    ------
    ValueError
        If fewer than 10 samples have dust, or CO is the same share of the gas in all of them.

    Notes
    -----
    The region must span a range of CO over HI, else every alpha_CO does as well; `is_bounded`
    and the error tell. Beware: gas that is made of dust follows dust by assumption.

    References
    ----------
    .. [1] leroy2011, and sandstrom2013, who minimise the scatter of log10 of the ratio.
    """
    usable = np.isfinite(sigma_dust_msun_pc2 + sigma_atom_msun_pc2 + ico_face_on_k_kms)
    usable &= np.where(usable, sigma_dust_msun_pc2, 0) > 0
    if usable.sum() < 10:
        raise ValueError(f"{int(usable.sum())} samples have dust, gas and CO; expected at least 10")
    dust, atom, line = (
        a[usable] for a in (sigma_dust_msun_pc2, sigma_atom_msun_pc2, ico_face_on_k_kms)
    )
    if np.ptp(line / dust) == 0.0:
        raise ValueError("CO is the same share of the dust everywhere: no alpha_CO can be told")
    trials = np.geomspace(lowest, highest, n_trials)
    gas = (atom + trials[:, None] * line) / dust
    log_ratio = np.log10(np.where(gas > 0, gas, np.nan))
    scatter = _scatter(log_ratio)
    best = int(np.nanargmin(scatter))
    again = []
    for _ in range(n_bootstrap):
        sample = rng.integers(0, dust.size, dust.size)
        again.append(trials[int(np.nanargmin(_scatter(log_ratio[:, sample])))])
    return JointFit(
        alpha_co=float(trials[best]),
        alpha_co_error=float(np.std(again)),
        gas_to_dust=float(10.0 ** np.nanmedian(log_ratio[best])),
        scatter_dex=float(scatter[best]),
        trials_alpha_co=trials,
        trials_scatter_dex=scatter,
        is_bounded=0 < best < n_trials - 1,
    )


def _scatter(log_ratio: Array) -> Array:
    """Scatter of each row; where gas is not positive a trial is no fit."""
    middle = np.median(log_ratio, axis=1, keepdims=True)
    return np.asarray(_SIGMA_PER_MAD * np.median(np.abs(log_ratio - middle), axis=1))

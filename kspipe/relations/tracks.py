"""A relation as curves against its gas, without any map."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kspipe.core.errors import Fault, InputError
from kspipe.relations.inputs import LAW_INPUTS
from kspipe.relations.law import LAWS, Prediction

__all__ = ["Track", "track", "tracks"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Track:
    """One curve of a relation.

    Attributes
    ----------
    law : str
        Key of the relation.
    at : dict of str to float
        Inputs besides the gas, the same along the curve.
    parameters : dict of str to float
        All of them.
    gas : (n,) float64 array
        Surface density of the gas that the relation takes [Msun/pc2, with helium].
    prediction : Prediction
        Along it, with derivatives and flags.
    """

    law: str
    at: dict[str, float]
    parameters: dict[str, float]
    gas: Array
    prediction: Prediction


def track(
    law: str,
    sigma_gas_msun_pc2: Array,
    oh: float,
    parameters: Mapping[str, float] | None = None,
    others: Mapping[str, float] | None = None,
) -> Array:
    """Sigma_SFR [Msun/yr/kpc2] of a relation along its gas at one metallicity.

    Parameters
    ----------
    law : str
        Key of the relation.
    sigma_gas_msun_pc2 : (n,) float64 array
        With helium; molecular where the relation takes molecular gas.
    oh : float
        12 + log10(O/H).
    parameters : mapping of str to float, optional
    others : mapping of str to float, optional
        Further inputs, by the names of `LAW_INPUTS`.

    Returns
    -------
    (n,) float64 array
    """
    relation = LAWS.get(law)
    sigma = np.asarray(sigma_gas_msun_pc2, dtype=float)
    fixed = {"oh": oh, **(others or {})}
    inputs = {name: np.asarray(value) for name, value in fixed.items()} | {relation.gas: sigma}
    return relation.predict(inputs, parameters, slopes=False).sigma_sfr


def tracks(
    law: str,
    sigma_gas_msun_pc2: Array,
    at: Mapping[str, Sequence[float]],
    parameters: Mapping[str, float] | None = None,
) -> list[Track]:
    """Curves of a relation for all combinations of its other inputs.

    Parameters
    ----------
    law : str
        Key of the relation.
    sigma_gas_msun_pc2 : (n,) float64 array
        As in `track`.
    at : mapping of str to sequence of float
        Values of the other inputs: ``oh``, ``g0``, ``rho_sd`` [Msun/pc3], ``sigma_star``
        [Msun/pc2], ``omega`` [km/s/kpc], ``beta``.
    parameters : mapping of str to float, optional

    Raises
    ------
    InputError
        If the relation is not known, an input or a parameter that it needs is absent, or one is
        given that it does not take.
    """
    if law not in LAWS:
        raise InputError(Fault("tracks", LAWS.unknown(law)))
    relation = LAWS.get(law)
    try:
        filled = relation.filled(parameters or {})
    except KeyError as error:
        meaning = "; ".join(f"{p.name}: {p.meaning}" for p in relation.parameters)
        raise InputError(Fault(law, str(error.args[0]), f"parameters are {meaning}")) from None
    others = [name for name in relation.needs if name != relation.gas]
    missing = [name for name in others if not len(at.get(name, ()))]
    strange = [name for name in at if name not in (*others, *relation.optional)]
    if missing:
        what = ", ".join(f"{name} ({LAW_INPUTS[name].sentence})" for name in missing)
        raise InputError(Fault(law, f"needs {what}", "give at least one value of each"))
    if strange:
        takes = ", ".join([*others, *relation.optional]) or "nothing but gas"
        raise InputError(Fault(law, f"does not take {', '.join(strange)}", f"it takes {takes}"))
    gas = np.asarray(sigma_gas_msun_pc2, dtype=float)
    made = []
    for values in itertools.product(*at.values()):
        fixed = {name: float(value) for name, value in zip(at, values, strict=True)}
        inputs = {name: np.asarray(value) for name, value in fixed.items()}
        prediction = relation.predict({**inputs, relation.gas: gas}, parameters)
        made.append(Track(law, fixed, filled, gas, prediction))
    return made

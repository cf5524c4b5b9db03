"""The whole shelf, conversions and relations: list a family, explain a record."""

from __future__ import annotations

from typing import Final

import numpy as np

from kspipe.conversions import shelf as conversions
from kspipe.core.citations import cite
from kspipe.core.errors import Fault, InputError, nearest
from kspipe.relations import LAW_INPUTS, LAWS, Law

__all__ = ["RELATIONS", "explain", "list_family", "worked_parameters"]

RELATIONS: Final = "relations"

# Parameters that must be typed, for the worked number of help.
_WORKED_WITH: Final = {
    "clumping": 5.0,
    "depletion_time": 2.0,
    "density": 100.0,
    "scale": 1000.0,
    "scale_height": 300.0,
    "scale_length": 3.0,
}


def list_family(family: str | None = None) -> list[tuple[str, ...]]:
    """Rows of text: key, formula, paper, certainty; or, without a family, all families.

    Raises
    ------
    InputError
        If there is no such family.
    """
    if family is None:
        return [*conversions.list_family(), (RELATIONS, f"{len(LAWS.keys())} records")]
    if family == RELATIONS:
        return [
            (law.key, law.formula, cite(law.cite).short, law.certainty)
            for law in sorted(LAWS, key=lambda law: law.key)
        ]
    if family not in conversions.FAMILIES:
        known = [*conversions.FAMILIES, RELATIONS]
        raise InputError(Fault("family", f'no family is called "{family}"', nearest(family, known)))
    return conversions.list_family(family)


def explain(key: str) -> list[tuple[str, str]]:
    """Everything a record states about itself, and a worked number, as names with text.

    Raises
    ------
    InputError
        If there is no such record.
    """
    if key in LAWS:
        return [(name, text) for name, text in _relation_rows(LAWS.get(key)) if text]
    known = [record.key for family in conversions.FAMILIES.values() for record in family]
    if key not in known:
        near = nearest(key, [*known, *LAWS.keys()])
        raise InputError(Fault("key", f'no record is called "{key}"', near))
    return conversions.explain(key)


def _relation_rows(law: Law) -> list[tuple[str, str]]:
    doubt = {"verified": "compared with a text of the source, or recomputed"}
    ranges = [f"{name} {low:g} to {high:g}" for name, (low, high) in law.ranges.items()]
    directions = [
        f"{'rises' if d.sign > 0 else 'falls'} with {LAW_INPUTS[name].symbol} "
        f"{d.where or 'everywhere'}"
        for name, d in law.monotonic.items()
    ]
    optional = [f"{LAW_INPUTS[name].sentence} (where given)" for name in law.optional]
    predicts = "Sigma_SFR and the molecular fraction" if law.has_fraction else "Sigma_SFR"
    return [
        ("record", f"{law.key}, of the relations"),
        ("formula", law.formula),
        ("predicts", f"{predicts}; a {law.statistic}"),
        ("needs", "; ".join([*(LAW_INPUTS[name].sentence for name in law.needs), *optional])),
        ("parameters", "; ".join(_parameter_texts(law))),
        ("range", "; ".join(ranges)),
        ("direction", "; ".join(directions)),
        ("kinks", law.kinks),
        ("scatter", f"{law.scatter_dex:g} dex" if law.scatter_dex else ""),
        ("helium", f"formula takes gas x {law.helium_factor:g} over hydrogen; converted from 1.36"),
        ("Z' = 1", law.metallicity_anchor),
        ("field unit", law.field_unit or ""),
        ("IMF", law.imf if law.imf == "Kroupa" else f"{law.imf}; converted to Kroupa"),
        ("paper", f"{cite(law.cite)}; {law.where}"),
        ("certainty", doubt.get(law.certainty, "coefficients from memory of the paper")),
        ("note", law.note),
        ("worked number", _worked(law)),
    ]


def _parameter_texts(law: Law) -> list[str]:
    texts = []
    for parameter in law.parameters:
        default = "must be typed" if parameter.default is None else f"{parameter.default:g}"
        if parameter.name in law.one_of:
            default = "one of these must be typed"
        texts.append(f"{parameter.name} ({default}): {parameter.meaning}")
    return texts


def worked_parameters(law: Law) -> dict[str, float]:
    """Values for all parameters that must be typed."""
    needed = {p.name for p in law.parameters if p.default is None}
    return {n: value for n, value in _WORKED_WITH.items() if n in needed}


def _worked(law: Law) -> str:
    given = worked_parameters(law)
    inputs = {name: np.asarray(LAW_INPUTS[name].typical) for name in law.needs}
    made = law.predict(inputs, given, slopes=False)
    at = [f"{LAW_INPUTS[n].symbol} = {LAW_INPUTS[n].typical:g}" for n in law.needs]
    at += [f"{name} = {value:g}" for name, value in given.items()]
    fraction = "" if made.f_mol is None else f", f_mol = {float(made.f_mol):.5g}"
    return f"{', '.join(at)}: Sigma_SFR = {float(made.sigma_sfr):.5g} Msun/yr/kpc2{fraction}"

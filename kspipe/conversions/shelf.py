"""The whole shelf: list a family, explain a record with a number that it computes itself."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Final

import numpy as np

from kspipe.conversions.alpha_co import ALPHA_CO, AlphaCO
from kspipe.conversions.atomic import ATOMIC, AtomicGas
from kspipe.conversions.balmer import BALMER, Balmer
from kspipe.conversions.extinction import EXTINCTION, Extinction
from kspipe.conversions.gas_to_dust import GAS_TO_DUST, GasToDust
from kspipe.conversions.imf import IMFS, Imf, imf_factor
from kspipe.conversions.inputs import INPUTS
from kspipe.conversions.line_ratio import LINE_RATIO, LineRatio
from kspipe.conversions.mass_metallicity import MASS_METALLICITY, MassMetallicity
from kspipe.conversions.mass_to_light import MASS_TO_LIGHT, MassToLight
from kspipe.conversions.nitrogen import NITROGEN, Nitrogen
from kspipe.conversions.record import Record
from kspipe.conversions.star_formation import STAR_FORMATION, StarFormation
from kspipe.conversions.stars import STARS, Stars
from kspipe.conversions.strong_lines import STRONG_LINES, StrongLine
from kspipe.conversions.total_infrared import TOTAL_INFRARED, TotalInfrared
from kspipe.core.citations import cite
from kspipe.core.errors import Fault, InputError, nearest
from kspipe.core.registry import Registry
from kspipe.core.tracers import TRACERS

__all__ = ["FAMILIES", "explain", "find", "list_family"]

FAMILIES: Final[dict[str, Registry[Any]]] = {
    "alpha_co": ALPHA_CO,
    "atomic": ATOMIC,
    "balmer": BALMER,
    "extinction": EXTINCTION,
    "gas_to_dust": GAS_TO_DUST,
    "imf": IMFS,
    "line_ratio": LINE_RATIO,
    "mass_metallicity": MASS_METALLICITY,
    "mass_to_light": MASS_TO_LIGHT,
    "nitrogen": NITROGEN,
    "star_formation": STAR_FORMATION,
    "stars": STARS,
    "strong_lines": STRONG_LINES,
    "total_infrared": TOTAL_INFRARED,
}

# Intensities of the disc of a nearby spiral, for worked numbers.
_TYPICAL: Final = {
    "FUV": 0.05,
    "NUV": 0.07,
    "Halpha": 1e-5,
    "24um": 1.0,
    "70um": 20.0,
    "160um": 40.0,
    "TIR": 1e-3,
    "1.4GHz": 0.1,
    "3.6um": 0.5,
    "W1": 0.5,
}


def find(key: str) -> tuple[str, Record]:
    """Find a record in any family.

    Returns
    -------
    family : str
    record : Record

    Raises
    ------
    InputError
        With the nearest known key.
    """
    for name, family in FAMILIES.items():
        if key in family:
            return name, family.get(key)
    known = [record.key for family in FAMILIES.values() for record in family]
    raise InputError(Fault("key", f'no record is called "{key}"', nearest(key, known)))


def list_family(family: str | None = None) -> list[tuple[str, ...]]:
    """Rows of text: key, formula, paper, certainty; or, without a family, all families.

    Raises
    ------
    InputError
        If there is no such family.
    """
    if family is None:
        return [(name, f"{len(shelf.keys())} records") for name, shelf in FAMILIES.items()]
    if family not in FAMILIES:
        raise InputError(
            Fault("family", f'no family is called "{family}"', nearest(family, FAMILIES))
        )
    return [
        (record.key, record.formula, cite(record.cite).short, record.certainty)
        for record in sorted(FAMILIES[family], key=lambda record: str(record.key))
    ]


def explain(key: str) -> list[tuple[str, str]]:
    """Everything a record states about itself, and a worked number, as names with text.

    Raises
    ------
    InputError
        If there is no such record.
    """
    family, record = find(key)
    needs = [INPUTS[name].meaning for name in getattr(record, "needs", ())]
    needs += [f"map of {tracer}" for tracer in getattr(record, "tracers", ())]
    doubt = {"verified": "compared with a text of the source, or recomputed"}
    rows = [
        ("record", f"{record.key}, of the family {family}"),
        ("formula", record.formula),
        ("needs", "; ".join(needs)),
        ("range", "; ".join(str(allowed) for allowed in record.ranges)),
        ("scatter", f"{record.scatter_dex:g} dex" if record.scatter_dex else ""),
        ("helium", f"included, x {record.helium_factor:g}" if record.helium_factor else ""),
        ("IMF", record.imf or ""),
        ("constants", getattr(record, "family", "")),
        ("metallicity scale", getattr(record, "oh_scale", None) or ""),
        ("E(B-V) scale", getattr(record, "ebv_scale", "")),
        ("paper", f"{cite(record.cite)}; {record.where}"),
        ("certainty", doubt.get(record.certainty, "coefficients from memory of the paper")),
        ("note", record.note),
        ("worked number", _WORKED[family](record)),
    ]
    return [(name, text) for name, text in rows if text]


def _typical(names: tuple[str, ...]) -> tuple[dict[str, Any], str]:
    given = {name: np.asarray(INPUTS[name].typical) for name in names}
    return given, ", ".join(f"{INPUTS[name].symbol} = {INPUTS[name].typical:g}" for name in names)


def _alpha_co(record: AlphaCO) -> str:
    given, text = _typical(record.needs)
    value = float(record({"oh": np.asarray(INPUTS["oh"].typical), **given}))
    return f"{text + ': ' if text else ''}alpha_CO = {value:.5g} Msun/pc2 per K km/s"


def _atomic(record: AtomicGas) -> str:
    return f"I_HI = 100 K km/s, face-on: {100 * record.msun_pc2_per_k_kms:.5g} Msun/pc2"


def _balmer(record: Balmer) -> str:
    excess, factor = (float(f(np.asarray(4.0))) for f in (record.excess, record.factor))
    return f"Halpha/Hbeta = 4: E(B-V) = {excess:.5g} mag, Halpha x {factor:.5g}"


def _mass_to_light(record: MassToLight) -> str:
    ratio, _ = record.solve(np.asarray(1e-11))
    direct = float(record.at(np.asarray(-10.6)))
    return (
        f"log10 sSFR = -10.6: M/L = {direct:.5g}; solved for 1e-11 /yr at M/L = 1: "
        f"{float(ratio):.5g}"
    )


def _nitrogen(record: Nitrogen) -> str:
    return f"M_B = -20: [NII]6583/Halpha = {record(-20.0):.5g}"


def _total_infrared(record: TotalInfrared) -> str:
    value = sum(weight * _TYPICAL[band] for band, weight in record.weights.items())
    given = ", ".join(f"I_{band} = {_TYPICAL[band]:g} MJy/sr" for band in record.bands)
    return f"{given}: I_TIR = {value:.5g} erg/s/cm2/sr"


def _extinction(record: Extinction) -> str:
    mags = {t: float(record.magnitudes(t, np.asarray(0.05))) for t in record.coefficients}
    return "E(B-V) = 0.05: " + ", ".join(f"A_{t} = {a:.5g} mag" for t, a in mags.items())


def _gas_to_dust(record: GasToDust) -> str:
    return f"OH = 8.5: G/D = {float(record(np.asarray(8.5))):.5g}"


def _imf(record: Imf) -> str:
    others = [imf.name for imf in IMFS if imf.name != record.name]
    return ", ".join(
        f"1 Msun/yr for {other} is {imf_factor(other, record.name):.5g} for {record.name}"
        for other in others
    )


def _line_ratio(record: LineRatio) -> str:
    given, text = _typical(record.needs)
    value = float(record(given.get("sigma_sfr", np.asarray(0.0)))[0])
    ratio = f"{record.upper} over {record.lower} = {value:.5g}"
    return f"{text}: {ratio}" if text else ratio


def _mass_metallicity(record: MassMetallicity) -> str:
    return f"log10 M_star = 10: OH = {float(record(np.asarray(10.0))):.5g}"


def _star_formation(record: StarFormation) -> str:
    value, given = 0.0, []
    for tracer, coefficient in record.coefficients.items():
        value += coefficient * _TYPICAL[tracer] ** record.powers.get(tracer, 1.0)
        given.append(f"I_{tracer} = {_TYPICAL[tracer]:g} {TRACERS[tracer].unit}")
    return f"{', '.join(given)}, face-on: Sigma_SFR = {value:.5g} Msun/yr/kpc2"


def _stars(record: Stars) -> str:
    intensity = _TYPICAL[record.tracer]
    value = record.msun_pc2_per_intensity * 0.5 * intensity
    return f"I = {intensity:g} MJy/sr, M/L = 0.5, face-on: {value:.5g} Msun/pc2"


def _strong_lines(record: StrongLine) -> str:
    given, text = _typical(record.needs)
    return f"{text}: OH = {float(record(given)):.5g}"


_WORKED: Final[dict[str, Callable[[Any], str]]] = {
    "alpha_co": _alpha_co,
    "atomic": _atomic,
    "balmer": _balmer,
    "extinction": _extinction,
    "gas_to_dust": _gas_to_dust,
    "imf": _imf,
    "line_ratio": _line_ratio,
    "mass_metallicity": _mass_metallicity,
    "mass_to_light": _mass_to_light,
    "nitrogen": _nitrogen,
    "star_formation": _star_formation,
    "stars": _stars,
    "strong_lines": _strong_lines,
    "total_infrared": _total_infrared,
}

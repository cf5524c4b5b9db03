"""From painted surface densities back to what the maps would show."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions import (
    ALPHA_CO,
    ATOMIC,
    LINE_RATIO,
    STAR_FORMATION,
    STARS,
    Choices,
    Parameters,
    imf_factor,
)
from kspipe.conversions.corrections import apply, terms_of
from kspipe.core.tracers import CO_LINES
from kspipe.simulate import PaintedDisc

__all__ = ["DUST_SHARE", "intensities_of"]

Array = NDArray[np.float64]

# Share of the star formation that a hybrid sees in the infrared; any share would do, as the sum
# is what the calibration gives back.
DUST_SHARE = 0.6
_DUST = ("24um", "22um")


def intensities_of(
    disc: PaintedDisc, tracers: list[str], choices: Choices, parameters: Parameters
) -> dict[str, Array]:
    """Invert the records on the painted plane, before any beam.

    Parameters
    ----------
    disc : PaintedDisc
    tracers : list of str
        Maps to make.
    choices : Choices
    parameters : Parameters
        Numbers; ``oh`` is taken from the painted disc.

    Returns
    -------
    dict of str to (n, n) float64 array
        By tracer, canonical units.

    Raises
    ------
    KeyError
        If no record of the choices says how bright a tracer is.

    Notes
    -----
    alpha_CO that depends on the gas is evaluated where the gas is known: nothing is solved for.
    """
    cos_i = float(np.asarray(parameters.cos_i))
    made: dict[str, Array] = {}
    if "HI" in tracers:
        per_hi = ATOMIC.get(choices.atomic).msun_pc2_per_k_kms
        made["HI"] = disc.sigma_atom / (per_hi * cos_i * np.asarray(parameters.hi_opacity))
    for line in CO_LINES:
        if line in tracers and choices.alpha_co is not None:
            made[line] = _line(disc, choices, parameters) / cos_i
    if choices.stars is not None:
        record = STARS.get(choices.stars)
        per_star = record.msun_pc2_per_intensity * np.asarray(parameters.mass_to_light)
        made[record.tracer] = disc.sigma_star / (per_star * cos_i)
    made |= _star_formation(disc, tracers, choices, parameters, cos_i)
    unknown = [tracer for tracer in tracers if tracer not in made]
    if unknown:
        raise KeyError(f"no record of the recipe says how bright {', '.join(unknown)} is")
    return made


def _line(disc: PaintedDisc, choices: Choices, parameters: Parameters) -> Array:
    """Face-on intensity of the CO line used."""
    inputs = {
        "oh": disc.oh,
        "sigma_star": disc.sigma_star,
        "sigma_total": disc.sigma_star + disc.sigma_atom + disc.sigma_mol,
    }
    for name in ("ms_offset_dex", "g0_over_n", "alpha_co"):
        value = getattr(parameters, name)
        if value is not None:
            inputs[name] = np.asarray(value, dtype=float)
    if choices.alpha_co is None:
        raise KeyError("no record of the recipe says how bright CO is")
    alpha = ALPHA_CO.get(choices.alpha_co)(inputs)
    ratio: Array = np.asarray(parameters.line_ratio, dtype=float)
    if choices.line_ratio is not None:
        record = LINE_RATIO.get(choices.line_ratio)
        ratio = record(disc.sigma_sfr)[0] if record.needs else np.asarray(record.value)
    return np.asarray(disc.sigma_mol * ratio / alpha)


def _star_formation(
    disc: PaintedDisc,
    tracers: list[str],
    choices: Choices,
    parameters: Parameters,
    cos_i: float,
) -> dict[str, Array]:
    """Intensities whose calibrated sum is the painted star formation."""
    record = STAR_FORMATION.get(choices.calibration)
    imf = imf_factor(str(record.imf), choices.imf)
    terms = list(terms_of(record, dict.fromkeys(tracers, np.zeros(1)), choices, parameters))
    names = [term.tracer for term in terms]
    if len(set(names)) < len(names) or any(term.decrement for term in terms):
        raise KeyError(
            f"record {record.key!r} with a total of infrared bands or a Balmer decrement has more "
            "maps than terms: a sky is not painted for it"
        )
    has_dust = any(name in _DUST for name in names) and len(names) > 1
    made = {}
    for term in terms:
        tracer = term.tracer
        share = 1.0
        if has_dust:
            share = DUST_SHARE if tracer in _DUST else (1.0 - DUST_SHARE) / (len(names) - 1)
        face_on = share * disc.sigma_sfr / (record.coefficients[tracer] * imf)
        power = record.powers.get(tracer)
        if power is not None:
            face_on = face_on ** (1.0 / power)
        made[term.source] = face_on / apply(np.asarray(cos_i), term.corrections)
    return made

"""What a stored intensity is corrected for before a star-formation calibration takes it."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.balmer import BALMER, Balmer
from kspipe.conversions.choices import Choices, Parameters
from kspipe.conversions.extinction import EXTINCTION
from kspipe.conversions.nitrogen import NII_DOUBLET
from kspipe.conversions.star_formation import StarFormation
from kspipe.conversions.total_infrared import TOTAL_INFRARED

__all__ = ["Correction", "Decrement", "Term", "apply", "terms_of"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Correction:
    """One factor.

    Attributes
    ----------
    name : str
        For the chain of a pixel.
    divides : bool
        Whether the intensity is divided by it.
    value : float64 array
    """

    name: str
    divides: bool
    value: Array

    @property
    def factor(self) -> Array:
        """What the intensity is multiplied by."""
        return 1.0 / self.value if self.divides else self.value


@dataclass(frozen=True)
class Decrement:
    """Attenuation of H-alpha from a map of H-beta.

    Attributes
    ----------
    record : Balmer
    corrections : tuple of Correction
        Of H-beta.
    """

    record: Balmer
    corrections: tuple[Correction, ...]


@dataclass(frozen=True)
class Term:
    """One tracer of a calibration, and the map that stands for it.

    Attributes
    ----------
    tracer, source : str
        What the calibration takes, and the map that is there.
    corrections : tuple of Correction
    decrement : Decrement or None
    """

    tracer: str
    source: str
    corrections: tuple[Correction, ...]
    decrement: Decrement | None = None


def apply(factor: Array, corrections: tuple[Correction, ...]) -> Array:
    """Multiply a factor by what corrects its intensity, in order."""
    for correction in corrections:
        value = correction.value
        factor = factor / value if correction.divides else factor * value
    return factor


def terms_of(
    record: StarFormation,
    intensity: Mapping[str, Array],
    choices: Choices,
    parameters: Parameters,
) -> Iterator[Term]:
    """Say which map stands for each tracer of a calibration, and what corrects its intensity.

    Raises
    ------
    KeyError
        If a tracer is absent.
    """
    for tracer in record.coefficients:
        if tracer == "TIR" and "TIR" not in intensity and choices.total_infrared is not None:
            for band, weight in TOTAL_INFRARED.get(choices.total_infrared).weights.items():
                term = _term(band, record, intensity, choices, parameters)
                part = Correction(f"TIR per {band}", False, np.asarray(weight))
                yield replace(term, tracer="TIR", corrections=(*term.corrections, part))
            continue
        yield _term(tracer, record, intensity, choices, parameters)


def _term(
    tracer: str,
    record: StarFormation,
    intensity: Mapping[str, Array],
    choices: Choices,
    parameters: Parameters,
) -> Term:
    corrections = _foreground(tracer, choices, parameters)
    if tracer == "Halpha":
        nii = np.asarray(parameters.nii_ratio, dtype=float)
        corrections.append(Correction("1 + both [NII]/Halpha", True, 1.0 + NII_DOUBLET * nii))
    state = choices.finished.get(tracer)
    if state is not None and state.face_on:
        cos_i = np.asarray(parameters.cos_i, dtype=float)
        corrections.append(Correction("cos i, already there", True, cos_i))
    stands_in = tracer == "24um" and "24um" not in intensity
    if stands_in:
        as_24um = np.asarray(parameters.as_24um, dtype=float)
        corrections.append(Correction("24 um over 22 um", False, as_24um))
    source = "22um" if stands_in else tracer
    if source not in intensity:
        raise KeyError(f"record {record.key!r} needs {tracer}, which is not among the maps")
    if source in parameters.diffuse:
        kept = 1.0 - np.asarray(parameters.diffuse[source], dtype=float)
        corrections.append(Correction("1 - diffuse fraction", False, kept))
    if tracer in record.thermal:
        thermal = np.asarray(parameters.thermal_fraction, dtype=float)
        corrections.append(Correction("thermal fraction", False, thermal))
    decrement = None
    if tracer == "Halpha" and choices.balmer is not None:
        if "Hbeta" not in intensity:
            raise KeyError("the Balmer decrement needs Hbeta, which is not among the maps")
        hbeta = tuple(_foreground("Hbeta", choices, parameters))
        decrement = Decrement(BALMER.get(choices.balmer), hbeta)
    return Term(tracer, source, tuple(corrections), decrement)


def _foreground(tracer: str, choices: Choices, parameters: Parameters) -> list[Correction]:
    if tracer not in choices.extinction:
        return []
    magnitudes = EXTINCTION.get(choices.extinction[tracer]).magnitudes(
        tracer, np.asarray(parameters.ebv, dtype=float), choices.ebv_scale
    )
    return [Correction("foreground extinction", False, 10.0 ** (0.4 * magnitudes))]

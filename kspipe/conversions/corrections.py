"""What a stored intensity is corrected for before a star-formation calibration takes it."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.choices import Choices, Parameters
from kspipe.conversions.extinction import EXTINCTION
from kspipe.conversions.star_formation import StarFormation

__all__ = ["NII_DOUBLET", "Corrections", "apply", "corrections_of"]

Array = NDArray[np.float64]
# Whether a correction divides, and what it is.
Corrections = list[tuple[bool, Array]]

# [NII]6548 + [NII]6583 over [NII]6583: transition probabilities give 6583/6548 = 3.05 (common
# practice).
NII_DOUBLET = 1.0 + 1.0 / 3.05


def apply(factor: Array, corrections: Corrections) -> Array:
    """Multiply a factor by what corrects its intensity, in order."""
    for divides, correction in corrections:
        factor = factor / correction if divides else factor * correction
    return factor


def corrections_of(
    record: StarFormation,
    intensity: Mapping[str, Array],
    choices: Choices,
    parameters: Parameters,
) -> dict[str, tuple[str, Corrections]]:
    """Say which map stands for each tracer of a calibration, and what corrects its intensity.

    Raises
    ------
    KeyError
        If a tracer is absent.
    """
    found = {}
    for tracer in record.coefficients:
        corrections: Corrections = []
        if tracer in choices.extinction:
            extinction = EXTINCTION.get(choices.extinction[tracer])
            magnitudes = extinction.magnitudes(
                tracer, np.asarray(parameters.ebv, dtype=float), choices.ebv_scale
            )
            corrections.append((False, 10.0 ** (0.4 * magnitudes)))
        if tracer == "Halpha":
            nii = np.asarray(parameters.nii_ratio, dtype=float)
            corrections.append((True, 1.0 + NII_DOUBLET * nii))
        state = choices.finished.get(tracer)
        if state is not None and state.face_on:
            corrections.append((True, np.asarray(parameters.cos_i, dtype=float)))
        stands_in = tracer == "24um" and "24um" not in intensity
        if stands_in:
            corrections.append((False, np.asarray(parameters.as_24um, dtype=float)))
        source = "22um" if stands_in else tracer
        if source not in intensity:
            raise KeyError(f"record {record.key!r} needs {tracer}, which is not among the maps")
        found[tracer] = (source, corrections)
    return found

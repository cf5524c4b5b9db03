"""Noise measured on the blank sky of a map."""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.core.errors import Fault, MapError
from kspipe.kernels.geometry import beam_area
from kspipe.kernels.statistics import clipped_scatter
from kspipe.maps.skymap import NoiseTerm, SkyMap

__all__ = ["measure_noise"]

# Fewer independent beams than this do not give a noise to 10 %.
LEAST_BEAMS: Final = 50.0
MOST_ZEROS: Final = 0.01


def measure_noise(sky: SkyMap, is_outside: NDArray[np.bool_], *, correlated: bool) -> SkyMap:
    """Measure the noise of a map on the sky outside the galaxy.

    The scatter of the pixels about their mean, those beyond 4 sigma left out again and again, is
    taken as the error of every pixel.

    Parameters
    ----------
    sky : SkyMap
        On its own pixels.
    is_outside : (ny, nx) bool array
        Where no emission of the galaxy is expected.
    correlated : bool
        Whether the noise has the correlation of the beam; else none.

    Returns
    -------
    SkyMap
        With one noise term and a line of history that says from how much sky it comes.

    Raises
    ------
    MapError
        If too little blank sky is left, or the blank sky is masked (exactly zero).
    """
    where = f"maps.{sky.name}.noise"
    blank = sky.value[is_outside & np.isfinite(sky.value)]
    area = abs(float(np.linalg.det(sky.wcs.pixel_scale_matrix))) * 3600.0**2
    beams = blank.size * area / max(beam_area(sky.beam_arcsec2), area)
    if beams < LEAST_BEAMS:
        raise MapError(
            Fault(
                where,
                f"the blank sky outside the galaxy holds {beams:.0f} beams; at least "
                f"{LEAST_BEAMS:.0f} are needed to measure the noise",
                "state the noise as a number with its unit or as a file",
            )
        )
    share = float(np.mean(blank == 0.0))
    if share > MOST_ZEROS:
        raise MapError(
            Fault(
                where,
                f"{share:.1%} of the blank sky is exactly zero: a masked map shows no noise",
                "state the noise as a number with its unit or as a file",
            )
        )
    level, sigma = clipped_scatter(blank)
    if not sigma > 0 or not math.isfinite(sigma):
        raise MapError(Fault(where, f"the scatter of the blank sky is {sigma:g}"))
    correlation = sky.beam_arcsec2 if correlated else np.zeros((2, 2))
    term = NoiseTerm(sky.name, np.full(sky.value.shape, sigma), correlation)
    step = (
        f"noise measured: {sigma:.6g} {sky.unit} from {blank.size} pixels ({beams:.0f} beams) of "
        f"blank sky, mean level there {level:.3g}; correlated like: "
        + ("beam" if correlated else "none")
    )
    return sky.with_step(step, noise=(term,), facts={**sky.facts, "noise": step})

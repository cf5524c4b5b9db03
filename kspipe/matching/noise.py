"""Noise measured on the blank sky of a map: its level, and how pixels go together."""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.core.errors import Fault, MapError
from kspipe.kernels.correlation import SampledCorrelation, measure_correlation
from kspipe.kernels.geometry import beam_area, beam_axes
from kspipe.kernels.statistics import clipped_scatter
from kspipe.maps.header import pixel_jacobian
from kspipe.maps.skymap import NoiseTerm, SkyMap

__all__ = ["measure_noise", "measure_noise_correlation"]

Array = NDArray[np.float64]

# Fewer independent beams than this do not give a noise to 10 %.
LEAST_BEAMS: Final = 50.0
MOST_ZEROS: Final = 0.01
# A measured correlation reaches this many beams, and takes this many beams of sky.
CORRELATION_REACH_BEAMS: Final = 8.0
LEAST_BEAMS_FOR_CORRELATION: Final = 200.0
# Pixels beyond this many sigma are emission or stars, not noise.
N_SIGMA: Final = 4.0


def measure_noise(
    sky: SkyMap,
    is_outside: NDArray[np.bool_],
    *,
    correlated: bool,
    relative: Array | None = None,
) -> SkyMap:
    """Measure the noise of a map on the sky outside the galaxy.

    The scatter of the pixels about their mean, those beyond 4 sigma left out again and again, is
    taken as the error of every pixel, times the relative noise where its shape is known.

    Parameters
    ----------
    sky : SkyMap
        On its own pixels.
    is_outside : (ny, nx) bool array
        Where no emission of the galaxy is expected.
    correlated : bool
        Whether the noise has the correlation of the beam; else none.
    relative : (ny, nx) float64 array, optional
        How the noise varies over the field.

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
    shape = np.ones(sky.value.shape) if relative is None else relative
    blank = is_outside & np.isfinite(sky.value) & np.isfinite(shape)
    beams = _beams(sky, blank)
    if beams < LEAST_BEAMS:
        raise MapError(
            Fault(
                where,
                f"the blank sky outside the galaxy holds {beams:.0f} beams; at least "
                f"{LEAST_BEAMS:.0f} are needed to measure the noise",
                "state the noise as a number with its unit or as a file",
            )
        )
    values = sky.value[blank]
    share = float(np.mean(values == 0.0))
    if share > MOST_ZEROS:
        raise MapError(
            Fault(
                where,
                f"{share:.1%} of the blank sky is exactly zero: a masked map shows no noise",
                "state the noise as a number with its unit or as a file",
            )
        )
    level, sigma = clipped_scatter(values / shape[blank], n_sigma=N_SIGMA)
    if not sigma > 0 or not math.isfinite(sigma):
        raise MapError(
            Fault(
                where,
                f"the scatter of the blank sky is {sigma:g}: the map shows no noise",
                "state the noise as a number with its unit or as a file",
            )
        )
    correlation = sky.beam_arcsec2 if correlated else np.zeros((2, 2))
    term = NoiseTerm(sky.name, sigma * shape, correlation)
    step = (
        f"noise measured: {sigma:.6g} {sky.unit}"
        + ("" if relative is None else " where its shape is one")
        + f" from {values.size} pixels ({beams:.0f} beams) of blank sky, mean level there "
        f"{level:.3g}; correlated like: " + ("beam" if correlated else "none")
    )
    return sky.with_step(step, noise=(term,), facts={**sky.facts, "noise": step})


def measure_noise_correlation(sky: SkyMap, is_outside: NDArray[np.bool_]) -> SkyMap:
    """Measure the autocorrelation of the noise on blank sky, sidelobes included.

    Parameters
    ----------
    sky : SkyMap
        With one noise term, whose level is known.
    is_outside : (ny, nx) bool array
        Where no emission of the galaxy is expected.

    Returns
    -------
    SkyMap
        With the measured correlation in its noise term.

    Raises
    ------
    MapError
        If there is too little blank sky for a correlation.
    """
    where = f"maps.{sky.name}.noise.correlated"
    first, *others = sky.noise
    with np.errstate(invalid="ignore", divide="ignore"):
        unit_noise = sky.value / first.sigma
    # One round of clipping suffices: the level is known already.
    used = is_outside & (np.abs(unit_noise) < N_SIGMA + 1)
    beams = _beams(sky, used)
    if beams < LEAST_BEAMS_FOR_CORRELATION:
        raise MapError(
            Fault(
                where,
                f"the blank sky outside the galaxy holds {beams:.0f} beams; at least "
                f"{LEAST_BEAMS_FOR_CORRELATION:.0f} are needed to measure a correlation",
                'type correlated = "beam" or "none"',
            )
        )
    ny, nx = sky.value.shape
    jacobian = pixel_jacobian(sky.wcs, (nx - 1) / 2, (ny - 1) / 2)
    pixel = math.sqrt(abs(float(np.linalg.det(jacobian))))
    fwhm_pix = beam_axes(sky.beam_arcsec2)[0] / pixel
    reach = min(max(8, math.ceil(CORRELATION_REACH_BEAMS * fwhm_pix)), min(ny, nx) // 4)
    values = measure_correlation(np.where(used, unit_noise, 0.0), used, reach)
    area = float(values.sum()) * pixel**2
    step = (
        f"noise correlation measured on {beams:.0f} beams of blank sky to lags of "
        f"{reach * pixel:.4g} arcsec; it sums over {area:.4g} arcsec2 "
        f"({area / (2 * beam_area(sky.beam_arcsec2)):.2f} of what the beam would give)"
    )
    term = NoiseTerm(
        first.source,
        first.sigma,
        first.correlation_arcsec2,
        SampledCorrelation(values, jacobian),
    )
    return sky.with_step(step, noise=(term, *others))


def _beams(sky: SkyMap, used: NDArray[np.bool_]) -> float:
    """How many beams a set of pixels holds."""
    area = abs(float(np.linalg.det(sky.wcs.pixel_scale_matrix))) * 3600.0**2
    return float(used.sum()) * area / max(beam_area(sky.beam_arcsec2), area)

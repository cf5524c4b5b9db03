"""The common beam: which widths are legal, and the smallest of them."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from kspipe.core.errors import BeamError, Fault
from kspipe.kernels.geometry import (
    beam_axes,
    beam_covariance,
    pixel_covariance,
    subtract_covariance,
)
from kspipe.maps import MapSource

__all__ = ["choose_beam", "effective_beam", "smallest_legal_fwhm"]

Array = NDArray[np.float64]


def effective_beam(source: MapSource) -> Array:
    """Beam covariance that the stored numbers really have, detector pixel included [arcsec2]."""
    if source.request.averages_pixels:
        return source.beam_arcsec2 + pixel_covariance(source.jacobian_arcsec)
    return source.beam_arcsec2


def smallest_legal_fwhm(source: MapSource) -> float:
    """Narrowest round beam that a map can be brought to [arcsec], rounded up at 0.01."""
    return math.ceil(beam_axes(effective_beam(source))[0] * 100 - 1e-6) / 100


def choose_beam(sources: list[MapSource], fwhm_arcsec: float | None) -> Array:
    """Covariance of the round target beam.

    Parameters
    ----------
    sources : list of MapSource
    fwhm_arcsec : float or None
        The recipe's beam; None for the smallest that is legal for all maps.

    Returns
    -------
    (2, 2) float64 array
        [arcsec2]

    Raises
    ------
    BeamError
        If a map's beam is wider than the target; names each such map and the smallest legal beam.
    """
    smallest = max(smallest_legal_fwhm(source) for source in sources)
    fwhm = smallest if fwhm_arcsec is None else fwhm_arcsec
    target = beam_covariance(fwhm, fwhm, 0.0)
    faults = [
        Fault(
            "grid.beam",
            f"{fwhm:.4g} arcsec is sharper than maps.{source.request.name} ({source.image}, beam "
            f"{source.beam} from {source.beam.origin}"
            + (", plus its pixels" if source.request.averages_pixels else "")
            + ")",
            f'type grid.beam = "{smallest:.2f} arcsec" or wider: the smallest legal beam for '
            "these maps",
        )
        for source in sources
        if subtract_covariance(target, effective_beam(source)) is None
    ]
    if faults:
        raise BeamError(*faults)
    return target

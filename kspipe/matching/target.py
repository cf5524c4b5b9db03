"""The common beam: which widths are legal, and the smallest of them."""

from __future__ import annotations

import math
import warnings

import numpy as np
from numpy.typing import NDArray

from kspipe.core.errors import BeamError, Fault, KspipeWarning
from kspipe.kernels.geometry import (
    beam_axes,
    beam_covariance,
    pixel_covariance,
    subtract_covariance,
)
from kspipe.maps import MapSource
from kspipe.maps.psf_records import NARROW, psf_record
from kspipe.matching.psf import matching_kernel, smallest_psf_fwhm

__all__ = ["choose_beam", "effective_beam", "smallest_legal_fwhm"]

Array = NDArray[np.float64]


def effective_beam(source: MapSource) -> Array:
    """Beam covariance that the stored numbers really have, detector pixel included [arcsec2]."""
    if source.request.averages_pixels:
        return source.beam_arcsec2 + pixel_covariance(source.jacobian_arcsec)
    return source.beam_arcsec2


def smallest_legal_fwhm(source: MapSource) -> float:
    """Narrowest round beam that a map can be brought to [arcsec], rounded up at 0.01."""
    if source.psf is not None:
        return smallest_psf_fwhm(
            source.psf, source.jacobian_arcsec, averages_pixels=source.request.averages_pixels
        )
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
        If the target is sharper than a map's beam or PSF image; names each such map and the
        smallest legal beam.

    Warns
    -----
    KspipeWarning
        If a PSF known not to be Gaussian is read as one, and the target is narrower than twice
        its core: wings and rings then stay in sight.
    """
    fwhm = fwhm_arcsec
    if fwhm is None:
        fwhm = max(smallest_legal_fwhm(source) for source in sources)
    target = beam_covariance(fwhm, fwhm, 0.0)
    sharper = {
        source.request.name: why
        for source in sources
        if (why := _why_not(source, target)) is not None
    }
    if sharper:
        smallest = max(smallest_legal_fwhm(source) for source in sources)
        raise BeamError(
            *(
                Fault(
                    "grid.beam",
                    f"{fwhm:.4g} arcsec is sharper than maps.{name} {why}",
                    f'type grid.beam = "{smallest:.2f} arcsec" or wider: the smallest legal beam '
                    "for these maps",
                )
                for name, why in sharper.items()
            )
        )
    _warn_of_wings(sources, fwhm)
    return target


def _why_not(source: MapSource, target_arcsec2: Array) -> str | None:
    """What makes a map wider than the target; None where it is not."""
    if source.psf is not None:
        why = matching_kernel(
            source.psf,
            target_arcsec2,
            source.jacobian_arcsec,
            averages_pixels=source.request.averages_pixels,
        ).why_not
        return f"({source.image}, {source.psf.origin}): {why}" if why else None
    if subtract_covariance(target_arcsec2, effective_beam(source)) is not None:
        return None
    pixels = ", plus its pixels" if source.request.averages_pixels else ""
    return f"({source.image}, beam {source.beam} from {source.beam.origin}{pixels})"


def _warn_of_wings(sources: list[MapSource], fwhm_arcsec: float) -> None:
    """Say where the final beam does not hide that a PSF is no Gaussian."""
    for source in sources:
        name, core = source.request.name, beam_axes(source.beam_arcsec2)[0]
        record = psf_record(source.request.tracer, source.beam_arcsec2)
        # A target of exactly twice the core is not narrower, however it was rounded.
        is_narrow = fwhm_arcsec < NARROW * core * (1.0 - 1e-6)
        if source.psf is None and record is not None and is_narrow:
            warnings.warn(
                f"maps.{name}: {record}. A final beam of {fwhm_arcsec:.4g} arcsec, less than "
                f"{NARROW:g} x {core:.4g} arcsec, leaves what is outside the core in sight around "
                f'each source: type maps.{name}.psf = "file.fits" or a wider grid.beam',
                KspipeWarning,
                stacklevel=3,
            )

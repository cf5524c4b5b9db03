"""Stars and distant galaxies beyond the galaxy's disc: marks of the sky in two maps at once."""

from __future__ import annotations

import math
import warnings
from typing import Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from kspipe.kernels.geometry import beam_axes, transform_covariance
from kspipe.maps.skymap import SkyMap

__all__ = ["PointOffset", "point_offset"]

Array = NDArray[np.float64]

# A source must stand out by so many errors in both maps, to be placed to a tenth of a beam.
LEAST_SNR: Final = 8.0
# Fewer do not tell their scatter.
LEAST_SOURCES: Final = 5
MOST_SOURCES: Final = 200
# What a beam and a tilted plane leave of an unresolved source, of its peak, beside noise.
UNRESOLVED: Final = 0.05
# Two sources this many beams apart are not the same one.
LARGEST_OFFSET_BEAMS: Final = 0.5
ITERATIONS: Final = 12


class PointOffset(NamedTuple):
    """Mean displacement of point sources against those of a reference.

    Attributes
    ----------
    x, y : float
        [pixel]
    covariance : (2, 2) float64 array
        Of the mean, from the scatter of the sources [pixel2].
    n : int
        Sources.
    """

    x: float
    y: float
    covariance: Array
    n: int


class _Source(NamedTuple):
    x: float
    y: float
    peak: float
    is_point: bool


def point_offset(
    sky: SkyMap, reference: SkyMap, is_outside: NDArray[np.bool_], jacobian_arcsec: Array
) -> PointOffset | None:
    """Measure a displacement on the point sources that two maps share.

    Parameters
    ----------
    sky, reference : SkyMap
        On one grid, with one beam.
    is_outside : (ny, nx) bool array
        Beyond the disc, where a source is none of the galaxy's.
    jacobian_arcsec : (2, 2) float64 array
        Sky offset (east, north) per pixel step (x, y).

    Returns
    -------
    PointOffset or None
        None where fewer than five sources stand out in both.
    """
    beam_pix2 = transform_covariance(sky.beam_arcsec2, jacobian_arcsec)
    fwhm_pix = beam_axes(beam_pix2)[0]
    found = []
    for x, y in _peaks(reference, is_outside, fwhm_pix):
        pair = [_fit(one, x, y, beam_pix2, fwhm_pix) for one in (reference, sky)]
        if all(source is not None and source.is_point for source in pair):
            found.append((pair[1].x - pair[0].x, pair[1].y - pair[0].y))  # type: ignore[union-attr]
    offsets = np.array(found).reshape(-1, 2)
    offsets = offsets[np.hypot(*offsets.T) < LARGEST_OFFSET_BEAMS * fwhm_pix]
    if len(offsets) < LEAST_SOURCES:
        return None
    mean = offsets.mean(axis=0)
    return PointOffset(
        float(mean[0]), float(mean[1]), np.cov(offsets.T) / len(offsets), len(offsets)
    )


def _peaks(sky: SkyMap, is_outside: NDArray[np.bool_], fwhm_pix: float) -> list[tuple[int, int]]:
    """Brightest local maxima beyond the disc, in units of the noise."""
    # Its imports cost half a second, and a map without sky beyond the disc needs none.
    from photutils.detection import find_peaks  # noqa: PLC0415

    with np.errstate(invalid="ignore", divide="ignore"):
        snr = sky.value / sky.error
    usable = is_outside & np.isfinite(snr)
    box = 2 * math.ceil(fwhm_pix) + 1
    with warnings.catch_warnings():
        # That there is none is an answer.
        warnings.simplefilter("ignore")
        table = find_peaks(
            np.where(usable, snr, 0.0), LEAST_SNR, box_size=box, n_peaks=MOST_SOURCES
        )
    if table is None:
        return []
    return [(int(row["x_peak"]), int(row["y_peak"])) for row in table]


def _fit(sky: SkyMap, x: int, y: int, beam_pix2: Array, fwhm_pix: float) -> _Source | None:
    """Fit the beam over a tilted plane about a position, by Gauss and Newton's steps.

    None at the map's edge, beside blanks, or where the fit leaves.
    """
    half = math.ceil(1.2 * fwhm_pix)
    rows, columns = slice(y - half, y + half + 1), slice(x - half, x + half + 1)
    data = sky.value[max(rows.start, 0) : rows.stop, max(columns.start, 0) : columns.stop]
    side = 2 * half + 1
    if data.shape != (side, side) or not np.isfinite(data).all():
        return None
    v, u = np.indices(data.shape, dtype=float) - half
    (a, b), (_, d) = np.linalg.inv(beam_pix2)
    at = np.zeros(2)
    plane = np.stack([np.ones(data.size), u.ravel(), v.ravel()])
    for _ in range(ITERATIONS):
        du, dv = u - at[0], v - at[1]
        beam = np.exp(-0.5 * (a * du**2 + 2 * b * du * dv + d * dv**2))
        design = np.vstack(
            [beam.ravel(), (beam * (a * du + b * dv)).ravel(), (beam * (b * du + d * dv)).ravel()]
        )
        design = np.vstack([design, plane])
        solution = np.linalg.lstsq(design.T, data.ravel(), rcond=None)[0]
        peak = solution[0]
        if not peak > 0:
            return None
        step = np.clip(solution[1:3] / peak, -1.0, 1.0)
        at = at + step
        if np.hypot(*at) > half:
            return None
        if np.max(np.abs(step)) < 1e-4:
            break
    left = data - (solution @ design).reshape(data.shape)
    noise = float(sky.error[y, x])
    rms = float(np.std(left))
    is_point = rms < math.hypot(UNRESOLVED * peak, 1.5 * noise) and peak > LEAST_SNR * noise
    return _Source(x + float(at[0]), y + float(at[1]), float(peak), bool(is_point))

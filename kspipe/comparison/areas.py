"""Sums over areas of the disc: rings, and apertures on peaks."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from kspipe.comparison.samples import LinearSamples
from kspipe.conversions import Surface
from kspipe.kernels.noise import sum_covariance

__all__ = ["PeakApertures", "Rings", "area_mean", "peak_apertures", "ring_means"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

# Peaks count from this many times the local error on.
_PEAK_SNR: Final = 5.0


@dataclass(frozen=True)
class Rings:
    """Mean surface densities of rings in the disc.

    Attributes
    ----------
    edges_kpc : (n + 1,) float64 array
    n_pixels : (n,) int array
    samples : LinearSamples
        One per ring, with the errors of correlated means.
    """

    edges_kpc: Array
    n_pixels: NDArray[np.intp]
    samples: LinearSamples


@dataclass(frozen=True)
class PeakApertures:
    """Gas over star formation where one of them peaks.

    Attributes
    ----------
    on : {"gas", "star formation"}
    n_peaks, n_pixels : int
    ratio_dex, error_dex : float
        log10 of the gas per star formation in the apertures over that of the whole area.
    message : str
        Why there is no number.
    """

    on: str
    n_peaks: int
    n_pixels: int
    ratio_dex: float
    error_dex: float
    message: str = ""


def area_mean(
    gas: Surface, sfr: Surface, area: Mask, jacobian_arcsec: Array
) -> tuple[float, float, float, float, float]:
    """Means of x and y over an area, their variances and covariance."""
    n = int(area.sum())
    pairs = ((gas, gas), (sfr, sfr), (gas, sfr))
    var_x, var_y, cov = (
        sum_covariance(a.noise, b.noise, area, jacobian_arcsec) / n**2 for a, b in pairs
    )
    return float(gas.value[area].mean()), float(sfr.value[area].mean()), var_x, var_y, cov


def ring_means(
    gas: Surface,
    sfr: Surface,
    used: Mask,
    radius_kpc: Array,
    width_kpc: float,
    jacobian_arcsec: Array,
) -> Rings:
    """Average over rings of equal width from the centre out."""
    last = math.ceil(float(radius_kpc[used].max()) / width_kpc)
    edges = width_kpc * np.arange(last + 1)
    which = np.floor(radius_kpc / width_kpc)
    rows, counts, kept = [], [], [0.0]
    for ring in range(last):
        area = used & (which == ring)
        if not area.any():
            continue
        rows.append(area_mean(gas, sfr, area, jacobian_arcsec))
        counts.append(int(area.sum()))
        kept.append(float(edges[ring + 1]))
    columns = np.array(rows).T
    return Rings(np.array(kept), np.array(counts, dtype=np.intp), LinearSamples(*columns))


def peak_apertures(
    gas: Surface, sfr: Surface, used: Mask, fwhm_pix: float, jacobian_arcsec: Array
) -> tuple[PeakApertures, PeakApertures]:
    """Gas per star formation in beams on peaks of gas, and on peaks of star formation.

    Parameters
    ----------
    gas, sfr : Surface
    used : (ny, nx) bool array
    fwhm_pix : float
        Diameter of an aperture [pixel].
    jacobian_arcsec : (2, 2) float64 array

    Returns
    -------
    on_gas, on_sfr : PeakApertures

    Notes
    -----
    The choice of peaks decides the answer where regions evolve: gas peaks select what has not
    formed stars yet, peaks of star formation what has used up its gas. Neither is given alone.

    References
    ----------
    .. [1] Schruba et al. 2010, ApJ 722, 1699.
    """
    return (
        _on_peaks("gas", gas, gas, sfr, used, fwhm_pix, jacobian_arcsec),
        _on_peaks("star formation", sfr, gas, sfr, used, fwhm_pix, jacobian_arcsec),
    )


def _on_peaks(
    on: str,
    tracer: Surface,
    gas: Surface,
    sfr: Surface,
    used: Mask,
    fwhm_pix: float,
    jacobian_arcsec: Array,
) -> PeakApertures:
    # Its imports cost half a second.
    from photutils.detection import find_peaks  # noqa: PLC0415

    threshold = np.where(used, _PEAK_SNR * tracer.error, np.inf)
    box = 2 * math.ceil(fwhm_pix / 2) + 1
    image = np.where(used, tracer.value, 0.0)
    bright = used & (image > threshold)
    peaks = find_peaks(image, threshold, box_size=box, mask=~used) if bright.any() else None
    if peaks is None:
        return PeakApertures(on, 0, 0, math.nan, math.nan, f"no peak above {_PEAK_SNR:g} sigma")
    y, x = np.nonzero(used)
    places = np.column_stack([peaks["x_peak"], peaks["y_peak"]]).astype(float)
    near = cKDTree(places).query(np.column_stack([x, y]))[0] <= fwhm_pix / 2
    area = np.zeros_like(used)
    area[y[near], x[near]] = True
    inside = area_mean(gas, sfr, area, jacobian_arcsec)
    whole = area_mean(gas, sfr, used, jacobian_arcsec)
    n_peaks, n_pixels = len(peaks), int(area.sum())
    if min(inside[0], inside[1], whole[0], whole[1]) <= 0:
        return PeakApertures(on, n_peaks, n_pixels, math.nan, math.nan, "a sum is not positive")
    ratio = inside[0] / inside[1] / (whole[0] / whole[1])
    relative = [
        v[2] / v[0] ** 2 + v[3] / v[1] ** 2 - 2.0 * v[4] / (v[0] * v[1]) for v in (inside, whole)
    ]
    error = math.sqrt(max(sum(relative), 0.0)) / math.log(10.0)
    return PeakApertures(on, n_peaks, n_pixels, math.log10(ratio), error)

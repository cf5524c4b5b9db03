"""One instrument: its beam, its pixels and its noise, on a painted plane."""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from astropy.wcs import WCS
from numpy.typing import NDArray

from kspipe.kernels.geometry import position_offsets, transform_covariance
from kspipe.maps.header import sky_of_pixels
from kspipe.maps.skymap import NoiseTerm
from kspipe.simulate.blur import SAMPLING_SIGMA, blur, sample
from kspipe.simulate.sky import FinePlane

__all__ = ["add_noise", "look", "look_at"]

Array = NDArray[np.float64]

# Two Gauss-Legendre nodes a side have the mean and the variance of a pixel's box exactly.
_NODE: Final = 0.5 / math.sqrt(3.0)
# The plane is averaged over blocks before it is smoothed, down to so many pixels per sigma.
PIXELS_PER_SIGMA: Final = 3.0


def look(
    image: Array,
    plane: FinePlane,
    wcs: WCS,
    shape: tuple[int, int],
    centre_deg: tuple[float, float],
    beam_arcsec2: Array,
    *,
    averages_pixels: bool,
) -> Array:
    """See a painted plane with a beam, at the pixels of a map.

    Parameters
    ----------
    image : (n, n) float64 array
        Intensity on the plane.
    plane : FinePlane
    wcs : astropy.wcs.WCS
    shape : (int, int)
        Rows and columns of the map.
    centre_deg : (float, float)
        Of the plane, ICRS.
    beam_arcsec2 : (2, 2) float64 array
        Covariance on (east, north), without the pixel.
    averages_pixels : bool
        Whether the map holds means over its pixels rather than values at their centres.

    Returns
    -------
    (ny, nx) float64 array

    Raises
    ------
    ValueError
        If the plane's pixels are too wide for the beam.
    """
    seen, coarse = _through_beam(image, plane, beam_arcsec2)
    y, x = np.indices(shape, dtype=float)
    nodes = (-_NODE, _NODE) if averages_pixels else (0.0,)
    total = np.zeros(shape)
    for dx in nodes:
        for dy in nodes:
            lon, lat = sky_of_pixels(wcs, x + dx, y + dy)
            total += sample(seen, *coarse.pixels_of(*position_offsets(lon, lat, *centre_deg)))
    return total / len(nodes) ** 2


def look_at(
    image: Array, plane: FinePlane, east_arcsec: Array, north_arcsec: Array, beam_arcsec2: Array
) -> Array:
    """See a painted plane with a beam at given offsets from its centre."""
    seen, coarse = _through_beam(image, plane, beam_arcsec2)
    return sample(seen, *coarse.pixels_of(east_arcsec, north_arcsec))


def _through_beam(image: Array, plane: FinePlane, beam_arcsec2: Array) -> tuple[Array, FinePlane]:
    """Smooth by what the beam leaves once blocks of pixels and the sampling have smoothed."""
    narrowest = math.sqrt(float(np.linalg.eigvalsh(beam_arcsec2)[0])) / plane.pixel_arcsec
    # Odd, so that the centre of the plane stays the centre of a block.
    block = 2 * math.floor((narrowest / PIXELS_PER_SIGMA - 1.0) / 2.0) + 1
    coarse, means = plane, image
    if block > 1:
        coarse = FinePlane(plane.pixel_arcsec * block, 2 * math.ceil(plane.n / (2 * block)) + 1)
        margin = (coarse.n * block - plane.n) // 2
        padded = np.pad(image, margin)
        means = padded.reshape(coarse.n, block, coarse.n, block).mean(axis=(1, 3))
    # A block of points has the variance (block^2 - 1) / 12 in squared points.
    inside = (1.0 - 1.0 / block**2) / 12.0 + SAMPLING_SIGMA**2
    kernel = beam_arcsec2 / coarse.pixel_arcsec**2 - inside * np.eye(2)
    if float(np.linalg.eigvalsh(kernel)[0]) <= 0:
        raise ValueError("the plane's pixels are too wide for the beam")
    return blur(means, kernel), coarse


def add_noise(
    clean: Array,
    terms: tuple[NoiseTerm, ...],
    jacobian_arcsec: Array,
    rng: np.random.Generator,
) -> Array:
    """Add one draw of every noise term, each with its own correlation.

    Parameters
    ----------
    clean : (ny, nx) float64 array
    terms : tuple of NoiseTerm
        On the pixels of the map; not finite where nothing is observed.
    jacobian_arcsec : (2, 2) float64 array
        Sky offset (east, north) per pixel step (x, y) of the map.
    rng : numpy.random.Generator
    """
    noisy = clean
    for term in terms:
        noisy = noisy + term.sigma * _unit_noise(term, clean.shape, jacobian_arcsec, rng)
    return noisy


def _unit_noise(
    term: NoiseTerm, shape: tuple[int, ...], jacobian_arcsec: Array, rng: np.random.Generator
) -> Array:
    """Noise of unit variance with the correlation of a term."""
    if term.sampled is not None:
        return _sampled_noise(term, shape, jacobian_arcsec, rng)
    if not np.any(term.correlation_arcsec2):
        return rng.standard_normal(shape)
    cov = transform_covariance(term.correlation_arcsec2, jacobian_arcsec)
    margin = math.ceil(6.0 * math.sqrt(float(np.linalg.eigvalsh(cov)[-1])))
    white = rng.standard_normal((shape[0] + 2 * margin, shape[1] + 2 * margin))
    point = np.zeros((2 * margin + 1, 2 * margin + 1))
    point[margin, margin] = 1.0
    gain = math.sqrt(float(np.sum(blur(point, cov) ** 2)))
    inner = blur(white, cov)[margin : margin + shape[0], margin : margin + shape[1]]
    return np.asarray(inner / gain)


def _sampled_noise(
    term: NoiseTerm, shape: tuple[int, ...], jacobian_arcsec: Array, rng: np.random.Generator
) -> Array:
    """Noise whose correlation was measured: white noise under the root of its power spectrum."""
    ny, nx = (2 * n for n in shape)
    dy = np.fft.fftfreq(ny, 1.0 / ny)[:, None]
    dx = np.fft.fftfreq(nx, 1.0 / nx)[None, :]
    (ex, ey), (n_x, n_y) = jacobian_arcsec
    rho = term.correlation_at(ex * dx + ey * dy, n_x * dx + n_y * dy)
    power = np.maximum(np.fft.rfft2(rho).real, 0.0)
    # Negative power is what a measured correlation cannot have; unit variance is kept.
    drawn = np.fft.irfft2(np.fft.rfft2(rng.standard_normal((ny, nx))) * np.sqrt(power), (ny, nx))
    spectrum_sum = float(np.fft.irfft2(power, (ny, nx))[0, 0])
    return np.asarray(drawn[: shape[0], : shape[1]] / math.sqrt(spectrum_sum))

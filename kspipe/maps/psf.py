"""The point-spread function of a map as an image: its pixels on the sky, its centre, its core."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import Final

import numpy as np
import scipy.fft
from astropy.io import fits
from numpy.typing import NDArray
from scipy import ndimage

from kspipe.core.constants import DEG_ARCSEC
from kspipe.core.errors import BeamError, Fault
from kspipe.core.units import UnitReadingError, read_unit
from kspipe.kernels.geometry import beam_axes
from kspipe.maps.header import celestial_wcs, pixel_jacobian

__all__ = ["PsfImage", "read_psf"]

Array = NDArray[np.float64]

# The Gaussian core is fitted to the pixels above this share of the peak.
CORE_LEVEL: Final = 0.2
# A level at the border that would hold more of the flux than this is sky, or the image is too
# small: a diffraction pattern, falling with the third power, has twice as much beyond it.
MOST_AT_BORDER: Final = 0.05
# A PSF on pixels as coarse as this share of the map's was recorded by such pixels.
AS_COARSE: Final = 0.75
# Zeros around the image make its transform smooth enough for a cubic spline.
PADDING: Final = 3
# Cards that programs use for the side of a pixel in arcsec.
SCALE_CARDS: Final = ("PIXSCALE", "PIXELSCL", "SECPIX")


@dataclass(frozen=True)
class PsfImage:
    """A point-spread function on pixels of its own.

    Attributes
    ----------
    values : (ny, nx) float64 array
        Sum 1.
    jacobian_arcsec : (2, 2) float64 array
        Sky offset (east, north) per step of its pixels (x, y).
    centre : (float, float)
        Pixel (x, y) of the Gaussian through the core, on which a source lies.
    core_pix2 : (2, 2) float64 array
        Covariance of that Gaussian on its pixels.
    has_pixel : bool
        Whether it was recorded by the map's own detector pixels.
    origin : str
        File, and where its pixel size was read.
    """

    values: Array
    jacobian_arcsec: Array
    centre: tuple[float, float]
    core_pix2: Array
    has_pixel: bool
    origin: str

    @property
    def core_arcsec2(self) -> Array:
        """Covariance of the Gaussian through the core, on (east, north)."""
        return np.asarray(self.jacobian_arcsec @ self.core_pix2 @ self.jacobian_arcsec.T)

    @property
    def story(self) -> str:
        """One line for the history."""
        major, minor, _ = beam_axes(self.core_arcsec2)
        return f"{self.origin}: core of {major:.4g} x {minor:.4g} arcsec FWHM"

    @property
    def reach_arcsec(self) -> float:
        """Distance from the middle to the farthest edge."""
        ny, nx = self.values.shape
        steps = np.linalg.norm(self.jacobian_arcsec, axis=0)
        return float(max(nx * steps[0], ny * steps[1])) / 2.0

    def transfer(self, qx: Array, qy: Array) -> NDArray[np.complex128]:
        """Fourier transform at frequencies in cycles per pixel of the image, the centre as origin.

        Zero beyond the Nyquist frequency of the image, which holds nothing there.
        """
        spectrum, (x0, y0) = self._spectrum
        ny, nx = spectrum.shape
        found = ndimage.map_coordinates(
            spectrum, [qy * ny + ny // 2, qx * nx + nx // 2], order=3, mode="grid-wrap"
        )
        shift = np.exp(2j * math.pi * (qx * (self.centre[0] - x0) + qy * (self.centre[1] - y0)))
        inside = (np.abs(qx) <= 0.5) & (np.abs(qy) <= 0.5)
        return np.asarray(np.where(inside, found * shift, 0.0), dtype=np.complex128)

    @cached_property
    def _spectrum(self) -> tuple[NDArray[np.complex128], tuple[int, int]]:
        """Transform of the padded image, zero frequency in the middle, and its origin's pixel."""
        x0, y0 = round(self.centre[0]), round(self.centre[1])
        shape = tuple(scipy.fft.next_fast_len(PADDING * n) for n in self.values.shape)
        padded = np.zeros(shape)
        padded[: self.values.shape[0], : self.values.shape[1]] = self.values
        spectrum = scipy.fft.fft2(np.roll(padded, (-y0, -x0), axis=(0, 1)))
        return np.asarray(scipy.fft.fftshift(spectrum)), (x0, y0)


def read_psf(
    values: Array, header: fits.Header, map_jacobian_arcsec: Array, file: str, where: str
) -> PsfImage:
    """Make the point-spread function from an image and its header.

    Parameters
    ----------
    values : (ny, nx) float64 array
    header : astropy.io.fits.Header
        Tells the pixels: sky coordinates; or a pixel size, its axes then being the map's; or
        nothing, for an image on the map's pixels.
    map_jacobian_arcsec : (2, 2) float64 array
        Sky offset (east, north) per step of the map's pixels.
    file, where : str
        For the history and for messages.

    Raises
    ------
    BeamError
        If it is not a point-spread function: not finite, without a core, or not falling to zero.
    """
    _check(values, where)
    jacobian, told = _jacobian(header, values.shape, map_jacobian_arcsec, where)
    centre, core = _core(values, where)
    sides = (_side(jacobian), _side(map_jacobian_arcsec))
    return PsfImage(
        values=values / float(values.sum()),
        jacobian_arcsec=jacobian,
        centre=centre,
        core_pix2=core,
        has_pixel=sides[0] >= AS_COARSE * sides[1],
        origin=f"PSF image {file} (pixels of {sides[0]:.4g} arcsec, {told})",
    )


def _check(values: Array, where: str) -> None:
    if not np.isfinite(values).all():
        raise BeamError(Fault(where, "the PSF image has pixels without a value", "fill them"))
    total = float(values.sum())
    border = np.concatenate([values[0], values[-1], values[1:-1, 0], values[1:-1, -1]])
    at_border = abs(float(border.mean())) * values.size / total if total > 0 else math.inf
    if at_border > MOST_AT_BORDER:
        raise BeamError(
            Fault(
                where,
                f"the level at the border of the PSF image would hold {at_border:.0%} of its flux"
                if total > 0
                else f"the sum of the PSF image is {total:g}",
                "take the sky off it, or give a larger image",
            )
        )


def _side(jacobian: Array) -> float:
    return math.sqrt(abs(float(np.linalg.det(jacobian))))


def _jacobian(
    header: fits.Header, shape: tuple[int, ...], map_jacobian: Array, where: str
) -> tuple[Array, str]:
    """Sky offset per pixel of a PSF image, and where that was read."""
    kinds = [str(header.get(f"CTYPE{axis}", "")) for axis in (1, 2)]
    if any(kind.startswith(("RA", "DEC", "GLON", "GLAT", "ELON", "ELAT")) for kind in kinds):
        wcs = celestial_wcs(header, where)
        middle = (shape[1] - 1) / 2, (shape[0] - 1) / 2
        return pixel_jacobian(wcs, *middle), "from its sky coordinates"
    scale, card = _scale_arcsec(header, where)
    if scale is None:
        return map_jacobian, "those of the map"
    directions = map_jacobian / np.linalg.norm(map_jacobian, axis=0)
    return np.asarray(directions * scale), f"from {card}, along the map's axes"


def _scale_arcsec(header: fits.Header, where: str) -> tuple[tuple[float, float] | None, str]:
    """Sides of a pixel without sky coordinates [arcsec], and the card that told."""
    for first, second in (("CDELT1", "CDELT2"), ("CD1_1", "CD2_2")):
        cards = header.get(first), header.get(second, header.get(first))
        # Without sky coordinates a step of one is the standard's default, not a degree.
        if not all(isinstance(card, (int, float)) for card in cards) or cards == (1, 1):
            continue
        unit = str(header.get("CUNIT1", "deg")).strip() or "deg"
        try:
            factor = float(read_unit(unit).to("arcsec"))
        except (UnitReadingError, ValueError) as error:
            raise BeamError(
                Fault(where, f"CUNIT1 of the PSF image is {unit!r}, not an angle")
            ) from error
        return _positive((abs(cards[0]) * factor, abs(cards[1]) * factor), first, where), first
    for card in SCALE_CARDS:
        side = header.get(card)
        if isinstance(side, (int, float)):
            return _positive((float(side), float(side)), card, where), card
    return None, ""


def _positive(sides: tuple[float, float], card: str, where: str) -> tuple[float, float]:
    if not all(1e-3 < side < 2 * DEG_ARCSEC for side in sides):
        raise BeamError(
            Fault(
                where,
                f"pixels of {sides[0]:.3g} x {sides[1]:.3g} arcsec by {card} of the PSF image; "
                "expected 0.001 arcsec to 2 degrees",
                f"check {card} (CDELT counts in degrees)",
            )
        )
    return sides


def _core(values: Array, where: str) -> tuple[tuple[float, float], Array]:
    """Centre (x, y) and covariance of the Gaussian through the core, by its logarithm.

    The logarithm of a Gaussian is a paraboloid: a linear fit, each pixel with its value as its
    weight, is exact for a Gaussian wherever it lies between the pixels.
    """
    peak = np.unravel_index(int(np.argmax(values)), values.shape)
    regions, _ = ndimage.label(values > CORE_LEVEL * values[peak])
    rows, columns = np.nonzero(regions == regions[peak])
    if rows.size < 6:
        raise BeamError(
            Fault(
                where,
                f"only {rows.size} pixels of the PSF image are above {CORE_LEVEL:.0%} of its peak: "
                "it is not sampled",
                "give it on finer pixels",
            )
        )
    x, y = columns - float(peak[1]), rows - float(peak[0])
    heights = values[rows, columns]
    terms = np.column_stack([np.ones_like(x), x, y, -0.5 * x * x, -x * y, -0.5 * y * y])
    weighted = terms * heights[:, None]
    _, bx, by, cxx, cxy, cyy = np.linalg.lstsq(weighted, heights * np.log(heights), rcond=None)[0]
    curvature = np.array([[cxx, cxy], [cxy, cyy]])
    if not float(np.min(np.linalg.eigvalsh(curvature))) > 0:
        raise BeamError(Fault(where, "the PSF image has no core: it does not fall off its peak"))
    dx, dy = np.linalg.solve(curvature, [bx, by])
    centre = float(peak[1] + dx), float(peak[0] + dy)
    return centre, np.asarray(np.linalg.inv(curvature))

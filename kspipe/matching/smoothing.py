"""What brings a map's beam to the target: a Gaussian, or a kernel made for its PSF image."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import Final, Protocol

import numpy as np
from numpy.typing import NDArray

from kspipe.core.errors import BeamError, Fault
from kspipe.kernels.correlation import SampledCorrelation, interpolated_correlation
from kspipe.kernels.fourier import (
    correlated_noise_gain,
    gaussian_reach,
    gaussian_smooth,
    white_noise_gain,
)
from kspipe.kernels.geometry import (
    ROUNDING,
    beam_axes,
    pixel_covariance,
    subtract_covariance,
    transform_covariance,
)
from kspipe.kernels.sampled import kernel_noise, kernel_smooth
from kspipe.maps.header import pixel_jacobian
from kspipe.maps.skymap import NoiseTerm, SkyMap
from kspipe.matching.psf import MatchingKernel, matching_kernel

__all__ = ["GaussianSmoothing", "PsfSmoothing", "Smoothing", "choose_smoothing"]

Array = NDArray[np.float64]

# Over a map's field its pixels differ by less than this share of the target's variance.
WIDER_PIXELS: Final = 0.1
# Noise whose Gaussian has less variance than this, in pixel2, feels the pixels.
NARROW_PIX2: Final = 1.0


class Smoothing(Protocol):
    """How a map, its coverage and its noise are smoothed on the map's pixels."""

    @property
    def jacobian(self) -> Array:
        """Sky offset (east, north) [arcsec] per step of the map's pixels."""

    @property
    def reach(self) -> int:
        """Pixels to which a point is spread."""

    @property
    def story(self) -> str:
        """One line for the history."""

    @property
    def facts(self) -> dict[str, object]:
        """Numbers worth showing."""

    def smooth(
        self, array: Array, *, workers: int = 1, as_spline: bool = False, fine: int = 1
    ) -> Array:
        """Smooth values, or coverage; zero beyond the edges."""

    def variance(self, term: NoiseTerm, sigma: Array, *, workers: int = 1) -> Array:
        """Variance of a smoothed noise term, `sigma` zero where blank, before coverage."""

    def after(self, term: NoiseTerm, *, fine: int = 1) -> NoiseTerm:
        """The term with the correlation that it has after smoothing and interpolation."""


def choose_smoothing(
    sky: SkyMap, target_arcsec2: Array, x: float, y: float, *, was_legal: bool = False
) -> Smoothing:
    """Work out what brings a map to the target, at one of its pixels.

    Parameters
    ----------
    sky : SkyMap
    target_arcsec2 : (2, 2) float64 array
    x, y : float
        The pixel.
    was_legal : bool
        Whether the target was found legal elsewhere on the map: pixels that are a little wider
        here do not make it illegal.

    Raises
    ------
    BeamError
        If the target is sharper than the map.
    """
    where = f"maps.{sky.name}"
    jacobian = pixel_jacobian(sky.wcs, x, y)
    if sky.psf is not None:
        kernel = matching_kernel(
            sky.psf, target_arcsec2, jacobian, averages_pixels=sky.averages_pixels
        )
        if kernel.why_not and not was_legal:
            what = f"the target beam is sharper than the map's {sky.psf.origin}: {kernel.why_not}"
            raise BeamError(Fault(where, what))
        return PsfSmoothing(kernel, jacobian, sky.psf.origin)
    beam = sky.beam_arcsec2 + (pixel_covariance(jacobian) if sky.averages_pixels else 0.0)
    rounding = WIDER_PIXELS if was_legal else ROUNDING
    difference = subtract_covariance(target_arcsec2, beam, rounding=rounding)
    if difference is None:
        raise BeamError(Fault(where, "the map's beam is wider than the target beam"))
    return GaussianSmoothing(difference, jacobian, has_pixel=sky.averages_pixels)


@dataclass(frozen=True)
class GaussianSmoothing:
    """A Gaussian kernel, by its exact transfer function.

    Attributes
    ----------
    arcsec2 : (2, 2) float64 array
        Its covariance on (east, north).
    jacobian : (2, 2) float64 array
    has_pixel : bool
        Whether the map's detector pixel was counted in its beam.
    """

    arcsec2: Array
    jacobian: Array
    has_pixel: bool = False

    @cached_property
    def pix2(self) -> Array:
        """Its covariance on the map's pixels."""
        return transform_covariance(self.arcsec2, self.jacobian)

    @property
    def reach(self) -> int:
        """Pixels to which a point is spread."""
        return gaussian_reach(self.pix2)

    @property
    def story(self) -> str:
        """One line for the history."""
        major, minor, pa = beam_axes(self.arcsec2)
        counted = ", detector pixel counted in the beam" if self.has_pixel else ""
        axes = f"{major:.4f} x {minor:.4f} arcsec FWHM, pa {pa:.2f} deg"
        return f"smoothed with a Gaussian of {axes}{counted}"

    @property
    def facts(self) -> dict[str, object]:
        """Nothing: a Gaussian costs nothing."""
        return {}

    def smooth(
        self,
        array: Array,
        *,
        workers: int = 1,
        as_spline: bool = False,
        fine: int = 1,
        derivative: tuple[int, int] = (0, 0),
    ) -> Array:
        """Smooth values, or coverage, or take a derivative of that; zero beyond the edges."""
        return gaussian_smooth(
            array,
            self.pix2,
            margin=0,
            workers=workers,
            as_spline=as_spline,
            fine=fine,
            derivative=derivative,
        ).array

    def variance(self, term: NoiseTerm, sigma: Array, *, workers: int = 1) -> Array:
        """Variance of a smoothed noise term, `sigma` zero where blank, before coverage.

        Noise of correlation C is white noise W under a Gaussian of covariance C, times sigma. A
        kernel K over it is, for each point of W, a Gaussian of covariance
        H = K - K (K + C)^-1 K over sigma, seen from a distance that the square of the remaining
        Gaussian spreads by M = K (K + C)^-1 K / 2. So the variance is the noise gain times
        G_M * (G_H * sigma)^2: exact also where sigma varies within the kernel or ends at a
        blank. For white noise H is zero and M is K/2, the square of the kernel.
        """
        if not np.any(self.arcsec2):
            return np.asarray(sigma**2)
        kernel = self.pix2
        inner = np.zeros((2, 2))
        if np.any(term.correlation_arcsec2):
            correlation = transform_covariance(term.correlation_arcsec2, self.jacobian)
            inner = kernel - kernel @ np.linalg.inv(kernel + correlation) @ kernel
            inner = 0.5 * (inner + inner.T)
        largest = float(np.max(sigma))
        if not largest > 0:
            return np.zeros(sigma.shape)
        # Single precision, in units of the largest: no error is known to a millionth.
        single = (sigma / largest).astype(np.float32)
        seen = gaussian_smooth(single, inner, margin=0, workers=workers).array
        spread = gaussian_smooth(seen**2, (kernel - inner) / 2.0, margin=0, workers=workers)
        return np.multiply(spread.array, largest**2 * self._noise_gain(term), dtype=float)

    def _noise_gain(self, term: NoiseTerm) -> float:
        """Share of the variance that is left where sigma is constant and all is observed."""
        if term.sampled is not None:
            return term.sampled.smoothed(self.pix2)[0]
        if np.any(term.correlation_arcsec2):
            return correlated_noise_gain(term.correlation_arcsec2, self.arcsec2)
        return white_noise_gain(self.pix2)

    def after(self, term: NoiseTerm, *, fine: int = 1) -> NoiseTerm:
        """The term with the correlation that it has after smoothing and interpolation.

        White noise under a kernel narrower than a pixel is no Gaussian: its correlation is
        carried lag by lag.
        """
        correlation = term.correlation_arcsec2 + self.arcsec2
        in_pixels = transform_covariance(correlation, self.jacobian)
        if term.sampled is not None:
            sampled: SampledCorrelation | None = term.sampled.smoothed(self.pix2)[1]
        elif float(np.min(np.linalg.eigvalsh(in_pixels))) < NARROW_PIX2:
            values, per_pixel = interpolated_correlation(in_pixels, fine=fine)
            sampled = SampledCorrelation(values, self.jacobian / per_pixel)
        else:
            sampled = None
        return replace(term, correlation_arcsec2=correlation, sampled=sampled)


@dataclass(frozen=True)
class PsfSmoothing:
    """A kernel made for the map's PSF image, sampled on the map's pixels.

    Attributes
    ----------
    kernel : MatchingKernel
    jacobian : (2, 2) float64 array
    origin : str
        The PSF image.
    """

    kernel: MatchingKernel
    jacobian: Array
    origin: str

    @property
    def reach(self) -> int:
        """Pixels to which a point is spread."""
        return len(self.kernel.values) // 2

    @property
    def story(self) -> str:
        """One line for the history."""
        return f"smoothed with a kernel from {self.origin} to the Gaussian: {self.kernel}"

    @property
    def facts(self) -> dict[str, object]:
        """What the kernel costs."""
        return {
            "psf_residual": self.kernel.residual,
            "psf_negative_weight": self.kernel.negative_weight,
            "psf_noise_gain": self.kernel.noise_gain,
        }

    def smooth(
        self, array: Array, *, workers: int = 1, as_spline: bool = False, fine: int = 1
    ) -> Array:
        """Smooth values, or coverage; zero beyond the edges."""
        values = self.kernel.values
        return kernel_smooth(array, values, workers=workers, as_spline=as_spline, fine=fine).array

    def variance(self, term: NoiseTerm, sigma: Array, *, workers: int = 1) -> Array:
        """Variance of a smoothed noise term, averaged with the square of the kernel."""
        squared = self.kernel.values**2
        gain = kernel_noise(self.kernel.values, self._correlation(term))[0]
        kernel = squared * (gain / float(np.sum(squared)))
        return kernel_smooth(sigma**2, kernel, workers=workers).array

    def after(self, term: NoiseTerm, *, fine: int = 1) -> NoiseTerm:  # noqa: ARG002 - lags suffice
        """The term with the correlation that it has after smoothing, lag by lag.

        The Gaussian that goes with it has the noise gain of the kernel on independent pixels.
        """
        correlation = kernel_noise(self.kernel.values, self._correlation(term))[1]
        like_pix2 = np.eye(2) / (4.0 * np.pi * self.kernel.noise_gain**2)
        like_arcsec2 = self.jacobian @ like_pix2 @ self.jacobian.T
        return replace(
            term,
            correlation_arcsec2=term.correlation_arcsec2 + like_arcsec2,
            sampled=SampledCorrelation(correlation, self.jacobian),
        )

    def _correlation(self, term: NoiseTerm) -> Array:
        """Correlation of a term at whole lags of the map's pixels."""
        if term.sampled is not None:
            reach = term.sampled.values.shape[0] // 2
        else:
            in_pixels = transform_covariance(term.correlation_arcsec2, self.jacobian)
            reach = gaussian_reach(2.0 * in_pixels)
        lag = np.arange(-reach, reach + 1.0)
        dx, dy = np.meshgrid(lag, lag)
        (ex, ey), (nx, ny) = self.jacobian
        return term.correlation_at(ex * dx + ey * dy, nx * dx + ny * dy)

"""From a point-spread function that is no Gaussian to the Gaussian target.

The kernel K that turns the PSF S into the target T is their ratio in Fourier space, kept from
exploding where S holds nothing by a Wiener term: K = T S* / (|S|^2 + 1e-4), so that it stops
where the PSF transmits less than 1 %. No routine that makes such a kernel says when the target
is sharper than the source. A target narrower than the core along any direction is; beyond that
three numbers tell, and each has its limit:

- the *residual*, sum |S * K - T| / sum T: what the Wiener term and the size of the image cost;
- the *negative weight*, the sum of the kernel's negative values: to sharpen is to subtract
  neighbours, and 0.5 is where published kernels between telescopes stop being safe;
- the *noise gain* on independent pixels: smoothing never raises the noise.

By these a Gaussian PSF reaches 1.08 times its own width, the diffraction pattern of a round
aperture 1.35 times, and 1.6 times where a third of the aperture's diameter is obscured.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from kspipe.core.errors import BeamError, Fault
from kspipe.kernels.fourier import gaussian_reach
from kspipe.kernels.geometry import (
    beam_axes,
    beam_covariance,
    subtract_covariance,
    transform_covariance,
)
from kspipe.maps.psf import PsfImage

__all__ = ["MatchingKernel", "matching_kernel", "smallest_psf_fwhm"]

Array = NDArray[np.float64]

# The square of the transmission at which the kernel gives up.
REGULARIZATION: Final = 1e-4
# The promise of 1 % on the width of the final beam is one of 2 % on the peak.
MOST_RESIDUAL: Final = 0.02
# Aniano et al. 2011, PASP 123, 1218, call kernels to Gaussians moderate there (from memory).
MOST_NEGATIVE: Final = 0.5
MOST_NOISE_GAIN: Final = 1.0
# Widths are told, and found, in steps of this.
STEP_ARCSEC: Final = 0.01
# A PSF that cannot be brought to this many times its core is no PSF.
WIDEST: Final = 20.0


@dataclass(frozen=True)
class MatchingKernel:
    """A kernel on a map's pixels that brings a PSF to a Gaussian, and what it costs.

    Attributes
    ----------
    values : (2 m + 1, 2 m + 1) float64 array
        Sum 1.
    residual : float
        Sum of the absolute difference between PSF * kernel and the target, over the target's sum.
    negative_weight : float
        Sum of the kernel's negative values, sign reversed.
    noise_gain : float
        What it leaves of the standard deviation of independent pixels.
    holds_core : bool
        Whether the target is as wide as the core of the PSF in all directions.
    """

    values: Array
    residual: float
    negative_weight: float
    noise_gain: float
    holds_core: bool

    @property
    def why_not(self) -> str:
        """What forbids the kernel; empty where nothing does."""
        limits = (
            ("the kernel's residual", self.residual, MOST_RESIDUAL),
            ("its negative weight", self.negative_weight, MOST_NEGATIVE),
            ("its noise gain", self.noise_gain, MOST_NOISE_GAIN),
        )
        reasons = [] if self.holds_core else ["the core is wider"]
        reasons += [
            f"{what} {value:.3g} (at most {most:g})" for what, value, most in limits if value > most
        ]
        return ", ".join(reasons)

    def __str__(self) -> str:
        return (
            f"residual {self.residual:.2g} of the flux, negative weight "
            f"{self.negative_weight:.2g}, noise of independent pixels times {self.noise_gain:.3g}"
        )


def matching_kernel(
    psf: PsfImage, target_arcsec2: Array, jacobian_arcsec: Array, *, averages_pixels: bool
) -> MatchingKernel:
    """Make the kernel from a PSF to a Gaussian target on a map's pixels.

    Parameters
    ----------
    psf : PsfImage
    target_arcsec2 : (2, 2) float64 array
        Covariance of the target (east, north).
    jacobian_arcsec : (2, 2) float64 array
        Sky offset (east, north) per step of the map's pixels.
    averages_pixels : bool
        Whether the map averages over its pixels; a PSF on finer pixels is averaged likewise.

    Returns
    -------
    MatchingKernel
        Also where the target is sharper than the PSF: see `MatchingKernel.why_not`.
    """
    # Its imports cost a third of a second, and few maps need it.
    from photutils.psf_matching import make_wiener_kernel  # noqa: PLC0415

    target_pix2 = transform_covariance(target_arcsec2, jacobian_arcsec)
    finest = float(np.min(np.linalg.norm(jacobian_arcsec, axis=0)))
    size = _odd_size(gaussian_reach(target_pix2) + math.ceil(psf.reach_arcsec / finest))
    source = _on_pixels(_psf_transfer(psf, jacobian_arcsec, size, averages_pixels))
    target = _on_pixels(_gaussian_transfer(target_pix2, size))
    kernel = make_wiener_kernel(source, target, regularization=REGULARIZATION)
    return MatchingKernel(
        values=kernel,
        residual=_residual(source, kernel, target),
        negative_weight=-float(np.sum(kernel[kernel < 0])),
        noise_gain=math.sqrt(float(np.sum(kernel**2))),
        holds_core=subtract_covariance(target_arcsec2, psf.core_arcsec2) is not None,
    )


def smallest_psf_fwhm(psf: PsfImage, jacobian_arcsec: Array, *, averages_pixels: bool) -> float:
    """Narrowest round Gaussian that a PSF can be brought to [arcsec], by bisection.

    Raises
    ------
    BeamError
        If there is none up to 20 times the width of its core.
    """

    def is_legal(steps: int) -> bool:
        width = steps * STEP_ARCSEC
        target = beam_covariance(width, width, 0.0)
        kernel = matching_kernel(psf, target, jacobian_arcsec, averages_pixels=averages_pixels)
        return not kernel.why_not

    core = math.ceil(beam_axes(psf.core_arcsec2)[1] / STEP_ARCSEC)
    low, high = core // 2, 2 * core
    while not is_legal(high):
        low, high = high, 2 * high
        if high > WIDEST * core:
            raise BeamError(
                Fault(
                    psf.origin,
                    "no round beam can be reached: what lies beyond the core is too strong",
                    "check the PSF image, or give a Gaussian beam instead",
                )
            )
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if is_legal(middle) else (middle, high)
    return high * STEP_ARCSEC


def _odd_size(reach: int) -> int:
    """Side of a square with a middle pixel that holds the reach and transforms fast."""
    size = 2 * reach + 1
    while scipy.fft.next_fast_len(size) != size:
        size += 2
    return size


def _psf_transfer(
    psf: PsfImage, jacobian_arcsec: Array, size: int, averages_pixels: bool
) -> NDArray[np.complex128]:
    """Transfer function of the PSF at the frequencies of a square of the map's pixels."""
    k = scipy.fft.fftfreq(size)
    kx, ky = np.meshgrid(k, k)
    (axx, axy), (ayx, ayy) = np.linalg.inv(jacobian_arcsec) @ psf.jacobian_arcsec
    transfer = psf.transfer(axx * kx + ayx * ky, axy * kx + ayy * ky)
    if averages_pixels and not psf.has_pixel:
        transfer *= np.sinc(kx) * np.sinc(ky)
    return transfer


def _gaussian_transfer(covariance_pix2: Array, size: int) -> Array:
    k = scipy.fft.fftfreq(size)
    kx, ky = np.meshgrid(k, k)
    (cxx, cxy), (_, cyy) = covariance_pix2
    return np.asarray(np.exp(-2.0 * math.pi**2 * (cxx * kx**2 + 2.0 * cxy * kx * ky + cyy * ky**2)))


def _on_pixels(transfer: NDArray[np.complex128] | Array) -> Array:
    """What a point in the middle of a pixel looks like: nothing beyond Nyquist folds back."""
    return np.asarray(scipy.fft.fftshift(scipy.fft.ifft2(transfer).real))


def _residual(source: Array, kernel: Array, target: Array) -> float:
    """What is left between source * kernel and target, nothing wrapped around."""
    size = source.shape[0]
    shape = (scipy.fft.next_fast_len(2 * size - 1, real=True),) * 2
    product = scipy.fft.rfft2(source / source.sum(), s=shape) * scipy.fft.rfft2(kernel, s=shape)
    got = scipy.fft.irfft2(product, s=shape)[: 2 * size - 1, : 2 * size - 1]
    first = size // 2
    got[first : first + size, first : first + size] -= target / target.sum()
    return float(np.sum(np.abs(got)))

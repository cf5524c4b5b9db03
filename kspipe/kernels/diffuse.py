"""The part of a map that is smoother than a length."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter

from kspipe.core.constants import FWHM_PER_SIGMA

__all__ = ["smooth_part"]

Array = NDArray[np.float64]

# A pixel this far above the smooth part is a source in it.
CLIP_SIGMA: Final = 3.0
# The smooth part is settled when it changes by less than this share of the noise.
SETTLED: Final = 0.01
MOST_STEPS: Final = 100


def smooth_part(value: Array, error: Array, fwhm_pix: float) -> Array:
    """Smooth a map without the sources that stand out of it.

    Parameters
    ----------
    value, error : (ny, nx) float64 array
        NaN where not observed.
    fwhm_pix : float
        Of the Gaussian.

    Returns
    -------
    (ny, nx) float64 array
        NaN where `value` is.

    Notes
    -----
    The map is smoothed; pixels more than 3 sigma above the result are put down to it; and so on
    until it settles. A smooth sky is all smooth part but for what the clip takes off noise:
    0.0044 sigma, the density of a normal deviate at 3.
    """
    observed = np.isfinite(value)
    sigma_pix = fwhm_pix / FWHM_PER_SIGMA
    weight = gaussian_filter(observed.astype(float), sigma_pix, mode="constant")
    weight = np.where(observed, weight, 1.0)
    limit = CLIP_SIGMA * np.where(np.isfinite(error), error, 0.0)
    rest = np.where(observed, value, 0.0)
    smooth = gaussian_filter(rest, sigma_pix, mode="constant") / weight
    for _ in range(MOST_STEPS):
        rest = np.where(observed & (value > smooth + limit), smooth, np.where(observed, value, 0.0))
        new = gaussian_filter(rest, sigma_pix, mode="constant") / weight
        change = np.max(np.abs(new - smooth)[observed], initial=0.0)
        smooth = new
        if change <= SETTLED * np.median(limit[observed]) / CLIP_SIGMA:
            break
    return np.where(observed, smooth, np.nan)

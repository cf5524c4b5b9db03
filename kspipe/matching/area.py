"""Under-sampled maps: each grid pixel is the area-weighted mean of the map's pixels on it."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from kspipe.maps.skymap import SkyMap
from kspipe.matching.grid import Grid
from kspipe.matching.smoothing import Smoothing

__all__ = ["area_weighted"]

Array = NDArray[np.float64]


def area_weighted(
    sky: SkyMap, smoothing: Smoothing, grid: Grid
) -> tuple[Array, Array, tuple[Array, ...]]:
    """Smooth a map and average it over the pixels of the grid, by exact overlap on the sphere.

    No interpolation can recover what a coarse map did not sample. Averages over areas conserve
    flux instead, and the grid's pixels come on top of the beam.

    Parameters
    ----------
    sky : SkyMap
    smoothing : Smoothing
    grid : Grid

    Returns
    -------
    value_times_weight, weight : (ny, nx) float64 array
    variances : tuple of (ny, nx) float64 array
        Of value times weight. A mean over n map pixels has 1/n of their variance; a grid pixel
        inside one map pixel has all of it.
    """
    # Its imports cost a second, and few maps need it.
    from reproject import reproject_exact  # noqa: PLC0415

    observed = np.isfinite(sky.value)

    def onto_grid(array: Array) -> Array:
        mean, share = reproject_exact((array, sky.wcs), grid.wcs, shape_out=grid.shape)
        # Where the map ends its share of the pixel is its weight.
        return np.asarray(np.nan_to_num(mean) * np.nan_to_num(share))

    map_pixel_arcsec2 = abs(float(np.linalg.det(smoothing.jacobian)))
    mean_of = min(1.0, map_pixel_arcsec2 / grid.pixel_arcsec**2)
    variances = tuple(
        onto_grid(smoothing.variance(term, np.where(observed, term.sigma, 0.0))) * mean_of
        for term in sky.noise
    )
    weight = onto_grid(smoothing.smooth(observed.astype(float)))
    value = onto_grid(smoothing.smooth(np.where(observed, sky.value, 0.0)))
    return value, weight, variances

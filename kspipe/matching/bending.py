"""A Gaussian on the sky, as the pixels of a projection see it.

Over degrees a pixel changes its size and shape on the sky, and a round Gaussian is neither round
nor a Gaussian on the pixels. Its mean, covariance and skewness there are found by projecting a
few points of it. One kernel then serves a whole tile, and what the kernel of a pixel differs from
it by acts as derivatives of the smoothed map: with p(d) the kernel on pixel offsets d, of mean b,
covariance C + D and third cumulant k,

    sum p(d) I(x + d) = exp(b.grad) [1 + D:grad grad / 2 + k:grad grad grad / 6] (G_C * I)(x)

up to the squares of D and k.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from astropy.coordinates import SkyCoord
from astropy.wcs.utils import skycoord_to_pixel
from numpy.typing import NDArray
from scipy.interpolate import RectBivariateSpline

from kspipe.kernels.geometry import offset_positions, pixel_covariance, transform_covariance
from kspipe.kernels.tiles import TILE
from kspipe.maps.header import pixel_jacobian, sky_of_pixels
from kspipe.maps.skymap import SkyMap
from kspipe.matching.smoothing import GaussianSmoothing, Smoothing, choose_smoothing

__all__ = ["Bend", "Bending", "bend_of", "seen_on_pixels"]

Array = NDArray[np.float64]

# A kernel may be off by this share of the target's variance before corrections are worth their
# time: a point source's peak is then off by as much.
STEADY_VARIANCE: Final = 5e-4
# The same for skewness in units of the target's sigma cubed: the flank of a source at 3 sigma is
# off by three times as much.
STEADY_SKEWNESS: Final = 2e-4
# A tile whose kernels differ by more is cut smaller: what is left out goes with the square.
MOST_PER_TILE: Final = 0.05
LEAST_TILE: Final = 128
# Nodes along each side of a tile; moments hardly change over it.
NODES: Final = 9
# Gauss-Hermite points along each axis: exact for projections up to the ninth power.
_Z, _WEIGHTS = np.polynomial.hermite_e.hermegauss(5)
_WEIGHTS = _WEIGHTS / _WEIGHTS.sum()


@dataclass(frozen=True)
class Moments:
    """Of Gaussians on the sky about n pixel positions, in pixels.

    Attributes
    ----------
    mean : (2, n) float64 array
        Offset of the mean from the position.
    covariance : (3, n) float64 array
        xx, xy, yy.
    skewness : (4, n) float64 array
        Third cumulants xxx, xxy, xyy, yyy.
    """

    mean: Array
    covariance: Array
    skewness: Array


@dataclass(frozen=True)
class Bend:
    """How the kernels of single pixels differ from the one of their tile.

    Attributes
    ----------
    shift_pix : (2, n) float64 array
        Where each pixel's kernel has its mean, from the pixel.
    terms : dict of (int, int) to (n,) float64 array
        Factor of each derivative, by its orders in x and y.
    gain : (n,) float64 array
        Variance of smoothed white noise over that under the tile's kernel.
    """

    shift_pix: Array
    terms: dict[tuple[int, int], Array]
    gain: Array


@dataclass(frozen=True)
class Bending:
    """How the kernels of a map change over what is wanted of it.

    Attributes
    ----------
    sky : SkyMap
    target_arcsec2 : (2, 2) float64 array
    smoothing : Smoothing
        At the galaxy's centre.
    change : float
        Largest difference of a kernel from that one, in units of the target's variance or of its
        sigma cubed; zero where one kernel serves all of the map.
    tile : int
        Side of the tiles that the map is cut into.
    """

    sky: SkyMap
    target_arcsec2: Array
    smoothing: Smoothing
    change: float
    tile: int

    def at(self, core: tuple[slice, slice], x: Array, y: Array) -> tuple[Smoothing, Bend | None]:
        """Kernel of one tile, and what the kernels at positions on it differ from it by."""
        if not self.change:
            return self.smoothing, None
        rows, columns = core
        middle = ((c.start + c.stop - 1) / 2 for c in (columns, rows))
        kernel = choose_smoothing(self.sky, self.target_arcsec2, *middle, was_legal=True)
        if not isinstance(kernel, GaussianSmoothing) or not np.isfinite(kernel.pix2).all():
            return self.smoothing, None
        nodes = _nodes(core)
        moments = seen_on_pixels(self.sky, self.target_arcsec2, *nodes)
        if not _change(moments, kernel.pix2, _variance_pix2(self.target_arcsec2, kernel)):
            return kernel, None
        return kernel, _bend(moments, kernel.pix2, nodes, x, y)


def bend_of(
    sky: SkyMap, target_arcsec2: Array, smoothing: Smoothing, wanted: tuple[slice, slice]
) -> Bending:
    """Find out whether one kernel serves all that is wanted of a map.

    Parameters
    ----------
    sky : SkyMap
    target_arcsec2 : (2, 2) float64 array
    smoothing : Smoothing
        At the galaxy's centre.
    wanted : (slice, slice)
        Rows and columns of the map.

    Returns
    -------
    Bending
        Kernels made for a PSF image are one for the whole map, and so is that of a projection
        that ends or has an edge within what is wanted.
    """
    change = 0.0
    if isinstance(smoothing, GaussianSmoothing) and np.any(smoothing.arcsec2):
        nodes = _nodes(wanted)
        moments = seen_on_pixels(sky, target_arcsec2, *nodes)
        variance = _variance_pix2(target_arcsec2, smoothing)
        if np.isfinite(moments.skewness).all() and _is_smooth(moments, nodes, variance):
            change = _change(moments, smoothing.pix2, variance)
    tile = TILE
    if change > MOST_PER_TILE:
        widest = max(part.stop - part.start for part in wanted)
        tile = max(LEAST_TILE, min(TILE, int(widest * MOST_PER_TILE / change)))
    return Bending(sky, target_arcsec2, smoothing, change, tile)


def _nodes(part: tuple[slice, slice]) -> tuple[Array, Array]:
    """Positions (x, y) of a mesh of nodes over rows and columns, x running fastest."""
    y, x = (np.linspace(p.start - 0.5, p.stop - 0.5, NODES) for p in part)
    mesh_x, mesh_y = np.meshgrid(x, y)
    return mesh_x.ravel(), mesh_y.ravel()


def _change(moments: Moments, kernel_pix2: Array, variance: float) -> float:
    """How far kernels are from one Gaussian; zero where the target beam does not feel it."""
    wider = np.max(np.abs(moments.covariance - _upper(kernel_pix2))) / variance
    skew = np.max(np.abs(moments.skewness)) / variance**1.5
    if wider > STEADY_VARIANCE or skew > STEADY_SKEWNESS:
        return float(max(wider, skew))
    return 0.0


def _variance_pix2(target_arcsec2: Array, smoothing: Smoothing) -> float:
    """Mean variance of the target beam along an axis, on the map's pixels."""
    return 0.5 * float(np.trace(transform_covariance(target_arcsec2, smoothing.jacobian)))


def _is_smooth(moments: Moments, nodes: tuple[Array, Array], variance: float) -> bool:
    """Whether every second node tells the others: not so across the edge of a projection's face."""
    x, y = nodes[0][:NODES], nodes[1][::NODES]
    off = 0.0
    for part in moments.covariance:
        every = part.reshape(NODES, NODES)
        spline = RectBivariateSpline(y[::2], x[::2], every[::2, ::2])
        off = max(off, float(np.max(np.abs(spline(y, x) - every))))
    return off < STEADY_VARIANCE * variance


def _upper(covariance: Array) -> Array:
    """Its three different elements, as a column."""
    return np.asarray(covariance[np.triu_indices(2)][:, None])


def _bend(
    moments: Moments, kernel_pix2: Array, nodes: tuple[Array, Array], x: Array, y: Array
) -> Bend:
    """Spline moments from the nodes to positions, and turn them into factors of derivatives."""
    node_x, node_y = nodes[0][:NODES], nodes[1][::NODES]

    def everywhere(at_nodes: Array) -> Array:
        spline = RectBivariateSpline(node_y, node_x, at_nodes.reshape(NODES, NODES))
        return np.asarray(spline.ev(y, x))

    xx, xy, yy = (everywhere(part) for part in moments.covariance - _upper(kernel_pix2))
    xxx, xxy, xyy, yyy = (everywhere(part) for part in moments.skewness)
    (cxx, cxy), (_, cyy) = kernel_pix2
    here = (cxx + xx) * (cyy + yy) - (cxy + xy) ** 2
    # A kernel narrower than a pixel leaves white noise nearly as it is, however it bends.
    is_wide = float(np.min(np.linalg.eigvalsh(kernel_pix2))) > 1.0
    return Bend(
        shift_pix=np.array([everywhere(part) for part in moments.mean]),
        terms={
            (2, 0): xx / 2,
            (1, 1): xy,
            (0, 2): yy / 2,
            (3, 0): xxx / 6,
            (2, 1): xxy / 2,
            (1, 2): xyy / 2,
            (0, 3): yyy / 6,
        },
        gain=np.sqrt((cxx * cyy - cxy**2) / here) if is_wide else np.ones(x.size),
    )


def seen_on_pixels(sky: SkyMap, target_arcsec2: Array, x: Array, y: Array) -> Moments:
    """Moments on a map's pixels of the kernels that bring it to the target at some positions.

    Parameters
    ----------
    sky : SkyMap
    target_arcsec2 : (2, 2) float64 array
    x, y : (n,) float64 array
        Positions on the map's pixels.

    Returns
    -------
    Moments
        NaN where a kernel reaches beyond the sky.
    """
    kernels = target_arcsec2 - sky.beam_arcsec2 - np.zeros((x.size, 1, 1))
    if sky.averages_pixels:
        steps = pixel_jacobian(sky.wcs, x, y)
        kernels = kernels - pixel_covariance(steps)
    values, vectors = np.linalg.eigh(kernels)
    roots = vectors * np.sqrt(np.clip(values, 0.0, None))[:, None, :]
    z = np.stack(np.meshgrid(_Z, _Z)).reshape(2, -1)
    weights = np.outer(_WEIGHTS, _WEIGHTS).ravel()
    east, north = np.moveaxis(roots @ z, 1, 0)
    lon, lat = sky_of_pixels(sky.wcs, x, y)
    there = offset_positions(lon[:, None], lat[:, None], east, north)
    point_x, point_y = skycoord_to_pixel(
        SkyCoord(*there, unit="deg"), sky.wcs, origin=0, mode="all"
    )
    # The middle point, not x and y: a projection and its inverse may be approximations.
    middle = slice(weights.size // 2, weights.size // 2 + 1)
    dx, dy = point_x - point_x[:, middle], point_y - point_y[:, middle]
    mean = np.array([dx @ weights, dy @ weights])
    dx, dy = dx - mean[0][:, None], dy - mean[1][:, None]
    return Moments(
        mean,
        np.array([(dx**2) @ weights, (dx * dy) @ weights, (dy**2) @ weights]),
        np.array([(dx**p * dy ** (3 - p)) @ weights for p in (3, 2, 1, 0)]),
    )

"""Axes on the sky, and what every map of a galaxy should carry: beam, scale, size of the disc."""

from __future__ import annotations

import math
from typing import Any, Final

import numpy as np
from matplotlib.figure import Figure
from matplotlib.patches import Ellipse, PathPatch
from matplotlib.path import Path as Outline
from numpy.typing import NDArray

from kspipe.core.constants import FWHM_PER_SIGMA
from kspipe.kernels.geometry import transform_covariance
from kspipe.maps.header import pixel_jacobian
from kspipe.products.read import Products
from kspipe.products.style import HALO, R25_LINE, nice_below

__all__ = ["add_hatching", "add_landmarks", "add_sky_axes", "fitted_inches"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Box = tuple[float, float, float, float]

# A scale bar is at most this fraction of the map's width.
SCALE_BAR: Final = 0.25


def fitted_inches(width: float, height: float, shape: tuple[int, int]) -> tuple[float, float]:
    """Width and height of the largest map of so many rows and columns inside a box [inch]."""
    scale = min(width / shape[1], height / shape[0])
    return scale * shape[1], scale * shape[0]


def add_sky_axes(
    figure: Figure, box: Box, products: Products, *, ra: bool = True, dec: bool = True
) -> Any:
    """Add axes with right ascension and declination, labelled where asked."""
    axes: Any = figure.add_axes(box, projection=products.wcs)
    ny, nx = products.covered.shape
    axes.set(xlim=(-0.5, nx - 0.5), ylim=(-0.5, ny - 0.5))
    for coordinate, is_labelled, name in zip(
        axes.coords, (ra, dec), ("RA (ICRS)", "Dec (ICRS)"), strict=True
    ):
        coordinate.set_ticks(number=4)
        coordinate.tick_params(direction="in", length=3, width=0.6, color="black")
        coordinate.set_ticklabel(size=8, exclude_overlapping=True)
        coordinate.set_ticklabel_visible(is_labelled)
        coordinate.set_axislabel(name if is_labelled else " ", minpad=0.5)
        coordinate.set_auto_axislabel(False)
    return axes


def add_landmarks(axes: Any, products: Products) -> None:
    """Add the beam, a scale bar, and the optical size of the disc where the recipe has it."""
    _add_beam(axes, products)
    _add_scale_bar(axes, products)
    if products.recipe.galaxy.r25 is not None:
        axes.contour(
            products.radius_kpc,
            levels=[products.r25_kpc],
            colors="black",
            linewidths=0.8,
            linestyles=[R25_LINE],
        )


def _jacobian(products: Products, x: float, y: float) -> Array:
    return pixel_jacobian(products.wcs, x, y)


def _add_beam(axes: Any, products: Products) -> None:
    """Half-power ellipse of the beam, lower left, as the sky lies on the page there."""
    ny, nx = products.covered.shape
    jacobian = _jacobian(products, 0.08 * nx, 0.08 * ny)
    in_pixels = transform_covariance(products.beam_arcsec2, jacobian)
    variances, vectors = np.linalg.eigh(in_pixels)
    minor, major = FWHM_PER_SIGMA * np.sqrt(variances)
    x, y = (max(0.08 * n, 0.6 * major) - 0.5 for n in (nx, ny))
    angle = math.degrees(math.atan2(vectors[1, 1], vectors[0, 1]))
    axes.add_patch(
        Ellipse((x, y), major, minor, angle=angle, fc="0.3", ec="white", lw=0.8, zorder=9)
    )


def _add_scale_bar(axes: Any, products: Products) -> None:
    """A round length in kpc, lower right."""
    ny, nx = products.covered.shape
    per_pixel = float(np.linalg.norm(_jacobian(products, nx / 2, ny / 2)[:, 0]))
    kpc_per_pixel = per_pixel * products.recipe.galaxy.pc_per_arcsec / 1e3
    length = nice_below(SCALE_BAR * nx * kpc_per_pixel)
    end, y = 0.95 * nx, 0.06 * ny
    start = end - length / kpc_per_pixel
    axes.plot([start, end], [y, y], color="black", lw=1.4, path_effects=HALO, zorder=9)
    axes.text(
        (start + end) / 2,
        y + 0.02 * ny,
        f"{length:g} kpc",
        ha="center",
        va="bottom",
        fontsize=8,
        path_effects=HALO,
        zorder=9,
    )


def add_hatching(axes: Any, where: Mask) -> None:
    """Cover pixels with hatched grey: one patch made of the runs of each row."""
    edges = np.diff(np.pad(where, ((0, 0), (1, 1))).astype(np.int8), axis=1)
    rows, starts = np.nonzero(edges == 1)
    _, ends = np.nonzero(edges == -1)
    if not rows.size:
        return
    left, right, low = starts - 0.5, ends - 0.5, rows - 0.5
    corners = np.array(
        [[left, low], [right, low], [right, low + 1], [left, low + 1], [left, low]]
    ).transpose(2, 0, 1)
    codes = [Outline.MOVETO, Outline.LINETO, Outline.LINETO, Outline.LINETO, Outline.CLOSEPOLY]
    outline = Outline(corners.reshape(-1, 2), codes * rows.size)
    axes.add_patch(PathPatch(outline, fc="0.93", ec="0.72", hatch="//////", lw=0, zorder=1.5))

"""Beams as covariances, tilted discs, and the sampling lattice.

Covariances are 2x2 arrays on the axes (east, north) in arcsec2, or (x, y) in pixel2.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.core.constants import FWHM_PER_SIGMA

__all__ = [
    "beam_area",
    "beam_axes",
    "beam_covariance",
    "disc_azimuth",
    "disc_radius",
    "hexagonal_lattice",
    "offset_positions",
    "pixel_covariance",
    "position_offsets",
    "subtract_covariance",
    "transform_covariance",
]

Array = NDArray[np.float64]

# A kernel narrower than this fraction of the target's variance is rounding, not a sharper beam.
ROUNDING: Final = 1e-6


def beam_covariance(major_arcsec: float, minor_arcsec: float, pa_deg: float) -> Array:
    """Write a Gaussian beam as a covariance.

    Parameters
    ----------
    major_arcsec, minor_arcsec : float
        Full widths at half maximum.
    pa_deg : float
        Position angle of the major axis, north through east.

    Returns
    -------
    (2, 2) float64 array
        Covariance on the axes (east, north) [arcsec2].
    """
    pa = math.radians(pa_deg)
    major_axis = np.array([math.sin(pa), math.cos(pa)])
    minor_axis = np.array([-math.cos(pa), math.sin(pa)])
    return (
        major_arcsec**2 * np.outer(major_axis, major_axis)
        + minor_arcsec**2 * np.outer(minor_axis, minor_axis)
    ) / FWHM_PER_SIGMA**2


def beam_axes(covariance_arcsec2: Array) -> tuple[float, float, float]:
    """Read major and minor FWHM [arcsec] and position angle [deg, 0 to 180) off a covariance."""
    values, vectors = np.linalg.eigh(covariance_arcsec2)
    minor, major = FWHM_PER_SIGMA * np.sqrt(np.clip(values, 0.0, None))
    if major - minor <= 1e-9 * max(major, 1e-300):
        return float(major), float(minor), 0.0
    east, north = vectors[:, 1]
    return float(major), float(minor), math.degrees(math.atan2(east, north)) % 180.0 % 180.0


def beam_area(covariance: Array) -> float:
    """Solid angle under a Gaussian, 2 pi sqrt(det), in the covariance's own square unit."""
    return float(2.0 * math.pi * math.sqrt(max(float(np.linalg.det(covariance)), 0.0)))


def pixel_covariance(jacobian_arcsec: Array) -> Array:
    """Covariance of the box that a detector pixel averages over.

    Parameters
    ----------
    jacobian_arcsec : (2, 2) float64 array
        Sky offset (east, north) [arcsec] per pixel step (x, y).

    Returns
    -------
    (2, 2) float64 array
        A unit box has variance 1/12 on each axis [arcsec2].
    """
    return jacobian_arcsec @ np.swapaxes(jacobian_arcsec, -1, -2) / 12.0


def transform_covariance(covariance: Array, jacobian: Array) -> Array:
    """Express a covariance given on output axes of `jacobian` on its input axes."""
    inverse = np.linalg.inv(jacobian)
    return np.asarray(inverse @ covariance @ inverse.T)


def subtract_covariance(
    target: Array, source: Array, *, rounding: float = ROUNDING
) -> Array | None:
    """Kernel that turns the source beam into the target beam.

    Parameters
    ----------
    target, source : (2, 2) float64 array
        Beam covariances in one unit.
    rounding : float
        Share of the target's trace by which the source may be wider and still be no wider.

    Returns
    -------
    (2, 2) float64 array or None
        Their difference, with negative eigenvalues that are only rounding set to zero; None where
        the source is wider than the target along any axis.
    """
    difference = np.asarray(target) - np.asarray(source)
    values, vectors = np.linalg.eigh(difference)
    if values[0] < -rounding * float(np.trace(target)):
        return None
    return np.asarray((vectors * np.clip(values, 0.0, None)) @ vectors.T)


def position_offsets(
    lon_deg: Array, lat_deg: Array, lon0_deg: float, lat0_deg: float
) -> tuple[Array, Array]:
    """Offsets east and north from a centre, along great circles.

    The distance from the centre and the position angle are exact at any separation (zenithal
    equidistant projection), so that a galaxy of ten degrees keeps its radii.

    Parameters
    ----------
    lon_deg, lat_deg : float64 array
        Sky positions.
    lon0_deg, lat0_deg : float
        The centre.

    Returns
    -------
    east_arcsec, north_arcsec : float64 array
    """
    dlon = np.radians(np.asarray(lon_deg) - lon0_deg)
    lat, lat0 = np.radians(np.asarray(lat_deg)), math.radians(lat0_deg)
    x = np.cos(lat) * np.sin(dlon)
    y = np.sin(lat) * math.cos(lat0) - np.cos(lat) * math.sin(lat0) * np.cos(dlon)
    z = np.sin(lat) * math.sin(lat0) + np.cos(lat) * math.cos(lat0) * np.cos(dlon)
    sine = np.hypot(x, y)
    separation = np.degrees(np.arctan2(sine, z)) * 3600.0
    with np.errstate(invalid="ignore", divide="ignore"):
        scale = np.where(sine > 0, separation / sine, 0.0)
    return x * scale, y * scale


def offset_positions(
    lon_deg: Array, lat_deg: Array, east_arcsec: Array, north_arcsec: Array
) -> tuple[Array, Array]:
    """Sky positions at offsets east and north along great circles; undoes `position_offsets`.

    Parameters
    ----------
    lon_deg, lat_deg : float64 array
        Where the offsets start.
    east_arcsec, north_arcsec : float64 array
        Shapes that broadcast with the positions.

    Returns
    -------
    lon_deg, lat_deg : float64 array
    """
    lat0 = np.radians(lat_deg)
    separation = np.radians(np.hypot(east_arcsec, north_arcsec) / 3600.0)
    angle = np.arctan2(east_arcsec, north_arcsec)
    sine = np.sin(separation)
    up = np.cos(separation) * np.cos(lat0) - sine * np.sin(lat0) * np.cos(angle)
    lat = np.arcsin(np.cos(separation) * np.sin(lat0) + sine * np.cos(lat0) * np.cos(angle))
    return lon_deg + np.degrees(np.arctan2(sine * np.sin(angle), up)), np.degrees(lat)


def disc_radius(
    east_arcsec: Array, north_arcsec: Array, *, inclination_deg: float, pa_deg: float
) -> Array:
    """Radius in the plane of a thin tilted disc, in the unit of the offsets.

    Parameters
    ----------
    east_arcsec, north_arcsec : float64 array
        Offsets from the galaxy's centre.
    inclination_deg, pa_deg : float
        0 is face-on; position angle of the major axis, north through east.

    Returns
    -------
    float64 array
        Deprojected radius [arcsec].
    """
    pa = math.radians(pa_deg)
    major = east_arcsec * math.sin(pa) + north_arcsec * math.cos(pa)
    minor = -east_arcsec * math.cos(pa) + north_arcsec * math.sin(pa)
    return np.hypot(major, minor / math.cos(math.radians(inclination_deg)))


def disc_azimuth(
    east_arcsec: Array, north_arcsec: Array, *, inclination_deg: float, pa_deg: float
) -> Array:
    """Angle in the plane of a thin tilted disc, from the major axis, 0 to 360 [deg].

    Parameters
    ----------
    east_arcsec, north_arcsec : float64 array
        Offsets from the galaxy's centre.
    inclination_deg, pa_deg : float
        As for `disc_radius`; on the sky of a face-on disc it grows from north towards east.
    """
    pa = math.radians(pa_deg)
    major = east_arcsec * math.sin(pa) + north_arcsec * math.cos(pa)
    minor = east_arcsec * math.cos(pa) - north_arcsec * math.sin(pa)
    angle = np.arctan2(minor / math.cos(math.radians(inclination_deg)), major)
    return np.asarray(np.degrees(angle) % 360.0)


def hexagonal_lattice(
    shape: tuple[int, int], centre: tuple[float, float], spacing_pix: float
) -> NDArray[np.bool_]:
    """Mark the pixels of a hexagonal lattice, none nearer to another than the spacing.

    The lattice is laid on whole pixels, so that rounding never brings two samples together.

    Parameters
    ----------
    shape : (int, int)
        Rows and columns of the grid.
    centre : (float, float)
        Pixel (x, y) through which the lattice goes, rounded.
    spacing_pix : float
        Least distance between two samples [pixel].

    Returns
    -------
    (ny, nx) bool array
    """
    # The last bit of a product such as 1.5 x 13.4 / 2.01 must not widen the lattice by a pixel.
    spacing = round(spacing_pix, 9)
    half = math.ceil(math.ceil(spacing) / 2)
    next_row = math.sqrt(max(spacing**2 - half**2, 0.0))
    # Two rows on, samples stand above each other again.
    rows_apart = max(1, math.ceil(max(next_row, spacing / 2)))
    y, x = np.indices(shape)
    dy, dx = y - round(centre[1]), x - round(centre[0])
    row, on_row = np.divmod(dy, rows_apart)
    shift = half * (row % 2)
    return np.asarray((on_row == 0) & ((dx - shift) % (2 * half) == 0))
